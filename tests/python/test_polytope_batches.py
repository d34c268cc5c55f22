"""Batches of projections by the list of inequalities: a dense QP, the oracle, one by one."""

from __future__ import annotations

import pickle
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
import quadprog
from numpy.testing import assert_allclose, assert_array_equal

import fockhull as fh

Array = npt.NDArray[Any]

COUNT = 60
FALLING = (0.3, 0.25, 0.2, 0.15, 0.1)
TIED = (0.3, 0.3, 0.2, 0.2)
CASES: tuple[tuple[Any, str | None], ...] = (
    (fh.Fermions(8, 4), None),
    (fh.Fermions(5, 1), None),
    (fh.Bosons(5, 3), None),
    (fh.SpinHalfFermions(4, particles=(2, 2)), "spin-resolved"),
    (fh.SpinHalfFermions(4, particles=(3, 1)), "spin-resolved"),
    (fh.SpinHalfFermions(4, particles=(2, 2)), "spin-summed"),
    (fh.SpinHalfFermions(4, particles=(3, 1)), "spin-summed"),
)
POLYTOPES = [
    (sector, weights, domain)
    for sector, domain in CASES
    for weights in ((1.0,), (0.6, 0.4), (0.5, 0.5), TIED, FALLING)
]
# 88 inequalities, of which many are met
STEEP = 0.7 ** np.arange(9)
POLYTOPES.append((fh.Fermions(16, 8), tuple(STEEP / STEEP.sum()), None))


def listing(sector: Any, weights: Any, domain: str | None) -> fh.ExclusionPolytope:
    """A polytope that knows its list."""
    polytope = fh.ExclusionPolytope(sector, weights, domain)  # type: ignore[arg-type]
    polytope.inequalities()
    return polytope


def numbers(polytope: fh.ExclusionPolytope) -> Array:
    """Particles of each component."""
    sector = polytope.sector
    resolved = polytope.domain == "spin-resolved"
    return np.atleast_1d(sector.particles if resolved else sector.total_particles).astype(float)


def scattered(polytope: fh.ExclusionPolytope, rng: np.random.Generator) -> Array:
    """Points in and around the polytope, on faces, with ties and tiny noise; right sums."""
    vertices = polytope.support(rng.standard_normal((COUNT, 2, *polytope.shape))).occupations
    shape = (COUNT,) + (1,) * len(polytope.shape)
    share = rng.choice([0.0, 0.0, 0.5, 0.2], shape)
    points = (1.0 - share) * vertices[:, 0] + share * vertices[:, 1]
    middle = points.mean(axis=-1, keepdims=True)
    points = middle + rng.choice([0.4, 1.0, 1.3], shape) * (points - middle)
    points += rng.choice([0.0, 1e-13, 1e-7, 0.05, 0.5], shape) * rng.standard_normal(points.shape)
    points = np.where(rng.random(shape) < 0.2, np.round(4.0 * points) / 4.0, points)
    wanted = numbers(polytope).reshape(-1, 1) / polytope.sector.modes
    excess = points.reshape(COUNT, len(wanted), -1).mean(axis=-1, keepdims=True) - wanted
    return points - excess.reshape(COUNT, *points.shape[1:-1], 1)


def by_quadratic_program(polytope: fh.ExclusionPolytope, point: Array) -> Array:
    """Goldfarb and Idnani's method on the list, order and sums."""
    rows = point.reshape(-1, polytope.sector.modes)
    order = np.argsort(-rows, axis=1, kind="stable")
    ordered = np.take_along_axis(rows, order, axis=1)
    components, d = rows.shape
    sums = np.kron(np.eye(components), np.ones(d))
    falling = np.kron(np.eye(components), -np.diff(np.eye(d), axis=0))
    listed = polytope.inequalities()
    facets = np.array([-one.coefficients.ravel() for one in listed], dtype=float)
    bounds = np.array([-one.bound for one in listed])
    matrix = np.vstack([sums, falling, facets])
    limits = np.concatenate([numbers(polytope), np.zeros(len(falling)), bounds])
    size = components * d
    found = quadprog.solve_qp(np.eye(size), ordered.ravel(), matrix.T, limits, components)[0]
    result = np.empty_like(rows)
    np.put_along_axis(result, order, found.reshape(rows.shape), axis=1)
    return result.reshape(point.shape)


