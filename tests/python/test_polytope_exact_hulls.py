"""Inequalities and generating vertices against exact convex hulls, to the last integer."""

from __future__ import annotations

from fractions import Fraction
from math import perm
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

import fockhull as fh
from reference.exact_hulls import Facet, canonical, exact_facets_and_vertices
from reference.fock import ReferenceSector, bosons, fermions, spin_half

Array = npt.NDArray[Any]
Case = tuple[ReferenceSector, str | None, tuple[int, ...]]

# decreasing throughout, and with every kind of plateau; to be divided by their sum
WEIGHTS = (
    (1,),
    (2, 1),
    (1, 1),
    (3, 2, 1),
    (2, 2, 1),
    (3, 1, 1),
    (1, 1, 1),
    (4, 3, 2, 1),
    (3, 3, 2, 2),
    (4, 2, 2, 2),
    (7, 5, 4, 3, 1),
    (3, 2, 2, 2, 1),
    (2, 2, 2, 1, 1),
)
SECTORS: tuple[tuple[ReferenceSector, str | None], ...] = (
    *((fermions(d, n), None) for d, n in ((3, 1), (4, 1), (4, 2), (4, 3), (5, 1), (5, 2), (6, 3))),
    *((bosons(d, n), None) for d, n in ((3, 4), (3, 1), (3, 2), (3, 3), (4, 2))),
    *((spin_half(d, n), "spin-resolved") for d, n in ((2, (1, 1)), (3, (1, 1)), (3, (2, 1)))),
    *((spin_half(d, n), "spin-summed") for d, n in ((4, (1, 1)), (3, (1, 1)), (3, (2, 1)))),
)
MOST_TUPLES = 7_000


def cases() -> list[Case]:
    """Few enough ordered tuples of configurations, and more than one point."""
    return [
        (sector, domain, weights)
        for sector, domain in SECTORS
        for weights in WEIGHTS
        if len(weights) <= sector.dimension
        and perm(sector.dimension, len(weights)) <= MOST_TUPLES
        and not (len(weights) == sector.dimension and len(set(weights)) == 1)
    ]


def label(case: Case) -> str:
    sector, domain, weights = case
    return f"{sector.statistics} {sector.modes} {sector.particles} {domain or ''} {weights}"


def polytope_of(case: Case) -> fh.ExclusionPolytope:
    sector, domain, weights = case
    d, n = sector.modes, sector.particles
    w = np.array(weights) / sum(weights)
    if sector.statistics == "spin-1/2":
        return fh.ExclusionPolytope(fh.SpinHalfFermions(d, particles=n), w, domain)  # type: ignore[arg-type]
    kind = fh.Bosons if sector.statistics == "bosons" else fh.Fermions
    return fh.ExclusionPolytope(kind(d, n[0]), w)


def exact(one: fh.Inequality, case: Case) -> Facet:
    """Integers, and the bound with the weights as fractions."""
    sector, domain, weights = case
    terms = zip(one.bound_weights, weights, strict=True)
    bound = one.bound_constant + sum(Fraction(c * w, sum(weights)) for c, w in terms)
    numbers = sector.particles if domain == "spin-resolved" else (sum(sector.particles),)
    return canonical(np.atleast_2d(one.coefficients), Fraction(bound), np.array(numbers))


@pytest.mark.parametrize("case", cases(), ids=label)
def test_exact_hull_of_everything(case: Case) -> None:
    """The same facets and vertices, exactly, each once."""
    sector, domain, weights = case
    polytope = polytope_of(case)
    facets, vertices = exact_facets_and_vertices(sector, weights, domain)
    listed = [exact(one, case) for one in polytope.inequalities()]
    assert len(listed) == len(set(listed))
    assert set(listed) == facets
    line_ups = polytope.line_ups().astype(int)
    found = np.tensordot(line_ups, np.array(weights), axes=(1, 0)).reshape(len(line_ups), -1)
    generating = [tuple(int(x) for x in row) for row in found]
    assert len(generating) == len(set(generating))
    assert set(generating) == vertices


def test_there_are_enough_cases() -> None:
    """Of every kind, with equal weights and below the stable range."""
    every = cases()
    kinds = {(sector.statistics, domain) for sector, domain, _ in every}
    assert len(kinds) == 4
    assert len(every) >= 100
    assert sum(len(set(weights)) < len(weights) for _, _, weights in every) >= 30
    unstable = [len(s.particles) == 1 and s.particles[0] < len(w) - 1 for s, _, w in every]
    assert sum(unstable) >= 30
