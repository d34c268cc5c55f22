"""Facets of the exclusion polytope as a convex hull of everything (SciPy's Qhull).

Sigma(w) is the convex hull of sum_j w_j n_{I_j} over all ordered tuples of r different
configurations, since f_w(h) is the least of their <h, .> by the rearrangement inequality.
Neither line-ups nor the Gale order enter.
"""

from __future__ import annotations

from itertools import permutations
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.spatial import ConvexHull

from reference.fock import ReferenceSector
from reference.polytope import configuration_points

Array = npt.NDArray[Any]
SAME = 1e-8


def all_mixtures(sector: ReferenceSector, weights: Array, domain: str | None) -> Array:
    """Every sum_j w_j n_{I_j}, each once, shape (m, blocks, d)."""
    points = configuration_points(sector, domain)
    tuples = np.array(list(permutations(range(len(points)), len(weights))))
    mixtures = np.tensordot(weights, points[tuples], axes=(0, 1))
    _, first = np.unique(np.round(mixtures, 11), axis=0, return_index=True)
    return np.asarray(mixtures[first])


def facets_and_vertices(mixtures: Array) -> tuple[list[tuple[Array, float]], Array]:
    """Facets (c, bound) and vertices, one of each orbit under permutations.

    c has shape (blocks, d), decreases within each block to a last component 0 and has the
    largest component 1; vertices decrease within each block.
    """
    free = mixtures[:, :, :-1].reshape(len(mixtures), -1)
    hull = ConvexHull(free)
    corners = -np.sort(-mixtures[_extreme(hull)], axis=2)
    numbers = mixtures[0].sum(axis=1)
    facets: list[tuple[Array, float]] = []
    for equation in np.unique(np.round(hull.equations, 9), axis=0):
        facet = _in_all_modes(equation, numbers)
        if not any(same_facet(facet, other) for other in facets):
            facets.append(facet)
    return facets, _distinct(corners)


def same_facet(a: tuple[Array, float], b: tuple[Array, float]) -> bool:
    """Whether coefficients and bounds agree."""
    return bool(np.abs(a[0] - b[0]).max() < SAME) and abs(a[1] - b[1]) < SAME


def _extreme(hull: ConvexHull) -> Array:
    """Indices of the points where independent facets meet; Qhull keeps some on faces as well."""
    equations = np.unique(np.round(hull.equations, 9), axis=0)
    values = hull.points[hull.vertices] @ equations[:, :-1].T + equations[:, -1]
    ranks = [np.linalg.matrix_rank(equations[row > -SAME, :-1], tol=1e-6) for row in values]
    return np.asarray(hull.vertices[np.array(ranks) == hull.points.shape[1]])


def _in_all_modes(equation: Array, numbers: Array) -> tuple[Array, float]:
    """From a . x <= -b without the last mode of each block to the canonical form."""
    blocks = len(numbers)
    c = np.hstack([equation[:-1].reshape(blocks, -1), np.zeros((blocks, 1))])
    ordered = -np.sort(-c, axis=1)
    last = ordered[:, -1]
    scale = (ordered - last[:, None]).max()
    return (ordered - last[:, None]) / scale, float((-equation[-1] - last @ numbers) / scale)


def _distinct(points: Array) -> Array:
    _, first = np.unique(np.round(points, 8), axis=0, return_index=True)
    return np.asarray(points[first])
