"""Occupations and slacks against a parameter, with the limits that weights set."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib.transforms import blended_transform_factory

from fockhull import _arguments as arguments
from fockhull.errors import ArgumentError
from fockhull.plot import limits, look
from fockhull.plot.bars import checked_polytope, in_symbols, tightest
from fockhull.plot.series import Series, series
from fockhull.polytope import ExclusionPolytope

RealArray = npt.NDArray[np.float64]

RANGE_STEP = 0.024
"""Distance of the bars that show ranges, in widths of the axes."""


def occupations(
    results: Any,
    parameter: str,
    values: npt.ArrayLike | None = None,
    *,
    polytope: ExclusionPolytope | None = None,
    leading: int | None = None,
    parameter_unit: str | None = None,
    ax: Any = None,
) -> Any:
    """Draw natural occupations against a parameter, with the limits that weights set.

    Hatched is what no allowed point has. For single occupations the bars at the right show the
    range of each: from the least to the largest value of the k-th largest occupation.

    Parameters
    ----------
    results, parameter, values, parameter_unit, ax
        As for `spectrum`; with weights.
    polytope : ExclusionPolytope, optional
        Whose limits to draw; spin-summed occupations are drawn for one of the spin-summed
        domain (those of the spin-summed density matrix; ensembles only).
    leading : int, optional
        Draw the sum of so many leading occupations (per spin where resolved) instead of each.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    ArgumentError, ArgumentTypeError
        As `spectrum`, for results without occupations, and a polytope of another shape.

    Examples
    --------
    >>> import fockhull as fh
    >>> sector = fh.Fermions(3, 1)
    >>> chain = [[0, -1, 0], [-1, 0, -1], [0, -1, 0]]
    >>> e = fh.solve(fh.Hamiltonian(chain, sector=sector), [0.6, 0.4])
    >>> P = e.exclusion_polytope()
    >>> ax = fh.plot.occupations([e, e], "time", [0, 1], polytope=P, parameter_unit="s")
    >>> ax.lines[0].get_ydata()
    array([0.6, 0.6])
    """
    data = series(results, parameter, values)
    numbers = _numbers(data, results, polytope)
    d = numbers.shape[-1]
    count = None if leading is None else arguments.count("leading", leading)
    if count is not None and count > d:
        raise ArgumentError("leading", count, f"an integer from 1 to {d}")
    name = "occupation" if count is None else f"sum of {count} leading occupations"
    if polytope is not None and polytope.domain == "spin-summed":
        name = name.replace("occupation", "spin-summed occupation")
    labels = look.axis_names(parameter, parameter_unit, name)
    ax = look.canvas(ax)
    shown = numbers if count is None else numbers[..., :count].sum(axis=-1, keepdims=True)
    rows = shown.reshape(len(shown), -1, shown.shape[-1])
    spins = ("",) if rows.shape[1] == 1 else ("up", "down")
    styles = _occupation_curves(ax, data.values, rows, spins, named=count is None)
    if polytope is not None:
        of = limits.of_occupations(polytope) if count is None else limits.of_leading_sums(polytope)
        low, high = (np.reshape(side, (-1, d)) for side in of)
        if count is not None:
            low, high = low[:, count - 1 : count], high[:, count - 1 : count]
        _draw_limits(ax, rows, low, high)
        if count is None:
            _range_bars(ax, low.ravel(), high.ravel(), styles)
    look.name_axes(ax, labels)
    if rows.shape[1] * rows.shape[2] > 1:
        beside = 1.0 if polytope is None else 1.04 + RANGE_STEP * len(styles)
        outside = {"loc": "upper left", "bbox_to_anchor": (beside, 1.0)}
        look.legend(ax, **(outside if count is None else {}))
    return ax


def _numbers(data: Series, results: Any, polytope: ExclusionPolytope | None) -> RealArray:
    """Return the occupations that the polytope speaks about."""
    if data.occupations is None:
        raise ArgumentError("results", "no occupations", "results of ensembles with weights")
    if polytope is None:
        return data.occupations
    checked_polytope(polytope)
    if data.sector not in (None, repr(polytope.sector)):
        raise ArgumentError("polytope", repr(polytope), f"one of {data.sector}, as the results")
    numbers = data.occupations
    if polytope.domain == "spin-summed" and isinstance(results, Sequence):
        summed = np.array([one.density_matrix.sum(axis=0) for one in results])
        numbers = np.linalg.eigvalsh(summed)[..., ::-1]
    if numbers.shape[1:] != polytope.shape:
        given = f"occupations of shape {polytope.shape} in the {polytope.domain} domain"
        raise ArgumentError("polytope", given, f"shape {numbers.shape[1:]}, as the results have")
    return numbers


def _occupation_curves(
    ax: Any, x: RealArray, rows: RealArray, spins: Sequence[str], *, named: bool
) -> list[dict[str, Any]]:
    """Draw a curve for each; spins share the style of an orbital, up full and down open."""
    styles = []
    for spin, word in enumerate(spins):
        markers = look.spread(spin, len(spins), len(x), 12)
        for k in range(rows.shape[2]):
            style = look.line(k)
            if word:
                face = "white" if word == "down" else style["color"]
                style |= {"marker": "v" if word == "down" else "^", "mfc": face}
            arrow = f"\\{word}arrow" if word else ""
            label = f"$n_{{{k + 1}{arrow}}}$" if named else word or None
            ax.plot(x, rows[:, spin, k], label=label, ms=5, markevery=markers, **style)
            styles.append(style)
    return styles


def _draw_limits(ax: Any, rows: RealArray, low: RealArray, high: RealArray) -> None:
    """Hatch what lies beyond the limits of all that is drawn."""
    least, most = float(low.min()), float(high.max())
    lowest, highest = np.nanmin(rows, initial=least), np.nanmax(rows, initial=most)
    span = max(highest - lowest, 1e-12)
    bottom, top = lowest - 0.08 * span, highest + 0.08 * span
    for start, stop, edge in ((bottom, least, least), (most, top, most)):
        look.forbid(ax, start, stop)
        ax.axhline(edge, color=look.INK, lw=1.2, zorder=1)
    ax.set_ylim(bottom, top)


def _range_bars(ax: Any, low: RealArray, high: RealArray, styles: list[dict[str, Any]]) -> None:
    """Draw the range of each occupation beside the right end of the curves."""
    across = blended_transform_factory(ax.transAxes, ax.transData)
    for index, style in enumerate(styles):
        x = 1.03 + RANGE_STEP * index
        ends = {"marker": "_"} | style | {"lw": 1.3, "ms": 6}
        ax.plot([x, x], [low[index], high[index]], transform=across, clip_on=False, **ends)
    beside = {"transform": ax.transAxes, "color": look.INK, "fontsize": "small", "va": "bottom"}
    ax.text(1.02, 1.0, "ranges", **beside)


def slack(
    results: Any,
    parameter: str,
    values: npt.ArrayLike | None = None,
    *,
    polytope: ExclusionPolytope,
    most: int | None = 5,
    parameter_unit: str | None = None,
    ax: Any = None,
) -> Any:
    """Draw the slack of the inequalities against a parameter; zero is the boundary.

    Parameters
    ----------
    results, parameter, values, parameter_unit, ax
        As for `spectrum`; with weights.
    polytope : ExclusionPolytope
        Small enough for a list of its inequalities.
    most : int, optional
        Draw so many, those that come closest to zero; None for all.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    ArgumentError, ArgumentTypeError
        As `occupations` and `ExclusionPolytope.inequalities`.

    Examples
    --------
    >>> import fockhull as fh
    >>> sector = fh.Fermions(3, 1)
    >>> chain = [[0, -1, 0], [-1, 0, -1], [0, -1, 0]]
    >>> e = fh.solve(fh.Hamiltonian(chain, sector=sector), [0.6, 0.4])
    >>> ax = fh.plot.slack([e, e], "time", [0, 1], polytope=e.exclusion_polytope())
    >>> bool(abs(ax.lines[-1].get_ydata()).max() < 1e-12)
    True
    """
    checked_polytope(polytope)
    data = series(results, parameter, values)
    numbers = _numbers(data, results, polytope)
    finite = np.isfinite(numbers).reshape(len(numbers), -1).all(axis=1)
    if not finite.any():
        raise ArgumentError("results", "no finished point", "at least one")
    chosen = tightest(polytope, numbers[finite], most)
    labels = look.axis_names(parameter, parameter_unit, "slack")
    ax = look.canvas(ax)
    lowest = highest = 0.0
    for index, inequality in enumerate(chosen):
        slacks = np.full(len(numbers), np.nan)
        slacks[finite] = inequality.slack(numbers[finite])
        lowest, highest = min(lowest, np.nanmin(slacks)), max(highest, np.nanmax(slacks))
        style = look.line(index) | {"marker": look.MARKERS[index % len(look.MARKERS)]}
        every = look.spread(index, len(chosen), len(slacks), 8)
        ax.plot(
            data.values,
            slacks,
            label=in_symbols(inequality),
            mfc="white",
            ms=4.5,
            markevery=every,
            **style,
        )
    margin = 0.06 * max(highest - lowest, 1e-12)
    ax.set_ylim(lowest - margin, highest + margin)
    look.forbid(ax, lowest - margin, 0.0)
    look.name_axes(ax, labels)
    look.legend(ax, loc="upper left", bbox_to_anchor=(0.0, -0.14), fontsize="small")
    return ax
