"""Published closed forms and root-finding solutions, each with its source.

"Recalled": the formula was not seen in print while this was written, only verified
numerically against the Fock-space reference.  The hopping amplitude is t = 1.
"""

from __future__ import annotations

from itertools import combinations, combinations_with_replacement, product
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.integrate import quad
from scipy.optimize import root
from scipy.special import j0, j1

Array = npt.NDArray[Any]

# Hydrogen molecule, minimal basis, 1.4 bohr, exponent scale 1.24: the worked example of
# *Modern Quantum Chemistry*; four-digit integrals recalled, longer digits recomputed.
# Molecular orbitals g and u, hartree, the triplet second.
HYDROGEN_ONE_BODY = (-1.2527971883, -0.4756028068)
HYDROGEN_ELECTRONIC = (-1.8515616189, -1.2460939158, -0.8835781454, -0.2331489714)


def open_chain(length: int) -> Array:
    """Hopping matrix of an open chain."""
    matrix: Array = -(np.eye(length, k=1) + np.eye(length, k=-1))
    return matrix


def ring(length: int, flux: float = 0.0) -> Array:
    """Hopping matrix of a ring (three sites or more), h[j+1, j] = -exp(i flux / L)."""
    forward = np.roll(np.eye(length), 1, axis=0)
    if flux == 0.0:
        return -(forward + forward.T)
    hopping = -np.exp(1j * flux / length) * forward
    matrix: Array = hopping + hopping.conj().T
    return matrix


def open_chain_levels(length: int) -> Array:
    """-2 cos(k pi / (L + 1)), increasing.  Textbook."""
    return np.sort(-2.0 * np.cos(np.arange(1, length + 1) * np.pi / (length + 1)))


def ring_levels(length: int, flux: float = 0.0) -> Array:
    """-2 cos((2 pi m - flux) / L), increasing.  Textbook."""
    return np.sort(-2.0 * np.cos((2.0 * np.pi * np.arange(length) - flux) / length))


def free_fermion_energies(levels: Array, particles: int) -> Array:
    """Sums of the levels over sets, increasing."""
    return np.sort([sum(chosen) for chosen in combinations(levels, particles)])


def free_boson_energies(levels: Array, particles: int) -> Array:
    """Sums of the levels over multisets, increasing."""
    return np.sort([sum(chosen) for chosen in combinations_with_replacement(levels, particles)])


def flux_ring_density_matrix(length: int, momentum: int) -> Array:
    """gamma_pq = <a+_q a_p> = exp(2 pi i m (p - q) / L) / L of one particle on a ring."""
    wave = np.exp(2j * np.pi * momentum * np.arange(length) / length) / np.sqrt(length)
    matrix: Array = np.outer(wave, wave.conj())
    return matrix


def hubbard_dimer_energies(repulsion: float) -> Array:
    """Two sites, one up and one down: U/2 - R, 0, U, U/2 + R.

    Textbook closed form, R = sqrt(U^2/4 + 4 t^2).  Without the triplet's M = +-1.
    """
    radius = np.sqrt(repulsion**2 / 4.0 + 4.0)
    return np.sort([repulsion / 2 - radius, 0.0, repulsion, repulsion / 2 + radius])


def hubbard_dimer_coherence(repulsion: float) -> float:
    """Spin-summed gamma_12 = 2 t / R of the ground state.  Textbook."""
    return float(2.0 / np.sqrt(repulsion**2 / 4.0 + 4.0))


def hubbard_four_site_ring_energy(repulsion: float) -> float:
    """Ground state of four electrons on four sites.

    Ann. Phys. (Leipzig) 11 (2002) 49; recalled.
    """
    scale = 16.0 + repulsion**2
    angle = np.arccos(4.0 * repulsion / (scale / 3.0) ** 1.5)
    return float(repulsion - 2.0 / np.sqrt(3.0) * np.sqrt(scale) * np.cos(angle / 3.0))


def lieb_wu_energy(length: int, electrons: int, down: int, repulsion: float) -> float:
    """Ground state of the Hubbard ring from the Lieb-Wu equations.

    Phys. Rev. Lett. 20, 1445 (1968); review arXiv:cond-mat/0207529.  Quantum numbers
    are spaced by one about zero, which needs `down` odd (charges half-odd or integer
    as their number asks) and `electrons - down` odd.
    """
    charge = np.arange(electrons) - (electrons - 1) / 2.0
    spin = np.arange(down) - (down - 1) / 2.0

    def residual(unknowns: Array) -> Array:
        k, rapidity = unknowns[:electrons], unknowns[electrons:]
        between = 2.0 * np.arctan(4.0 * (np.sin(k)[:, None] - rapidity[None, :]) / repulsion)
        spins = 2.0 * np.arctan(2.0 * (rapidity[:, None] - rapidity[None, :]) / repulsion)
        charges_zero = length * k - 2.0 * np.pi * charge + between.sum(axis=1)
        spins_zero = between.sum(axis=0) + 2.0 * np.pi * spin + spins.sum(axis=1)
        return np.concatenate([charges_zero, spins_zero])

    start = np.concatenate([2.0 * np.pi * charge / length, 0.5 * repulsion * spin])
    solution = _solve(residual, start)
    return float(-2.0 * np.cos(solution[:electrons]).sum())


