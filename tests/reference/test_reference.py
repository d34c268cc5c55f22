"""Self-tests of the Fock-space reference and of the closed forms."""

from __future__ import annotations

from itertools import product
from math import comb

import numpy as np
import pytest
from numpy.testing import assert_allclose

from reference import closed_forms as forms
from reference import random_problems as problems
from reference.fock import (
    ReferenceSector,
    bosons,
    dense_from_density_density,
    dense_from_entries,
    entries_from_dense,
    fermions,
    jordan_wigner,
    spin_half,
    truncated_ladders,
)

SECTORS = [fermions(4, 2), bosons(3, 3), spin_half(3, (2, 1))]


def levels(matrix: forms.Array) -> forms.Array:
    values: forms.Array = np.linalg.eigvalsh(matrix)
    return values


def test_fermion_ladders_anticommute() -> None:
    ladders = [a.toarray() for a in jordan_wigner(4)]
    for (p, a), (q, b) in product(enumerate(ladders), repeat=2):
        assert_allclose(a @ b.T + b.T @ a, float(p == q) * np.eye(16), atol=1e-15)
        assert_allclose(a @ b + b @ a, 0.0, atol=1e-15)


def test_boson_ladders_commute_below_the_cut() -> None:
    quanta = 3
    ladders = [a.toarray() for a in truncated_ladders(2, quanta)]
    totals = sum(a.T @ a for a in ladders).diagonal()
    below = totals < quanta - 0.5
    for (p, a), (q, b) in product(enumerate(ladders), repeat=2):
        commutator = (a @ b.T - b.T @ a)[np.ix_(below, below)]
        assert_allclose(commutator, float(p == q) * np.eye(below.sum()), atol=1e-14)


@pytest.mark.parametrize(
    ("sector", "dimension"),
    [
        (fermions(5, 2), comb(5, 2)),
        (fermions(3, 0), 1),
        (fermions(3, 3), 1),
        (bosons(3, 4), comb(6, 4)),
        (bosons(1, 4), 1),
        (bosons(2, 0), 1),
        (spin_half(4, (2, 1)), 6 * 4),
    ],
)
def test_basis_is_orthonormal(sector: ReferenceSector, dimension: int) -> None:
    assert sector.dimension == dimension
    assert_allclose((sector.basis.T @ sector.basis).toarray(), np.eye(dimension), atol=1e-14)


def test_order_of_states() -> None:
    """Colexicographic rank sum_k C(i_k, k); the up index is the slow one."""
    for rank, (members,) in enumerate(fermions(6, 3).states):
        assert rank == sum(comb(mode, place + 1) for place, mode in enumerate(members))
    for rank, (members,) in enumerate(bosons(4, 3).states):
        increasing = [mode + place for place, mode in enumerate(members)]
        assert rank == sum(comb(mode, place + 1) for place, mode in enumerate(increasing))
    assert spin_half(3, (1, 1)).states[:4] == [
        ((0,), (0,)),
        ((0,), (1,)),
        ((0,), (2,)),
        ((1,), (0,)),
    ]


def test_hopping_sign_and_boson_factor() -> None:
    """a+_0 a_2 takes |1 2> to a+_1 a+_0 |0> = -|0 1>; a+_1 a_0 takes |2, 0> to sqrt 2 |1, 1>."""
    hop = np.zeros((3, 3))
    hop[0, 2] = 1.0
    assert fermions(3, 2).one_body(hop)[0, 2] == -1.0
    hop = np.zeros((2, 2))
    hop[1, 0] = 1.0
    assert_allclose(bosons(2, 2).one_body(hop)[1, 0], np.sqrt(2.0))


