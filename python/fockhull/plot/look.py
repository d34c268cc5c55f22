"""One look for all pictures: ink, one accent, line styles that survive black and white."""

from __future__ import annotations

from typing import Any

import matplotlib.pyplot as plt
from matplotlib.axes import Axes
from mpl_toolkits.mplot3d.axes3d import Axes3D

from fockhull.errors import ArgumentError, ArgumentTypeError

INK = "#22303c"
ACCENT = "#b8432f"
SECOND = "#2f7f86"
THIRD = "#8a6d1f"
SHADE = "#ece7dd"
HATCH = "#c3bcad"
FORBIDDEN = "////"
COLOURS = (INK, SECOND, ACCENT, THIRD)
LINES: tuple[Any, ...] = (
    "-",
    (0, (5, 1.6)),
    (0, (1, 1.2)),
    (0, (7, 1.6, 1, 1.6)),
    (0, (3, 3)),
    (0, (12, 2)),
    (0, (3, 1, 1, 1, 1, 1)),
)
MARKERS = ("o", "s", "^", "D", "v", "P", "X")


def line(index: int) -> dict[str, Any]:
    """Colour and line style of a curve; together they repeat after 28 curves."""
    return {"color": COLOURS[index % len(COLOURS)], "ls": LINES[index % len(LINES)], "lw": 1.6}


def canvas(ax: Any, *, dimensions: int = 2) -> Any:
    """Return the caller's axes, or those of a new figure, with the frame of our look."""
    kind, name = (
        (Axes, "matplotlib Axes") if dimensions == 2 else (Axes3D, "three-dimensional Axes")
    )
    if ax is None:
        subplot = {} if dimensions == 2 else {"projection": "3d"}
        _, ax = plt.subplots(layout="constrained", subplot_kw=subplot)
    if not isinstance(ax, Axes):
        raise ArgumentTypeError("ax", type(ax).__name__, f"{name}, or None for a new figure")
    if not isinstance(ax, kind) or (dimensions == 2 and isinstance(ax, Axes3D)):
        made = "subplots()" if dimensions == 2 else 'subplots(subplot_kw={"projection": "3d"})'
        raise ArgumentError("ax", type(ax).__name__, f"{name}, made by {made}")
    _frame(ax)
    return ax


def _frame(ax: Any) -> None:
    if not isinstance(ax, Axes3D):
        ax.spines[["top", "right"]].set_visible(False)
        ax.spines[["left", "bottom"]].set_color(INK)
        ax.tick_params(colors=INK)
    else:
        for axis in (ax.xaxis, ax.yaxis, ax.zaxis):
            axis.pane.set(facecolor="white", edgecolor=HATCH)
            axis.set_tick_params(colors=INK)
        ax.grid(False)
        ax.computed_zorder = False  # points stay visible inside a solid


def axis_names(
    parameter: str, parameter_unit: object, quantity: str, energy_unit: object = None
) -> tuple[str, str]:
    """Return the names of both axes, with the caller's units in brackets."""
    units = {"parameter_unit": parameter_unit, "energy_unit": energy_unit}
    for argument, unit in units.items():
        if unit is not None and not isinstance(unit, str):
            raise ArgumentTypeError(argument, repr(unit), "a string or None")
    named = zip((parameter, quantity), units.values(), strict=True)
    across, up = (name if unit is None else f"{name} ({unit})" for name, unit in named)
    return across, up


def name_axes(ax: Any, names: tuple[str, str]) -> None:
    """Write the names of the axes."""
    ax.set_xlabel(names[0], color=INK)
    ax.set_ylabel(names[1], color=INK)


def forbid(ax: Axes, low: float, high: float) -> None:
    """Hatch a band of values that no ensemble with the weights can have."""
    ax.axhspan(low, high, facecolor=SHADE, hatch=FORBIDDEN, edgecolor=HATCH, lw=0, zorder=0)


def spread(index: int, curves: int, points: int, most: int) -> tuple[int, int]:
    """First marker and step along a curve: curves that coincide show all their markers."""
    step = max(1, points // most)
    return index * step // max(curves, 1), step


def legend(ax: Any, **options: Any) -> None:
    """Name the curves, if any is named."""
    if ax.get_legend_handles_labels()[0]:
        ax.legend(
            labelcolor=INK,
            handlelength=3.2,
            facecolor="white",
            edgecolor="none",
            framealpha=0.8,
            **options,
        )
