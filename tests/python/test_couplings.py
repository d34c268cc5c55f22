"""Interaction builders against their definitions, and their bad input.

Many-particle checks build operators of spin-1/2 fermions as Kronecker
products (Jordan-Wigner), independently of the package's core.
"""

from collections.abc import Callable
from functools import reduce
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from fockhull import couplings, lattices
from fockhull.errors import ArgumentError, ArgumentIndexError, ArgumentTypeError, FockhullError

Matrix = npt.NDArray[Any]


def annihilators(modes: int) -> list[Matrix]:
    """Fermionic a_0 .. a_(modes-1) on the full space of dimension 2^modes."""
    lower, parity, unit = np.array([[0.0, 1.0], [0.0, 0.0]]), np.diag([1.0, -1.0]), np.eye(2)
    return [
        reduce(np.kron, [parity] * mode + [lower] + [unit] * (modes - mode - 1))
        for mode in range(modes)
    ]


class SpinHalf:
    """Operators of `orbitals` orbitals: all ups, then all downs."""

    def __init__(self, orbitals: int) -> None:
        self.orbitals = orbitals
        lower = annihilators(2 * orbitals)
        self.a = [lower[:orbitals], lower[orbitals:]]
        self.n = [[a.T @ a for a in spin] for spin in self.a]

    def interaction(self, indices: Matrix, values: Matrix) -> Matrix:
        """1/2 sum v_pqrs a+_p,s a+_q,t a_s,t a_r,s over the spins s, t."""
        dimension = len(self.n[0][0])
        total = np.zeros((dimension, dimension), dtype=values.dtype)
        for (p, q, r, s), v in zip(indices, values, strict=True):
            for one in self.a:
                for two in self.a:
                    total += 0.5 * v * one[p].T @ two[q].T @ two[s] @ one[r]
        return total

    def level(self, hamiltonian: Matrix, up: int, down: int) -> float:
        """Lowest energy at fixed particle numbers."""
        ups, downs = (np.diag(sum(n)).round() for n in self.n)
        keep = np.flatnonzero((ups == up) & (downs == down))
        return float(np.linalg.eigvalsh(hamiltonian[np.ix_(keep, keep)])[0])


def density_entries(v: Matrix) -> tuple[Matrix, Matrix]:
    """V_pq as v_pqpq."""
    p, q = np.nonzero(v)
    return np.column_stack([p, q, p, q]), v[p, q]


def test_on_site_is_u_n_up_n_down() -> None:
    """Normal-ordered, spins summed: no term is left on a single particle."""
    space, strengths = SpinHalf(2), [4.0, -1.5]
    built = space.interaction(*density_entries(couplings.on_site(2, strengths)))
    expected = sum(u * up @ down for u, up, down in zip(strengths, *space.n, strict=True))
    np.testing.assert_allclose(built, expected, atol=1e-14)


def test_nearest_neighbour_is_v_n_n_on_each_bond() -> None:
    space = SpinHalf(3)
    v = couplings.nearest_neighbour(3, [(0, 1), (2, 1)], [2.0, -0.5])
    n = [up + down for up, down in zip(*space.n, strict=True)]
    expected = 2.0 * n[0] @ n[1] - 0.5 * n[1] @ n[2]
    np.testing.assert_allclose(space.interaction(*density_entries(v)), expected, atol=1e-14)


def test_spinless_ring_with_repulsion() -> None:
    """V = 2, L = 6, N = 3: E0 = 1 - sqrt 13 (recalled: the isotropic Heisenberg ring)."""
    sites, h = 6, lattices.ring(6)
    v = couplings.nearest_neighbour(sites, lattices.bonds_of(h), 2.0)
    a = annihilators(sites)
    n = [x.T @ x for x in a]
    hamiltonian = sum(
        h[p, q] * a[p].T @ a[q] + 0.5 * v[p, q] * n[p] @ n[q]
        for p in range(sites)
        for q in range(sites)
    )
    keep = np.flatnonzero(np.diag(np.sum(n, axis=0)).round() == 3)
    energies = np.linalg.eigvalsh(hamiltonian[np.ix_(keep, keep)])
    assert energies[0] == pytest.approx(1 - np.sqrt(13), abs=1e-12)


