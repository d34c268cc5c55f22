"""Facets and vertices of the exclusion polytope in exact rational arithmetic (PPL).

Sigma(w) is the convex hull of sum_j w_j n_{I_j} over all ordered tuples of r different
configurations. For weights W_j / D with integers W_j the points D n are integers, and the
double description of the Parma Polyhedra Library (pplpy, GPL; used by the tests alone) gives
facets and vertices without rounding.
"""

from __future__ import annotations

from fractions import Fraction
from itertools import permutations
from math import gcd
from typing import Any

import numpy as np
import numpy.typing as npt
from ppl import C_Polyhedron, Generator_System, Linear_Expression, point

from reference.fock import ReferenceSector
from reference.polytope import configuration_points

Array = npt.NDArray[Any]
Facet = tuple[tuple[int, ...], Fraction]


def canonical(coefficients: Array, bound: Fraction, numbers: Array) -> Facet:
    """<c, n> <= bound with c (blocks, d) decreasing to 0 in each block, without common divisor.

    `numbers` are the sums of n in each block.
    """
    ordered = -np.sort(-np.array(coefficients, dtype=object), axis=1)
    last = ordered[:, -1]
    shifted = ordered - last[:, None]
    rest = bound - sum(Fraction(int(c)) * int(n) for c, n in zip(last, numbers, strict=True))
    integers = [int(c) for c in shifted.ravel()]
    divisor = gcd(*integers) or 1
    return tuple(c // divisor for c in integers), rest / divisor


def exact_facets_and_vertices(
    sector: ReferenceSector, weights: tuple[int, ...], domain: str | None
) -> tuple[set[Facet], set[tuple[int, ...]]]:
    """One of each orbit: facets in canonical form, and the vertices, decreasing, times D."""
    points = np.rint(configuration_points(sector, domain)).astype(int)
    tuples = np.array(list(permutations(range(len(points)), len(weights))))
    mixtures = np.unique(np.tensordot(weights, points[tuples], axes=(0, 1)), axis=0)
    shape, numbers = mixtures.shape[1:], points[0].sum(axis=1)
    generators = Generator_System()
    for mixture in mixtures:
        generators.insert(point(Linear_Expression([int(x) for x in mixture.ravel()], 0)))
    hull = C_Polyhedron(generators)
    facets = set()
    for constraint in hull.minimized_constraints():
        if constraint.is_equality():
            continue
        # c . D n + b >= 0
        c = -np.array([int(x) for x in constraint.coefficients()], dtype=object)
        c = np.concatenate([c, np.zeros(mixtures[0].size - len(c), dtype=object)])
        bound = Fraction(int(constraint.inhomogeneous_term()), sum(weights))
        facets.add(canonical(c.reshape(shape), bound, numbers))
    vertices = set()
    for generator in hull.minimized_generators():
        x = np.array([int(c) for c in generator.coefficients()])
        x = np.concatenate([x, np.zeros(mixtures[0].size - len(x), dtype=int)]).reshape(shape)
        vertices.add(tuple(int(c) for c in -np.sort(-x, axis=1).ravel()))
    return facets, vertices
