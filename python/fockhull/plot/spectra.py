"""Energies against a parameter: spectra with their multiplets, gaps."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull.errors import ArgumentError
from fockhull.plot import look
from fockhull.plot.series import Series, series

RealArray = npt.NDArray[np.float64]

MOST_MARKERS = 24
"""On one curve, of the multiplets that last."""


def spectrum(
    results: Any,
    parameter: str,
    values: npt.ArrayLike | None = None,
    *,
    parameter_unit: str | None = None,
    energy_unit: str | None = None,
    ax: Any = None,
) -> Any:
    """Draw energies against a parameter, with the multiplets marked.

    Open markers sit where levels are degenerate; their shape tells how many. Each curve is the
    j-th lowest level; where the weights are known, the ensemble energy is drawn as well.

    Parameters
    ----------
    results : xarray.Dataset or sequence of Ensemble
        What a sweep over one parameter returns (choose with ``.sel`` if there are more), or
        ensembles of one sector.
    parameter : str
        Coordinate of the dataset; for ensembles the name to show.
    values : array_like of float, shape (m,), optional
        The parameter of each ensemble; not with a dataset.
    parameter_unit, energy_unit : str, optional
        Shown in brackets behind the names on the axes.
    ax : matplotlib Axes, optional
        By default those of a new figure.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    ArgumentError, ArgumentTypeError
        For results without energies or of more than one parameter, or values that do not fit.

    Examples
    --------
    >>> import numpy as np
    >>> import fockhull as fh
    >>> dimer = fh.SpinHalfFermions(2, particles=(1, 1))
    >>> hopping = [[0.0, -1.0], [-1.0, 0.0]]
    >>> repulsions = [0.0, 2.0, 4.0]
    >>> solved = [
    ...     fh.solve(
    ...         fh.Hamiltonian(hopping, fh.Interaction(dimer, density_density=U * np.eye(2))),
    ...         levels=3,
    ...     )
    ...     for U in repulsions
    ... ]
    >>> ax = fh.plot.spectrum(solved, "U", repulsions, parameter_unit="t", energy_unit="t")
    >>> ax.get_xlabel(), ax.get_ylabel()
    ('U (t)', 'energy (t)')
    """
    data = series(results, parameter, values)
    labels = look.axis_names(parameter, parameter_unit, "energy", energy_unit)
    ax = look.canvas(ax)
    for level, energies in enumerate(data.energies.T):
        ax.plot(data.values, energies, label=f"$E_{{{level + 1}}}$", **look.line(level))
    if data.ensemble_energies is not None:
        ax.plot(data.values, data.ensemble_energies, color="black", lw=2.6, label="ensemble $E_w$")
    _mark_multiplets(ax, data)
    look.name_axes(ax, labels)
    look.legend(ax)
    return ax


def _mark_multiplets(ax: Any, data: Series) -> None:
    """Mark where levels are degenerate; of what lasts over many values, ends and some between."""
    step = -(-len(data.values) // MOST_MARKERS)
    for multiplicity in np.unique(data.multiplicities[data.multiplicities > 1]):
        marked = data.multiplicities == multiplicity
        padded = np.pad(marked, ((1, 1), (0, 0)))
        inside = padded[:-2] & padded[2:]
        inside[::step] = False
        row, level = np.nonzero(marked & ~inside)
        style = {"ms": 6.5, "mfc": "white", "mec": look.INK, "mew": 1.2, "ls": "none"}
        marker = look.MARKERS[min(int(multiplicity) - 2, len(look.MARKERS) - 1)]
        name = f"{multiplicity} levels"
        ax.plot(data.values[row], data.energies[row, level], marker=marker, label=name, **style)


def gap(
    results: Any,
    parameter: str,
    values: npt.ArrayLike | None = None,
    *,
    between: Sequence[tuple[int, int]] = ((1, 2),),
    parameter_unit: str | None = None,
    energy_unit: str | None = None,
    ax: Any = None,
) -> Any:
    """Draw energy differences of levels against a parameter.

    Parameters
    ----------
    results, parameter, values, parameter_unit, energy_unit, ax
        As for `spectrum`.
    between : sequence of (int, int)
        Pairs of levels counted from 1, the lower first.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    ArgumentError, ArgumentTypeError
        As `spectrum`, and for levels that are not there.

    Examples
    --------
    >>> import fockhull as fh
    >>> sector = fh.Fermions(2, 1)
    >>> solved = [fh.solve(fh.Hamiltonian([[0, t], [t, 0]], sector=sector), levels=2)
    ...           for t in (0.5, 1.0)]
    >>> ax = fh.plot.gap(solved, "t", [0.5, 1.0])
    >>> ax.lines[0].get_ydata()
    array([1., 2.])
    """
    data = series(results, parameter, values)
    pairs = _checked_pairs(between, data.energies.shape[1])
    labels = look.axis_names(parameter, parameter_unit, "energy difference", energy_unit)
    ax = look.canvas(ax)
    for index, (low, high) in enumerate(pairs):
        difference = data.energies[:, high - 1] - data.energies[:, low - 1]
        style = look.line(index) | {"marker": look.MARKERS[index % len(look.MARKERS)]}
        every = look.spread(index, len(pairs), len(difference), 12)
        name = f"$E_{{{high}}} - E_{{{low}}}$"
        ax.plot(data.values, difference, label=name, mfc="white", ms=4.5, markevery=every, **style)
    look.name_axes(ax, labels)
    look.legend(ax)
    return ax


def _checked_pairs(between: Any, levels: int) -> list[tuple[int, int]]:
    expected = f"pairs (lower, higher) of levels from 1 to {levels}"
    numbers = arguments.indices("between", between)
    if numbers.ndim != 2 or numbers.shape[1] != 2 or not len(numbers):
        raise ArgumentError("between", repr(between), expected)
    pairs = [(int(low), int(high)) for low, high in numbers]
    if not all(1 <= low < high <= levels for low, high in pairs):
        raise ArgumentError("between", repr(between), expected)
    return pairs
