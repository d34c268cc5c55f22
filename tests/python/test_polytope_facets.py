"""Inequalities and generating vertices against convex hulls by brute force, facet by facet."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from numpy.testing import assert_allclose

import fockhull as fh
from reference.facets import facets as facets_by_trial
from reference.fock import ReferenceSector, bosons, fermions, spin_half
from reference.hulls import all_mixtures, facets_and_vertices, same_facet
from reference.polytope import ReferencePolytope

Array = npt.NDArray[Any]
Case = tuple[ReferenceSector, str | None, tuple[float, ...]]

# decreasing throughout, and with every kind of plateau
WEIGHTS: tuple[tuple[float, ...], ...] = (
    (1,),
    (2 / 3, 1 / 3),
    (1 / 2, 1 / 2),
    (1 / 2, 1 / 3, 1 / 6),
    (2 / 5, 2 / 5, 1 / 5),
    (3 / 5, 1 / 5, 1 / 5),
    (1 / 3, 1 / 3, 1 / 3),
    (0.4, 0.3, 0.2, 0.1),
    (0.3, 0.3, 0.2, 0.2),
    (0.4, 0.2, 0.2, 0.2),
)
LONG = ((0.35, 0.25, 0.2, 0.15, 0.05), (0.3, 0.2, 0.2, 0.2, 0.1))

# all but the largest are below the stable range for the longer weights
SECTORS: tuple[tuple[ReferenceSector, str | None], ...] = (
    *((fermions(d, n), None) for d, n in ((3, 1), (4, 1), (4, 2), (4, 3), (5, 1), (5, 2), (5, 3))),
    *((bosons(d, n), None) for d, n in ((3, 4), (3, 1), (3, 2), (3, 3), (4, 2))),
    *((spin_half(d, n), "spin-resolved") for d, n in ((2, (1, 1)), (3, (1, 1)), (3, (2, 1)))),
    *((spin_half(d, n), "spin-summed") for d, n in ((4, (1, 1)), (3, (1, 1)), (3, (2, 1)))),
)


def cases() -> list[Case]:
    """Small enough to list every ordered tuple, and of full dimension."""
    found: list[Case] = []
    for sector, domain in SECTORS:
        lists = WEIGHTS + (LONG if sector.dimension <= 6 else ())
        for weights in lists:
            one_point = len(weights) == sector.dimension and len(set(weights)) == 1
            if len(weights) <= sector.dimension and not one_point:
                found.append((sector, domain, weights))
    larger = fermions(6, 3)  # stable for r = 4
    found += [(larger, None, weights) for weights in WEIGHTS if len(weights) <= 3]
    return found


def label(case: Case) -> str:
    sector, domain, weights = case
    w = " ".join(f"{one:.3g}" for one in weights)
    return f"{sector.statistics} {sector.modes} {sector.particles} {domain or ''} ({w})"


def polytope_of(case: Case) -> fh.ExclusionPolytope:
    sector, domain, weights = case
    d, n = sector.modes, sector.particles
    if sector.statistics == "spin-1/2":
        return fh.ExclusionPolytope(fh.SpinHalfFermions(d, particles=n), weights, domain)  # type: ignore[arg-type]
    kind = fh.Bosons if sector.statistics == "bosons" else fh.Fermions
    return fh.ExclusionPolytope(kind(d, n[0]), weights)


def canonical(inequality: fh.Inequality, polytope: fh.ExclusionPolytope) -> tuple[Array, float]:
    """Last coefficient of each component 0, the largest 1."""
    c = np.atleast_2d(inequality.coefficients).astype(float)
    sector = polytope.sector
    numbers = sector.particles if len(c) == 2 else [sector.total_particles]
    shifted = c - c[:, -1:]
    bound = inequality.bound - c[:, -1] @ np.atleast_1d(numbers)
    return shifted / shifted.max(), float(bound / shifted.max())


def unmatched(found: list[Any], expected: list[Any]) -> list[Any]:
    return [one for one in found if not any(same_facet(one, other) for other in expected)]


@pytest.mark.parametrize("case", cases(), ids=label)
def test_hull_of_everything(case: Case) -> None:
    """The same facets and the same vertices, none missing, none besides."""
    polytope = polytope_of(case)
    expected, vertices = facets_and_vertices(all_mixtures(case[0], np.array(case[2]), case[1]))
    found = [canonical(one, polytope) for one in polytope.inequalities()]
    assert unmatched(found, expected) == []
    assert unmatched(expected, found) == []
    assert len(found) == len(expected)
    generating = np.atleast_3d(polytope.generating_vertices()).reshape(-1, *vertices.shape[1:])
    assert len(generating) == len(vertices)
    between = np.abs(generating[:, None] - vertices[None]).max(axis=(2, 3))
    assert between.min(axis=0).max() < 1e-12
    assert between.min(axis=1).max() < 1e-12


def test_there_are_enough_cases() -> None:
    """Of all kinds, with equal weights and below the stable range."""
    every = cases()
    assert len(every) >= 100
    assert sum(len(set(weights)) < len(weights) for _, _, weights in every) >= 30
    unstable = [n[0] < len(w) - 1 for s, _, w in every if (n := s.particles) and len(n) == 1]
    assert sum(unstable) >= 30


@pytest.mark.parametrize(
    "case",
    [
        (fermions(5, 2), None, (0.4, 0.3, 0.2, 0.1)),
        (bosons(3, 3), None, (0.35, 0.25, 0.2, 0.15, 0.05)),
        (spin_half(3, (2, 1)), "spin-resolved", (1 / 2, 1 / 3, 1 / 6)),
        (spin_half(3, (1, 1)), "spin-summed", (0.3, 0.3, 0.2, 0.2)),
    ],
    ids=label,
)
def test_trying_every_set_of_generators(case: Case) -> None:
    """A second way to the facets: hyperplanes through vertices and rays of the ordered domain."""
    polytope = polytope_of(case)
    expected = facets_by_trial(ReferencePolytope(case[0], np.array(case[2]), case[1]))
    found = [canonical(one, polytope) for one in polytope.inequalities()]
    assert unmatched(found, expected) == []
    assert unmatched(expected, found) == []
    assert len(found) == len(expected)


@pytest.mark.parametrize("case", cases()[::7], ids=label)
def test_bounds_are_linear_forms_in_the_weights(case: Case) -> None:
    polytope = polytope_of(case)
    for one in polytope.inequalities():
        form = one.bound_constant + np.dot(one.bound_weights, polytope.weights)
        assert_allclose(form, one.bound, rtol=0.0, atol=1e-12)
        assert_allclose(-polytope.support(-one.coefficients).value, one.bound, atol=1e-12)
