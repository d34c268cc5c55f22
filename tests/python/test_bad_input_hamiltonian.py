"""Interactions and Hamiltonians: what their constructors and methods refuse."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

import fockhull as fh
from reference.random_problems import mulliken, random_two_body
from refusals import INDEX, NOT_NUMBERS, NOT_REAL_NUMBERS, TYPE, VALUE, named, refused

Array = npt.NDArray[Any]

F = fh.Fermions(3, 2)
S = fh.SpinHalfFermions(3, particles=(2, 1))
B = fh.Bosons(3, 2)
V = np.ones((3, 3))
CONTACT = ([[0, 0, 0, 0], [1, 1, 1, 1]], [1.0, 2.0])
COMPLEX = random_two_body(np.random.default_rng(1), 3, "complex")
REAL = random_two_body(np.random.default_rng(2), 3, "real")
W = fh.Interaction(B, density_density=V)
H = fh.Hamiltonian(np.diag([0.0, 1.0, 2.0]), W)
HC = fh.Hamiltonian([[0, 1j, 0], [-1j, 0, 0], [0, 0, 1]], sector=B)
X = np.arange(6.0)


def changed(array: Any, index: Any, value: complex) -> Array:
    """A copy with one element replaced."""
    copy = np.array(array)
    copy[index] = value
    return copy


def dirac(tensor: Any, order: Any = "dirac") -> fh.Interaction:
    return fh.Interaction(B, two_body=tensor, order=order)


def entries(indices: Any, values: Any) -> fh.Interaction:
    return fh.Interaction(B, entries=(indices, values))


def read_only(array: Array) -> Array:
    copy = array.copy()
    copy.flags.writeable = False
    return copy


@named(
    [
        (TYPE, "sector", lambda: fh.Interaction(None, density_density=V), "NoneType"),
        (TYPE, "sector", lambda: fh.Interaction(fh.Bosons, density_density=V)),
        (VALUE, "interaction", lambda: fh.Interaction(B), "exactly one"),
        (VALUE, "interaction", lambda: fh.Interaction(B, density_density=V, entries=CONTACT)),
        (VALUE, "interaction", lambda: fh.Interaction(B, density_density=V, two_body=REAL)),
        (VALUE, "order", lambda: fh.Interaction(B, density_density=V, order="dirac")),
        (VALUE, "density_density", lambda: fh.Interaction(B, density_density=1.0), "(3, 3)"),
        (VALUE, "density_density", lambda: fh.Interaction(B, density_density=[1.0] * 3)),
        (VALUE, "density_density", lambda: fh.Interaction(B, density_density=np.eye(4)), "[3, 3]"),
        (VALUE, "density_density", lambda: fh.Interaction(B, density_density=np.eye(3)[:2])),
        (VALUE, "density_density", lambda: fh.Interaction(B, density_density=np.eye(3) * np.nan)),
        (
            VALUE,
            "density_density",
            lambda: fh.Interaction(B, density_density=changed(V, (0, 1), np.inf)),
        ),
        (
            VALUE,
            "density_density",
            lambda: fh.Interaction(B, density_density=changed(V, (0, 1), 1.0 + 1e-7)),
            "symmetric",
        ),
        (VALUE, "density_density", lambda: fh.Interaction(F, density_density=V), "diagonal"),
        (TYPE, "density_density", lambda: fh.Interaction(B, density_density=V + 0j)),
        (TYPE, "density_density", lambda: fh.Interaction(B, density_density={1: 2})),
        (VALUE, "order", lambda: dirac(REAL, None), "mulliken"),
        (VALUE, "order", lambda: dirac(REAL, "Dirac"), "dirac"),
        (VALUE, "order", lambda: dirac(REAL, 1)),
        (VALUE, "order", lambda: dirac(REAL, ["dirac"])),
        (VALUE, "two_body", lambda: dirac(np.zeros((3, 3))), "(3, 3, 3, 3)"),
        (VALUE, "two_body", lambda: dirac(np.zeros((2,) * 4)), "(3, 3, 3, 3)"),
        (VALUE, "two_body", lambda: fh.Interaction(S, two_body=np.zeros((6,) * 4), order="dirac")),
        (VALUE, "two_body", lambda: dirac(changed(REAL, (0, 1, 2, 0), np.nan))),
        (VALUE, "two_body", lambda: dirac(changed(REAL, (0, 1, 2, 0), -np.inf))),
        (VALUE, "two_body", lambda: dirac(changed(REAL, (0, 1, 2, 0), 9.0)), "v_"),
        (VALUE, "two_body", lambda: dirac(mulliken(COMPLEX)), "mulliken"),
        (VALUE, "two_body", lambda: dirac(COMPLEX, "mulliken"), "dirac"),
        (VALUE, "entries", lambda: entries([[0, 0, 0]], [1.0]), "(n, 4)"),
        (VALUE, "entries", lambda: entries([0, 0, 0, 0], [1.0]), "(n, 4)"),
        (VALUE, "entries", lambda: entries([[0, 0, 0, 0]], 1.0)),
        (VALUE, "entries", lambda: entries([[0, 0, 0, 0]], [1.0, 2.0])),
        (VALUE, "entries", lambda: entries([[0, 0, 0, 0]], [np.nan])),
        (VALUE, "entries", lambda: entries([[0, 0, 0, 0]], [1j])),
        (VALUE, "entries", lambda: entries([[0, 0, 0, 0]] * 2, [1.0, 1.0]), "once"),
        (VALUE, "entries", lambda: entries([[0, 1, 0, 1]], [1.0])),
        (INDEX, "entries", lambda: entries([[0, 0, 0, 3]], [1.0]), "2"),
        (INDEX, "entries", lambda: entries([[0, 0, 0, -1]], [1.0])),
        (INDEX, "entries", lambda: entries(np.array([[0, 0, 0, 2**64 - 1]], np.uint64), [1.0])),
        (INDEX, "entries", lambda: entries(np.array([[0, 0, 0, 2**63]], np.uint64), [1.0])),
        (TYPE, "entries", lambda: entries([[0.0, 0, 0, 0]], [1.0]), "integers"),
        (TYPE, "entries", lambda: entries([[True] * 4], [1.0])),
        (TYPE, "entries", lambda: entries([[0, 0, 0, 0]], ["1"])),
        (TYPE, "entries", lambda: fh.Interaction(B, entries=5), "pair"),
        (TYPE, "entries", lambda: fh.Interaction(B, entries=([[0] * 4], [1.0], [1.0])), "pair"),
        (VALUE, "factor", lambda: 1e200 * (1e200 * W), "finite"),
        (VALUE, "other", lambda: W + fh.Interaction(S, density_density=V), "Bosons"),
        (VALUE, "factor", lambda: np.nan * W, "finite"),
        (VALUE, "factor", lambda: W * np.inf, "finite"),
        (VALUE, "factor", lambda: np.float64("nan") * W, "finite"),
    ]
)
def test_interactions(error: Any, argument: str, call: Any, words: str) -> None:
    refused(error, argument, call, words)


def test_order_that_does_not_fit_either() -> None:
    """The other order is named only where it fits."""
    broken = changed(COMPLEX, (0, 1, 2, 0), 9.0)
    for order, other in (("dirac", "mulliken"), ("mulliken", "dirac")):
        with pytest.raises(fh.FockhullError) as caught:
            dirac(broken, order)
        assert f'"{other}"' not in str(caught.value)


@pytest.mark.parametrize("wrong", [1, "a", None, H], ids=repr)
def test_only_interactions_are_added(wrong: Any) -> None:
    with pytest.raises(TypeError):
        W + wrong
    with pytest.raises(TypeError):
        W - wrong
    with pytest.raises(TypeError):
        wrong + W


@pytest.mark.parametrize("wrong", [1j, "2", None, W, [2.0], np.ones(2), np.complex128(2.0)])
def test_interactions_are_scaled_by_real_numbers(wrong: Any) -> None:
    with pytest.raises(TypeError):
        wrong * W
    with pytest.raises(TypeError):
        W * wrong


@pytest.mark.parametrize("value", NOT_REAL_NUMBERS.values(), ids=NOT_REAL_NUMBERS)
def test_real_numbers(value: Any) -> None:
    refused(TYPE, "density_density", lambda: fh.Interaction(B, density_density=value))


@pytest.mark.parametrize("value", NOT_NUMBERS.values(), ids=NOT_NUMBERS)
def test_numbers(value: Any) -> None:
    refused(TYPE, "two_body", lambda: dirac(value))
    refused(TYPE, "one_body", lambda: fh.Hamiltonian(value, W))
    refused(TYPE, "entries", lambda: entries([[0] * 4, [1] * 4], value))
    refused(TYPE, "x", lambda: H.apply(value))
    refused(TYPE, "out", lambda: H.apply(X, out=value)) if type(value) is not np.ndarray else None


@named(
    [
        (VALUE, "one_body", lambda: fh.Hamiltonian(np.eye(4), W), "(3, 3)"),
        (VALUE, "one_body", lambda: fh.Hamiltonian(np.eye(3)[:2], W), "(3, 3)"),
        (VALUE, "one_body", lambda: fh.Hamiltonian([0.0, 1.0, 2.0], W), "(3, 3)"),
        (VALUE, "one_body", lambda: fh.Hamiltonian([np.eye(3)] * 2, W), "(3, 3)"),
        (VALUE, "one_body", lambda: fh.Hamiltonian([np.eye(3)] * 3, sector=S), "(2, 3, 3)"),
        (VALUE, "one_body", lambda: fh.Hamiltonian(np.eye(6), sector=S), "(2, 3, 3)"),
        (VALUE, "one_body", lambda: fh.Hamiltonian(np.eye(3) * np.nan, W), "finite"),
        (VALUE, "one_body", lambda: fh.Hamiltonian(changed(V, (0, 1), -np.inf), W), "finite"),
        (VALUE, "one_body", lambda: fh.Hamiltonian(changed(V, (0, 1), 2.0), W), "Hermitian"),
        (VALUE, "one_body", lambda: fh.Hamiltonian(changed(V, (0, 1), 1 + 1e-7), W), "Hermitian"),
        (VALUE, "one_body", lambda: fh.Hamiltonian(V * 1j, W), "Hermitian"),
        (VALUE, "one_body", lambda: fh.Hamiltonian(1j * np.eye(3), W), "Hermitian"),
        (TYPE, "interaction", lambda: fh.Hamiltonian(V, V), "Interaction"),
        (TYPE, "interaction", lambda: fh.Hamiltonian(V, B), "sector="),
        (TYPE, "sector", lambda: fh.Hamiltonian(V, sector=W)),
        (VALUE, "sector", lambda: fh.Hamiltonian(V), "sector="),
        (VALUE, "sector", lambda: fh.Hamiltonian(V, W, sector=F), "Bosons"),
        (VALUE, "constant", lambda: fh.Hamiltonian(V, W, np.nan)),
        (VALUE, "constant", lambda: fh.Hamiltonian(V, W, np.inf)),
        (VALUE, "constant", lambda: fh.Hamiltonian(V, W, [1.0])),
        (TYPE, "constant", lambda: fh.Hamiltonian(V, W, 1j)),
        (TYPE, "constant", lambda: fh.Hamiltonian(V, W, "1")),
        (TYPE, "constant", lambda: fh.Hamiltonian(V, W, None)),
        (VALUE, "x", lambda: H.apply(1.0), "(6,)"),
        (VALUE, "x", lambda: H.apply(X[:5]), "(6,)"),
        (VALUE, "x", lambda: H.apply(np.ones((2, 6))), "columns"),
        (VALUE, "x", lambda: H.apply(np.ones((6, 1, 1)))),
        (VALUE, "x", lambda: H.apply(changed(X, 0, np.nan)), "finite"),
        (VALUE, "x", lambda: H.apply([np.inf, -np.inf, 0, 0, 0, 0]), "finite"),
        (VALUE, "x", lambda: H.apply(changed(X + 0j, 5, complex(0.0, np.nan))), "finite"),
        (TYPE, "out", lambda: H.apply(X, out=[0.0] * 6), "NumPy array"),
        (VALUE, "out", lambda: H.apply(X, out=np.empty(5)), "(6,)"),
        (VALUE, "out", lambda: H.apply(X, out=np.empty((6, 1)))),
        (VALUE, "out", lambda: H.apply(X, out=np.empty(6, np.float32)), "float64"),
        (VALUE, "out", lambda: H.apply(X, out=np.empty(6, complex)), "float64"),
        (VALUE, "out", lambda: H.apply(X + 0j, out=np.empty(6)), "complex128"),
        (VALUE, "out", lambda: HC.apply(X, out=np.empty(6)), "complex128"),
        (VALUE, "out", lambda: H.apply(X, out=read_only(X)), "writable"),
        (VALUE, "out", lambda: H.apply(X, out=X), "separate"),
        (VALUE, "out", lambda: H.apply(X, out=X[::-1]), "separate"),
    ]
)
def test_hamiltonians(error: Any, argument: str, call: Any, words: str) -> None:
    refused(error, argument, call, words)


def test_refused_calls_leave_the_output_alone() -> None:
    out = np.full(6, 7.0)
    for x in (changed(X, 0, np.nan), X[:5], X + 0j):
        with pytest.raises(fh.FockhullError):
            H.apply(x, out=out)
    assert (out == 7.0).all()
