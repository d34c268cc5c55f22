"""Sectors, Hamiltonians and density matrices against the Fock-space reference."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from numpy.testing import assert_allclose

import fockhull as fh
from reference import random_problems as problems
from reference.fock import (
    ReferenceSector,
    bosons,
    dense_from_density_density,
    entries_from_dense,
    fermions,
    spin_half,
)

Array = npt.NDArray[Any]
Sector = fh.Fermions | fh.SpinHalfFermions | fh.Bosons
MATRIX: dict[str, Any] = {"rtol": 0.0, "atol": 1e-12}

SECTORS = [
    *(fermions(d, n) for d, n in ((5, 2), (5, 3), (4, 1), (3, 0), (3, 3))),
    *(
        spin_half(d, n)
        for d, n in ((3, (2, 1)), (4, (2, 2)), (3, (0, 2)), (2, (2, 2)), (3, (0, 0)))
    ),
    *(bosons(d, n) for d, n in ((3, 3), (4, 2), (3, 1), (1, 3), (2, 0), (2, 5))),
]
MIDDLE = [fermions(5, 2), spin_half(4, (2, 1)), bosons(3, 3)]


def label(reference: ReferenceSector) -> str:
    return f"{reference.statistics} {reference.modes} {reference.particles}"


def package_sector(reference: ReferenceSector) -> Sector:
    if reference.statistics == "spin-1/2":
        up, down = reference.particles
        return fh.SpinHalfFermions(reference.modes, particles=(up, down))
    kind = fh.Bosons if reference.statistics == "bosons" else fh.Fermions
    return kind(reference.modes, reference.particles[0])


def package_matrix(hamiltonian: fh.Hamiltonian) -> Array:
    matrix: Array = hamiltonian.to_scipy().toarray()
    return matrix


def random_hamiltonian(
    reference: ReferenceSector, rng: np.random.Generator, *, is_complex: bool
) -> tuple[fh.Hamiltonian, Array]:
    """A Hamiltonian with generic h and v, and its reference matrix."""
    kind: problems.TwoBodyKind = "complex" if is_complex else "real"
    h = problems.random_one_body(rng, reference.modes, is_complex=is_complex)
    v = problems.random_two_body(rng, reference.modes, kind)
    interaction = fh.Interaction(package_sector(reference), two_body=v, order="dirac")
    matrix = reference.hamiltonian(h, two_body=v, constant=0.25)
    return fh.Hamiltonian(h, interaction, constant=0.25), matrix


@pytest.mark.parametrize("reference", SECTORS, ids=label)
def test_order_of_configurations(reference: ReferenceSector) -> None:
    sector = package_sector(reference)
    assert sector.dimension == reference.dimension
    assert_allclose(np.array(list(sector.configurations())), reference.occupations)
    for index, occupations in enumerate(reference.occupations):
        assert_allclose(sector.occupations(index), occupations)
        assert sector.index(occupations) == index


@pytest.mark.parametrize("reference", SECTORS, ids=label)
def test_lowest_configurations(reference: ReferenceSector) -> None:
    rng = np.random.default_rng(1)
    spins = 2 if reference.statistics == "spin-1/2" else 1
    h = rng.standard_normal((spins, reference.modes))
    n = reference.occupations.reshape(reference.dimension, spins, reference.modes)
    expected = np.sort(np.tensordot(n, h, axes=2))
    energies_of_modes = h if spins == 2 else h[0]
    for r in {1, min(7, reference.dimension), reference.dimension}:
        energies, occupations = package_sector(reference).lowest_configurations(
            energies_of_modes, r
        )
        assert_allclose(energies, expected[:r], **MATRIX)
        found = np.reshape(occupations, (r, spins, reference.modes))
        assert_allclose(np.tensordot(found, h, axes=2), expected[:r], **MATRIX)
        assert len(np.unique(found, axis=0)) == r


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("reference", SECTORS, ids=label)
def test_one_body(reference: ReferenceSector, is_complex: bool) -> None:
    rng = np.random.default_rng(2)
    shapes = (None, 2) if reference.statistics == "spin-1/2" else (None,)
    for spins in shapes:
        h = problems.random_one_body(rng, reference.modes, is_complex=is_complex, spins=spins)
        hamiltonian = fh.Hamiltonian(h, sector=package_sector(reference))
        assert hamiltonian.shape == (reference.dimension, reference.dimension)
        assert hamiltonian.dtype == h.dtype
        assert_allclose(package_matrix(hamiltonian), reference.one_body(h), **MATRIX)


@pytest.mark.parametrize("kind", problems.TWO_BODY_KINDS)
@pytest.mark.parametrize("reference", SECTORS, ids=label)
def test_two_body(reference: ReferenceSector, kind: problems.TwoBodyKind) -> None:
    """Dirac order, Mulliken order and the list of entries, entry by entry."""
    rng = np.random.default_rng(3)
    sector, d = package_sector(reference), reference.modes
    v = problems.random_two_body(rng, d, kind)
    h = problems.random_one_body(rng, d, is_complex=kind == "complex")
    expected = reference.hamiltonian(h, two_body=v, constant=0.7)
    for interaction in (
        fh.Interaction(sector, two_body=v, order="dirac"),
        fh.Interaction(sector, two_body=problems.mulliken(v), order="mulliken"),
        fh.Interaction(sector, entries=entries_from_dense(v)),
    ):
        hamiltonian = fh.Hamiltonian(h, interaction, constant=0.7)
        assert_allclose(package_matrix(hamiltonian), expected, **MATRIX)


@pytest.mark.parametrize("reference", MIDDLE, ids=label)
def test_sparse_entries(reference: ReferenceSector) -> None:
    """A few complex entries with their partners by symmetry, nothing else."""
    rng = np.random.default_rng(4)
    d = reference.modes
    v = problems.random_two_body(rng, d, "complex")
    keep = problems.random_density_density(rng, d * d).reshape((d,) * 4) > 1.0
    keep |= keep.transpose(1, 0, 3, 2)
    keep |= keep.transpose(2, 3, 0, 1)
    sparse = np.where(keep, v, 0.0)
    interaction = fh.Interaction(package_sector(reference), entries=entries_from_dense(sparse))
    hamiltonian = fh.Hamiltonian(np.zeros((d, d)), interaction)
    assert 0 < keep.sum() < d**4
    assert_allclose(package_matrix(hamiltonian), reference.two_body(sparse), **MATRIX)


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("reference", SECTORS, ids=label)
def test_density_density(reference: ReferenceSector, is_complex: bool) -> None:
    """The diagonal form, also beside a complex h and beside the same terms in full."""
    rng = np.random.default_rng(5)
    sector, d = package_sector(reference), reference.modes
    spinless = reference.statistics == "fermions"
    coupling = problems.random_density_density(rng, d, zero_diagonal=spinless)
    h = problems.random_one_body(rng, d, is_complex=is_complex)
    hamiltonian = fh.Hamiltonian(h, fh.Interaction(sector, density_density=coupling))
    expected = reference.hamiltonian(h, density_density=coupling)
    assert_allclose(package_matrix(hamiltonian), expected, **MATRIX)
    in_full = fh.Interaction(sector, two_body=dense_from_density_density(coupling), order="dirac")
    assert_allclose(package_matrix(fh.Hamiltonian(h, in_full)), expected, **MATRIX)


@pytest.mark.parametrize("reference", MIDDLE, ids=label)
def test_sums_and_multiples_of_interactions(reference: ReferenceSector) -> None:
    rng = np.random.default_rng(6)
    sector, d = package_sector(reference), reference.modes
    coupling = problems.random_density_density(rng, d, zero_diagonal=True)
    v = problems.random_two_body(rng, d, "complex")
    total = fh.Interaction(sector, density_density=coupling) + 2.5 * fh.Interaction(
        sector, two_body=v, order="dirac"
    )
    expected = reference.density_density(coupling) + 2.5 * reference.two_body(v)
    assert_allclose(package_matrix(fh.Hamiltonian(np.zeros((d, d)), total)), expected, **MATRIX)


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("reference", SECTORS, ids=label)
def test_application(reference: ReferenceSector, is_complex: bool) -> None:
    """apply on vectors and blocks, the diagonal, and the linear operator."""
    rng = np.random.default_rng(7)
    hamiltonian, matrix = random_hamiltonian(reference, rng, is_complex=is_complex)
    block = problems.random_array(rng, (reference.dimension, 3), is_complex)
    untouched = block.copy()
    assert_allclose(hamiltonian.apply(block), matrix @ block, **MATRIX)
    assert_allclose(hamiltonian.apply(block[:, 0]), matrix @ block[:, 0], **MATRIX)
    assert_allclose(block, untouched, rtol=0.0, atol=0.0)
    assert_allclose(hamiltonian.diagonal(), np.diagonal(matrix), **MATRIX)
    operator = hamiltonian.as_linear_operator()
    assert_allclose(operator @ block, matrix @ block, **MATRIX)
    assert_allclose(operator.H @ block, matrix @ block, **MATRIX)


@pytest.mark.parametrize("is_complex", [False, True], ids=["real", "complex"])
@pytest.mark.parametrize("reference", MIDDLE, ids=label)
def test_ensemble(reference: ReferenceSector, is_complex: bool) -> None:
    """Energies, phases of the states, density matrices and the energy identity."""
    rng = np.random.default_rng(8)
    spins = 2 if reference.statistics == "spin-1/2" else None
    h = problems.random_one_body(rng, reference.modes, is_complex=is_complex, spins=spins)
    v = problems.random_two_body(rng, reference.modes, "complex" if is_complex else "eightfold")
    weights = problems.random_weights(rng, 4)
    sector = package_sector(reference)
    e = fh.solve(fh.Hamiltonian(h, fh.Interaction(sector, two_body=v, order="dirac")), weights)
    energies, vectors = np.linalg.eigh(reference.hamiltonian(h, two_body=v))
    assert e.vectors.shape == (reference.dimension, 4)
    assert_allclose(e.energies, energies[:4], rtol=0.0, atol=1e-9)
    assert_allclose(e.energy, weights @ energies[:4], rtol=0.0, atol=1e-9)
    expected = np.array([reference.density_matrix(c) for c in vectors.T[:4]])
    of_states = [reference.density_matrix(c) for c in e.vectors.T]
    assert_allclose(e.state_density_matrices, of_states, rtol=0.0, atol=1e-12)
    assert_allclose(e.state_density_matrices, expected, rtol=0.0, atol=1e-7)
    gamma = np.tensordot(weights, expected, axes=1)
    assert_allclose(e.density_matrix, gamma, rtol=0.0, atol=1e-7)
    one_body_energy = np.sum(h * np.swapaxes(gamma, -1, -2)).real
    assert_allclose(e.interaction_energy + one_body_energy, e.energy, rtol=0.0, atol=1e-7)
    assert_allclose(e.occupations, np.linalg.eigvalsh(gamma)[..., ::-1], rtol=0.0, atol=1e-7)
    for vector in e.vectors.T:
        leading = vector[np.argmax(np.abs(vector) >= np.abs(vector).max() - 1e-8)]
        assert leading.real > 0.0
        assert abs(leading.imag) < 1e-12


@pytest.mark.parametrize("particles", [(2, 1), (2, 2), (1, 2), (3, 0)], ids=str)
def test_spin_squared(particles: tuple[int, int]) -> None:
    rng = np.random.default_rng(9)
    reference = spin_half(3, particles)
    h = problems.random_one_body(rng, 3, is_complex=True)
    v = problems.random_two_body(rng, 3, "complex")
    interaction = fh.Interaction(package_sector(reference), two_body=v, order="dirac")
    e = fh.solve(fh.Hamiltonian(h, interaction), levels=reference.dimension)
    vectors = np.linalg.eigh(reference.hamiltonian(h, two_body=v))[1]
    expected = np.einsum("ij,ik,kj->j", vectors.conj(), reference.spin_squared(), vectors)
    assert_allclose(e.spin_squared, expected.real, rtol=0.0, atol=1e-8)


@pytest.mark.parametrize("reference", MIDDLE, ids=label)
def test_unitary_covariance(reference: ReferenceSector) -> None:
    """Rotating h and v rotates gamma."""
    rng = np.random.default_rng(10)
    sector, d = package_sector(reference), reference.modes
    h = problems.random_one_body(rng, d, is_complex=True)
    v = problems.random_two_body(rng, d, "complex")
    unitary = problems.random_unitary(rng, d)
    weights = problems.random_weights(rng, 3)
    plain = fh.solve(fh.Hamiltonian(h, fh.Interaction(sector, two_body=v, order="dirac")), weights)
    v_rotated = problems.rotate_two_body(v, unitary)
    rotated = fh.solve(
        fh.Hamiltonian(
            problems.rotate_one_body(h, unitary),
            fh.Interaction(sector, two_body=v_rotated, order="dirac"),
        ),
        weights,
    )
    assert_allclose(rotated.energies, plain.energies, rtol=0.0, atol=1e-9)
    expected = problems.rotate_one_body(plain.density_matrix, unitary)
    assert_allclose(rotated.density_matrix, expected, rtol=0.0, atol=1e-7)
