"""Closed forms of the universal functional, each beside its source."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

import fockhull as fh
from reference.closed_forms import (
    boson_dimer_coherence,
    boson_dimer_energies,
    boson_dimer_functional,
    hubbard_dimer_functional,
    two_site_functional,
)

Array = npt.NDArray[Any]

U = 4.0
SMOOTH, DEGENERATE, BOUNDARY = 1e-10, 1e-8, 1e-6


def dimer(domain: Any = "spin-summed") -> fh.UniversalFunctional:
    sector = fh.SpinHalfFermions(2, (1, 1))
    interaction = fh.Interaction(sector, density_density=U * np.eye(2))
    return fh.UniversalFunctional(interaction, [1.0], domain)


def dimer_gamma(coherence: float, imbalance: float) -> Array:
    return np.array([[1.0 + imbalance, coherence], [coherence, 1.0 - imbalance]])


# arXiv:1506.02230 for the pure functional, whose convex envelope this is; recalled and rederived
@pytest.mark.parametrize(
    ("coherence", "imbalance", "value"),
    [
        (0.5, 0.0, 0.2679491924),
        (0.8, 0.3, 1.3354691642),
        (0.3, 0.5, 2.0),  # degenerate: the pure formula gives 3.0404920845
        (0.7, 0.7, 2.8585786438),
    ],
)
def test_hubbard_dimer(coherence: float, imbalance: float, value: float) -> None:
    gamma = dimer_gamma(coherence, imbalance)
    result = dimer().evaluate(gamma, tol=SMOOTH)
    closed = hubbard_dimer_functional(U, coherence, imbalance)
    assert closed == pytest.approx(value, abs=1e-10)
    assert result.value == pytest.approx(closed, abs=SMOOTH)
    assert result.lower - 1e-14 <= closed <= result.upper + 1e-14
    assert result.converged
    assert result.ensemble is not None
    assert result.ensemble.verify(gamma)


# same source; A^2 + B^2 -> 1 is the boundary of the domain
@pytest.mark.parametrize("angle", [0.0, 0.3, 0.9])
@pytest.mark.parametrize("distance", [1e-3, 1e-5, 1e-7, 1e-9, 0.0])
def test_hubbard_dimer_near_the_boundary(distance: float, angle: float) -> None:
    coherence, imbalance = (1.0 - distance) * np.array([np.cos(angle), np.sin(angle)])
    result = dimer().evaluate(dimer_gamma(coherence, imbalance))
    closed = hubbard_dimer_functional(U, coherence, imbalance)
    assert result.value == pytest.approx(closed, abs=1e-9)
    assert result.lower - 1e-12 <= closed <= result.upper + 1e-12
    assert result.gap < BOUNDARY
    assert result.place == ("inside" if distance else "boundary")


# derived from the closed form at B = 0, F = U/2 (1 - sqrt(1 - A^2)): D = sqrt 2 (1 - A), so that
# dF/dD -> -(U/2) 2^(-3/4) D^(-1/2)
def test_force_at_the_boundary_of_the_dimer() -> None:
    scan = dimer().scan_towards_boundary(dimer_gamma(0.5, 0.0))
    assert scan.distances[0] == pytest.approx(np.sqrt(0.5), abs=1e-9)
    closed = [hubbard_dimer_functional(U, 1.0 - D / np.sqrt(2.0), 0.0) for D in scan.distances]
    np.testing.assert_allclose(scan.values, closed, atol=1e-9)
    fit = scan.fit()
    assert fit.exponent == pytest.approx(-0.5, abs=1e-3)
    assert fit.prefactor == pytest.approx(-0.5 * U * 2.0**-0.75, rel=5e-3)


# derived: three states, w = (.5, .3, .2)
@pytest.mark.parametrize("coherence", [0.2121320344, 0.1, 0.0, -0.25])
def test_boson_dimer(coherence: float) -> None:
    weights = np.array([0.5, 0.3, 0.2])
    interaction = fh.Interaction(fh.Bosons(2, 2), density_density=U * np.eye(2))
    result = fh.UniversalFunctional(interaction, weights).evaluate(
        [[1.0, coherence], [coherence, 1.0]]
    )
    closed = boson_dimer_functional(U, weights, coherence)
    assert result.value == pytest.approx(closed, abs=SMOOTH)
    assert result.lower - 1e-14 <= closed <= result.upper + 1e-14


# derived: E_w - Tr(h gamma) of the dimer at t = 1
def test_boson_dimer_from_its_energy() -> None:
    weights = np.array([0.5, 0.3, 0.2])
    coherence = boson_dimer_coherence(U, weights)
    energy = weights @ boson_dimer_energies(U)
    assert energy + 2.0 * coherence == pytest.approx(2.1757359313, abs=1e-10)
    assert boson_dimer_functional(U, weights, coherence) == pytest.approx(
        energy + 2.0 * coherence, abs=1e-12
    )


# derived: all spin sectors of two sites, spin-symmetric gamma
@pytest.mark.parametrize(
    ("weights", "coherence", "value"),
    [((0.4, 0.2, 0.2, 0.2), 0.24, 0.16), ((0.5, 0.3, 0.2), 0.3, 0.2)],
    ids=["smooth", "kink"],
)
def test_two_sites_with_all_spins(
    weights: tuple[float, ...], coherence: float, value: float
) -> None:
    # modes: first site up and down, second site up and down
    site = np.kron(np.eye(2), np.array([[0.0, U], [U, 0.0]]))
    interaction = fh.Interaction(fh.Fermions(4, 2), density_density=site)
    gamma = np.kron(np.array([[0.5, coherence / 2], [coherence / 2, 0.5]]), np.eye(2))
    result = fh.UniversalFunctional(interaction, weights).evaluate(gamma)
    assert two_site_functional(U, weights[0], coherence) == pytest.approx(value, abs=1e-12)
    assert result.value == pytest.approx(value, abs=SMOOTH)
    assert result.lower - 1e-14 <= value <= result.upper + 1e-14


def test_one_particle_has_no_functional() -> None:
    sector = fh.Fermions(3, 1)
    coupling = np.array([[0.0, 1.0, 2.0], [1.0, 0.0, 3.0], [2.0, 3.0, 0.0]])
    functional = fh.UniversalFunctional(
        fh.Interaction(sector, density_density=coupling), weights=[0.7, 0.3]
    )
    inside = functional.evaluate(np.diag([0.5, 0.3, 0.2]))
    assert inside.value == pytest.approx(0.0, abs=1e-14)
    outside = functional.evaluate(np.diag([0.8, 0.2, 0.0]))
    assert outside.value == np.inf
    assert outside.projection is not None
    assert outside.projection.distance_lower > 0.05


def test_without_interaction_the_functional_vanishes() -> None:
    sector = fh.SpinHalfFermions(3, (1, 2))
    functional = fh.UniversalFunctional(
        fh.Interaction(sector, density_density=np.zeros((3, 3))), [0.6, 0.4], "spin-resolved"
    )
    gamma = np.array([np.diag([0.5, 0.3, 0.2]), np.diag([0.7, 0.7, 0.6])])
    assert functional.evaluate(gamma).value == pytest.approx(0.0, abs=1e-14)


@pytest.mark.parametrize("interacting", [False, True])
def test_outside_it_is_infinite(interacting: bool) -> None:
    # Pauli's principle: an occupation above 1
    coupling = np.array([[0.0, 1.0], [1.0, 0.0]]) if interacting else np.zeros((2, 2))
    padded = np.zeros((4, 4))
    padded[:2, :2] = coupling
    functional = fh.UniversalFunctional(
        fh.Interaction(fh.Fermions(4, 2), density_density=padded), [1.0]
    )
    result = functional.evaluate(np.diag([1.2, 0.6, 0.2, 0.0]))
    assert result.value == result.lower == np.inf
    assert "outside" in result.status
