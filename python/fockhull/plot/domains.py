"""Pictures of the domain itself, with points in it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
from mpl_toolkits.mplot3d.art3d import Line3DCollection, Poly3DCollection

from fockhull import _arguments as arguments
from fockhull.errors import ArgumentError, ArgumentTypeError
from fockhull.plot import look
from fockhull.plot.shadow import faces, polygon, reach_of, size
from fockhull.polytope import ExclusionPolytope

RealArray = npt.NDArray[np.float64]
Place = tuple[int, ...]


def domain(
    polytopes: ExclusionPolytope | Sequence[ExclusionPolytope],
    modes: Sequence[Any] = (0, 1),
    *,
    points: npt.ArrayLike | None = None,
    labels: Sequence[str] | None = None,
    ax: Any = None,
) -> Any:
    """Draw exclusion polytopes as seen in two or three modes.

    The outline is that of a slice and of a shadow at once: the slice where the other modes (of
    each spin) share what is left equally, and the shadow of the whole polytope, since an average
    over permutations of the other modes stays inside. So a point outside the outline is never
    allowed; one inside may still be refused for its other occupations, and the marker says so.

    Parameters
    ----------
    polytopes : ExclusionPolytope or sequence of ExclusionPolytope
        Of one sector and domain, for instance for several weight vectors.
    modes : sequence of int, or of (int, int)
        Two or three modes counted from 0; pairs (spin, mode) in the spin-resolved domain, spin
        0 being up.
    points : array_like of float, shape (m, d) or (m, 2, d), optional
        Occupations in any order (natural or of sites). Filled where every polytope drawn allows
        them, open with a cross where one does not.
    labels : sequence of str, optional
        Names of the polytopes; by default their r and, where that does not tell them apart, the
        weights.
    ax : matplotlib Axes, optional
        Three-dimensional for three modes; by default those of a new figure.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    ArgumentError, ArgumentTypeError
        For polytopes of different sectors or domains, modes that are out of range or repeated,
        a domain that is flat in three modes, or points of another shape.

    Notes
    -----
    The outline is found from the support function alone (each edge or face is asked whether the
    domain goes beyond it), so it is exact and needs no list of inequalities.

    Examples
    --------
    >>> import fockhull as fh
    >>> sector = fh.Fermions(3, 1)
    >>> hierarchy = [fh.ExclusionPolytope(sector, w) for w in ([1.0], [0.7, 0.3])]
    >>> ax = fh.plot.domain(hierarchy, points=[[0.6, 0.3, 0.1], [0.9, 0.1, 0.0]])
    >>> ax.get_xlabel()
    '$n_{1}$'
    """
    shown = _checked_polytopes(polytopes)
    places = _checked_places(shown[0], modes)
    names = _checked_labels(shown, labels)
    given = None if points is None else _checked_points(shown[0], points)
    outlines = [_outline(one, places) for one in shown]
    ax = look.canvas(ax, dimensions=len(places))
    draw = _draw_polygon if len(places) == 2 else _draw_solid
    innermost = int(np.argmin([size(one) for one in outlines]))
    for index, (outline, name) in enumerate(zip(outlines, names, strict=True)):
        # where edges coincide, the first shows
        style = look.line(index) | {"zorder": 2.0 - 0.5 * index / len(outlines)}
        draw(ax, outline, name, style, index == innermost)
    if given is not None:
        _draw_points(ax, shown, given, places)
    for set_label, place in zip(
        (ax.set_xlabel, ax.set_ylabel, getattr(ax, "set_zlabel", None)), places, strict=False
    ):
        set_label(_mode_label(place), color=look.INK)
    ax.set_aspect("equal", adjustable="datalim" if len(places) == 2 else "box")
    look.legend(
        ax,
        **(
            {}
            if len(places) == 2
            else {"loc": "upper right", "fontsize": "small", "bbox_to_anchor": (0.1, 1.0)}
        ),
    )
    return ax


def _outline(polytope: ExclusionPolytope, places: list[Place]) -> list[RealArray]:
    """Return one polygon, or the faces of a solid."""
    flat = [int(np.ravel_multi_index(place, polytope.shape)) for place in places]
    reach = reach_of(polytope, flat)
    if len(places) == 2:
        return [polygon(reach)]
    found = faces(reach)
    if found is None:
        given = f"modes in which the domain of {polytope!r} is flat"
        raise ArgumentError("modes", given, "two modes, or three that leave others out")
    return found


def _draw_polygon(
    ax: Any, outline: list[RealArray], name: str, style: dict[str, Any], filled: bool
) -> None:
    corners = outline[0]
    closed = np.concatenate([corners, corners[:1]])
    if filled:
        ax.fill(*closed.T, facecolor=look.SHADE, edgecolor="none", zorder=0.5)
    marker = {"marker": "+", "ms": 9} if len(corners) == 1 else {}
    ax.plot(*closed.T, label=name, **style, **marker)


def _draw_solid(
    ax: Any, outline: list[RealArray], name: str, style: dict[str, Any], filled: bool
) -> None:
    edges = [pair for face in outline for pair in zip(face, np.roll(face, -1, axis=0), strict=True)]
    distinct = {tuple(sorted(map(tuple, np.round(pair, 7)))): pair for pair in edges}
    if filled:
        ax.add_collection3d(
            Poly3DCollection(outline, facecolor=look.SHADE, edgecolor="none", alpha=0.5, zorder=0.5)
        )
    lines = Line3DCollection(
        list(distinct.values()),
        colors=style["color"],
        linestyles=[style["ls"]],
        linewidths=1.3,
        zorder=style["zorder"],
    )
    lines.set_label(name)
    ax.add_collection3d(lines)
    ax.auto_scale_xyz(*np.concatenate(outline).T)


def _draw_points(
    ax: Any, polytopes: list[ExclusionPolytope], points: RealArray, places: list[Place]
) -> None:
    allowed = np.all([one.contains(occupations=points) for one in polytopes], axis=0)
    seen = np.stack([_at(points, place) for place in places])
    depth = {} if len(places) == 2 else {"depthshade": False}
    kinds = (
        (allowed, "o", look.ACCENT, "allowed"),
        (
            ~allowed,
            "X",
            "white",
            "not allowed" if len(polytopes) == 1 else "refused by one or more",
        ),
    )
    for chosen, marker, face, name in kinds:
        if chosen.any():
            ax.scatter(
                *seen[:, chosen],
                marker=marker,
                s=46 if marker == "X" else 30,
                facecolor=face,
                edgecolor=look.ACCENT,
                linewidth=1.1,
                label=name,
                zorder=3,
                **depth,
            )


def _at(points: RealArray, place: Place) -> RealArray:
    for index in place:
        points = points[:, index]
    return points


def _mode_label(place: Place) -> str:
    mode = place[-1] + 1
    arrow = "" if len(place) == 1 else ("\\uparrow", "\\downarrow")[place[0]]
    return f"$n_{{{mode}{arrow}}}$"


def _checked_polytopes(given: object) -> list[ExclusionPolytope]:
    shown = [given] if isinstance(given, ExclusionPolytope) else given
    expected = "an ExclusionPolytope or a sequence of them"
    if not isinstance(shown, Sequence) or isinstance(shown, str):
        raise ArgumentTypeError("polytopes", type(given).__name__, expected)
    if not shown:
        raise ArgumentError("polytopes", "none", expected)
    for one in shown:
        if not isinstance(one, ExclusionPolytope):
            raise ArgumentTypeError("polytopes", type(one).__name__, expected)
        if (one.sector, one.domain) != (shown[0].sector, shown[0].domain):
            raise ArgumentError(
                "polytopes", f"{shown[0]!r} and {one!r}", "polytopes of one sector and domain"
            )
    return list(shown)


def _checked_places(polytope: ExclusionPolytope, modes: object) -> list[Place]:
    shape = polytope.shape
    kind = "modes" if len(shape) == 1 else "pairs (spin, mode)"
    expected = f"two or three different {kind}, counted from 0"
    if not isinstance(modes, Sequence | np.ndarray) or isinstance(modes, str):
        raise ArgumentTypeError("modes", repr(modes), expected)
    numbers = np.asarray(arguments.reals("modes", list(modes)))
    if numbers.ndim != len(shape) or (numbers.ndim == 2 and numbers.shape[1] != 2):
        raise ArgumentError("modes", repr(modes), expected)
    places = [
        tuple(
            arguments.position("modes", index, length)
            for index, length in zip(p, shape, strict=True)
        )
        for p in ([(m,) for m in modes] if len(shape) == 1 else modes)
    ]
    if len(places) not in (2, 3) or len(set(places)) != len(places):
        raise ArgumentError("modes", repr(modes), expected)
    return places


def _checked_labels(polytopes: list[ExclusionPolytope], labels: object) -> list[str]:
    if labels is None:
        levels = [len(one.weights) for one in polytopes]
        if len(set(levels)) == len(levels):
            return [f"$r = {r}$" for r in levels]
        return [_weights_in_words(one.weights) for one in polytopes]
    expected = f"{len(polytopes)} strings, one for each polytope"
    if isinstance(labels, str) or not isinstance(labels, Sequence):
        raise ArgumentTypeError("labels", repr(labels), expected)
    if not all(isinstance(name, str) for name in labels):
        raise ArgumentTypeError("labels", repr(labels), expected)
    if len(labels) != len(polytopes):
        raise ArgumentError("labels", f"{len(labels)} strings", expected)
    return list(labels)


def _weights_in_words(weights: RealArray) -> str:
    shown = ", ".join(f"{w:.3g}" for w in weights[:4]) + (", ..." if len(weights) > 4 else "")
    return f"$w$ = ({shown})"


def _checked_points(polytope: ExclusionPolytope, points: npt.ArrayLike) -> RealArray:
    values = arguments.reals("points", points)
    shape = polytope.shape
    if values.shape == shape:
        values = values[np.newaxis]
    if values.shape[1:] != shape or values.ndim != len(shape) + 1:
        expected = f"occupations of shape (m, {', '.join(map(str, shape))})"
        raise ArgumentError("points", f"shape {values.shape}", expected)
    return values
