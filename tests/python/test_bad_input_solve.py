"""`solve` and ensembles: what they refuse."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

import fockhull as fh
from refusals import NOT_INTEGERS, NOT_NUMBERS, NOT_REAL_NUMBERS, TYPE, VALUE, named, refused

SECTOR = fh.Fermions(4, 2)
H = fh.Hamiltonian(np.diag([0.0, 1.0, 3.0, 9.0]), sector=SECTOR)
OTHER = fh.Hamiltonian(np.diag([0.0, 1.0, 3.0]), sector=fh.Fermions(3, 1))
ENSEMBLE = fh.solve(H, [0.7, 0.3])
LEVELS = fh.solve(H, levels=2)
X = np.ones(6)


def solve(weights: Any = (0.6, 0.4), **options: Any) -> fh.Ensemble:
    return fh.solve(H, weights, **options)


WEIGHTS = [
    ([0.3, 0.7], "decreasing"),
    ([0.4, 0.6 - 1e-9, 1e-9], "decreasing"),
    ([1.1, -0.1], "non-negative"),
    ([0.6, 0.3], "sum of one"),
    ([0.6, 0.4 + 1e-9], "sum of one"),
    ([2.0], "sum of one"),
    ([0.0], "sum of one"),
    ([], "sum of one"),
    ([0.6, np.nan], "finite"),
    ([np.inf, 0.0], "finite"),
    ([[0.6, 0.4]], "(r,)"),
    (1.0, "(r,)"),
    ([1.0 / 7.0] * 7, "6"),
]


@pytest.mark.parametrize(("weights", "words"), WEIGHTS, ids=[str(w) for w, _ in WEIGHTS])
def test_weights(weights: Any, words: str) -> None:
    refused(VALUE, "weights", lambda: fh.solve(H, weights), words)
    refused(VALUE, "weights", lambda: fh.ExclusionPolytope(SECTOR, weights), words)
    if np.size(weights) < 7:  # how many levels were found is another question
        refused(VALUE, "weights", lambda: ENSEMBLE.reweighted(weights), words)


@pytest.mark.parametrize("value", NOT_REAL_NUMBERS.values(), ids=NOT_REAL_NUMBERS)
def test_real_numbers(value: Any) -> None:
    refused(TYPE, "weights", lambda: solve(value))
    refused(TYPE, "weights", lambda: ENSEMBLE.reweighted(value))
    refused(TYPE, "weights", lambda: fh.ExclusionPolytope(SECTOR, value))


@pytest.mark.parametrize("value", NOT_NUMBERS.values(), ids=NOT_NUMBERS)
def test_start_is_numbers(value: Any) -> None:
    refused(TYPE, "start", lambda: solve(start=value))


@pytest.mark.parametrize("value", NOT_INTEGERS.values(), ids=NOT_INTEGERS)
def test_integers(value: Any) -> None:
    refused(TYPE, "seed", lambda: solve(seed=value))
    if value is not None:
        refused(TYPE, "levels", lambda: solve(None, levels=value))
        refused(TYPE, "max_products", lambda: solve(max_products=value))


@named(
    [
        (TYPE, "hamiltonian", lambda: fh.solve(np.eye(6), [1.0]), "ndarray"),
        (TYPE, "hamiltonian", lambda: fh.solve(SECTOR, [1.0]), "Fermions"),
        (VALUE, "weights", lambda: fh.solve(H), "exactly one"),
        (VALUE, "weights", lambda: fh.solve(H, [1.0], levels=1), "exactly one"),
        (VALUE, "levels", lambda: fh.solve(H, levels=0), "at least 1"),
        (VALUE, "levels", lambda: fh.solve(H, levels=7), "6"),
        (VALUE, "levels", lambda: fh.solve(H, levels=2**70)),
        (VALUE, "tol", lambda: solve(tol=0.0), "positive"),
        (VALUE, "tol", lambda: solve(tol=-1e-10), "positive"),
        (VALUE, "tol", lambda: solve(tol=np.nan)),
        (VALUE, "tol", lambda: solve(tol=np.inf)),
        (VALUE, "tol", lambda: solve(tol=[1e-10])),
        (TYPE, "tol", lambda: solve(tol="1e-10")),
        (TYPE, "tol", lambda: solve(tol=None)),
        (TYPE, "tol", lambda: solve(tol=1e-10j)),
        (VALUE, "seed", lambda: solve(seed=-1), "at least 0"),
        (VALUE, "seed", lambda: solve(seed=2**70)),
        (VALUE, "max_products", lambda: solve(max_products=0)),
        (VALUE, "max_products", lambda: solve(max_products=-5)),
        (VALUE, "max_products", lambda: solve(max_products=2**70)),
        (VALUE, "start", lambda: solve(start=1.0)),
        (VALUE, "start", lambda: solve(start=X[:5]), "6"),
        (VALUE, "start", lambda: solve(start=np.ones((2, 6))), "columns"),
        (VALUE, "start", lambda: solve(start=np.ones((6, 2, 1)))),
        (VALUE, "start", lambda: solve(start=X * np.nan), "finite"),
        (VALUE, "start", lambda: solve(start=fh.solve(OTHER, [1.0])), "6"),
        (TYPE, "progress", lambda: solve(progress="yes"), "callable"),
        (TYPE, "progress", lambda: solve(progress=1), "callable"),
    ]
)
def test_solve(error: Any, argument: str, call: Any, words: str) -> None:
    refused(error, argument, call, words)


@named(
    [
        (VALUE, "weights", lambda: ENSEMBLE.reweighted([1 / 6] * 6), "levels found"),
        (VALUE, "weights", lambda: LEVELS.energy, "reweighted"),
        (VALUE, "weights", lambda: LEVELS.energy_error_bound),
        (VALUE, "weights", lambda: LEVELS.interaction_energy),
        (VALUE, "weights", lambda: LEVELS.density_matrix),
        (VALUE, "weights", lambda: LEVELS.occupations),
        (VALUE, "weights", lambda: LEVELS.natural_orbitals),
        (VALUE, "weights", LEVELS.symmetrized),
    ]
)
def test_ensembles(error: Any, argument: str, call: Any, words: str) -> None:
    refused(error, argument, call, words)


@pytest.mark.parametrize("sector", [SECTOR, fh.Bosons(2, 2)], ids=repr)
def test_spin_needs_spins(sector: Any) -> None:
    ensemble = fh.solve(fh.Hamiltonian(np.diag(np.arange(sector.modes) ** 2), sector=sector), [1.0])
    with pytest.raises(ValueError, match="spin") as caught:
        _ = ensemble.spin_squared
    assert type(caught.value) is VALUE
