"""Folding: results from the journal into a Zarr store that plain xarray reads.

A variable over the grid is written in whole chunks, each of 64 points or more
(fewer where 64 points would exceed 64 MB). The mask of finished points is one
chunk, written last and replaced atomically: a reader that honours it never
sees half a point. All metadata are also kept consolidated in one file, which
is replaced atomically, so that a reader never sees half a change of shape.
"""

import os
import shutil
import time
import warnings
from collections import defaultdict
from math import ceil, prod
from pathlib import Path
from typing import Any, cast

import numpy as np
import numpy.typing as npt
import xarray as xr
import zarr
from zarr.storage import LocalStore, MemoryStore

from fockhull.sweeps.grid import Grid
from fockhull.sweeps.layout import Layout
from fockhull.sweeps.record import Record

FINISHED = "finished"
FAILURE = "failure"

_POINTS_PER_CHUNK = 64
_BYTES_PER_CHUNK = 64 * 2**20

_CLOCK_STEP = 5.0  # seconds a file system's clock may be behind

_STORED_AS = {"bool": "int8", "str": "str"}
_MISSING: dict[str, Any] = {
    "bool": -1,
    "int64": int(np.iinfo(np.int64).min),
    "float64": np.nan,
    "complex128": complex(np.nan, np.nan),
    "str": "",
}
_RESERVED_ATTRS = frozenset(
    {"_FillValue", "missing_value", "scale_factor", "add_offset", "dtype", "coordinates"}
)


