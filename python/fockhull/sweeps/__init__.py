"""Sweeps: one task over many points, on this machine or on a cluster.

`sweep` is also `fockhull.sweep`; `points` makes a table of points;
`follow_states` follows states through level crossings.
"""

import warnings
from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import Executor
from os import PathLike
from pathlib import Path
from typing import Any

import numpy.typing as npt
import xarray as xr

from fockhull.errors import ArgumentError, ArgumentTypeError
from fockhull.sweeps.crossings import follow_states
from fockhull.sweeps.driver import Driver
from fockhull.sweeps.grid import Grid, make_grid, points
from fockhull.sweeps.identity import Identity
from fockhull.sweeps.ledger import Ledger
from fockhull.sweeps.workers import SweepError, Workers

__all__ = ["SweepError", "SweepWarning", "follow_states", "points", "sweep"]


class SweepWarning(UserWarning):
    """Some points of a sweep failed."""


def sweep(
    task: Callable[..., Any],
    grid: Mapping[str, npt.ArrayLike] | Sequence[Mapping[str, Any]],
    *,
    store: str | PathLike[str] | None = None,
    executor: Executor | Callable[[], Executor] | None = None,
    resume: bool = True,
    progress: bool = True,
    retry_failed: bool = False,
    ragged: Iterable[str] = (),
    warm_start: str | None = None,
    version: str | None = None,
    window: int | None = None,
    lost_retries: int = 2,
) -> xr.Dataset:
    """Compute a task at every point of a grid, and keep every result.

    Parameters
    ----------
    task : callable
        Called as ``task(**point)`` with plain Python values. Returns a number,
        boolean, string or array, a pair (dimension names, array), a result
        with ``.to_xarray()``, an xarray object, or a dict of those. Variables
        are named by the keys of the dict (``result`` where there is none);
        those of a labelled result inside a dict are prefixed by its key and
        an underscore.
    grid : dict of array-like, or sequence of dict
        A dict of coordinate arrays, each of shape (points along it,): every
        combination is computed. A sequence of dicts: the explicit points,
        along the dimension ``point`` (see `points`).
    store : path, optional
        Folder that keeps the results. Each is in its journal before it is
        reported done, and within about a second in ``results.zarr``, which
        ``xarray.open_zarr(f"{store}/results.zarr")`` reads at any time, also
        while the sweep runs. Nothing in it is executed on reading.
    executor : concurrent.futures.Executor or callable, optional
        Where points are computed; a function that makes the executor allows
        it to be replaced when it breaks. Without it: at most 4 threads, not
        more than there are cores. The kernels share one pool of as many
        threads as cores (``RAYON_NUM_THREADS`` bounds it), so that the total
        is bounded. Executors with processes need a task they can pickle.
    resume : bool
        Compute only what the store lacks. A store made by another task
        (name, source or `version`), grid, option or version of this package
        is refused. With False, a store that holds a sweep is refused.
    progress : bool
        Show a bar with rate and estimate. Events are also logged by the
        logger ``fockhull.sweep``, with attributes ``event`` and ``facts``.
    retry_failed : bool
        Compute again the points that failed in an earlier run.
    ragged : iterable of str
        Dimensions of the results whose length varies from point to point;
        variables are padded with NaN (strings with "").
    warm_start : str, optional
        Name of a grid axis. The task is then called as ``task(**point,
        previous=result)`` with the results (xarray.Dataset) of the neighbour
        before it along this axis, or None if there is none or it failed;
        points along the axis are computed one after the other.
    version : str, optional
        Part of the task's identity: change it when something the task uses
        has changed that its source does not show.
    window : int, optional
        Number of points submitted at a time; default twice the number of
        workers.
    lost_retries : int
        How often a point whose worker was lost is tried again.

    Returns
    -------
    xarray.Dataset
        Dimensions in the order of the grid, then those of the results.
        Coordinates ``finished`` (bool) and ``failure`` (message of a failed
        point). Values that are missing are NaN. With a store, values are read
        from it when used. Attributes that differ between points are left out.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument is not as described, or the store is of another sweep;
        the difference is named.
    SweepError
        If the executor broke and cannot be replaced.

    Warns
    -----
    SweepWarning
        If points failed; the sweep goes on.

    Notes
    -----
    The first result fixes names, types and shapes; a result that does not fit
    is its point's failure. Ctrl-C leaves a valid store; points under way in
    threads run to their end before Python exits. While points are missing,
    xarray reads integers and booleans as floats (NaN where missing).

    Python's warning filters are shared by all threads, so a task should avoid
    a warning (``symmetrize=True`` of `solve`) rather than catch it.

    Examples
    --------
    >>> import numpy as np
    >>> def gap(U, t):
    ...     return {"gap": np.hypot(U / 2, 2 * t) - U / 2}
    >>> result = sweep(gap, {"U": [0.0, 4.0], "t": [1.0]}, progress=False)
    >>> result.gap.dims, result.gap.sel(U=0.0, t=1.0).item()
    (('U', 't'), 2.0)
    """
    if not callable(task):
        raise ArgumentTypeError("task", type(task).__name__, "a function of the grid's names")
    axes = make_grid(grid)
    ragged_dims = _names("ragged", ragged)
    _check_count("window", 1 if window is None else window, 1)
    _check_count("lost_retries", lost_retries, 0)
    if warm_start is not None and (axes.is_table or warm_start not in axes.dims):
        expected = f"an axis of the grid: {list(axes.columns)}, of a grid given as a dict"
        raise ArgumentError("warm_start", repr(warm_start), expected)
    if version is not None and not isinstance(version, str):
        raise ArgumentTypeError("version", type(version).__name__, "a string")

    options = {"ragged": list(ragged_dims), "warm_start": warm_start}
    identity = Identity.of(task, axes, version, options)
    ledger = Ledger(axes, identity, ragged_dims, None if store is None else Path(store), resume)
    try:
        missing = ledger.missing(retry_failed)
        if missing:
            workers = Workers(executor, window)
            driver = Driver(
                task, axes, ledger, workers, chain=warm_start, lost_retries=lost_retries
            )
            driver.run(missing, progress)
        else:
            ledger.finish()
        failures = ledger.failures
        if failures:
            _warn(failures, axes)
        return ledger.dataset()
    finally:
        ledger.close()


def _names(argument: str, names: object) -> tuple[str, ...]:
    expected = "names of dimensions of the results, such as ['state']"
    if isinstance(names, str) or not isinstance(names, Iterable):
        raise ArgumentTypeError(argument, repr(names), expected)
    listed = tuple(names)
    if not all(isinstance(name, str) for name in listed):
        raise ArgumentTypeError(argument, repr(listed), expected)
    return listed


def _check_count(argument: str, value: object, least: int) -> None:
    expected = f"an integer of at least {least}"
    if isinstance(value, bool) or not isinstance(value, int):
        raise ArgumentTypeError(argument, repr(value), expected)
    if value < least:
        raise ArgumentError(argument, value, expected)


def _warn(failures: dict[int, str], grid: Grid) -> None:
    first = min(failures)
    text = (
        f"{len(failures)} of {grid.size} points failed; "
        f"the first, at {grid.point(first)}: {failures[first]}"
    )
    warnings.warn(text, SweepWarning, stacklevel=3)
