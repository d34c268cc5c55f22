"""The journal of a sweep: every result, on disk before it is reported done.

An SQLite file in write-ahead mode. The exclusive lock keeps a second driver
out, ends with the process however that dies, and spares the shared memory that
network file systems do not offer.
"""

import json
import sqlite3
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from fockhull.errors import ArgumentError

FORMAT = 1

_TABLES = """
CREATE TABLE IF NOT EXISTS facts (name TEXT PRIMARY KEY, value TEXT NOT NULL);
CREATE TABLE IF NOT EXISTS points (
    number INTEGER PRIMARY KEY, payload BLOB, failure TEXT, seconds REAL NOT NULL
);
"""


@dataclass(frozen=True)
class Entry:
    """Outcome of one point: the encoded record, or why there is none."""

    number: int
    payload: bytes | None
    failure: str | None
    seconds: float


class Journal:
    """Outcomes and facts of one sweep."""

    def __init__(self, path: Path) -> None:
        self._connection = sqlite3.connect(path, isolation_level=None, timeout=1.0)
        try:
            self._connection.execute("PRAGMA locking_mode = EXCLUSIVE")
            self._connection.execute("PRAGMA journal_mode = WAL")
            self._connection.execute("PRAGMA synchronous = FULL")
            self._connection.executescript(f"BEGIN IMMEDIATE; {_TABLES} COMMIT;")
        except sqlite3.OperationalError as error:
            self._connection.close()
            given = f"{path.parent}, in use or not writable ({error})"
            expected = "a folder that can be written, and that no other sweep is writing"
            raise ArgumentError("store", given, expected) from None
        except sqlite3.DatabaseError as error:
            self._connection.close()
            given = f"{path}, which is no journal ({error})"
            raise ArgumentError("store", given, "a folder of a sweep, or a new one") from None

    def fact(self, name: str) -> Any:
        """Return a fact (JSON data), or None."""
        query = "SELECT value FROM facts WHERE name = ?"
        row = self._connection.execute(query, (name,)).fetchone()
        return None if row is None else json.loads(row[0])

    def write(self, entries: list[Entry], facts: dict[str, Any]) -> None:
        """Write outcomes and facts in one transaction; on return they are on disk."""
        rows = [(e.number, e.payload, e.failure, e.seconds) for e in entries]
        texts = [(name, json.dumps(value)) for name, value in facts.items()]
        self._connection.execute("BEGIN IMMEDIATE")
        try:
            self._connection.executemany("INSERT OR REPLACE INTO points VALUES (?, ?, ?, ?)", rows)
            self._connection.executemany("INSERT OR REPLACE INTO facts VALUES (?, ?)", texts)
        except BaseException:
            self._connection.execute("ROLLBACK")
            raise
        self._connection.execute("COMMIT")

    def finished(self) -> list[int]:
        """Return the numbers of the points with a result."""
        query = "SELECT number FROM points WHERE payload IS NOT NULL ORDER BY number"
        return [number for (number,) in self._connection.execute(query)]

    def failures(self) -> dict[int, str]:
        """Return the messages of the failed points."""
        query = "SELECT number, failure FROM points WHERE failure IS NOT NULL"
        return dict(self._connection.execute(query))

    def payload(self, number: int) -> bytes | None:
        """Return the encoded record of a point, or None."""
        query = "SELECT payload FROM points WHERE number = ?"
        row = self._connection.execute(query, (number,)).fetchone()
        return None if row is None else row[0]

    def close(self) -> None:
        """Move the write-ahead log into the file and release the lock."""
        self._connection.close()
