"""Newton's method with the degenerate levels of the maximiser kept degenerate.

At a maximiser where unequal weights meet a multiplet, the ensemble inside the multiplet is a
free Hermitian matrix M (its spectrum majorised by the weights there), fixed by gamma; the
potential is fixed by the multiplet staying degenerate. Both sets of equations together converge
quadratically, without smoothing. (Overton, SIAM J. Optim. 2, 88 (1992); Overton and Womersley,
SIAM J. Matrix Anal. Appl. 16, 697 (1995), for eigenvalue optimisation of this kind.)
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from fockhull.functionals._smoothed import Block, SmoothedPoint, SpectralModel

__all__ = ["BlockEnsemble", "PrimalDualPoint", "groupings", "moved", "polish", "refined"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]
Groups = tuple[tuple[int, int], ...]

_MAX_STEPS = 30
_SHORTEST = 0.05
_RANKS = (1e-11, 1e-13, 1e-15)


@dataclass(frozen=True, eq=False)
class BlockEnsemble:
    """An ensemble in the lowest levels of a block, block-diagonal in groups of levels."""

    block: Block
    groups: Groups
    """Ranges of levels that count as degenerate, without gaps, at least to the last weight."""
    energies: RealArray
    states: ScalarArray
    matrix: ScalarArray
    """Density operator X in the levels of `groups`, shape (p, p)."""

    @property
    def _count(self) -> int:
        return len(self.matrix)

    @cached_property
    def rows(self) -> ScalarArray:
        """<b|B_i|a>, b in the groups, shape (n, p, m)."""
        n, m = len(self.block.operators), len(self.energies)
        occupied = self.states[:, : self._count]
        half = self.block.operators.reshape(n * m, m) @ occupied
        rotated = half.reshape(n, m, -1).conj().swapaxes(1, 2) @ self.states
        return np.asarray(rotated)

    @cached_property
    def coordinates(self) -> RealArray:
        """Tr(X B_i)."""
        inside = self.rows[:, :, : self._count]
        return np.asarray(np.einsum("bc,icb->i", self.matrix, inside).real)

    @cached_property
    def cut_groups(self) -> Groups:
        """The groups whose weights differ."""
        w = self.block.weights
        return tuple((a, b) for a, b in self.groups if w[a] != w[b - 1])

    @cached_property
    def response(self) -> RealArray:
        """Change of the coordinates with h when the groups rotate against all other levels."""
        p, m = self._count, len(self.energies)
        group = np.arange(m) + p
        level = self.energies.copy()
        for number, (a, b) in enumerate(self.groups):
            group[a:b] = number
            level[a:b] = level[a:b].mean()
        apart = group[:p, np.newaxis] != group
        differences = np.where(apart, level[:p, np.newaxis] - level, 1.0)
        inverse = np.where(apart, 1.0 / np.where(differences == 0.0, np.inf, differences), 0.0)
        left = (np.einsum("bc,ica->iba", self.matrix, self.rows)).reshape(len(self.rows), -1)
        right = (self.rows * inverse).reshape(len(self.rows), -1)
        response = 2.0 * (left @ right.conj().T).real
        return np.asarray(0.5 * (response + response.T))

    @cached_property
    def constraints(self) -> tuple[RealArray, RealArray, list[ScalarArray]]:
        """How the traceless parts of H inside the cut groups depend on h, and what they are.

        Returns the matrix (constraints, n), the values (constraints), and the matrices (p, p)
        that the constraints are the coefficients of.
        """
        p = self._count
        units = []
        for a, b in self.cut_groups:
            for unit in _traceless_units(b - a, np.iscomplexobj(self.rows)):
                padded = np.zeros((p, p), unit.dtype)
                padded[a:b, a:b] = unit
                units.append(padded)
        if not units:
            return np.zeros((0, len(self.rows))), np.zeros(0), units
        stack = np.array(units)
        inside = self.rows[:, :, :p]
        matrix = np.einsum("tbc,icb->ti", stack, inside, optimize=True).real
        values = np.einsum("tbb,b->t", stack, self.energies[:p]).real
        return matrix, values, units

    def carried_to(self, energies: RealArray, states: ScalarArray) -> BlockEnsemble:
        """Express the ensemble in the levels of a Hamiltonian nearby."""
        matrix = self.matrix.copy()
        for a, b in self.groups:
            if b - a > 1:
                overlap = self.states[:, a:b].conj().T @ states[:, a:b]
                left, _, right = np.linalg.svd(overlap)
                rotation = left @ right
                matrix[a:b, a:b] = rotation.conj().T @ self.matrix[a:b, a:b] @ rotation
        return BlockEnsemble(self.block, self.groups, energies, states, matrix)

    def made_admissible(self) -> BlockEnsemble:
        """Pull the matrix of each cut group towards its mean until the weights majorise it."""
        matrix = self.matrix.copy()
        for a, b in self.cut_groups:
            weights = self.block.weights[a:b]
            mean = weights.mean() * np.eye(b - a)
            inside = 0.5 * (matrix[a:b, a:b] + matrix[a:b, a:b].conj().T)
            inside += mean - np.trace(inside).real / (b - a) * np.eye(b - a)
            spectrum = np.linalg.eigvalsh(inside)[::-1]
            room = np.cumsum(weights - weights.mean())[:-1]
            used = np.cumsum(spectrum - weights.mean())[:-1]
            shrink = min(1.0, float(np.min(room / np.maximum(used, 1e-300))))
            matrix[a:b, a:b] = mean + shrink * (inside - mean)
        return BlockEnsemble(self.block, self.groups, self.energies, self.states, matrix)


@dataclass(frozen=True, eq=False)
class PrimalDualPoint:
    """A potential and an ensemble that nearly reproduces gamma."""

    coordinates: RealArray
    parts: tuple[BlockEnsemble, ...]
    target: RealArray
    strength: float = 0.0
    """Of the regularisation: the ensemble should reproduce target + strength x coordinates."""

    @cached_property
    def mismatch(self) -> RealArray:
        """Coordinates of gamma asked minus those of the ensemble."""
        result = self.target + self.strength * self.coordinates
        for part in self.parts:
            result = result - part.coordinates
        return result

    @property
    def dual(self) -> float:
        """E_w(h) - Tr(h gamma) in the space of the model."""
        energy = sum(float(part.block.weights @ part.energies) for part in self.parts)
        penalty = 0.5 * self.strength * float(self.coordinates @ self.coordinates)
        return energy - float(self.coordinates @ self.target) - penalty

    @property
    def spread(self) -> float:
        """<X, H> - E_w(H): the gap, were there no mismatch."""
        total = 0.0
        for part in self.parts:
            p = len(part.matrix)
            difference = np.diagonal(part.matrix).real - part.block.weights[:p]
            total += float(difference @ part.energies[:p])
        return total

    def made_admissible(self) -> PrimalDualPoint:
        """With the matrices of the groups pulled into the admissible set."""
        parts = tuple(part.made_admissible() for part in self.parts)
        return PrimalDualPoint(self.coordinates, parts, self.target, self.strength)


def groupings(point: SmoothedPoint) -> list[tuple[Groups, ...]]:
    """Guesses which levels are degenerate in the limit of vanishing temperature."""
    found: list[tuple[Groups, ...]] = []
    for factor in (0.0, 3.0, 10.0, 30.0):
        guess = tuple(
            _groups(level.energies, level.block.weights, factor * level.temperature)
            for level in point.levels
        )
        if guess not in found:
            found.append(guess)
    return found


def _groups(energies: RealArray, weights: RealArray, reach: float) -> Groups:
    """Chains of levels closer than `reach`, up to the chain of the last positive weight."""
    last = int(np.count_nonzero(weights))
    breaks = [0, *(np.flatnonzero(np.diff(energies) > reach) + 1).tolist(), len(energies)]
    return tuple((a, b) for a, b in pairwise(breaks) if a < last)


def polish(
    model: SpectralModel, point: SmoothedPoint, guess: tuple[Groups, ...], accuracy: float
) -> PrimalDualPoint:
    """Solve for gamma and the degeneracies together, from a smoothed maximiser.

    Stops when mismatch and splitting are below `accuracy` or no longer fall.
    """
    parts = []
    for level, groups in zip(point.levels, guess, strict=True):
        count = groups[-1][1] if groups else 0
        occupations = level.block.weights[:count].copy()
        for a, b in groups:
            if occupations[a] != occupations[b - 1]:
                inside = level.occupations[a:b]
                occupations[a:b] = inside + (occupations[a:b].sum() - inside.sum()) / (b - a)
        matrix = np.diag(occupations).astype(level.states.dtype)
        parts.append(BlockEnsemble(level.block, groups, level.energies, level.states, matrix))
    current = PrimalDualPoint(point.coordinates, tuple(parts), model.target, _regularisation(model))
    return refined(current, accuracy)


def refined(current: PrimalDualPoint, accuracy: float) -> PrimalDualPoint:
    """Take Newton steps from a point until they no longer help."""
    merit = _merit(current)
    for _ in range(_MAX_STEPS):
        trial = _improved(current, merit)
        if trial is None:
            break
        current, merit = trial, _merit(trial)
        if merit <= accuracy:
            break
    return current


def _improved(point: PrimalDualPoint, merit: float) -> PrimalDualPoint | None:
    """Take a Newton step, halved until it helps, along nearly flat directions only if needed."""
    for rank in _RANKS:
        step = _newton_direction(point, rank)
        length = 1.0
        while length > _SHORTEST:
            trial = moved(point, length * step)
            if _merit(trial) < (1.0 - 0.3 * length) * merit:
                return trial
            length *= 0.5
    return None


def _regularisation(model: SpectralModel) -> float:
    """Return the strength of a penalty |x|^2; one that holds x elsewhere is not the problem's."""
    if model.centre is None or np.any(model.centre):
        return 0.0
    return model.stiffness


