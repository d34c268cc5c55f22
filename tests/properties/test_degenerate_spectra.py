"""Spectra with high degeneracy: rings, shells, equal levels, the zero operator."""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

import fockhull as fh
from properties.generated import Array, generators, sectors, solved, weights_for
from reference.closed_forms import ring_levels
from reference.random_problems import random_unitary, rotate_one_body

SHELLS = np.repeat([0.0, 1.0, 2.0], [1, 3, 5])
"""One s, three p and five d orbitals, as in an atom without interaction."""
ENERGY: dict[str, Any] = {"rtol": 0.0, "atol": 1e-9}


def plateaus(energies: Array) -> list[tuple[int, int]]:
    """Ranges of equal energies."""
    edges = [0, *(np.flatnonzero(np.diff(energies) > 1e-6) + 1).tolist(), len(energies)]
    return list(itertools.pairwise(edges))


def check_levels(e: fh.Ensemble, exact: Array) -> None:
    """The lowest levels with their multiplicities, residuals and multiplets."""
    r = len(e.energies)
    assert_allclose(e.energies, exact[:r], **ENERGY)
    assert_allclose(e.vectors.conj().T @ e.vectors, np.eye(r), rtol=0.0, atol=1e-10)
    residual = e.hamiltonian.apply(e.vectors) - e.vectors * e.energies
    assert np.linalg.norm(residual, axis=0).max() < 1e-8
    expected = [m for m in plateaus(exact) if m[0] < r]
    assert [m[0] for m in e.multiplets] == [m[0] for m in expected]


@given(st.data(), sectors(), generators(), st.floats(-3.0, 3.0))
def test_equal_levels(data: st.DataObject, sector: Any, rng: Any, energy: float) -> None:
    """h = e 1 (the zero operator at e = 0): one multiplet of everything."""
    weights = data.draw(weights_for(sector))
    for value in (energy, 0.0):
        hamiltonian = fh.Hamiltonian(value * np.eye(sector.modes), sector=sector)
        e = solved(hamiltonian, weights)
        check_levels(e, np.full(sector.dimension, value * sector.total_particles))
        assert e.multiplets == ((0, sector.dimension),)
        symmetric = e.symmetrized()
        assert_allclose(symmetric.weights, np.full(sector.dimension, 1.0 / sector.dimension))
        mean = np.reshape(sector.particles, (-1, 1, 1)) / sector.modes * np.eye(sector.modes)
        expected = mean.reshape(e.density_matrix.shape)
        assert_allclose(symmetric.density_matrix, expected, rtol=0.0, atol=1e-10)


@given(
    st.data(),
    sectors(),
    generators(),
    st.lists(st.sampled_from([-1.0, 0.0, 0.0, 2.0]), min_size=6, max_size=6),
)
def test_shells_in_rotated_orbitals(
    data: st.DataObject, sector: Any, rng: Any, levels: list[float]
) -> None:
    """Symmetrised ensembles of free particles: gamma is a function of h."""
    energies = np.array(levels[: sector.modes])
    u = random_unitary(rng, sector.modes)
    h = rotate_one_body(np.diag(energies), u.conj().T)
    e = solved(fh.Hamiltonian(h, sector=sector), data.draw(weights_for(sector)))
    exact = sector.lowest_configurations(energies, sector.dimension).energies
    check_levels(e, exact)
    symmetric = e.symmetrized()
    assert_allclose(symmetric.energy, e.energy, **ENERGY)
    gamma = symmetric.density_matrix
    assert_allclose(h @ gamma, gamma @ h, rtol=0.0, atol=1e-8)
    diagonal = rotate_one_body(gamma, u)
    for first in range(sector.modes):
        for second in range(first):
            if energies[first] == energies[second]:
                difference = diagonal[..., first, first] - diagonal[..., second, second]
                assert_allclose(difference, 0.0, rtol=0.0, atol=1e-8)


RINGS = [
    *(fh.Fermions(8, n) for n in (2, 3, 4)),
    fh.SpinHalfFermions(4, particles=(2, 2)),
    fh.SpinHalfFermions(6, particles=(2, 1)),
    fh.Bosons(4, 4),
]


@pytest.mark.parametrize("flux", [0.0, np.pi, 0.7])
@pytest.mark.parametrize("sector", RINGS, ids=repr)
def test_free_rings(sector: Any, flux: float) -> None:
    """Levels -2 cos((2 pi m - flux) / L) and sums of them (textbook)."""
    h = fh.lattices.ring(sector.modes, flux=flux)
    e = fh.solve(fh.Hamiltonian(h, sector=sector), levels=min(10, sector.dimension))
    levels = ring_levels(sector.modes, flux)
    count = min(60, sector.dimension)
    check_levels(e, sector.lowest_configurations(levels, count).energies)


LARGE = [
    fh.SpinHalfFermions(9, particles=(2, 3)),
    fh.Fermions(16, 5),
    fh.Bosons(6, 10),
]


@pytest.mark.timeout(60)
@pytest.mark.parametrize("r", [1, 4, 9])
@pytest.mark.parametrize("sector", LARGE, ids=repr)
def test_shells_found_by_iteration(sector: Any, r: int) -> None:
    """Complete multiplets, though a Krylov space sees one vector of each."""
    rng = np.random.default_rng(r)
    energies = np.resize(SHELLS, sector.modes)
    h = rotate_one_body(np.diag(energies), random_unitary(rng, sector.modes, is_complex=False))
    e = fh.solve(fh.Hamiltonian(h, sector=sector), levels=r)
    assert e.method == "block Lanczos"
    assert e.level_count.kind == "probed"
    check_levels(e, sector.lowest_configurations(energies, 400).energies)


@pytest.mark.timeout(60)
@pytest.mark.parametrize("value", [0.0, 2.0])
@pytest.mark.parametrize("sector", LARGE, ids=repr)
def test_everything_degenerate_by_iteration(sector: Any, value: float) -> None:
    """The multiplet is larger than anyone wants: it is left incomplete, and said so."""
    hamiltonian = fh.Hamiltonian(value * np.eye(sector.modes), sector=sector)
    e = fh.solve(hamiltonian, levels=3)
    check_levels(e, np.full(sector.dimension, value * sector.total_particles))
    with pytest.raises(fh.errors.ComputationError, match="not found completely"):
        solved(hamiltonian, np.array([0.6, 0.4])).symmetrized()


@pytest.mark.parametrize("repulsion", [-4.0, 4.0])
def test_iteration_and_diagonalisation_agree(repulsion: float) -> None:
    """A ring with its rotations and reflections, attractive or repulsive."""
    sector = fh.SpinHalfFermions(7, particles=(3, 2))
    interaction = fh.Interaction(sector, density_density=repulsion * np.eye(7))
    hamiltonian = fh.Hamiltonian(fh.lattices.ring(7), interaction)
    exact = np.linalg.eigvalsh(hamiltonian.to_scipy().toarray())
    for r in (1, 2, 5, 12):
        e = fh.solve(hamiltonian, levels=r)
        assert e.method == "block Lanczos"
        assert e.level_count.kind == "probed"
        check_levels(e, exact)
