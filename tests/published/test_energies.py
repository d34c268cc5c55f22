"""Many-particle energies and density matrices against published values.

Each check stands beside its source.  "Recalled": the formula was not seen in print
while this was written, only verified numerically.  The hopping amplitude is t = 1.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from numpy.testing import assert_allclose

import fockhull as fh
from reference import closed_forms as forms

Array = npt.NDArray[Any]
ENERGY: dict[str, Any] = {"rtol": 0.0, "atol": 1e-9}
DENSITY: dict[str, Any] = {"rtol": 0.0, "atol": 1e-7}


def hubbard(hopping: Array, particles: tuple[int, int], repulsion: float) -> fh.Hamiltonian:
    sector = fh.SpinHalfFermions(len(hopping), particles=particles)
    onsite = fh.Interaction(sector, density_density=repulsion * np.eye(len(hopping)))
    return fh.Hamiltonian(hopping, onsite)


def ground_energy(hamiltonian: fh.Hamiltonian) -> float:
    return float(fh.solve(hamiltonian, [1.0]).energies[0])


def test_two_site_hubbard_model() -> None:
    """Textbook closed form: U/2 -+ sqrt(U^2/4 + 4 t^2), U, and the triplet at 0."""
    hopping = forms.open_chain(2)
    e = fh.solve(hubbard(hopping, (1, 1), 4.0), levels=4)
    assert_allclose(e.energies, [-0.8284271247, 0.0, 4.0, 4.8284271247], **ENERGY)
    assert_allclose(e.energies, forms.hubbard_dimer_energies(4.0), **ENERGY)
    assert_allclose(e.spin_squared, [0.0, 2.0, 0.0, 0.0], **DENSITY)
    for particles in ((2, 0), (0, 2)):
        assert_allclose(ground_energy(hubbard(hopping, particles, 4.0)), 0.0, **ENERGY)
    gamma = e.state_density_matrices[0]
    assert_allclose(gamma.sum(axis=0)[0, 1], 0.7071067812, **DENSITY)
    ground = fh.solve(hubbard(hopping, (1, 1), 4.0), [1.0])
    assert_allclose(ground.occupations, [[0.8535533906, 0.1464466094]] * 2, **DENSITY)


@pytest.mark.parametrize("repulsion", [1.0, 4.0, 10.0])
def test_four_site_hubbard_ring(repulsion: float) -> None:
    """Ann. Phys. (Leipzig) 11 (2002) 49; recalled."""
    energy = ground_energy(hubbard(forms.ring(4), (2, 2), repulsion))
    assert_allclose(energy, forms.hubbard_four_site_ring_energy(repulsion), **ENERGY)


def test_four_site_hubbard_ring_at_four() -> None:
    """Ann. Phys. (Leipzig) 11 (2002) 49; recalled.  Ground state and lowest triplet."""
    assert_allclose(ground_energy(hubbard(forms.ring(4), (2, 2), 4.0)), -2.1027484835, **ENERGY)
    assert_allclose(ground_energy(hubbard(forms.ring(4), (3, 1), 4.0)), -1.8064238518, **ENERGY)


@pytest.mark.parametrize("repulsion", [2.0, 4.0, 8.0])
def test_lieb_wu_equations(repulsion: float) -> None:
    """Phys. Rev. Lett. 20, 1445 (1968); review arXiv:cond-mat/0207529.  L = N = 6."""
    energy = ground_energy(hubbard(forms.ring(6), (3, 3), repulsion))
    assert_allclose(energy, forms.lieb_wu_energy(6, 6, 3, repulsion), **ENERGY)
    if repulsion == 4.0:
        assert_allclose(energy, -3.6687061789, **ENERGY)


FREE = {
    "open chain": (forms.open_chain(5), forms.open_chain_levels(5)),
    "ring": (forms.ring(5), forms.ring_levels(5)),
    "ring with flux": (forms.ring(5, 1.3), forms.ring_levels(5, 1.3)),
}


@pytest.mark.parametrize("name", FREE)
@pytest.mark.parametrize("particles", [1, 2, 3])
def test_free_particles(name: str, particles: int) -> None:
    """Textbook: sums of -2 cos(k pi / (L + 1)) or -2 cos((2 pi m - phi) / L)."""
    hopping, levels = FREE[name]
    for sector, expected in (
        (fh.Fermions(5, particles), forms.free_fermion_energies(levels, particles)),
        (fh.Bosons(5, particles), forms.free_boson_energies(levels, particles)),
    ):
        e = fh.solve(fh.Hamiltonian(hopping, sector=sector), levels=sector.dimension)
        assert_allclose(e.energies, expected, **ENERGY)


def test_orientation_of_the_density_matrix() -> None:
    """Textbook ring with flux 1.8 pi: gamma_pq = <a+_q a_p>, h and gamma commute."""
    hopping = forms.ring(5, 1.8 * np.pi)
    e = fh.solve(fh.Hamiltonian(hopping, sector=fh.Fermions(5, 1)), [1.0])
    gamma = e.density_matrix
    assert_allclose(e.energies[0], -1.9842294026, **ENERGY)
    assert_allclose(gamma[1, 0], 0.0618033989 + 0.1902113033j, **DENSITY)
    assert_allclose(gamma, forms.flux_ring_density_matrix(5, 1), **DENSITY)
    assert_allclose(hopping @ gamma, gamma @ hopping, **DENSITY)
    assert_allclose(np.trace(hopping @ gamma), e.energy, **ENERGY)


@pytest.mark.parametrize(
    ("sector", "exchange_sign"), [(fh.Fermions(5, 3), -1.0), (fh.Bosons(3, 3), 1.0)], ids=repr
)
def test_normalisation_of_the_interaction(
    sector: fh.Fermions | fh.Bosons, exchange_sign: float
) -> None:
    """Textbook: v_pqrs = g d_pr d_qs shifts all levels by g N(N-1)/2, d_ps d_qr by -+."""
    g, hopping = 0.7, forms.open_chain(sector.modes)
    one, dimension = np.eye(sector.modes), sector.dimension
    shift = g * sector.particles * (sector.particles - 1) / 2.0
    free = fh.solve(fh.Hamiltonian(hopping, sector=sector), levels=dimension).energies
    for pattern, sign in (("pr,qs->pqrs", 1.0), ("ps,qr->pqrs", exchange_sign)):
        v = fh.Interaction(sector, two_body=g * np.einsum(pattern, one, one), order="dirac")
        shifted = fh.solve(fh.Hamiltonian(hopping, v), levels=dimension).energies
        assert_allclose(shifted, free + sign * shift, **ENERGY)


def test_exchange_measures_the_total_spin() -> None:
    """Textbook: v_pqrs = g d_ps d_qr is -g [N(N-4)/4 + S(S+1)] for spin-1/2 (Dirac)."""
    g, particles, d = 0.05, (2, 1), 4
    sector = fh.SpinHalfFermions(d, particles=particles)
    one, one_body = np.eye(d), np.diag([0.0, 0.3, 1.1, 2.3]) + 0.4 * forms.open_chain(d)
    onsite = fh.Interaction(sector, density_density=1.5 * np.diag([1.0, 0.7, 1.2, 0.9]))
    exchange = fh.Interaction(
        sector, two_body=g * np.einsum("ps,qr->pqrs", one, one), order="dirac"
    )
    plain = fh.solve(fh.Hamiltonian(one_body, onsite), levels=sector.dimension)
    shifted = fh.solve(fh.Hamiltonian(one_body, onsite + exchange), levels=sector.dimension)
    n = sum(particles)
    expected = plain.energies - g * (n * (n - 4) / 4.0 + plain.spin_squared)
    assert set(np.round(plain.spin_squared, 6)) == {0.75, 3.75}
    assert_allclose(shifted.energies, np.sort(expected), **ENERGY)


def test_spinless_ring_with_repulsion() -> None:
    """Equivalent to the isotropic Heisenberg ring; textbook."""
    for length, particles, flux, energy in (
        (6, 3, 0.0, forms.interacting_spinless_ring_energy()),
        (4, 2, np.pi, -2.0),
    ):
        sector = fh.Fermions(length, particles)
        nearest = fh.Interaction(sector, density_density=2.0 * np.abs(forms.ring(length)))
        hamiltonian = fh.Hamiltonian(forms.ring(length, flux), nearest)
        assert_allclose(ground_energy(hamiltonian), energy, **ENERGY)


def test_hard_core_limit() -> None:
    """Two bosons on an open chain of four sites; Jordan-Wigner, textbook."""
    sector = fh.Bosons(4, 2)
    onsite = fh.Interaction(sector, density_density=1e4 * np.eye(4))
    energy = ground_energy(fh.Hamiltonian(forms.open_chain(4), onsite))
    assert_allclose(energy, -2.2362679668, **ENERGY)
    assert_allclose(energy, forms.hard_core_chain_energy(1e4), rtol=0.0, atol=1e-7)


@pytest.mark.parametrize("strength", [0.2, 0.4])
def test_pairing_model(strength: float) -> None:
    """Richardson's equations, review arXiv:nucl-th/0405011; recalled."""
    levels, sector = np.arange(1.0, 5.0), fh.SpinHalfFermions(4, particles=(2, 2))
    pairing = fh.Interaction(sector, two_body=forms.pairing_two_body(4, strength), order="dirac")
    energy = ground_energy(fh.Hamiltonian(np.diag(levels), pairing))
    assert_allclose(energy, forms.richardson_pair_energies(levels, 2, strength).sum(), **ENERGY)
    if strength == 0.4:
        assert_allclose(energy, 4.9735522650, **ENERGY)