@pytest.mark.parametrize("sector", SECTORS, ids=lambda s: s.statistics)
@pytest.mark.parametrize("kind", problems.TWO_BODY_KINDS)
def test_hamiltonian_is_hermitian_and_covariant(
    sector: ReferenceSector, kind: problems.TwoBodyKind
) -> None:
    rng = np.random.default_rng(1)
    is_complex = kind == "complex"
    h = problems.random_one_body(rng, sector.modes, is_complex=is_complex)
    v = problems.random_two_body(rng, sector.modes, kind)
    matrix = sector.hamiltonian(h, two_body=v, constant=0.3)
    assert_allclose(matrix, matrix.conj().T, atol=1e-13)
    assert np.iscomplexobj(matrix) == is_complex
    unitary = problems.random_unitary(rng, sector.modes, is_complex=is_complex)
    rotated = sector.hamiltonian(
        problems.rotate_one_body(h, unitary),
        two_body=problems.rotate_two_body(v, unitary),
        constant=0.3,
    )
    assert_allclose(levels(rotated), levels(matrix), atol=1e-12)
    ground, ground_rotated = (np.linalg.eigh(m)[1][:, 0] for m in (matrix, rotated))
    gamma = problems.rotate_one_body(sector.density_matrix(ground), unitary)
    assert_allclose(sector.density_matrix(ground_rotated), gamma, atol=1e-10)


@pytest.mark.parametrize("kind", problems.TWO_BODY_KINDS)
def test_symmetries_of_the_two_body_array(kind: problems.TwoBodyKind) -> None:
    v = problems.random_two_body(np.random.default_rng(0), 3, kind)
    assert_allclose(v, v.transpose(1, 0, 3, 2), atol=1e-15)
    assert_allclose(v, v.conj().transpose(2, 3, 0, 1), atol=1e-15)
    has_eightfold = np.allclose(v, v.transpose(2, 1, 0, 3))
    assert has_eightfold == (kind == "eightfold")


@pytest.mark.parametrize("sector", SECTORS, ids=lambda s: s.statistics)
def test_interaction_forms_agree(sector: ReferenceSector) -> None:
    rng = np.random.default_rng(2)
    coupling = problems.random_density_density(rng, sector.modes)
    dirac = dense_from_density_density(coupling)
    assert_allclose(sector.density_density(coupling), sector.two_body(dirac), atol=1e-13)
    indices, values = entries_from_dense(dirac)
    assert_allclose(dense_from_entries(indices, values, sector.modes), dirac)


@pytest.mark.parametrize("sector", SECTORS, ids=lambda s: s.statistics)
def test_density_matrix_gives_the_one_body_energy(sector: ReferenceSector) -> None:
    rng = np.random.default_rng(3)
    spins = 2 if sector.statistics == "spin-1/2" else None
    h = problems.random_one_body(rng, sector.modes, is_complex=True, spins=spins)
    psi = problems.random_state(rng, sector.dimension, is_complex=True)
    gamma = sector.density_matrix(psi)
    assert_allclose(np.sum(h * gamma.swapaxes(-1, -2)), psi.conj() @ sector.one_body(h) @ psi)
    assert_allclose(np.trace(gamma, axis1=-2, axis2=-1).sum(), sum(sector.particles))


def test_spin_squared_has_the_spectrum_of_multiplets() -> None:
    """Three electrons in three orbitals at M = 1/2: one quartet and eight doublets."""
    values = levels(spin_half(3, (2, 1)).spin_squared())
    assert_allclose(values, [0.75] * 8 + [3.75], atol=1e-12)


def test_hubbard_dimer() -> None:
    """Textbook closed form."""
    sector = spin_half(2, (1, 1))
    matrix = sector.hamiltonian(-np.eye(2)[::-1], density_density=4.0 * np.eye(2))
    energies, vectors = np.linalg.eigh(matrix)
    assert_allclose(energies, forms.hubbard_dimer_energies(4.0), atol=1e-13)
    gamma = sector.density_matrix(vectors[:, 0])
    assert_allclose(gamma.sum(axis=0)[0, 1], forms.hubbard_dimer_coherence(4.0))
    assert_allclose(levels(gamma[0]), [0.1464466094, 0.8535533906], atol=1e-10)


