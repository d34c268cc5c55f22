"""What holds for every ensemble, whatever the Hamiltonian and the weights."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

import fockhull as fh
from properties.generated import (
    Array,
    Problem,
    bosons,
    fermions,
    generators,
    problem_of,
    sectors,
    solved,
    weights_for,
)
from reference.random_problems import random_unitary

EXACT: dict[str, Any] = {"rtol": 0.0, "atol": 1e-10}


def one_body_energy(h: Array, gamma: Array) -> float:
    """Tr(h gamma), summed over the spins."""
    return float(np.trace(h @ gamma, axis1=-2, axis2=-1).real.sum())


@given(st.data(), sectors(), generators(), st.booleans())
def test_identities_of_the_density_matrix(
    data: st.DataObject, sector: Any, rng: Any, is_complex: bool
) -> None:
    """Energy, trace, Hermiticity, and occupations between their limits."""
    problem = problem_of(sector, rng, is_complex=is_complex)
    hamiltonian = problem.hamiltonian()
    e = solved(hamiltonian, data.draw(weights_for(sector)))
    gamma = e.density_matrix
    assert_allclose(e.energy, e.weights @ e.energies, **EXACT)
    assert_allclose(gamma, gamma.conj().swapaxes(-1, -2), **EXACT)
    traces = np.trace(gamma, axis1=-2, axis2=-1)
    assert_allclose(traces, sector.particles, **EXACT)
    assert_allclose(e.occupations.sum(axis=-1), sector.particles, **EXACT)
    assert (np.diff(e.occupations) <= 1e-12).all()
    assert e.occupations.min(initial=0.0) > -1e-10
    if not isinstance(sector, fh.Bosons):
        assert e.occupations.max(initial=0.0) < 1.0 + 1e-10
    one_body = one_body_energy(problem.one_body, gamma)
    total = one_body + e.interaction_energy + problem.constant
    assert_allclose(total, e.energy, **EXACT)
    zero = np.zeros((sector.modes, sector.modes))
    applied = fh.Hamiltonian(zero, hamiltonian.interaction).apply(e.vectors)
    expected = np.einsum("j,ij,ij->", e.weights, e.vectors.conj(), applied)
    assert_allclose(e.interaction_energy, expected, **EXACT)
    rebuilt = e.natural_orbitals * e.occupations[..., None, :]
    rebuilt = rebuilt @ e.natural_orbitals.conj().swapaxes(-1, -2)
    assert_allclose(rebuilt, gamma, **EXACT)


@given(st.data(), sectors(), generators(), st.booleans())
def test_gross_oliveira_kohn_inequality(
    data: st.DataObject, sector: Any, rng: Any, is_complex: bool
) -> None:
    """No orthonormal states have a lower weighted energy.

    Gross, Oliveira and Kohn, Phys. Rev. A 37, 2805 (1988); recalled.
    """
    hamiltonian = problem_of(sector, rng, is_complex=is_complex).hamiltonian()
    weights = data.draw(weights_for(sector))
    ensemble = solved(hamiltonian, weights)
    r = len(weights)
    for mixing in (0.1, 1.0):
        noise = random_unitary(rng, sector.dimension)[:, :r]
        states, _ = np.linalg.qr(ensemble.vectors + mixing * noise)
        energies = np.einsum("ij,ij->j", states.conj(), hamiltonian.apply(states)).real
        assert weights @ energies >= ensemble.energy - 1e-10
    own = np.einsum("ij,ij->j", ensemble.vectors.conj(), hamiltonian.apply(ensemble.vectors)).real
    assert_allclose(weights @ own, ensemble.energy, **EXACT)


@given(st.data(), sectors(), generators())
def test_ensemble_energy_is_concave_in_the_hamiltonian(
    data: st.DataObject, sector: Any, rng: Any
) -> None:
    """E_w is a minimum of linear functions of h; gamma is a supergradient."""
    first = problem_of(sector, rng, is_complex=True)
    h = first.one_body + problem_of(sector, rng, is_complex=True).one_body
    second = first._replace(one_body=h)
    middle = first._replace(one_body=0.5 * (first.one_body + h))
    weights = data.draw(weights_for(sector))
    e1, e2, e12 = (solved(p.hamiltonian(), weights) for p in (first, second, middle))
    assert e12.energy >= 0.5 * (e1.energy + e2.energy) - 1e-10
    slope = one_body_energy(h - first.one_body, e1.density_matrix)
    assert e2.energy <= e1.energy + slope + 1e-10


@given(st.data(), sectors(), generators(), st.booleans())
def test_density_matrices_are_inside_their_polytope(
    data: st.DataObject, sector: Any, rng: Any, is_complex: bool
) -> None:
    """In every domain, and outside that of no weaker ensemble."""
    weights = data.draw(weights_for(sector))
    e = solved(problem_of(sector, rng, is_complex=is_complex).hamiltonian(), weights)
    gammas: dict[str | None, Array] = {None: e.density_matrix}
    if isinstance(sector, fh.SpinHalfFermions):
        gammas = {"spin-resolved": e.density_matrix, "spin-summed": e.density_matrix.sum(axis=0)}
    for domain, gamma in gammas.items():
        polytope = fh.ExclusionPolytope(sector, weights, domain)
        assert polytope.contains(gamma)
        assert polytope.distance(gamma) < 1e-9
        pure = fh.ExclusionPolytope(sector, [1.0], domain)
        assert pure.contains(gamma)


@given(st.data(), sectors(), generators(), st.booleans())
def test_free_particles_reach_the_support_function(
    data: st.DataObject, sector: Any, rng: Any, is_complex: bool
) -> None:
    """E_w(h) = f_w(levels of h), and gamma lies on the boundary of the polytope."""
    weights = data.draw(weights_for(sector))
    h = problem_of(sector, rng, is_complex=is_complex).one_body
    e = solved(fh.Hamiltonian(h, sector=sector), weights)
    domain = "spin-resolved" if isinstance(sector, fh.SpinHalfFermions) else None
    polytope = fh.ExclusionPolytope(sector, weights, domain)
    support = polytope.support(np.linalg.eigvalsh(h))
    assert_allclose(e.energy, support.value, **EXACT)
    assert_allclose(
        e.energies, sector.lowest_configurations(np.linalg.eigvalsh(h), len(weights))[0], **EXACT
    )
    assert_allclose(e.interaction_energy, 0.0, **EXACT)
    if not e.cut_multiplets:
        vertex = -np.sort(-support.occupations, axis=-1)
        assert_allclose(e.occupations, vertex, rtol=0.0, atol=1e-7)


@given(sectors(), generators(), st.booleans())
def test_all_states(sector: Any, rng: Any, is_complex: bool) -> None:
    """r = dimension: the whole spectrum, and with equal weights the mean of everything."""
    hamiltonian = problem_of(sector, rng, is_complex=is_complex).hamiltonian()
    dimension = sector.dimension
    e = fh.solve(hamiltonian, np.full(dimension, 1.0 / dimension))
    matrix = hamiltonian.to_scipy().toarray()
    assert_allclose(e.energies, np.linalg.eigvalsh(matrix), **EXACT)
    assert_allclose(e.energy, np.trace(matrix).real / dimension, **EXACT)
    mean = np.reshape(sector.particles, (-1, 1, 1)) / sector.modes * np.eye(sector.modes)
    assert_allclose(e.density_matrix, mean.reshape(e.density_matrix.shape), **EXACT)
    assert e.level_count.kind == "proved"
    assert e.next_energy is None
    levels = fh.solve(hamiltonian, levels=dimension)
    assert_allclose(levels.vectors @ levels.vectors.conj().T, np.eye(dimension), **EXACT)


@given(st.data(), sectors(), generators())
def test_equal_weights(data: st.DataObject, sector: Any, rng: Any) -> None:
    """The mean of the r lowest levels; gamma the mean of theirs."""
    hamiltonian = problem_of(sector, rng, is_complex=True).hamiltonian()
    r = data.draw(st.integers(1, min(8, sector.dimension)))
    e = solved(hamiltonian, np.full(r, 1.0 / r))
    exact = np.linalg.eigvalsh(hamiltonian.to_scipy().toarray())
    assert_allclose(e.energy, exact[:r].mean(), **EXACT)
    assert_allclose(e.density_matrix, e.state_density_matrices.mean(axis=0), **EXACT)


def mean_field_energy(problem: Problem) -> float:
    """<H> of the one configuration with every mode filled once."""
    direct = np.einsum("pqpq->", problem.two_body)
    exchange = np.einsum("pqqp->", problem.two_body)
    one_body = np.trace(problem.one_body)
    return float(np.real(problem.constant + one_body + 0.5 * (direct - exchange)))


@given(st.integers(1, 6), generators(), st.booleans())
def test_filled_fermions(modes: int, rng: Any, is_complex: bool) -> None:
    """N = d: one state."""
    problem = problem_of(fh.Fermions(modes, modes), rng, is_complex=is_complex)
    e = fh.solve(problem.hamiltonian(), [1.0])
    assert_allclose(e.energies, [mean_field_energy(problem)], **EXACT)
    assert_allclose(e.density_matrix, np.eye(modes), **EXACT)


@given(st.one_of(fermions(), bosons()), generators(), st.booleans())
def test_no_particles(sector: Any, rng: Any, is_complex: bool) -> None:
    """N = 0: the constant."""
    empty = type(sector)(sector.modes, 0)
    problem = problem_of(empty, rng, is_complex=is_complex)
    e = fh.solve(problem.hamiltonian(), [1.0])
    assert_allclose(e.energies, [problem.constant], **EXACT)
    assert_allclose(e.density_matrix, 0.0, **EXACT)
    assert_allclose(e.interaction_energy, 0.0, **EXACT)


@given(st.integers(0, 20), generators(), st.booleans())
def test_bosons_in_one_mode(particles: int, rng: Any, is_complex: bool) -> None:
    """E = h N + v N (N - 1) / 2 + c."""
    problem = problem_of(fh.Bosons(1, particles), rng, is_complex=is_complex)
    e = fh.solve(problem.hamiltonian(), [1.0])
    h, v = problem.one_body.item().real, problem.two_body.item().real
    energy = problem.constant + h * particles + 0.5 * v * particles * (particles - 1)
    assert_allclose(e.energies, [energy], rtol=1e-13, atol=1e-10)
    assert_allclose(e.density_matrix, [[particles]], **EXACT)


@given(st.data(), sectors(), generators())
def test_majorised_weights_have_higher_energies(data: st.DataObject, sector: Any, rng: Any) -> None:
    """w' majorised by w: E_w' >= E_w."""
    hamiltonian = problem_of(sector, rng, is_complex=False).hamiltonian()
    weights = data.draw(weights_for(sector))
    share = rng.uniform()
    flatter = share * weights + (1.0 - share) / len(weights)
    e = solved(hamiltonian, weights)
    assert solved(hamiltonian, flatter).energy >= e.energy - 1e-10
