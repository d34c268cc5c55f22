"""One ensemble for each value of a parameter, with the limits its occupations obey."""

import warnings
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import xarray as xr

import fockhull as fh
from fockhull.sectors import Sector

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class CutLevel:
    """A degenerate level whose members would have carried unequal weights."""

    value: float
    """Parameter where it was met."""
    first: int
    last: int
    """Number of its first and last state, counted from 1."""


@dataclass(frozen=True)
class Sweep:
    """Ensembles along a parameter; where a level was cut, the symmetric choice."""

    parameter: str
    unit: str
    values: FloatArray
    ensembles: list[fh.Ensemble]
    polytope: fh.ExclusionPolytope
    cut_levels: list[CutLevel]

    @cached_property
    def stretches(self) -> list[fh.Stretch]:
        return [self.polytope.stretch(e.density_matrix) for e in self.ensembles]

    @cached_property
    def energies(self) -> FloatArray:
        """Lowest energies, shape (points, r)."""
        r = len(self.polytope.weights)
        return np.array([e.energies[:r] for e in self.ensembles])

    @cached_property
    def ensemble_energies(self) -> FloatArray:
        return np.array([e.energy for e in self.ensembles])

    @cached_property
    def leading_occupation(self) -> FloatArray:
        """Sum of the largest occupations that the ensemble limit speaks about, at each point."""
        leading = leading_modes(self.polytope.sector)
        return np.array([(leading * e.occupations).sum() for e in self.ensembles])

    def nearest(self, value: float) -> int:
        """Index of the point nearest to a parameter value."""
        return int(np.abs(self.values - value).argmin())

    def dataset(self) -> xr.Dataset:
        """Concatenate what every ensemble knows along the parameter."""
        axis = xr.Variable(self.parameter, self.values, {"units": self.unit})
        points = [e.to_xarray() for e in self.ensembles]
        stretch = xr.Variable(self.parameter, [s.value for s in self.stretches])
        # a completed multiplet makes some points one level longer: missing ones become NaN
        joined = xr.concat(points, axis, join="outer", combine_attrs="drop_conflicts")
        return joined.assign(stretch=stretch, weights=joined["weights"].fillna(0.0))


def sweep(
    parameter: str,
    unit: str,
    values: Iterable[float],
    hamiltonian_at: Callable[[float], fh.Hamiltonian],
    weights: npt.ArrayLike,
) -> Sweep:
    """Solve at each value, starting from the states of the one before."""
    points = np.fromiter(values, dtype=np.float64)
    ensembles: list[fh.Ensemble] = []
    cut_levels: list[CutLevel] = []
    previous = None
    for value in points:
        with warnings.catch_warnings():
            # said in the report instead, once for the whole sweep
            warnings.simplefilter("ignore", fh.CutMultipletWarning)
            ensemble = fh.solve(hamiltonian_at(value), weights, start=previous)
        for start, stop in ensemble.cut_multiplets:
            cut_levels.append(CutLevel(float(value), start + 1, stop))
        ensembles.append(ensemble.symmetrized() if ensemble.cut_multiplets else ensemble)
        previous = ensemble
    polytope = exclusion_polytope(ensembles[0].hamiltonian.sector, weights)
    return Sweep(parameter, unit, points, ensembles, polytope, cut_levels)


def exclusion_polytope(sector: Sector, weights: npt.ArrayLike) -> fh.ExclusionPolytope:
    """Build the polytope of occupations as ensembles give them, each spin apart."""
    domain = "spin-resolved" if isinstance(sector, fh.SpinHalfFermions) else None
    return fh.ExclusionPolytope(sector, weights, domain=domain)


def leading_modes(sector: Sector) -> FloatArray:
    """Ones on the modes a non-interacting ground state fills: the first, or as many as fermions."""
    filled = np.atleast_1d(1 if isinstance(sector, fh.Bosons) else sector.particles)
    ones = np.arange(sector.modes) < filled[:, np.newaxis]
    return ones.astype(np.float64).reshape(sector.shape)


def leading_limit(sector: Sector, weights: npt.ArrayLike) -> float:
    """Largest sum of occupations of the leading modes that the weights allow."""
    return -float(exclusion_polytope(sector, weights).support(-leading_modes(sector)).value)
