"""Extreme but legal sizes are answered or refused in time; the process never dies of them."""

from __future__ import annotations

import resource
import subprocess
import sys

import pytest

MEMORY = 8 * 2**30
PROGRAM = """
import numpy as np
import fockhull as fh

def solved(sector):
    return fh.solve(fh.Hamiltonian(np.eye(sector.modes), sector=sector, constant=1.0), [1.0])

try:
    result = {expression}
except fh.FockhullError as error:
    print("refused", error)
else:
    print("answered")
"""

CASES = {
    "bosons, one mode, a million": ("solved(fh.Bosons(1, 10**6))", "answered"),
    "bosons, one mode, 2^30": ("solved(fh.Bosons(1, 2**30))", ""),
    "bosons, two modes": ("solved(fh.Bosons(2, 10**4))", "answered"),
    "one fermion": ("solved(fh.Fermions(300, 1))", "answered"),
    "lowest configurations, r = 1e9": (
        "fh.Fermions(100, 50).lowest_configurations(range(100), 10**9)",
        "refused",
    ),
    "dimension of a million modes": ("fh.Fermions(2**20, 2**19).dimension", ""),
}


def limited() -> None:
    resource.setrlimit(resource.RLIMIT_AS, (MEMORY, MEMORY))


@pytest.mark.parametrize("name", CASES)
def test_extremes(name: str) -> None:
    expression, expected = CASES[name]
    finished = subprocess.run(
        [sys.executable, "-c", PROGRAM.format(expression=expression)],
        capture_output=True,
        text=True,
        timeout=10,
        preexec_fn=limited,
        check=False,
    )
    assert finished.returncode == 0, finished.stderr[-500:]
    assert finished.stdout.startswith(expected)
