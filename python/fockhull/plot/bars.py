"""One point against what the weights allow: occupations and slacks as bars."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull.errors import ArgumentError, ArgumentTypeError
from fockhull.inequality import Inequality
from fockhull.plot import limits, look
from fockhull.polytope import ExclusionPolytope

RealArray = npt.NDArray[np.float64]

VIOLATION = 1e-9
"""By how much a limit must be passed to be drawn as passed."""


def occupation_bars(
    polytope: ExclusionPolytope,
    density_matrix: npt.ArrayLike | None = None,
    *,
    occupations: npt.ArrayLike | None = None,
    leading_sums: bool = False,
    ax: Any = None,
) -> Any:
    """Draw decreasing occupations as bars, with the values each can have.

    Hatched is what no allowed point reaches: above the largest and below the least value of the
    k-th largest occupation, or of the sum of the k largest. Bars that end there are cross-hatched.
    Each limit is sharp by itself; all together may still be out of reach, see `slack_bars`.

    Parameters
    ----------
    polytope : ExclusionPolytope
    density_matrix : array_like, shape (d, d) or (2, d, d), optional
        Its natural occupations are drawn.
    occupations : array_like of float, shape (d,) or (2, d), optional
        Instead of a density matrix, in any order.
    leading_sums : bool
        Whether to draw n_1 + ... + n_k instead of n_k.
    ax : matplotlib Axes, optional
        By default those of a new figure.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    ArgumentError, ArgumentTypeError
        As `ExclusionPolytope.contains`, and for a batch of points.

    Notes
    -----
    The limits come from the support function: the largest sum of the k largest occupations is
    -f_w(h) with h = -1 on k modes; the largest n_k is that over k, and the least n_k is what the
    largest sum of k - 1 leaves, over d - k + 1 (averages over permutations stay allowed).

    Examples
    --------
    >>> import fockhull as fh
    >>> P = fh.ExclusionPolytope(fh.Fermions(4, 2), [0.6, 0.4])
    >>> ax = fh.plot.occupation_bars(P, occupations=[0.9, 0.8, 0.2, 0.1])
    >>> [float(bar.get_height().round(3)) for bar in ax.patches[:4]]
    [0.9, 0.8, 0.2, 0.1]
    """
    point = single_point(polytope, density_matrix, occupations)
    ax = look.canvas(ax)
    of, values = limits.of_occupations, point
    if leading_sums:
        of, values = limits.of_leading_sums, np.cumsum(point, axis=-1)
    low, high = (np.ravel(side) for side in of(polytope))
    heights = np.ravel(values)
    x = np.arange(len(heights)) + 0.8 * np.repeat(
        range(point.size // point.shape[-1]), point.shape[-1]
    )
    passed = (heights > high + VIOLATION) | (heights < low - VIOLATION)
    bars = ax.bar(x, heights, 0.5, facecolor="white", edgecolor=look.INK, lw=1.3, zorder=2)
    for bar, is_passed in zip(bars, passed, strict=True):
        if is_passed:
            bar.set(hatch="xxxx", edgecolor=look.ACCENT)
    _hatch_columns(ax, x, low, high, heights)
    ax.axhline(0.0, color=look.INK, lw=0.8, zorder=2.5)
    ax.set_xticks(x, _bar_names(polytope, leading_sums))
    spin = ", spin" if polytope.domain == "spin-resolved" else ""
    ax.set_xlabel(
        f"leading occupations summed{spin}" if leading_sums else f"natural orbital{spin}",
        color=look.INK,
    )
    kind = "spin-summed occupation" if polytope.domain == "spin-summed" else "occupation"
    ax.set_ylabel(f"sum of leading {kind}s" if leading_sums else kind, color=look.INK)
    return ax


def _hatch_columns(
    ax: Any, x: RealArray, low: RealArray, high: RealArray, heights: RealArray
) -> None:
    """Hatch above and below the limits of each bar, with a line at the limit."""
    span = max(high.max(), heights.max()) - min(low.min(), heights.min(), 0.0)
    top = max(high.max(), heights.max()) + 0.08 * span
    bottom = min(low.min(), heights.min(), 0.0) - 0.04 * span
    style: dict[str, Any] = {"facecolor": look.SHADE, "edgecolor": look.HATCH, "lw": 0}
    hatch = {"hatch": look.FORBIDDEN, "zorder": 1}
    ax.bar(x, top - high, 0.8, bottom=high, **style, **hatch)
    ax.bar(x, low - bottom, 0.8, bottom=bottom, **style, **hatch)
    for limit, height in ((low, 1.5), (high, 3)):
        ax.hlines(limit, x - 0.4, x + 0.4, color=look.INK, lw=1.6, zorder=height)
    ax.set_ylim(bottom, top)


def _bar_names(polytope: ExclusionPolytope, leading_sums: bool) -> list[str]:
    d = polytope.shape[-1]
    numbers = [f"1..{k}" if leading_sums and k > 1 else f"{k}" for k in range(1, d + 1)]
    arrows = "↑↓" if polytope.domain == "spin-resolved" else [""]
    return [number + arrow for arrow in arrows for number in numbers]


def slack_bars(
    polytope: ExclusionPolytope,
    density_matrix: npt.ArrayLike | None = None,
    *,
    occupations: npt.ArrayLike | None = None,
    most: int | None = None,
    ax: Any = None,
) -> Any:
    """Draw the slack of each inequality as a bar; negative ones are violated.

    Parameters
    ----------
    polytope : ExclusionPolytope
        Small enough for a list of its inequalities.
    density_matrix, occupations
        As for `occupation_bars`.
    most : int, optional
        Draw only so many, those of least slack.
    ax : matplotlib Axes, optional
        By default those of a new figure.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    ArgumentError, ArgumentTypeError
        As `ExclusionPolytope.contains` and `ExclusionPolytope.inequalities`, and for a batch.

    Examples
    --------
    >>> import fockhull as fh
    >>> P = fh.ExclusionPolytope(fh.Fermions(4, 2), [0.6, 0.4])
    >>> ax = fh.plot.slack_bars(P, occupations=[0.9, 0.8, 0.2, 0.1])
    >>> [float(bar.get_width().round(3)) for bar in ax.patches[:3]]
    [0.1, 0.1, -0.1]
    """
    point = single_point(polytope, density_matrix, occupations)
    chosen = tightest(polytope, point[np.newaxis], most)
    ax = look.canvas(ax)
    slacks = np.array([inequality.slack(point) for inequality in chosen])
    y = np.arange(len(chosen))
    bars = ax.barh(y, slacks, 0.56, facecolor="white", edgecolor=look.INK, lw=1.3, zorder=2)
    for bar, slack in zip(bars, slacks, strict=True):
        if slack < -VIOLATION:
            bar.set(hatch="xxxx", edgecolor=look.ACCENT)
    ax.axvline(0.0, color=look.INK, lw=1.6, zorder=3)
    low = min(slacks.min(initial=0.0), 0.0)
    reach = max(slacks.max(initial=0.0), -low, 1e-12)
    ax.set_xlim(low - 0.08 * reach, slacks.max(initial=0.0) + 0.12 * reach)
    ax.axvspan(
        ax.get_xlim()[0],
        0.0,
        facecolor=look.SHADE,
        hatch=look.FORBIDDEN,
        edgecolor=look.HATCH,
        lw=0,
        zorder=0,
    )
    ax.set_yticks(y, [in_symbols(inequality) for inequality in chosen])
    ax.invert_yaxis()
    ax.set_xlabel("slack (bound minus left-hand side)", color=look.INK)
    return ax


def tightest(
    polytope: ExclusionPolytope, points: RealArray, most: int | None
) -> tuple[Inequality, ...]:
    """Return the inequalities, or of them the `most` of least slack, in their order."""
    checked_polytope(polytope)
    count = None if most is None else arguments.count("most", most)
    inequalities = polytope.inequalities()
    if count is None or count >= len(inequalities):
        return inequalities
    least = [np.nanmin(inequality.slack(points)) for inequality in inequalities]
    kept = np.sort(np.argsort(least, kind="stable")[:count])
    return tuple(inequalities[index] for index in kept)


def in_symbols(inequality: Inequality) -> str:
    """Left-hand side and the bound as a number, for labels."""
    if inequality.is_positivity:
        return f"${inequality.latex}$"
    left = inequality.latex.split(r" \leq ")[0]
    return rf"${left} \leq {inequality.bound:.4g}$"


def single_point(
    polytope: ExclusionPolytope,
    density_matrix: npt.ArrayLike | None,
    occupations: npt.ArrayLike | None,
) -> RealArray:
    """Return the decreasing occupations of one point."""
    checked_polytope(polytope)
    values, lead, orbitals = polytope._points(density_matrix, occupations)
    if lead:
        argument = "occupations" if orbitals is None else "density_matrix"
        raise ArgumentError(argument, f"a batch of shape {lead}", "a single point")
    point: RealArray = -np.sort(-values.reshape(polytope.shape), axis=-1)
    return point


def checked_polytope(polytope: object) -> None:
    """Refuse what is not a polytope."""
    if not isinstance(polytope, ExclusionPolytope):
        raise ArgumentTypeError("polytope", type(polytope).__name__, "an ExclusionPolytope")
