"""The exclusion polytope by brute force: every configuration of the sector is listed.

Occupations have shape (d,), in the spin-resolved domain (2, d); inside, a point is an
array (blocks, d).  Q = conv(sorted line-up vectors) + cone(e_{i+1} - e_i), the rays
within each block, and n is allowed exactly when its sorted form lies in Q.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import permutations, product
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.optimize import linprog, nnls

from reference.fock import ReferenceSector

Array = npt.NDArray[Any]
TIGHT = {"primal_feasibility_tolerance": 1e-10, "dual_feasibility_tolerance": 1e-10}


@dataclass(frozen=True)
class LineUp:
    """Occupation vectors in the order of their energies for some increasing h."""

    occupations: Array  # (groups, blocks, d), integers
    multiplicities: Array  # (groups,), configurations that share the occupations


@dataclass(frozen=True)
class ReferenceProjection:
    """Nearest allowed point; `violation` is the largest violation of the KKT conditions."""

    occupations: Array
    distance: float
    violation: float


def configuration_points(sector: ReferenceSector, domain: str | None = None) -> Array:
    """Occupations of every configuration, shape (dimension, blocks, d)."""
    points = sector.occupations.reshape(sector.dimension, -1, sector.modes)
    return points.sum(axis=1, keepdims=True) if domain == "spin-summed" else points


def line_ups(points: Array, r: int) -> list[LineUp]:
    """Every order of the r lowest configurations that a strictly increasing h produces.

    A recursion over ordered tuples; each step is kept when a linear program finds an h
    (increasing by at least 1 within each block) that realises the order and leaves every
    other configuration above.  Configurations with equal occupations stay together.
    """
    distinct, counts = np.unique(points, axis=0, return_counts=True)
    below = _dominance(distinct)
    found: list[LineUp] = []

    def extend(chosen: list[int]) -> None:
        if counts[chosen].sum() >= min(r, len(points)):
            found.append(LineUp(distinct[chosen], counts[chosen]))
            return
        rest = [k for k in range(len(distinct)) if k not in chosen]
        minimal = [k for k in rest if not any(below[other, k] for other in rest)]
        for k in minimal:
            order = [*chosen, k]
            others = [other for other in minimal if other != k]
            if _some_increasing_h(distinct, order, others):
                extend(order)

    extend([])
    return found


def line_up_vertex(line_up: LineUp, weights: Array) -> Array:
    """sum_j w_j n_{I_j}, shape (blocks, d), decreasing within each block."""
    stops = np.minimum(np.cumsum(line_up.multiplicities), len(weights))
    cumulated = np.concatenate([[0.0], np.cumsum(weights)])[np.concatenate([[0], stops])]
    vertex: Array = np.tensordot(np.diff(cumulated), line_up.occupations, axes=1)
    return vertex


@dataclass(frozen=True)
class ReferencePolytope:
    """Sigma(w) of a small sector."""

    sector: ReferenceSector
    weights: Array
    domain: str | None = None

    @cached_property
    def points(self) -> Array:
        return configuration_points(self.sector, self.domain)

    @cached_property
    def vertices(self) -> Array:
        """Sorted generating vertices, each once, shape (m, blocks, d)."""
        vertices = [
            line_up_vertex(line_up, self.weights)
            for line_up in line_ups(self.points, len(self.weights))
        ]
        _, first = np.unique(np.round(vertices, 10), axis=0, return_index=True)
        return np.array(vertices)[np.sort(first)]

    @cached_property
    def rays(self) -> Array:
        """e_{i+1} - e_i within each block, shape (blocks * (d - 1), blocks, d)."""
        blocks, d = self.points.shape[1:]
        rays = np.zeros((blocks * (d - 1), blocks, d))
        for k, (block, i) in enumerate(product(range(blocks), range(d - 1))):
            rays[k, block, i], rays[k, block, i + 1] = -1.0, 1.0
        return rays

    @property
    def centre(self) -> Array:
        centre: Array = self.points.mean(axis=0)
        return centre

    def support(self, one_particle_energies: Array) -> tuple[float, Array]:
        """f_w(h) by sorting every configuration energy, and occupations that reach it."""
        h = self._blocks(one_particle_energies)
        energies = np.tensordot(self.points, h, axes=2)
        lowest = np.argsort(energies, kind="stable")[: len(self.weights)]
        occupations = np.tensordot(self.weights, self.points[lowest], axes=1)
        return float(self.weights @ energies[lowest]), self._unblocked(occupations)

    def excess(self, occupations: Array) -> float:
        """Largest-component distance to Q of the sorted occupations, by linear program."""
        target = self._sorted(occupations).ravel()
        generators, hull = self._generators(self.vertices)
        slack = np.ones((len(target), 1))
        result = linprog(
            np.concatenate([np.zeros(generators.shape[1]), [1.0]]),
            A_ub=np.block([[generators, -slack], [-generators, -slack]]),
            b_ub=np.concatenate([target, -target]),
            A_eq=np.concatenate([hull, [0.0]])[None, :],
            b_eq=[1.0],
            method="highs",
            options=TIGHT,
        )
        return float(result.fun)

    def contains(self, occupations: Array, tol: float = 1e-9) -> bool:
        """Whether the occupations are allowed."""
        return self.excess(occupations) <= tol

    def in_permuted_hull(self, occupations: Array, tol: float = 1e-9) -> bool:
        """The same verdict from the hull of all permuted vertices, without rays (d <= 5)."""
        blocks, d = self.points.shape[1:]
        orders = list(product(permutations(range(d)), repeat=blocks))
        permuted = [
            np.array([row[list(order)] for row, order in zip(vertex, choice, strict=True)])
            for vertex in self.vertices
            for choice in orders
        ]
        hull = np.unique(np.round(permuted, 13), axis=0).reshape(-1, blocks * d)
        result = linprog(
            np.zeros(len(hull)),
            A_eq=np.vstack([hull.T, np.ones(len(hull))]),
            b_eq=np.concatenate([self._blocks(occupations).ravel(), [1.0]]),
            method="highs",
            options={"primal_feasibility_tolerance": max(tol, 1e-10)},
        )
        return bool(result.status == 0)

    def project(self, occupations: Array) -> ReferenceProjection:
        """Nearest allowed occupations, from the list of all line-ups."""
        return self._project(occupations, self.vertices)

    def project_by_columns(self, occupations: Array, rounds: int = 500) -> ReferenceProjection:
        """The same without line-ups (any r <= dimension): vertices enter one by one."""
        _, first = self.support(np.broadcast_to(np.arange(float(self.sector.modes)), self._shape))
        vertices = self._sorted(first)[None]
        for _ in range(rounds):
            projection = self._project(occupations, vertices)
            h = self._sorted(projection.occupations) - self._sorted(occupations)
            h = np.maximum.accumulate(h, axis=1)
            entering = self._sorted(self.support(self._unblocked(h))[1])
            nearest = self._sorted(projection.occupations)
            gap = np.sum(h * (nearest - entering))
            known = np.abs(vertices - entering).max(axis=(1, 2)).min() < 1e-13
            if known or projection.distance < 1e-14 or gap <= 1e-14 * projection.distance:
                return projection
            vertices = np.concatenate([vertices, entering[None]])
        raise ArithmeticError("vertices still enter after the last round")

    def distance(self, occupations: Array) -> float:
        """Euclidean distance to the nearest allowed occupations."""
        return self.project(occupations).distance

    def stretch(self, occupations: Array) -> float:
        """Largest t with centre + t (n - centre) allowed; infinite at the centre."""
        centre = self.centre
        direction = self._sorted(occupations) - centre
        if np.abs(direction).max() < 1e-14:
            return float("inf")
        generators, hull = self._generators(self.vertices)
        result = linprog(
            np.concatenate([np.zeros(generators.shape[1]), [-1.0]]),
            A_eq=np.block(
                [[generators, -direction.reshape(-1, 1)], [hull[None, :], np.zeros((1, 1))]]
            ),
            b_eq=np.concatenate([centre.ravel(), [1.0]]),
            method="highs",
            options=TIGHT,
        )
        return float(-result.fun)

    def _project(self, occupations: Array, vertices: Array) -> ReferenceProjection:
        """Least squares over nonnegative multipliers.

        With y the target, min |V' l + R m|^2 + (1 - sum l)^2 over l, m >= 0, V' = V - y,
        is reached on the ray through the nearest point: x - y = (V' l + R m) / sum l.
        """
        blocks = self._blocks(occupations)
        target = self._sorted(occupations)
        generators, hull = self._generators(vertices - target)
        multipliers, _ = nnls(np.vstack([generators, hull]), np.append(np.zeros(target.size), 1.0))
        h = (generators @ multipliers / (hull @ multipliers)).reshape(target.shape)
        length = float(np.linalg.norm(h))
        slopes = generators.T @ h.ravel() - length**2 * hull
        violation = max(0.0, -slopes.min()) / max(length, 1.0)
        ranks = np.argsort(np.argsort(-blocks, axis=1, kind="stable"), axis=1)
        nearest = np.take_along_axis(target + h, ranks, axis=1)
        return ReferenceProjection(self._unblocked(nearest), length, float(violation))

    def _generators(self, vertices: Array) -> tuple[Array, Array]:
        """Columns of all generators of Q and the indicator of those that are vertices."""
        columns = np.concatenate([vertices, self.rays]).reshape(len(vertices) + len(self.rays), -1)
        indicator = np.concatenate([np.ones(len(vertices)), np.zeros(len(self.rays))])
        return columns.T, indicator

    @property
    def _shape(self) -> tuple[int, ...]:
        blocks, d = self.points.shape[1:]
        return (blocks, d) if blocks > 1 else (d,)

    def _blocks(self, occupations: Array) -> Array:
        return np.asarray(occupations, dtype=float).reshape(self.points.shape[1:])

    def _unblocked(self, blocks: Array) -> Array:
        return blocks.reshape(self._shape)

    def _sorted(self, occupations: Array) -> Array:
        return -np.sort(-self._blocks(occupations), axis=1)


def _dominance(points: Array) -> Array:
    """below[a, b]: a != b and <h, a> <= <h, b> for every increasing h (Gale order)."""
    partial = np.cumsum(points, axis=2).reshape(len(points), -1)
    below: Array = np.all(partial[:, None] >= partial[None, :], axis=2)
    np.fill_diagonal(below, False)
    return below


def _some_increasing_h(points: Array, order: list[int], others: list[int]) -> bool:
    blocks, d = points.shape[1:]
    steps = np.kron(np.eye(blocks), np.diff(np.eye(d), axis=0))
    flat = points.reshape(len(points), -1)
    rows = np.vstack([steps, np.diff(flat[order], axis=0), flat[others] - flat[order[-1]]])
    if not len(rows):
        return True
    result = linprog(
        np.zeros(blocks * d), A_ub=-rows, b_ub=-np.ones(len(rows)), bounds=(None, None)
    )
    return bool(result.status == 0)