def test_four_site_hubbard_ring() -> None:
    """Ann. Phys. (Leipzig) 11 (2002) 49; recalled."""
    matrix = spin_half(4, (2, 2)).hamiltonian(forms.ring(4), density_density=4.0 * np.eye(4))
    assert_allclose(levels(matrix)[0], forms.hubbard_four_site_ring_energy(4.0), atol=1e-12)
    triplet = spin_half(4, (3, 1)).hamiltonian(forms.ring(4), density_density=4.0 * np.eye(4))
    assert_allclose(levels(triplet)[0], -1.8064238518, atol=1e-10)


def test_lieb_wu_ring() -> None:
    """Phys. Rev. Lett. 20, 1445 (1968)."""
    matrix = spin_half(6, (3, 3)).hamiltonian(forms.ring(6), density_density=4.0 * np.eye(6))
    energy = forms.lieb_wu_energy(6, 6, 3, 4.0)
    assert_allclose(energy, -3.6687061789, atol=1e-10)
    assert_allclose(levels(matrix)[0], energy, atol=1e-11)
    assert_allclose(forms.hubbard_chain_energy_per_site(4.0), -0.5737293679, atol=1e-10)


@pytest.mark.parametrize("flux", [0.0, 1.8 * np.pi])
def test_free_particles(flux: float) -> None:
    """Textbook: sums of one-particle levels."""
    for hopping, one in (
        (forms.ring(5, flux), forms.ring_levels(5, flux)),
        (forms.open_chain(5), forms.open_chain_levels(5)),
    ):
        many = levels(fermions(5, 2).hamiltonian(hopping))
        assert_allclose(many, forms.free_fermion_energies(one, 2), atol=1e-13)
        many = levels(bosons(5, 2).hamiltonian(hopping))
        assert_allclose(many, forms.free_boson_energies(one, 2), atol=1e-13)


def test_orientation_of_the_density_matrix() -> None:
    """One particle on a ring with flux; only complex input detects a transpose."""
    sector, h = fermions(5, 1), forms.ring(5, 1.8 * np.pi)
    energies, vectors = np.linalg.eigh(sector.hamiltonian(h))
    gamma = sector.density_matrix(vectors[:, 0])
    assert_allclose(energies[0], -1.9842294026, atol=1e-10)
    assert_allclose(gamma[1, 0], 0.0618033989 + 0.1902113033j, atol=1e-10)
    assert_allclose(gamma, forms.flux_ring_density_matrix(5, 1), atol=1e-13)
    assert_allclose(h @ gamma, gamma @ h, atol=1e-13)


@pytest.mark.parametrize("sector", SECTORS, ids=lambda s: s.statistics)
def test_normalisation_of_the_interaction(sector: ReferenceSector) -> None:
    """Direct and exchange identities shift by g N(N-1)/2 up to statistics.  Textbook."""
    one, g, n = np.eye(sector.modes), 0.7, sum(sector.particles)
    direct = g * np.einsum("pr,qs->pqrs", one, one)
    exchange = g * np.einsum("ps,qr->pqrs", one, one)
    identity, pairs = np.eye(sector.dimension), g * n * (n - 1) / 2.0
    assert_allclose(sector.two_body(direct), pairs * identity, atol=1e-13)
    expected = {
        "fermions": -pairs * identity,
        "bosons": pairs * identity,
        "spin-1/2": -g * n * (n - 4) / 4.0 * identity,
    }[sector.statistics]
    if sector.statistics == "spin-1/2":
        expected = expected - g * sector.spin_squared()
    assert_allclose(sector.two_body(exchange), expected, atol=1e-13)


