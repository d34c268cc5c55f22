"""From a checked gamma to its value: which methods are tried, in which order."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from fockhull.errors import ConvergenceError
from fockhull.functionals._bundle import search
from fockhull.functionals._evaluation import NEAR_BOUNDARY, Evaluation
from fockhull.functionals._problem import Problem
from fockhull.functionals._value import FunctionalValue
from fockhull.projection import Projection, Stretch

__all__ = ["evaluated"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

DOMAIN_TOLERANCE = 1e-9
"""Distance to the domain that still counts as on its boundary."""
BOUNDARY_TOLERANCE = 1e-12
"""Stretch beyond 1 that still counts as the boundary."""
DENSE_DIMENSION = 64
"""Up to this many configurations the whole sector is diagonalised at once."""


def evaluated(
    problem: Problem, gamma: ScalarArray, tol: float, start: RealArray | None
) -> FunctionalValue:
    """Find F for gamma of shape (components, d, d); see `UniversalFunctional.evaluate`."""
    shaped = problem.shaped(gamma)
    stretch = problem.polytope.stretch(shaped)
    on_boundary = stretch.value < 1.0 + BOUNDARY_TOLERANCE
    if on_boundary:
        projection = problem.polytope.project(shaped)
        if projection.distance_lower > DOMAIN_TOLERANCE:
            return _outside(shaped, tol, stretch, projection)
        if stretch.value < 1.0 - BOUNDARY_TOLERANCE:
            # outside by rounding: the nearest allowed density matrix stands for it
            shaped = projection.density_matrix
            gamma = shaped.reshape(gamma.shape)
            stretch = problem.polytope.stretch(shaped)
    blank = FunctionalValue(shaped, "boundary" if on_boundary else "inside", stretch, tol)
    if problem.scale == 0.0:
        return _constant(problem, blank)
    return _described(_narrowed(Evaluation(problem, gamma, blank), start))


def _narrowed(evaluation: Evaluation, start: RealArray | None) -> FunctionalValue:
    """Try one method after the other until the interval is as narrow as asked."""
    problem, is_small = evaluation.problem, evaluation.problem.is_small
    if evaluation.best.place == "boundary" and is_small:
        evaluation.approach_face()
    elif not is_small or problem.sector.dimension > DENSE_DIMENSION:
        search(evaluation, start)
    if is_small and not evaluation.best.converged:
        evaluation.cool(np.zeros(problem.space.size) if start is None else start)
    reach = evaluation.best.stretch.value - 1.0
    if is_small and BOUNDARY_TOLERANCE <= reach < NEAR_BOUNDARY:
        for method in (evaluation.descend, evaluation.approach_face):
            if not evaluation.best.converged:
                method()
    return evaluation.best


def _described(best: FunctionalValue) -> FunctionalValue:
    """Say in words what was reached."""
    if not np.isfinite(best.upper):
        advice = (
            "; it lies on the boundary of a sector too large for dense matrices: evaluate just "
            "inside, as scan_towards_boundary does"
            if best.place == "boundary"
            else ""
        )
        raise ConvergenceError(
            "no ensemble with this density matrix was found, so there is no upper bound (the "
            f"exception's `result` has the lower one){advice}",
            best,
        )
    wide = "" if best.converged else f", wider than the {best.tolerance:.1e} asked"
    met = best.stretch.constraint
    where = f"; on the boundary ({met})" if best.place == "boundary" and met else ""
    return replace(best, status=f"certified to {best.gap:.1e}{wide}{where}")


def _outside(
    gamma: ScalarArray, tol: float, stretch: Stretch, projection: Projection
) -> FunctionalValue:
    status = f"outside the domain, at a distance of at least {projection.distance_lower:.3g}"
    return FunctionalValue(
        gamma,
        "outside",
        stretch,
        tol,
        lower=np.inf,
        upper=np.inf,
        value=np.inf,
        status=status,
        projection=projection,
    )


def _constant(problem: Problem, blank: FunctionalValue) -> FunctionalValue:
    """Without interaction (or with one particle) every ensemble has the same Tr(Gamma W)."""
    potential = np.zeros_like(blank.density_matrix)
    return replace(
        blank,
        lower=problem.lowest,
        upper=problem.highest,
        value=0.5 * (problem.lowest + problem.highest),
        status="the same for all ensembles of the domain",
        potential=potential,
        potential_null_space=problem.shaped(problem.space.basis),
        states=problem.solved(potential),
    )
