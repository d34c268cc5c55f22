"""Names, types and shapes of a sweep's results, fixed by the first of them."""

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from fockhull.errors import ArgumentError
from fockhull.sweeps.grid import RESERVED, Grid
from fockhull.sweeps.record import Record, Variable

_EXACT = {("int64", "float64"), ("int64", "complex128"), ("float64", "complex128")}
_LARGEST_EXACT_INTEGER = 2**53


class LayoutError(Exception):
    """A result that does not fit the layout of the first one."""


@dataclass
class Field:
    """One variable: its own dimensions (those of the grid come before), type, attributes."""

    dims: tuple[str, ...]
    kind: str
    attrs: dict[str, Any]


@dataclass
class Layout:
    """Layout of the results; the length of a ragged dimension is the largest seen."""

    fields: dict[str, Field]
    sizes: dict[str, int]
    ragged: tuple[str, ...]
    labels: dict[str, list[Any]] = field(default_factory=dict)
    attrs: dict[str, Any] = field(default_factory=dict)

    @classmethod
    def of_first(cls, record: Record, ragged: tuple[str, ...]) -> "Layout":
        """Return the layout that the first result fixes."""
        sizes = record.sizes()
        unknown = [dim for dim in ragged if dim not in sizes]
        if unknown:
            expected = f"dimensions of the results: {sorted(sizes)}"
            raise ArgumentError("ragged", f"the dimension {unknown[0]!r}", expected)
        fields = {n: Field(v.dims, v.kind, v.attrs) for n, v in record.variables.items()}
        labels = {name: c.data.tolist() for name, c in record.coordinates.items()}
        return cls(fields, sizes, ragged, labels, dict(record.attrs))

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> "Layout":
        """Return the layout that `as_json` turned into `data`."""
        fields = {n: Field(tuple(f["dims"]), f["kind"], f["attrs"]) for n, f in data["fields"]}
        ragged = tuple(data["ragged"])
        return cls(fields, data["sizes"], ragged, data["labels"], data["attrs"])

    def as_json(self) -> dict[str, Any]:
        """Return the layout as JSON-able data."""
        fields = [(name, vars(entry)) for name, entry in self.fields.items()]
        rest = {"sizes": self.sizes, "ragged": self.ragged}
        return {"fields": fields, **rest, "labels": self.labels, "attrs": self.attrs}

    def own_shape(self, name: str) -> tuple[int, ...]:
        """Shape of one point's values of a variable."""
        return tuple(self.sizes[dim] for dim in self.fields[name].dims)

    def is_ragged(self, name: str) -> bool:
        """Whether a variable has a ragged dimension."""
        return any(dim in self.ragged for dim in self.fields[name].dims)

    def accept(self, record: Record) -> tuple[Record, bool]:
        """Return the record in the layout's types, and whether the layout changed.

        Raises LayoutError, leaving the layout as it was, if the record does not fit.
        """
        if set(record.variables) != set(self.fields):
            given, first = sorted(record.variables), sorted(self.fields)
            raise LayoutError(f"variables {given}; the first result had {first}")
        variables = {n: self._converted(n, record.variables[n]) for n in self.fields}
        sizes = self._merged_sizes(record)
        labels = self._merged_labels(record)
        attrs = _common(self.attrs, record.attrs)
        changed = (sizes, labels, attrs) != (self.sizes, self.labels, self.attrs)
        self.sizes, self.labels, self.attrs = sizes, labels, attrs
        for name, entry in self.fields.items():
            common = _common(entry.attrs, record.variables[name].attrs)
            changed = changed or common != entry.attrs
            entry.attrs = common
        return Record(variables), changed

    def _converted(self, name: str, variable: Variable) -> Variable:
        expected = self.fields[name]
        if variable.dims != expected.dims:
            raise LayoutError(
                f"{name!r} has dimensions {variable.dims}; the first result had {expected.dims}"
            )
        if variable.kind == expected.kind:
            return variable
        exact = (variable.kind, expected.kind) in _EXACT
        if variable.kind == "int64" and exact and variable.data.size:
            exact = bool(np.abs(variable.data).max() <= _LARGEST_EXACT_INTEGER)
        if not exact:
            raise LayoutError(
                f"{name!r} is {variable.kind}; the first result had {expected.kind} "
                "(return one type at every point)"
            )
        return Variable(variable.dims, variable.data.astype(expected.kind), variable.attrs)

    def _merged_sizes(self, record: Record) -> dict[str, int]:
        sizes = dict(self.sizes)
        for dim, length in record.sizes().items():
            if dim not in sizes:
                raise LayoutError(f"dimension {dim!r}, which the first result did not have")
            if dim in self.ragged:
                sizes[dim] = max(sizes[dim], length)
            elif length != sizes[dim]:
                raise LayoutError(
                    f"dimension {dim!r} has length {length}; the first result had {sizes[dim]} "
                    f"(declare it with ragged=[{dim!r}] if it is meant to vary)"
                )
        return sizes

    def _merged_labels(self, record: Record) -> dict[str, list[Any]]:
        if set(record.coordinates) != set(self.labels):
            raise LayoutError(
                f"labelled dimensions {sorted(record.coordinates)}; the first result had "
                f"{sorted(self.labels)}"
            )
        labels = dict(self.labels)
        for dim, known in self.labels.items():
            given = record.coordinates[dim].data.tolist()
            common = min(len(given), len(known))
            if given[:common] != known[:common]:
                raise LayoutError(f"dimension {dim!r} has other labels than in the first result")
            labels[dim] = max(known, given, key=len)
        return labels


def _common(first: dict[str, Any], second: dict[str, Any]) -> dict[str, Any]:
    return {key: value for key, value in first.items() if second.get(key) == value}


def check_names(record: Record, grid: Grid) -> None:
    """Refuse results whose names collide with those of the grid or of the sweep."""
    taken = RESERVED | set(grid.dims) | set(grid.coordinates())
    own_dims = set(record.sizes())
    for name in record.variables:
        if name in taken or name in own_dims:
            expected = f"variables with names of their own, not of {sorted(taken | own_dims)}"
            raise ArgumentError("task", f"a variable {name!r}", expected)
    for dim in own_dims & taken:
        expected = f"dimensions with names of their own, none of {sorted(taken)}"
        raise ArgumentError("task", f"a dimension {dim!r}", expected)
