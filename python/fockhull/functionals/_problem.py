"""Interaction, weights and space of potentials, with what all evaluations share."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from fockhull.eigenproblem import solve_silently
from fockhull.ensemble import Ensemble
from fockhull.functionals._potentials import PotentialSpace
from fockhull.functionals._smoothed import Block
from fockhull.hamiltonian import Hamiltonian
from fockhull.interaction import Interaction
from fockhull.polytope import ExclusionPolytope
from fockhull.sectors import Sector

__all__ = ["Problem"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

_LARGEST_MATRICES = 2 * 10**7
"""Elements of the matrices of all potentials that are still kept densely."""


@dataclass(frozen=True, eq=False)
class Problem:
    """The dual and the domain of one functional."""

    interaction: Interaction
    polytope: ExclusionPolytope
    space: PotentialSpace
    is_unrestricted: bool = True
    """Whether the space of potentials holds all Hermitian (or real symmetric) operators."""
    one_body: ScalarArray | None = None
    """A one-body operator that counts as part of the interaction, (d, d) or (2, d, d)."""

    @property
    def sector(self) -> Sector:
        """The sector."""
        return self.interaction.sector

    @property
    def weights(self) -> RealArray:
        """The weights, shape (r,)."""
        return self.polytope.weights

    @property
    def spin_summed(self) -> bool:
        """Whether one potential acts on both spins."""
        return self.polytope.domain == "spin-summed"

    @property
    def is_small(self) -> bool:
        """Whether the potentials fit into memory as dense matrices on the whole sector."""
        return (self.space.size + 1) * self.sector.dimension**2 <= _LARGEST_MATRICES

    def shaped(self, matrices: ScalarArray) -> ScalarArray:
        """Drop the axis of components where there is only one: the shape of gamma."""
        return matrices if matrices.shape[-3] > 1 else matrices[..., 0, :, :]

    def potential(self, coordinates: RealArray) -> ScalarArray:
        """Return the potential of some coordinates, in the shape of gamma."""
        return self.shaped(self.space.potential(coordinates))

    def solved(self, potential: ScalarArray, start: Ensemble | None = None) -> Ensemble:
        """Solve for the states of h + W."""
        h = potential if self.one_body is None else potential + self.one_body
        return solve_silently(Hamiltonian(h, self.interaction), self.weights, start=start)

    @cached_property
    def bare(self) -> Hamiltonian:
        """The interaction alone, with the one-body operator that counts as part of it."""
        return Hamiltonian(self._fixed, self.interaction)

    @property
    def _fixed(self) -> ScalarArray:
        d = self.sector.modes
        return np.zeros((d, d)) if self.one_body is None else self.one_body

    @cached_property
    def lowest(self) -> float:
        """A lower bound of Tr(Gamma W) over all ensembles."""
        states = solve_silently(self.bare, self.weights)
        return states.energy - states.energy_error_bound

    @cached_property
    def highest(self) -> float:
        """An upper bound of Tr(Gamma W) over all ensembles."""
        states = solve_silently(Hamiltonian(-self._fixed, -self.interaction), self.weights)
        return states.energy_error_bound - states.energy

    @cached_property
    def scale(self) -> float:
        """The range of Tr(Gamma W): the energy scale of the functional; zero if F is constant."""
        span = self.highest - self.lowest
        return span if span > 1e-13 * (abs(self.highest) + abs(self.lowest)) else 0.0

    def matrix(self, operator: ScalarArray) -> ScalarArray:
        """Dense matrix of a one-body operator of shape (components, d, d)."""
        h = self.shaped(np.asarray(0.5 * (operator + operator.conj().swapaxes(-1, -2))))
        return np.asarray(Hamiltonian(h, sector=self.sector).to_scipy().toarray())

    @cached_property
    def whole(self) -> Block:
        """W and the potentials on the whole sector."""
        dimension = self.sector.dimension
        operators = np.array([self.matrix(b) for b in self.space.basis])
        weights = np.zeros(dimension)
        weights[: len(self.weights)] = self.weights
        return Block(
            self.bare.to_scipy().toarray(), operators.reshape(-1, dimension, dimension), weights
        )
