"""Facets of the exclusion polytope by trying every set of generators (r <= 5)."""

from __future__ import annotations

from itertools import combinations
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.optimize import linprog

from reference.polytope import ReferencePolytope

Array = npt.NDArray[Any]


def facets(polytope: ReferencePolytope) -> list[tuple[Array, float]]:
    """Inequalities c . n <= bound, n sorted decreasingly within each block.

    c has shape (blocks, d), decreases within each block to a last component 0 and has the
    largest component 1.  Facets of Q that the others imply for sorted n are left out; the
    lower bound n_d >= 0 is listed, as n_1 + ... + n_{d-1} <= N.

    The generators are vertices (v, 1) and rays (e_{i+1} - e_i, 0), written by the partial
    sums of v that leave out the last of each block.  A hyperplane spanned by as many of
    them as the dimension is a facet when all others lie on one side.
    """
    vertices, rays = polytope.vertices, polytope.rays
    partial = np.cumsum(np.concatenate([vertices, rays]), axis=2)[:, :, :-1]
    flat = partial.reshape(len(partial), -1)
    is_vertex = np.arange(len(flat)) < len(vertices)
    generators = np.column_stack([flat, is_vertex])
    dimension = flat.shape[1]
    chosen = np.array(list(combinations(range(len(flat)), dimension)))
    chosen = chosen[is_vertex[chosen].any(axis=1)]
    _, spread, directions = np.linalg.svd(generators[chosen])
    normals = directions[spread[:, -1] > 1e-9, -1]
    values = normals @ generators.T
    normals *= np.where(values.max(axis=1) > 1e-9, -1.0, 1.0)[:, None]
    normals = normals[(normals @ generators.T <= 1e-9).all(axis=1)]
    normals /= np.abs(normals[:, :-1]).max(axis=1, keepdims=True)
    normals = np.unique(np.round(normals, 9), axis=0)
    return _irredundant([_inequality(normal, polytope) for normal in normals], polytope)


def canonical(coefficients: Array) -> Array:
    """c with the last component of each block 0 and the largest 1."""
    blocks = np.atleast_2d(coefficients)
    shifted = blocks - blocks[:, -1:]
    scaled: Array = shifted / shifted.max()
    return scaled


def _irredundant(
    inequalities: list[tuple[Array, float]], polytope: ReferencePolytope
) -> list[tuple[Array, float]]:
    """Drop what the order of n and the others imply: the bound is not exceeded without it."""
    blocks, d = polytope.points.shape[1:]
    order = polytope.rays.reshape(len(polytope.rays), -1)
    trace = np.kron(np.eye(blocks), np.ones(d))
    kept: list[tuple[Array, float]] = []
    for k, (row, bound) in enumerate(inequalities):
        others = kept + inequalities[k + 1 :]
        result = linprog(
            -row.ravel(),
            A_ub=np.vstack([order, *[other.ravel() for other, _ in others]]),
            b_ub=np.concatenate([np.zeros(len(order)), [limit for _, limit in others]]),
            A_eq=trace,
            b_eq=polytope.centre.sum(axis=1),
            bounds=(None, None),
        )
        if result.status != 0 or -result.fun > bound + 1e-7:
            kept.append((row, bound))
    return kept


def _inequality(normal: Array, polytope: ReferencePolytope) -> tuple[Array, float]:
    """From weights of the partial sums to coefficients; the bound from the support."""
    blocks, d = polytope.points.shape[1:]
    steps = np.hstack([normal[:-1].reshape(blocks, d - 1), np.zeros((blocks, 1))])
    coefficients = canonical(np.cumsum(steps[:, ::-1], axis=1)[:, ::-1])
    return coefficients, -polytope.support(-coefficients)[0]
