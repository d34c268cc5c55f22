"""The loop of a sweep: submit, collect, journal, report, fold."""

import logging
import queue
import sys
import time
from collections.abc import Callable
from concurrent.futures import BrokenExecutor, Future
from importlib import import_module
from importlib.util import find_spec
from typing import Any

from tqdm import tqdm

from fockhull.sweeps.grid import Grid
from fockhull.sweeps.journal import Entry
from fockhull.sweeps.ledger import Ledger
from fockhull.sweeps.schedule import Schedule
from fockhull.sweeps.workers import Call, Outcome, Workers, describe, is_lost_worker

log = logging.getLogger("fockhull.sweep")
log.addHandler(logging.NullHandler())

_SECONDS_BETWEEN_FOLDS = 0.5
_SECONDS_BETWEEN_LINES = 10.0
_LONGEST_WAIT = 5.0  # seconds, so that the window follows a growing cluster
_MOST_IN_A_BATCH = 256


class Driver:
    """One run over the missing points of a sweep."""

    def __init__(
        self,
        task: Callable[..., Any],
        grid: Grid,
        ledger: Ledger,
        workers: Workers,
        *,
        chain: str | None,
        lost_retries: int,
    ) -> None:
        self._task = task
        self._grid = grid
        self._ledger = ledger
        self._workers = workers
        self._chain = chain
        self._lost_retries = lost_retries
        self._done: queue.SimpleQueue[Future[Outcome]] = queue.SimpleQueue()
        self._in_flight: dict[Future[Outcome], int] = {}
        self._carried: dict[int, bytes | None] = {}

    def run(self, missing: list[int], progress: bool) -> None:
        """Compute the missing points; leaves a valid store however it ends."""
        self._schedule = Schedule(missing, self._grid, self._chain)
        self._bar = _bar(self._grid.size, self._grid.size - len(missing), progress)
        self._next_fold = time.monotonic()  # the first result is folded at once
        _event(logging.INFO, "start", points=self._grid.size, missing=len(missing))
        try:
            self._fill()
            while self._in_flight:
                self._settle(self._collect())
                self._fill()
        except BaseException:
            self._salvage()
            raise
        finally:
            self._bar.close()
            self._workers.close()
            self._ledger.finish()
            _event(logging.INFO, "end", failed=len(self._ledger.failures))

    def _fill(self) -> None:
        """Submit points until the window is full."""
        window = self._workers.window
        while len(self._in_flight) < window:
            number = self._schedule.next(len(self._in_flight))
            if number is None:
                return
            self._submit(number)

    def _submit(self, number: int) -> None:
        call = Call(
            self._task,
            self._grid.point(number),
            number,
            self._schedule.attempts(number),
            chained=self._chain is not None,
            previous=self._previous(number),
        )
        future = self._workers.submit(call)
        self._in_flight[future] = number
        future.add_done_callback(self._done.put)

    def _previous(self, number: int) -> bytes | None:
        before = self._schedule.predecessor(number)
        if before is None:
            return None
        if number not in self._carried:  # the neighbour is of an earlier run
            self._carried[number] = self._ledger.payload(before)
        return self._carried[number]

    def _collect(self) -> list[Future[Outcome]]:
        """Fold if it is due, then return what comes back before it is due again."""
        wait = _LONGEST_WAIT
        if self._ledger.is_unfolded:
            if time.monotonic() >= self._next_fold:
                self._ledger.fold()
                self._next_fold = time.monotonic() + _SECONDS_BETWEEN_FOLDS
            else:
                wait = self._next_fold - time.monotonic()
        futures: list[Future[Outcome]] = []
        try:
            futures.append(self._done.get(timeout=max(wait, 0.0)))
            while len(futures) < _MOST_IN_A_BATCH:
                futures.append(self._done.get_nowait())
        except queue.Empty:
            pass
        return futures

    def _settle(self, futures: list[Future[Outcome]]) -> None:
        """Journal what came back; only then report it and release what waits for it."""
        outcomes: list[Entry] = []
        for future in futures:
            entry = self._entry(future, self._in_flight.pop(future))
            if entry is not None:
                outcomes.append(entry)
        for entry in self._ledger.accept(outcomes):
            released = self._schedule.settled(entry.number)
            self._carried.pop(entry.number, None)
            if released is not None:
                self._carried[released] = entry.payload
            self._report(entry)

    def _entry(self, future: "Future[Outcome]", number: int) -> Entry | None:
        """Return the outcome of a point, or None if it is to be tried again."""
        try:
            outcome = future.result()
        except KeyboardInterrupt:
            raise
        except BaseException as error:  # an error of the way there or back
            if not is_lost_worker(error):
                return Entry(number, None, describe(error), 0.0)
            return self._lost(error, number)
        if outcome.trace:
            _event(logging.DEBUG, "trace", number=number, trace=outcome.trace)
        return Entry(number, outcome.payload, outcome.failure, outcome.seconds)

    def _lost(self, error: BaseException, number: int) -> Entry | None:
        times = self._schedule.attempts(number) + 1
        _event(logging.WARNING, "lost", number=number, times=times, error=describe(error))
        if times > self._lost_retries:
            return Entry(number, None, f"worker lost {times} times: {describe(error)}", 0.0)
        self._schedule.lost(number, alone=isinstance(error, BrokenExecutor))
        return None

    def _salvage(self) -> None:
        """After an interrupt: journal what has come back, give up the rest."""
        for future in self._in_flight:
            future.cancel()
        finished: list[Entry] = []
        for future, number in self._in_flight.items():
            if future.done() and not future.cancelled() and future.exception() is None:
                outcome = future.result()
                finished.append(Entry(number, outcome.payload, outcome.failure, outcome.seconds))
        self._in_flight.clear()
        self._ledger.accept(finished)
        for entry in finished:
            self._report(entry)
        _event(logging.WARNING, "interrupted", salvaged=len(finished))

    def _report(self, entry: Entry) -> None:
        failed = entry.failure is not None
        facts = {"number": entry.number, "point": self._grid.point(entry.number)}
        if failed:
            _event(logging.WARNING, "failed", **facts, error=entry.failure)
            self._bar.set_postfix(failed=len(self._ledger.failures), refresh=False)
        else:
            _event(logging.DEBUG, "done", **facts, seconds=entry.seconds)
        self._bar.update()


def _event(level: int, event: str, **facts: Any) -> None:
    """Log an event; its facts are also attributes `event` and `facts` of the log record."""
    if log.isEnabledFor(level):
        text = ", ".join(f"{name}={value}" for name, value in facts.items())
        log.log(level, "%s: %s", event, text, extra={"event": event, "facts": facts})


def _bar(total: int, done: int, shown: bool) -> Any:
    """Return a progress bar; where it cannot be redrawn it writes a line now and then."""
    in_notebook = "ipykernel" in sys.modules
    interval = 0.1 if sys.stderr.isatty() or in_notebook else _SECONDS_BETWEEN_LINES
    has_widgets = in_notebook and find_spec("ipywidgets") is not None
    kind = import_module("tqdm.notebook").tqdm if has_widgets else tqdm
    return kind(total=total, initial=done, disable=not shown, unit="point", mininterval=interval)
