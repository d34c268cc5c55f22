"""One point's results: from what the task returns to bytes and back.

The bytes are a JSON header followed by the raw arrays: reading them executes
nothing.
"""

import json
import math
import struct
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from fockhull.errors import ArgumentError, ArgumentTypeError

RESULT = "result"
"""Name of the variable of a task that returns one bare number, string or array."""

_HEADER_LENGTH = struct.Struct("<Q")
_EXPECTED = (
    "a number, a string, an array, a pair (dimension names, array), a dict of those, "
    "or a result with .to_xarray()"
)


@dataclass(frozen=True)
class Variable:
    """A labelled array; strings are held as an array of objects."""

    dims: tuple[str, ...]
    data: npt.NDArray[Any]
    attrs: dict[str, Any] = field(default_factory=dict)

    @property
    def kind(self) -> str:
        """Type of the values: bool, int64, float64, complex128 or str."""
        return "str" if self.data.dtype.kind == "O" else str(self.data.dtype)


@dataclass
class Record:
    """Variables of one point, coordinates of their dimensions, attributes."""

    variables: dict[str, Variable] = field(default_factory=dict)
    coordinates: dict[str, Variable] = field(default_factory=dict)
    attrs: dict[str, Any] = field(default_factory=dict)

    def sizes(self) -> dict[str, int]:
        """Return the length of each dimension; an ArgumentError if it has two."""
        sizes: dict[str, int] = {}
        for name, variable in (self.variables | self.coordinates).items():
            for dim, length in zip(variable.dims, variable.data.shape, strict=True):
                if sizes.setdefault(dim, length) != length:
                    given = f"dimension {dim!r} of length {length} in {name!r}"
                    raise ArgumentError("task", given, f"length {sizes[dim]}, as elsewhere in it")
        return sizes

    def to_xarray(self) -> xr.Dataset:
        """Return the record as a dataset."""

        def part(variables: dict[str, Variable]) -> dict[str, Any]:
            return {name: (v.dims, v.data, v.attrs) for name, v in variables.items()}

        return xr.Dataset(part(self.variables), part(self.coordinates), self.attrs)


def record_of(result: object) -> Record:
    """Return what a task returned as a record; ArgumentTypeError if it cannot be one."""
    record = Record()
    if _is_labelled(result):
        _add_dataset(record, "", _dataset(result))
    elif isinstance(result, Mapping):
        for name, value in result.items():
            if not isinstance(name, str):
                raise ArgumentTypeError("task", f"the key {name!r}", "a dict with string keys")
            _add(record, name, value)
    else:
        _add(record, RESULT, result)
    record.sizes()
    return record


def _is_labelled(value: object) -> bool:
    return hasattr(value, "to_xarray") or (hasattr(value, "dims") and hasattr(value, "coords"))


def _dataset(value: Any, name: str | None = None) -> xr.Dataset:
    """Return a labelled result as a dataset; `name` is given to a single array."""
    labelled = value.to_xarray() if hasattr(value, "to_xarray") else value
    if isinstance(labelled, xr.DataArray):
        return labelled.to_dataset(name=name or labelled.name or RESULT)
    if isinstance(labelled, xr.Dataset):
        return labelled
    raise ArgumentTypeError("task", type(labelled).__name__, "an xarray.Dataset of .to_xarray()")


def _add(record: Record, name: str, value: object) -> None:
    if _is_labelled(value):
        dataset = _dataset(value, name)
        _add_dataset(record, "" if list(dataset) == [name] else f"{name}_", dataset)
        return
    dims: tuple[str, ...] | None = None
    if isinstance(value, tuple) and len(value) == 2 and _are_names(value[0]):
        dims = (value[0],) if isinstance(value[0], str) else tuple(value[0])
        value = value[1]
    data = _array(name, value)
    if dims is None:
        dims = tuple(f"{name}_dim{axis}" for axis in range(data.ndim))
    if len(dims) != data.ndim or len(set(dims)) != len(dims):
        given = f"dimensions {dims} for {name!r} of shape {data.shape}"
        raise ArgumentError("task", given, "one distinct name for each dimension")
    _put(record, name, Variable(dims, data))


def _are_names(value: object) -> bool:
    return isinstance(value, str) or (
        isinstance(value, tuple | list) and all(isinstance(item, str) for item in value)
    )


