"""Density matrices with noise on them: how far from allowed, and the nearest allowed ones."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

import fockhull as fh
from parameter_sweep import exclusion_polytope, leading_modes

Matrices = npt.NDArray[np.float64 | np.complex128]
FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Measurements:
    """Noisy copies of one density matrix (a batch) and two ways to repair them."""

    exact: Matrices
    noisy: Matrices
    polytope: fh.ExclusionPolytope
    pauli: fh.Projection
    """Nearest that some state can have: occupations between 0 and 1, the right trace."""
    repaired: fh.Projection
    """Nearest that an ensemble with the weights can have."""

    @cached_property
    def left_over(self) -> FloatArray:
        """Distance from allowed that remains where only Pauli's principle was restored."""
        distances: FloatArray = self.polytope.distance(self.pauli.density_matrix)
        return distances

    @property
    def worst(self) -> int:
        """The copy for which Pauli's principle says least."""
        return int(self.left_over.argmax())

    def error(self, matrices: Matrices) -> FloatArray:
        """Frobenius distance from the exact density matrix."""
        difference = (matrices - self.exact).reshape(*matrices.shape[: -self.exact.ndim], -1)
        return np.asarray(np.linalg.norm(difference, axis=-1))

    def occupations(self, matrix: Matrices) -> FloatArray:
        """Natural occupations, decreasing for each spin."""
        return np.linalg.eigvalsh(matrix)[..., ::-1]

    def leading(self, occupations: FloatArray) -> float:
        """Sum of the leading occupations, both spins together."""
        return float((leading_modes(self.polytope.sector) * occupations).sum())


def measure(
    ensemble: fh.Ensemble,
    polytope: fh.ExclusionPolytope,
    *,
    copies: int,
    noise: float,
    seed: int,
) -> Measurements:
    """Add Hermitian Gaussian noise to the density matrix, many times, and repair each copy."""
    exact = ensemble.density_matrix
    kicks = np.random.default_rng(seed).normal(scale=noise, size=(copies, *exact.shape))
    noisy = exact + (kicks + kicks.swapaxes(-1, -2)) / 2
    pauli = exclusion_polytope(polytope.sector, [1.0])
    return Measurements(exact, noisy, polytope, pauli.project(noisy), polytope.project(noisy))
