"""What an evaluation of the functional returns."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Literal

import numpy as np
import numpy.typing as npt

from fockhull import _core
from fockhull._frozen import FrozenArrays, read_only
from fockhull._html import table
from fockhull.ensemble import Ensemble
from fockhull.functionals._certificate import ExplicitEnsemble
from fockhull.projection import Projection, Stretch

__all__ = ["FunctionalValue"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]


@dataclass(frozen=True, eq=False)
class FunctionalValue(FrozenArrays):
    """F_w(gamma) as a certified interval, with the potential and the ensemble that prove it."""

    density_matrix: ScalarArray
    """The gamma asked for; the nearest allowed one if it is outside by less than 1e-9."""
    place: Literal["inside", "boundary", "outside"]
    """Where gamma lies in the domain."""
    stretch: Stretch
    """How far gamma is from the boundary, with the constraint met first."""
    tolerance: float
    """The width asked for."""
    lower: float = -np.inf
    """Certified lower bound: E_w(h) - Tr(h gamma) less the error bounds of the energies. It
    rests on the levels being the lowest: see ``states.level_count``."""
    upper: float = np.inf
    """Certified upper bound: Tr(Gamma W) of `ensemble`, which reproduces gamma (its
    remainder counted with the largest energy there is)."""
    value: float = np.nan
    """Best estimate, inside the interval; +inf outside the domain."""
    status: str = ""
    """What was reached, in words."""
    potential: ScalarArray | None = None
    """The h that attains the lower bound, without trace, in the shape of gamma."""
    potential_null_space: ScalarArray | None = None
    """Directions in which h is free besides the constant, shape (k, ...): what symmetry or the
    interaction leave free. Compare values and density matrices, never potentials. None where it
    was not worked out: on sectors too large for dense matrices, and where h runs away."""
    ensemble: ExplicitEnsemble | None = None
    """The ensemble that attains the upper bound."""
    states: Ensemble | None = None
    """The r lowest states at h."""
    limit: float | None = None
    """On the boundary: the value in the limit in which h has run away, from the face alone. It
    is exact for a gamma exactly on the face, and is kept apart from the interval."""
    limit_uncertainty: float | None = None
    """How far primal and dual on the face are apart."""
    projection: Projection | None = None
    """Outside: the certificate, the nearest allowed density matrix and what separates."""

    def __post_init__(self) -> None:
        for array in (self.density_matrix, self.potential, self.potential_null_space):
            if array is not None:
                read_only(array)

    @property
    def gap(self) -> float:
        """Width of the interval, zero outside the domain."""
        return self.upper - self.lower if self.place != "outside" else 0.0

    @property
    def converged(self) -> bool:
        """Whether the interval is as narrow as asked."""
        return self.gap <= self.tolerance

    @property
    def gradient(self) -> ScalarArray | None:
        """DF/dgamma = -h up to `potential_null_space`: Tr(gradient x change) is the slope.

        None outside, and on the boundary, where there is none.
        """
        return None if self.potential is None or self.place != "inside" else -self.potential

    @property
    def excitation_energies(self) -> RealArray | None:
        """E_k - E_1 at h, shape (r,), which is dF_w/dw_k at fixed gamma, w_1 compensating.

        One-sided where weights are equal.
        """
        return None if self.states is None else self.states.excitation_energies

    @cached_property
    def transition_density_matrices(self) -> ScalarArray | None:
        """<j|a+_q a_p|k> between the states at h, element [j, k, ..., p, q].

        Shape (r, r, d, d), or (r, r, 2, d, d) for spin-1/2.
        """
        if self.states is None:
            return None
        sector = self.states.hamiltonian.sector
        rows = np.ascontiguousarray(self.states.vectors.T)
        gamma = _core.transition_density_matrices(sector._core, rows, rows)
        return gamma if sector.spins == 2 else gamma[:, :, 0]

    def __float__(self) -> float:
        return self.value

    def __repr__(self) -> str:
        if self.place == "outside":
            return f"FunctionalValue(inf, {self.status})"
        return f"FunctionalValue({self.value:.12g} in [{self.lower:.12g}, {self.upper:.12g}])"

    def _repr_html_(self) -> str:
        rows = [
            ("value", f"{self.value:.12g}"),
            ("interval", f"[{self.lower:.12g}, {self.upper:.12g}], width {self.gap:.1e}"),
            ("status", self.status),
            ("place in the domain", self.place),
            ("constraint met first", self.stretch.constraint),
        ]
        return table("Universal functional", rows)