def _add_dataset(record: Record, prefix: str, dataset: xr.Dataset) -> None:
    for name, array in dataset.variables.items():
        attrs = {str(key): plain(value) for key, value in array.attrs.items()}
        dims = tuple(str(dim) for dim in array.dims)
        variable = Variable(dims, _array(str(name), array.values), attrs)
        if dims == (name,):
            _put_coordinate(record, str(name), variable)
        else:
            _put(record, prefix + str(name), variable)
    for key, value in dataset.attrs.items():
        record.attrs[str(key)] = plain(value)


def _put(record: Record, name: str, variable: Variable) -> None:
    if name in record.variables:
        raise ArgumentError("task", f"the variable {name!r} twice", "distinct names")
    record.variables[name] = variable


def _put_coordinate(record: Record, name: str, variable: Variable) -> None:
    if variable.kind == "complex128":
        given = f"complex labels for the dimension {name!r}"
        raise ArgumentTypeError("task", given, "labels that are real numbers or strings")
    known = record.coordinates.setdefault(name, variable)
    if not np.array_equal(known.data, variable.data):
        expected = "one set of labels for a dimension (rename it in one of the results)"
        raise ArgumentError("task", f"two sets of labels for the dimension {name!r}", expected)


def _array(name: str, value: object) -> npt.NDArray[Any]:
    """Return values as one of the five kinds a store holds; nothing is narrowed."""
    if isinstance(value, np.ma.MaskedArray):
        raise ArgumentTypeError("task", f"a masked array {name!r}", "plain arrays (fill with NaN)")
    try:
        array = np.asarray(value)
    except (TypeError, ValueError):
        raise ArgumentTypeError("task", f"{type(value).__name__} {name!r}", _EXPECTED) from None
    kind, width = array.dtype.kind, array.dtype.itemsize
    if kind == "b":
        return array
    if kind == "i" or (kind == "u" and array.max(initial=0) <= np.iinfo(np.int64).max):
        return array.astype(np.int64)
    if kind == "f" and width <= 8:
        return array.astype(np.float64)
    if kind == "c" and width <= 16:
        return array.astype(np.complex128)
    strings = array.astype(object)
    if kind in "UTO" and array.size > 0 and all(isinstance(item, str) for item in strings.flat):
        return strings
    given = f"{type(value).__name__} {name!r} of dtype {array.dtype}"
    raise ArgumentTypeError("task", given, _EXPECTED)


def plain(value: Any) -> Any:
    """Return an attribute as JSON-able data; what JSON has no place for becomes its text."""
    if isinstance(value, np.ndarray | np.generic):
        value = value.tolist()
    if isinstance(value, tuple | list):
        return [plain(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return str(value)
    return value if isinstance(value, bool | int | float | str | None) else str(value)


def encode(record: Record) -> bytes:
    """Return a record as bytes."""
    header: dict[str, Any] = {"attrs": record.attrs}
    buffers: list[bytes] = []
    for group, variables in (
        ("variables", record.variables),
        ("coordinates", record.coordinates),
    ):
        header[group] = entries = []
        for name, variable in variables.items():
            buffer = _to_bytes(variable)
            shape = variable.data.shape
            entries.append([name, variable.dims, variable.kind, shape, variable.attrs, len(buffer)])
            buffers.append(buffer)
    text = json.dumps(header, allow_nan=False).encode()
    return b"".join([_HEADER_LENGTH.pack(len(text)), text, *buffers])


def decode(payload: bytes) -> Record:
    """Return the record that `encode` turned into `payload`."""
    (length,) = _HEADER_LENGTH.unpack_from(payload)
    position = _HEADER_LENGTH.size + length
    header = json.loads(payload[_HEADER_LENGTH.size : position])
    record = Record(attrs=header["attrs"])

    def read(entries: list[Any], position: int) -> Iterator[tuple[str, Variable, int]]:
        for name, dims, kind, shape, attrs, size in entries:
            data = _from_bytes(payload[position : position + size], kind, tuple(shape))
            position += size
            yield name, Variable(tuple(dims), data, attrs), position

    for name, variable, end in read(header["variables"], position):
        record.variables[name], position = variable, end
    for name, variable, _ in read(header["coordinates"], position):
        record.coordinates[name] = variable
    return record


def _to_bytes(variable: Variable) -> bytes:
    if variable.kind == "str":
        return json.dumps(variable.data.ravel().tolist()).encode()
    little = variable.data.astype(variable.data.dtype.newbyteorder("<"), order="C", copy=False)
    return little.tobytes()


def _from_bytes(buffer: bytes, kind: str, shape: tuple[int, ...]) -> npt.NDArray[Any]:
    if kind == "str":
        return np.array(json.loads(buffer), dtype=object).reshape(shape)
    return np.frombuffer(buffer, np.dtype(kind).newbyteorder("<")).reshape(shape)
