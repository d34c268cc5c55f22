"""The points of a sweep: a product of coordinate axes, or an explicit table."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from fockhull.errors import ArgumentError, ArgumentTypeError

POINT = "point"
"""Dimension of the results over a table of points."""

RESERVED = frozenset({"finished", "failure", "previous"})
"""Names the sweep itself uses, in its results or as an argument of the task."""

Values = npt.NDArray[Any]


@dataclass(frozen=True)
class Grid:
    """Points in C order over `shape`, the last dimension fastest.

    `columns` holds one value for each step along an axis (product), or one
    value for each point (table).
    """

    columns: dict[str, Values]
    is_table: bool

    @cached_property
    def dims(self) -> tuple[str, ...]:
        """Names of the dimensions, in the order given."""
        return (POINT,) if self.is_table else tuple(self.columns)

    @cached_property
    def shape(self) -> tuple[int, ...]:
        """Number of points along each dimension."""
        if self.is_table:
            return (len(next(iter(self.columns.values()))),)
        return tuple(len(values) for values in self.columns.values())

    @property
    def size(self) -> int:
        """Number of points."""
        return int(np.prod(self.shape, dtype=np.int64))

    def coordinates(self) -> dict[str, tuple[str, Values]]:
        """Coordinate variables: name -> (dimension, values)."""
        if not self.is_table:
            return {name: (name, values) for name, values in self.columns.items()}
        labels: dict[str, tuple[str, Values]] = {POINT: (POINT, np.arange(self.size))}
        return labels | {name: (POINT, values) for name, values in self.columns.items()}

    def multi_index(self, index: int) -> tuple[int, ...]:
        """Position of point `index` along each dimension."""
        return tuple(int(i) for i in np.unravel_index(index, self.shape))

    def point(self, index: int) -> dict[str, Any]:
        """Arguments of point `index` as plain Python values."""
        steps = self.multi_index(index)
        if self.is_table:
            steps = steps * len(self.columns)
        named = zip(self.columns.items(), steps, strict=True)
        return {name: _plain(values[step]) for (name, values), step in named}

    def stride(self, dim: str) -> int:
        """Distance in index between neighbours along `dim`."""
        after = self.shape[self.dims.index(dim) + 1 :]
        return int(np.prod(after, dtype=np.int64))

    def describe(self) -> dict[str, Any]:
        """Return the grid as JSON-able data, the same for the same grid."""
        columns = {
            name: {"dtype": values.dtype.kind, "values": [_text(value) for value in values]}
            for name, values in self.columns.items()
        }
        return {"table": self.is_table, "names": list(columns), "columns": columns}


def points(**columns: npt.ArrayLike) -> list[dict[str, Any]]:
    """Return a table of points from columns of equal length.

    Parameters
    ----------
    **columns
        One array-like of shape (points,) for each argument of the task.

    Returns
    -------
    list of dict
        One dict for each point, to be given to :func:`fockhull.sweep` as `grid`.

    Raises
    ------
    ArgumentError
        If the columns differ in length, or a value is not a plain number or string.

    Examples
    --------
    >>> points(U=[1.0, 4.0], particles=[2, 3])
    [{'U': 1.0, 'particles': 2}, {'U': 4.0, 'particles': 3}]
    """
    arrays = {name: _axis(name, values) for name, values in columns.items()}
    lengths = {name: len(values) for name, values in arrays.items()}
    if len(set(lengths.values())) != 1:
        raise ArgumentError("columns", f"lengths {lengths}", "columns of one common length")
    names = list(arrays)
    rows = zip(*arrays.values(), strict=True)
    return [dict(zip(names, map(_plain, row), strict=True)) for row in rows]


def make_grid(grid: object) -> Grid:
    """Check the caller's grid and return it as a `Grid`."""
    if isinstance(grid, Grid):
        return grid
    if isinstance(grid, Mapping):
        return _product(grid)
    if isinstance(grid, Sequence) and all(isinstance(row, Mapping) for row in grid):
        return _table(grid)
    raise ArgumentTypeError(
        "grid",
        type(grid).__name__,
        "a dict of coordinate arrays, or a list of dicts, one for each point",
    )


