"""Scans of the functional towards a facet of the domain, and the force that diverges there."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import numpy.typing as npt

from fockhull._frozen import FrozenArrays, read_only
from fockhull._html import table
from fockhull.errors import ArgumentError
from fockhull.functionals._value import FunctionalValue

if TYPE_CHECKING:
    from fockhull.functionals.universal import UniversalFunctional

__all__ = ["BoundaryScan", "ForceFit", "scan"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

_DEFAULT_SHARES = np.geomspace(1.0, 1e-6, 13)
_ON_BOUNDARY = 1e-9


class ForceFit(NamedTuple):
    """A power law for the boundary force, dF/dD = prefactor x D^exponent."""

    exponent: float
    """Slope of ``log |dF/dD|`` against log D."""
    prefactor: float
    """With the sign of the force: negative where the boundary repels."""
    deviation: float
    """Largest deviation of ``log |dF/dD|`` from the line."""


@dataclass(frozen=True, eq=False)
class BoundaryScan(FrozenArrays):
    """Values of F along a straight line towards a point of the boundary."""

    boundary: ScalarArray
    """The density matrix on the boundary that the line ends in."""
    constraint: str | None
    """The inequality that is saturated there, in words, where known."""
    distances: RealArray
    """Distance D of each point from the hyperplane of the facet, in the Frobenius norm."""
    results: tuple[FunctionalValue, ...]
    """One result a point."""
    forces: RealArray
    """dF/dD along the line, from the potentials."""

    def __post_init__(self) -> None:
        for array in (self.boundary, self.distances, self.forces):
            read_only(array)

    @property
    def values(self) -> RealArray:
        """F at each point."""
        return np.array([result.value for result in self.results])

    @property
    def lower(self) -> RealArray:
        """Certified lower bounds."""
        return np.array([result.lower for result in self.results])

    @property
    def upper(self) -> RealArray:
        """Certified upper bounds."""
        return np.array([result.upper for result in self.results])

    def fit(self, points: int | None = None) -> ForceFit:
        """Fit a power law to the force at the points nearest to the boundary.

        Parameters
        ----------
        points : int, optional
            How many of them, by default half (at least two).

        Raises
        ------
        ArgumentError
            If there are fewer points than asked, or the force changes its sign.
        """
        count = max(2, len(self.distances) // 2) if points is None else points
        if not 2 <= count <= len(self.distances):
            raise ArgumentError("points", count, f"2 to {len(self.distances)}")
        nearest = np.argsort(self.distances)[:count]
        forces = self.forces[nearest]
        sign = np.sign(forces[0])
        if (forces * sign <= 0.0).any():
            expected = "points where the force keeps its sign; take fewer"
            raise ArgumentError("points", "a force that changes its sign", expected)
        x, y = np.log(self.distances[nearest]), np.log(np.abs(forces))
        exponent, offset = np.polyfit(x, y, 1)
        deviation = float(np.abs(y - offset - exponent * x).max())
        return ForceFit(float(exponent), float(sign * np.exp(offset)), deviation)

    def __repr__(self) -> str:
        near, far = self.distances.min(), self.distances.max()
        return f"BoundaryScan({len(self.distances)} points, D = {near:.3g} to {far:.3g})"

    def _repr_html_(self) -> str:
        rows = [
            (f"D = {d:.3g}", f"F = {v:.10g}, dF/dD = {f:.6g}")
            for d, v, f in zip(self.distances, self.values, self.forces, strict=True)
        ]
        return table(f"Scan towards {self.constraint or 'the boundary'}", rows)


def scan(
    functional: UniversalFunctional,
    gamma: ScalarArray,
    towards: ScalarArray | None,
    shares: RealArray | None,
    tol: float,
) -> BoundaryScan:
    """Evaluate along the line; matrices have the shape of gamma."""
    stretch = functional.polytope.stretch(gamma if towards is None else towards)
    if towards is None:
        if not 1.0 < stretch.value < np.inf:
            expected = "one inside the domain and not its centre, or towards="
            raise ArgumentError("density_matrix", f"a matrix with {stretch!r}", expected)
        centre = np.trace(gamma, axis1=-2, axis2=-1).real[..., np.newaxis, np.newaxis]
        centre = centre / gamma.shape[-1] * np.eye(gamma.shape[-1])
        boundary = centre + stretch.value * (gamma - centre)
    else:
        if abs(stretch.value - 1.0) > _ON_BOUNDARY:
            raise ArgumentError("towards", f"a matrix with {stretch!r}", "one on the boundary")
        boundary = towards
    orbitals = np.linalg.eigh(boundary)[1][..., ::-1]
    normal = stretch.normal - stretch.normal.mean(axis=-1, keepdims=True)
    normal = normal / np.linalg.norm(normal)
    operator = (orbitals * normal[..., np.newaxis, :]) @ orbitals.conj().swapaxes(-1, -2)
    inward = gamma - boundary
    reach = float(np.sum(operator * np.swapaxes(inward, -1, -2)).real)
    if reach <= _ON_BOUNDARY:
        raise ArgumentError("density_matrix", "a matrix on the facet", "one away from it")
    steps = _DEFAULT_SHARES if shares is None else shares / reach
    results, start = [], None
    for step in steps:
        result = functional.evaluate(boundary + step * inward, tol, start=start)
        start = result if result.place == "inside" else None
        results.append(result)
    forces = [_force(result, inward) / reach for result in results]
    return BoundaryScan(
        boundary, stretch.constraint, steps * reach, tuple(results), np.array(forces)
    )


def _force(result: FunctionalValue, inward: ScalarArray) -> float:
    if result.potential is None:
        return np.nan
    return -float(np.sum(result.potential * np.swapaxes(inward, -1, -2)).real)