@pytest.mark.parametrize(("sector", "weights", "domain"), POLYTOPES, ids=str)
def test_a_dense_quadratic_program_agrees(sector: Any, weights: Any, domain: str | None) -> None:
    polytope = listing(sector, weights, domain)
    points = scattered(polytope, np.random.default_rng(1))
    found = polytope.project(occupations=points)
    expected = np.array([by_quadratic_program(polytope, point) for point in points])
    assert_allclose(found.occupations, expected, rtol=0.0, atol=2e-9)
    distances = np.linalg.norm((points - expected).reshape(COUNT, -1), axis=1)
    assert_allclose(found.distance, distances, rtol=0.0, atol=2e-9)
    assert (found.distance - found.distance_lower <= 1e-11).all()
    assert (found.gap >= 0.0).all()
    assert (found.gap <= 4e-14).all()
    assert_array_equal(polytope.contains(occupations=points), found.distance <= 1e-9)


@pytest.mark.parametrize(("sector", "weights", "domain"), POLYTOPES, ids=str)
def test_certificates_hold_for_the_oracle(sector: Any, weights: Any, domain: str | None) -> None:
    """f_w bounds the distance from below; the ensemble has the occupations."""
    polytope = listing(sector, weights, domain)
    points = scattered(polytope, np.random.default_rng(2))
    found = polytope.project(occupations=points)
    h = found.normal
    axes = tuple(range(1, h.ndim))
    support = polytope.support(h).value
    assert_allclose((h * found.occupations).sum(axis=axes), support, rtol=0.0, atol=1e-12)
    for k in range(0, COUNT, 6):
        one = found[k]
        assert one.ensemble.verify(one.occupations)
        proof = one.separator
        assert proof is None or proof.verify()
        assert proof is not None or one.distance < 1e-10
        assert pickle.loads(pickle.dumps(one)).ensemble.verify(one.occupations)


@pytest.mark.parametrize(("sector", "weights", "domain"), POLYTOPES, ids=str)
def test_neighbours_and_order_do_not_matter(sector: Any, weights: Any, domain: str | None) -> None:
    """To the last digit: alone, in another order, with modes permuted."""
    rng = np.random.default_rng(3)
    polytope = listing(sector, weights, domain)
    points = scattered(polytope, rng)
    found = polytope.project(occupations=points)
    order = rng.permutation(COUNT)
    shuffled = polytope.project(occupations=points[order])
    assert_array_equal(shuffled.occupations, found.occupations[order])
    assert_array_equal(shuffled.distance_lower, found.distance_lower[order])
    for k in range(0, COUNT, 7):
        alone = polytope.project(occupations=points[k])
        assert_array_equal(alone.occupations, found.occupations[k])
        assert alone.gap == found.gap[k]
    backwards = polytope.project(occupations=points[..., ::-1])
    assert_array_equal(backwards.distance, found.distance)
    assert_array_equal(backwards.occupations[..., ::-1], found.occupations)


