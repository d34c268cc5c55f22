"""Separating one-particle energies: the certificate that occupations are not allowed."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull._frozen import FrozenArrays
from fockhull._html import table
from fockhull.sectors import Bosons, Sector

__all__ = ["Separator"]

RealArray: TypeAlias = npt.NDArray[np.float64]

VERIFY_TOLERANCE = 1e-12
"""In units of the largest |<h, n>| the sector can have."""
ENUMERATION_LIMIT = 20_000
"""Configurations up to which `Separator.verify` lists the whole sector."""


@dataclass(frozen=True, eq=False, repr=False)
class Separator(FrozenArrays):
    """One-particle energies h with f_w(h) > <h, n>: proof that occupations n are not allowed.

    Every allowed n has <h, n> >= f_w(h). Found by `Projection.separator`; the length of h is 1,
    so that `excess` bounds the distance from below.
    """

    sector: Sector
    weights: RealArray
    """The weights, shape (r,)."""
    domain: str
    """"spinless", "spin-resolved" or "spin-summed"."""
    potential: RealArray
    """h, in the order and shape of `occupations`."""
    occupations: RealArray
    """The occupations n that are refused (of the natural orbitals, for a density matrix)."""
    bound: float
    """f_w(h), the least value of <h, n> that is allowed."""
    value: float
    """<h, n> of the occupations refused."""

    @property
    def excess(self) -> float:
        """f_w(h) - <h, n> > 0, a lower bound of the distance."""
        return self.bound - self.value

    def verify(self, occupations: npt.ArrayLike | None = None) -> bool:
        r"""Check independently of the solver that the occupations are not allowed.

        f_w(h) is summed anew from configuration energies: of all configurations where there
        are at most 20,000, otherwise of the r lowest, written out and checked to be different
        configurations of the sector. Numbers must agree to 1e-12 of the largest \\|<h, n>\\|
        possible, and the excess must be larger than that.

        Parameters
        ----------
        occupations : array_like of float, optional
            Those in question, in the order of `potential`; by default those stored.

        Returns
        -------
        bool
        """
        n = self.occupations
        if occupations is not None:
            n = arguments.reals("occupations", occupations)
        if n.shape != self.potential.shape or not np.isfinite(self.potential).all():
            return False
        if not self._has_valid_weights():
            return False
        value = math.fsum(np.ravel(self.potential * n))
        bound = self._recomputed_bound()
        tolerance = VERIFY_TOLERANCE * self._scale
        return bool(
            bound is not None
            and abs(bound - self.bound) <= tolerance
            and abs(value - self.value) <= tolerance
            and bound - value > tolerance
        )

    def _has_valid_weights(self) -> bool:
        w = self.weights
        falling = bool((np.diff(w) <= 0.0).all()) and len(w) > 0 and w[-1] > 0.0
        return falling and abs(math.fsum(w) - 1.0) <= VERIFY_TOLERANCE

    @property
    def _scale(self) -> float:
        largest = max(self.sector.total_particles, np.abs(self.occupations).sum(), 1.0)
        return float(largest * np.abs(self.potential).max(initial=0.0))

    def _recomputed_bound(self) -> float | None:
        """Return sum_j w_j x (j-th lowest configuration energy); None if that is not possible."""
        sector, r = self.sector, len(self.weights)
        # in the spin-summed domain h acts on both spins alike
        h = np.broadcast_to(self.potential, sector.shape)
        if sector.dimension <= ENUMERATION_LIMIT:
            configurations = np.array(list(sector.configurations()))
        else:
            configurations = sector.lowest_configurations(h, r).occupations
            if not _are_distinct_configurations(sector, configurations):
                return None
        energies = np.sort(configurations.reshape(len(configurations), -1) @ h.ravel())
        return math.fsum(self.weights * energies[:r]) if len(energies) >= r else None

    def __repr__(self) -> str:
        return f"Separator(excess {self.excess:.6g}, {self.sector!r}, {self.domain})"

    def _repr_html_(self) -> str:
        rows: list[tuple[str, object]] = [
            ("sector", self.sector),
            ("domain", self.domain),
            ("one-particle energies h", self.potential.round(6)),
            ("least value allowed, f_w(h)", self.bound),
            ("value <h, n>", self.value),
        ]
        return table("Separator", rows)


def _are_distinct_configurations(sector: Sector, rows: npt.NDArray[np.int64]) -> bool:
    numbers_fit = (rows.sum(axis=-1) == np.asarray(sector.particles)).all() and (rows >= 0).all()
    exclusive = isinstance(sector, Bosons) or bool((rows <= 1).all())
    if not (numbers_fit and exclusive):
        return False
    compact = rows.astype(np.min_scalar_type(rows.max(initial=0)))
    return len({row.tobytes() for row in compact}) == len(rows)
