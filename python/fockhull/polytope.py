"""The exclusion polytope: which occupation numbers the weights allow."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any, Literal, NamedTuple, TypeAlias, TypeVar, cast

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull import _core
from fockhull._html import table
from fockhull.errors import (
    ArgumentError,
    ArgumentIndexError,
    ArgumentTypeError,
    ComputationError,
    ConvergenceError,
)
from fockhull.sectors import Bosons, Sector, SpinHalfFermions

__all__ = [
    "ConfigurationEnsemble",
    "ExclusionPolytope",
    "Projection",
    "Stretch",
    "Support",
]

RealArray: TypeAlias = npt.NDArray[np.float64]
ScalarArray: TypeAlias = npt.NDArray[np.float64 | np.complex128]

_Numbers = TypeVar("_Numbers", bound=npt.NDArray[Any])

VERIFY_TOLERANCE = 1e-9


class Support(NamedTuple):
    """Value of the support function and where it is attained."""

    value: Any
    """f_w(h) = min of <h, n> over the polytope; a float, or an array over the batch."""
    occupations: RealArray
    """Occupations that attain it, in the shape of h."""


@dataclass(frozen=True, eq=False)
class Stretch:
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
    constraint: Any
    """The inequality met there, in words; None where the list of inequalities is not known."""

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
        met = f", limited by {self.constraint}" if self.constraint else ""
        return f"Stretch({self.value:.10g}{met})"


class ConfigurationEnsemble:
    """An explicit ensemble of configurations with given occupations.

    A mixture of line-ups: the r configurations of lowest energy for a `potential`, in order,
    the j-th with weight w_j; each line-up occurs with each of the `permutations` of modes.
    Every member of the mixture is a density operator with spectrum w.
    """

    def __init__(
        self,
        sector: Sector,
        weights: RealArray,
        domain: str,
        parts: tuple[RealArray, RealArray, RealArray, npt.NDArray[np.int64]],
    ) -> None:
        self._sector = sector
        self._weights = weights
        self._domain = domain
        self._line_up_probabilities, self._potentials = parts[:2]
        self._permutation_probabilities, self._permutations = parts[2:]

    @property
    def weights(self) -> RealArray:
        """The weights, shape (r,)."""
        return self._weights

    @property
    def probabilities(self) -> RealArray:
        """Share of each term of the mixture, sum 1."""
        return np.outer(self._line_up_probabilities, self._permutation_probabilities).reshape(-1)

    def __len__(self) -> int:
        return len(self._line_up_probabilities) * len(self._permutation_probabilities)

    def configurations(self, term: int) -> npt.NDArray[np.int64]:
        """Write out the configurations of a term in the order of the weights.

        Returns
        -------
        numpy.ndarray
            Integers, shape (r,) + ``sector.shape``; modes are those of the occupations given,
            for a density matrix its natural orbitals.

        Raises
        ------
        ArgumentIndexError
            If there is no such term.
        """
        if not 0 <= term < len(self):
            raise ArgumentIndexError("term", f"index {term}", f"0 to {len(self) - 1}")
        line_up, permutation = divmod(term, len(self._permutations))
        return self._permuted(self._line_up(line_up), self._permutations[permutation])

    def _line_up(self, index: int) -> npt.NDArray[np.int64]:
        potential = self._potentials[index]
        energies = potential if self._domain == "spin-resolved" else potential[0]
        return self._sector.lowest_configurations(energies, len(self._weights)).occupations

    def _permuted(self, values: _Numbers, order: npt.NDArray[np.int64]) -> _Numbers:
        if len(order) == 1:
            return cast(_Numbers, values[..., order[0]])
        rows = [values[..., s, order[s]] for s in range(len(order))]
        return cast(_Numbers, np.stack(rows, axis=-2))

    def occupations(self) -> RealArray:
        """Occupations of the mixture, recomputed from its configurations."""
        mixture = np.zeros(self._potentials.shape[1:])
        for probability, index in zip(
            self._line_up_probabilities, range(len(self._potentials)), strict=True
        ):
            mixture += probability * self._summed(self._weights @ self._flat(self._line_up(index)))
        shape = mixture if self._domain == "spin-resolved" else mixture[0]
        result = np.zeros_like(shape)
        for probability, order in zip(
            self._permutation_probabilities, self._permutations, strict=True
        ):
            result += probability * self._permuted(shape, order)
        return result

    def _flat(self, configurations: npt.NDArray[np.int64]) -> npt.NDArray[np.int64]:
        return configurations.reshape(len(configurations), -1)

    def _summed(self, occupations: RealArray) -> RealArray:
        """Bring weighted occupations into the components of the domain."""
        rows = occupations.reshape(-1, self._sector.modes)
        return rows if self._domain == "spin-resolved" else rows.sum(axis=0, keepdims=True)

    def verify(self, occupations: npt.ArrayLike, tol: float = VERIFY_TOLERANCE) -> bool:
        """Check independently of the solver that the ensemble is one and has the occupations.

        The probabilities must be a distribution, every line-up r different configurations of
        the sector, every permutation one of modes, and the occupations those given.
        """
        target = arguments.reals("occupations", occupations)
        shares = (self._line_up_probabilities, self._permutation_probabilities)
        if any((p < -tol).any() or abs(p.sum() - 1.0) > tol for p in shares):
            return False
        modes = np.arange(self._sector.modes)
        if not (np.sort(self._permutations, axis=-1) == modes).all():
            return False
        for index in range(len(self._potentials)):
            line_up = self._line_up(index)
            if not self._are_distinct_configurations(line_up):
                return False
        recomputed = self.occupations()
        return recomputed.shape == target.shape and bool(
            np.abs(recomputed - target).max(initial=0.0) <= tol
        )

    def _are_distinct_configurations(self, line_up: npt.NDArray[np.int64]) -> bool:
        sector = self._sector
        fermionic = not isinstance(sector, Bosons)
        particles = line_up.sum(axis=-1)
        return bool(
            (line_up >= 0).all()
            and (not fermionic or (line_up <= 1).all())
            and (particles == np.asarray(sector.particles)).all()
            and len(np.unique(self._flat(line_up), axis=0)) == len(self._weights)
        )

    def __repr__(self) -> str:
        return (
            f"ConfigurationEnsemble({len(self)} terms of {len(self._weights)} configurations, "
            f"{self._sector!r}, {self._domain})"
        )


class Projection:
    """The nearest allowed occupations (or density matrix), with their certificate.

    Everything has the leading batch axes of what was projected.
    """

    def __init__(
        self,
        polytope: ExclusionPolytope,
        core: _core.Projections,
        lead: tuple[int, ...],
        orbitals: ScalarArray | None,
    ) -> None:
        self._polytope = polytope
        self._core = core
        self._lead = lead
        self._orbitals = orbitals

    def _shaped(self, array: RealArray) -> RealArray:
        return array.reshape(self._lead + self._polytope.shape)

    def _numbers(self, array: RealArray) -> Any:
        return array.reshape(self._lead) if self._lead else float(array[0])

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
        """Distance |x - y| (for density matrices in the Frobenius norm), an upper bound."""
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
        return scaled @ u.conj().swapaxes(-1, -2)

    @cached_property
    def ensemble(self) -> Any:
        """An explicit ensemble with the nearest occupations; for a batch a list of them (flat)."""
        ensembles = [
            ConfigurationEnsemble(
                self._polytope.sector,
                self._polytope.weights,
                self._polytope.domain,
                self._core.ensemble(index),
            )
            for index in range(int(np.prod(self._lead)))
        ]
        return ensembles if self._lead else ensembles[0]

    def __repr__(self) -> str:
        if self._lead:
            return f"Projection(batch of shape {self._lead}, {self._polytope!r})"
        return f"Projection(distance {self.distance:.6g}, gap {self.gap:.1e}, {self._polytope!r})"


class ExclusionPolytope:
    r"""The set of natural occupation numbers that ensembles with given weights can have.

    .. math:: \Sigma(w) = \{ n : \langle h, n \rangle \ge f_w(h)\ \forall h \}, \qquad
              f_w(h) = \sum_j w_j\, \epsilon_{(j)}(h)

    with :math:`\epsilon_{(j)}(h)` the j-th lowest configuration energy for one-particle
    energies h. Convex, invariant under permutations of modes; for one weight and fermions it
    is Pauli's exclusion principle. A density matrix is allowed exactly when its occupations lie
    in it. Nothing is enumerated: the methods rest on the r lowest configurations, so r = 100000
    and 100 modes are fine. (Phys. Rev. Lett. 127, 023001 (2021); Ann. Henri Poincare 24, 2241
    (2023); bosons arXiv:2204.12715; fixed spin Quantum 9, 1921 (2025).)

    Parameters
    ----------
    sector : Sector
    weights : array_like of float, shape (r,)
        w_1 >= ... >= w_r > 0 with sum 1.
    domain : {"spin-resolved", "spin-summed"}
        Needed for spin-1/2, and only there: occupations of each spin, shape (2, d), in [0, 1];
        or of both together, shape (d,), in [0, 2].

    Raises
    ------
    ArgumentError
        For weights that are not decreasing, positive and of sum 1, more weights than
        configurations, or a domain that is missing or does not fit.

    Examples
    --------
    >>> import fockhull as fh
    >>> P = fh.ExclusionPolytope(fh.Fermions(6, 3), weights=[0.6, 0.4])
    >>> P.contains(occupations=[1, 1, 0.9, 0.1, 0, 0])
    False
    >>> P.project(occupations=[1, 1, 0.9, 0.1, 0, 0]).occupations.round(6)
    array([0.9, 0.9, 0.8, 0.2, 0.1, 0.1])
    """

    __slots__ = ("_core", "_domain", "_sector", "_weights")

    def __init__(
        self,
        sector: Sector,
        weights: npt.ArrayLike,
        domain: Literal["spin-resolved", "spin-summed"] | None = None,
    ) -> None:
        if not isinstance(sector, Sector):
            raise ArgumentTypeError("sector", type(sector).__name__, "a sector of fockhull")
        self._sector = sector
        self._domain = _checked_domain(sector, domain)
        values = arguments.reals("weights", weights)
        if values.ndim != 1:
            raise ArgumentError("weights", f"shape {values.shape}", "shape (r,)")
        self._weights = _core.checked_weights(np.ascontiguousarray(values))
        self._weights.flags.writeable = False
        self._core = _core.ExclusionPolytope(sector._core, self._weights, self._domain)

    @property
    def sector(self) -> Sector:
        """The sector."""
        return self._sector

    @property
    def weights(self) -> RealArray:
        """The weights in force, shape (r,)."""
        return self._weights

    @property
    def domain(self) -> str:
        """What the occupations speak about: "spinless", "spin-resolved" or "spin-summed"."""
        return self._domain

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of occupations: (d,), or (2, d) in the spin-resolved domain."""
        components, modes = self._core.shape
        return (modes,) if components == 1 else (components, modes)

    def support(self, h: npt.ArrayLike) -> Support:
        """Minimise <h, n> over the polytope.

        Parameters
        ----------
        h : array_like of float
            One-particle energies in the shape of occupations, leading axes being a batch.

        Returns
        -------
        Support
            The value f_w(h) and occupations that attain it.
        """
        values, lead = self._batch("h", arguments.reals("h", h))
        numbers, minimisers = self._core.support(values)
        value = numbers.reshape(lead) if lead else float(numbers[0])
        return Support(value, minimisers.reshape(lead + self.shape))

    def contains(
        self,
        density_matrix: npt.ArrayLike | None = None,
        tol: float = 1e-9,
        *,
        occupations: npt.ArrayLike | None = None,
    ) -> Any:
        """Tell whether a density matrix (or occupations) is allowed.

        Parameters
        ----------
        density_matrix : array_like, shape (..., d, d) or (..., 2, d, d)
            Hermitian; leading axes are a batch.
        tol : float
            The largest distance that still counts as inside.
        occupations : array_like of float, shape (..., d) or (..., 2, d)
            Instead of a density matrix, in any order (site occupations obey the same
            inequalities, by the theorem of Schur and Horn).

        Returns
        -------
        bool or numpy.ndarray of bool
        """
        values, lead, _ = self._points(density_matrix, occupations)
        inside = self._core.contains(values, arguments.positive("tol", tol))
        return inside.reshape(lead) if lead else bool(inside[0])

    def project(
        self,
        density_matrix: npt.ArrayLike | None = None,
        *,
        occupations: npt.ArrayLike | None = None,
    ) -> Projection:
        r"""Find the nearest allowed density matrix (Frobenius norm) or occupations.

        A density matrix keeps its natural orbitals. A sum of occupations that differs from the
        particle number is corrected as well: the excess is taken off uniformly over the modes,
        which contributes \\|sum - N\\| / sqrt(d) to the distance (in quadrature).

        Parameters
        ----------
        density_matrix, occupations
            As for `contains`.

        Returns
        -------
        Projection

        Raises
        ------
        ArgumentError
            For a wrong shape, NaN, infinity, or a matrix that is not Hermitian.
        ConvergenceError
            If the certified accuracy was not reached (`result` is the partial result).
        """
        values, lead, orbitals = self._points(density_matrix, occupations)
        core = self._core.project(values)
        result = Projection(self, core, lead, orbitals)
        if not all(core.converged):
            raise ConvergenceError(
                f"the projection reached a gap of {core.gap.max():.2e} only; the partial result "
                "is this exception's `result`",
                result,
            )
        return result

    def distance(
        self,
        density_matrix: npt.ArrayLike | None = None,
        *,
        occupations: npt.ArrayLike | None = None,
    ) -> Any:
        """Distance to the polytope, zero inside; parameters and errors as for `project`."""
        return self.project(density_matrix, occupations=occupations).distance

    def stretch(
        self,
        density_matrix: npt.ArrayLike | None = None,
        *,
        occupations: npt.ArrayLike | None = None,
    ) -> Stretch:
        """How far the occupations can be scaled about the centre N/d before they leave.

        Parameters and errors as for `contains`; each component must sum to its particle number.

        Returns
        -------
        Stretch
            The factor (allowed exactly when it is at least 1) with the face met, in words
            where the inequalities are known.
        """
        values, lead, _ = self._points(density_matrix, occupations)
        factor, lower, boundary, normal, words = self._core.stretch(values)
        shape = lead + self.shape
        if lead:
            constraint: Any = np.array(words, dtype=object).reshape(lead)
            return Stretch(
                factor.reshape(lead),
                lower.reshape(lead),
                boundary.reshape(shape),
                normal.reshape(shape),
                constraint,
            )
        return Stretch(
            float(factor[0]),
            float(lower[0]),
            boundary.reshape(shape),
            normal.reshape(shape),
            words[0],
        )

    def _points(
        self, density_matrix: npt.ArrayLike | None, occupations: npt.ArrayLike | None
    ) -> tuple[RealArray, tuple[int, ...], ScalarArray | None]:
        """Return occupations as (batch, components, modes), the batch shape, natural orbitals."""
        if (density_matrix is None) == (occupations is None):
            given = "neither" if occupations is None else "both"
            expected = "exactly one of a density matrix and occupations="
            raise ArgumentError("density_matrix", given, expected)
        if occupations is not None:
            values = arguments.reals("occupations", occupations)
            return *self._batch("occupations", values), None
        assert density_matrix is not None
        gamma = arguments.scalars("density_matrix", density_matrix)
        shape = (*self.shape, self._sector.modes)
        if gamma.shape[-len(shape) :] != shape:
            expected = f"shape (..., {', '.join(map(str, shape))}) in the {self._domain} domain"
            raise ArgumentError("density_matrix", f"shape {gamma.shape}", expected)
        gamma = arguments.hermitian_stack("density_matrix", gamma)
        try:
            numbers, orbitals = np.linalg.eigh(gamma)
        except np.linalg.LinAlgError as error:
            raise ComputationError(f"the density matrix was not diagonalised: {error}") from error
        values, lead = self._batch("density_matrix", numbers[..., ::-1])
        return values, lead, orbitals[..., ::-1]

    def _batch(self, argument: str, values: RealArray) -> tuple[RealArray, tuple[int, ...]]:
        shape = self.shape
        lead = values.shape[: values.ndim - len(shape)]
        if values.shape != lead + shape:
            expected = f"shape (..., {', '.join(map(str, shape))}) in the {self._domain} domain"
            raise ArgumentError(argument, f"shape {values.shape}", expected)
        rows = values.reshape(-1, len(shape), self._sector.modes)
        return np.ascontiguousarray(rows), lead

    def __repr__(self) -> str:
        r = len(self._weights)
        shown = ", ".join(f"{w:.4g}" for w in self._weights[:4]) + (", ..." if r > 4 else "")
        return f"ExclusionPolytope({self._sector!r}, w = ({shown}), {self._domain})"

    def _repr_html_(self) -> str:
        rows = [
            ("sector", self._sector),
            ("domain", self._domain),
            ("weights", f"{len(self._weights)}: {self._weights[:6]}"),
        ]
        return table("Exclusion polytope", rows)

    def __reduce__(self) -> tuple[Any, ...]:
        domain = None if self._domain == "spinless" else self._domain
        return type(self), (self._sector, self._weights, domain)


def _checked_domain(sector: Sector, domain: str | None) -> str:
    if not isinstance(sector, SpinHalfFermions):
        if domain is not None:
            expected = "no domain; only spin-1/2 sectors have a choice"
            raise ArgumentError("domain", repr(domain), expected)
        return "spinless"
    if domain not in ("spin-resolved", "spin-summed"):
        expected = (
            '"spin-resolved" for occupations of each spin, or "spin-summed" for both together; '
            "they are different sets"
        )
        raise ArgumentError("domain", "none" if domain is None else repr(domain), expected)
    return domain
