"""What the exclusion polytope answers: nearest points and stretches."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any, NamedTuple, TypeAlias

import numpy as np
import numpy.typing as npt

from fockhull import _core
from fockhull._frozen import Frozen, FrozenArrays, read_only
from fockhull._html import table
from fockhull._projected import Projected
from fockhull.configuration_ensemble import ConfigurationEnsemble
from fockhull.errors import ArgumentError, ArgumentIndexError, ArgumentTypeError
from fockhull.separator import VERIFY_TOLERANCE, Separator

if TYPE_CHECKING:
    from fockhull.polytope import ExclusionPolytope

__all__ = ["Projection", "Stretch", "Support"]

RealArray: TypeAlias = npt.NDArray[np.float64]
ScalarArray: TypeAlias = npt.NDArray[np.float64 | np.complex128]


class Support(NamedTuple):
    """Value of the support function and where it is attained."""

    value: Any
    """f_w(h) = min of <h, n> over the polytope; a float, or an array over the batch."""
    occupations: RealArray
    """Occupations that attain it, in the shape of h."""


@dataclass(frozen=True, eq=False)
class Stretch(FrozenArrays):
    """How far occupations can be scaled about the centre before they leave the polytope.

    Compares and converts like its `value`; the occupations are allowed exactly when it is
    at least 1.
    """

    value: Any
    """The factor (an upper bound, proved by `normal`).

    Infinite at the centre, zero elsewhere if the polytope is a single point. A float, or an array
    over the batch.
    """
    lower: Any
    """Certified lower bound of the factor."""
    boundary: RealArray
    """Occupations where the boundary is met, in the order of the natural orbitals."""
    normal: RealArray
    """Normal h of the face met there: all n of the polytope have <h, n> >= <h, boundary>."""
    _name_constraint: Callable[[], Any] = field(repr=False)

    @cached_property
    def constraint(self) -> Any:
        """The inequality met there, in words.

        None at the centre and where listing the inequalities would take long; then
        `ExclusionPolytope.inequalities` lists them on request.
        """
        return self._name_constraint()

    def __float__(self) -> float:
        return float(self.value)

    def __lt__(self, other: Any) -> Any:
        return self.value < other

    def __le__(self, other: Any) -> Any:
        return self.value <= other

    def __gt__(self, other: Any) -> Any:
        return self.value > other

    def __ge__(self, other: Any) -> Any:
        return self.value >= other

    def __repr__(self) -> str:
        if np.ndim(self.value):
            return f"Stretch({np.size(self.value)} points, {np.min(self.value):.6g} at least)"
        return f"Stretch({self.value:.10g})"

    def _repr_html_(self) -> str:
        if np.ndim(self.value):
            return table("Stretch", [("points", np.size(self.value)), ("factors", self.value)])
        limit = self.constraint or "a face not known in words"
        return table("Stretch", [("factor", self.value), ("limited by", limit)])


class Projection(Frozen):
    """The nearest allowed occupations (or density matrix), with their certificate.

    Everything has the leading batch axes of what was projected.
    """

    def __init__(
        self,
        polytope: ExclusionPolytope,
        core: _core.Projections | Projected,
        lead: tuple[int, ...],
        orbitals: ScalarArray | None,
        member: int = 0,
    ) -> None:
        self._polytope = polytope
        self._core = core
        self._lead = lead
        self._orbitals = orbitals
        self._member = member

    def __reduce__(self) -> tuple[Any, ...]:
        members = range(len(self._core.converged)) if self._lead else [self._member]
        core = Projected.copy(self._core, members)
        return type(self), (self._polytope, core, self._lead, self._orbitals)

    def _as_start(self) -> tuple[_core.Projections, int | None] | tuple[()]:
        """Return the core's result and the member to start from; nothing if it was pickled."""
        if isinstance(self._core, Projected):
            return ()
        return self._core, None if self._lead else self._member

    def _shaped(self, array: RealArray) -> RealArray:
        rows = array if self._lead else array[self._member]
        return read_only(rows.reshape(self._lead + self._polytope.shape))

    def _numbers(self, array: RealArray) -> Any:
        return array.reshape(self._lead) if self._lead else float(array[self._member])

    @cached_property
    def occupations(self) -> RealArray:
        """The nearest occupations.

        In the caller's order of modes, or decreasing (those of the natural orbitals) if a
        density matrix was projected.
        """
        return self._shaped(self._core.occupations)

    @cached_property
    def normal(self) -> RealArray:
        """Nearest occupations minus those given, h; outside it separates: f_w(h) > <h, n>."""
        return self._shaped(self._core.normals)

    @property
    def distance(self) -> Any:
        """Distance ``|x - y|`` (for density matrices in the Frobenius norm), an upper bound."""
        return self._numbers(self._core.distance)

    @property
    def distance_lower(self) -> Any:
        """Certified lower bound of the distance."""
        return self._numbers(self._core.distance_lower)

    @property
    def gap(self) -> Any:
        """Duality gap <h, x> - f_w(h); the exact projection is within sqrt(gap) of the result."""
        return self._numbers(self._core.gap)

    @cached_property
    def density_matrix(self) -> ScalarArray:
        """The nearest density matrix: same natural orbitals, nearest occupations.

        Raises
        ------
        ArgumentError
            If occupations were projected.
        """
        if self._orbitals is None:
            raise ArgumentError("density_matrix", "occupations only", "a projected density matrix")
        u = self._orbitals
        scaled = u * self.occupations[..., np.newaxis, :]
        return read_only(scaled @ u.conj().swapaxes(-1, -2))

    @property
    def ensemble(self) -> ConfigurationEnsemble:
        """An explicit ensemble with the nearest occupations.

        Raises
        ------
        ArgumentError
            For a batch: take a member first, ``projection[index].ensemble``.
        """
        if self._lead:
            given = f"a batch of shape {self._lead}"
            raise ArgumentError("ensemble", given, "a member of it: projection[index].ensemble")
        return self._ensemble

    @cached_property
    def _ensemble(self) -> ConfigurationEnsemble:
        polytope = self._polytope
        parts = self._core.ensemble(self._member)
        return ConfigurationEnsemble(polytope.sector, polytope.weights, polytope.domain, parts)

    @property
    def separator(self) -> Separator | None:
        """One-particle energies that prove the point outside; None where there is no proof.

        That is inside, and closer to the boundary than rounding errors let one tell.

        Raises
        ------
        ArgumentError
            For a batch: take a member first, ``projection[index].separator``.

        Examples
        --------
        >>> import fockhull as fh
        >>> P = fh.ExclusionPolytope(fh.Fermions(4, 2), weights=[0.6, 0.4])
        >>> proof = P.project(occupations=[1, 0.9, 0.1, 0]).separator
        >>> proof.bound > proof.value, proof.verify()
        (True, True)
        """
        if self._lead:
            given = f"a batch of shape {self._lead}"
            raise ArgumentError("separator", given, "a member of it: projection[index].separator")
        return self._separator

    @cached_property
    def _separator(self) -> Separator | None:
        polytope = self._polytope
        length = float(np.linalg.norm(self.normal))
        if length <= 0.0:
            return None
        h = np.array(self.normal) / length
        n = self.occupations - self.normal
        bound, value = float(polytope.support(h).value), float(np.sum(h * n))
        proof = Separator(
            polytope.sector,
            polytope.weights,
            polytope.domain,
            read_only(h),
            read_only(n),
            bound,
            value,
        )
        return proof if proof.excess > 2.0 * VERIFY_TOLERANCE * proof._scale else None

    def __len__(self) -> int:
        if not self._lead:
            raise ArgumentTypeError("projection", "a single point", "a batch")
        return self._lead[0]

    def __getitem__(self, index: int | tuple[int, ...]) -> Projection:
        """Return one member of a batch; a tuple for a batch of several axes."""
        indices = index if isinstance(index, tuple) else (index,)
        try:
            member = int(np.ravel_multi_index(indices, self._lead, mode="raise"))
        except (ValueError, TypeError) as error:
            expected = f"an index into a batch of shape {self._lead}"
            refusal = ArgumentTypeError if isinstance(error, TypeError) else ArgumentIndexError
            raise refusal("index", repr(index), expected) from None
        orbitals = None if self._orbitals is None else self._orbitals[indices]
        return Projection(self._polytope, self._core, (), orbitals, member)

    def __repr__(self) -> str:
        if self._lead:
            return f"Projection(batch of shape {self._lead}, {self._polytope!r})"
        return f"Projection(distance {self.distance:.6g}, gap {self.gap:.1e}, {self._polytope!r})"

    def _repr_html_(self) -> str:
        rows: list[tuple[str, object]] = [
            ("onto", self._polytope),
            ("distance", self.distance),
            ("gap", self.gap),
            ("nearest occupations", self.occupations.round(6)),
        ]
        return table("Projection", rows)
