"""Overhead of sweeps: per point, as points grow in number, and on two workers.

Prints figures; nothing is asserted. Run: python benches/sweep_overhead.py
"""

import os
import tempfile
import time
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np

import fockhull.sweeps

EQUAL_POINTS = 200
EQUAL_COST = 300_000  # steps of `burn`, about 20 ms


def trivial(x):
    """Cost next to nothing, return three variables."""
    return {"energy": 1.0 * x, "levels": ("state", x + np.arange(4.0)), "phase": 1j * x}


def burn(x):
    """Keep one core busy for a fixed number of steps."""
    total = 0
    for step in range(EQUAL_COST):
        total += step ^ x
    return total


def wait(x):
    """Keep no core busy: shows the gain on a machine that is busy with other work."""
    time.sleep(0.02)
    return x


def timed(task, count, **options):
    """Return the seconds a sweep over `count` points takes."""
    start = time.perf_counter()
    fockhull.sweeps.sweep(task, {"x": range(count)}, progress=False, **options)
    return time.perf_counter() - start


def resident_megabytes():
    """Memory in use by this process."""
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE") / 2**20


def growth():
    """Time, size and memory against the number of trivial points."""
    print("trivial points, local threads, with a store")
    print("points   seconds   ms/point   store MB   files   driver MB")
    timed(trivial, 64)
    for count in (1250, 2500, 5000, 10_000):
        with tempfile.TemporaryDirectory() as folder:
            seconds = timed(trivial, count, store=Path(folder, "store"))
            files = [path for path in Path(folder).rglob("*") if path.is_file()]
            size = sum(path.stat().st_size for path in files) / 2**20
        per_point = 1e3 * seconds / count
        print(
            f"{count:6d} {seconds:9.2f} {per_point:10.3f} {size:10.2f} "
            f"{len(files):7d} {resident_megabytes():11.1f}"
        )


def mapped(task, count, executor):
    """Return the seconds the bare executor takes, without a sweep."""
    start = time.perf_counter()
    list(executor.map(task, range(count)))
    return time.perf_counter() - start


def scaling(task, label):
    """Compare two workers with one, next to what the bare executor gains on this machine."""
    print(f"\n{EQUAL_POINTS} points of equal cost ({label}), processes, with a store")
    swept, bare = {}, {}
    for workers in (1, 2):
        with ProcessPoolExecutor(workers) as executor, tempfile.TemporaryDirectory() as folder:
            timed(task, 8, executor=executor)  # the workers import what they need
            bare[workers] = mapped(task, EQUAL_POINTS, executor)
            store = Path(folder, "store")
            swept[workers] = timed(task, EQUAL_POINTS, store=store, executor=executor)
        print(f"{workers} worker(s): {swept[workers]:.2f} s, bare executor {bare[workers]:.2f} s")
    print(f"ratio: {swept[1] / swept[2]:.2f}, bare executor {bare[1] / bare[2]:.2f}")


if __name__ == "__main__":
    growth()
    scaling(burn, "one core busy")
    scaling(wait, "waiting")
