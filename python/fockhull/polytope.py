"""The exclusion polytope: which occupation numbers the weights allow."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from functools import partial
from typing import Any, Literal, TypeAlias

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull import _core
from fockhull._frozen import read_only
from fockhull._html import table
from fockhull.errors import ArgumentError, ArgumentTypeError, ComputationError, ConvergenceError
from fockhull.inequality import Inequality, TightestInequality
from fockhull.projection import Projection, Stretch, Support
from fockhull.sectors import Sector, SpinHalfFermions

__all__ = ["ExclusionPolytope"]

RealArray: TypeAlias = npt.NDArray[np.float64]
ScalarArray: TypeAlias = npt.NDArray[np.float64 | np.complex128]

ACCEPTED_GAP = 2.5e-11
"""Largest duality gap of a projection that is returned: the point is within its square root."""
ACCEPTED_BRACKET = 1e-9
"""Largest width of the certified interval of a distance that is returned."""
WORDING_LIMIT = 2_000
"""Generating vertices up to which verdicts name the inequality they met without being asked."""


class ExclusionPolytope:
    r"""The set of natural occupation numbers that ensembles with given weights can have.

    .. math:: \Sigma(w) = \{ n : \langle h, n \rangle \ge f_w(h)\ \forall h \}, \qquad
              f_w(h) = \sum_j w_j\, \epsilon_{(j)}(h)

    with :math:`\epsilon_{(j)}(h)` the j-th lowest configuration energy for one-particle
    energies h. Convex, invariant under permutations of modes; for one weight and fermions it
    is Pauli's exclusion principle. A density matrix is allowed exactly when its occupations lie
    in it. The methods rest on the r lowest configurations, so r = 100000 and 100 modes are fine;
    the list of inequalities is made where it is short and pays, see `project`. (Phys. Rev. Lett.
    127, 023001 (2021); Ann. Henri Poincare 24, 2241 (2023); bosons arXiv:2204.12715; fixed spin
    Quantum 9, 1921 (2025).)

    Parameters
    ----------
    sector : Sector
    weights : array_like of float, shape (r,)
        w_1 >= ... >= w_r > 0 with sum 1.
    domain : {"spin-resolved", "spin-summed"}
        Needed for spin-1/2, and only there (others are "spinless"): occupations of each spin,
        shape (2, d), in [0, 1]; or of both together, shape (d,), in [0, 2].

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

    Site occupations, in any order: the diagonal of gamma in any basis is a mixture of permuted
    natural occupations (Schur and Horn; arXiv:2506.09960), so it lies in the same polytope. A
    lattice density outside belongs to no ensemble with these weights:

    >>> P.contains(occupations=[0.1, 0.9, 0.9, 0.1, 0.9, 0.1])
    False
    >>> P.contains(occupations=[0.2, 0.8, 0.8, 0.2, 0.8, 0.2])
    True
    """

    __slots__ = ("_core", "_domain", "_inequalities", "_sector", "_weights")

    def __init__(
        self,
        sector: Sector,
        weights: npt.ArrayLike,
        domain: Literal["spin-resolved", "spin-summed", "spinless"] | None = None,
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
        self._inequalities: tuple[Inequality, ...] | None = None

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
        values, lead, orbitals = self._points(density_matrix, occupations)
        tolerance = arguments.positive("tol", tol)
        with _refusing(orbitals):
            inside = self._core.contains(values, tolerance)
        return inside.reshape(lead) if lead else bool(inside[0])

    def project(
        self,
        density_matrix: npt.ArrayLike | None = None,
        *,
        occupations: npt.ArrayLike | None = None,
        start: Projection | None = None,
    ) -> Projection:
        r"""Find the nearest allowed density matrix (Frobenius norm) or occupations.

        A density matrix keeps its natural orbitals. A sum of occupations that differs from the
        particle number is corrected as well: the excess is taken off uniformly over the modes,
        which contributes ``|sum - N| / sqrt(d)`` to the distance (in quadrature).

        Of two methods the faster is taken, for `contains` and `distance` too. The complete list
        of inequalities serves if it is known already (from `inequalities` or an earlier batch),
        and is made if r <= 12 and the generating vertices are no more than the points of the
        batch. Otherwise the oracle of the r lowest configurations serves. Both give the same
        answer within their certificates, not to the last digit.

        Parameters
        ----------
        density_matrix, occupations
            As for `contains`.
        start : Projection, optional
            An earlier result on the same polytope, of one point or of as many as now. Along a
            sweep of near points it saves calls of the oracle (with the list it has no use); it
            changes the answer within its certificate only.

        Returns
        -------
        Projection

        Raises
        ------
        ArgumentError
            For a wrong shape, NaN, infinity, a matrix that is not Hermitian, or a start on
            another polytope or of another number of points.
        ConvergenceError
            If the distance is not certified to 1e-9 or the point to 5e-6 (`result` is the
            partial result). Usually both reach rounding level; the `gap` of the result says
            how far they are certified, which for r = 100000 is about 2e-7 for the point.
        """
        values, lead, orbitals = self._points(density_matrix, occupations)
        if start is not None and not isinstance(start, Projection):
            raise ArgumentTypeError("start", type(start).__name__, "a Projection")
        with _refusing(orbitals):
            core = self._core.project(values, *(start._as_start() if start is not None else ()))
        result = Projection(self, core, lead, orbitals)
        bracket = core.distance - core.distance_lower
        loose = (core.gap > ACCEPTED_GAP) | (bracket > ACCEPTED_BRACKET)
        if (~core.converged & loose).any():
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
        values, lead, orbitals = self._points(density_matrix, occupations)
        with _refusing(orbitals):
            factor, lower, boundary, normal = self._core.stretch(values)
        shape = lead + self.shape
        points = read_only(boundary.reshape(shape))
        return Stretch(
            read_only(factor.reshape(lead)) if lead else float(factor[0]),
            read_only(lower.reshape(lead)) if lead else float(lower[0]),
            points,
            read_only(normal.reshape(shape)),
            partial(self._constraints, points, np.isfinite(factor) & (factor > 0)),
        )

    def inequalities(self, *, limit: int | None = None) -> tuple[Inequality, ...]:
        """List the facets exactly, in integers, for any weights, particle number and modes.

        Complete and without redundancy, given that occupations are decreasing (per spin) and
        sum to the particle number; sorted by the level at which each appears.

        Parameters
        ----------
        limit : int, optional
            Most generating vertices to enumerate, by default 200,000.

        Raises
        ------
        ArgumentError
            If there are more, foreseen from the growth from level to level; `contains`,
            `project` and `stretch` need no list.

        Examples
        --------
        >>> import fockhull as fh
        >>> for facet in fh.ExclusionPolytope(fh.Fermions(6, 3), [0.6, 0.4]).inequalities():
        ...     print(facet)
        n6 >= 0
        n1 <= 1
        n1 + n2 + n3 <= N - 1 + w1 = 2.6
        """
        if self._inequalities is None:
            core = self._core.inequalities(self._limit(limit))
            self._inequalities = tuple(Inequality._wrap(one, self.shape) for one in core)
        return self._inequalities

    def new_at(self, r: int, *, limit: int | None = None) -> tuple[Inequality, ...]:
        """List the inequalities that appear first with r weights, the step of the hierarchy."""
        level = arguments.count("r", r)
        return tuple(x for x in self.inequalities(limit=limit) if x.first_level == level)

    def generating_vertices(self, *, limit: int | None = None) -> RealArray:
        """Occupations of the generating vertices, decreasing; permutations give all vertices.

        Returns
        -------
        numpy.ndarray
            Shape (m,) + ``shape``, in the order of `line_ups`; errors as for `inequalities`.
        """
        occupations, _ = self._line_ups(limit).generating_vertices()
        return occupations.reshape((len(occupations), *self.shape))

    def line_ups(self, *, limit: int | None = None) -> npt.NDArray[np.uint32]:
        """Write out the configurations behind the generating vertices, in the order of the weights.

        Returns
        -------
        numpy.ndarray
            Shape (m, r) + ``shape``; in the spin-summed domain both spins are added up. Errors
            as for `inequalities`.
        """
        _, line_ups = self._line_ups(limit).generating_vertices()
        return line_ups.reshape((*line_ups.shape[:2], *self.shape))

    def tightest(
        self,
        density_matrix: npt.ArrayLike | None = None,
        *,
        occupations: npt.ArrayLike | None = None,
    ) -> TightestInequality:
        """Find the inequality that limits a density matrix most, or is violated most.

        Parameters and errors as for `contains` (one point) and `inequalities`.

        Returns
        -------
        TightestInequality
            The inequality and its slack.
        """
        values, lead, _ = self._points(density_matrix, occupations)
        if lead:
            raise ArgumentError("occupations", f"a batch of shape {lead}", "a single point")
        point = values.reshape(self.shape)
        nearest = self._nearest(self.inequalities(), point)
        return TightestInequality(nearest, float(nearest.slack(point)))

    def _line_ups(self, limit: int | None) -> _core.LineUps:
        return self._core.line_ups(self._limit(limit))

    def _limit(self, limit: int | None) -> int | None:
        return None if limit is None else arguments.count("limit", limit)

    def _nearest(self, inequalities: tuple[Inequality, ...], point: RealArray) -> Inequality:
        distances = np.array([inequality.distance(point) for inequality in inequalities])
        # of those that tie, the first
        return inequalities[int(np.flatnonzero(distances <= distances.min() + 1e-9)[0])]

    def _constraints(self, points: RealArray, met: npt.NDArray[np.bool_]) -> Any:
        """Name the inequality met at each boundary point, where the list is short enough."""
        try:
            inequalities = self.inequalities(limit=None if self._inequalities else WORDING_LIMIT)
        except ArgumentError:
            inequalities = ()
        rows = points.reshape(-1, *self.shape)
        words = [
            str(self._nearest(inequalities, row)) if inequalities and is_met else None
            for row, is_met in zip(rows, met, strict=True)
        ]
        lead = points.shape[: points.ndim - len(self.shape)]
        return read_only(np.array(words, dtype=object).reshape(lead)) if lead else words[0]

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
        gamma = arguments.hermitian_stack("density_matrix", gamma, axes=len(shape))
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
        return type(self), (self._sector, self._weights, self._domain)


@contextmanager
def _refusing(orbitals: ScalarArray | None) -> Iterator[None]:
    """Name the density matrix in errors about its occupations."""
    try:
        yield
    except ArgumentError as error:
        if orbitals is None:
            raise
        given = f"natural occupations with {error.given}"
        raise ArgumentError("density_matrix", given, error.expected) from None


def _checked_domain(sector: Sector, domain: str | None) -> str:
    if not isinstance(sector, SpinHalfFermions):
        if domain not in (None, "spinless"):
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
