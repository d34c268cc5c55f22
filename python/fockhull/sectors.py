"""Sectors: a fixed number of particles in a fixed number of modes.

A configuration is an occupation number for each mode (for spin-1/2 a row for
each spin, up first). Configurations are numbered by their colexicographic rank,
the combinatorial number system; for spin-1/2 the up index is the slow one.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull import _core as compiled
from fockhull._html import table
from fockhull.errors import ArgumentError, ArgumentTypeError

__all__ = ["Bosons", "Fermions", "LowestConfigurations", "Sector", "SpinHalfFermions"]

IntegerArray: TypeAlias = npt.NDArray[np.int64]
RealArray: TypeAlias = npt.NDArray[np.float64]

_CHUNK = 4096


class LowestConfigurations(NamedTuple):
    """The configurations of lowest one-particle energy."""

    energies: RealArray
    """Energies, increasing, shape (r,)."""
    occupations: IntegerArray
    """Occupations, shape (r, modes), or (r, 2, orbitals) for spin-1/2."""


class Sector(ABC):
    """What all sectors have in common; use `Fermions`, `SpinHalfFermions` or `Bosons`."""

    _core: compiled.Sector

    modes: int
    """Number of modes (orbitals, sites)."""

    @property
    @abstractmethod
    def shape(self) -> tuple[int, ...]:
        """Shape of the occupations of one configuration."""

    particles: int | tuple[int, int]
    """Number of particles; for spin-1/2 (up, down)."""

    @property
    @abstractmethod
    def total_particles(self) -> int:
        """Number of particles of all spins together."""

    @property
    def spins(self) -> int:
        """Number of spin components kept apart: 2 for spin-1/2, otherwise 1."""
        return len(self.shape)

    @property
    def dimension(self) -> int:
        """Exact number of configurations, however large."""
        return self._core.dimension

    def occupations(self, index: npt.ArrayLike) -> IntegerArray:
        """Write out the occupations of the configurations with the given indices.

        Parameters
        ----------
        index : array_like of int
            Indices from 0 to ``dimension - 1``, any shape.

        Returns
        -------
        numpy.ndarray
            Integers, shape ``index.shape + sector.shape``.

        Raises
        ------
        ArgumentIndexError
            If an index is out of range.
        SizeError
            If the dimension exceeds 64-bit indices.
        """
        indices = arguments.indices("index", index)
        rows = self._core.occupations(np.ascontiguousarray(indices.reshape(-1)))
        return rows.reshape(indices.shape + self.shape)

    def index(self, occupations: npt.ArrayLike) -> int | npt.NDArray[np.uint64]:
        """Find the indices of the configurations with the given occupations.

        Parameters
        ----------
        occupations : array_like of int
            Shape ``(...,) + sector.shape``.

        Returns
        -------
        int or numpy.ndarray
            One index, or an array of the leading shape.

        Raises
        ------
        ArgumentError
            If the shape or the particle number is not that of the sector.
        SizeError
            If the dimension exceeds 64-bit indices.
        """
        numbers = arguments.occupation_numbers("occupations", occupations)
        lead = numbers.ndim - len(self.shape)
        if lead < 0 or numbers.shape[lead:] != self.shape:
            expected = f"shape (...,) + {self.shape}"
            raise ArgumentError("occupations", f"shape {numbers.shape}", expected)
        rows = np.ascontiguousarray(numbers.reshape(-1, self.spins, self.modes))
        result = self._core.index(rows).reshape(numbers.shape[:lead])
        return int(result) if lead == 0 else result

    def configurations(self) -> Iterator[IntegerArray]:
        """Iterate over the occupations of all configurations in the order of their index.

        Raises
        ------
        SizeError
            If the dimension exceeds 64-bit indices.
        """
        for start in range(0, self.dimension, _CHUNK):
            yield from self.occupations(np.arange(start, min(start + _CHUNK, self.dimension)))

    def lowest_configurations(
        self, one_particle_energies: npt.ArrayLike, r: int
    ) -> LowestConfigurations:
        """Find the r configurations of lowest one-particle energy.

        A best-first search over partitions (Gale order) with one parent for each
        configuration: O(r log r) steps whatever the numbers of modes and particles,
        so it works where the configurations could never be enumerated.

        Parameters
        ----------
        one_particle_energies : array_like of float
            Shape ``(modes,)``; for spin-1/2 also ``(2, orbitals)``.
        r : int
            How many, from 1 to the dimension.

        Returns
        -------
        LowestConfigurations
            ``energies`` (r,) and ``occupations`` (r,) + ``sector.shape``, by energy;
            equal energies come in a fixed order.

        Raises
        ------
        ArgumentError
            For a wrong shape, NaN, infinity or an r out of range.

        Examples
        --------
        >>> import fockhull as fh
        >>> fh.Fermions(100, 50).lowest_configurations(range(100), 3).energies
        array([1225., 1226., 1227.])
        """
        energies = self._one_particle_energies(one_particle_energies)
        values, occupations = self._core.lowest_configurations(energies, arguments.count("r", r))
        return LowestConfigurations(values, occupations.reshape((len(values), *self.shape)))

    def _one_particle_energies(self, values: npt.ArrayLike) -> RealArray:
        energies = arguments.reals("one_particle_energies", values)
        if energies.shape not in (self.shape, (self.modes,)):
            expected = " or ".join(str(s) for s in dict.fromkeys(((self.modes,), self.shape)))
            raise ArgumentError(
                "one_particle_energies", f"shape {energies.shape}", f"shape {expected}"
            )
        return np.ascontiguousarray(np.broadcast_to(energies, (self.spins, self.modes)))

    def _repr_html_(self) -> str:
        return table(repr(self), [("configurations", f"{self.dimension:,}")])


@dataclass(frozen=True, repr=False)
class _SpinlessSector(Sector):
    """One component of particles in modes."""

    modes: int
    particles: int
    _core: compiled.Sector = field(init=False, compare=False)

    def __post_init__(self) -> None:
        _set(self, "modes", arguments.count("modes", self.modes))
        _set(self, "particles", arguments.count("particles", self.particles, minimum=0))
        _set(self, "_core", self._build())

    @abstractmethod
    def _build(self) -> compiled.Sector: ...

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of the occupations of one configuration, (modes,)."""
        return (self.modes,)

    @property
    def total_particles(self) -> int:
        """Number of particles."""
        return self.particles

    def __repr__(self) -> str:
        return f"{type(self).__name__}(modes={self.modes}, particles={self.particles})"

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.modes, self.particles)


