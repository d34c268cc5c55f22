"""Corner cases of the exclusion polytope: wrong sums, noise, weights that nearly tie."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numpy.testing import assert_allclose

import fockhull as fh
from refusals import VALUE, refused

PAULI = np.array([1.0, 1.0, 1.0, 0.0, 0.0, 0.0])
P = fh.ExclusionPolytope(fh.Fermions(6, 3), [1.0])
W = fh.ExclusionPolytope(fh.Fermions(6, 3), [0.5, 0.3, 0.2])
S = fh.SpinHalfFermions(4, (2, 1))


@pytest.mark.parametrize("excess", [-2.0, -1e-3, 1e-6, 0.5, 40.0])
def test_wrong_sums(excess: float) -> None:
    """The nearest point has the right sum; the excess goes uniformly, in quadrature."""
    n = np.array([0.9, 0.8, 0.7, 0.3, 0.2, 0.1])
    assert W.contains(occupations=n)
    wrong = n + excess / 6
    assert not W.contains(occupations=wrong)
    projection = W.project(occupations=wrong)
    assert_allclose(projection.occupations, n, rtol=0.0, atol=1e-9)
    assert_allclose(projection.distance, abs(excess) / np.sqrt(6), rtol=1e-9)
    assert projection.separator is not None
    assert projection.separator.verify()
    assert projection.ensemble.verify(projection.occupations)
    with pytest.raises(fh.errors.ArgumentError, match="sum"):
        W.stretch(occupations=wrong)


def test_wrong_sums_of_each_spin() -> None:
    """The right total is not enough in the spin-resolved domain."""
    n = np.array([[0.9, 0.7, 0.2, 0.1], [0.8, 0.2, 0.1, 0.0]])
    resolved = fh.ExclusionPolytope(S, [1.0], "spin-resolved")
    summed = fh.ExclusionPolytope(S, [1.0], "spin-summed")
    assert not resolved.contains(occupations=n)
    n[0] += 0.1 / 4
    n[1] -= 0.1 / 4
    assert resolved.project(occupations=n).distance > 0.0
    moved = resolved.project(occupations=n).occupations
    assert_allclose(moved.sum(axis=1), [2.0, 1.0], rtol=0.0, atol=1e-12)
    assert summed.contains(occupations=n.sum(axis=0))


@pytest.mark.parametrize("noise", [1e-16, 1e-14, 1e-12, 1e-10])
def test_noise_within_the_tolerance_is_allowed(noise: float) -> None:
    n = PAULI + noise * np.array([1.0, 0.0, 0.0, 0.0, 0.0, -1.0])
    assert P.contains(occupations=n)
    assert P.contains(np.diag(n))
    assert P.distance(occupations=n) <= 2.0 * noise
    projection = P.project(occupations=n)
    assert_allclose(projection.occupations, PAULI, rtol=0.0, atol=1e-9)
    assert projection.ensemble.verify(projection.occupations)
    assert abs(float(P.stretch(occupations=n)) - 1.0) < 10.0 * max(noise, 1e-12)


@pytest.mark.parametrize("noise", [1e-8, 1e-6, 1e-3])
def test_noise_beyond_the_tolerance_is_refused_and_proved(noise: float) -> None:
    n = PAULI + noise * np.array([1.0, 0.0, 0.0, 0.0, 0.0, -1.0])
    assert not P.contains(occupations=n)
    assert P.contains(occupations=n, tol=2.0 * noise)
    projection = P.project(occupations=n)
    assert_allclose(projection.distance, np.sqrt(2.0) * noise, rtol=1e-4)
    assert projection.separator is not None
    assert projection.separator.verify()
    worst = P.tightest(occupations=n)
    assert_allclose(worst.slack, -noise, rtol=1e-6)


NEARLY: dict[str, Any] = {
    "a pair": [0.5, 0.25 + 1e-15, 0.25 - 1e-15],
    "all": np.array([1.0 + 4e-15, 1.0 + 2e-15, 1.0]) / 3.0,
    "in disorder": [0.5, 0.25, 0.25 + 1e-16],
    "two plateaus": [0.3 + 1e-15, 0.3, 0.2 + 1e-15, 0.2],
}


@pytest.mark.parametrize("weights", NEARLY.values(), ids=NEARLY)
@pytest.mark.parametrize("sector", [fh.Fermions(6, 3), fh.Bosons(4, 3)], ids=repr)
def test_weights_that_nearly_tie(weights: Any, sector: Any) -> None:
    """A tie broken by rounding changes nothing: not the list, not a verdict, not a distance."""
    near = fh.ExclusionPolytope(sector, weights)
    exact = np.round(np.asarray(weights), 12)
    tied = fh.ExclusionPolytope(sector, exact / exact.sum())
    rows = [
        {one.coefficients.tobytes(): one.bound for one in polytope.inequalities()}
        for polytope in (near, tied)
    ]
    assert rows[0].keys() == rows[1].keys()
    for normal, bound in rows[0].items():
        assert_allclose(bound, rows[1][normal], rtol=0.0, atol=1e-12)
    assert len(near.generating_vertices()) == len(tied.generating_vertices())
    rng = np.random.default_rng(11)
    d = sector.modes
    points = rng.dirichlet(np.ones(d), size=20) * 3.0
    assert_allclose(
        near.distance(occupations=points), tied.distance(occupations=points), rtol=0.0, atol=1e-9
    )
    for point in points[:5]:
        projection = near.project(occupations=point)
        assert projection.ensemble.verify(projection.occupations)
        if projection.distance > 1e-6:
            assert projection.separator is not None
            assert projection.separator.verify()


@pytest.mark.parametrize("sector", [fh.Fermions(3, 1), fh.Bosons(2, 2), fh.Fermions(4, 0)])
def test_more_weights_than_configurations(sector: Any) -> None:
    r = sector.dimension + 1
    refused(VALUE, "weights", lambda: fh.ExclusionPolytope(sector, np.full(r, 1.0 / r)), str(r - 1))
    full = fh.ExclusionPolytope(sector, np.full(r - 1, 1.0 / (r - 1)))
    centre = np.full(sector.modes, sector.particles / sector.modes)
    assert_allclose(full.generating_vertices(), [centre], rtol=0.0, atol=1e-12)


def test_inequalities_without_a_normal() -> None:
    """In one mode the particle number says everything; rounding is no distance."""
    for only in fh.ExclusionPolytope(fh.Bosons(1, 3), [1.0]).inequalities():
        assert abs(only.distance([3.0 + 1e-15])) < 1e-14


def test_levels_beyond_the_list() -> None:
    """No inequality appears later than the last weight."""
    assert W.new_at(4) == ()
    assert {one.first_level for one in W.inequalities()} == {1, 2, 3}
    assert sum((W.new_at(r) for r in (1, 2, 3)), ()) == W.inequalities()


def test_many_weights_give_a_certified_distance() -> None:
    """20,000 weights and a smooth point: certified, if not to rounding level."""
    modes, r = 60, 20_000
    weights = np.exp(-2.0 * np.arange(r) / r)
    polytope = fh.ExclusionPolytope(fh.Fermions(modes, 30), weights / weights.sum())
    n = 1.0 / (1.0 + np.exp((np.arange(modes) - 29.5) / 0.4))
    projection = polytope.project(occupations=n)
    assert 0.0 <= projection.distance - projection.distance_lower <= 1e-9
    assert projection.gap <= 2.5e-11
    assert projection.distance > 1e-3
    assert_allclose(projection.occupations.sum(), 30.0, rtol=0.0, atol=1e-9)
