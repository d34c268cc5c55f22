r"""The dual on sectors too large for dense matrices: a bundle of states.

States found at several potentials span a small space. On it the dual is an upper bound of the
true one (the minimum is over fewer ensembles), exact at the potentials visited, and is maximised
densely, degenerate levels included. A full solve at the maximiser gives the lower end and new
states; the ensemble of the small problem, which reproduces gamma, gives the upper end. (Helmberg
and Rendl, SIAM J. Optim. 10, 673 (2000), for spectral bundles.)
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from fockhull import _core
from fockhull.ensemble import Ensemble
from fockhull.errors import ConvergenceError
from fockhull.functionals._evaluation import Evaluation
from fockhull.functionals._multiplets import PrimalDualPoint, groupings, polish
from fockhull.functionals._problem import Problem
from fockhull.functionals._smoothed import Block, SmoothedPoint, SpectralModel, maximise

__all__ = ["Bundle", "search"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

_DEPENDENT = 1e-9
_MOST_STATES = 400
_MOST_NUMBERS = 3e7
_MOST_SOLVES = 150
_STARTS = (0.3, 1.0, 3.0)
_SERIOUS = 0.1
_FARTHEST = 3.0
_RETREAT = 30.0
_LARGEST_GROUP = 20


class Bundle:
    """Orthonormal states with the matrices of W and of the potentials between them."""

    def __init__(self, problem: Problem) -> None:
        self._problem = problem
        is_complex = np.iscomplexobj(problem.space.basis) or problem.bare.dtype.kind == "c"
        self._dtype = np.dtype(complex if is_complex else float)
        n = problem.space.size
        self.rows: ScalarArray = np.zeros((0, problem.sector.dimension), self._dtype)
        self._interaction: ScalarArray = np.zeros((0, 0), self._dtype)
        self._operators: ScalarArray = np.zeros((n, 0, 0), self._dtype)

    def add(self, states: Ensemble) -> None:
        """Add what states have outside the span so far (all levels found, not only r)."""
        fresh = states._levels.rows.astype(self._dtype)
        for _ in range(2):
            fresh = fresh - (fresh @ self.rows.conj().T) @ self.rows
        _, sizes, directions = np.linalg.svd(fresh, full_matrices=False)
        fresh = directions[sizes > _DEPENDENT]
        fresh = fresh - (fresh @ self.rows.conj().T) @ self.rows
        if len(fresh):
            # orthonormal among themselves
            fresh = np.linalg.qr(fresh.T)[0].T
            self._extend(np.ascontiguousarray(fresh))

    def _extend(self, fresh: ScalarArray) -> None:
        problem, old = self._problem, len(self.rows)
        self.rows = np.ascontiguousarray(np.concatenate([self.rows, fresh]))
        applied = problem.bare.apply(fresh.T)
        self._interaction = _bordered(
            self._interaction, np.asarray(self.rows.conj() @ applied), old
        )
        gammas = _core.transition_density_matrices(problem.sector._core, self.rows, fresh)
        if problem.spin_summed:
            gammas = gammas.sum(axis=2, keepdims=True)
        # <a|B|b> = sum_pq B_pq <a|a+_p a_q|b>
        columns: ScalarArray = np.einsum(
            "ispq,absqp->iab", problem.space.basis, gammas, optimize=True
        )
        self._operators = _bordered(self._operators, columns, old)

    def block(self) -> Block:
        """Return the bundle as a space of states that takes all weights."""
        weights = np.zeros(len(self.rows))
        weights[: len(self._problem.weights)] = self._problem.weights
        return Block(self._interaction, self._operators, weights, self.rows)


def _bordered(matrix: ScalarArray, columns: ScalarArray, old: int) -> ScalarArray:
    """Add columns (and the adjoint rows) to Hermitian matrices of shape (..., old, old)."""
    size = columns.shape[-2]
    result = np.zeros((*matrix.shape[:-2], size, size), matrix.dtype)
    result[..., :old, :old] = matrix
    result[..., :, old:] = columns
    result[..., old:, :] = columns.conj().swapaxes(-1, -2)
    corner = result[..., old:, old:]
    result[..., old:, old:] = 0.5 * (corner + corner.conj().swapaxes(-1, -2))
    return result


def search(evaluation: Evaluation, start: RealArray | None) -> None:
    """Narrow the interval by a bundle of states until it is as asked, or no longer narrows."""
    problem = evaluation.problem
    bundle = Bundle(problem)
    centre = _first_states(evaluation, bundle, start)
    stiffness = 0.1 * problem.scale / (1.0 + float(centre @ centre))
    reached = evaluation.best.lower
    spread = 0.1 * problem.scale
    most = min(_MOST_STATES, int(np.sqrt(_MOST_NUMBERS / problem.space.size)))
    for _ in range(_MOST_SOLVES):
        model = SpectralModel((bundle.block(),), evaluation.target, centre, stiffness)
        temperature = max(1e-2 * min(spread, evaluation.best.gap), 1e-10 * problem.scale)
        point = maximise(model, centre, temperature, decrement=0.01 * temperature)
        candidate = _polished(evaluation, model, point)
        coordinates = point.coordinates
        if candidate is not None:
            evaluation.upper_from(candidate)
            if np.linalg.norm(candidate.coordinates) < _FARTHEST * np.linalg.norm(coordinates):
                coordinates = candidate.coordinates
        predicted = model.at(coordinates, temperature).dual
        try:
            states = evaluation.lower_at(coordinates)
        except ConvergenceError:
            # far out the levels are too hard to find
            stiffness *= _RETREAT
            continue
        bundle.add(states)
        terms = problem.space.potential(coordinates) * evaluation.gamma.swapaxes(1, 2)
        found = states.energy - float(terms.real.sum())
        spread = max(predicted - reached, 0.0)
        if found >= reached + _SERIOUS * spread:
            centre, reached = coordinates, found
            stiffness *= 0.2
        elif predicted - found > 2.0 * spread:
            stiffness *= 3.0
        if evaluation.best.converged or len(bundle.rows) > most:
            return


def _first_states(evaluation: Evaluation, bundle: Bundle, start: RealArray | None) -> RealArray:
    """States of a few potentials that favour the natural orbitals in the order of occupation."""
    problem = evaluation.problem
    if start is not None:
        bundle.add(evaluation.lower_at(start))
        return start
    particles = max(problem.sector.total_particles, 1)
    best, centre = -np.inf, np.zeros(problem.space.size)
    for strength in _STARTS:
        trial = -strength * problem.scale / particles * evaluation.target
        bundle.add(evaluation.lower_at(trial))
        if evaluation.best.lower > best:
            best, centre = evaluation.best.lower, trial
    return centre


def _polished(
    evaluation: Evaluation, model: SpectralModel, point: SmoothedPoint
) -> PrimalDualPoint | None:
    """Return the candidate of the free model that promises to narrow the interval, if one does."""
    free = SpectralModel(model.blocks, model.target)
    best, promise = None, evaluation.best.gap
    for guess in groupings(point):
        if max((b - a for groups in guess for a, b in groups), default=0) > _LARGEST_GROUP:
            continue
        accuracy = 1e-14 * evaluation.problem.scale
        trial = polish(free, point, guess, accuracy).made_admissible()
        if np.linalg.norm(trial.mismatch) < 1e-8 and evaluation.promise(trial) < promise:
            best, promise = trial, evaluation.promise(trial)
    return best
