"""The list of inequalities, the list of vertices and the oracle describe one polytope."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import assume, given
from numpy.testing import assert_allclose

import fockhull as fh
from properties.generated import Array, centre, generators, inside, polytopes, scattered

Polytope = fh.ExclusionPolytope


def smallest_slack(polytope: Polytope, n: Array) -> float:
    return min(float(one.slack(n)) for one in polytope.inequalities())


@given(polytopes(), generators())
def test_every_bound_is_the_support_function(polytope: Polytope, rng: Any) -> None:
    """<c, n> <= bound is what f_w(-c) says, in whatever order the coefficients stand."""
    for one in polytope.inequalities():
        c = rng.permuted(one.coefficients, axis=-1)
        assert_allclose(-polytope.support(-c).value, one.bound, rtol=0.0, atol=1e-10)
        form = one.bound_constant + np.dot(one.bound_weights, polytope.weights)
        assert_allclose(form, one.bound, rtol=0.0, atol=1e-10)


@given(polytopes(), generators())
def test_verdicts_agree(polytope: Polytope, rng: Any) -> None:
    """Inside exactly when no inequality is violated and the particle numbers are right."""
    assume(polytope.inequalities() != ())
    n = scattered(polytope, rng)
    slack = smallest_slack(polytope, n)
    assume(not -1e-6 < slack < -1e-11)
    assert polytope.contains(occupations=n) == (slack >= -1e-11)
    tightest = polytope.tightest(occupations=n)
    assert (tightest.slack < 0.0) == (slack < 0.0) or abs(slack) < 1e-9


@given(polytopes(), generators())
def test_the_list_gives_no_more_than_the_distance(polytope: Polytope, rng: Any) -> None:
    """A violated inequality is as far away as the polytope at most."""
    n = scattered(polytope, rng)
    distance = polytope.distance(occupations=n)
    violations = [-float(one.distance(n)) for one in polytope.inequalities()]
    assert max(violations, default=0.0) <= distance + 1e-8


@given(polytopes(), generators())
def test_vertices_give_the_support_function(polytope: Polytope, rng: Any) -> None:
    """The least of <h, v> over sorted vertices against sorted h, by rearrangement."""
    h = np.sort(rng.standard_normal(polytope.shape), axis=-1)
    vertices = polytope.generating_vertices()
    values = (vertices * h).reshape(len(vertices), -1).sum(axis=1)
    assert_allclose(values.min(), polytope.support(h).value, rtol=0.0, atol=1e-10)
    assert (np.diff(vertices, axis=-1) <= 1e-12).all()
    assert polytope.contains(occupations=vertices).all()
    assert all(smallest_slack(polytope, v) >= -1e-10 for v in vertices if polytope.inequalities())


@given(polytopes())
def test_line_ups_make_the_vertices(polytope: Polytope) -> None:
    mixtures = np.tensordot(polytope.weights, polytope.line_ups(), axes=(0, 1))
    assert_allclose(mixtures, polytope.generating_vertices(), rtol=0.0, atol=1e-12)


@given(polytopes(), generators())
def test_stretched_points_meet_an_inequality(polytope: Polytope, rng: Any) -> None:
    """The stretch is the smallest ratio over the list."""
    n, middle = inside(polytope, rng), centre(polytope)
    assume(np.linalg.norm(n - middle) > 1e-6 and polytope.inequalities() != ())
    ratios = []
    for one in polytope.inequalities():
        room = float(one.slack(middle))
        used = room - float(one.slack(n))
        if used > 1e-12:
            ratios.append(room / used)
    assert_allclose(polytope.stretch(occupations=n).value, min(ratios), rtol=1e-6)
