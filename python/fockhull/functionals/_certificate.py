"""Explicit ensembles and the two ends of the interval they certify."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import numpy.typing as npt

from fockhull import _core
from fockhull._frozen import FrozenArrays, read_only
from fockhull.configuration_ensemble import ConfigurationEnsemble
from fockhull.functionals._multiplets import BlockEnsemble
from fockhull.functionals._potentials import PotentialSpace
from fockhull.hamiltonian import Hamiltonian
from fockhull.polytope import ExclusionPolytope
from fockhull.sectors import Sector

__all__ = ["ExplicitEnsemble", "completed", "from_parts", "interaction_energy"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

VERIFY_TOLERANCE = 1e-9


@dataclass(frozen=True, eq=False)
class ExplicitEnsemble(FrozenArrays):
    """A density operator in the convex hull of those with spectrum w, given explicitly.

    ``Gamma = (1 - t) sum_k p_k |k><k| + t Gamma'``, where Gamma' is a mixture of configurations in
    the natural orbitals of a density matrix next to gamma; t is zero or tiny and makes gamma
    exact.
    """

    sector: Sector
    weights: RealArray
    """The weights w that majorise the spectrum, shape (r,)."""
    probabilities: RealArray
    """p_k, decreasing, shape (m,)."""
    rows: ScalarArray
    """The states ``|k>`` as rows, shape (m, dimension)."""
    remainder_share: float = 0.0
    """The share t."""
    remainder: ConfigurationEnsemble | None = None
    """Gamma' as a mixture of configurations."""
    remainder_density_matrix: ScalarArray | None = None
    """One-body density matrix of Gamma', shape (components, d, d)."""
    variables: PotentialSpace | None = None
    """The variables that gamma is reproduced in, if not in all."""

    def __post_init__(self) -> None:
        for array in (self.probabilities, self.rows, self.remainder_density_matrix):
            if array is not None:
                read_only(array)

    @property
    def vectors(self) -> ScalarArray:
        """The states as columns, shape (dimension, m)."""
        return self.rows.T

    @cached_property
    def _states_density_matrix(self) -> ScalarArray:
        gammas = _core.density_matrices(self.sector._core, np.ascontiguousarray(self.rows))
        return np.tensordot(self.probabilities, gammas, axes=1)

    def components(self, spin_summed: bool) -> ScalarArray:
        """One-body density matrix of the part made of states, (components, d, d)."""
        gamma = self._states_density_matrix
        return gamma.sum(axis=0, keepdims=True) if spin_summed else gamma

    @cached_property
    def density_matrix(self) -> ScalarArray:
        """One-body density matrix, recomputed from the states, in the shape of gamma."""
        rest = self.remainder_density_matrix
        gamma = self._states_density_matrix
        if rest is not None:
            if len(rest) < len(gamma):
                gamma = gamma.sum(axis=0, keepdims=True)
            gamma = (1.0 - self.remainder_share) * gamma + self.remainder_share * rest
        return gamma if len(gamma) > 1 else gamma[0]

    def verify(self, density_matrix: npt.ArrayLike, tol: float = VERIFY_TOLERANCE) -> bool:
        """Check independently of the solver that this is an ensemble and reproduces gamma.

        The states must be orthonormal, the probabilities a distribution majorised by w, the
        remainder an ensemble of configurations with the occupations it claims, and the density
        matrix the one given (spins summed if it has no spin axis).
        """
        overlaps = self.rows.conj() @ self.rows.T
        if np.abs(overlaps - np.eye(len(overlaps))).max() > tol:
            return False
        p = np.sort(self.probabilities)[::-1]
        if abs(p.sum() - 1.0) > tol or p[-1] < -tol:
            return False
        allowed = np.ones(len(p))
        allowed[: len(self.weights)] = np.cumsum(self.weights)[: len(p)]
        if (np.cumsum(p) > allowed + tol).any():
            return False
        rest = self.remainder_density_matrix
        if self.remainder is not None and rest is not None:
            occupations = np.linalg.eigvalsh(rest)[..., ::-1]
            if not self.remainder.verify(occupations if len(rest) > 1 else occupations[0], tol):
                return False
        given, own = np.asarray(density_matrix), self.density_matrix
        if given.ndim < own.ndim:
            own = own.sum(axis=0)
        difference = (own - given).reshape(-1, *given.shape[-2:])
        if self.variables is not None:
            difference = self.variables.projected(difference)
        return bool(np.abs(difference).max() <= tol)

    def __repr__(self) -> str:
        rest = f", remainder {self.remainder_share:.1e}" if self.remainder_share else ""
        return f"ExplicitEnsemble({len(self.probabilities)} states{rest}, {self.sector!r})"


def from_parts(
    sector: Sector,
    weights: RealArray,
    parts: tuple[BlockEnsemble, ...],
    variables: PotentialSpace | None = None,
) -> ExplicitEnsemble:
    """Diagonalise the density operator of the blocks and write out its states."""
    rows, probabilities = [], []
    for part in parts:
        spectrum, rotation = np.linalg.eigh(part.matrix)
        states = (part.states[:, : len(spectrum)] @ rotation).T
        rows.append(states if part.block.basis is None else states @ part.block.basis)
        probabilities.append(spectrum)
    joined = np.concatenate(probabilities)
    order = np.argsort(-joined)
    joined = np.maximum(joined[order], 0.0)
    stacked = np.ascontiguousarray(np.concatenate(rows)[order])
    probabilities_ = joined / joined.sum()
    return ExplicitEnsemble(sector, weights, probabilities_, stacked, variables=variables)


def interaction_energy(ensemble: ExplicitEnsemble, bare: Hamiltonian) -> float:
    """Tr(Gamma W) of the part made of states; `bare` is the Hamiltonian without h."""
    columns = ensemble.rows.T
    energies = np.einsum("ij,ij->j", columns.conj(), bare.apply(columns)).real
    return float(ensemble.probabilities @ energies)


def completed(
    ensemble: ExplicitEnsemble,
    gamma: ScalarArray,
    space: PotentialSpace,
    polytope: ExclusionPolytope,
    *,
    rounding: float | None,
) -> ExplicitEnsemble | None:
    """Mix in configurations so that gamma, (components, d, d), is reproduced exactly.

    With `rounding` (a gamma on the boundary, itself known to rounding only) nothing is mixed in;
    the ensemble must reproduce gamma to within it as it is. None if that fails, or
    if gamma has no allowed neighbour in the direction that is missing.
    """
    own = ensemble.components(polytope.domain == "spin-summed")
    missing = space.coordinates(np.asarray(gamma - own))
    size = float(np.linalg.norm(missing))
    if size == 0.0:
        return ensemble
    if rounding is not None:
        return ensemble if size <= rounding else None
    rest = _allowed_beyond(gamma, space.potential(missing), size, polytope)
    if rest is None:
        return None
    share, remainder = rest
    projection = polytope.project(remainder if len(remainder) > 1 else remainder[0])
    return replace(
        ensemble,
        remainder_share=share,
        remainder=projection.ensemble,
        remainder_density_matrix=remainder,
    )


def _allowed_beyond(
    gamma: ScalarArray, missing: ScalarArray, share: float, polytope: ExclusionPolytope
) -> tuple[float, ScalarArray] | None:
    """Find the smallest share (within a quarter) for which what is mixed in is allowed."""
    while share < 1.0:
        rest = gamma + missing * (1.0 / share - 1.0)
        if polytope.stretch(rest if len(rest) > 1 else rest[0]).lower >= 1.0:
            return share, rest
        share *= 1.25
    return None
