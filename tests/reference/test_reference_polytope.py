"""Self-tests of the brute-force polytope against published counts and inequalities."""

from __future__ import annotations

import numpy as np
import pytest
import quadprog
from numpy.testing import assert_allclose

from reference import published_inequalities as published
from reference.facets import canonical, facets
from reference.fock import ReferenceSector, bosons, fermions, spin_half
from reference.polytope import ReferencePolytope, configuration_points, line_ups
from reference.random_problems import random_weights

Array = published.Array
SMALL = [
    (fermions(6, 3), None),
    (fermions(5, 2), None),
    (bosons(4, 3), None),
    (spin_half(4, (2, 2)), "spin-resolved"),
    (spin_half(4, (2, 1)), "spin-summed"),
]


def inequalities_of(sector: ReferenceSector, weights: Array) -> list[published.Inequality]:
    if sector.statistics == "spin-1/2":
        up, down = sector.particles
        return published.spin_half_inequalities(sector.modes, (up, down), weights)
    listed = {
        "fermions": published.fermion_inequalities,
        "bosons": published.boson_inequalities,
    }[sector.statistics](sector.modes, sector.particles[0], weights)
    lowest = np.zeros(sector.modes)
    lowest[-1] = -1.0
    return [*listed, (lowest, 0.0)]


def scattered(polytope: ReferencePolytope, rng: np.random.Generator) -> Array:
    """Permuted occupations on both sides of the boundary, trace kept in each block."""
    energies = rng.standard_normal(polytope.support(polytope.points[0])[1].shape)
    vertex = polytope.support(energies)[1]
    centre = polytope.centre.reshape(vertex.shape)
    noise = rng.standard_normal(vertex.shape) * rng.choice([0.0, 0.05, 0.3])
    noise -= noise.mean(axis=-1, keepdims=True)
    point: Array = centre + rng.uniform(0.6, 1.3) * (vertex - centre) + noise
    return point


@pytest.mark.parametrize("r", range(1, 7))
def test_line_up_counts_in_the_stable_range(r: int) -> None:
    n = max(r - 1, 1)
    fermion_points = configuration_points(fermions(2 * n, n))
    assert len(line_ups(fermion_points, r)) == published.FERMION_LINE_UPS[r - 1]
    boson_points = configuration_points(bosons(max(r, 2), n))
    assert len(line_ups(boson_points, r)) == published.BOSON_LINE_UPS[r - 1]


def test_line_up_counts_at_fixed_spin() -> None:
    points = configuration_points(spin_half(4, (2, 2)))
    counts = [len(line_ups(points, r)) for r in range(1, 5)]
    assert counts == [*published.SPIN_HALF_LINE_UPS, 18]
    assert len(line_ups(configuration_points(spin_half(6, (3, 3))), 4)) == 22


@pytest.mark.parametrize("r", [3, 4, 5])
def test_facet_counts_in_the_stable_range(r: int) -> None:
    weights = random_weights(np.random.default_rng(r), r)
    of_fermions = facets(ReferencePolytope(fermions(2 * r - 2, r - 1), weights))
    assert len(of_fermions) == published.FERMION_INEQUALITIES[r - 1] + 1  # and n_d >= 0
    of_bosons = facets(ReferencePolytope(bosons(r, r - 1), weights))
    assert len(of_bosons) == published.BOSON_INEQUALITIES[r - 1]


def test_facets_that_coincide_or_drop_out_at_r_2() -> None:
    """One particle: n_1 <= w1 implies n_1 <= 1.  Two boson modes: it implies n_2 >= 0."""
    weights = np.array([0.7, 0.3])
    for sector, count in ((fermions(4, 1), 1 + 1), (fermions(4, 2), 2 + 1), (bosons(2, 3), 1)):
        assert len(facets(ReferencePolytope(sector, weights))) == count