class ZarrFolder:
    """The Zarr store of a sweep, on disk or (without a location) in memory."""

    def __init__(self, location: Path | None, grid: Grid, attrs: dict[str, Any]) -> None:
        self._location = location
        self._store: Any = MemoryStore() if location is None else LocalStore(location)
        self._grid = grid
        extra = [name for name in grid.coordinates() if name not in grid.dims]
        self._attrs = attrs | {"coordinates": " ".join([FINISHED, FAILURE, *extra])}
        self._arrays: dict[str, zarr.Array[Any]] = {}
        self._opened = time.time()

    def start(self) -> None:
        """Create the store anew: coordinates of the grid and empty masks."""
        if self._location is not None:
            shutil.rmtree(self._location, ignore_errors=True)
        self._group = zarr.open_group(self._store, mode="w", zarr_format=3)
        for name, (dim, values) in self._grid.coordinates().items():
            self._labels(name, dim, values)
        grid = self._grid
        whole = {"shape": grid.shape, "chunks": grid.shape}
        mask = {"dtype": "bool"}
        self._create(FINISHED, grid.dims, **whole, dtype="int8", fill=0, attrs=mask)
        self._create(FAILURE, grid.dims, **whole, dtype="str", fill="", attrs={})
        self._group.attrs.put(self._attrs)
        self._consolidate()

    def reopen(self, layout: Layout | None) -> npt.NDArray[np.bool_] | None:
        """Return the mask of the points folded before, or None if the store must be rebuilt."""
        try:
            self._group = zarr.open_group(self._store, mode="r+", use_consolidated=False)
            names = [FINISHED, FAILURE, *(layout.fields if layout else ())]
            for name in names:
                self._arrays[name] = cast(zarr.Array[Any], self._group[name])
            if layout is not None:
                self.grow(layout)
            mask = np.asarray(self._arrays[FINISHED][...])
        except Exception:  # whatever is wrong, the journal has everything
            self._arrays.clear()
            return None
        return mask.ravel() == 1 if mask.shape == self._grid.shape else None

    def add_variables(self, layout: Layout) -> None:
        """Create the variables of the results."""
        for dim, labels in layout.labels.items():
            self._labels(dim, dim, np.asarray(labels))
        for name, entry in layout.fields.items():
            own = layout.own_shape(name)
            size = prod(own) * np.dtype("complex128").itemsize
            points = max(1, min(_POINTS_PER_CHUNK, _BYTES_PER_CHUNK // max(size, 1)))
            attrs = _allowed(entry.attrs)
            missing = _MISSING[entry.kind]
            if entry.kind in ("int64", "bool"):
                attrs["_FillValue"] = missing  # xarray then reads NaN where there is no result
            self._create(
                name,
                self._grid.dims + entry.dims,
                shape=self._grid.shape + own,
                chunks=point_chunks(self._grid.shape, points) + tuple(max(n, 1) for n in own),
                dtype=_STORED_AS.get(entry.kind, entry.kind),
                fill=missing,
                attrs=attrs,
            )
        self._consolidate()

    def grow(self, layout: Layout) -> None:
        """Enlarge the variables along ragged dimensions; padding is the missing value."""
        for name in layout.fields:
            array, shape = self._arrays[name], self._grid.shape + layout.own_shape(name)
            if array.shape != shape:
                array.resize(shape)
        for dim in layout.ragged:
            if dim in layout.labels:
                self._labels(dim, dim, np.asarray(layout.labels[dim]))
        self._consolidate()

    def fold(self, records: dict[int, Record], layout: Layout) -> None:
        """Write the variables of some points, whole chunks at a time."""
        for name in layout.fields:
            array = self._arrays[name]
            chunks = array.chunks[: len(self._grid.shape)]
            by_chunk: dict[tuple[int, ...], list[int]] = defaultdict(list)
            for number in records:
                steps = self._grid.multi_index(number)
                by_chunk[tuple(i // c for i, c in zip(steps, chunks, strict=True))].append(number)
            for chunk, numbers in by_chunk.items():
                values = {n: records[n].variables[name].data for n in numbers}
                self._write_chunk(array, chunk, values)

    def mark(self, finished: npt.NDArray[np.bool_], failures: dict[int, str] | None) -> None:
        """Write the messages of failed points, if they changed, and then the mask."""
        if failures is not None:
            texts = np.full(self._grid.size, "", dtype=object)
            for number, message in failures.items():
                texts[number] = message
            self._arrays[FAILURE][...] = texts.reshape(self._grid.shape)
        self._arrays[FINISHED][...] = finished.reshape(self._grid.shape).astype(np.int8)

    def finish(self, layout: Layout, complete: bool) -> None:
        """Bring the attributes up to date; with every point there nothing reads as missing."""
        self._group.attrs.put(_allowed(layout.attrs) | self._attrs)
        for name, entry in layout.fields.items():
            attrs = _allowed(entry.attrs)
            kept = complete and not layout.is_ragged(name)
            if entry.kind in ("int64", "bool") and not kept:
                attrs["_FillValue"] = _MISSING[entry.kind]
            elif entry.kind == "bool":
                attrs["dtype"] = "bool"
            if dict(self._arrays[name].attrs) != attrs:
                self._arrays[name].attrs.put(attrs)
        self._consolidate()

    def flush(self) -> None:
        """Have what this run wrote put on disk."""
        if self._location is None:
            return
        for path in self._location.rglob("*"):
            if path.is_file() and path.stat().st_mtime >= self._opened - _CLOCK_STEP:
                with path.open("r+b") as file:
                    os.fsync(file.fileno())

    def dataset(self, layout: Layout | None) -> xr.Dataset:
        """Return the results: read when used from disk, or loaded from memory."""
        stored: xr.Dataset = xr.open_zarr(self._location or self._store, chunks=None)
        results = stored if layout is None else stored[list(layout.fields)]
        return results.load() if self._location is None else results

    def _write_chunk(
        self, array: zarr.Array[Any], chunk: tuple[int, ...], values: dict[int, npt.NDArray[Any]]
    ) -> None:
        shape = self._grid.shape
        starts = tuple(i * c for i, c in zip(chunk, array.chunks, strict=False))
        stops = tuple(
            min(start + c, n) for start, c, n in zip(starts, array.chunks, shape, strict=False)
        )
        region = tuple(slice(start, stop) for start, stop in zip(starts, stops, strict=True))
        block_shape = tuple(b - a for a, b in zip(starts, stops, strict=True))
        if len(values) == prod(block_shape):
            dtype = object if array.fill_value == "" else array.dtype
            block = np.full(block_shape + array.shape[len(shape) :], array.fill_value, dtype)
        else:
            block = np.array(array[region])
        for number, data in values.items():
            steps = zip(self._grid.multi_index(number), starts, strict=True)
            local = tuple(i - start for i, start in steps)
            block[local] = array.fill_value
            block[local + tuple(slice(n) for n in data.shape)] = data
        array[region] = block

    def _labels(self, name: str, dim: str, values: npt.NDArray[Any]) -> None:
        kind = "str" if values.dtype.kind in "UO" else str(values.dtype)
        attrs = {"dtype": "bool"} if kind == "bool" else {}
        stored = _STORED_AS.get(kind, kind)
        fill = "" if kind == "str" else 0
        array = self._create(
            name,
            (dim,),
            shape=values.shape,
            chunks=(max(values.size, 1),),
            dtype=stored,
            fill=fill,
            attrs=attrs,
        )
        array[...] = values.astype(object if kind == "str" else stored)

    def _create(
        self,
        name: str,
        dims: tuple[str, ...],
        *,
        shape: tuple[int, ...],
        chunks: tuple[int, ...],
        dtype: str,
        fill: Any,
        attrs: dict[str, Any],
    ) -> zarr.Array[Any]:
        array = self._group.create_array(
            name,
            shape=shape,
            chunks=chunks,
            dtype=str if dtype == "str" else dtype,
            fill_value=fill,
            dimension_names=dims,
            attributes=attrs,
            overwrite=True,
        )
        self._arrays[name] = array
        return array

    def _consolidate(self) -> None:
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", message="Consolidated metadata")
            zarr.consolidate_metadata(self._store)


def _allowed(attrs: dict[str, Any]) -> dict[str, Any]:
    """Return attributes without those that have a meaning of their own to xarray."""
    return {name: value for name, value in attrs.items() if name not in _RESERVED_ATTRS}


def point_chunks(shape: tuple[int, ...], points: int) -> tuple[int, ...]:
    """Return chunks of nearly equal size over a grid, each of about `points` points or more.

    Fills the fastest dimensions first, so that points computed one after the
    other meet in one chunk.
    """
    chunks: list[int] = []
    for length in reversed(shape):
        wanted = ceil(points / prod(chunks))
        pieces = max(1, length // wanted)
        chunks.append(ceil(length / pieces))
    return tuple(reversed(chunks))
