"""Level crossings along a parameter, and states followed through them."""

from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr
from scipy.optimize import linear_sum_assignment

from fockhull.errors import ArgumentError, ArgumentTypeError

Array = npt.NDArray[Any]


def follow_states(
    results: xr.Dataset, dim: str, *, vectors: str = "vectors", state: str = "level"
) -> xr.Dataset:
    """Reorder the states of a sweep so that each keeps its character along an axis.

    At each point the states are matched with those of the last finished point
    before it, so that the sum of squared overlaps is largest. Where energies
    cross, the order of the matched states differs from that of the energies.

    Parameters
    ----------
    results : xarray.Dataset
        Results of a sweep, with the vectors of its states.
    dim : str
        Axis of the grid along which states are followed.
    vectors : str
        Variable with the normalised vectors; its dimensions are those of the
        grid, `state`, and those of the components.
    state : str
        Dimension that counts the states by energy.

    Returns
    -------
    xarray.Dataset
        The results with every variable over `dim` and `state` reordered, and
        the coordinates ``followed_level`` (place of the state by energy,
        counted from 0; -1 where the point is missing), ``followed_overlap``
        (squared overlap with the same state at the point before; NaN at the
        first point) and ``followed_crossing`` (whether the state changed
        places with another one just before this point), each with the
        dimensions of the grid and `state`.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If `results` lacks a dimension or variable named.

    Notes
    -----
    A small overlap says that the match is not to be trusted: the step is too
    wide, the levels avoid each other within it, the state has left the levels
    computed, or it is one of a degenerate multiplet, whose vectors are
    arbitrary. The assignment is solved by
    :func:`scipy.optimize.linear_sum_assignment`.
    """
    grid = _grid_dims(results, dim, vectors, state)
    others = [name for name in grid if name != dim]
    components = [d for d in results[vectors].dims if d not in (*grid, state)]
    ordered = results[vectors].transpose(*others, dim, *components, state)
    lead = tuple(results.sizes[name] for name in others)
    steps, states = results.sizes[dim], results.sizes[state]
    lines = ordered.values.reshape(-1, steps, int(np.prod(ordered.shape[len(grid) : -1])), states)

    levels = np.empty((len(lines), steps, states), dtype=np.int64)
    overlaps = np.empty(levels.shape)
    for number, line in enumerate(lines):
        levels[number], overlaps[number] = _follow(line)

    dims = (*others, dim, state)
    shape = (*lead, steps, states)
    return _reordered(results, dims, levels.reshape(shape), overlaps.reshape(shape))


def _grid_dims(results: xr.Dataset, dim: str, vectors: str, state: str) -> tuple[str, ...]:
    """Return the dimensions of the grid, after checking the arguments."""
    if not isinstance(results, xr.Dataset):
        raise ArgumentTypeError("results", type(results).__name__, "an xarray.Dataset")
    if vectors not in results:
        expected = f"a variable of the results: {sorted(map(str, results.data_vars))}"
        raise ArgumentError("vectors", repr(vectors), expected)
    if "finished" not in results.coords:
        raise ArgumentError("results", "no coordinate 'finished'", "results of a sweep")
    grid = tuple(str(name) for name in results["finished"].dims)
    if dim not in grid:
        raise ArgumentError("dim", repr(dim), f"an axis of the grid: {list(grid)}")
    dims = results[vectors].dims
    if state not in dims or state in grid:
        raise ArgumentError("state", repr(state), f"a dimension of {vectors!r}: {list(dims)}")
    return grid


def _follow(line: Array) -> tuple[Array, Array]:
    """Follow states along one line of vectors, shape (steps, components, states).

    Returns level and squared overlap of each followed state, shape (steps, states).
    """
    steps, _, states = line.shape
    levels = np.full((steps, states), -1)
    overlaps = np.full((steps, states), np.nan)
    before: Array | None = None
    for step, vectors in enumerate(line):
        if np.isnan(vectors).all():
            continue
        known = np.nan_to_num(vectors)  # padding of a ragged state dimension overlaps nothing
        levels[step] = np.arange(states)
        if before is not None:
            squared = np.abs(before.conj().T @ known) ** 2
            _, levels[step] = linear_sum_assignment(squared, maximize=True)
            overlaps[step] = squared[np.arange(states), levels[step]]
        before = known[:, levels[step]]
    return levels, overlaps


def _reordered(
    results: xr.Dataset, dims: tuple[str, ...], levels: Array, overlaps: Array
) -> xr.Dataset:
    state = dims[-1]
    order = xr.DataArray(np.where(levels < 0, np.arange(levels.shape[-1]), levels), dims=dims)
    moved = {
        name: variable.isel({state: order.drop_vars(state, errors="ignore")})
        .drop_vars(state, errors="ignore")
        .transpose(*variable.dims)
        if set(dims) <= set(variable.dims)
        else variable
        for name, variable in results.data_vars.items()
    }
    followed = {
        "followed_level": (dims, levels),
        "followed_overlap": (dims, overlaps),
        "followed_crossing": (dims, _crossings(levels)),
    }
    reordered: xr.Dataset = results.assign(moved).assign_coords(followed)
    return reordered


def _crossings(levels: Array) -> Array:
    """Whether a state has another place than at the last finished point before."""
    crossing = np.zeros(levels.shape, dtype=np.bool_)
    for line in np.ndindex(levels.shape[:-2]):
        finished = np.flatnonzero(levels[line][:, 0] >= 0)
        crossing[line][finished[1:]] = np.diff(levels[line][finished], axis=0) != 0
    return crossing
