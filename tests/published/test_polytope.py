"""The exclusion polytope against published inequalities and counts.

Fermions: Phys. Rev. Lett. 127, 023001 (2021) and Ann. Henri Poincare 24, 2241 (2023),
arXiv:2105.06459 (the table of counts); bosons: arXiv:2204.12715; fixed numbers of up and
down: Quantum 9, 1921 (2025).  The counts were recomputed twice independently and agree
with what is commonly quoted to r = 5; those beyond were not compared with print.
"""

from __future__ import annotations

from itertools import combinations
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from numpy.testing import assert_allclose

import fockhull as fh
from reference import published_inequalities as published

Array = npt.NDArray[Any]

# strictly decreasing weights in the stable range, r = 1, 2, ..., 9
FERMION_VERTICES = (1, 1, 2, 4, 10, 28, 90, 312, 1160)
FERMION_INEQUALITIES = (1, 2, 3, 5, 8, 13, 23, 42, 88)  # n_d >= 0 not counted
BOSON_VERTICES = (1, 1, 2, 4, 8, 17, 37, 82, 184)
BOSON_INEQUALITIES = (1, 2, 3, 5, 8, 13, 22, 36, 59)  # n_d >= 0 counted

LEVELS = range(1, 10)


def decreasing(r: int) -> Array:
    """Strictly decreasing weights without special relations."""
    weights = np.arange(r, 0, -1.0) ** 1.3
    return weights / weights.sum()


def fermions(r: int, modes: int = 0, particles: int = 0) -> fh.ExclusionPolytope:
    n = particles or max(r - 1, 2)
    return fh.ExclusionPolytope(fh.Fermions(modes or 2 * n, n), decreasing(r))


def bosons(r: int, modes: int = 0, particles: int = 0) -> fh.ExclusionPolytope:
    n = particles or max(r - 1, 2)
    return fh.ExclusionPolytope(fh.Bosons(modes or max(r, 3), n), decreasing(r))


def exclusive(polytope: fh.ExclusionPolytope) -> int:
    return sum(not one.is_positivity for one in polytope.inequalities())


@pytest.mark.parametrize("r", LEVELS)
def test_counts(r: int) -> None:
    """At the border of the stable range and far inside it."""
    for polytope in (fermions(r), fermions(r, modes=60, particles=25)):
        assert len(polytope.generating_vertices()) == FERMION_VERTICES[r - 1]
        assert polytope.line_ups().shape == (FERMION_VERTICES[r - 1], r, polytope.shape[0])
        assert exclusive(polytope) == FERMION_INEQUALITIES[r - 1]
        assert len(polytope.inequalities()) == FERMION_INEQUALITIES[r - 1] + 1
    for polytope in (bosons(r), bosons(r, modes=40, particles=30)):
        assert len(polytope.generating_vertices()) == BOSON_VERTICES[r - 1]
        assert len(polytope.inequalities()) == BOSON_INEQUALITIES[r - 1]


@pytest.mark.parametrize("r", LEVELS)
def test_each_level_adds_to_those_before(r: int) -> None:
    """The hierarchy: what holds for fewer weights holds for more, with the same normals."""
    for kind, counts in ((fermions, FERMION_INEQUALITIES), (bosons, BOSON_INEQUALITIES)):
        polytope = kind(r, modes=2 * max(r, 3), particles=max(r, 3))
        steps = [len(polytope.new_at(level)) for level in range(1, r + 1)]
        positivity = sum(one.is_positivity for one in polytope.inequalities())
        firsts = np.diff((0, *counts[:r]))
        firsts[0] += positivity if kind is fermions else 0
        assert steps == firsts.tolist()
        assert polytope.new_at(r + 1) == ()
        if r > 1:
            fewer = kind(r - 1, modes=2 * max(r, 3), particles=max(r, 3))
            kept = [one for one in polytope.inequalities() if one.first_level < r]
            normals = {one.coefficients.tobytes() for one in kept}
            assert normals == {one.coefficients.tobytes() for one in fewer.inequalities()}


def test_one_weight_is_paulis_principle() -> None:
    found = fh.ExclusionPolytope(fh.Fermions(7, 3), [1.0]).inequalities()
    assert [str(one) for one in found] == ["n7 >= 0", "n1 <= 1"]


W = np.array([0.4, 0.3, 0.2, 0.1])


def as_rows(polytope: fh.ExclusionPolytope) -> list[tuple[Array, float]]:
    return [(np.asarray(one.coefficients, float), one.bound) for one in polytope.inequalities()]


def same_rows(found: list[Any], expected: list[Any]) -> None:
    assert len(found) == len(expected)
    for row, bound in expected:
        matches = [b for c, b in found if np.array_equal(c, row)]
        assert len(matches) == 1, row
        assert_allclose(matches[0], bound, rtol=0.0, atol=1e-12)