class Fermions(_SpinlessSector):
    """Spinless fermions (or spin-orbitals, all S_z together).

    Parameters
    ----------
    modes : int
        Number of modes d, at least 1.
    particles : int
        Number of particles N, from 0 to d.

    Raises
    ------
    ArgumentError
        If the numbers are out of range (`ArgumentTypeError` if they are not integers).

    Examples
    --------
    >>> import fockhull as fh
    >>> sector = fh.Fermions(modes=4, particles=2)
    >>> sector.dimension
    6
    >>> sector.occupations(5)
    array([0, 0, 1, 1])
    """

    def _build(self) -> compiled.Sector:
        return compiled.Sector.fermions(self.modes, self.particles)


class Bosons(_SpinlessSector):
    """Bosons, any number of them in each mode.

    Parameters
    ----------
    modes : int
        Number of modes d, at least 1.
    particles : int
        Number of particles N, at least 0.

    Raises
    ------
    ArgumentError
        If the numbers are out of range (`ArgumentTypeError` if they are not integers).

    Examples
    --------
    >>> import fockhull as fh
    >>> sector = fh.Bosons(modes=3, particles=2)
    >>> [list(map(int, n)) for n in sector.configurations()][:3]
    [[2, 0, 0], [1, 1, 0], [0, 2, 0]]
    """

    def _build(self) -> compiled.Sector:
        return compiled.Sector.bosons(self.modes, self.particles)


@dataclass(frozen=True, repr=False)
class SpinHalfFermions(Sector):
    """Spin-1/2 fermions at fixed numbers of up and down particles.

    Parameters
    ----------
    orbitals : int
        Number of spatial orbitals d, at least 1.
    particles : (int, int)
        Numbers of particles with spin up and down, each from 0 to d.

    Raises
    ------
    ArgumentError
        If the numbers are out of range (`ArgumentTypeError` if they are not integers).

    Examples
    --------
    >>> import fockhull as fh
    >>> fh.SpinHalfFermions(orbitals=12, particles=(6, 6)).dimension
    853776
    """

    orbitals: int
    particles: tuple[int, int]
    modes: int = field(init=False, compare=False)
    _core: compiled.Sector = field(init=False, compare=False)

    def __post_init__(self) -> None:
        _set(self, "orbitals", arguments.count("orbitals", self.orbitals))
        _set(self, "modes", self.orbitals)
        given: object = self.particles
        if isinstance(given, np.ndarray):
            given = given.tolist()
        if not isinstance(given, Sequence) or len(given) != 2:
            raise ArgumentTypeError("particles", repr(given), "a pair of integers (up, down)")
        up, down = (arguments.count("particles", n, minimum=0) for n in given)
        _set(self, "particles", (up, down))
        _set(self, "_core", compiled.Sector.spin_half(self.orbitals, up, down))

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of the occupations of one configuration, (2, orbitals)."""
        return (2, self.orbitals)

    @property
    def total_particles(self) -> int:
        """Number of particles, up and down together."""
        return sum(self.particles)

    def __repr__(self) -> str:
        return f"SpinHalfFermions(orbitals={self.orbitals}, particles={self.particles})"

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.orbitals, self.particles)


def _set(instance: object, name: str, value: object) -> None:
    """Set a field of a frozen dataclass while it is being made."""
    object.__setattr__(instance, name, value)
