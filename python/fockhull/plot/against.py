"""Results against a parameter: spectra, gaps, occupations and slacks."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib.transforms import blended_transform_factory

from fockhull import _arguments as arguments
from fockhull.errors import ArgumentError
from fockhull.plot import limits, look
from fockhull.plot.bars import in_symbols, tightest
from fockhull.plot.series import Series, series
from fockhull.polytope import ExclusionPolytope

RealArray = npt.NDArray[np.float64]

MOST_MARKERS = 24
"""On one curve, of the multiplets that last."""
RANGE_STEP = 0.024
"""Distance of the bars that show ranges, in widths of the axes."""


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
    labels = _labels(parameter, parameter_unit, "energy", energy_unit)
    ax = look.canvas(ax)
    for level, energies in enumerate(data.energies.T):
        ax.plot(data.values, energies, label=f"$E_{{{level + 1}}}$", **look.line(level))
    if data.ensemble_energies is not None:
        ax.plot(data.values, data.ensemble_energies, color="black", lw=2.6, label="ensemble $E_w$")
    _mark_multiplets(ax, data)
    _name(ax, labels)
    look.legend(ax)
    return ax


def _mark_multiplets(ax: Any, data: Series) -> None:
    """One marker for each multiplet and value; those that last over many values are thinned."""
    for multiplicity in np.unique(data.multiplicities[data.multiplicities > 1]):
        marked = data.multiplicities == multiplicity
        step = max(1, int(np.ceil(marked.any(axis=1).sum() / MOST_MARKERS)))
        rows = np.flatnonzero(marked.any(axis=1))[::step]
        places = [(row, level) for row in rows for level in np.flatnonzero(marked[row])]
        x, y = (
            np.array(side)
            for side in zip(
                *((data.values[i], data.energies[i, j]) for i, j in places), strict=True
            )
        )
        marker = look.MARKERS[min(int(multiplicity) - 2, len(look.MARKERS) - 1)]
        ax.plot(
            x, y, marker, ms=6.5, mfc="white", mec=look.INK, mew=1.2, label=f"{multiplicity} levels"
        )


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
    labels = _labels(parameter, parameter_unit, "energy difference", energy_unit)
    ax = look.canvas(ax)
    for index, (low, high) in enumerate(pairs):
        difference = data.energies[:, high - 1] - data.energies[:, low - 1]
        style = look.line(index) | {"marker": look.MARKERS[index % len(look.MARKERS)]}
        every = look.spread(index, len(pairs), len(difference), 12)
        name = f"$E_{{{high}}} - E_{{{low}}}$"
        ax.plot(data.values, difference, label=name, mfc="white", ms=4.5, markevery=every, **style)
    _name(ax, labels)
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
    count = None if leading is None else arguments.position("leading", leading, d + 1)
    if count == 0:
        raise ArgumentError("leading", 0, f"an integer from 1 to {d}")
    name = "occupation" if count is None else f"sum of {count} leading occupations"
    if polytope is not None and polytope.domain == "spin-summed":
        name = name.replace("occupation", "spin-summed occupation")
    labels = _labels(parameter, parameter_unit, name, None)
    ax = look.canvas(ax)
    shown = numbers if count is None else numbers[..., :count].sum(axis=-1, keepdims=True)
    rows = shown.reshape(len(shown), -1, shown.shape[-1])
    arrows = ("",) if rows.shape[1] == 1 else ("\\uparrow", "\\downarrow")
    styles = _occupation_curves(ax, data.values, rows, arrows, named=count is None)
    if polytope is not None:
        of = limits.of_occupations(polytope) if count is None else limits.of_leading_sums(polytope)
        low, high = (np.reshape(side, (-1, d)) for side in of)
        if count is not None:
            low, high = low[:, count - 1 : count], high[:, count - 1 : count]
        _draw_limits(ax, rows, low, high)
        if count is None:
            _range_bars(ax, low.ravel(), high.ravel(), styles)
    _name(ax, labels)
    if rows.shape[1] * rows.shape[2] > 1:
        beside = 1.0 if polytope is None else 1.04 + RANGE_STEP * len(styles)
        outside = {"loc": "upper left", "bbox_to_anchor": (beside, 1.0)}
        look.legend(ax, **(outside if count is None else {}))
    return ax


def _numbers(data: Series, results: Any, polytope: ExclusionPolytope | None) -> RealArray:
    if data.occupations is None:
        raise ArgumentError("results", "no occupations", "results of ensembles with weights")
    numbers = data.occupations
    if polytope is None:
        return numbers
    if not isinstance(polytope, ExclusionPolytope):
        raise _wrong_polytope(type(polytope).__name__)
    if polytope.domain == "spin-summed" and isinstance(results, Sequence):
        summed = np.array([one.density_matrix.sum(axis=0) for one in results])
        numbers = np.linalg.eigvalsh(summed)[..., ::-1]
    if numbers.shape[1:] != polytope.shape:
        given = f"occupations of shape {polytope.shape} in the {polytope.domain} domain"
        raise ArgumentError("polytope", given, f"shape {numbers.shape[1:]}, as the results have")
    return numbers


def _occupation_curves(
    ax: Any, x: RealArray, rows: RealArray, arrows: Sequence[str], *, named: bool
) -> list[dict[str, Any]]:
    """Both spins share the style of an orbital; markers, up full and down open, tell them apart."""
    styles = []
    for spin, arrow in enumerate(arrows):
        for k in range(rows.shape[2]):
            style = look.line(k) | (
                {"marker": "^v"[spin], "mfc": ("full", "white")[spin]} if arrow else {}
            )
            if style.get("mfc") == "full":
                style["mfc"] = style["color"]
            label = (
                f"$n_{{{k + 1}{arrow}}}$"
                if named
                else {"\\uparrow": "up", "\\downarrow": "down"}.get(arrow, "sum")
            )
            ax.plot(
                x,
                rows[:, spin, k],
                label=label,
                ms=5,
                markevery=look.spread(spin, len(arrows), len(x), 12),
                **style,
            )
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
        ends = {
            "marker": style.get("marker", "_"),
            "mfc": style.get("mfc", style["color"]),
            "ms": 6,
        }
        line = ax.plot(
            [x, x],
            [low[index], high[index]],
            color=style["color"],
            ls=style["ls"],
            lw=1.3,
            transform=across,
            clip_on=False,
            **ends,
        )[0]
        line.set_in_layout(True)
    ax.text(
        1.02, 1.0, "ranges", transform=ax.transAxes, color=look.INK, fontsize="small", va="bottom"
    )


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
    if not isinstance(polytope, ExclusionPolytope):
        raise _wrong_polytope(type(polytope).__name__)
    data = series(results, parameter, values)
    numbers = _numbers(data, results, polytope)
    finite = np.isfinite(numbers).reshape(len(numbers), -1).all(axis=1)
    if not finite.any():
        raise ArgumentError("results", "no finished point", "at least one")
    chosen = tightest(polytope, numbers[finite], most)
    labels = _labels(parameter, parameter_unit, "slack", None)
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
    _name(ax, labels)
    look.legend(ax, loc="upper left", bbox_to_anchor=(0.0, -0.14), fontsize="small")
    return ax


def _wrong_polytope(given: str) -> Exception:
    from fockhull.errors import ArgumentTypeError  # noqa: PLC0415

    return ArgumentTypeError("polytope", given, "an ExclusionPolytope")


def _labels(
    parameter: str, parameter_unit: str | None, quantity: str, unit: str | None
) -> tuple[str, str]:
    return (
        look.named(parameter, look.text("parameter_unit", parameter_unit)),
        look.named(quantity, look.text("energy_unit", unit)),
    )


def _name(ax: Any, labels: tuple[str, str]) -> None:
    ax.set_xlabel(labels[0], color=look.INK)
    ax.set_ylabel(labels[1], color=look.INK)