def hubbard_chain_energy_per_site(repulsion: float) -> float:
    """Half-filled infinite chain, -4 int J0 J1 / (x (1 + exp(x U / 2))) dx.

    Phys. Rev. Lett. 20, 1445 (1968).
    """

    def integrand(x: float) -> float:
        return float(j0(x) * j1(x) / (x * (1.0 + np.exp(x * repulsion / 2.0))))

    upper = 80.0 / repulsion
    value, _ = quad(integrand, 1e-300, upper, epsabs=1e-14, epsrel=1e-13, limit=500)
    return -4.0 * float(value)


def richardson_pair_energies(levels: Array, pairs: int, strength: float) -> Array:
    """Pair energies of the ground state of sum e_j n_js - g sum b+_j b_k.

    1/g - sum_j 1/(2 e_j - E_a) + sum_b 2/(E_b - E_a) = 0, real solutions only.
    Review arXiv:nucl-th/0405011; recalled.
    """

    def residual(energies: Array) -> Array:
        others = energies[None, :] - energies[:, None] + np.diag(np.full(pairs, np.inf))
        one_pair = (1.0 / (2.0 * levels[None, :] - energies[:, None])).sum(axis=1)
        equations: Array = 1.0 / strength - one_pair + (2.0 / others).sum(axis=1)
        return equations

    return _solve(residual, 2.0 * levels[:pairs] - strength)


def pairing_two_body(levels: int, strength: float) -> Array:
    """v_jjkk = -g in Dirac order, which is -g sum b+_j b_k for spin-1/2."""
    dirac = np.zeros((levels,) * 4)
    j = np.arange(levels)
    dirac[j[:, None], j[:, None], j[None, :], j[None, :]] = -strength
    return dirac


def hydrogen_mulliken() -> Array:
    """(pq|rs) of the hydrogen molecule: (gg|gg), (gg|uu), (uu|uu), (gu|gu)."""
    integrals = np.zeros((2,) * 4)
    integrals[0, 0, 0, 0], integrals[1, 1, 1, 1] = 0.6745943874, 0.6974950125
    integrals[0, 0, 1, 1] = integrals[1, 1, 0, 0] = 0.6635639645
    for bra, ket in product(((0, 1), (1, 0)), repeat=2):
        integrals[bra + ket] = 0.1812578852
    return integrals


def interacting_spinless_ring_energy() -> float:
    """L = 6, N = 3, V = 2: 1 - sqrt 13, from the isotropic Heisenberg ring.  Textbook."""
    return float(1.0 - np.sqrt(13.0))


def hard_core_chain_energy(repulsion: float) -> float:
    """Two bosons on an open chain of four sites, -sqrt 5 - 2/U up to O(1/U^2).

    The limit by the Jordan-Wigner transformation; textbook.
    """
    return float(-np.sqrt(5.0) - 2.0 / repulsion)


def boson_dimer_energies(repulsion: float) -> Array:
    """Two bosons on two sites, v_iiii = U: U/2 - R, U, U/2 + R.  Derived."""
    radius = np.sqrt(repulsion**2 / 4.0 + 4.0)
    return np.array([repulsion / 2 - radius, repulsion, repulsion / 2 + radius])


def boson_dimer_coherence(repulsion: float, weights: Array) -> float:
    """gamma_12 of the ensemble of three states.  Derived."""
    radius = np.sqrt(repulsion**2 / 4.0 + 4.0)
    return float((weights[0] - weights[2]) * 2.0 / radius)


def boson_dimer_functional(repulsion: float, weights: Array, coherence: float) -> float:
    """F_w(A, B = 0) = U/2 (1 + w2) - U/2 sqrt((w1 - w3)^2 - A^2).  Derived."""
    root_term = np.sqrt((weights[0] - weights[2]) ** 2 - coherence**2)
    return float(0.5 * repulsion * (1.0 + weights[1] - root_term))


def hubbard_dimer_functional(repulsion: float, coherence: float, imbalance: float) -> float:
    """Convex envelope of the dimer's pure functional of (A, B).

    arXiv:1506.02230 for the pure functional; recalled and rederived.  U |B| where
    A^2 <= 2 |B| (1 - |B|).
    """
    a2, b = coherence**2, abs(imbalance)
    if a2 <= 2.0 * b * (1.0 - b):
        return repulsion * b
    norm = a2 + b**2
    bracket = a2 * (1.0 - np.sqrt(max(0.0, 1.0 - norm))) + 2.0 * b**2
    return float(repulsion * bracket / (2.0 * norm))


def two_site_functional(repulsion: float, first_weight: float, coherence: float) -> float:
    """All spin sectors, B = 0, r <= 4: U/2 (w1 - sqrt(w1^2 - A^2)).  Derived."""
    return float(0.5 * repulsion * (first_weight - np.sqrt(first_weight**2 - coherence**2)))


def _solve(residual: Any, start: Array) -> Array:
    solution = root(residual, start, tol=1e-14)
    if np.abs(residual(solution.x)).max() > 1e-10:
        raise ArithmeticError(f"no root found: {solution.message}")
    result: Array = solution.x
    return result
