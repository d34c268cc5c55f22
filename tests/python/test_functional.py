"""The universal functional: arguments, derivatives, and an independent semidefinite program."""

from __future__ import annotations

import pickle
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

import fockhull as fh
from reference.fock import fermions
from reference.random_problems import random_one_body, random_two_body

Array = npt.NDArray[Any]


def functional(weights: Array | list[float], *, kind: Any = "real") -> fh.UniversalFunctional:
    v = random_two_body(np.random.default_rng(3), 4, kind)
    interaction = fh.Interaction(fh.Fermions(4, 2), two_body=v, order="dirac")
    return fh.UniversalFunctional(interaction, weights)


def semidefinite_program(kind: Any, weights: Array, gamma: Array) -> tuple[float, bool]:
    """Minimise Tr(Gamma W) over Gamma = sum_k (w_k - w_k+1) G_k, 0 <= G_k <= 1, Tr G_k = k."""
    cvxpy = pytest.importorskip("cvxpy")
    sector = fermions(4, 2)
    W = sector.two_body(random_two_body(np.random.default_rng(3), 4, kind))  # noqa: N806
    steps = weights - np.append(weights[1:], 0.0)
    is_complex = np.iscomplexobj(W)
    shape = {"hermitian": True} if is_complex else {"symmetric": True}
    real: Any = cvxpy.real if is_complex else lambda expression: expression
    parts = [cvxpy.Variable(W.shape, **shape) for _ in weights]
    total = sum(float(c) * G for c, G in zip(steps, parts, strict=True))
    one = np.eye(len(W))
    constraints = []
    for k, G in enumerate(parts, 1):  # noqa: N806
        constraints += [G >> 0, one - G >> 0, real(cvxpy.trace(G)) == k]
    for p in range(4):
        # the last occupation follows from the trace
        for q in range(p + 1 if p < 3 else p):
            unit = np.zeros((4, 4))
            unit[p, q] = 1.0
            constraints.append(cvxpy.trace(sector.one_body(unit) @ total) == gamma[q, p])
    problem = cvxpy.Problem(cvxpy.Minimize(real(cvxpy.trace(W @ total))), constraints)
    tight = {"tol_gap_abs": 1e-10, "tol_gap_rel": 1e-10, "tol_feas": 1e-10}
    value = float(problem.solve(solver="CLARABEL", **tight))
    return value, problem.status == "optimal"


@pytest.mark.filterwarnings("ignore")
@pytest.mark.parametrize("kind", ["real", "complex"])
@pytest.mark.parametrize("weights", [[1.0], [0.6, 0.4], [0.5, 0.3, 0.2]])
def test_agrees_with_a_semidefinite_program(kind: Any, weights: list[float]) -> None:
    h = random_one_body(np.random.default_rng(5), 4, is_complex=kind == "complex")
    u = np.linalg.eigh(h)[1]
    gamma = (u * np.array([0.65, 0.55, 0.45, 0.35])) @ u.conj().T
    expected, accurate = semidefinite_program(kind, np.array(weights), gamma)
    result = functional(weights, kind=kind).evaluate(gamma)
    assert result.value == pytest.approx(expected, abs=2e-6 if accurate else 2e-5)
    assert result.converged


def test_gradient_is_minus_the_potential() -> None:
    F = functional([0.6, 0.4])  # noqa: N806
    gamma, step = np.diag([0.6, 0.55, 0.45, 0.4]), 1e-4
    states = fh.solve(fh.Hamiltonian(np.diag([0.0, 2.0, 5.0, 9.0]), F.interaction), F.weights)
    gamma = 0.5 * gamma + 0.5 * states.density_matrix
    direction = random_one_body(np.random.default_rng(1), 4)
    direction -= np.trace(direction) / 4 * np.eye(4)
    result = F.evaluate(gamma)
    assert result.place == "inside"
    ahead, behind = (F.evaluate(gamma + s * step * direction).value for s in (1, -1))
    assert result.gradient is not None
    slope = float(np.sum(result.gradient * direction.T))
    assert (ahead - behind) / (2 * step) == pytest.approx(slope, abs=1e-5)


def test_excitation_energies_are_derivatives_in_the_weights() -> None:
    weights, step = np.array([0.5, 0.3, 0.2]), 1e-4
    F = functional(weights)  # noqa: N806
    h = np.diag([0.0, 1.0, 3.0, 7.0])
    gamma = fh.solve(fh.Hamiltonian(h, F.interaction), weights).density_matrix
    gamma = 0.98 * gamma + 0.02 * 0.5 * np.eye(4)
    result = F.evaluate(gamma)
    assert result.excitation_energies is not None
    for k in (1, 2):
        change = np.zeros(3)
        change[k], change[0] = step, -step
        ahead, behind = (functional(weights + s * change).evaluate(gamma).value for s in (1, -1))
        expected = result.excitation_energies[k]
        assert (ahead - behind) / (2 * step) == pytest.approx(expected, abs=1e-4)


