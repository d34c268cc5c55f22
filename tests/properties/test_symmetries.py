"""Changes of description that the results must follow."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import assume, given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

import fockhull as fh
from properties.generated import (
    Array,
    Problem,
    fermions,
    generators,
    problem_of,
    sectors,
    solved,
    spin_half,
    weights_for,
)
from reference.random_problems import random_unitary, rotate_one_body, rotate_two_body

ENERGY: dict[str, Any] = {"rtol": 0.0, "atol": 1e-10}
MATRIX: dict[str, Any] = {"rtol": 0.0, "atol": 1e-7}


def both(first: Problem, second: Problem, weights: Array) -> tuple[Array, Array]:
    """Density matrices of two descriptions that have the same energies."""
    e1, e2 = solved(first.hamiltonian(), weights), solved(second.hamiltonian(), weights)
    assert_allclose(e1.energies, e2.energies, **ENERGY)
    assert_allclose(e1.interaction_energy, e2.interaction_energy, rtol=0.0, atol=1e-7)
    assume(not e1.cut_multiplets)
    return e1.density_matrix, e2.density_matrix


@given(st.data(), sectors(), generators(), st.booleans(), st.booleans())
def test_unitary_covariance(
    data: st.DataObject, sector: Any, rng: Any, is_complex: bool, complex_modes: bool
) -> None:
    """Rotating h and v rotates gamma: U^+ gamma U."""
    problem = problem_of(sector, rng, is_complex=is_complex)
    u = random_unitary(rng, sector.modes, is_complex=complex_modes)
    rotated = problem._replace(
        one_body=rotate_one_body(problem.one_body, u), two_body=rotate_two_body(problem.two_body, u)
    )
    gamma, found = both(problem, rotated, data.draw(weights_for(sector)))
    assert_allclose(found, rotate_one_body(gamma, u), **MATRIX)


@given(st.data(), sectors(), generators(), st.booleans())
def test_permutations_of_modes(
    data: st.DataObject, sector: Any, rng: Any, is_complex: bool
) -> None:
    problem = problem_of(sector, rng, is_complex=is_complex)
    order = rng.permutation(sector.modes)
    permuted = problem._replace(
        one_body=problem.one_body[..., order[:, None], order],
        two_body=problem.two_body[np.ix_(order, order, order, order)],
    )
    gamma, found = both(problem, permuted, data.draw(weights_for(sector)))
    assert_allclose(found, gamma[..., order[:, None], order], **MATRIX)


@given(st.data(), sectors(), generators())
def test_time_reversal(data: st.DataObject, sector: Any, rng: Any) -> None:
    """The complex conjugate of h and v gives that of gamma."""
    problem = problem_of(sector, rng, is_complex=True)
    conjugate = problem._replace(one_body=problem.one_body.conj(), two_body=problem.two_body.conj())
    gamma, found = both(problem, conjugate, data.draw(weights_for(sector)))
    assert_allclose(found, gamma.conj(), **MATRIX)


def of_holes(problem: Problem) -> Problem:
    """The same Hamiltonian written with a_p = b+_p: d - N holes."""
    h, v, sector = problem.one_body, problem.two_body, problem.sector
    direct, exchange = np.einsum("pqrq->rp", v), np.einsum("qprq->rp", v)
    pairs = np.einsum("pqpq->", v) - np.einsum("pqqp->", v)
    constant = problem.constant + float(np.real(np.trace(h) + 0.5 * pairs))
    holes = fh.Fermions(sector.modes, sector.modes - sector.particles)
    return Problem(holes, -h.T - direct + exchange, v.conj(), constant)


@given(st.data(), fermions(), generators(), st.booleans())
def test_particles_and_holes(
    data: st.DataObject, sector: fh.Fermions, rng: Any, is_complex: bool
) -> None:
    """Fermions: N against d - N, gamma against 1 - gamma^T."""
    problem = problem_of(sector, rng, is_complex=is_complex)
    weights = data.draw(weights_for(sector))
    e = solved(problem.hamiltonian(), weights)
    holes = solved(of_holes(problem).hamiltonian(), weights)
    assert_allclose(holes.energies, e.energies, **ENERGY)
    assume(not e.cut_multiplets)
    expected = np.eye(sector.modes) - np.swapaxes(e.density_matrix, 0, 1)
    assert_allclose(holes.density_matrix, expected, **MATRIX)


@given(st.data(), spin_half(), generators(), st.booleans())
def test_exchange_of_the_spins(
    data: st.DataObject, sector: fh.SpinHalfFermions, rng: Any, is_complex: bool
) -> None:
    problem = problem_of(sector, rng, is_complex=is_complex)
    up, down = sector.particles
    flipped = problem._replace(
        sector=fh.SpinHalfFermions(sector.orbitals, particles=(down, up)),
        one_body=problem.one_body[::-1],
    )
    gamma, found = both(problem, flipped, data.draw(weights_for(sector)))
    assert_allclose(found, gamma[::-1], **MATRIX)


@given(st.data(), fermions(most_modes=5), generators(), st.booleans())
def test_one_spin_alone_is_spinless(
    data: st.DataObject, sector: fh.Fermions, rng: Any, is_complex: bool
) -> None:
    problem = problem_of(sector, rng, is_complex=is_complex)
    weights = data.draw(weights_for(sector))
    polarised = problem._replace(
        sector=fh.SpinHalfFermions(sector.modes, particles=(sector.particles, 0))
    )
    gamma, found = both(problem, polarised, weights)
    assert_allclose(found[0], gamma, **MATRIX)
    assert_allclose(found[1], 0.0, **MATRIX)


@given(st.data(), spin_half(), generators())
def test_spin_orbitals(data: st.DataObject, sector: fh.SpinHalfFermions, rng: Any) -> None:
    """Up and down are the halves of 2 d spinless modes: the levels are among theirs."""
    d = sector.orbitals
    problem = problem_of(sector, rng, is_complex=True)
    h = np.zeros((2 * d, 2 * d), complex)
    v = np.zeros((2, d) * 4, complex)
    for s in range(2):
        h[s * d : (s + 1) * d, s * d : (s + 1) * d] = problem.one_body[s]
        for t in range(2):
            v[s, :, t, :, s, :, t, :] = problem.two_body
    spinless = Problem(
        fh.Fermions(2 * d, sector.total_particles), h, v.reshape((2 * d,) * 4), problem.constant
    )
    assume(spinless.sector.dimension < 100)
    all_levels = fh.solve(spinless.hamiltonian(), levels=spinless.sector.dimension).energies
    found = fh.solve(problem.hamiltonian(), levels=min(6, sector.dimension)).energies
    nearest = np.abs(found[:, None] - all_levels).min(axis=1)
    assert_allclose(nearest, 0.0, **ENERGY)
    assert found[0] >= all_levels[0] - 1e-10


@given(st.data(), sectors(), generators(), st.floats(0.01, 100.0), st.floats(-50.0, 50.0))
def test_unit_and_zero_of_energy(
    data: st.DataObject, sector: Any, rng: Any, scale: float, shift: float
) -> None:
    problem = problem_of(sector, rng, is_complex=False)
    weights = data.draw(weights_for(sector))
    scaled = Problem(
        sector, scale * problem.one_body, scale * problem.two_body, scale * problem.constant + shift
    )
    e, other = solved(problem.hamiltonian(), weights), solved(scaled.hamiltonian(), weights)
    assert_allclose(other.energies, scale * e.energies + shift, rtol=1e-11, atol=1e-10)
    assume(not e.cut_multiplets)
    assume(not other.cut_multiplets)
    assert_allclose(other.density_matrix, e.density_matrix, **MATRIX)


@given(st.data(), sectors(), generators())
def test_a_constant_one_body_term_counts_particles(
    data: st.DataObject, sector: Any, rng: Any
) -> None:
    problem = problem_of(sector, rng, is_complex=True)
    shifted = problem._replace(one_body=problem.one_body + 0.75 * np.eye(sector.modes))
    weights = data.draw(weights_for(sector))
    e, other = solved(problem.hamiltonian(), weights), solved(shifted.hamiltonian(), weights)
    assert_allclose(other.energies, e.energies + 0.75 * sector.total_particles, **ENERGY)


@given(sectors(), generators(), st.booleans())
def test_sums_of_interactions(sector: Any, rng: Any, is_complex: bool) -> None:
    """Linear in the forms, whatever they are."""
    first, second = (problem_of(sector, rng, is_complex=is_complex) for _ in range(2))
    w1, w2 = first.hamiltonian().interaction, second.hamiltonian().interaction
    coupling = rng.standard_normal((sector.modes, sector.modes))
    coupling += coupling.T
    if isinstance(sector, fh.Fermions):
        np.fill_diagonal(coupling, 0.0)
    w3 = fh.Interaction(sector, density_density=coupling)
    x = rng.standard_normal((sector.dimension, 2))

    def applied(interaction: fh.Interaction) -> Array:
        return fh.Hamiltonian(np.zeros((sector.modes, sector.modes)), interaction).apply(x)

    expected = 2.0 * applied(w1) - applied(w2) + 0.5 * applied(w3)
    assert_allclose(applied(2.0 * w1 - w2 + w3 * 0.5), expected, **ENERGY)