def _product(grid: Mapping[Any, Any]) -> Grid:
    if not grid:
        raise ArgumentError("grid", "an empty dict", "at least one coordinate axis")
    columns = {_name(name): _axis(f"grid[{name!r}]", values) for name, values in grid.items()}
    for name, values in columns.items():
        if len(np.unique(values)) != len(values):
            expected = "distinct values along an axis (repeat points with a list of dicts)"
            raise ArgumentError(f"grid[{name!r}]", "a value twice", expected)
    return Grid(columns, is_table=False)


def _table(rows: Sequence[Mapping[Any, Any]]) -> Grid:
    if not rows or not rows[0]:
        raise ArgumentError("grid", "an empty table", "at least one point with one argument")
    names = list(rows[0])
    for number, row in enumerate(rows):
        if set(row) != set(names):
            expected = f"the names of the first point: {names}"
            raise ArgumentError("grid", f"names {list(row)} at point {number}", expected)
    columns = {_name(n): _axis(f"grid[{n!r}]", [row[n] for row in rows]) for n in names}
    if POINT in columns:
        raise ArgumentError("grid", "the name 'point'", "another name: it is the dimension's own")
    return Grid(columns, is_table=True)


def _name(name: object) -> str:
    if not isinstance(name, str) or not name.isidentifier() or name in RESERVED:
        expected = f"names that are keyword arguments of the task, none of {sorted(RESERVED)}"
        raise ArgumentError("grid", f"the name {name!r}", expected)
    return name


def _axis(argument: str, values: object) -> Values:
    """Return one axis as bool, int64, float64, complex128 or str values, shape (points,)."""
    expected = (
        "one-dimensional numbers, booleans or strings, not empty "
        "(for other objects give labels and look them up in the task)"
    )
    try:
        given = list(values)  # type: ignore[call-overload]
        array = np.asarray(values)
    except (TypeError, ValueError):
        raise ArgumentTypeError(argument, type(values).__name__, expected) from None
    if array.ndim != 1 or array.size == 0:
        raise ArgumentError(argument, f"shape {array.shape}", expected)
    if array.dtype.kind in "UT":
        if not all(isinstance(value, str) for value in given):
            raise ArgumentTypeError(argument, "strings mixed with numbers", expected)
        return array.astype(str)
    if array.dtype.kind not in "biufc":
        raise ArgumentTypeError(argument, f"dtype {array.dtype}", expected)
    if array.dtype.kind in "fc" and not np.isfinite(array).all():
        raise ArgumentError(argument, "NaN or infinity", "finite numbers")
    wide = {"b": np.bool_, "i": np.int64, "u": np.int64, "f": np.float64, "c": np.complex128}
    if array.dtype.kind == "u" and array.max() > np.iinfo(np.int64).max:
        raise ArgumentError(argument, int(array.max()), "integers of at most 64 bits, signed")
    return array.astype(wide[array.dtype.kind])


def _plain(value: Any) -> Any:
    return value.item() if isinstance(value, np.generic) else value


def _text(value: Any) -> str:
    """Return an exact text of one coordinate value."""
    return repr(_plain(value))


def differences(stored: dict[str, Any], given: dict[str, Any]) -> Iterator[str]:
    """Say in words where two descriptions of a grid differ."""
    if stored["table"] != given["table"]:
        kinds = {True: "a table of points", False: "a product of axes"}
        yield f"the grid is {kinds[given['table']]}, the stored one {kinds[stored['table']]}"
        return
    if stored["names"] != given["names"]:
        yield f"the grid's names are {given['names']}, the stored ones {stored['names']}"
        return
    for name, column in given["columns"].items():
        old, new = stored["columns"][name]["values"], column["values"]
        if len(old) != len(new):
            yield f"grid[{name!r}] has {len(new)} values, the stored one {len(old)}"
        elif old != new:
            at = next(i for i, pair in enumerate(zip(old, new, strict=True)) if len(set(pair)) > 1)
            yield f"grid[{name!r}][{at}] is {new[at]}, the stored one {old[at]}"
        elif stored["columns"][name]["dtype"] != column["dtype"]:
            yield f"grid[{name!r}] holds numbers of another type than the stored one"
