"""Ensembles kept with a projection: real ones verify, tampered ones do not."""

from __future__ import annotations

import pickle
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given
from numpy.testing import assert_allclose

import fockhull as fh
from properties.generated import Array, generators, polytopes, scattered

Polytope = fh.ExclusionPolytope
OUTSIDE = np.array([1.4, 1.1, 0.9, 0.2, -0.2, -0.4])


@given(polytopes(), generators())
def test_the_ensemble_has_the_nearest_occupations(polytope: Polytope, rng: Any) -> None:
    projection = polytope.project(occupations=scattered(polytope, rng))
    ensemble = projection.ensemble
    assert ensemble.verify(projection.occupations)
    assert_allclose(ensemble.occupations(), projection.occupations, rtol=0.0, atol=1e-9)


@given(polytopes(), generators())
def test_its_terms_are_density_operators_with_the_weights(polytope: Polytope, rng: Any) -> None:
    """r different configurations of the sector; the mixture adds up by hand."""
    projection = polytope.project(occupations=scattered(polytope, rng))
    ensemble, sector = projection.ensemble, polytope.sector
    assert_allclose(ensemble.probabilities.sum(), 1.0, rtol=0.0, atol=1e-12)
    assert ensemble.probabilities.min() >= 0.0
    assert_allclose(ensemble.weights, polytope.weights)
    mixture = np.zeros(sector.shape)
    for term, probability in enumerate(ensemble.probabilities):
        configurations = ensemble.configurations(term)
        assert len(set(np.ravel(sector.index(configurations)))) == len(polytope.weights)
        mixture += probability * np.tensordot(polytope.weights, configurations, axes=1)
    if polytope.domain == "spin-summed":
        mixture = mixture.sum(axis=0)
    assert_allclose(mixture, projection.occupations, rtol=0.0, atol=1e-9)


@given(polytopes(), generators())
def test_other_occupations_do_not_verify(polytope: Polytope, rng: Any) -> None:
    projection = polytope.project(occupations=scattered(polytope, rng))
    n = projection.occupations
    changed = n.copy()
    changed.flat[rng.integers(n.size)] += 1e-6
    assert not projection.ensemble.verify(changed)
    assert projection.ensemble.verify(changed, tol=1e-5)
    assert not projection.ensemble.verify(n[..., :-1])
    assert not projection.ensemble.verify(np.array([n, n]))
    shuffled = np.roll(n, 1, axis=-1)
    assume(np.abs(shuffled - n).max() > 1e-6)
    assert not projection.ensemble.verify(shuffled)


def scaled(array: Array) -> None:
    array *= 1.001


def negative(array: Array) -> None:
    array[0], array[-1] = array[0] + 2.0 * array[-1], -array[-1]


def moved(array: Array) -> None:
    array[0], array[-1] = array[0] + 0.5 * array[-1], 0.5 * array[-1]


def repeated(array: Array) -> None:
    array[..., 0] = array[..., 1]


def beyond(array: Array) -> None:
    array[array == array.max()] += 1


def reversed_(array: Array) -> None:
    array[...] = array[..., ::-1].copy()


TAMPERED: list[tuple[str, Callable[[Array], None]]] = [
    ("_permutation_probabilities", scaled),
    ("_permutation_probabilities", negative),
    ("_permutation_probabilities", moved),
    ("_permutations", repeated),
    ("_permutations", beyond),
    ("_permutations", reversed_),
    ("_line_up_probabilities", scaled),
    ("_line_up_probabilities", negative),
    ("_potentials", reversed_),
]


@pytest.mark.parametrize(
    ("name", "change"), TAMPERED, ids=[f"{name} {f.__name__}" for name, f in TAMPERED]
)
def test_tampered_ensembles_do_not_verify(name: str, change: Callable[[Array], None]) -> None:
    polytope = Polytope(fh.Fermions(6, 3), [0.5, 0.3, 0.2])
    projection = polytope.project(occupations=OUTSIDE)
    assert projection.ensemble.verify(projection.occupations)
    copy = pickle.loads(pickle.dumps(projection.ensemble))
    array = np.array(getattr(copy, name))
    change(array)
    assert (array != getattr(copy, name)).any()
    setattr(copy, name, array)
    assert not copy.verify(projection.occupations)
