"""The three systems of the demo: a hydrogen chain, a ring with flux, bosons on a chain."""

from collections.abc import Iterable

import numpy as np

import fockhull as fh
from hydrogen_integrals import hydrogen_integrals
from parameter_sweep import Sweep, sweep

CHAIN_WEIGHTS = [0.5, 0.3, 0.2]
RING_WEIGHTS = [0.7, 0.3]
BOSON_WEIGHTS = [0.7, 0.3]
NEIGHBOUR_REPULSION = 2.0
CHAIN_LENGTH = 1.8
"""Bond length near the minimum of the energy, in bohr."""


def hydrogen_hamiltonian(atoms: int, bond_length: float) -> fh.Hamiltonian:
    """Hydrogen atoms on a line, as many electrons, half of them up; hartree and bohr."""
    one_body, two_body, repulsion = hydrogen_integrals(bond_length * np.arange(atoms))
    sector = fh.SpinHalfFermions(atoms, particles=(atoms // 2, atoms // 2))
    interaction = fh.Interaction(sector, two_body=two_body, order="mulliken")
    return fh.Hamiltonian(one_body, interaction, constant=repulsion)


def hydrogen_sweep(atoms: int, bond_lengths: Iterable[float]) -> Sweep:
    return sweep(
        "bond_length",
        "bohr",
        bond_lengths,
        lambda length: hydrogen_hamiltonian(atoms, length),
        CHAIN_WEIGHTS,
    )


def ring_hamiltonian(sites: int, particles: int, flux: float) -> fh.Hamiltonian:
    """Spinless fermions that repel their neighbours, on a ring threaded by a flux; t = 1."""
    hopping = fh.lattices.ring(sites, flux=flux)
    bonds = fh.lattices.bonds_of(hopping)
    repulsion = fh.couplings.nearest_neighbour(sites, bonds, NEIGHBOUR_REPULSION)
    sector = fh.Fermions(sites, particles)
    return fh.Hamiltonian(hopping, fh.Interaction(sector, density_density=repulsion))


def ring_sweep(sites: int, particles: int, fluxes: Iterable[float]) -> Sweep:
    return sweep(
        "flux",
        "radian",
        fluxes,
        lambda flux: ring_hamiltonian(sites, particles, flux),
        RING_WEIGHTS,
    )


def ring_current(ensemble: fh.Ensemble) -> float:
    """Particle current through the ring, -dE_w/dflux, from the density matrix alone.

    The hopping along the ring is h[j+1, j] ~ exp(i flux / sites) and the energy answers a
    change of h by Tr(dh gamma) (Hellmann-Feynman).
    """
    h = ensemble.hamiltonian.one_body
    sites = len(h)
    forward = np.zeros_like(h)
    here = np.arange(sites)
    ahead = (here + 1) % sites
    forward[ahead, here] = h[ahead, here]
    slope = 1j / sites * (forward - forward.conj().T)
    return -float(np.trace(slope @ ensemble.density_matrix).real)


def ring_slope(ring: Sweep, flux: float, step: float = 1e-3) -> tuple[float, float]:
    """Current at a flux: from the density matrix, and from a difference of ensemble energies."""
    sector, weights = ring.polytope.sector, ring.polytope.weights
    before, here, after = (
        fh.solve(ring_hamiltonian(sector.modes, sector.particles, flux + shift), weights)
        for shift in (-step, 0.0, step)
    )
    return ring_current(here), -(after.energy - before.energy) / (2 * step)


def boson_hamiltonian(sites: int, repulsion: float) -> fh.Hamiltonian:
    """One boson a site on an open chain, repelling each other on a site; t = 1."""
    sector = fh.Bosons(sites, particles=sites)
    interaction = fh.Interaction(sector, density_density=fh.couplings.on_site(sites, repulsion))
    return fh.Hamiltonian(fh.lattices.chain(sites), interaction)


def boson_sweep(sites: int, repulsions: Iterable[float]) -> Sweep:
    return sweep(
        "repulsion",
        "t",
        repulsions,
        lambda repulsion: boson_hamiltonian(sites, repulsion),
        BOSON_WEIGHTS,
    )
