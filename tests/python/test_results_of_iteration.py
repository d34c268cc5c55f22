"""Iterative solves as people use them: continued, watched, interrupted, cut short."""

from __future__ import annotations

import os
import signal

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal
from scipy.sparse.linalg import eigsh

import fockhull as fh
from fockhull import errors

WEIGHTS = [0.5, 0.3, 0.2]
LARGE = fh.SpinHalfFermions(8, particles=(4, 3))
CHAIN = fh.Hamiltonian(
    fh.lattices.chain(8), fh.Interaction(LARGE, density_density=4.0 * np.eye(8)), constant=1.0
)
"""3,920 states: solved by iteration."""


def test_seeds_are_deterministic() -> None:
    first, second = (fh.solve(CHAIN, WEIGHTS, seed=3) for _ in range(2))
    assert first.method == "block Lanczos"
    for name in ("energies", "vectors", "residuals", "error_bounds"):
        assert_array_equal(getattr(first, name), getattr(second, name))
    assert first.products == second.products
    other = fh.solve(CHAIN, WEIGHTS, seed=4)
    assert not np.array_equal(first.residuals, other.residuals)
    assert_allclose(first.energies, other.energies, rtol=0.0, atol=1e-9)
    assert_allclose(first.density_matrix, other.density_matrix, rtol=0.0, atol=1e-7)


def test_warm_start() -> None:
    """A start never changes the answer."""
    cold = fh.solve(CHAIN, WEIGHTS)
    warm = fh.solve(CHAIN, WEIGHTS, start=cold)
    from_vectors = fh.solve(CHAIN, WEIGHTS, start=cold.vectors)
    poor = fh.solve(CHAIN, WEIGHTS, start=np.zeros(CHAIN.dimension))
    complex_start = fh.solve(CHAIN, WEIGHTS, start=cold.vectors * np.exp(0.3j))
    for ensemble in (warm, from_vectors, poor, complex_start):
        assert_allclose(ensemble.energies, cold.energies, rtol=0.0, atol=1e-9)
        assert_allclose(ensemble.density_matrix, cold.density_matrix, rtol=0.0, atol=1e-7)


def test_warm_start_saves_products() -> None:
    cold = fh.solve(CHAIN, WEIGHTS)
    assert fh.solve(CHAIN, WEIGHTS, start=cold).products < cold.products
    near = fh.Hamiltonian(
        fh.lattices.chain(8), fh.Interaction(LARGE, density_density=4.05 * np.eye(8)), constant=1.0
    )
    assert fh.solve(near, WEIGHTS, start=cold).products < fh.solve(near, WEIGHTS).products


def test_start_from_excited_states_finds_the_lowest() -> None:
    """The start spans an invariant subspace above the ground state."""
    cold = fh.solve(CHAIN, levels=4)
    again = fh.solve(CHAIN, [1.0], start=cold.vectors[:, 1:])
    assert_allclose(again.energies, cold.energies[:1], rtol=0.0, atol=1e-9)


def test_progress() -> None:
    reports: list[fh.SolveProgress] = []
    ensemble = fh.solve(CHAIN, WEIGHTS, progress=reports.append)
    assert all(isinstance(report, fh.SolveProgress) for report in reports)
    products = [report.products for report in reports]
    assert products == sorted(products)
    assert 0 < products[-1] <= ensemble.products
    assert {report.wanted for report in reports} == {3}
    assert reports[-1].converged == 3
    silent = fh.solve(CHAIN, WEIGHTS, progress=False)
    assert_array_equal(silent.vectors, ensemble.vectors)


@pytest.mark.parametrize("error", [KeyboardInterrupt, SystemExit, ZeroDivisionError])
def test_exceptions_of_a_progress_callback_stop_the_solve(error: type[BaseException]) -> None:
    calls = 0

    def stop(report: fh.SolveProgress) -> None:
        nonlocal calls
        calls += 1
        if calls == 3:
            raise error("enough")

    with pytest.raises(error, match="enough"):
        fh.solve(CHAIN, WEIGHTS, progress=stop)
    assert calls == 3