@pytest.mark.parametrize("exponent", [1.0, 3.0, 6.0])
def test_long_range_by_definition(exponent: float) -> None:
    positions = np.array([0.0, 1.0, 2.5, 7.0])
    v = couplings.long_range(lattices.distances(positions), -1.5, exponent)
    for p, x in enumerate(positions):
        for q, y in enumerate(positions):
            expected = 0.0 if p == q else -1.5 / abs(x - y) ** exponent
            assert v[p, q] == pytest.approx(expected, rel=1e-14)


def test_screened_between_its_limits() -> None:
    """Long screening gives Coulomb; the definition at one length."""
    r = lattices.distances(lattices.site_positions((2, 3)))
    coulomb = couplings.long_range(r, 2.0)
    np.testing.assert_allclose(couplings.screened(r, 2.0, 1e14), coulomb, rtol=1e-12)
    assert couplings.screened(r, 2.0, 0.8)[0, 5] == pytest.approx(
        2.0 * np.exp(-np.sqrt(5) / 0.8) / np.sqrt(5), rel=1e-14
    )


@pytest.mark.parametrize(
    "matrix",
    [
        couplings.nearest_neighbour(4, [(0, 1), (3, 2)], 1.0),
        couplings.screened(lattices.distances(range(4), periods=4), 1.0, 2.0),
        couplings.long_range(lattices.distances(range(4)), 1.0, 2.0),
        couplings.long_range([[0.0]], 1.0),
    ],
)
def test_real_symmetric_with_zero_diagonal(matrix: Matrix) -> None:
    assert matrix.dtype == np.float64
    assert np.array_equal(matrix, matrix.T)
    assert not matrix.diagonal().any()


def test_pairing_is_the_pairing_hamiltonian() -> None:
    space, g = SpinHalf(3), 0.4
    lower = [down @ up for up, down in zip(*space.a, strict=True)]  # b = a_down a_up
    expected = sum(-g * bj.T @ bk for bj in lower for bk in lower)
    np.testing.assert_allclose(space.interaction(*couplings.pairing(3, g)), expected, atol=1e-14)


def test_pairing_with_a_hermitian_matrix() -> None:
    space = SpinHalf(3)
    g = np.array([[1.0, 0.2 + 0.3j, 0.0], [0.2 - 0.3j, 0.5, -1j], [0.0, 1j, 0.0]])
    indices, values = couplings.pairing(3, g)
    assert len(values) == np.count_nonzero(g)
    lower = [down @ up for up, down in zip(*space.a, strict=True)]
    expected = sum(-g[j, k] * lower[j].T @ lower[k] for j in range(3) for k in range(3))
    np.testing.assert_allclose(space.interaction(indices, values), expected, atol=1e-14)


@pytest.mark.parametrize("g", [0.3, np.array([[1.0, 0.2 + 0.3j], [0.2 - 0.3j, 0.5]])])
def test_pairing_list_is_complete_and_symmetric(g: Any) -> None:
    indices, values = couplings.pairing(2, g)
    assert indices.shape == (len(values), 4)
    assert len(np.unique(indices, axis=0)) == len(indices)
    v = np.zeros((2, 2, 2, 2), dtype=values.dtype)
    v[tuple(indices.T)] = values
    assert np.array_equal(v, v.transpose(1, 0, 3, 2))  # v_pqrs = v_qpsr
    assert np.array_equal(v, v.conj().transpose(2, 3, 0, 1))  # v_pqrs = conj v_rspq


def test_pairing_against_richardson() -> None:
    """Levels 1..4, two pairs, g = 0.4: Richardson's equations (arXiv:nucl-th/0405011; recalled)."""
    levels, g = np.arange(1.0, 5.0), 0.4
    pair_energies = np.array([1.65353854, 3.32001373])
    for own, other in (pair_energies, pair_energies[::-1]):
        equation = 1 / g - np.sum(1 / (2 * levels - own)) + 2 / (other - own)
        assert equation == pytest.approx(0.0, abs=1e-6)
    space = SpinHalf(4)
    one_body = sum(e * (up + down) for e, up, down in zip(levels, *space.n, strict=True))
    hamiltonian = one_body + space.interaction(*couplings.pairing(4, g))
    energy = space.level(hamiltonian, 2, 2)
    assert energy == pytest.approx(4.9735522650, abs=1e-9)
    assert energy == pytest.approx(pair_energies.sum(), abs=1e-7)


