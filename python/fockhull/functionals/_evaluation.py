"""One evaluation of the functional: candidates are made, certified, and the best kept."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from fockhull.ensemble import Ensemble
from fockhull.functionals._certificate import completed, from_parts, interaction_energy
from fockhull.functionals._cooling import candidates
from fockhull.functionals._faces import face_blocks, face_normal
from fockhull.functionals._multiplets import PrimalDualPoint, moved, refined
from fockhull.functionals._problem import Problem
from fockhull.functionals._smoothed import SpectralModel
from fockhull.functionals._value import FunctionalValue

__all__ = ["Evaluation"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

NEAR_BOUNDARY = 1e-5
"""Stretch beyond 1 below which the face is looked at as well."""
ON_FACE = 1e-9
_ROUNDING = 4.0 * float(np.finfo(float).eps)
_ROUNDING_MISMATCH = 1e-12
_FIRST_PROMISE = 0.1
_OUTWARD = 10.0
_FIRST_REACH = 1e-4
_FARTHEST = 9.0
_LEVEL_ROUNDING = 2e-14
_SECTIONS = 20
_GOLDEN = 0.6180339887498949


@dataclass
class Evaluation:
    """The best interval so far for one density matrix; it only ever gets narrower."""

    problem: Problem
    gamma: ScalarArray
    """Shape (components, d, d)."""
    best: FunctionalValue

    @property
    def target(self) -> RealArray:
        """Coordinates of gamma."""
        return self.problem.space.coordinates(self.gamma)

    def cool(self, start: RealArray, share: float = 1.0) -> None:
        """Follow the smoothed maximiser on the whole sector, from a share of the usual start."""
        model = SpectralModel((self.problem.whole,), self.target)
        for point in candidates(model, start, self.problem.scale, share):
            if self.best.limit is not None:
                # the face has given the upper end: near it F rises like a square root, so that
                # an ensemble right to rounding only would not do
                if point.dual > self.best.lower + _FIRST_PROMISE * self.best.gap:
                    self.lower_from(point)
            elif self.promise(point) < _FIRST_PROMISE * self.best.gap:
                self.lower_from(point)
                self.upper_from(point)
                near = float(self.best.stretch) - 1.0 < NEAR_BOUNDARY
                if near and not self.best.converged:
                    self.upper_from_outward(point)
            if self.best.converged:
                return

    def approach_face(self) -> None:
        """Solve the problem on the face that gamma is on or near, then let h run away."""
        face = self._face()
        if face is None:
            return
        normal, model = face
        points = candidates(model, np.zeros(self.problem.space.size), self.problem.scale)
        limit = min(points, key=self._spread_on_face, default=None)
        if limit is None:
            return
        uncertainty = self._spread_on_face(limit)
        if self.best.place == "boundary":
            self.upper_from(limit, rounding=ON_FACE)
            if np.isfinite(self.best.upper):
                self.best = replace(self.best, limit=limit.dual, limit_uncertainty=uncertainty)
        start = self._let_run_away(limit.coordinates, normal)
        self.lower_at(start)
        if not self.best.converged:
            self.cool(start, share=1e-6)
        if self.best.limit is not None:
            inside = min(max(self.best.limit, self.best.lower), self.best.upper)
            self.best = replace(self.best, value=inside)

    def descend(self) -> None:
        """Follow the maximiser from well inside to a gamma just inside the boundary.

        Each time the distance falls tenfold, the part of h along the normal grows by sqrt(10).
        """
        face = self._face()
        reach = float(self.best.stretch) - 1.0
        if face is None or not 0.0 < reach < _FIRST_REACH:
            return
        along = face[0] / np.linalg.norm(face[0])
        steps = int(np.ceil(np.log10(_FIRST_REACH / reach)))
        reaches = np.geomspace(_FIRST_REACH, reach, steps + 1)
        accuracy = 1e-14 * self.problem.scale
        first = SpectralModel((self.problem.whole,), self._scaled_target(reaches[0]))
        point = min(
            candidates(first, np.zeros(self.problem.space.size), self.problem.scale),
            key=lambda p: abs(p.spread) + self.problem.scale * float(np.linalg.norm(p.mismatch)),
        )
        for before, after in pairwise(reaches):
            growth = np.sqrt(before / after) - 1.0
            step = growth * float(point.coordinates @ along) * along
            free = sum(len(part.constraints[1]) for part in point.parts)
            grown = moved(point, np.concatenate([step, np.zeros(free)]))
            target = self._scaled_target(after)
            point = refined(replace(grown, target=target), accuracy)
        self.lower_from(point)
        self.upper_from(point.made_admissible())
        if not self.best.converged:
            self.upper_from_outward(point)

    def _scaled_target(self, reach: float) -> RealArray:
        """Coordinates of gamma moved on its ray so that its stretch is 1 + reach."""
        return self.target * (float(self.best.stretch) / (1.0 + reach))

    def _let_run_away(self, coordinates: RealArray, normal: RealArray) -> RealArray:
        """Maximise the dual along the normal operator (it is concave) by golden sections."""
        whole = SpectralModel((self.problem.whole,), self.target)
        scale = self.problem.scale

        def at(exponent: float) -> RealArray:
            return np.asarray(coordinates + scale * 10.0**exponent * normal)

        def dual(exponent: float) -> float:
            h = at(exponent)
            # the rounding errors of the levels grow with h
            rounding = _LEVEL_ROUNDING * float(np.linalg.norm(h))
            return float(whole.at(h, scale).dual) - rounding

        low, high = 0.0, _FARTHEST
        left, right = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
        dual_left, dual_right = dual(left), dual(right)
        for _ in range(_SECTIONS):
            if dual_left > dual_right:
                high, right, dual_right = right, left, dual_left
                left = high - _GOLDEN * (high - low)
                dual_left = dual(left)
            else:
                low, left, dual_left = left, right, dual_right
                right = low + _GOLDEN * (high - low)
                dual_right = dual(right)
        return at(0.5 * (low + high))

    def _spread_on_face(self, point: PrimalDualPoint) -> float:
        coordinates = float(np.linalg.norm(point.coordinates))
        return abs(point.spread) + (self.problem.scale + coordinates) * float(
            np.linalg.norm(point.mismatch)
        )

    def _face(self) -> tuple[RealArray, SpectralModel] | None:
        """Coordinates of the face's normal operator, and the problem on the face."""
        numbers, orbitals = np.linalg.eigh(self.gamma)
        numbers, orbitals = numbers[:, ::-1], orbitals[:, :, ::-1]
        boundary = numbers
        if self.best.place == "inside":
            centre = numbers.mean(axis=1, keepdims=True)
            boundary = centre + float(self.best.stretch) * (numbers - centre)
        shape = self.problem.polytope.shape
        normal = face_normal(self.problem.polytope, boundary.reshape(shape), ON_FACE)
        if normal is None:
            return None
        adjoint = orbitals.conj().swapaxes(1, 2)
        operator = (orbitals * normal.reshape(boundary.shape)[:, np.newaxis]) @ adjoint
        blocks = face_blocks(self.problem.whole, self.problem.matrix(operator))
        on_face = (orbitals * boundary[:, np.newaxis]) @ adjoint
        model = SpectralModel(blocks, self.problem.space.coordinates(on_face))
        return self.problem.space.coordinates(operator), model

    def promise(self, point: PrimalDualPoint) -> float:
        """Guess the gap that certifying a candidate would give."""
        missing = float(np.linalg.norm(point.mismatch))
        upper = point.dual + point.spread + float(point.coordinates @ point.mismatch)
        reach = 1.0 if self.best.place == "boundary" else float(self.best.stretch) - 1.0
        cost = self.problem.scale * min(1.0, missing / reach) + missing
        return upper + cost - max(point.dual, self.best.lower)

    def lower_from(self, point: PrimalDualPoint) -> None:
        """Raise the lower end by a candidate."""
        before = self.best.lower
        self.lower_at(point.coordinates)
        if self.best.lower > before:
            free = self._null_space(point)
            self.best = replace(self.best, potential_null_space=free)

    def lower_at(self, coordinates: RealArray, start: Ensemble | None = None) -> Ensemble:
        """Raise the lower end by a potential: solve, and subtract the error bounds."""
        potential = self.problem.space.potential(coordinates)
        h = self.problem.shaped(potential)
        states = self.problem.solved(h, start or self.best.states)
        terms = (potential * self.gamma.swapaxes(1, 2)).real
        dual = states.energy - float(terms.sum())
        rounding = _ROUNDING * (abs(states.energy) + float(np.abs(terms).sum()))
        lower = dual - states.energy_error_bound - rounding
        if lower > self.best.lower:
            # on the boundary gamma is known to rounding only, which may let the ends cross
            lower, upper = sorted((lower, self.best.upper))
            self.best = replace(
                self.best,
                lower=lower,
                upper=upper,
                value=min(max(dual, lower), upper),
                potential=h,
                states=states,
                potential_null_space=None,
            )
        return states

    def upper_from(self, point: PrimalDualPoint, rounding: float = _ROUNDING_MISMATCH) -> None:
        """Lower the upper end by a candidate's ensemble, completed to reproduce gamma.

        On the boundary it must do so as it is, to within `rounding`.
        """
        problem = self.problem
        variables = None if problem.is_unrestricted else problem.space
        ensemble = from_parts(problem.sector, problem.weights, point.parts, variables)
        inner = interaction_energy(ensemble, problem.bare)
        slack = _ROUNDING * (abs(inner) + problem.scale)
        whole = completed(
            ensemble,
            self.gamma,
            problem.space,
            problem.polytope,
            rounding=rounding if self.best.place == "boundary" else None,
        )
        if whole is None:
            return
        share = whole.remainder_share
        cost = share * (problem.highest - inner) if share else 0.0
        upper = inner + cost + slack
        if upper < self.best.upper:
            lower, upper = sorted((self.best.lower, upper))
            value = min(max(self.best.value, lower), upper)
            self.best = replace(self.best, lower=lower, upper=upper, value=value, ensemble=whole)

    def upper_from_outward(self, point: PrimalDualPoint) -> None:
        """Lower the upper end near the boundary, where what is mixed in must point inwards.

        The ensemble is made to reproduce a gamma a little further out than its errors reach.
        """
        reach = float(self.best.stretch) - 1.0
        size = float(np.linalg.norm(self.target))
        outward = _OUTWARD * max(float(np.linalg.norm(point.mismatch)) / size, 1e-15)
        if self.best.place == "inside" and outward < 0.5 * reach:
            pushed = replace(point, target=self.target * (1.0 + outward))
            refinement = refined(pushed, 1e-14 * self.problem.scale)
            self.upper_from(refinement.made_admissible())

    def _null_space(self, point: PrimalDualPoint) -> ScalarArray:
        """Directions of h that change neither gamma nor the splitting of the cut multiplets."""
        size = self.problem.space.size
        total = np.sum([part.response for part in point.parts], axis=0)
        rows = [total.reshape(size, size)] + [part.constraints[0] for part in point.parts]
        _, singular, rotation = np.linalg.svd(np.concatenate(rows))
        padded = np.zeros(size)
        padded[: len(singular)] = singular
        free = rotation[padded <= 1e-9 * max(1.0, padded.max(initial=0.0))]
        return self.problem.shaped(np.tensordot(free, self.problem.space.basis, axes=1))