def test_certified_ring_of_six() -> None:
    L = 6  # noqa: N806
    sector = fh.SpinHalfFermions(L, (3, 3))
    interaction = fh.Interaction(sector, density_density=4.0 * np.eye(L))
    weights = [0.5, 0.3, 0.2]
    h = fh.lattices.ring(L)
    states = fh.solve(fh.Hamiltonian(h, interaction), weights)
    exact = states.energy - float(np.einsum("pq,sqp->", h, states.density_matrix))
    F = fh.UniversalFunctional(interaction, weights, "spin-resolved")  # noqa: N806
    result = F.evaluate(states.density_matrix)
    assert result.value == pytest.approx(exact, abs=1e-8)
    assert result.gap <= 1e-8
    assert result.ensemble is not None
    assert result.ensemble.verify(states.density_matrix)


def test_null_space_of_the_potential() -> None:
    free = fh.Interaction(fh.Bosons(2, 2), density_density=np.zeros((2, 2)))
    result = fh.UniversalFunctional(free, [0.5, 0.3, 0.2]).evaluate(np.eye(2))
    assert result.potential_null_space is not None
    assert len(result.potential_null_space) == 2


@pytest.mark.parametrize(
    ("matrix", "message"),
    [
        (np.eye(3), "shape"),
        (np.eye(4), "trace"),
        (np.full((4, 4), np.nan), "finite"),
        (np.diag([0.5] * 4) + np.eye(4, k=1), "Hermiticity"),
    ],
)
def test_refuses(matrix: Array, message: str) -> None:
    with pytest.raises(ValueError, match=message) as caught:
        functional([0.6, 0.4]).evaluate(matrix)
    assert isinstance(caught.value, fh.FockhullError)


def test_transition_density_matrices() -> None:
    # the diagonal is that of the states; one-body operators have the elements they should
    F = functional([0.5, 0.3, 0.2], kind="complex")  # noqa: N806
    result = F.evaluate(np.diag([0.55, 0.52, 0.48, 0.45]))
    states, pairs = result.states, result.transition_density_matrices
    assert states is not None
    assert pairs is not None
    np.testing.assert_allclose(np.einsum("jj...->j...", pairs), states.state_density_matrices)
    h = random_one_body(np.random.default_rng(2), 4, is_complex=True)
    x = states.vectors
    direct = x.conj().T @ fh.Hamiltonian(h, sector=F.interaction.sector).apply(x)
    np.testing.assert_allclose(np.einsum("pq,jkqp->jk", h, pairs), direct, atol=1e-12)


def test_start_changes_nothing() -> None:
    F = functional([0.6, 0.4])  # noqa: N806
    gamma = np.diag([0.6, 0.55, 0.45, 0.4])
    first = F.evaluate(gamma)
    again = F.evaluate(gamma, start=first)
    assert again.value == pytest.approx(first.value, abs=1e-9)
    assert first.potential is not None
    third = F.evaluate(gamma, start=-first.potential)
    assert third.value == pytest.approx(first.value, abs=1e-9)


def test_pickles_and_prints() -> None:
    F = functional([0.6, 0.4])  # noqa: N806
    copy = pickle.loads(pickle.dumps(F))
    gamma = np.diag([0.6, 0.55, 0.45, 0.4])
    result = F.evaluate(gamma)
    assert copy.evaluate(gamma).value == result.value
    again = pickle.loads(pickle.dumps(result))
    assert again.value == result.value
    assert again.ensemble.verify(gamma)
    with pytest.raises(ValueError, match="read-only"):
        result.density_matrix[0, 0] = 1.0
    assert "UniversalFunctional" in repr(copy)
    assert "interval" in F.evaluate(gamma)._repr_html_()


def hubbard(sites: int, particles: tuple[int, int]) -> fh.Interaction:
    sector = fh.SpinHalfFermions(sites, particles)
    return fh.Interaction(sector, density_density=4.0 * np.eye(sites))


