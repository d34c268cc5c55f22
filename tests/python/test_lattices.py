"""One-body matrices of lattices against closed forms, and their bad input."""

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from fockhull import lattices
from fockhull.errors import ArgumentError, ArgumentIndexError, ArgumentTypeError, FockhullError

T = 0.7


def levels(matrix: npt.NDArray[Any]) -> npt.NDArray[np.float64]:
    """Eigenvalues of a matrix, which must be exactly Hermitian."""
    assert np.array_equal(matrix, matrix.conj().T)
    return np.linalg.eigvalsh(matrix)


def chain_levels(sites: int, t: float = T) -> npt.NDArray[np.float64]:
    """Free particle on an open chain: published textbook formula (recalled)."""
    return np.sort(-2 * t * np.cos(np.arange(1, sites + 1) * np.pi / (sites + 1)))


def ring_levels(sites: int, flux: float = 0.0, t: float = T) -> npt.NDArray[np.float64]:
    """Free particle on a ring with flux: published textbook formula (recalled)."""
    return np.sort(-2 * t * np.cos((2 * np.pi * np.arange(sites) - flux) / sites))


def sums(*spectra: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    total = np.zeros(1)
    for spectrum in spectra:
        total = np.add.outer(total, spectrum).ravel()
    return np.sort(total)


@pytest.mark.parametrize("sites", [1, 2, 3, 8])
def test_chain_levels(sites: int) -> None:
    np.testing.assert_allclose(levels(lattices.chain(sites, T)), chain_levels(sites), atol=1e-13)


@pytest.mark.parametrize("sites", [3, 4, 7])
@pytest.mark.parametrize("flux", [0.0, 0.3, np.pi, 1.8 * np.pi, -2.0])
def test_ring_levels(sites: int, flux: float) -> None:
    matrix = lattices.ring(sites, T, flux)
    np.testing.assert_allclose(levels(matrix), ring_levels(sites, flux), atol=1e-13)


def test_direction_of_the_flux() -> None:
    """h[j+1, j] = -t exp(i phi / L): only one direction carries the positive phase."""
    sites, flux = 5, 1.8 * np.pi
    matrix = lattices.ring(sites, T, flux)
    for j in range(sites):
        expected = -T * np.exp(1j * flux / sites)
        assert matrix[(j + 1) % sites, j] == pytest.approx(expected, abs=1e-15)


def test_lowest_state_of_a_ring_with_flux() -> None:
    """L = 5, phi = 1.8 pi, N = 1: energy and gamma_10 = <a+_0 a_1> (derived: plane waves)."""
    energies, orbitals = np.linalg.eigh(lattices.ring(5, flux=1.8 * np.pi))
    lowest = orbitals[:, 0]
    assert energies[0] == pytest.approx(-1.9842294026, abs=1e-10)
    assert lowest[1] * lowest[0].conj() == pytest.approx(0.0618033989 + 0.1902113033j, abs=1e-10)


@pytest.mark.parametrize(
    ("matrix", "dtype"),
    [
        (lattices.chain(3, 1), np.float64),
        (lattices.chain(3, 1j), np.complex128),
        (lattices.ring(3), np.float64),
        (lattices.ring(3, flux=2 * np.pi), np.complex128),
        (lattices.ring(3, 1 + 0j), np.complex128),
        (lattices.rectangular((3, 3)), np.float64),
        (lattices.rectangular((3, 3), periodic=True, flux=(0, 1)), np.complex128),
        (lattices.ladder(3, rung_hopping=1j), np.complex128),
        (lattices.site_energies([1, 2]), np.float64),
        (lattices.from_bonds(2, []), np.float64),
    ],
)
def test_real_unless_complex_is_asked_for(matrix: npt.NDArray[Any], dtype: type) -> None:
    assert matrix.dtype == dtype


def test_hopping_of_each_bond() -> None:
    """An alternating chain; at its ends the matrix elements are -t_j below the diagonal."""
    hopping = np.array([1.0, 0.5j, 2.0])
    matrix = lattices.chain(4, hopping)
    np.testing.assert_array_equal(np.diag(matrix, -1), -hopping)
    np.testing.assert_array_equal(np.diag(matrix, 1), -hopping.conj())
    ring = lattices.ring(4, [1, 2, 3, 4])
    assert [ring[1, 0], ring[2, 1], ring[3, 2], ring[0, 3]] == [-1, -2, -3, -4]


@pytest.mark.parametrize(
    ("shape", "periodic", "flux"),
    [
        ((2, 3), False, 0.0),
        ((3, 4), (True, False), (0.4, 0.0)),
        ((4, 3), True, (0.4, -1.0)),
        ((1, 5), (False, True), 0.0),
        ((2, 3, 3), (False, True, False), (0, 2.0, 0)),
        (6, True, 1.0),
    ],
)
def test_rectangular_levels_are_sums(shape: Any, periodic: Any, flux: Any) -> None:
    lengths = np.atleast_1d(shape)
    closed = np.broadcast_to(periodic, lengths.shape)
    phases = np.broadcast_to(flux, lengths.shape)
    spectra = [
        ring_levels(n, phase) if is_closed else chain_levels(n)
        for n, is_closed, phase in zip(lengths, closed, phases, strict=True)
    ]
    matrix = lattices.rectangular(shape, T, periodic=periodic, flux=flux)
    np.testing.assert_allclose(levels(matrix), sums(*spectra), atol=1e-13)


def test_rectangular_joins_neighbours_at_unit_distance() -> None:
    shape, hopping = (3, 4), (1.0, 0.5)
    matrix = lattices.rectangular(shape, hopping)
    positions = lattices.site_positions(shape)
    expected = np.zeros((12, 12))
    for p, x in enumerate(positions):
        for q, y in enumerate(positions):
            step = np.abs(x - y)
            if step.sum() == 1:
                expected[p, q] = -hopping[int(np.argmax(step))]
    np.testing.assert_array_equal(matrix, expected)


def test_torus_joins_sites_at_unit_distance_to_the_nearest_image() -> None:
    shape = (4, 5)
    near = np.isclose(lattices.distances(lattices.site_positions(shape), shape), 1.0)
    np.testing.assert_array_equal(lattices.rectangular(shape, periodic=True), -1.0 * near)


def test_ladder_levels() -> None:
    """Two legs: the rungs split the levels of a leg by +-t_rung."""
    matrix = lattices.ladder(4, T, 0.3, periodic=True, flux=0.5)
    split = np.array([-0.3, 0.3])
    np.testing.assert_allclose(levels(matrix), sums(split, ring_levels(4, 0.5)), atol=1e-13)
    assert matrix[4, 0] == -0.3
    three_legs = lattices.ladder(2, T, T, legs=3)
    np.testing.assert_allclose(levels(three_legs), sums(chain_levels(3), chain_levels(2)))


def test_bonds_go_there_and_back() -> None:
    bonds = [(0, 2), (2, 1), (3, 0)]
    matrix = lattices.from_bonds(4, bonds, [1.0, 2.0 + 1.0j, 3.0])
    assert matrix[1, 2] == -2.0 - 1.0j
    assert matrix[2, 1] == -2.0 + 1.0j
    assert lattices.bonds_of(matrix).tolist() == [[0, 2], [0, 3], [1, 2]]
    assert lattices.bonds_of(lattices.chain(1)).shape == (0, 2)


def test_harmonic_trap() -> None:
    positions = lattices.site_positions((3, 3))
    trap = lattices.harmonic_trap(positions, 0.5)
    assert np.count_nonzero(trap - np.diag(trap.diagonal())) == 0
    np.testing.assert_allclose(trap.diagonal(), [1, 0.5, 1, 0.5, 0, 0.5, 1, 0.5, 1])
    shifted = lattices.harmonic_trap([0.0, 1.0, 2.0], 2.0, centre=0.0)
    np.testing.assert_allclose(shifted.diagonal(), [0, 2, 8])


def test_disorder_is_seeded_and_bounded() -> None:
    energies = lattices.disorder(2000, 3.0, seed=5).diagonal()
    assert np.array_equal(energies, lattices.disorder(2000, 3.0, seed=5).diagonal())
    assert not np.array_equal(energies, lattices.disorder(2000, 3.0, seed=6).diagonal())
    assert np.abs(energies).max() <= 1.5
    # a uniform variable of width W has the variance W^2 / 12
    assert energies.var() == pytest.approx(3.0**2 / 12, rel=0.1)
    assert np.abs(energies.mean()) < 0.1


def test_disorder_draws_on_from_a_generator() -> None:
    generator = np.random.default_rng(5)
    first, second = (lattices.disorder(4, 1.0, generator) for _ in range(2))
    assert np.array_equal(first, lattices.disorder(4, 1.0, seed=5))
    assert not np.array_equal(first, second)


def test_distances() -> None:
    np.testing.assert_allclose(lattices.distances([[0, 0], [3, 4]]), [[0, 5], [5, 0]])
    sites = np.arange(6)
    around = np.abs(sites[:, np.newaxis] - sites)
    ring = lattices.distances(sites, periods=6)
    np.testing.assert_allclose(ring, np.minimum(around, 6 - around))
    cylinder = lattices.distances([[0, 0], [3, 3]], periods=[4, 0])
    assert cylinder[0, 1] == pytest.approx(np.hypot(1, 3))


def test_arguments_are_left_alone() -> None:
    positions, bonds = np.array([0.0, 4.0, 9.0]), np.array([[0, 1], [2, 1]])
    energies, matrix = np.array([1.0, 2.0]), np.array([[0.0, 1.0 + 1e-12], [1.0, 0.0]])
    before = [array.copy() for array in (positions, bonds, energies, matrix)]
    lattices.distances(positions, 10.0)[:] = -1.0
    lattices.from_bonds(3, bonds)[:] = -1.0
    lattices.site_energies(energies)[:] = -1.0
    lattices.bonds_of(matrix)[:] = -1
    for array, copy in zip((positions, bonds, energies, matrix), before, strict=True):
        assert np.array_equal(array, copy)


BAD_INPUT: list[tuple[type[FockhullError], str, Callable[[], object]]] = [
    (ArgumentError, "sites", lambda: lattices.chain(0)),
    (ArgumentError, "sites", lambda: lattices.chain(-2)),
    (ArgumentTypeError, "sites", lambda: lattices.chain(3.0)),  # type: ignore[arg-type]
    (ArgumentTypeError, "sites", lambda: lattices.chain(True)),
    (ArgumentTypeError, "sites", lambda: lattices.chain("3")),  # type: ignore[arg-type]
    (ArgumentError, "hopping", lambda: lattices.chain(3, [1.0, 1.0, 1.0])),
    (ArgumentError, "hopping", lambda: lattices.chain(3, np.nan)),
    (ArgumentError, "hopping", lambda: lattices.chain(3, complex(0.0, np.inf))),
    (ArgumentTypeError, "hopping", lambda: lattices.chain(3, "fast")),
    (ArgumentTypeError, "hopping", lambda: lattices.chain(3, [[1.0], [1.0, 2.0]])),
    (ArgumentTypeError, "hopping", lambda: lattices.chain(3, True)),
    (ArgumentError, "sites", lambda: lattices.ring(2)),
    (ArgumentError, "hopping", lambda: lattices.ring(3, [1.0, 1.0])),
    (ArgumentTypeError, "flux", lambda: lattices.ring(3, flux=1j)),  # type: ignore[arg-type]
    (ArgumentError, "flux", lambda: lattices.ring(3, flux=np.inf)),
    (ArgumentError, "flux", lambda: lattices.ring(3, flux=[0.0, 1.0])),  # type: ignore[arg-type]
    (ArgumentError, "rungs", lambda: lattices.ladder(0)),
    (ArgumentError, "legs", lambda: lattices.ladder(3, legs=0)),
    (ArgumentError, "rungs", lambda: lattices.ladder(2, periodic=True)),
    (ArgumentError, "flux", lambda: lattices.ladder(3, flux=1.0)),
    (ArgumentError, "rung_hopping", lambda: lattices.ladder(3, rung_hopping=[1.0, 2.0])),
    (ArgumentTypeError, "periodic", lambda: lattices.ladder(3, periodic=1)),  # type: ignore[arg-type]
    (ArgumentError, "shape", lambda: lattices.rectangular(())),
    (ArgumentError, "shape", lambda: lattices.rectangular((3, 0))),
    (ArgumentTypeError, "shape", lambda: lattices.rectangular((3, 2.0))),  # type: ignore[arg-type]
    (ArgumentTypeError, "shape", lambda: lattices.rectangular("33")),  # type: ignore[arg-type]
    (ArgumentTypeError, "shape", lambda: lattices.rectangular(None)),  # type: ignore[arg-type]
    (ArgumentError, "shape", lambda: lattices.rectangular((3, 2), periodic=True)),
    (ArgumentError, "hopping", lambda: lattices.rectangular((3, 2), [1.0, 1.0, 1.0])),
    (ArgumentError, "periodic", lambda: lattices.rectangular((3, 3), periodic=[True])),
    (ArgumentTypeError, "periodic", lambda: lattices.rectangular(3, periodic="no")),  # type: ignore[arg-type]
    (ArgumentError, "flux", lambda: lattices.rectangular((3, 3), flux=1.0)),
    (ArgumentIndexError, "bonds", lambda: lattices.from_bonds(3, [(0, 3)])),
    (ArgumentIndexError, "bonds", lambda: lattices.from_bonds(3, [(-1, 0)])),
    (ArgumentError, "bonds", lambda: lattices.from_bonds(3, [(0, 1), (0, 1)])),
    (ArgumentError, "bonds", lambda: lattices.from_bonds(3, [(0, 1), (1, 0)])),
    (ArgumentError, "bonds", lambda: lattices.from_bonds(3, [(1, 1)])),
    (ArgumentError, "bonds", lambda: lattices.from_bonds(3, [0, 1])),
    (ArgumentTypeError, "bonds", lambda: lattices.from_bonds(3, [(0.0, 1.0)])),
    (ArgumentError, "hopping", lambda: lattices.from_bonds(3, [(0, 1)], [1.0, 2.0])),
    (ArgumentError, "energies", lambda: lattices.site_energies(1.0)),
    (ArgumentError, "energies", lambda: lattices.site_energies([])),
    (ArgumentError, "energies", lambda: lattices.site_energies([[1.0]])),
    (ArgumentTypeError, "energies", lambda: lattices.site_energies([1j])),
    (ArgumentError, "positions", lambda: lattices.harmonic_trap([], 1.0)),
    (ArgumentError, "centre", lambda: lattices.harmonic_trap([0.0, 1.0], 1.0, [0.0, 0.0])),
    (ArgumentTypeError, "strength", lambda: lattices.harmonic_trap([0.0], 1j)),  # type: ignore[arg-type]
    (ArgumentError, "width", lambda: lattices.disorder(3, -1.0, seed=0)),
    (ArgumentTypeError, "seed", lambda: lattices.disorder(3, 1.0, seed=None)),  # type: ignore[arg-type]
    (ArgumentError, "seed", lambda: lattices.disorder(3, 1.0, seed=-1)),
    (ArgumentError, "positions", lambda: lattices.distances(np.zeros((2, 2, 2)))),
    (ArgumentError, "periods", lambda: lattices.distances([0.0, 1.0], periods=-1.0)),
    (ArgumentError, "periods", lambda: lattices.distances([0.0, 1.0], periods=[1.0, 1.0])),
    (ArgumentError, "one_body", lambda: lattices.bonds_of([[0.0, 1.0]])),
    (ArgumentError, "one_body", lambda: lattices.bonds_of([[0.0, 1.0], [0.0, 0.0]])),
    (ArgumentError, "one_body", lambda: lattices.bonds_of([[0.0, 1j], [1j, 0.0]])),
]


@pytest.mark.parametrize(("error", "argument", "call"), BAD_INPUT)
def test_bad_input_names_the_argument(
    error: type[FockhullError], argument: str, call: Callable[[], object]
) -> None:
    with pytest.raises(error, match=rf"^`{argument}`: got .+; expected .+"):
        call()
