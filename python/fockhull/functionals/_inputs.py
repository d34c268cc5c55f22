"""Checks of what the functional is given."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull.ensemble import Ensemble
from fockhull.errors import ArgumentError
from fockhull.functionals._potentials import PotentialSpace
from fockhull.functionals._value import FunctionalValue
from fockhull.polytope import ExclusionPolytope

__all__ = ["density_matrix", "hermitian", "one_body", "states_of", "variables"]

ScalarArray = npt.NDArray[np.float64 | np.complex128]

_TRACE_TOLERANCE = 1e-8


def density_matrix(polytope: ExclusionPolytope, value: npt.ArrayLike) -> ScalarArray:
    """Return gamma as (components, d, d), Hermitian and with the right traces."""
    gamma = arguments.scalars("density_matrix", value)
    sector: Any = polytope.sector
    d = sector.modes
    shape = (*polytope.shape, d)
    if gamma.shape != shape:
        expected = f"shape {shape} in the {polytope.domain} domain"
        raise ArgumentError("density_matrix", f"shape {gamma.shape}", expected)
    gamma = arguments.hermitian_stack("density_matrix", gamma).reshape(-1, d, d)
    particles = np.atleast_1d(sector.particles).astype(float)
    if len(gamma) < len(particles):
        particles = particles.sum(keepdims=True)
    traces = np.trace(gamma, axis1=1, axis2=2).real
    if np.abs(traces - particles).max() > _TRACE_TOLERANCE:
        expected = f"{particles.tolist()}, the particles"
        raise ArgumentError("density_matrix", f"trace {traces.tolist()}", expected)
    excess = ((traces - particles) / d)[:, np.newaxis, np.newaxis]
    return np.asarray(gamma - excess * np.eye(d))


def hermitian(polytope: ExclusionPolytope, argument: str, value: npt.ArrayLike) -> ScalarArray:
    """Return a Hermitian one-body operator in the shape of gamma."""
    shape = (*polytope.shape, polytope.sector.modes)
    return arguments.hermitian_stack(argument, arguments.tensor(argument, value, shape))


def one_body(polytope: ExclusionPolytope, value: Any) -> ScalarArray | None:
    """Return the one-body operator that counts as part of the interaction, if there is one."""
    if value is None:
        return None
    d, spins = polytope.sector.modes, polytope.sector.spins
    shapes = [(d, d)] + ([(2, d, d)] if spins == 2 else [])
    return arguments.hermitian_stack("one_body", arguments.tensor("one_body", value, *shapes))


def variables(polytope: ExclusionPolytope, value: Any) -> PotentialSpace | None:
    """Return the space of potentials asked for; None for all."""
    if value is None:
        return None
    components = 2 if polytope.domain == "spin-resolved" else 1
    d = polytope.sector.modes
    if isinstance(value, str):
        if value != "diagonal":
            expected = '"diagonal", or Hermitian operators'
            raise ArgumentError("variables", repr(value), expected)
        return PotentialSpace.diagonal(components, d)
    operators = arguments.scalars("variables", value)
    shape = (*polytope.shape, d)
    if operators.shape[1:] != shape:
        expected = f"shape (n, {', '.join(map(str, shape))}) in the {polytope.domain} domain"
        raise ArgumentError("variables", f"shape {operators.shape}", expected)
    operators = arguments.hermitian_stack("variables", operators)
    space = PotentialSpace.spanned_by(operators.reshape(-1, components, d, d))
    if not space.is_algebra:
        expected = (
            "operators whose products x y + y x they span together with the constants; "
            "otherwise the domain is not the exclusion polytope"
        )
        raise ArgumentError("variables", "operators that are not closed", expected)
    return space


def states_of(result: Any) -> Ensemble:
    """Return the states at the potential of a result."""
    if not isinstance(result, FunctionalValue) or result.states is None:
        expected = "a FunctionalValue inside the domain, which has states"
        raise ArgumentError("result", type(result).__name__, expected)
    return result.states
