"""What holds for every interaction: round trip, convexity, invariance, monotony in the weights."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

import fockhull as fh
from reference.fock import spin_half
from reference.random_problems import (
    mulliken,
    random_density_density,
    random_one_body,
    random_two_body,
    random_unitary,
    random_weights,
    rotate_one_body,
    rotate_two_body,
)

Array = npt.NDArray[Any]

SEEDS = range(24)


@dataclass
class Case:
    """A random interaction with weights, and the states of a random potential."""

    functional: fh.UniversalFunctional
    one_body: Array
    states: fh.Ensemble
    gamma: Array
    centre: Array


def random_case(seed: int) -> Case:
    rng = np.random.default_rng(seed)
    is_complex = bool(rng.integers(2))
    kind = ("fermions", "bosons", "spin-resolved", "spin-summed")[seed % 4]
    domain: Any = kind if kind.startswith("spin") else None
    sector = random_sector(rng, kind)
    d = sector.modes
    weights = random_weights(rng, int(rng.integers(1, min(5, sector.dimension) + 1)))
    if rng.random() < 0.4:
        coupling = random_density_density(rng, d, zero_diagonal=kind == "fermions")
        interaction = fh.Interaction(sector, density_density=coupling)
    else:
        v = random_two_body(rng, d, "complex" if is_complex else "real")
        interaction = fh.Interaction(sector, two_body=mulliken(v), order="mulliken")
    spins = 2 if domain == "spin-resolved" else None
    h = 2.0 * random_one_body(rng, d, is_complex=is_complex, spins=spins)
    states = fh.solve(fh.Hamiltonian(h, interaction), weights)
    gamma = states.density_matrix
    if domain == "spin-summed":
        gamma = gamma.sum(axis=0)
    traces = np.trace(gamma, axis1=-2, axis2=-1).real
    centre = traces[..., np.newaxis, np.newaxis] / d * np.eye(d)
    return Case(fh.UniversalFunctional(interaction, weights, domain), h, states, gamma, centre)


def random_sector(rng: np.random.Generator, kind: str) -> Any:
    if kind == "fermions":
        d = int(rng.integers(4, 6))
        return fh.Fermions(d, int(rng.integers(2, d - 1)))
    if kind == "bosons":
        return fh.Bosons(int(rng.integers(2, 4)), int(rng.integers(2, 5)))
    return fh.SpinHalfFermions(3, (int(rng.integers(1, 3)), int(rng.integers(1, 3))))


def one_body_energy(h: Array, gamma: Array) -> float:
    return float(np.sum(h * np.swapaxes(gamma, -1, -2)).real)


@pytest.mark.parametrize("seed", SEEDS)
def test_legendre_round_trip(seed: int) -> None:
    case = random_case(seed)
    exact = case.states.energy - one_body_energy(case.one_body, case.gamma)
    result = case.functional.evaluate(case.gamma)
    assert result.value == pytest.approx(exact, abs=1e-8)
    assert result.lower - 1e-12 <= exact <= result.upper + 1e-12
    assert result.gap < 1e-6
    assert result.ensemble is not None
    assert result.ensemble.verify(case.gamma)


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("share", [0.3, 0.9])
def test_interval_closes_where_levels_become_degenerate(seed: int, share: float) -> None:
    # towards the centre of the domain the maximiser mostly has degenerate levels
    case = random_case(seed)
    gamma = (1.0 - share) * case.gamma + share * case.centre
    result = case.functional.evaluate(gamma, tol=1e-9)
    assert 0.0 <= result.gap <= 1e-9
    assert result.ensemble is not None
    assert result.ensemble.verify(gamma)
    assert result.states is not None
    assert result.potential is not None
    dual = result.states.energy - one_body_energy(result.potential, gamma)
    assert dual == pytest.approx(result.value, abs=1e-9)


def test_any_choice_inside_a_cut_multiplet() -> None:
    # the degenerate pair of a ring of three; every mixture of its states has the same F
    sector = fh.SpinHalfFermions(3, (1, 1))
    interaction = fh.Interaction(sector, density_density=2.0 * np.eye(3))
    h = fh.lattices.ring(3)
    weights = np.array([0.6, 0.4])
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", fh.CutMultipletWarning)
        states = fh.solve(fh.Hamiltonian(h, interaction), levels=6)
    start, stop = next((a, b) for a, b in states.multiplets if a < 2 < b)
    functional = fh.UniversalFunctional(interaction, weights, "spin-resolved")
    rng = np.random.default_rng(1)
    for _ in range(3):
        chosen = states.vectors.astype(complex)
        chosen[:, start:stop] = chosen[:, start:stop] @ random_unitary(rng, stop - start)
        reference = spin_half(3, (1, 1))
        gamma = sum(w * reference.density_matrix(chosen[:, k]) for k, w in enumerate(weights))
        exact = weights @ states.energies[:2] - one_body_energy(h, gamma)
        assert functional.evaluate(gamma).value == pytest.approx(exact, abs=1e-8)


@pytest.mark.parametrize("seed", range(8))
def test_convex_in_gamma(seed: int) -> None:
    case = random_case(seed)
    rng = np.random.default_rng(seed)
    h = case.one_body + random_one_body(rng, case.centre.shape[-1])
    other = fh.solve(fh.Hamiltonian(h, case.functional.interaction), case.functional.weights)
    second = other.density_matrix
    if case.functional.domain == "spin-summed":
        second = second.sum(axis=0)
    ends = [0.9 * g + 0.1 * case.centre for g in (case.gamma, second)]
    values = [case.functional.evaluate(g) for g in ends]
    for t in (0.25, 0.5):
        between = case.functional.evaluate((1.0 - t) * ends[0] + t * ends[1])
        assert between.lower <= (1.0 - t) * values[0].upper + t * values[1].upper + 1e-12


@pytest.mark.parametrize("seed", range(4))
def test_invariant_under_unitaries(seed: int) -> None:
    rng = np.random.default_rng(seed)
    d = 4
    v = random_two_body(rng, d, "complex")
    unitary = random_unitary(rng, d)
    sector, weights = fh.Fermions(d, 2), [0.5, 0.3, 0.2]
    gamma = np.diag([0.6, 0.55, 0.45, 0.4])
    values = []
    for tensor, matrix in (
        (v, gamma),
        (rotate_two_body(v, unitary), rotate_one_body(gamma, unitary)),
    ):
        interaction = fh.Interaction(sector, two_body=tensor, order="dirac")
        values.append(fh.UniversalFunctional(interaction, weights).evaluate(matrix).value)
    assert values[0] == pytest.approx(values[1], abs=1e-9)


@pytest.mark.parametrize("seed", range(8))
def test_majorised_weights_raise_the_functional(seed: int) -> None:
    case = random_case(seed)
    gamma = 0.1 * case.gamma + 0.9 * case.centre
    weights = case.functional.weights
    flatter = 0.7 * weights + 0.3 / len(weights)
    domain: Any = case.functional.domain
    flat = fh.UniversalFunctional(
        case.functional.interaction, flatter, None if domain == "spinless" else domain
    )
    assert flat.evaluate(gamma).upper >= case.functional.evaluate(gamma).lower - 1e-12
