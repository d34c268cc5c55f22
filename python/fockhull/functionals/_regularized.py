r"""The Moreau-Yosida regularisation of the universal functional.

.. math:: F_\epsilon(\gamma) = \min_{\gamma'} [F(\gamma') + |\gamma - \gamma'|^2 / 2\epsilon]
          = \max_h [E_w(h) - \mathrm{Tr}(h\gamma) - \epsilon |h|^2 / 2]

It is differentiable, finite for every gamma (also outside the domain), a lower bound of F, and
tends to F as the strength goes to zero. (Kvaal, Ekstrom, Teale and Helgaker, J. Chem. Phys. 140,
18A518 (2014), for density functionals.)
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from fockhull._frozen import FrozenArrays, read_only
from fockhull._html import table
from fockhull.functionals._certificate import ExplicitEnsemble, from_parts, interaction_energy
from fockhull.functionals._cooling import candidates
from fockhull.functionals._multiplets import PrimalDualPoint
from fockhull.functionals._problem import Problem
from fockhull.functionals._smoothed import SpectralModel

__all__ = ["RegularizedValue", "regularize"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

_ROUNDING = 4.0 * float(np.finfo(float).eps)


@dataclass(frozen=True, eq=False)
class RegularizedValue(FrozenArrays):
    """A certified interval of the regularised functional."""

    strength: float
    """The parameter epsilon."""
    lower: float
    """From the dual, less the error bounds of the energies."""
    upper: float
    """From `ensemble`: ``Tr(Gamma W) + |gamma - gamma'|^2 / (2 epsilon)``."""
    potential: ScalarArray
    """The maximising h, unique up to the constant; minus h is the gradient."""
    density_matrix: ScalarArray
    """The proximal point gamma', where F is evaluated."""
    ensemble: ExplicitEnsemble
    """An ensemble that reproduces gamma' exactly."""

    def __post_init__(self) -> None:
        read_only(self.potential)
        read_only(self.density_matrix)

    @property
    def value(self) -> float:
        """Best estimate."""
        return self.upper

    @property
    def gap(self) -> float:
        """Width of the interval."""
        return self.upper - self.lower

    def __float__(self) -> float:
        return self.value

    def __repr__(self) -> str:
        return (
            f"RegularizedValue({self.value:.12g} in [{self.lower:.12g}, {self.upper:.12g}], "
            f"strength {self.strength:g})"
        )

    def _repr_html_(self) -> str:
        rows = [
            ("strength", f"{self.strength:g}"),
            ("value", f"{self.value:.12g}"),
            ("interval", f"[{self.lower:.12g}, {self.upper:.12g}], width {self.gap:.1e}"),
        ]
        return table("Regularised functional", rows)


def regularize(
    problem: Problem, gamma: ScalarArray, strength: float, tol: float, start: RealArray
) -> RegularizedValue:
    """Maximise the regularised dual for gamma of shape (components, d, d)."""
    target = problem.space.coordinates(gamma)
    model = SpectralModel((problem.whole,), target, np.zeros(problem.space.size), strength)
    best: RegularizedValue | None = None
    promise = np.inf
    for point in candidates(model, start, problem.scale):
        missing = float(point.mismatch @ point.mismatch)
        expected = point.spread + missing / (2.0 * strength)
        if expected < promise or best is None:
            promise = expected
            best = _certified(problem, gamma, strength, point)
        if best.gap <= tol:
            break
    assert best is not None
    return best


def _certified(
    problem: Problem, gamma: ScalarArray, strength: float, point: PrimalDualPoint
) -> RegularizedValue:
    variables = None if problem.is_unrestricted else problem.space
    ensemble = from_parts(problem.sector, problem.weights, point.parts, variables)
    inner = interaction_energy(ensemble, problem.bare)
    reproduced = ensemble.components(problem.spin_summed)
    distance = problem.space.coordinates(np.asarray(gamma - reproduced))
    upper = inner + float(distance @ distance) / (2.0 * strength)
    potential = problem.potential(point.coordinates)
    states = problem.solved(potential)
    energy = states.energy - states.energy_error_bound
    penalty = 0.5 * strength * float(point.coordinates @ point.coordinates)
    pairing = float(point.coordinates @ problem.space.coordinates(gamma))
    rounding = _ROUNDING * (abs(energy) + abs(inner) + abs(pairing) + penalty)
    lower = energy - pairing - penalty - rounding
    return RegularizedValue(
        strength,
        lower,
        max(upper + rounding, lower),
        potential,
        problem.shaped(reproduced),
        ensemble,
    )
