"""Awkward but legal arrays are accepted, and the caller's arrays are left alone."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from numpy.testing import assert_allclose, assert_array_equal

import fockhull as fh
from reference.random_problems import mulliken, random_one_body, random_two_body, random_unitary

Array = npt.NDArray[Any]

RNG = np.random.default_rng(5)
SECTOR = fh.SpinHalfFermions(3, particles=(2, 1))
H_REAL = random_one_body(RNG, 3)
H = random_one_body(RNG, 3, is_complex=True, spins=2)
V = random_two_body(RNG, 3, "complex")
U = np.abs(random_one_body(RNG, 3))
INDICES = np.argwhere(V != 0)
VALUES = V[tuple(INDICES.T)]
X = RNG.standard_normal((9, 4)) + 1j * RNG.standard_normal((9, 4))
WEIGHTS = np.array([0.5, 0.3, 0.2])
POLYTOPE = fh.ExclusionPolytope(SECTOR, WEIGHTS, domain="spin-resolved")
N = np.array([[1.05, 0.85, 0.1], [0.9, 0.15, -0.05]])
GAMMA = np.array([u * n @ u.conj().T for n in N for u in [random_unitary(RNG, 3)]])
INSIDE = 0.5 * N + 0.5 * N.mean(axis=1, keepdims=True)


def with_interaction(**form: Any) -> fh.Hamiltonian:
    return fh.Hamiltonian(H, fh.Interaction(SECTOR, **form))


def applied(hamiltonian: fh.Hamiltonian) -> Array:
    return hamiltonian.apply(X)


def solved(**options: Any) -> Array:
    return fh.solve(with_interaction(two_body=V, order="dirac"), **options).density_matrix


Call = Callable[[Any], Any]
CALLS: dict[str, tuple[Array, Call]] = {
    "one_body": (H, lambda h: applied(fh.Hamiltonian(h, sector=SECTOR))),
    "density_density": (U, lambda u: applied(with_interaction(density_density=u))),
    "dirac": (V, lambda v: applied(with_interaction(two_body=v, order="dirac"))),
    "mulliken": (
        mulliken(V),
        lambda v: applied(with_interaction(two_body=v, order="mulliken")),
    ),
    "entries: indices": (INDICES, lambda k: applied(with_interaction(entries=(k, VALUES)))),
    "entries: values": (VALUES, lambda v: applied(with_interaction(entries=(INDICES, v)))),
    "apply: block": (X, lambda x: fh.Hamiltonian(H, sector=SECTOR).apply(x)),
    "apply: vector": (X[:, 0], lambda x: fh.Hamiltonian(H, sector=SECTOR).apply(x)),
    "apply: complex on real": (X, lambda x: fh.Hamiltonian(H_REAL, sector=SECTOR).apply(x)),
    "solve: weights": (WEIGHTS, lambda w: solved(weights=w)),
    "solve: start": (X, lambda x: solved(weights=WEIGHTS, start=x)),
    "reweighted": (
        WEIGHTS,
        lambda w: fh.solve(with_interaction(density_density=U), levels=3).reweighted(w).occupations,
    ),
    "polytope: weights": (
        WEIGHTS,
        lambda w: fh.ExclusionPolytope(SECTOR, w, "spin-resolved").distance(GAMMA),
    ),
    "support": (H_REAL[:2], lambda h: POLYTOPE.support(h).occupations),
    "contains": (np.array([N, INSIDE]), lambda n: POLYTOPE.contains(occupations=n)),
    "project: occupations": (N, lambda n: POLYTOPE.project(occupations=n).occupations),
    "project: matrix": (GAMMA, lambda g: POLYTOPE.project(g).density_matrix),
    "stretch": (INSIDE, lambda n: POLYTOPE.stretch(occupations=n).boundary),
    "verify": (N, POLYTOPE.project(occupations=INSIDE).ensemble.verify),
    "lowest_configurations": (H_REAL[:2], lambda h: SECTOR.lowest_configurations(h, 5).energies),
    "occupations": (np.arange(6).reshape(2, 3), SECTOR.occupations),
    "index": (np.array([[[1, 0, 1], [0, 0, 1]]] * 2), SECTOR.index),
}


def read_only(array: Array) -> Array:
    copy = array.copy()
    copy.flags.writeable = False
    return copy


def strided(array: Array) -> Array:
    """A view of every second element along each axis, the last axis backwards."""
    large = np.full([2 * n for n in array.shape], -7, dtype=array.dtype)
    view = large[tuple(slice(None, None, 2) for _ in array.shape)][..., ::-1]
    view[...] = array
    return view


def swapped(array: Array) -> Array:
    return array.astype(array.dtype.newbyteorder())


def unaligned(array: Array) -> Array:
    raw = np.zeros(array.nbytes + 1, np.uint8)[1:]
    view = raw.view(array.dtype).reshape(array.shape)
    view[...] = array
    return view


FORMS: dict[str, Callable[[Array], Any]] = {
    "read-only": read_only,
    "strided": strided,
    "Fortran": np.asfortranarray,
    "list": lambda array: array.tolist(),
    "byte-swapped": swapped,
    "unaligned": unaligned,
    "matrix-like": lambda array: memoryview(np.ascontiguousarray(array)),
}


@pytest.mark.parametrize("name", CALLS)
@pytest.mark.parametrize("form", FORMS)
def test_any_layout_gives_the_same(name: str, form: str) -> None:
    array, call = CALLS[name]
    assert_array_equal(call(FORMS[form](array)), call(array))


@pytest.mark.parametrize("name", CALLS)
def test_arguments_are_left_alone(name: str) -> None:
    array, call = CALLS[name]
    given = array.copy()
    result = call(given)
    assert_array_equal(given, array)
    assert given.flags.writeable
    assert not np.shares_memory(np.asarray(result), given)


@pytest.mark.parametrize("kind", [np.int8, np.uint16, np.int64, np.float32, np.float16])
def test_integers_and_short_floats(kind: type) -> None:
    """Nothing is rounded: small integers are exact in every type."""
    h = np.array([[0, 1, 0], [1, 2, 3], [0, 3, 1]])
    x = np.arange(9)
    expected = fh.Hamiltonian(h * 1.0, sector=SECTOR).apply(x * 1.0)
    found = fh.Hamiltonian(h.astype(kind), sector=SECTOR).apply(x.astype(kind))
    assert found.dtype == np.float64
    assert_array_equal(found, expected)
    coupling = fh.Interaction(SECTOR, density_density=h.astype(kind))
    assert coupling.dtype == np.float64
    n = np.array([[1, 1, 0], [0, 0, 1]], dtype=kind)
    assert POLYTOPE.stretch(occupations=n).boundary.dtype == np.float64


def test_complex64_stays_complex() -> None:
    hamiltonian = fh.Hamiltonian(
        np.array([[0, 1j], [-1j, 0]], np.complex64), sector=fh.Bosons(2, 1)
    )
    assert hamiltonian.dtype == np.complex128
    assert hamiltonian.apply(np.ones(2, np.complex64)).dtype == np.complex128


def test_complex_numbers_without_imaginary_part_stay_complex() -> None:
    """Nothing is cast silently: the type says what the caller meant."""
    assert fh.Hamiltonian(H_REAL + 0j, sector=SECTOR).dtype == np.complex128
    assert fh.Interaction(SECTOR, two_body=np.zeros((3,) * 4) + 0j, order="dirac").dtype == complex


def test_later_changes_of_the_arguments_do_not_matter() -> None:
    h, v, w = H.copy(), V.copy(), WEIGHTS.copy()
    hamiltonian = fh.Hamiltonian(h, fh.Interaction(SECTOR, two_body=v, order="dirac"))
    polytope = fh.ExclusionPolytope(SECTOR, w, domain="spin-resolved")
    point = N.copy()
    projection = polytope.project(occupations=point)
    ensemble = fh.solve(hamiltonian, w)
    for array in (h, v, w, point):
        array[...] = 0.125
    assert_array_equal(hamiltonian.one_body, H)
    assert_array_equal(applied(hamiltonian), applied(with_interaction(two_body=V, order="dirac")))
    assert_array_equal(polytope.weights, WEIGHTS)
    assert_array_equal(ensemble.weights, WEIGHTS)
    assert_array_equal(projection.occupations, POLYTOPE.project(occupations=N).occupations)
    assert projection.ensemble.verify(POLYTOPE.project(occupations=N).occupations)


def test_small_deviations_from_symmetry_are_averaged_away() -> None:
    """Up to 1e-8 of the largest element, more is refused (tables of bad input)."""
    noise = 4e-9
    one_body = H_REAL.copy()
    one_body[0, 1] += noise * np.abs(H_REAL).max()
    hamiltonian = fh.Hamiltonian(one_body, sector=SECTOR)
    assert_array_equal(hamiltonian.one_body, hamiltonian.one_body.T)
    matrix = hamiltonian.to_scipy().toarray()
    assert_array_equal(matrix, matrix.T)
    tensor = V.copy()
    tensor[0, 1, 2, 0] += noise * np.abs(V).max()
    matrix = with_interaction(two_body=tensor, order="dirac").to_scipy().toarray()
    assert_allclose(matrix, matrix.conj().T, rtol=0.0, atol=1e-15)
    gamma = GAMMA.copy()
    gamma[0, 0, 1] += noise
    assert_allclose(POLYTOPE.distance(gamma), POLYTOPE.distance(GAMMA), rtol=0.0, atol=1e-7)


def test_output_is_written_in_place_whatever_its_layout() -> None:
    hamiltonian = fh.Hamiltonian(H, sector=SECTOR)
    expected = hamiltonian.apply(X)
    for out in (
        np.zeros_like(X),
        np.zeros_like(X, order="F"),
        strided(np.zeros_like(X)),
        swapped(np.zeros_like(X)),
    ):
        try:
            returned = hamiltonian.apply(X, out=out)
        except fh.FockhullError:  # another byte order is another type
            assert not out.dtype.isnative
            continue
        assert returned is out
        assert_array_equal(out, expected)


def test_empty_blocks_and_batches() -> None:
    hamiltonian = fh.Hamiltonian(H, sector=SECTOR)
    assert hamiltonian.apply(np.empty((9, 0))).shape == (9, 0)
    assert POLYTOPE.contains(occupations=np.empty((0, 2, 3))).shape == (0,)
    assert POLYTOPE.project(np.empty((0, 4, 2, 3, 3))).density_matrix.shape == (0, 4, 2, 3, 3)
    assert POLYTOPE.distance(occupations=np.empty((0, 2, 3))).shape == (0,)
    assert POLYTOPE.stretch(occupations=np.empty((0, 2, 3))).value.shape == (0,)
    assert POLYTOPE.support(np.empty((3, 0, 2, 3))).value.shape == (3, 0)
    assert SECTOR.occupations(np.empty(0, int)).shape == (0, 2, 3)
    assert np.shape(SECTOR.index(np.empty((0, 2, 3), int))) == (0,)
    assert fh.Interaction(SECTOR, entries=(np.empty((0, 4), int), np.empty(0))).dtype == float
