"""The ensemble eigenproblem."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull import _core
from fockhull.ensemble import Ensemble, LevelCount, Levels, checked_weights, warned
from fockhull.errors import ArgumentError, ArgumentTypeError, ConvergenceError
from fockhull.hamiltonian import Hamiltonian, ScalarArray

__all__ = ["SolveProgress", "solve"]


class SolveProgress(NamedTuple):
    """A report from inside `solve`."""

    stage: str
    """What is being done."""
    converged: int
    """Levels converged so far."""
    wanted: int
    """Levels wanted."""
    products: int
    """Products with the Hamiltonian so far."""
    residual: float
    """Largest residual norm of the wanted levels."""


def solve(
    hamiltonian: Hamiltonian,
    weights: npt.ArrayLike | None = None,
    *,
    levels: int | None = None,
    tol: float = 1e-10,
    start: npt.ArrayLike | Ensemble | None = None,
    seed: int = 0,
    progress: bool | Callable[[SolveProgress], object] | None = None,
    max_products: int | None = None,
    symmetrize: bool = False,
) -> Ensemble:
    r"""Find the r lowest states and the ensemble that the weights make of them.

    By the Gross-Oliveira-Kohn principle, :math:`E_w = \sum_j w_j E_j` is the minimum of
    Tr(Gamma H) over all N-particle density operators with spectrum w.

    Small sectors are diagonalised densely; large ones by block Lanczos with thick restarts,
    followed by a search for missed levels in the orthogonal complement of what was found. One
    level beyond the last multiplet is looked at, and multiplets are found complete.

    Parameters
    ----------
    hamiltonian : Hamiltonian
        What to solve.
    weights : array_like of float, shape (r,)
        w_1 >= ... >= w_r > 0 with sum 1 (to within 1e-12, then normalised).
    levels : int
        Number of levels, instead of weights.
    tol : float
        A level counts as converged when its residual norm is at most `tol` times the largest
        \|E\| wanted (at least 1 % of the norm of H); below 1.
    start : array_like or Ensemble, optional
        Vectors to start from as columns, (dimension,) or (dimension, k), or an earlier result
        of the same sector. A wrong start costs time, never correctness: random vectors are
        always added.
    seed : int
        Seed of all random numbers.
    progress : bool or callable, optional
        True shows a bar (tqdm); a callable receives a `SolveProgress` once a step.
    max_products : int, optional
        Stop as not converged after so many products; by default 5000 + 500 r.
    symmetrize : bool
        Return the `Ensemble.symmetrized` one, without a warning.

    Returns
    -------
    Ensemble

    Raises
    ------
    ArgumentError
        For weights that are not decreasing, positive and of sum 1, more levels than the
        dimension, a tolerance that is not positive, or a start that does not fit.
    ConvergenceError
        If the tolerance was not reached; its `result` is the partial result.
    SizeError
        If the vectors do not fit in memory; checked before anything is allocated.

    Warns
    -----
    CutMultipletWarning
        If unequal weights fall on a degenerate multiplet.

    Examples
    --------
    >>> import numpy as np
    >>> import fockhull as fh
    >>> sector = fh.SpinHalfFermions(orbitals=2, particles=(1, 1))
    >>> W = fh.Interaction(sector, density_density=4.0 * np.eye(2))
    >>> e = fh.solve(fh.Hamiltonian(fh.lattices.chain(2), W), weights=[0.7, 0.3])
    >>> e.energies
    array([-0.8284271, 0. ])
    """
    result = solve_silently(
        hamiltonian,
        weights,
        levels=levels,
        tol=tol,
        start=start,
        seed=seed,
        progress=progress,
        max_products=max_products,
    )
    return result.symmetrized() if symmetrize else warned(result)


def solve_silently(
    hamiltonian: Hamiltonian,
    weights: npt.ArrayLike | None = None,
    *,
    levels: int | None = None,
    tol: float = 1e-10,
    start: npt.ArrayLike | Ensemble | None = None,
    seed: int = 0,
    progress: bool | Callable[[SolveProgress], object] | None = None,
    max_products: int | None = None,
) -> Ensemble:
    """Do what `solve` does, without a word about cut multiplets.

    Filters of warnings belong to the whole process: no thread may change them to be silent.
    """
    if not isinstance(hamiltonian, Hamiltonian):
        raise ArgumentTypeError("hamiltonian", type(hamiltonian).__name__, "a Hamiltonian")
    if (weights is None) == (levels is None):
        given = "neither" if weights is None else "both"
        raise ArgumentError("weights", given, "exactly one of weights and levels")
    values = None if weights is None else checked_weights(weights)
    count = arguments.count("levels", levels) if values is None else len(values)
    if count > hamiltonian.dimension:
        name = "levels" if values is None else "weights"
        expected = f"at most {hamiltonian.dimension}, the dimension of the sector"
        raise ArgumentError(name, f"{count} levels", expected)
    tolerance = arguments.positive("tol", tol)
    if tolerance >= 1.0:
        raise ArgumentError("tol", tolerance, "a number below 1")
    limit = (
        5000 + 500 * count
        if max_products is None
        else arguments.count("max_products", max_products)
    )
    with _reporter(progress) as report:
        found = _core.lowest_levels(
            hamiltonian._core,
            count,
            tolerance,
            _start_rows(start, hamiltonian),
            arguments.count("seed", seed, minimum=0),
            limit,
            report,
        )
    result = Ensemble(hamiltonian, _levels(found, tolerance, seed), count, values)
    if found.status != "converged":
        raise ConvergenceError(
            f"solve did not reach tol = {tolerance:g} after {found.products} products (largest "
            f"residual norm {result.residuals.max(initial=0.0):.2e}); the partial result is this "
            "exception's `result`; loosen tol, or start from the partial result",
            result,
        )
    return result


def _levels(found: _core.Levels, tolerance: float, seed: int) -> Levels:
    return Levels(
        energies=found.energies,
        rows=found.vectors,
        residuals=found.residuals,
        error_bounds=found.error_bounds,
        multiplets=tuple(found.multiplets),
        last_multiplet_complete=found.last_multiplet_complete,
        level_count=LevelCount(found.level_count, found.failure_probability),
        next_energy=found.next_energy,
        next_error=found.next_error,
        products=found.products,
        method=found.method,
        tolerance=tolerance,
        seed=seed,
    )


def _start_rows(start: npt.ArrayLike | Ensemble | None, hamiltonian: Hamiltonian) -> Any:
    if start is None:
        return None
    if isinstance(start, Ensemble):
        columns: ScalarArray = start._levels.rows.T
    else:
        columns = arguments.vectors("start", start, hamiltonian.dimension)
    if columns.shape[0] != hamiltonian.dimension:
        expected = f"{hamiltonian.dimension}, the dimension of the sector"
        raise ArgumentError("start", f"{columns.shape[0]} components", expected)
    if columns.dtype.kind == "c" and hamiltonian.dtype.kind == "f":
        # the real and imaginary parts of states of a real Hamiltonian are states as well
        columns = np.column_stack([columns.real, columns.imag])
    rows = np.atleast_2d(columns.T)
    return np.ascontiguousarray(rows, dtype=hamiltonian.dtype)


class _reporter:  # noqa: N801
    """Turns the `progress` argument into what the core calls, and closes the bar."""

    def __init__(self, progress: bool | Callable[[SolveProgress], object] | None) -> None:
        if progress is not None and not isinstance(progress, bool) and not callable(progress):
            given = type(progress).__name__
            raise ArgumentTypeError("progress", given, "True, False or a callable")
        self._progress = progress
        self._bar: Any = None

    def __enter__(self) -> Callable[..., object] | None:
        if callable(self._progress):
            callback = self._progress
            return lambda *report: callback(SolveProgress(*report))
        if self._progress:
            from tqdm.auto import tqdm  # noqa: PLC0415

            self._bar = tqdm(desc="solve", unit=" products")
            return self._advance
        return None

    def _advance(self, stage: str, done: int, total: int, products: int, residual: float) -> None:
        self._bar.update(products - self._bar.n)
        self._bar.set_postfix_str(f"{stage}, {done}/{total} levels, residual {residual:.1e}")

    def __exit__(self, *_: object) -> None:
        if self._bar is not None:
            self._bar.close()
