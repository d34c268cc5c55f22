"""The exclusion polytope: what it refuses (weights: with those of `solve`)."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

import fockhull as fh
from refusals import INDEX, NOT_NUMBERS, NOT_REAL_NUMBERS, TYPE, VALUE, named, refused

Array = npt.NDArray[Any]

F = fh.Fermions(4, 2)
S = fh.SpinHalfFermions(4, particles=(2, 1))
W = [0.6, 0.4]
P = fh.ExclusionPolytope(F, W)
RESOLVED = fh.ExclusionPolytope(S, W, domain="spin-resolved")
SUMMED = fh.ExclusionPolytope(S, W, domain="spin-summed")
N = np.array([0.9, 0.7, 0.3, 0.1])
GAMMA = np.diag(N)
BATCH = P.project(occupations=[N, N])
ENSEMBLE = P.project(occupations=[1.2, 0.9, 0.0, -0.1]).ensemble


def changed(array: Any, index: Any, value: complex) -> Array:
    """A copy with one element replaced."""
    copy = np.array(array)
    copy[index] = value
    return copy


POINT_METHODS = [P.contains, P.project, P.distance, P.stretch]
EVERY_POINT_METHOD = pytest.mark.parametrize("method", POINT_METHODS, ids=lambda m: m.__name__)


@named(
    [
        (TYPE, "sector", lambda: fh.ExclusionPolytope(None, W), "NoneType"),
        (TYPE, "sector", lambda: fh.ExclusionPolytope((4, 2), W)),
        (VALUE, "domain", lambda: fh.ExclusionPolytope(S, W), "spin-resolved"),
        (VALUE, "domain", lambda: fh.ExclusionPolytope(S, W, domain="spin"), "spin-summed"),
        (VALUE, "domain", lambda: fh.ExclusionPolytope(S, W, domain=["spin-summed"])),
        (VALUE, "domain", lambda: fh.ExclusionPolytope(F, W, domain="spin-summed")),
        (VALUE, "domain", lambda: fh.ExclusionPolytope(S, W, domain="spinless"), "spin-summed"),
        (VALUE, "h", lambda: P.support([0.0, 1.0, 2.0]), "4"),
        (VALUE, "h", lambda: P.support(1.0)),
        (VALUE, "h", lambda: P.support(np.zeros((4, 1)))),
        (VALUE, "h", lambda: P.support(changed(N, 0, np.nan)), "finite"),
        (VALUE, "h", lambda: P.support(changed(N, 0, np.inf)), "finite"),
        (VALUE, "h", lambda: RESOLVED.support(N), "2, 4"),
        (VALUE, "h", lambda: SUMMED.support([])),
        (VALUE, "density_matrix", lambda: RESOLVED.contains(GAMMA), "spin-resolved"),
        (VALUE, "occupations", lambda: RESOLVED.contains(occupations=N), "spin-resolved"),
        (VALUE, "tol", lambda: P.contains(GAMMA, 0.0), "positive"),
        (VALUE, "tol", lambda: P.contains(GAMMA, tol=-1e-9), "positive"),
        (VALUE, "tol", lambda: P.contains(GAMMA, tol=np.nan)),
        (VALUE, "tol", lambda: P.contains(GAMMA, tol=np.inf)),
        (TYPE, "tol", lambda: P.contains(GAMMA, tol="small")),
        (VALUE, "occupations", lambda: P.stretch(occupations=N + 0.1), "2"),
        (VALUE, "density_matrix", lambda: P.stretch(GAMMA * 1.1)),
        (VALUE, "occupations", lambda: RESOLVED.stretch(occupations=[N, N])),
        (VALUE, "density_matrix", lambda: P.project(occupations=N).density_matrix),
        (VALUE, "ensemble", lambda: BATCH.ensemble, "[index]"),
        (INDEX, "index", lambda: BATCH[2]),
        (INDEX, "index", lambda: BATCH[-3]),
        (INDEX, "index", lambda: BATCH[0, 0]),
        (TYPE, "index", lambda: BATCH[0.0]),
        (TYPE, "index", lambda: BATCH["first"]),
        (TYPE, "projection", lambda: len(P.project(occupations=N))),
        (VALUE, "occupations", lambda: P.tightest(occupations=[N, N]), "single"),
        (VALUE, "limit", lambda: P.inequalities(limit=0)),
        (TYPE, "limit", lambda: P.generating_vertices(limit=2.0)),
        (TYPE, "limit", lambda: P.line_ups(limit="all")),
        (VALUE, "r", lambda: P.new_at(0)),
        (TYPE, "r", lambda: P.new_at(1.0)),
        (INDEX, "term", lambda: ENSEMBLE.configurations(len(ENSEMBLE)), "0 to"),
        (INDEX, "term", lambda: ENSEMBLE.configurations(-1)),
        (TYPE, "term", lambda: ENSEMBLE.configurations(0.0)),
        (TYPE, "term", lambda: ENSEMBLE.configurations("first")),
        (TYPE, "occupations", lambda: ENSEMBLE.verify("abcd")),
        (TYPE, "occupations", lambda: ENSEMBLE.verify(N + 0j)),
        (VALUE, "occupations", lambda: ENSEMBLE.verify(N * np.nan)),
        (VALUE, "tol", lambda: ENSEMBLE.verify(N, tol=0.0)),
        (VALUE, "tol", lambda: ENSEMBLE.verify(N, tol=np.nan)),
        (TYPE, "tol", lambda: ENSEMBLE.verify(N, tol="1")),
    ]
)
def test_polytope(error: Any, argument: str, call: Any, words: str) -> None:
    refused(error, argument, call, words)


@EVERY_POINT_METHOD
def test_density_matrices_and_occupations(method: Any) -> None:
    rows = [
        ("density_matrix", {}, "exactly one"),
        ("density_matrix", {"density_matrix": GAMMA, "occupations": N}, "exactly one"),
        ("density_matrix", {"density_matrix": N}, "4, 4"),
        ("density_matrix", {"density_matrix": np.eye(3)}, "4, 4"),
        ("density_matrix", {"density_matrix": 1.0}, "4, 4"),
        ("density_matrix", {"density_matrix": np.ones((4, 3))}, "4, 4"),
        ("density_matrix", {"density_matrix": changed(GAMMA, (0, 1), np.nan)}, "finite"),
        ("density_matrix", {"density_matrix": changed(GAMMA, (0, 1), np.inf)}, "finite"),
        ("density_matrix", {"density_matrix": changed(GAMMA, (0, 1), 1e-7)}, "Hermitian"),
        ("density_matrix", {"density_matrix": GAMMA * (1.0 + 0.1j)}, "Hermitian"),
        ("occupations", {"occupations": N[:3]}, "4"),
        ("occupations", {"occupations": 0.5}, "4"),
        ("occupations", {"occupations": []}, "4"),
        ("occupations", {"occupations": changed(N, 2, np.nan)}, "finite"),
        ("occupations", {"occupations": changed(N, 2, -np.inf)}, "finite"),
    ]
    for argument, given, words in rows:
        refused(VALUE, argument, lambda given=given: method(**given), words)


@EVERY_POINT_METHOD
def test_one_bad_matrix_spoils_the_batch(method: Any) -> None:
    """However large the other matrices of the batch are."""
    batch = np.array([GAMMA, GAMMA * 1e6])
    batch[0, 0, 1] = 1e-3
    refused(VALUE, "density_matrix", lambda: method(batch), "Hermitian")


@EVERY_POINT_METHOD
def test_real_numbers(method: Any) -> None:
    for value in NOT_REAL_NUMBERS.values():
        refused(TYPE, "occupations", lambda value=value: method(occupations=value))
    for value in NOT_NUMBERS.values():
        refused(TYPE, "density_matrix", lambda value=value: method(value))


@pytest.mark.parametrize("value", NOT_REAL_NUMBERS.values(), ids=NOT_REAL_NUMBERS)
def test_potentials_are_real_numbers(value: Any) -> None:
    refused(TYPE, "h", lambda: P.support(value))