def test_arguments_are_left_alone() -> None:
    r, g = np.array([[0.0, 2.0], [2.0, 0.0]]), np.array([[1.0, 0.5], [0.5, 1.0]])
    r_before, g_before = r.copy(), g.copy()
    couplings.screened(r, 1.0, 1.0)[:] = -1.0
    couplings.long_range(r, 1.0)[:] = -1.0
    couplings.pairing(2, g)[1][:] = -1.0
    assert np.array_equal(r, r_before)
    assert np.array_equal(g, g_before)


R = [[0.0, 1.0], [1.0, 0.0]]
BAD_INPUT: list[tuple[type[FockhullError], str, Callable[[], object]]] = [
    (ArgumentError, "sites", lambda: couplings.on_site(0, 1.0)),
    (ArgumentTypeError, "sites", lambda: couplings.on_site(2.0, 1.0)),  # type: ignore[arg-type]
    (ArgumentError, "strength", lambda: couplings.on_site(2, [1.0, 2.0, 3.0])),
    (ArgumentError, "strength", lambda: couplings.on_site(2, np.nan)),
    (ArgumentTypeError, "strength", lambda: couplings.on_site(2, 1j)),
    (ArgumentIndexError, "bonds", lambda: couplings.nearest_neighbour(2, [(0, 2)], 1.0)),
    (ArgumentError, "bonds", lambda: couplings.nearest_neighbour(2, [(0, 1), (1, 0)], 1.0)),
    (ArgumentError, "bonds", lambda: couplings.nearest_neighbour(2, [(0, 0)], 1.0)),
    (ArgumentTypeError, "bonds", lambda: couplings.nearest_neighbour(2, R, 1.0)),
    (ArgumentError, "strength", lambda: couplings.nearest_neighbour(2, [(0, 1)], [1.0, 2.0])),
    (ArgumentTypeError, "strength", lambda: couplings.nearest_neighbour(2, [(0, 1)], 1j)),
    (ArgumentError, "distances", lambda: couplings.screened([[0.0, 1.0]], 1.0, 1.0)),
    (ArgumentError, "distances", lambda: couplings.screened([[0.0, 1.0], [2.0, 0.0]], 1.0, 1.0)),
    (ArgumentError, "distances", lambda: couplings.screened([[1.0, 1.0], [1.0, 0.0]], 1.0, 1.0)),
    (ArgumentError, "distances", lambda: couplings.screened(np.zeros((2, 2)), 1.0, 1.0)),
    (ArgumentError, "screening_length", lambda: couplings.screened(R, 1.0, 0.0)),
    (ArgumentError, "strength", lambda: couplings.screened(R, np.inf, 1.0)),
    (ArgumentError, "strength", lambda: couplings.screened(R, [1.0, 2.0], 1.0)),  # type: ignore[arg-type]
    (ArgumentError, "distances", lambda: couplings.long_range([[0.0, -1.0], [-1.0, 0.0]], 1.0)),
    (ArgumentTypeError, "distances", lambda: couplings.long_range([[0, 1j], [-1j, 0]], 1.0)),
    (ArgumentError, "distances", lambda: couplings.long_range([[0.0, np.nan], [1.0, 0.0]], 1.0)),
    (ArgumentError, "exponent", lambda: couplings.long_range(R, 1.0, 0.0)),
    (ArgumentError, "orbitals", lambda: couplings.pairing(0, 1.0)),
    (ArgumentTypeError, "strength", lambda: couplings.pairing(2, 1j)),
    (ArgumentError, "strength", lambda: couplings.pairing(3, R)),
    (ArgumentError, "strength", lambda: couplings.pairing(2, [[0.0, 1.0], [2.0, 0.0]])),
    (ArgumentError, "strength", lambda: couplings.pairing(2, [1.0, 2.0])),
    (ArgumentTypeError, "strength", lambda: couplings.pairing(2, [[1.0], [1.0, 2.0]])),
    (ArgumentTypeError, "strength", lambda: couplings.pairing(2, "weak")),
]


@pytest.mark.parametrize(("error", "argument", "call"), BAD_INPUT)
def test_bad_input_names_the_argument(
    error: type[FockhullError], argument: str, call: Callable[[], object]
) -> None:
    with pytest.raises(error, match=rf"^`{argument}`: got .+; expected .+"):
        call()
