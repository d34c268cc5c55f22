"""Work that cannot fit is refused within a second, before anything is allocated."""

from __future__ import annotations

import resource
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

import fockhull as fh
from fockhull.errors import SizeError

HUGE = fh.Fermions(100, 50)
LARGE = fh.SpinHalfFermions(24, particles=(12, 12))
RING = fh.SpinHalfFermions(16, particles=(8, 8))


def hubbard(sector: Any) -> fh.Hamiltonian:
    coupling = np.eye(sector.modes) if sector.spins == 2 else np.eye(sector.modes, k=1)
    interaction = fh.Interaction(sector, density_density=coupling + coupling.T)
    return fh.Hamiltonian(fh.lattices.ring(sector.modes), interaction)


BEYOND_64_BITS: dict[str, Callable[[], object]] = {
    "occupations": lambda: HUGE.occupations(0),
    "index": lambda: HUGE.index([1] * 50 + [0] * 50),
    "configurations": lambda: next(HUGE.configurations()),
    "diagonal": lambda: hubbard(HUGE).diagonal(),
    "to_scipy": lambda: hubbard(HUGE).to_scipy(),
    "memory_estimate": lambda: hubbard(HUGE).memory_estimate(),
    "solve": lambda: fh.solve(hubbard(HUGE), [0.6, 0.4]),
    "bosons": lambda: fh.Bosons(200, 200).occupations(0),
}

TOO_LARGE: dict[str, Callable[[], object]] = {
    "solve, 24 sites": lambda: fh.solve(hubbard(LARGE), [1.0]),
    "solve, spinless": lambda: fh.solve(hubbard(fh.Fermions(48, 24)), levels=2),
    "solve, bosons": lambda: fh.solve(hubbard(fh.Bosons(24, 24)), [0.6, 0.4]),
    "solve, many levels": lambda: fh.solve(hubbard(RING), levels=10_000),
    "diagonal": lambda: hubbard(LARGE).diagonal(),
    "to_scipy, 16 sites": lambda: hubbard(RING).to_scipy(),
    "to_scipy, 24 sites": lambda: hubbard(LARGE).to_scipy(),
}


def refused_at_once(call: Callable[[], object], words: str) -> None:
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    start = time.perf_counter()
    with pytest.raises(SizeError, match=words) as caught:
        call()
    assert time.perf_counter() - start < 1.0
    assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before < 200_000  # kibibytes
    assert isinstance(caught.value, fh.FockhullError)
    assert isinstance(caught.value, ValueError)


@pytest.mark.timeout(10)
@pytest.mark.parametrize("name", BEYOND_64_BITS)
def test_beyond_64_bits(name: str) -> None:
    refused_at_once(BEYOND_64_BITS[name], "64-bit")


@pytest.mark.timeout(10)
@pytest.mark.parametrize("name", TOO_LARGE)
def test_beyond_the_memory(name: str) -> None:
    refused_at_once(TOO_LARGE[name], r"needs about [\d.]+ .iB but only [\d.]+ .iB")


@pytest.mark.timeout(10)
def test_what_needs_no_enumeration_works_at_any_size() -> None:
    """One hundred modes, fifty particles."""
    energies = np.linspace(-1.0, 1.0, 100)
    lowest = HUGE.lowest_configurations(energies, 3)
    assert lowest.energies[0] == pytest.approx(energies[:50].sum())
    polytope = fh.ExclusionPolytope(HUGE, [0.5, 0.3, 0.2])
    assert not polytope.contains(occupations=[1.0] * 50 + [0.0] * 50)
    assert polytope.project(occupations=[1.0] * 50 + [0.0] * 50).distance > 0.05
    assert hubbard(HUGE).dimension == HUGE.dimension > 2**64


@pytest.mark.timeout(10)
def test_estimates_need_no_memory() -> None:
    estimate = hubbard(RING).memory_estimate()
    assert estimate.vector == 8 * RING.dimension
    assert estimate.matrix > 12 * RING.dimension
    assert hubbard(LARGE).memory_estimate().vector == 8 * LARGE.dimension


@pytest.mark.timeout(10)
def test_first_configurations_of_a_large_sector() -> None:
    """Iteration does not list what nobody asked for."""
    first = next(LARGE.configurations())
    assert LARGE.index(first) == 0
