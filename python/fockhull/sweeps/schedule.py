"""In which order points are computed, and how often a lost one is tried again."""

from collections import deque

from fockhull.sweeps.grid import Grid


class Schedule:
    """Points still to be submitted.

    With a chain dimension, a point waits for its predecessor along that
    dimension. Points lost when an executor broke are tried again one at a
    time, so that the guilty one cannot drag others along.
    """

    def __init__(self, missing: list[int], grid: Grid, chain: str | None) -> None:
        self._stride = 0 if chain is None else grid.stride(chain)
        self._axis = 0 if chain is None else grid.dims.index(chain)
        self._grid = grid
        self._waiting: set[int] = set()
        self._lost: dict[int, int] = {}
        self._suspects: deque[int] = deque()
        self._suspect_out = False
        self._ready: deque[int] = deque(missing)
        if chain is not None:
            absent = set(missing)
            self._waiting = {n for n in missing if self.predecessor(n) in absent}
            self._ready = deque(n for n in missing if n not in self._waiting)

    def predecessor(self, number: int) -> int | None:
        """Return the point before this one along the chain dimension, if any."""
        if self._stride == 0 or self._grid.multi_index(number)[self._axis] == 0:
            return None
        return number - self._stride

    def next(self, in_flight: int) -> int | None:
        """Return the next point to submit, or None if there is none at the moment."""
        if self._suspects:
            if in_flight:
                return None
            self._suspect_out = True
            return self._suspects.popleft()
        if (self._suspect_out and in_flight) or not self._ready:
            return None
        self._suspect_out = False
        return self._ready.popleft()

    def attempts(self, number: int) -> int:
        """How often the point was lost."""
        return self._lost.get(number, 0)

    def lost(self, number: int, alone: bool) -> None:
        """Queue a lost point again."""
        self._lost[number] = self.attempts(number) + 1
        (self._suspects if alone else self._ready).append(number)

    def settled(self, number: int) -> int | None:
        """Take note of a finished or failed point; returns the point it releases, if any."""
        successor = number + self._stride
        if self._stride == 0 or successor not in self._waiting:
            return None
        if self.predecessor(successor) != number:
            return None
        self._waiting.remove(successor)
        self._ready.appendleft(successor)  # one line after the other: few results wait
        return successor
