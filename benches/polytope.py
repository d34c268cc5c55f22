"""The exclusion polytope beside a dense active-set QP, and at its largest.

First, batches of projections for r <= 12 and d = 24 against quadprog on the complete list of
inequalities, in one run and in turn: time a point and ratio, once the list that both need has
been made (its time stands beside). Second, one certified projection for r = 100,000 in 100 modes
with 50 particles. Usage: ``python benches/polytope.py``.
"""

from __future__ import annotations

import time
from typing import Any

import numpy as np
import numpy.typing as npt
import quadprog

import fockhull as fh

Array = npt.NDArray[Any]

MODES, PARTICLES = 24, 12
BATCH, POINTS_OF_QUADPROG = 20_000, 200
LARGE = (100_000, 100, 50)
REPETITIONS = 7
SEED = 0


def decreasing_weights(r: int) -> Array:
    """Strictly decreasing weights of sum 1."""
    weights = np.linspace(2.0, 1.0, r)
    return weights / weights.sum()


def determinant(modes: int, particles: int, count: int, rng: np.random.Generator) -> Array:
    """Occupations 1 and 0 with noise of 0.05: most of it beyond Pauli's limits."""
    filled = (np.arange(modes) < particles).astype(float)
    return ordered(filled + 0.05 * rng.standard_normal((count, modes)), particles)


def smooth(modes: int, particles: int, count: int, rng: np.random.Generator) -> Array:
    """Occupations that fall smoothly over a few modes, noise of 0.02: many limits meet."""
    width = modes / 50.0 * rng.uniform(0.5, 1.5, (count, 1))
    steps = np.clip((np.arange(modes) + 0.5 - particles) / width, -50.0, 50.0)
    return ordered(1.0 / (1.0 + np.exp(steps)) + 0.02 * rng.standard_normal(steps.shape), particles)


def ordered(points: Array, particles: int) -> Array:
    """The right sum, decreasing."""
    return -np.sort(points.mean(axis=1, keepdims=True) - points - particles / points.shape[1])


KINDS: dict[str, Any] = {"determinant": determinant, "smooth": smooth}


class ListedDomain:
    """The ordered domain as a quadratic program over its complete list of inequalities."""

    def __init__(self, polytope: fh.ExclusionPolytope) -> None:
        d = polytope.sector.modes
        listed = polytope.inequalities()
        order = -np.diff(np.eye(d), axis=0)
        facets = -np.array([one.coefficients for one in listed], dtype=float)
        bounds = [-one.bound for one in listed]
        self.rows = np.vstack([np.ones(d), order, facets]).T.copy()
        self.limits = np.array([polytope.sector.total_particles, *np.zeros(d - 1), *bounds])
        self.metric = np.eye(d)

    def project(self, point: Array) -> Array:
        """Nearest point by the dual active-set method of Goldfarb and Idnani."""
        solved = quadprog.solve_qp(self.metric, point, self.rows, self.limits, 1)[0]
        return np.asarray(solved)


def timed(function: Any) -> tuple[float, Any]:
    """Time of a call, and what it returned."""
    start = time.perf_counter()
    result = function()
    return time.perf_counter() - start, result


def batch_row(r: int, kind: str, rng: np.random.Generator) -> str:
    """Time of the list, ours and quadprog's time a point, their ratio, largest difference."""
    polytope = fh.ExclusionPolytope(fh.Fermions(MODES, PARTICLES), decreasing_weights(r))
    points = KINDS[kind](MODES, PARTICLES, BATCH, rng)
    listing, listed = timed(lambda: ListedDomain(polytope))
    few = points[:POINTS_OF_QUADPROG]
    ours = theirs = np.inf
    for _ in range(REPETITIONS):
        seconds, projection = timed(lambda: polytope.project(occupations=points))
        reference, nearest = timed(lambda: np.array([listed.project(point) for point in few]))
        ours, theirs = min(ours, seconds / BATCH), min(theirs, reference / len(few))
    difference = np.abs(projection.occupations[: len(few)] - nearest).max()
    return (
        f"{r:>3} {kind:>12} {len(polytope.inequalities()):>13} {listing * 1e3:>8.1f} "
        f"{ours * 1e6:>8.2f} {theirs * 1e6:>9.1f} {theirs / ours:>7.1f} {difference:>11.1e} "
        f"{projection.gap.max():>8.1e}"
    )


def project(polytope: fh.ExclusionPolytope, point: Array) -> tuple[bool, fh.Projection]:
    """Whether the tolerance was reached, and the projection."""
    try:
        return True, polytope.project(occupations=point)
    except fh.errors.ConvergenceError as error:
        return False, error.result


def large_row(r: int, modes: int, particles: int, kind: str, rng: np.random.Generator) -> str:
    """One projection with its certificates, and the check that the point is outside."""
    polytope = fh.ExclusionPolytope(fh.Fermions(modes, particles), decreasing_weights(r))
    point = KINDS[kind](modes, particles, 1, rng)[0]
    start = time.perf_counter()
    reached, projection = project(polytope, point)
    seconds = time.perf_counter() - start
    start = time.perf_counter()
    proof = projection.separator
    verified = proof is not None and proof.verify()
    checking = time.perf_counter() - start
    return (
        f"{kind:>12}: {seconds:.2f} s{'' if reached else ', tolerance not reached'}; distance "
        f"{projection.distance:.9f}, certified to "
        f"{projection.distance - projection.distance_lower:.0e}; point to "
        f"{np.sqrt(max(projection.gap, 0.0)):.0e}; separator "
        f"{'verified' if verified else 'NOT VERIFIED'} in {checking:.2f} s"
    )


def main() -> None:
    """Print both tables."""
    rng = np.random.default_rng(SEED)
    print(f"{BATCH} projections, d = {MODES}, N = {PARTICLES}; microseconds a point")
    print("  r       points  inequalities  list/ms     ours  quadprog   ratio  difference  max gap")
    for r in (1, 2, 4, 8, 12):
        for kind in KINDS:
            print(batch_row(r, kind, rng))
    r, modes, particles = LARGE
    print(f"r = {r:,}, d = {modes}, N = {particles}")
    for kind in KINDS:
        print(large_row(r, modes, particles, kind, rng))


if __name__ == "__main__":
    main()
