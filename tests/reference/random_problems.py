"""Seeded random problems with the symmetries of the conventions, and their rotations."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[Any]
TwoBodyKind = Literal["eightfold", "real", "complex"]
TWO_BODY_KINDS: tuple[TwoBodyKind, ...] = ("eightfold", "real", "complex")


def random_array(rng: np.random.Generator, shape: tuple[int, ...], is_complex: bool) -> Array:
    """Standard normal entries, real or complex."""
    real: Array = rng.standard_normal(shape)
    return real + 1j * rng.standard_normal(shape) if is_complex else real


def random_one_body(
    rng: np.random.Generator, modes: int, *, is_complex: bool = False, spins: int | None = None
) -> Array:
    """Hermitian h of shape (d, d), or (spins, d, d)."""
    shape = (modes, modes) if spins is None else (spins, modes, modes)
    square = random_array(rng, shape, is_complex)
    hermitian: Array = 0.5 * (square + square.conj().swapaxes(-1, -2))
    return hermitian


def random_two_body(rng: np.random.Generator, modes: int, kind: TwoBodyKind) -> Array:
    """v in Dirac order with v_pqrs = v_qpsr = conj(v_rspq).

    "eightfold" has the further symmetry v_pqrs = v_rqps of real orbitals; "real" has not.
    """
    v = random_array(rng, (modes,) * 4, kind == "complex")
    if kind == "eightfold":
        v = 0.5 * (v + v.transpose(2, 1, 0, 3))
        v = 0.5 * (v + v.transpose(0, 3, 2, 1))
    v = 0.5 * (v + v.transpose(1, 0, 3, 2))
    symmetric: Array = 0.5 * (v + v.conj().transpose(2, 3, 0, 1))
    return symmetric


def random_density_density(
    rng: np.random.Generator, modes: int, *, zero_diagonal: bool = False
) -> Array:
    """Real symmetric V."""
    coupling = random_one_body(rng, modes)
    if zero_diagonal:
        np.fill_diagonal(coupling, 0.0)
    return coupling


def random_weights(rng: np.random.Generator, r: int) -> Array:
    """r positive weights of sum 1, strictly decreasing."""
    gaps = rng.exponential(size=r) + 1e-2
    weights: Array = np.cumsum(gaps)[::-1]
    weights /= weights.sum()
    return weights


def random_unitary(rng: np.random.Generator, modes: int, *, is_complex: bool = True) -> Array:
    """A unitary (or orthogonal) matrix distributed by the Haar measure."""
    q, r = np.linalg.qr(random_array(rng, (modes, modes), is_complex))
    phases: Array = np.diagonal(r) / np.abs(np.diagonal(r))
    unitary: Array = q * phases
    return unitary


def random_state(rng: np.random.Generator, dimension: int, *, is_complex: bool = False) -> Array:
    """A normalised vector."""
    vector = random_array(rng, (dimension,), is_complex)
    normalised: Array = vector / np.linalg.norm(vector)
    return normalised


def random_occupations(rng: np.random.Generator, modes: int, particles: int) -> Array:
    """Unsorted occupations of sum N, not necessarily allowed ones."""
    n: Array = rng.dirichlet(np.full(modes, rng.choice([0.3, 1.0, 3.0, 10.0]))) * particles
    return n


def random_fermion_occupations(
    rng: np.random.Generator, modes: int, particles: int, *, spread: float = 0.1
) -> Array:
    """Occupations of sum N near a random determinant, a few of them beyond [0, 1]."""
    n = np.zeros(modes)
    n[rng.permutation(modes)[:particles]] = 1.0
    n += spread * rng.standard_normal(modes)
    shifted: Array = n + (particles - n.sum()) / modes
    return shifted


def mulliken(dirac: Array) -> Array:
    """(pq|rs) = <pr|v|qs>."""
    return dirac.transpose(0, 2, 1, 3)


def rotate_one_body(matrix: Array, unitary: Array) -> Array:
    """U^+ h U (also gamma) in the modes whose columns are those of U."""
    rotated: Array = unitary.conj().T @ matrix @ unitary
    return rotated


def rotate_two_body(dirac: Array, unitary: Array) -> Array:
    """v_abcd = sum conj(U_pa U_qb) v_pqrs U_rc U_sd."""
    left = unitary.conj()
    rotated: Array = np.einsum(
        "pa,qb,pqrs,rc,sd->abcd", left, left, dirac, unitary, unitary, optimize=True
    )
    return rotated