@pytest.mark.parametrize("domain", ["spin-resolved", "spin-summed"])
def test_site_occupation_functional(domain: Any) -> None:
    # lattice density functional theory: hopping and interaction fixed, site energies vary
    L, weights = 4, [0.6, 0.4]  # noqa: N806
    interaction, hopping = hubbard(L, (2, 1)), fh.lattices.ring(L, flux=0.7)
    site_energies = np.array([0.3, -0.4, 0.8, -0.1])
    states = fh.solve(fh.Hamiltonian(hopping + np.diag(site_energies), interaction), weights)
    gamma = states.density_matrix
    gamma = gamma if domain == "spin-resolved" else gamma.sum(axis=0)
    occupations = np.diagonal(gamma, axis1=-2, axis2=-1).real
    exact = states.energy - float((occupations * site_energies).sum())
    F = fh.UniversalFunctional(  # noqa: N806
        interaction, weights, domain, variables="diagonal", one_body=hopping
    )
    result = F.evaluate(gamma)
    assert result.value == pytest.approx(exact, abs=1e-9)
    assert result.gap <= 1e-8
    assert result.potential is not None
    assert np.count_nonzero(result.potential * (1.0 - np.eye(L))) == 0
    assert result.ensemble is not None
    assert result.ensemble.verify(occupations[..., np.newaxis] * np.eye(L))
    copy = pickle.loads(pickle.dumps(F))
    assert copy.evaluate(gamma).value == pytest.approx(exact, abs=1e-9)


# by definition (constrained search in two steps): what the site occupations leave open is minimised
def test_fewer_variables_are_a_minimum_over_the_rest() -> None:
    interaction, hopping = hubbard(2, (1, 1)), fh.lattices.chain(2)
    imbalance = 0.4
    full = fh.UniversalFunctional(interaction, [1.0], "spin-summed")
    sites = fh.UniversalFunctional(
        interaction, [1.0], "spin-summed", variables="diagonal", one_body=hopping
    )
    values = [
        full.evaluate([[1 + imbalance, A], [A, 1 - imbalance]]).value - 2.0 * A
        for A in np.linspace(0.6, 0.9, 61)
    ]
    site_value = sites.evaluate(np.diag([1 + imbalance, 1 - imbalance])).value
    assert min(values) == pytest.approx(site_value, abs=1e-4)
    assert min(values) >= site_value - 1e-9


def test_variables_symmetric_under_a_group() -> None:
    # a symmetric gamma needs symmetric potentials only: translations of a ring
    interaction = hubbard(4, (2, 1))
    translation = np.roll(np.eye(4), 1, axis=0)
    operators = fh.functionals.commuting_with([translation, translation.T])
    assert len(operators) == 3  # constant, nearest and second neighbours
    weights = [0.7, 0.3]
    gamma = 0.75 * np.eye(4) - 0.2 * fh.lattices.ring(4)
    whole = fh.UniversalFunctional(interaction, weights, "spin-summed")
    symmetric = fh.UniversalFunctional(interaction, weights, "spin-summed", variables=operators)
    assert symmetric.evaluate(gamma).value == pytest.approx(whole.evaluate(gamma).value, abs=1e-8)


def test_variables_must_be_closed() -> None:
    operators = np.array([np.diag([1.0, 0.0, 0.0, 2.0]), np.eye(4, k=1) + np.eye(4, k=-1)])
    interaction = functional([1.0]).interaction
    with pytest.raises(ValueError, match="closed"):
        fh.UniversalFunctional(interaction, [1.0], variables=operators)
    with pytest.raises(ValueError, match="diagonal"):
        fh.UniversalFunctional(interaction, [1.0], variables="sites")  # type: ignore[arg-type]


def test_regularized_functional() -> None:
    F = functional([0.5, 0.3, 0.2], kind="complex")  # noqa: N806
    gamma = np.diag([0.6, 0.55, 0.45, 0.4])
    exact = F.evaluate(gamma)
    values, start = [], None
    for strength in (1e-1, 1e-2, 1e-3, 1e-4):
        start = F.regularized(gamma, strength, tol=1e-10, start=start)
        assert 0.0 <= start.gap <= 1e-9
        assert start.ensemble.verify(start.density_matrix)
        # the proximal point is gamma + epsilon h
        moved = gamma + strength * start.potential
        np.testing.assert_allclose(start.density_matrix, moved, atol=1e-6)
        values.append(start.value)
    assert values == sorted(values)
    assert exact.potential is not None
    # F - F_epsilon -> epsilon |h|^2 / 2
    slope = 0.5e-4 * float(np.sum(np.abs(exact.potential) ** 2))
    assert exact.value - values[-1] == pytest.approx(slope, rel=0.05)


def test_regularized_functional_outside_the_domain() -> None:
    # Pauli: without interaction F is zero inside, so F_epsilon is distance^2 / (2 epsilon)
    free = fh.Interaction(fh.Fermions(3, 2), density_density=np.zeros((3, 3)))
    F = fh.UniversalFunctional(free, [1.0])  # noqa: N806
    gamma, strength = np.diag([1.2, 0.7, 0.1]), 0.1
    expected = F.polytope.distance(gamma) ** 2 / (2.0 * strength)
    assert F.regularized(gamma, strength).value == pytest.approx(expected, abs=1e-8)


