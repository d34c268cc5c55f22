"""The exclusion polytope against brute force over every configuration of the sector."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from numpy.testing import assert_allclose

import fockhull as fh
from reference.fock import ReferenceSector, bosons, fermions, spin_half
from reference.polytope import ReferencePolytope
from reference.random_problems import (
    random_one_body,
    random_two_body,
    random_unitary,
    random_weights,
)

Array = npt.NDArray[Any]
Case = tuple[ReferenceSector, str | None]
CASES: list[Case] = [
    *((fermions(d, n), None) for d, n in ((6, 3), (5, 2), (4, 1), (5, 4))),
    *((bosons(d, n), None) for d, n in ((4, 3), (3, 5), (5, 2), (4, 1))),
    *((spin_half(d, n), "spin-resolved") for d, n in ((4, (2, 2)), (4, (2, 1)), (3, (1, 0)))),
    *((spin_half(d, n), "spin-summed") for d, n in ((4, (2, 2)), (4, (3, 1)), (3, (1, 0)))),
]
FEW = [CASES[0], CASES[4], CASES[8], CASES[11]]


def label(case: Case) -> str:
    reference, domain = case
    return f"{reference.statistics} {reference.modes} {reference.particles} {domain or ''}"


def weight_sets(rng: np.random.Generator, dimension: int) -> list[Array]:
    """Generic weights up to r = 5, equal ones, and a first plateau."""
    generic = [random_weights(rng, r) for r in range(1, min(5, dimension) + 1)]
    special = [np.full(3, 1.0 / 3.0), np.array([0.3, 0.3, 0.2, 0.2]), np.array([0.6, 0.2, 0.2])]
    return generic + [weights for weights in special if len(weights) <= dimension]


def pair(case: Case, weights: Array) -> tuple[fh.ExclusionPolytope, ReferencePolytope]:
    reference, domain = case
    d, n = reference.modes, reference.particles
    if reference.statistics == "spin-1/2":
        sector = fh.SpinHalfFermions(d, particles=n)
        polytope = fh.ExclusionPolytope(sector, weights, domain=domain)
    else:
        kind = fh.Bosons if reference.statistics == "bosons" else fh.Fermions
        polytope = fh.ExclusionPolytope(kind(d, n[0]), weights)
    return polytope, ReferencePolytope(reference, weights, domain)


def scattered(reference: ReferencePolytope, rng: np.random.Generator) -> Array:
    """Sorted occupations on both sides of the boundary, trace kept in each block."""
    shape = reference.support(reference.points[0])[1].shape
    vertex = reference.support(rng.standard_normal(shape))[1]
    centre = reference.centre.reshape(shape)
    noise = rng.standard_normal(shape) * rng.choice([0.0, 0.05, 0.3])
    noise -= noise.mean(axis=-1, keepdims=True)
    point: Array = centre + rng.uniform(0.5, 1.3) * (vertex - centre) + noise
    return -np.sort(-point, axis=-1)


def decreasing(occupations: Array) -> Array:
    return -np.sort(-np.asarray(occupations), axis=-1)


def in_random_orbitals(occupations: Array, rng: np.random.Generator) -> tuple[Array, Array]:
    """A density matrix with these occupations, and its orbitals (per spin)."""
    rows = np.atleast_2d(occupations)
    orbitals = np.array([random_unitary(rng, rows.shape[1]) for _ in rows])
    gamma = orbitals * rows[:, None, :] @ orbitals.conj().transpose(0, 2, 1)
    shape = occupations.shape + occupations.shape[-1:]
    return gamma.reshape(shape), orbitals.reshape(shape)


@pytest.mark.parametrize("case", CASES, ids=label)
def test_support(case: Case) -> None:
    rng = np.random.default_rng(1)
    dimension = case[0].dimension
    many = [random_weights(rng, min(r, dimension)) for r in (8, 20, dimension)]
    for weights in weight_sets(rng, dimension) + many:
        polytope, reference = pair(case, weights)
        h = rng.standard_normal(reference.centre.shape).reshape(
            reference.support(reference.points[0])[1].shape
        )
        value, occupations = polytope.support(h)
        assert_allclose(value, reference.support(h)[0], rtol=0.0, atol=1e-12)
        assert_allclose(np.sum(h * occupations), value, rtol=0.0, atol=1e-12)
        assert_allclose(np.sum(occupations), sum(case[0].particles), rtol=0.0, atol=1e-12)


@pytest.mark.parametrize("case", CASES, ids=label)
def test_generating_vertices(case: Case) -> None:
    rng = np.random.default_rng(2)
    for weights in weight_sets(rng, case[0].dimension):
        polytope, reference = pair(case, weights)
        expected = reference.vertices.reshape(len(reference.vertices), -1)
        found = np.reshape(polytope.generating_vertices(), (-1, expected.shape[1]))
        assert len(found) == len(expected)
        between = np.abs(found[:, None] - expected[None]).max(axis=2)
        assert between.min(axis=0).max() < 1e-12
        assert between.min(axis=1).max() < 1e-12


@pytest.mark.parametrize("case", CASES, ids=label)
def test_projection_of_occupations(case: Case) -> None:
    rng = np.random.default_rng(3)
    for weights in weight_sets(rng, case[0].dimension):
        polytope, reference = pair(case, weights)
        for _ in range(4):
            point = scattered(reference, rng)
            expected = reference.project(point)
            assert expected.violation < 1e-12
            projection = polytope.project(occupations=point)
            nearest = decreasing(projection.occupations)
            assert_allclose(nearest, expected.occupations, rtol=0.0, atol=1e-10)
            assert_allclose(projection.distance, expected.distance, rtol=0.0, atol=1e-10)
            distance = polytope.distance(occupations=point)
            assert_allclose(distance, expected.distance, rtol=0.0, atol=1e-10)


@pytest.mark.parametrize("case", CASES, ids=label)
def test_verdict(case: Case) -> None:
    rng = np.random.default_rng(4)
    verdicts = set()
    for weights in weight_sets(rng, case[0].dimension):
        polytope, reference = pair(case, weights)
        for _ in range(6):
            point = scattered(reference, rng)
            excess = reference.excess(point)
            if 1e-11 < excess < 1e-6:
                continue
            assert bool(polytope.contains(occupations=point)) == (excess <= 1e-11)
            verdicts.add(excess <= 1e-11)
    assert verdicts == {True, False}


@pytest.mark.parametrize("case", CASES, ids=label)
def test_stretch(case: Case) -> None:
    rng = np.random.default_rng(5)
    for weights in weight_sets(rng, case[0].dimension):
        polytope, reference = pair(case, weights)
        for _ in range(3):
            point = scattered(reference, rng)
            stretch = float(polytope.stretch(occupations=point))
            assert_allclose(stretch, reference.stretch(point), rtol=1e-9)
        centre = reference.centre.reshape(point.shape)
        assert float(polytope.stretch(occupations=centre)) == np.inf


@pytest.mark.parametrize("case", FEW, ids=label)
def test_projection_for_many_weights(case: Case) -> None:
    rng = np.random.default_rng(6)
    for r in (8, 12, case[0].dimension - 1):
        polytope, reference = pair(case, random_weights(rng, r))
        for _ in range(3):
            point = scattered(reference, rng)
            expected = reference.project_by_columns(point)
            projection = polytope.project(occupations=point)
            nearest = decreasing(projection.occupations)
            assert_allclose(nearest, expected.occupations, rtol=0.0, atol=1e-8)
            assert_allclose(projection.distance, expected.distance, rtol=0.0, atol=1e-8)


@pytest.mark.parametrize("case", FEW, ids=label)
def test_projection_keeps_the_natural_orbitals(case: Case) -> None:
    rng = np.random.default_rng(7)
    for weights in weight_sets(rng, case[0].dimension):
        polytope, reference = pair(case, weights)
        point = scattered(reference, rng)
        gamma, orbitals = in_random_orbitals(point, rng)
        untouched = gamma.copy()
        expected = reference.project(point)
        projection = polytope.project(gamma)
        nearest = orbitals * expected.occupations[..., None, :] @ orbitals.conj().swapaxes(-1, -2)
        assert_allclose(projection.density_matrix, nearest, rtol=0.0, atol=1e-10)
        assert_allclose(projection.distance, expected.distance, rtol=0.0, atol=1e-10)
        moved = np.linalg.norm(projection.density_matrix - gamma)
        assert_allclose(moved, projection.distance, rtol=0.0, atol=1e-10)
        assert_allclose(float(polytope.stretch(gamma)), reference.stretch(point), rtol=1e-9)
        assert polytope.contains(projection.density_matrix)
        assert_allclose(gamma, untouched, rtol=0.0, atol=0.0)


@pytest.mark.parametrize("case", FEW, ids=label)
def test_batches(case: Case) -> None:
    """Leading axes are a batch, for occupations and density matrices alike."""
    rng = np.random.default_rng(8)
    polytope, reference = pair(case, random_weights(rng, 3))
    points = np.array([[scattered(reference, rng) for _ in range(3)] for _ in range(2)])
    expected = np.array([[reference.project(point).distance for point in row] for row in points])
    gammas = np.array([[in_random_orbitals(point, rng)[0] for point in row] for row in points])
    assert_allclose(polytope.distance(occupations=points), expected, rtol=0.0, atol=1e-10)
    assert_allclose(polytope.distance(gammas), expected, rtol=0.0, atol=1e-10)
    assert_allclose(polytope.project(gammas).distance, expected, rtol=0.0, atol=1e-10)
    verdicts = np.asarray(polytope.contains(gammas))
    assert verdicts.shape == (2, 3)
    assert np.array_equal(verdicts, expected <= 1e-9)


@pytest.mark.parametrize("case", FEW, ids=label)
def test_every_ensemble_is_allowed(case: Case) -> None:
    """gamma_w of a random Hamiltonian, from the dense reference, lies inside."""
    rng = np.random.default_rng(9)
    reference = case[0]
    for r in (1, 2, 4):
        weights = random_weights(rng, r)
        polytope, _ = pair(case, weights)
        h = random_one_body(rng, reference.modes, is_complex=True)
        v = random_two_body(rng, reference.modes, "complex")
        vectors = np.linalg.eigh(reference.hamiltonian(h, two_body=0.3 * v))[1]
        gamma = sum(
            w * reference.density_matrix(c) for w, c in zip(weights, vectors.T, strict=False)
        )
        gamma = gamma.sum(axis=0) if case[1] == "spin-summed" else gamma
        assert polytope.contains(gamma)
        assert polytope.distance(gamma) <= 1e-9
        assert float(polytope.stretch(gamma)) >= 1.0 - 1e-9
