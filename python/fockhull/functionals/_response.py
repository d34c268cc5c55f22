"""How the ensemble density matrix answers to the potential, to first order, without matrices.

The change of each state solves (E_j - H) |dj> = Q dh |j>, Q the projector on the complement of
the levels found, where H - E_j is positive: conjugate gradients need products with H only. Among
the levels found the sum over states is explicit. (Sternheimer, Phys. Rev. 96, 951 (1954).)
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from fockhull import _core
from fockhull.ensemble import Ensemble
from fockhull.errors import ComputationError
from fockhull.functionals._problem import Problem
from fockhull.hamiltonian import Hamiltonian

__all__ = ["curvature_product", "density_response"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

_TOLERANCE = 1e-12
_DEGENERATE = 1e-8
_WORTHWHILE = 1e-13


def density_response(states: Ensemble, change: ScalarArray) -> ScalarArray:
    """Return the first-order change of gamma, (spins, d, d), for a change of h.

    Raises
    ------
    ComputationError
        Where gamma is not differentiable (unequal weights on degenerate levels), or if the
        conjugate gradients do not converge.
    """
    hamiltonian, weights = states.hamiltonian, states.weights
    assert weights is not None
    if states.cut_multiplets:
        raise ComputationError(
            "unequal weights fall on degenerate levels: the density matrix has no first-order "
            "response there (the functional has a ridge)"
        )
    perturbation = Hamiltonian(change, sector=hamiltonian.sector)
    found = states._levels.rows.T
    energies = states._levels.energies
    r = len(weights)
    pushed = perturbation.apply(found[:, :r])
    inside = found.conj().T @ pushed
    outside = pushed - found @ inside
    differences = energies[:r] - energies[:, np.newaxis]
    close = np.abs(differences) < _DEGENERATE * max(1.0, float(np.abs(energies).max()))
    factors = np.where(close, 0.0, inside / np.where(close, 1.0, differences))
    moved = found @ factors - _solved_outside(hamiltonian, found, energies[:r], outside)
    total = np.zeros(1)
    for j in range(r):
        bra, ket = (np.ascontiguousarray(x[:, j : j + 1].T) for x in (found, moved))
        bra = bra.astype(np.result_type(bra, ket))
        gamma = _core.transition_density_matrices(hamiltonian.sector._core, bra, ket)[0, 0]
        total = total + weights[j] * (gamma + gamma.conj().swapaxes(-1, -2))
    return total


def _solved_outside(
    hamiltonian: Hamiltonian, found: ScalarArray, shifts: RealArray, right: ScalarArray
) -> ScalarArray:
    """Solve (H - E_j) y_j = right_j in the complement of `found`, all columns together."""

    def complement(x: ScalarArray) -> ScalarArray:
        return np.asarray(x - found @ (found.conj().T @ x))

    def dot(x: ScalarArray, y: ScalarArray) -> RealArray:
        return np.asarray(np.einsum("ij,ij->j", x.conj(), y).real)

    solution = np.zeros_like(right)
    residual = complement(right)
    direction = residual.copy()
    square = dot(residual, residual)
    goal = _TOLERANCE**2 * max(float(square.max(initial=0.0)), 1e-300)
    for _ in range(10 * min(hamiltonian.dimension, 1000) + 10):
        if (square <= goal).all():
            return solution
        applied = complement(hamiltonian.apply(direction) - direction * shifts)
        active = square > goal
        curvature = np.where(active, dot(direction, applied), 1.0)
        length = np.where(active, square / curvature, 0.0)
        solution = np.asarray(solution + direction * length)
        residual = np.asarray(residual - applied * length)
        following = dot(residual, residual)
        ratio = np.where(active, following / np.where(active, square, 1.0), 0.0)
        direction = np.asarray(residual + direction * ratio)
        square = np.where(active, following, square)
    raise ComputationError(
        f"the response did not converge: residual {float(np.sqrt(square.max())):.1e}; the levels "
        "may be nearly degenerate"
    )


def curvature_product(problem: Problem, states: Ensemble, change: RealArray) -> RealArray:
    """Solve response x dh = change for coordinates of gamma, and return those of -dh.

    Directions that gamma does not answer in are left out.
    """

    def stiffness(x: RealArray) -> RealArray:
        answer = density_response(states, problem.potential(x))
        if problem.spin_summed:
            answer = answer.sum(axis=0, keepdims=True)
        return -problem.space.coordinates(answer)

    solution = np.zeros_like(change)
    residual = change.copy()
    direction = residual.copy()
    square = float(residual @ residual)
    goal = (_WORTHWHILE * float(np.linalg.norm(change))) ** 2
    for _ in range(2 * problem.space.size + 10):
        if square <= goal:
            break
        applied = stiffness(direction)
        curvature = float(direction @ applied)
        if curvature <= _WORTHWHILE * float(direction @ direction):
            break
        solution = solution + (square / curvature) * direction
        residual = residual - (square / curvature) * applied
        following = float(residual @ residual)
        direction = residual + (following / square) * direction
        square = following
    return solution