@pytest.mark.parametrize("kind", ["real", "complex"])
def test_response_and_hessian(kind: Any) -> None:
    F = functional([0.5, 0.3, 0.2], kind=kind)  # noqa: N806
    h = np.diag([0.0, 2.0, 5.0, 9.0])
    gamma = fh.solve(fh.Hamiltonian(h, F.interaction), F.weights).density_matrix
    result = F.evaluate(gamma, tol=1e-11)
    assert result.potential is not None
    is_complex, step = kind == "complex", 1e-4
    change = random_one_body(np.random.default_rng(4), 4, is_complex=is_complex)
    change -= np.trace(change) / 4 * np.eye(4)
    ahead, behind = (
        fh.solve(
            fh.Hamiltonian(result.potential + s * step * change, F.interaction), F.weights
        ).density_matrix
        for s in (1, -1)
    )
    response = F.response(result, change)
    np.testing.assert_allclose(response, (ahead - behind) / (2 * step), atol=1e-6)
    # the Hessian takes the response back to minus the change
    np.testing.assert_allclose(F.hessian_product(result, response), -change, atol=1e-6)


def test_no_response_at_a_kink() -> None:
    interaction = hubbard(2, (1, 1))
    F = fh.UniversalFunctional(interaction, [1.0], "spin-summed")  # noqa: N806
    kink = F.evaluate(np.array([[1.5, 0.3], [0.3, 0.5]]))
    with pytest.raises(fh.FockhullError, match="degenerate"):
        F.response(kink, np.diag([1.0, -1.0]))


def test_outside_by_rounding_counts_as_the_boundary() -> None:
    F = functional([1.0])  # noqa: N806
    exact = F.evaluate(np.diag([1.0, 1.0, 0.0, 0.0]))
    near = F.evaluate(np.diag([1.0 + 3e-10, 1.0 - 3e-10, 0.0, 0.0]))
    assert near.place == exact.place == "boundary"
    assert near.value == pytest.approx(exact.value, abs=1e-8)
    assert near.limit is not None
    assert near.limit_uncertainty is not None
    assert near.limit_uncertainty < 1e-8


def test_determinant_on_the_boundary() -> None:
    # Pauli: a determinant has a single preimage, F = (v_0101 + v_1010 - v_0110 - v_1001) / 2
    v = random_two_body(np.random.default_rng(3), 4, "real")
    exact = 0.5 * (v[0, 1, 0, 1] + v[1, 0, 1, 0] - v[0, 1, 1, 0] - v[1, 0, 0, 1])
    result = functional([1.0]).evaluate(np.diag([1.0, 1.0, 0.0, 0.0]))
    assert result.value == pytest.approx(exact, abs=1e-10)
    assert result.lower <= exact + 1e-12
    assert result.gap < 1e-5
    assert result.gradient is None


@pytest.mark.parametrize("share", [0.0, 0.3])
def test_bundle_on_a_sector_without_dense_matrices(share: float) -> None:
    L = 8  # noqa: N806
    interaction = hubbard(L, (4, 4))
    h = fh.lattices.ring(L) + 0.2 * np.diag(np.arange(L))
    states = fh.solve(fh.Hamiltonian(h, interaction), [0.6, 0.4])
    gamma = (1.0 - share) * states.density_matrix + share * 0.5 * np.eye(L)
    F = fh.UniversalFunctional(interaction, [0.6, 0.4], "spin-resolved")  # noqa: N806
    result = F.evaluate(gamma, tol=1e-6)
    assert result.gap <= 1e-6
    assert result.ensemble is not None
    assert result.ensemble.verify(gamma)
    if share == 0.0:
        exact = states.energy - float(np.sum(h * np.swapaxes(gamma, 1, 2)))
        assert result.lower - 1e-10 <= exact <= result.upper + 1e-10


@pytest.mark.parametrize("spacing", [1.4, 2.6])
@pytest.mark.parametrize("weights", [[1.0], [0.6, 0.4], [0.5, 0.3, 0.2]])
def test_round_trip_with_integrals(spacing: float, weights: list[float]) -> None:
    """Legendre's round trip on a chain of four hydrogen atoms in a minimal basis."""
    from hydrogen_integrals import hydrogen_integrals  # noqa: PLC0415

    integrals = hydrogen_integrals(spacing * np.arange(4))
    sector = fh.SpinHalfFermions(4, (2, 2))
    repulsion = fh.Interaction(sector, two_body=integrals.two_body, order="mulliken")
    e = fh.solve(fh.Hamiltonian(integrals.one_body, repulsion), weights)
    functional = fh.UniversalFunctional(repulsion, weights, domain="spin-resolved")
    value = functional.evaluate(e.density_matrix)
    assert value.lower - 1e-12 <= e.interaction_energy <= value.upper + 1e-12
    assert value.gap <= 1e-8
    assert value.ensemble.verify(e.density_matrix)