def test_interacting_spinless_ring() -> None:
    """Equivalent to the isotropic Heisenberg ring; textbook."""
    nearest = 2.0 * np.abs(forms.ring(6))
    energy = levels(fermions(6, 3).hamiltonian(forms.ring(6), density_density=nearest))[0]
    assert_allclose(energy, forms.interacting_spinless_ring_energy(), atol=1e-12)
    nearest = 2.0 * np.abs(forms.ring(4))
    energy = levels(fermions(4, 2).hamiltonian(forms.ring(4, np.pi), density_density=nearest))[0]
    assert_allclose(energy, -2.0, atol=1e-12)


def test_hard_core_limit() -> None:
    """Jordan-Wigner; textbook."""
    matrix = bosons(4, 2).hamiltonian(forms.open_chain(4), density_density=1e4 * np.eye(4))
    energy = levels(matrix)[0]
    assert_allclose(energy, -2.2362679668, atol=1e-10)
    assert_allclose(energy, forms.hard_core_chain_energy(1e4), atol=1e-7)


def test_pairing_model() -> None:
    """Richardson's equations, review arXiv:nucl-th/0405011; recalled."""
    one_particle = np.arange(1.0, 5.0)
    pairs = forms.richardson_pair_energies(one_particle, 2, 0.4)
    matrix = spin_half(4, (2, 2)).hamiltonian(
        np.diag(one_particle), two_body=forms.pairing_two_body(4, 0.4)
    )
    assert_allclose(pairs, [1.65353854, 3.32001373], atol=1e-8)
    assert_allclose(pairs.sum(), 4.9735522650, atol=1e-10)
    assert_allclose(levels(matrix)[0], pairs.sum(), atol=1e-11)


def test_hydrogen_molecule() -> None:
    """*Modern Quantum Chemistry*, worked example; longer digits recomputed."""
    mulliken = forms.hydrogen_mulliken()
    dirac = mulliken.transpose(0, 2, 1, 3)
    assert_allclose(problems.mulliken(dirac), mulliken)
    matrix = spin_half(2, (1, 1)).hamiltonian(np.diag(forms.HYDROGEN_ONE_BODY), two_body=dirac)
    assert_allclose(levels(matrix), forms.HYDROGEN_ELECTRONIC, atol=2e-10)
    assert_allclose(levels(matrix)[0] + 1.0 / 1.4, -1.1372759046, atol=2e-10)


def test_boson_dimer() -> None:
    """Derived."""
    weights, sector = np.array([0.5, 0.3, 0.2]), bosons(2, 2)
    matrix = sector.hamiltonian(-np.eye(2)[::-1], density_density=4.0 * np.eye(2))
    energies, vectors = np.linalg.eigh(matrix)
    assert_allclose(energies, forms.boson_dimer_energies(4.0), atol=1e-13)
    assert_allclose(weights @ energies, 1.7514718626, atol=1e-10)
    gamma = sum(w * sector.density_matrix(c) for w, c in zip(weights, vectors.T, strict=True))
    coherence = forms.boson_dimer_coherence(4.0, weights)
    assert_allclose(gamma[0, 1], coherence)
    assert_allclose(coherence, 0.2121320344, atol=1e-10)
    functional = forms.boson_dimer_functional(4.0, weights, coherence)
    assert_allclose(functional, 2.1757359313, atol=1e-10)
    assert_allclose(functional, weights @ energies + 2.0 * coherence, atol=1e-13)


def test_functionals_of_two_sites() -> None:
    """arXiv:1506.02230, recalled and rederived; the last line derived."""
    for (a, b), value in {
        (0.5, 0.0): 0.2679491924,
        (0.8, 0.3): 1.3354691642,
        (0.3, 0.5): 2.0,
        (0.7, 0.7): 2.8585786438,
    }.items():
        assert_allclose(forms.hubbard_dimer_functional(4.0, a, b), value, atol=1e-10)
    assert_allclose(forms.two_site_functional(4.0, 0.4, 0.24), 0.16, atol=1e-13)
    assert_allclose(forms.two_site_functional(4.0, 0.5, 0.3), 0.2, atol=1e-13)
