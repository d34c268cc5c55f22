"""The state of a sweep: what is finished, failed or missing, and where results go."""

import uuid
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from fockhull.errors import ArgumentError
from fockhull.sweeps.folding import ZarrFolder
from fockhull.sweeps.grid import Grid
from fockhull.sweeps.identity import Identity
from fockhull.sweeps.journal import FORMAT, Entry, Journal
from fockhull.sweeps.layout import Layout, LayoutError, check_names
from fockhull.sweeps.record import Record, decode

JOURNAL = "journal.sqlite"
RESULTS = "results.zarr"

_POINTS_PER_REPLAY = 1024
_BYTES_PER_REPLAY = 64 * 2**20


class Ledger:
    """Results of a sweep on the way from the workers to the store."""

    def __init__(
        self,
        grid: Grid,
        identity: Identity,
        ragged: tuple[str, ...],
        store: Path | None,
        resume: bool,
    ) -> None:
        self.grid = grid
        self.failures: dict[int, str] = {}
        self._ragged = ragged
        self._layout: Layout | None = None
        self._finished = np.zeros(grid.size, dtype=np.bool_)
        self._folded_layout: dict[str, Any] | None = None
        self._failures_changed = False
        self._pending: dict[int, Record] = {}
        attrs = {
            "sweep_task": identity.task,
            "sweep_source": identity.source,
            "fockhull_version": identity.package,
        }
        self._journal = None if store is None else _open_journal(store, identity, resume)
        self._folder = ZarrFolder(None if store is None else store / RESULTS, grid, attrs)
        try:
            self._restore()
        except BaseException:
            self.close()
            raise

    @property
    def is_unfolded(self) -> bool:
        """Whether the Zarr store lacks something the journal has."""
        return bool(self._pending) or self._failures_changed

    def missing(self, retry_failed: bool) -> list[int]:
        """Return the numbers of the points to compute, in order."""
        done = self._finished.copy()
        if not retry_failed:
            done[list(self.failures)] = True
        return [int(number) for number in np.flatnonzero(~done)]

    def payload(self, number: int) -> bytes | None:
        """Return the encoded record of a finished point of an earlier run."""
        return None if self._journal is None else self._journal.payload(number)

    def accept(self, outcomes: list[Entry]) -> list[Entry]:
        """Journal outcomes; results that do not fit the first one become failures."""
        checked = [self._checked(outcome) for outcome in outcomes]
        entries = [entry for entry, _ in checked]
        if self._journal is not None and entries:
            changed = self._layout is not None and any(change for _, change in checked)
            facts = {"layout": self._layout.as_json()} if self._layout and changed else {}
            self._journal.write(entries, facts)
        return entries

    def fold(self) -> None:
        """Bring the Zarr store up to date with the journal."""
        if not self.is_unfolded:
            return
        if self._layout is not None:
            layout = self._layout.as_json()
            if self._folded_layout is None:
                self._folder.add_variables(self._layout)
            elif layout["sizes"] != self._folded_layout["sizes"]:
                self._folder.grow(self._layout)
            self._folded_layout = layout
            self._folder.fold(self._pending, self._layout)
        self._finished[list(self._pending)] = True
        self._folder.mark(self._finished, self.failures if self._failures_changed else None)
        self._failures_changed = False
        self._pending = {}

    def finish(self) -> None:
        """Fold what is left and bring the attributes up to date."""
        self.fold()
        if self._layout is not None:
            self._folder.finish(self._layout, complete=bool(self._finished.all()))
        if self._journal is not None:
            self._folder.flush()
            self._journal.write([], {"writing_system": None})

    def dataset(self) -> xr.Dataset:
        """Return the results."""
        return self._folder.dataset(self._layout)

    def close(self) -> None:
        """Release the journal."""
        if self._journal is not None:
            self._journal.close()

    def _checked(self, outcome: Entry) -> tuple[Entry, bool]:
        """Return the outcome as it is to be journalled, and whether the layout changed."""
        number = outcome.number
        if outcome.payload is None:
            self._failed(number, outcome.failure or "no message")
            return outcome, False
        record = decode(outcome.payload)
        first = self._layout is None
        if self._layout is None:
            check_names(record, self.grid)
            self._layout = Layout.of_first(record, self._ragged)
        try:
            self._pending[number], changed = self._layout.accept(record)
        except (LayoutError, ArgumentError) as error:
            message = f"{type(error).__name__}: {error}"
            self._failed(number, message)
            return Entry(number, None, message, outcome.seconds), False
        self._failures_changed |= self.failures.pop(number, None) is not None
        return outcome, changed or first

    def _failed(self, number: int, message: str) -> None:
        self.failures[number] = message
        self._failures_changed = True

    def _restore(self) -> None:
        """Take up an earlier run: fold whatever its last fold did not reach.

        If the machine went down during that run, or was another one that may
        have, everything is folded anew: the Zarr store may not be on disk.
        """
        if self._journal is None:
            self._folder.start()
            return
        layout = self._journal.fact("layout")
        self._layout = None if layout is None else Layout.from_json(layout)
        self.failures = self._journal.failures()
        finished = self._journal.finished()
        here = _running_system()
        is_safe = self._journal.fact("writing_system") in (None, here)
        folded = self._folder.reopen(self._layout) if is_safe else None
        self._journal.write([], {"writing_system": here})
        if folded is None:
            self._folder.start()
        else:
            self._finished[finished] = folded[finished]
            self._folded_layout = layout
        self._failures_changed = bool(self.failures)
        self._replay([number for number in finished if not self._finished[number]])

    def _replay(self, numbers: list[int]) -> None:
        """Fold journalled points, a bounded number of bytes at a time."""
        size = 0
        for number in numbers:
            payload = self.payload(number)
            size += len(payload or b"")
            self._checked(Entry(number, payload, None, 0.0))
            if size > _BYTES_PER_REPLAY or len(self._pending) >= _POINTS_PER_REPLAY:
                self.fold()
                size = 0
        self.fold()


def _running_system() -> str:
    """Return a name of the running system, another one after each start of the machine."""
    try:
        return Path("/proc/sys/kernel/random/boot_id").read_text().strip()
    except OSError:  # not on every system
        return str(uuid.uuid4())


def _open_journal(store: Path, identity: Identity, resume: bool) -> Journal:
    """Open the journal of a new or an earlier run of the same sweep, or refuse it."""
    known = (store / JOURNAL).exists()
    if store.exists() and not store.is_dir():
        raise ArgumentError("store", f"the file {store}", "a folder")
    if known and not resume:
        given = f"{store}, which holds a sweep, with resume=False"
        raise ArgumentError("store", given, "a new folder (or resume=True)")
    if not known and store.exists() and any(store.iterdir()):
        given = f"{store}, which holds other files"
        raise ArgumentError("store", given, "a folder of a sweep, an empty or a new one")
    store.mkdir(parents=True, exist_ok=True)
    journal = Journal(store / JOURNAL)
    try:
        _check_identity(journal, store, identity)
    except BaseException:
        journal.close()
        raise
    return journal


def _check_identity(journal: Journal, store: Path, identity: Identity) -> None:
    stored = journal.fact("identity")
    if stored is None:
        journal.write([], {"format": FORMAT, "identity": identity.as_json()})
        return
    if journal.fact("format") != FORMAT:
        given = f"{store}, of format {journal.fact('format')}"
        raise ArgumentError("store", given, f"a store of format {FORMAT}, or a new folder")
    differences = identity.differences(stored)
    if differences:
        given = f"{store}, made by another sweep: {'; '.join(differences)}"
        raise ArgumentError("store", given, "the same sweep as in the store, or a new folder")