def _merit(point: PrimalDualPoint) -> float:
    """Measure the mismatch, and the splitting of the cut groups relative to the potential."""
    splitting = sum(float(np.square(part.constraints[1]).sum()) for part in point.parts)
    energy = 1.0 + float(np.linalg.norm(point.coordinates))
    return float(np.sqrt(splitting / energy**2 + point.mismatch @ point.mismatch))


def _newton_direction(point: PrimalDualPoint, rank: float) -> RealArray:
    """Change of the coordinates, then of the matrices inside the cut groups."""
    n = len(point.coordinates)
    response = sum(part.response for part in point.parts) - point.strength * np.eye(n)
    constraints = [part.constraints for part in point.parts]
    matrix = np.concatenate([c[0] for c in constraints])
    splitting = np.concatenate([c[1] for c in constraints])
    system = np.block([[response, matrix.T], [matrix, np.zeros((len(matrix),) * 2)]])
    return _least_norm(system, np.concatenate([point.mismatch, -splitting]), rank)


def moved(point: PrimalDualPoint, step: RealArray) -> PrimalDualPoint:
    """Return the potential and the ensembles after a step, in the new levels."""
    offset = len(point.coordinates)
    coordinates = point.coordinates + step[:offset]
    parts = []
    for part in point.parts:
        units = part.constraints[2]
        changed: ScalarArray = part.matrix
        if units:
            change = step[offset : offset + len(units)]
            changed = np.asarray(part.matrix + np.tensordot(change, np.array(units), axes=1))
        offset += len(units)
        moved = BlockEnsemble(part.block, part.groups, part.energies, part.states, changed)
        parts.append(moved.carried_to(*np.linalg.eigh(part.block.hamiltonian(coordinates))))
    return PrimalDualPoint(coordinates, tuple(parts), point.target, point.strength)


def _least_norm(system: RealArray, right: RealArray, rank: float) -> RealArray:
    """Return the smallest solution of symmetric, possibly singular equations."""
    values, vectors = np.linalg.eigh(system)
    kept = np.abs(values) > rank * np.abs(values).max(initial=0.0)
    chosen = vectors[:, kept]
    return np.asarray(chosen @ ((chosen.T @ right) / values[kept]))


def _traceless_units(size: int, is_complex: bool) -> list[ScalarArray]:
    """Return an orthonormal basis of the traceless Hermitian matrices."""
    units: list[ScalarArray] = []
    for k in range(1, size):
        diagonal = np.zeros(size)
        diagonal[:k], diagonal[k] = 1.0, -k
        units.append(np.diag(diagonal / np.sqrt(k * (k + 1.0))))
        for j in range(k):
            for phase in (1.0, 1j) if is_complex else (1.0,):
                unit = np.zeros((size, size), complex if is_complex else float)
                unit[j, k], unit[k, j] = phase, np.conj(phase)
                units.append(unit / np.sqrt(2.0))
    return units
