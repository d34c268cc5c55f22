"""Results along one parameter, from a sweep's dataset or from ensembles."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull.ensemble import Ensemble
from fockhull.errors import ArgumentError, ArgumentTypeError

RealArray = npt.NDArray[np.float64]

KINDS = "a dataset of a sweep, or a sequence of ensembles with their values="


@dataclass(frozen=True)
class Series:
    """One row a value of the parameter; rows of failed points are NaN."""

    values: RealArray
    """The parameter, shape (m,)."""
    energies: RealArray
    """Shape (m, r)."""
    multiplicities: npt.NDArray[np.int64]
    """Number of levels degenerate with each, shape (m, r)."""
    ensemble_energies: RealArray | None
    """Shape (m,); None without weights."""
    occupations: RealArray | None
    """Natural occupations, shape (m, d) or (m, 2, d); None without weights."""
    sector: str | None
    """The sector in words, where known."""


def series(results: Any, parameter: str, values: npt.ArrayLike | None) -> Series:
    """Return the results in the order given."""
    if not isinstance(parameter, str):
        raise ArgumentTypeError("parameter", repr(parameter), "the name of the parameter")
    if isinstance(results, Ensemble | str):
        raise ArgumentTypeError("results", type(results).__name__, KINDS)
    if isinstance(results, Sequence):
        return _of_ensembles(results, values)
    if not hasattr(results, "data_vars"):
        raise ArgumentTypeError("results", type(results).__name__, KINDS)
    if values is not None:
        given = "values beside a dataset, which has them"
        raise ArgumentError("values", given, f"None, or ensembles instead; {KINDS}")
    return _of_dataset(results, parameter)


def _of_ensembles(results: Sequence[Any], values: npt.ArrayLike | None) -> Series:
    if not results:
        raise ArgumentError("results", "no ensemble", KINDS)
    for one in results:
        if not isinstance(one, Ensemble):
            raise ArgumentTypeError("results", f"a sequence with {type(one).__name__}", KINDS)
    if values is None:
        raise ArgumentError("values", "none", "the parameter of each ensemble")
    x = arguments.reals("values", values)
    if x.shape != (len(results),):
        raise ArgumentError("values", f"shape {x.shape}", f"shape ({len(results)},)")
    r = min(len(one.energies) for one in results)
    weighted = all(one.weights is not None for one in results)
    sectors = sorted({repr(one.hamiltonian.sector) for one in results})
    if len(sectors) > 1:
        raise ArgumentError("results", " and ".join(sectors), "ensembles of one sector")
    return Series(
        x,
        np.array([one.energies[:r] for one in results]),
        np.array([_multiplicities(one, r) for one in results]),
        np.array([one.energy for one in results]) if weighted else None,
        np.array([one.occupations for one in results]) if weighted else None,
        sectors[0],
    )


def _multiplicities(ensemble: Ensemble, r: int) -> npt.NDArray[np.int64]:
    found = np.ones(max(r, *(stop for _, stop in ensemble.multiplets)), dtype=np.int64)
    for start, stop in ensemble.multiplets:
        found[start:stop] = stop - start
    return found[:r]


def _of_dataset(results: Any, parameter: str) -> Series:
    if parameter not in results.coords or results[parameter].dims != (parameter,):
        known = ", ".join(map(str, results.indexes)) or "none"
        raise ArgumentError("parameter", repr(parameter), f"a coordinate of the dataset: {known}")
    x = arguments.reals("parameter", results[parameter].values)
    energies = _variable(results, parameter, "energies", ("level",))
    if energies is None:
        known = ", ".join(map(str, results.data_vars))
        raise ArgumentError("results", f"variables {known}", "`energies`, as an ensemble has them")
    numbers = _variable(results, parameter, "multiplet", ("level",))
    if numbers is None:
        numbers = np.broadcast_to(np.arange(energies.shape[1]), energies.shape)
    same = numbers[:, :, np.newaxis] == numbers[:, np.newaxis, :]
    spin = ("spin",) if "spin" in getattr(results.get("occupations"), "dims", ()) else ()
    return Series(
        x,
        energies,
        np.where(np.isfinite(energies), same.sum(axis=2), 1),
        _variable(results, parameter, "energy", ()),
        _variable(results, parameter, "occupations", (*spin, "natural_orbital")),
        results.attrs.get("sector"),
    )


def _variable(results: Any, parameter: str, name: str, rest: tuple[str, ...]) -> Any:
    if name not in results:
        return None
    array = results[name]
    if set(array.dims) != {parameter, *rest}:
        others = [d for d in array.dims if d not in (parameter, *rest)]
        given = f"{name} over {', '.join(map(str, array.dims))}"
        expected = f"a dataset over {parameter} alone"
        raise ArgumentError(
            "results", given, f"{expected}: choose with .sel for {others}" if others else expected
        )
    return np.asarray(array.transpose(parameter, *rest).values, dtype=float)