def test_control_c_stops_the_solve() -> None:
    def press(report: fh.SolveProgress) -> None:
        os.kill(os.getpid(), signal.SIGINT)

    with pytest.raises(KeyboardInterrupt):
        fh.solve(CHAIN, WEIGHTS, progress=press)


def test_convergence_error_carries_the_partial_result() -> None:
    with pytest.raises(errors.ConvergenceError, match="partial result") as caught:
        fh.solve(CHAIN, WEIGHTS, max_products=40)
    partial = caught.value.result
    assert isinstance(partial, fh.Ensemble)
    assert partial.products <= 60
    assert len(partial.energies) == 3
    assert partial.residuals.max() > 1e-8
    exact = fh.solve(CHAIN, WEIGHTS)
    # Ritz values lie above the eigenvalues, each within its residual of some eigenvalue
    assert (partial.energies >= exact.energies - 1e-9).all()
    hx = CHAIN.apply(partial.vectors) - partial.vectors * partial.energies
    assert_allclose(np.linalg.norm(hx, axis=0), partial.residuals, rtol=1e-6, atol=1e-12)
    assert partial.level_count.kind == "unchecked"
    continued = fh.solve(CHAIN, WEIGHTS, start=partial)
    assert_allclose(continued.energies, exact.energies, rtol=0.0, atol=1e-9)


def test_certificates_of_the_iterative_solve() -> None:
    ensemble = fh.solve(CHAIN, WEIGHTS)
    exact = np.sort(eigsh(CHAIN.to_scipy(), k=4, which="SA", tol=0.0, return_eigenvectors=False))
    assert_allclose(ensemble.energies, exact[:3], rtol=0.0, atol=1e-9)
    assert (np.abs(ensemble.energies - exact[:3]) <= ensemble.error_bounds + 1e-13).all()
    assert ensemble.level_count.kind == "probed"
    assert 0.0 < ensemble.level_count.failure_probability < 1e-3
    assert_allclose(ensemble.next_energy, exact[3], rtol=0.0, atol=1e-3)
    gram = ensemble.vectors.conj().T @ ensemble.vectors
    assert_allclose(gram, np.eye(3), rtol=0.0, atol=1e-12)
    largest = np.abs(ensemble.vectors).max(axis=0)
    for column, top in zip(ensemble.vectors.T, largest, strict=True):
        first = column[np.abs(column) >= top - 1e-8][0]
        assert first.real > 0.0
        assert first.imag == 0.0


@pytest.mark.parametrize("unit", [1e-9, 1e-3, 1e6])
def test_the_unit_of_energy_does_not_matter(unit: float) -> None:
    """Energies are in the unit of h and v, never assumed to be of order one."""
    scaled = fh.Hamiltonian(
        unit * CHAIN.one_body, unit * CHAIN.interaction, constant=unit * CHAIN.constant
    )
    e, other = fh.solve(CHAIN, WEIGHTS), fh.solve(scaled, WEIGHTS)
    assert_allclose(other.energies / unit, e.energies, rtol=0.0, atol=1e-9)
    assert_allclose(other.density_matrix, e.density_matrix, rtol=0.0, atol=1e-7)
    assert other.multiplets == e.multiplets


def test_large_multiplets_are_counted() -> None:
    """The ground level has 20 states, more than are completed: still none lies below."""
    sector = fh.Fermions(13, 5)
    shells = np.array([0.0, 1, 1, 1, 2, 2, 2, 2, 2, 0.0, 1, 1, 1])
    e = fh.solve(fh.Hamiltonian(np.diag(shells), sector=sector), levels=1)
    assert_allclose(e.energies, [3.0], rtol=0.0, atol=1e-9)
    assert e.level_count.kind == "probed"
