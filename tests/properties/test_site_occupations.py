"""The diagonal of gamma in any basis obeys the polytope (Schur and Horn; arXiv:2506.09960)."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import assume, given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

import fockhull as fh
from properties.generated import (
    Array,
    generators,
    problem_of,
    scattered,
    sectors,
    solved,
    weights_for,
)
from properties.generated import polytopes as all_polytopes
from reference.random_problems import random_unitary

CLOSE: dict[str, Any] = {"rtol": 0.0, "atol": 1e-8}


def domains_of(ensemble: fh.Ensemble) -> list[tuple[fh.ExclusionPolytope, Array]]:
    """Each domain of the sector, with the density matrix that belongs to it."""
    gamma = ensemble.density_matrix
    if ensemble.hamiltonian.sector.spins == 1:
        return [(ensemble.exclusion_polytope(), gamma)]
    return [
        (ensemble.exclusion_polytope("spin-resolved"), gamma),
        (ensemble.exclusion_polytope("spin-summed"), gamma.sum(axis=0)),
    ]


@given(st.data(), sectors(), generators(), st.booleans())
def test_densities_of_ensembles(
    data: st.DataObject, sector: Any, rng: Any, is_complex: bool
) -> None:
    """In the basis of the sites and in any other, for interacting ensembles."""
    assume(sector.total_particles > 0)
    problem = problem_of(sector, rng, is_complex=is_complex)
    ensemble = solved(problem.hamiltonian(), data.draw(weights_for(sector)))
    for polytope, gamma in domains_of(ensemble):
        u = random_unitary(rng, sector.modes)
        for basis in (np.eye(sector.modes), u):
            density = np.einsum("...pq,pi,qi->...i", gamma, basis.conj(), basis).real
            assert polytope.contains(occupations=density)
            # no farther from the centre than the natural occupations
            assert polytope.distance(occupations=density) <= polytope.distance(gamma) + 1e-9


@given(all_polytopes(), generators())
def test_densities_are_no_farther_outside_than_natural_occupations(
    polytope: fh.ExclusionPolytope, rng: Any
) -> None:
    """The density of a matrix in any basis; one outside proves the matrix outside."""
    n, d = scattered(polytope, rng), polytope.sector.modes
    rows = n.reshape(-1, d)
    u = np.array([random_unitary(rng, d) for _ in rows])
    gamma = (u * rows[:, None, :] @ u.conj().swapaxes(1, 2)).reshape(*polytope.shape, d)
    density = np.einsum("...ii->...i", gamma).real
    assert_allclose(density.sum(axis=-1), n.sum(axis=-1), **CLOSE)
    assert polytope.distance(occupations=density) <= polytope.distance(gamma) + 1e-8
    proof = polytope.project(occupations=density).separator
    if proof is not None:
        assert polytope.distance(gamma) >= proof.excess - 1e-8
