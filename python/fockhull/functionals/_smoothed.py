r"""The smoothed dual on a space of states, and its maximisation.

E_w(H) = sum_k c_k S_k(H), c_k = w_k - w_{k+1}, with S_k the sum of the k lowest levels, that is
the minimum of <G, H> over 0 <= G <= 1, Tr G = k. Adding the fermionic entropy of G times a
temperature T makes S_k smooth; its minimiser is the Fermi function of H at a chemical potential
that makes the trace k. So every smoothed maximiser is a true ensemble, sum_k c_k G_k, and where
the smoothed gradient vanishes it reproduces gamma: an upper bound within T times an entropy of
the dual's lower bound, and exponentially closer where no level is cut. The maximisation is
concave, so a Newton method finds the maximum from any start; T is then lowered.
(Nesterov, Math. Program. 103, 127 (2005), for smoothing by entropies; the finite-temperature
occupations are textbook.)
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

__all__ = ["Block", "SmoothedPoint", "SpectralModel", "maximise"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

_NEGLIGIBLE = 1e-17
_BISECTIONS = 60
_ARMIJO = 1e-4
_FLAT = 1e-13
_PASSIVE = 1e-3
_NO_SLOPE = 1e-9
_SMALLEST_RADIUS = 1e-14
_LARGEST_RADIUS = 1e9


@dataclass(frozen=True, eq=False)
class Block:
    """States that share a run of the weights among them; one block unless on a face."""

    interaction: ScalarArray
    """Matrix of W, shape (m, m)."""
    operators: ScalarArray
    """Matrices of the basis of potentials, shape (n, m, m)."""
    weights: RealArray
    """Weights of the levels of this block, increasing energy, zeros at the end, shape (m,)."""
    basis: ScalarArray | None = None
    """The states as rows, shape (m, dimension); None for all configurations."""

    @cached_property
    def steps(self) -> tuple[RealArray, RealArray]:
        """The k with w_k > w_{k+1}, k < m, and those differences; (k), (c)."""
        following = np.append(self.weights[1:], 0.0)
        differences = self.weights - following
        cut = np.flatnonzero(differences[:-1] > 0.0)
        return np.asarray(cut + 1.0), np.asarray(differences[cut])

    @property
    def floor(self) -> float:
        """The weight that all levels have at least."""
        return float(self.weights[-1])

    def hamiltonian(self, coordinates: RealArray) -> ScalarArray:
        """Matrix of sum_i x_i B_i + W."""
        return np.asarray(self.interaction + np.tensordot(coordinates, self.operators, axes=1))


@dataclass(frozen=True, eq=False)
class BlockLevels:
    """Levels of a block with their smoothed occupations."""

    block: Block
    temperature: float
    energies: RealArray
    states: ScalarArray

    @cached_property
    def chemical_potentials(self) -> RealArray:
        """One for each step of the weights."""
        counts, _ = self.block.steps
        below = self.energies[counts.astype(int) - 1]
        above = self.energies[counts.astype(int)]
        reach = self.temperature * (2.0 + np.log(len(self.energies)))
        low, high = below - reach, above + reach
        for _ in range(_BISECTIONS):
            middle = 0.5 * (low + high)
            short = self._fermi(middle).sum(axis=1) < counts
            low, high = np.where(short, middle, low), np.where(short, high, middle)
        return np.asarray(0.5 * (low + high))

    def _fermi(self, potentials: RealArray) -> RealArray:
        x = (self.energies - potentials[:, np.newaxis]) / self.temperature
        return np.asarray(np.exp(-np.logaddexp(0.0, x)))

    @cached_property
    def step_occupations(self) -> RealArray:
        """Occupations of the levels in each G_k, shape (steps, m)."""
        return self._fermi(self.chemical_potentials)

    @cached_property
    def occupations(self) -> RealArray:
        """Smoothed weights of the levels, shape (m,)."""
        return np.asarray(self.block.steps[1] @ self.step_occupations + self.block.floor)

    @cached_property
    def value(self) -> float:
        """The smoothed ensemble energy."""
        counts, differences = self.block.steps
        potentials = self.chemical_potentials
        x = (self.energies - potentials[:, np.newaxis]) / self.temperature
        entropy = np.logaddexp(0.0, -x).sum(axis=1)
        free = float(differences @ (counts * potentials - self.temperature * entropy))
        return free + self.block.floor * float(self.energies.sum())

    @cached_property
    def energy(self) -> float:
        """The ensemble energy without smoothing."""
        return float(self.block.weights @ self.energies)

    @cached_property
    def mean_energy(self) -> float:
        """<X, H> of the smoothed ensemble X."""
        return float(self.occupations @ self.energies)

    @cached_property
    def density(self) -> ScalarArray:
        """The smoothed ensemble X in the states of the block, shape (m, m)."""
        used = self.occupations > _NEGLIGIBLE
        states = self.states[:, used]
        return np.asarray((states * self.occupations[used]) @ states.conj().T)

    @cached_property
    def gradient(self) -> RealArray:
        """Tr(X B_i)."""
        flat = self.block.operators.reshape(len(self.block.operators), -1)
        return np.asarray((flat @ self.density.T.reshape(-1)).real)

    def hessian(self, negligible: float = _NEGLIGIBLE) -> RealArray:
        """Second derivatives, shape (n, n), negative semidefinite.

        Levels with an occupation below `negligible` are left out.
        """
        active = np.flatnonzero(self.occupations > negligible + self.block.floor)
        if not len(active):
            return np.zeros((len(self.block.operators), len(self.block.operators)))
        n, m = len(self.block.operators), len(self.energies)
        last = active[-1] + 1
        half = self.block.operators.reshape(n * m, m) @ self.states[:, :last]
        rotated = self.states.conj().T @ half.reshape(n, m, last)
        slopes = self._divided_differences(last)
        # pairs of two active levels are met twice, once in each order
        scale = np.sqrt(-slopes * np.where(np.arange(m) < last, 1.0, 2.0)[:, np.newaxis])
        rows = (rotated * scale).reshape(n, -1)
        hessian: RealArray = -(rows @ rows.conj().T).real
        diagonal = np.einsum("ijj->ij", rotated[:, :last]).real
        for occupations, difference in zip(
            self.step_occupations[:, :last], self.block.steps[1], strict=True
        ):
            response = occupations * (1.0 - occupations)
            total = response.sum()
            if total > _NEGLIGIBLE:
                shift = diagonal @ response
                hessian += (difference / (self.temperature * total)) * np.outer(shift, shift)
        return hessian

    def _divided_differences(self, last: int) -> RealArray:
        """sum_k c_k (f_a - f_b) / (e_a - e_b) for all a and b < last, shape (m, last)."""
        x = self.energies / self.temperature
        distance = np.abs(x[:, np.newaxis] - x[:last])
        with np.errstate(invalid="ignore", divide="ignore"):
            shape = np.where(distance < 1e-9, 1.0, -np.expm1(-distance) / distance)
        total = np.zeros_like(distance)
        lower = np.tri(len(x), last, 0, dtype=bool)  # a >= b
        for f, difference in zip(self.step_occupations, self.block.steps[1], strict=True):
            ordered = np.where(
                lower, f[:last] * (1.0 - f)[:, np.newaxis], f[:, np.newaxis] * (1.0 - f[:last])
            )
            total -= difference * ordered * shape
        return np.asarray(total / self.temperature)


@dataclass(frozen=True, eq=False)
class SmoothedPoint:
    """The smoothed dual at some coordinates."""

    coordinates: RealArray
    levels: tuple[BlockLevels, ...]
    target: RealArray
    centre: RealArray | None = None
    stiffness: float = 0.0

    @property
    def _shift(self) -> RealArray:
        """How far from the centre of the model, times its stiffness."""
        if self.centre is None:
            return np.zeros_like(self.coordinates)
        return self.stiffness * (self.coordinates - self.centre)

    @cached_property
    def value(self) -> float:
        """The smoothed dual, less the penalty for leaving the centre."""
        penalty = 0.0
        if self.centre is not None:
            penalty = 0.5 * float(self._shift @ (self.coordinates - self.centre))
        smoothed = sum(level.value for level in self.levels)
        return smoothed - float(self.coordinates @ self.target) - penalty

    @cached_property
    def gradient(self) -> RealArray:
        """Coordinates of gamma of the smoothed ensemble minus those asked."""
        total = -self.target - self._shift
        for level in self.levels:
            total = total + level.gradient
        return total

    def hessian(self, negligible: float = _NEGLIGIBLE) -> RealArray:
        """Second derivatives."""
        total = np.sum([level.hessian(negligible) for level in self.levels], axis=0)
        return np.asarray(total - self.stiffness * np.eye(len(self.coordinates)))

    @property
    def dual(self) -> float:
        """The dual without smoothing (a lower bound if the states are all there are)."""
        return sum(level.energy for level in self.levels) - float(self.coordinates @ self.target)

    @property
    def entropic_gap(self) -> float:
        """<X, H> - E_w(H), what the interval would be if X reproduced gamma."""
        return sum(level.mean_energy - level.energy for level in self.levels)


@dataclass(frozen=True, eq=False)
class SpectralModel:
    """E_w(H) - Tr(h gamma) with H restricted to blocks of states."""

    blocks: tuple[Block, ...]
    target: RealArray
    """Coordinates Tr(B_i gamma)."""
    centre: RealArray | None = None
    """Where a quadratic penalty holds the maximiser, if the states are not all there are."""
    stiffness: float = 0.0
    """Strength of the penalty, stiffness |x - centre|^2 / 2."""

    def at(self, coordinates: RealArray, temperature: float) -> SmoothedPoint:
        """Diagonalise at some coordinates."""
        levels = []
        for block in self.blocks:
            energies, states = np.linalg.eigh(block.hamiltonian(coordinates))
            levels.append(BlockLevels(block, temperature, energies, states))
        return SmoothedPoint(coordinates, tuple(levels), self.target, self.centre, self.stiffness)


def maximise(
    model: SpectralModel,
    start: RealArray,
    temperature: float,
    *,
    decrement: float,
    max_steps: int = 100,
) -> SmoothedPoint:
    """Maximise the smoothed dual by Newton's method in a trust region.

    Stops when the rise that the quadratic model still promises is below `decrement`. Where
    levels are degenerate the dual is flat or linear over long ways, hence the region.
    """
    point = model.at(start, temperature)
    radius = 1.0 + float(np.linalg.norm(start))
    for _ in range(max_steps):
        curvatures, directions = np.linalg.eigh(-point.hessian(_PASSIVE))
        curvatures = np.maximum(curvatures, 0.0)
        slopes = directions.T @ point.gradient
        # flat to rounding: directions that do nothing at all
        flat = curvatures <= _FLAT * curvatures.max(initial=0.0)
        slopes[flat & (np.abs(slopes) <= _NO_SLOPE)] = 0.0
        while True:
            step, promise = _step_within(radius, curvatures, slopes)
            if promise <= decrement or radius < _SMALLEST_RADIUS:
                return point
            trial = model.at(point.coordinates + directions @ step, temperature)
            rise = trial.value - point.value
            if rise >= _ARMIJO * promise:
                break
            radius = 0.25 * float(np.linalg.norm(step))
        if rise >= 0.7 * promise:
            radius = min(max(radius, 3.0 * float(np.linalg.norm(step))), _LARGEST_RADIUS)
        point = trial
    return point


def _step_within(
    radius: float, curvatures: RealArray, slopes: RealArray
) -> tuple[RealArray, float]:
    """Maximise slopes x - curvatures x^2 / 2 within a ball, and the rise it promises."""
    largest, slope = float(curvatures.max(initial=0.0)), float(np.linalg.norm(slopes))
    if slope == 0.0:
        return np.zeros_like(slopes), 0.0
    damping = max(_FLAT * largest, 1e-12 * slope / radius)
    step = slopes / (curvatures + damping)
    if np.linalg.norm(step) > radius:
        low, high = damping, slope / radius
        for _ in range(40):
            middle = np.sqrt(low * high)
            if np.linalg.norm(slopes / (curvatures + middle)) > radius:
                low = middle
            else:
                high = middle
        step = slopes / (curvatures + high)
    return step, float(slopes @ step - 0.5 * curvatures @ (step * step))