def test_a_long_batch_makes_the_list_and_a_short_one_does_not() -> None:
    """Both methods within their certificates; 28 line-ups for r = 6."""
    weights = np.arange(6.0, 0.0, -1.0) / 21.0
    rng = np.random.default_rng(4)
    long, short = (fh.ExclusionPolytope(fh.Fermions(12, 6), weights) for _ in range(2))
    points = scattered(long, rng)
    by_list = long.project(occupations=points)
    parts = [short.project(occupations=part) for part in np.split(points, COUNT // 20)]
    by_oracle = np.concatenate([part.occupations for part in parts])
    assert_allclose(by_list.occupations, by_oracle, rtol=0.0, atol=1e-9)
    # what was learnt from the batch serves single points
    assert_array_equal(long.project(occupations=points[0]).occupations, by_list.occupations[0])


def test_excess_particles_come_off_uniformly() -> None:
    polytope = listing(fh.Fermions(8, 4), FALLING, None)
    points = scattered(polytope, np.random.default_rng(5))
    right = polytope.project(occupations=points)
    wrong = polytope.project(occupations=points + 0.1)
    assert_allclose(wrong.occupations, right.occupations, rtol=0.0, atol=1e-12)
    assert_allclose(wrong.distance, np.hypot(right.distance, 0.1 * np.sqrt(8.0)), atol=1e-12)


def test_points_far_away() -> None:
    polytope = listing(fh.Fermions(8, 4), FALLING, None)
    points = 1e3 * np.random.default_rng(6).standard_normal((20, 8))
    found = polytope.project(occupations=points)
    assert polytope.contains(occupations=found.occupations).all()
    assert (found.gap <= 1e-9).all()


def test_bad_members_are_refused() -> None:
    polytope = listing(fh.Fermions(6, 3), (0.6, 0.4), None)
    points = np.full((500, 6), 0.5)
    points[300, 2] = np.nan
    with pytest.raises(fh.errors.ArgumentError, match="NaN or infinity"):
        polytope.project(occupations=points)
    points[300, 2] = 1e9
    with pytest.raises(fh.errors.ArgumentError, match="occupation numbers"):
        polytope.contains(occupations=points)


def test_density_matrices_in_a_batch() -> None:
    polytope = listing(fh.Fermions(6, 3), (0.6, 0.4), None)
    rng = np.random.default_rng(7)
    gammas = np.array([np.diag(rng.permutation([1.0, 0.95, 0.9, 0.15, 0.0, 0.0]))] * 3)
    gammas = np.concatenate([gammas, [np.diag([0.5] * 6)]])
    found = polytope.project(gammas)
    assert found.distance[3] == 0.0
    assert polytope.contains(found.density_matrix).all()
    assert_allclose(
        np.linalg.norm(found.density_matrix - gammas, axis=(1, 2)), found.distance, atol=1e-12
    )


def test_an_empty_batch() -> None:
    polytope = listing(fh.Fermions(6, 3), (0.6, 0.4), None)
    found = polytope.project(occupations=np.empty((0, 6)))
    assert found.occupations.shape == (0, 6)
    assert polytope.contains(occupations=np.empty((0, 6))).shape == (0,)


def test_projections_start_from_earlier_ones() -> None:
    weights = np.linspace(2.0, 1.0, 40)
    polytope = fh.ExclusionPolytope(fh.Fermions(12, 6), weights / weights.sum())
    steps = (np.arange(12) - 5.5) / np.array([[0.5], [0.52], [0.6]])
    points = 1.0 / (1.0 + np.exp(steps))
    cold = polytope.project(occupations=points)
    single = polytope.project(occupations=points[0])
    for start in (cold, single, cold[1], pickle.loads(pickle.dumps(cold))):
        warm = polytope.project(occupations=points, start=start)
        assert_allclose(warm.distance, cold.distance, rtol=0.0, atol=1e-10)
        assert_allclose(warm.occupations, cold.occupations, rtol=0.0, atol=1e-6)
        assert warm[2].ensemble.verify(warm[2].occupations)
    again = polytope.project(occupations=points[2], start=cold[1])
    assert_allclose(again.distance, cold[2].distance, rtol=0.0, atol=1e-10)
    other = fh.ExclusionPolytope(fh.Fermions(12, 6), [0.6, 0.4])
    with pytest.raises(fh.errors.ArgumentError, match="this polytope"):
        other.project(occupations=points, start=cold)
    with pytest.raises(fh.errors.ArgumentError, match="projection of 3 points"):
        polytope.project(occupations=points[:2], start=cold)
    with pytest.raises(fh.errors.ArgumentTypeError, match="`start`"):
        polytope.project(occupations=points, start=points)  # type: ignore[arg-type]
