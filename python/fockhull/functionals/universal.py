"""The exact universal functional F_w, as certified intervals."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull._frozen import Frozen
from fockhull._html import table
from fockhull.errors import ArgumentError, ArgumentTypeError, SizeError
from fockhull.functionals import _inputs as inputs
from fockhull.functionals._driver import evaluated
from fockhull.functionals._potentials import PotentialSpace
from fockhull.functionals._problem import Problem
from fockhull.functionals._regularized import RegularizedValue, regularize
from fockhull.functionals._response import curvature_product, density_response
from fockhull.functionals._scan import BoundaryScan, scan
from fockhull.functionals._value import FunctionalValue
from fockhull.interaction import Interaction
from fockhull.polytope import ExclusionPolytope

__all__ = ["UniversalFunctional"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

DEFAULT_TOLERANCE = 1e-8


class UniversalFunctional(Frozen):
    r"""The exact functional of the one-body density matrix for a fixed interaction.

    .. math:: F_w(\gamma) = \max_h\,[E_w(h) - \mathrm{Tr}(h\gamma)]
              = \min\,\{\mathrm{Tr}(\Gamma W) : \Gamma \mapsto \gamma\}

    where Gamma runs over the convex hull of the N-particle density operators with spectrum w.
    This is the convex functional: for one weight it is the ensemble functional of the ground
    state, the convex envelope of the pure-state one and never above it.

    The dual is maximised with the energy smoothed by an entropy that is then cooled away, and
    finished by Newton's method that keeps degenerate levels degenerate. Every value is an
    interval: a potential proves the lower end, an explicit ensemble the upper one.
    (E. K. U. Gross, L. N. Oliveira and W. Kohn, Phys. Rev. A 37, 2805 (1988), for the energy;
    Phys. Rev. Lett. 127, 023001 (2021) for the functional; Lieb, Int. J. Quantum Chem. 24, 243
    (1983), for the dual.)

    Parameters
    ----------
    interaction : Interaction
    weights : array_like of float, shape (r,)
        w_1 >= ... >= w_r > 0 with sum 1.
    domain : {"spin-resolved", "spin-summed"}
        Needed for spin-1/2, and only there: gamma of each spin, shape (2, d, d), with an h for
        each; or summed over the spins, shape (d, d), with the same h for both.
    variables : "diagonal" or array_like, shape (n, d, d) or (n, 2, d, d), optional
        Restrict h to site energies (the functional of the site occupations: lattice ensemble
        density functional theory), or to the span of Hermitian operators that is closed under
        products x y + y x (see `commuting_with` for those that are symmetric under a group).
        Only what they see of gamma matters then. By default all Hermitian operators.
    one_body : array_like, shape (d, d) or (2, d, d), optional
        A fixed Hermitian operator that counts as part of W, as hopping does in the functional
        of the site occupations: F is then the minimum of Tr(Gamma (t + W)).

    Raises
    ------
    ArgumentError
        For weights that are not decreasing, positive and of sum 1, more weights than
        configurations, or a domain that is missing or does not fit.

    Examples
    --------
    >>> import numpy as np
    >>> import fockhull as fh
    >>> sector = fh.SpinHalfFermions(orbitals=2, particles=(1, 1))
    >>> W = fh.Interaction(sector, density_density=4.0 * np.eye(2))
    >>> F = fh.UniversalFunctional(W, weights=[1.0], domain="spin-summed")
    >>> F.evaluate([[1.0, 0.5], [0.5, 1.0]]).value
    0.267949192
    """

    __slots__ = ("_interaction", "_one_body", "_polytope", "_problems", "_variables")

    def __init__(
        self,
        interaction: Interaction,
        weights: npt.ArrayLike,
        domain: Literal["spin-resolved", "spin-summed"] | None = None,
        *,
        variables: Literal["diagonal"] | npt.ArrayLike | None = None,
        one_body: npt.ArrayLike | None = None,
    ) -> None:
        if not isinstance(interaction, Interaction):
            given = type(interaction).__name__
            raise ArgumentTypeError("interaction", given, "an Interaction")
        self._interaction = interaction
        self._polytope = ExclusionPolytope(interaction.sector, weights, domain)
        self._problems: dict[bool, Problem] = {}
        self._variables = inputs.variables(self._polytope, variables)
        self._one_body = inputs.one_body(self._polytope, one_body)

    @property
    def interaction(self) -> Interaction:
        """The interaction W."""
        return self._interaction

    @property
    def weights(self) -> RealArray:
        """The weights in force, shape (r,)."""
        return self._polytope.weights

    @property
    def domain(self) -> str:
        """What gamma speaks about: "spinless", "spin-resolved" or "spin-summed"."""
        return self._polytope.domain

    @property
    def polytope(self) -> ExclusionPolytope:
        """The exclusion polytope, the domain where F is finite."""
        return self._polytope

    def evaluate(
        self,
        density_matrix: npt.ArrayLike,
        tol: float = DEFAULT_TOLERANCE,
        *,
        start: FunctionalValue | npt.ArrayLike | None = None,
    ) -> FunctionalValue:
        """Find F_w(gamma).

        Parameters
        ----------
        density_matrix : array_like, shape (d, d), or (2, d, d) where spins are resolved
            Hermitian gamma with trace N (for each spin its number).
        tol : float
            Width of the interval asked for, in the unit of the interaction.
        start : FunctionalValue or array_like, optional
            A result for a neighbouring gamma, or a potential, to start from; costs or saves
            time, never correctness.

        Returns
        -------
        FunctionalValue
            With an interval wider than `tol`, and `status` saying so, if no better was reached.

        Raises
        ------
        ArgumentError
            For a wrong shape, NaN, infinity, a matrix that is not Hermitian or a wrong trace.
        ConvergenceError
            If not even one upper bound was found.
        """
        gamma = inputs.density_matrix(self._polytope, density_matrix)
        if self._variables is not None:
            gamma = self._variables.projected(gamma)
        width = arguments.positive("tol", tol)
        problem = self._problem(np.iscomplexobj(gamma))
        return evaluated(problem, gamma, width, self._start(start, problem))

    __call__ = evaluate

    def regularized(
        self,
        density_matrix: npt.ArrayLike,
        strength: float,
        tol: float = DEFAULT_TOLERANCE,
        *,
        start: RegularizedValue | npt.ArrayLike | None = None,
    ) -> RegularizedValue:
        r"""Find the Moreau-Yosida regularisation, smooth and finite for every gamma.

        .. math:: F_\epsilon(\gamma) = \min_{\gamma'}
                  [F(\gamma') + |\gamma - \gamma'|^2 / 2\epsilon]

        with the Frobenius norm. It rises to F as epsilon falls; for the path towards zero, hand
        each result to the next as `start`.

        Parameters
        ----------
        density_matrix : array_like
            As for `evaluate`, but also outside the domain.
        strength : float
            The parameter epsilon > 0, in the inverse unit of the interaction.
        tol : float
            Width of the interval asked for.
        start : RegularizedValue or array_like, optional
            An earlier result, or a potential, to start from.

        Returns
        -------
        RegularizedValue

        Raises
        ------
        ArgumentError
            As for `evaluate`, and for a strength that is not positive.
        SizeError
            On sectors too large for dense matrices of all potentials.
        """
        gamma = inputs.density_matrix(self._polytope, density_matrix)
        if self._variables is not None:
            gamma = self._variables.projected(gamma)
        epsilon = arguments.positive("strength", strength)
        width = arguments.positive("tol", tol)
        problem = self._problem(np.iscomplexobj(gamma))
        if not problem.is_small:
            raise SizeError(
                f"{problem.sector.dimension} configurations and {problem.space.size} variables "
                "are too many for dense matrices, which the regularisation needs"
            )
        first = self._start(start, problem)
        origin = np.zeros(problem.space.size) if first is None else first
        return regularize(problem, gamma, epsilon, width, origin)

    def scan_towards_boundary(
        self,
        density_matrix: npt.ArrayLike,
        *,
        towards: npt.ArrayLike | None = None,
        distances: npt.ArrayLike | None = None,
        tol: float = DEFAULT_TOLERANCE,
    ) -> BoundaryScan:
        """Evaluate along a straight line towards the boundary of the domain.

        Parameters
        ----------
        density_matrix : array_like
            Where the line starts, inside the domain.
        towards : array_like, optional
            A density matrix on the boundary; by default where the ray from the centre of the
            domain through `density_matrix` leaves it.
        distances : array_like of float, optional
            Distances D > 0 from the facet to evaluate at; by default 13, equally spaced in
            log D, from that of `density_matrix` down to a millionth of it.
        tol : float
            Width of the intervals asked for.

        Returns
        -------
        BoundaryScan
            Values and forces dF/dD; its `fit` gives exponent and prefactor.

        Raises
        ------
        ArgumentError
            If the start is not inside, or the end not on the boundary.
        """
        problem_shape = (*self._polytope.shape, self._interaction.sector.modes)
        gamma = inputs.density_matrix(self._polytope, density_matrix).reshape(problem_shape)
        end = None
        if towards is not None:
            end = inputs.density_matrix(self._polytope, towards).reshape(problem_shape)
        steps = None if distances is None else arguments.reals("distances", distances)
        if steps is not None and (steps.ndim != 1 or (steps <= 0.0).any()):
            raise ArgumentError("distances", "zero or negative numbers", "positive numbers")
        return scan(self, gamma, end, steps, arguments.positive("tol", tol))

    def response(self, result: FunctionalValue, change: npt.ArrayLike) -> ScalarArray:
        """Find the first-order change of gamma for a change of the potential of a result.

        Parameters
        ----------
        result : FunctionalValue
            A value inside the domain.
        change : array_like
            Hermitian change of h, in the shape of gamma.

        Returns
        -------
        numpy.ndarray
            In the shape of gamma. The products need only H times vectors.

        Raises
        ------
        ArgumentError
            For a wrong shape, or a result without states.
        ComputationError
            At a kink: unequal weights on degenerate levels.
        """
        potential = inputs.hermitian(self._polytope, "change", change)
        answer = density_response(inputs.states_of(result), potential)
        problem = self._problem(np.iscomplexobj(answer))
        if problem.spin_summed:
            answer = answer.sum(axis=0, keepdims=True)
        return problem.shaped(answer)

    def hessian_product(self, result: FunctionalValue, change: npt.ArrayLike) -> ScalarArray:
        """Multiply the second derivative of F by a change of gamma.

        The product is the first-order change of the gradient -h: the inverse of `response`,
        up to the constant and directions in which gamma does not answer.

        Parameters and errors as for `response`, with a change of gamma.
        """
        gamma = inputs.hermitian(self._polytope, "change", change).reshape(
            -1, *np.shape(change)[-2:]
        )
        problem = self._problem(
            gamma.dtype.kind == "c" or np.iscomplexobj(np.asarray(result.potential))
        )
        coordinates = problem.space.coordinates(gamma)
        return problem.potential(curvature_product(problem, inputs.states_of(result), coordinates))

    def _start(self, start: Any, problem: Problem) -> RealArray | None:
        if isinstance(start, FunctionalValue | RegularizedValue):
            start = start.potential
        if start is None:
            return None
        d = self._interaction.sector.modes
        h = arguments.tensor("start", start, (*self._polytope.shape, d))
        return problem.space.coordinates(h.reshape(-1, d, d))

    def _problem(self, is_complex: bool) -> Problem:
        """Return the problem over real or complex potentials, kept for the next evaluation."""
        is_complex = is_complex or self._interaction.dtype.kind == "c"
        is_complex = is_complex or np.iscomplexobj(np.asarray(self._one_body))
        if self._variables is not None and False not in self._problems:
            problem = Problem(
                self._interaction, self._polytope, self._variables, False, self._one_body
            )
            self._problems = {False: problem, True: problem}
        if is_complex not in self._problems:
            components = 2 if self.domain == "spin-resolved" else 1
            d = self._interaction.sector.modes
            space = PotentialSpace.hermitian(components, d, is_complex=is_complex)
            self._problems[is_complex] = Problem(
                self._interaction, self._polytope, space, one_body=self._one_body
            )
        return self._problems[is_complex]

    def __repr__(self) -> str:
        r = len(self.weights)
        shown = ", ".join(f"{w:.4g}" for w in self.weights[:4]) + (", ..." if r > 4 else "")
        return f"UniversalFunctional({self._interaction!r}, w = ({shown}), {self.domain})"

    def _repr_html_(self) -> str:
        rows = [
            ("interaction", self._interaction),
            ("weights", self.weights),
            ("domain", self.domain),
        ]
        return table("Universal functional", rows)

    def __reduce__(self) -> tuple[Any, ...]:
        domain = None if self.domain == "spinless" else self.domain
        variables = None if self._variables is None else self._variables.basis
        return _rebuild, (self._interaction, self.weights, domain, variables, self._one_body)


def _rebuild(
    interaction: Interaction,
    weights: RealArray,
    domain: Any,
    variables: ScalarArray | None,
    one_body: ScalarArray | None,
) -> UniversalFunctional:
    if variables is not None and domain != "spin-resolved":
        variables = variables[:, 0]
    return UniversalFunctional(interaction, weights, domain, variables=variables, one_body=one_body)
