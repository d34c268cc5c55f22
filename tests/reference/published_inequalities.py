"""Inequalities of the exclusion polytope for the first weights, as published.

Phys. Rev. Lett. 127, 023001 (2021); Ann. Henri Poincare 24, 2241 (2023),
arXiv:2105.06459; bosons arXiv:2204.12715; fixed spin Quantum 9, 1921 (2025).
Each is (coefficients, bound), coefficients . n <= bound with n decreasing (per spin);
exact for r <= 4 (spin-1/2: r <= 3) in the stable range, which the callers keep to.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[Any]
Inequality = tuple[Array, float]

# Counts for strictly decreasing weights in the stable range, r = 1, 2, 3, ...
# (arXiv:2105.06459 and arXiv:2204.12715).
FERMION_LINE_UPS = (1, 1, 2, 4, 10, 28, 90)
FERMION_INEQUALITIES = (1, 2, 3, 5, 8, 13)  # n_d >= 0 not counted
BOSON_LINE_UPS = (1, 1, 2, 4, 8, 17, 37)
BOSON_INEQUALITIES = (1, 2, 3, 5, 8, 13)  # n_d >= 0 counted
SPIN_HALF_LINE_UPS = (1, 2, 6)


def fermion_inequalities(modes: int, particles: int, weights: Array) -> list[Inequality]:
    """Spinless fermions, 1 <= N <= d - 1."""
    n, (w1, w2, w3, _) = particles, _first_four(weights)
    rows = [([1.0], 1.0), ([1.0] * n, n - 1 + w1)]
    if len(weights) >= 3:
        rows.append(([2.0] * (n - 1) + [1.0] * 2, 2 * n - 2 + w1 + w2))
    if len(weights) >= 4:
        rows.append(([2.0] * (n - 1) + [1.0] * 3, 2 * n - 2 + w1 + w2 + w3))
        rows.append(([2.0] * (n - 2) + [1.0] * 3, 2 * n - 3 + w1 + w2 + w3))
    return [(_padded(row, modes), bound) for row, bound in rows[: _rows(weights)]]


def boson_inequalities(modes: int, particles: int, weights: Array) -> list[Inequality]:
    """Bosons; the first is n_d >= 0."""
    n, (w1, w2, w3, _) = particles, _first_four(weights)
    from_third, from_fourth = weights[2:].sum(), weights[3:].sum()
    rows = [
        ([0.0] * (modes - 1) + [-1.0], 0.0),
        ([1.0], n - 1 + w1),
        ([2.0, 1.0], 2 * n - w2 - 2 * from_third),
        ([2.0, 1.0, 1.0], 2 * n - w2 - w3 - 2 * from_fourth),
        ([3.0, 2.0], 3 * n - w2 - 2 * w3 - 3 * from_fourth),
    ]
    return [(_padded(row, modes), bound) for row, bound in rows[: _rows(weights)]]


def spin_half_inequalities(
    orbitals: int, particles: tuple[int, int], weights: Array
) -> list[Inequality]:
    """Spin-resolved domain at fixed (up, down), coefficients of shape (2, d), r <= 3."""
    up, down = particles
    w1, w2, _, _ = _first_four(weights)
    rows: list[Inequality] = []
    for spin in range(2):
        for sign, place, bound in ((1.0, 0, 1.0), (-1.0, orbitals - 1, 0.0)):
            pauli = np.zeros((2, orbitals))
            pauli[spin, place] = sign
            rows.append((pauli, bound))
    rows.append((np.stack([_padded([1.0] * n, orbitals) for n in particles]), up + down - 1 + w1))
    if len(weights) >= 3:
        for s in range(2):
            t = 1 - s
            row = np.zeros((2, orbitals))
            row[s] = _padded([1.0] * particles[s], orbitals)
            row[t] = _padded([2.0] * (particles[t] - 1) + [1.0] * 2, orbitals)
            rows.append((row, particles[s] + 2 * particles[t] - 2 + w1 + w2))
    return rows


def slack(inequalities: list[Inequality], occupations: Array) -> float:
    """Smallest bound - coefficients . n over the list, n sorted here."""
    n = -np.sort(-np.asarray(occupations), axis=-1)
    return float(min(bound - np.sum(row * n) for row, bound in inequalities))


def _first_four(weights: Array) -> list[float]:
    return [float(w) for w in np.concatenate([weights, np.zeros(4)])[:4]]


def _rows(weights: Array) -> int:
    return {1: 1, 2: 2, 3: 3}.get(len(weights), 5)


def _padded(row: list[float], modes: int) -> Array:
    return np.array(row + [0.0] * (modes - len(row)))
