"""Where points are computed: any executor, and what comes back from it."""

import os
import time
import traceback
from collections.abc import Callable
from concurrent.futures import BrokenExecutor, CancelledError, Executor, Future, ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

from fockhull.errors import ArgumentTypeError, FockhullError
from fockhull.sweeps.record import decode, encode, record_of

_MOST_THREADS = 4
_POINTS_PER_WORKER = 2
_LONGEST_MESSAGE = 2000
_SECONDS_BETWEEN_COUNTS = 5.0


class SweepError(FockhullError, RuntimeError):
    """A sweep that cannot go on; what was finished is in its store."""


@dataclass(frozen=True)
class Outcome:
    """What a worker sends back: the encoded record, or why there is none."""

    payload: bytes | None
    failure: str | None
    trace: str
    seconds: float


@dataclass(frozen=True)
class Call:
    """One point to compute.

    `number` and `attempt` make each call distinct for executors that share
    the results of equal calls.
    """

    task: Callable[..., Any]
    point: dict[str, Any]
    number: int
    attempt: int
    chained: bool
    previous: bytes | None


def evaluate(call: Call) -> Outcome:
    """Compute one point, in the worker."""
    started = time.perf_counter()
    try:
        arguments = dict(call.point)
        if call.chained:
            before = call.previous
            arguments["previous"] = None if before is None else decode(before).to_xarray()
        result = call.task(**arguments)
        payload = encode(record_of(result))
    except Exception as error:  # whatever it is, the sweep goes on
        seconds = time.perf_counter() - started
        return Outcome(None, describe(error), traceback.format_exc(), seconds)
    return Outcome(payload, None, "", time.perf_counter() - started)


def describe(error: BaseException) -> str:
    """Return type and message of an error, cut to a bounded length."""
    return f"{type(error).__name__}: {error}"[:_LONGEST_MESSAGE]


def is_lost_worker(error: BaseException) -> bool:
    """Whether an error says that the worker died, rather than that the task failed."""
    engine = type(error).__module__.partition(".")[0]
    return isinstance(error, BrokenExecutor | CancelledError) or engine == "distributed"


def local_threads() -> int:
    """Return the number of points computed at a time on this machine by default.

    The kernels already share one pool of as many threads as there are cores;
    a few points at a time are enough to keep it busy, and each of them takes
    memory.
    """
    try:
        cores = len(os.sched_getaffinity(0))
    except AttributeError:  # not on every system
        cores = os.cpu_count() or 1
    return min(cores, _MOST_THREADS)


class Workers:
    """An executor, with the number of points it is given at a time."""

    def __init__(
        self, executor: Executor | Callable[[], Executor] | None, window: int | None
    ) -> None:
        self._make: Callable[[], Executor] | None = None
        self._executor: Any
        if executor is None:
            self._make = lambda: ThreadPoolExecutor(local_threads(), "fockhull-sweep")
        elif not hasattr(executor, "submit"):
            if not callable(executor):
                expected = "a concurrent.futures.Executor, or a function that makes one"
                raise ArgumentTypeError("executor", type(executor).__name__, expected)
            self._make = executor
        self._executor = self._make() if self._make else executor
        self._given_window = window
        self._window = window or _POINTS_PER_WORKER * _worker_count(self._executor)
        self._counted = time.monotonic()

    @property
    def window(self) -> int:
        """Largest number of points submitted at a time; follows a cluster as it grows."""
        now = time.monotonic()
        if self._given_window is None and now - self._counted > _SECONDS_BETWEEN_COUNTS:
            self._window = _POINTS_PER_WORKER * _worker_count(self._executor)
            self._counted = now
        return self._window

    def submit(self, call: Call) -> "Future[Outcome]":
        """Submit one point, to a new executor if the old one broke."""
        try:
            return self._submit(call)
        except BrokenExecutor:
            self._replace()
            return self._submit(call)

    def _submit(self, call: Call) -> "Future[Outcome]":
        future: Future[Outcome] = self._executor.submit(evaluate, call)
        return future

    def _replace(self) -> None:
        """Make a new executor for a broken one."""
        if self._make is None:
            raise SweepError(
                "the executor broke when it lost a worker, and takes no more points; with a "
                "store, call again to resume. Give a function that makes the executor, such as "
                "executor=lambda: ProcessPoolExecutor(4), to have it replaced"
            )
        self._shut_down()
        self._executor = self._make()

    def close(self) -> None:
        """Shut the executor down if it was made here; points under way are not waited for."""
        if self._make is not None:
            self._shut_down()

    def _shut_down(self) -> None:
        self._executor.shutdown(wait=False, cancel_futures=True)


def _worker_count(executor: object) -> int:
    """Return the number of workers, as far as the kind of executor tells it."""
    client: Any = getattr(executor, "_client", None)  # Dask's client.get_executor()
    if client is not None and hasattr(client, "nthreads"):
        return max(1, int(sum(client.nthreads().values())))
    for attribute in ("_max_workers", "num_workers"):  # standard library, mpi4py.futures
        count = getattr(executor, attribute, None)
        if isinstance(count, int) and count > 0:
            return count
    return os.cpu_count() or 1