def test_hydrogen_molecule_in_a_minimal_basis() -> None:
    """*Modern Quantum Chemistry*, worked example at 1.4 bohr, exponent scale 1.24.

    The book's four-digit integrals recalled, longer digits recomputed; energies in hartree.
    """
    sector = fh.SpinHalfFermions(2, particles=(1, 1))
    interaction = fh.Interaction(sector, two_body=forms.hydrogen_mulliken(), order="mulliken")
    one_body = np.diag(forms.HYDROGEN_ONE_BODY)
    electronic = fh.solve(fh.Hamiltonian(one_body, interaction), levels=4)
    assert_allclose(electronic.energies, forms.HYDROGEN_ELECTRONIC, **ENERGY)
    assert_allclose(electronic.spin_squared, [0.0, 2.0, 0.0, 0.0], **DENSITY)
    total = fh.Hamiltonian(one_body, interaction, constant=1.0 / 1.4)
    assert_allclose(ground_energy(total), -1.1372759046, **ENERGY)


def test_boson_dimer_ensemble() -> None:
    """Derived: E_w = U/2 (w1 + 2 w2 + w3) - (w1 - w3) R."""
    weights, sector = np.array([0.5, 0.3, 0.2]), fh.Bosons(2, 2)
    onsite = fh.Interaction(sector, density_density=4.0 * np.eye(2))
    e = fh.solve(fh.Hamiltonian(forms.open_chain(2), onsite), weights)
    assert_allclose(e.energies, forms.boson_dimer_energies(4.0), **ENERGY)
    assert_allclose(e.energy, 1.7514718626, **ENERGY)
    assert_allclose(e.density_matrix[0, 1], 0.2121320344, **DENSITY)
    assert_allclose(e.occupations, [1.2121320344, 0.7878679656], **DENSITY)
    assert_allclose(e.interaction_energy, 2.1757359313, **DENSITY)
