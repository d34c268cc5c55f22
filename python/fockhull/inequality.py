"""The facets of the exclusion polytope as inequalities."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull import _core
from fockhull._frozen import FrozenArrays, read_only
from fockhull.errors import ArgumentError

__all__ = ["Inequality", "TightestInequality"]

RealArray: TypeAlias = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False, repr=False)
class Inequality(FrozenArrays):
    """A facet: <coefficients, n> <= bound for occupations n sorted decreasingly (per spin)."""

    coefficients: npt.NDArray[np.int64]
    """Integers without common divisor, in the shape of occupations."""
    bound: float
    """The bound as a number."""
    bound_constant: int
    """The bound as a linear form: this constant ..."""
    bound_weights: tuple[int, ...]
    """... plus these multiples of w_1, ..., w_r."""
    first_level: int
    """Smallest r at which the inequality appears for strictly decreasing weights."""
    is_positivity: bool
    """Whether it only says that the smallest occupation is not negative."""
    latex: str
    """For LaTeX's mathematics mode."""
    _sentence: str = field(repr=False)
    _normal_length: float = field(repr=False)

    @classmethod
    def _wrap(cls, core: _core.Inequality, shape: tuple[int, ...]) -> Inequality:
        return cls(
            read_only(core.coefficients.reshape(shape)),
            core.bound,
            core.bound_constant,
            tuple(core.bound_weights),
            core.first_level,
            core.is_positivity,
            core.latex,
            core.sentence,
            core.normal_length,
        )

    def slack(self, occupations: npt.ArrayLike) -> Any:
        """Bound minus left-hand side; negative where the inequality is violated.

        Parameters
        ----------
        occupations : array_like of float
            In any order, the shape of `coefficients` last; leading axes are a batch.

        Returns
        -------
        float or numpy.ndarray
        """
        values = arguments.reals("occupations", occupations)
        shape = self.coefficients.shape
        if values.shape[max(values.ndim - len(shape), 0) :] != shape:
            expected = f"shape (..., {', '.join(map(str, shape))})"
            raise ArgumentError("occupations", f"shape {values.shape}", expected)
        decreasing = -np.sort(-values, axis=-1)
        axes = tuple(range(-len(shape), 0))
        slack = self.bound - (decreasing * self.coefficients).sum(axis=axes)
        return slack if slack.ndim else float(slack)

    def distance(self, occupations: npt.ArrayLike) -> Any:
        """Slack over the length of the normal at fixed particle numbers (signed).

        The slack itself in domains of one point, where particle numbers fix the left-hand side.
        """
        return self.slack(occupations) / (self._normal_length or 1.0)

    def __str__(self) -> str:
        return self._sentence

    def __repr__(self) -> str:
        return f"Inequality({self._sentence})"

    def _repr_latex_(self) -> str:
        return f"${self.latex}$"


class TightestInequality(NamedTuple):
    """The inequality that limits occupations most."""

    inequality: Inequality
    """The inequality of least distance; of several the first in the list."""
    slack: float
    """Its slack, negative if it is violated."""