@pytest.mark.parametrize("r", [1, 2, 3, 4])
@pytest.mark.parametrize(("modes", "particles"), [(6, 3), (9, 4), (50, 20)])
def test_fermion_inequalities(r: int, modes: int, particles: int) -> None:
    weights = W[:r] / W[:r].sum()
    expected = published.fermion_inequalities(modes, particles, weights)
    lowest = (np.eye(modes)[-1] * -1.0, 0.0)
    found = as_rows(fh.ExclusionPolytope(fh.Fermions(modes, particles), weights))
    same_rows(found, [*expected, lowest])


@pytest.mark.parametrize("r", [1, 2, 3, 4])
@pytest.mark.parametrize(("modes", "particles"), [(4, 3), (6, 5), (50, 20)])
def test_boson_inequalities(r: int, modes: int, particles: int) -> None:
    weights = W[:r] / W[:r].sum()
    expected = published.boson_inequalities(modes, particles, weights)
    same_rows(as_rows(fh.ExclusionPolytope(fh.Bosons(modes, particles), weights)), expected)


@pytest.mark.parametrize("r", [2, 3])
@pytest.mark.parametrize(("orbitals", "particles"), [(4, (2, 2)), (6, (3, 2)), (20, (9, 8))])
def test_spin_half_inequalities(r: int, orbitals: int, particles: tuple[int, int]) -> None:
    weights = W[:r] / W[:r].sum()
    sector = fh.SpinHalfFermions(orbitals, particles)
    expected = published.spin_half_inequalities(orbitals, particles, weights)
    same_rows(as_rows(fh.ExclusionPolytope(sector, weights, "spin-resolved")), expected)


@pytest.mark.parametrize(
    ("orbitals", "particles", "counts"),
    [(4, (2, 2), (1, 2, 6, 18)), (6, (3, 3), (1, 2, 6, 22))],
)
def test_spin_half_line_ups(
    orbitals: int, particles: tuple[int, int], counts: tuple[int, ...]
) -> None:
    sector = fh.SpinHalfFermions(orbitals, particles)
    for r, count in enumerate(counts, start=1):
        polytope = fh.ExclusionPolytope(sector, decreasing(r), "spin-resolved")
        assert len(polytope.line_ups()) == count


def test_line_ups_of_three_weights() -> None:
    """Moving the highest particle, then either it again or the one below it."""
    line_ups = fermions(3, modes=6, particles=3).line_ups()
    found = {tuple(tuple(np.flatnonzero(c)) for c in line_up) for line_up in line_ups}
    first, second = (0, 1, 2), (0, 1, 3)
    assert found == {(first, second, (0, 1, 4)), (first, second, (0, 2, 3))}


@pytest.mark.parametrize("r", [2, 3, 4])
def test_plateaus_use_only_the_levels_that_they_distinguish(r: int) -> None:
    """Sigma(w) is the Minkowski sum of (w_k - w_{k+1}) times the k-level sums.

    So normals depend only on which weights are equal, and with one plateau those of
    the levels inside it that no other level has are gone.
    """
    weights = np.full(r, 1.0 / r)
    plateau = fh.ExclusionPolytope(fh.Fermions(8, 4), weights)
    strict = fermions(r, modes=8, particles=4)
    normals = {one.coefficients.tobytes() for one in strict.inequalities()}
    assert {one.coefficients.tobytes() for one in plateau.inequalities()} <= normals
    parts = [fh.ExclusionPolytope(fh.Fermions(8, 4), np.full(k, 1.0 / k)) for k in range(1, r + 1)]
    steps = np.diff([*strict.weights[::-1]], prepend=0.0)[::-1] * np.arange(1, r + 1)
    h = np.random.default_rng(5).standard_normal((20, 8))
    summed = sum(step * part.support(h).value for step, part in zip(steps, parts, strict=True))
    assert_allclose(strict.support(h).value, summed, rtol=0.0, atol=1e-12)


def test_domains_are_told_apart() -> None:
    """Spin-resolved, spin-summed, and all S_z together: three sets, never the same object."""
    sector = fh.SpinHalfFermions(3, (2, 1))
    polytopes = [
        fh.ExclusionPolytope(sector, [0.6, 0.4], d) for d in ("spin-resolved", "spin-summed")
    ]
    together = fh.ExclusionPolytope(fh.Fermions(6, 3), [0.6, 0.4])
    for a, b in combinations([*polytopes, together], 2):
        assert repr(a) != repr(b)
    assert [one.domain in repr(one) for one in [*polytopes, together]] == [True] * 3
    # 2.5 particles up: no ensemble at fixed (2, 1), but one of all S_z together
    n = np.array([[1.0, 0.8, 0.7], [0.4, 0.1, 0.0]])
    assert together.contains(occupations=n.ravel())
    assert not polytopes[0].contains(occupations=n)