@pytest.mark.parametrize(
    ("sector", "r"),
    [
        *((sector, r) for sector in (fermions(6, 3), bosons(4, 3)) for r in (2, 3, 4)),
        *((spin_half(4, (2, 2)), r) for r in (2, 3)),
    ],
    ids=str,
)
def test_facets_are_the_published_inequalities(sector: ReferenceSector, r: int) -> None:
    weights = random_weights(np.random.default_rng(r), r)
    polytope = ReferencePolytope(sector, weights)
    blocks, d = polytope.points.shape[1:]
    trace = polytope.centre.sum(axis=1)

    def key(row: Array, bound: float) -> tuple[float, ...]:
        row = np.reshape(row, (blocks, d))
        moved = row - row[:, -1:]
        reduced = (bound - row[:, -1] @ trace) / moved.max()
        return tuple(np.round(np.append(canonical(row).ravel(), reduced), 9) + 0.0)

    computed = {key(row, bound) for row, bound in facets(polytope)}
    assert computed == {key(row, bound) for row, bound in inequalities_of(sector, weights)}


@pytest.mark.parametrize(
    ("sector", "r"),
    [
        (s, r)
        for s in (fermions(6, 3), fermions(8, 4), bosons(4, 3), bosons(5, 4))
        for r in (1, 2, 3, 4)
    ]
    + [(spin_half(4, (2, 2)), r) for r in (1, 2, 3)],
    ids=str,
)
def test_membership_follows_the_published_inequalities(sector: ReferenceSector, r: int) -> None:
    rng = np.random.default_rng(10 + r)
    verdicts = []
    for _ in range(20):
        weights = random_weights(rng, r)
        polytope = ReferencePolytope(sector, weights)
        for _ in range(3):
            point = scattered(polytope, rng)
            slack = published.slack(inequalities_of(sector, weights), point)
            if abs(slack) > 1e-8:
                assert polytope.contains(point) == (slack > 0.0)
                verdicts.append(slack > 0.0)
    assert {True, False} == set(verdicts)


@pytest.mark.parametrize(("sector", "domain"), SMALL[1:], ids=str)
def test_membership_without_rays(sector: ReferenceSector, domain: str | None) -> None:
    rng = np.random.default_rng(20)
    verdicts = []
    for r in (1, 2, 3):
        polytope = ReferencePolytope(sector, random_weights(rng, r), domain)
        for _ in range(4):
            point = scattered(polytope, rng)
            verdict = polytope.contains(point)
            assert verdict == polytope.in_permuted_hull(point)
            verdicts.append(verdict)
    assert {True, False} == set(verdicts)


@pytest.mark.parametrize(("sector", "domain"), SMALL, ids=str)
@pytest.mark.parametrize("r", [1, 2, 4])
def test_projection(sector: ReferenceSector, domain: str | None, r: int) -> None:
    rng = np.random.default_rng(30 + r)
    for _ in range(8):
        polytope = ReferencePolytope(sector, random_weights(rng, r), domain)
        point = scattered(polytope, rng)
        projection = polytope.project(point)
        assert projection.violation < 1e-12
        moved = np.linalg.norm(projection.occupations - point)
        assert_allclose(projection.distance, moved, atol=1e-14)
        assert polytope.excess(projection.occupations) < 1e-12
        assert (projection.distance < 1e-9) == polytope.contains(point)
        by_columns = polytope.project_by_columns(point)
        assert_allclose(by_columns.occupations, projection.occupations, atol=1e-11)


@pytest.mark.parametrize("sector", [fermions(6, 3), bosons(4, 3)], ids=str)
def test_projection_by_quadratic_programming(sector: ReferenceSector) -> None:
    """An active-set QP on the published inequalities and the order of n."""
    rng = np.random.default_rng(40)
    for _ in range(20):
        weights = random_weights(rng, 4)
        polytope = ReferencePolytope(sector, weights)
        point = scattered(polytope, rng)
        target = -np.sort(-point)
        rows, bounds = zip(*inequalities_of(sector, weights), strict=True)
        order = -np.diff(np.eye(sector.modes), axis=0)
        constraints = np.vstack([np.ones(sector.modes), -np.array(rows), order])
        limits = np.concatenate([[sum(sector.particles)], -np.array(bounds), np.zeros(len(order))])
        solution = quadprog.solve_qp(np.eye(sector.modes), target, constraints.T, limits, 1)[0]
        nearest = polytope.project(point).occupations
        assert_allclose(-np.sort(-nearest), solution, atol=1e-11)


def test_projection_for_many_weights() -> None:
    """Beyond lists of line-ups: optimality by the support function over all configurations."""
    rng = np.random.default_rng(50)
    for sector, r in ((fermions(6, 3), 20), (fermions(6, 3), 12), (bosons(4, 4), 15)):
        polytope = ReferencePolytope(sector, random_weights(rng, r))
        point = scattered(polytope, rng)
        projection = polytope.project_by_columns(point)
        h = projection.occupations - point
        gap = h @ projection.occupations - polytope.support(h)[0]
        assert abs(gap) <= 1e-12
        assert (
            polytope.support(h)[0] - h @ point
        ) / projection.distance <= projection.distance + 1e-12


@pytest.mark.parametrize(("sector", "domain"), SMALL, ids=str)
def test_stretch(sector: ReferenceSector, domain: str | None) -> None:
    rng = np.random.default_rng(60)
    for r in (1, 2, 4):
        polytope = ReferencePolytope(sector, random_weights(rng, r), domain)
        point = scattered(polytope, rng)
        centre = polytope.centre.reshape(point.shape)
        stretch = polytope.stretch(point)
        assert (stretch >= 1.0) == polytope.contains(point)
        assert polytope.excess(centre + (stretch - 1e-6) * (point - centre)) < 1e-12
        assert polytope.excess(centre + (stretch + 1e-4) * (point - centre)) > 1e-9
        assert polytope.stretch(centre) == np.inf


@pytest.mark.parametrize("sector", [fermions(6, 3), bosons(4, 3), spin_half(4, (2, 1))], ids=str)
def test_stretch_by_facets(sector: ReferenceSector) -> None:
    """The first facet met on the way out from the centre."""
    rng = np.random.default_rng(70)
    polytope = ReferencePolytope(sector, random_weights(rng, 3))
    listed = facets(polytope)
    for _ in range(10):
        point = scattered(polytope, rng)
        way = -np.sort(-point.reshape(polytope.centre.shape), axis=1) - polytope.centre
        ratios = [
            (bound - np.sum(row * polytope.centre)) / np.sum(row * way)
            for row, bound in listed
            if np.sum(row * way) > 0.0
        ]
        assert_allclose(polytope.stretch(point), min(ratios), rtol=1e-12)


def test_one_point_domains() -> None:
    for sector in (fermions(3, 3), fermions(3, 0), bosons(1, 4)):
        polytope = ReferencePolytope(sector, np.array([1.0]))
        centre = polytope.centre.reshape(-1)
        assert polytope.contains(centre)
        assert polytope.stretch(centre) == np.inf
    away = np.array([1.1, 1.0, 0.9])
    polytope = ReferencePolytope(fermions(3, 3), np.array([1.0]))
    assert_allclose(polytope.distance(away), np.sqrt(0.02))
    assert_allclose(polytope.stretch(away), 0.0, atol=1e-14)


def test_full_mixture_leaves_one_point() -> None:
    """Equal weights on every state: occupations N/d and nothing else."""
    sector = bosons(3, 2)
    polytope = ReferencePolytope(sector, np.full(sector.dimension, 1.0 / sector.dimension))
    assert_allclose(polytope.project_by_columns(np.array([2.0, 0.0, 0.0])).occupations, 2.0 / 3.0)
