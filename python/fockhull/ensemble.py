"""Ensembles of eigenstates: what `solve` returns."""

from __future__ import annotations

import itertools
import warnings
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull import _core
from fockhull._frozen import Frozen, read_only
from fockhull._html import table
from fockhull.errors import (
    ArgumentError,
    ComputationError,
    CutMultipletWarning,
)
from fockhull.hamiltonian import Hamiltonian
from fockhull.polytope import ExclusionPolytope

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["Ensemble", "LevelCount"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

OCCUPATION_TOLERANCE = 1e-8
"""Natural occupations closer than this are flagged as degenerate."""
_WEIGHT_TOLERANCE = 1e-12


@dataclass(frozen=True)
class LevelCount:
    """How sure it is that no level below those found is missing."""

    kind: str
    """"proved" (the whole space was diagonalised), "probed" (a search from a random start in
    the orthogonal complement found nothing) or "unchecked"."""
    failure_probability: float | None
    """Bound on the probability that the search overlooked a level (0 where proved)."""

    def __str__(self) -> str:
        if self.kind != "probed":
            return self.kind
        return f"probed (failure probability at most {self.failure_probability:.1e})"


@dataclass(frozen=True)
class Levels:
    """All levels found: those wanted, then those that complete the last multiplet."""

    energies: RealArray
    rows: ScalarArray
    residuals: RealArray
    error_bounds: RealArray
    multiplets: tuple[tuple[int, int], ...]
    last_multiplet_complete: bool
    level_count: LevelCount
    next_energy: float | None
    next_error: float | None
    products: int
    method: str
    tolerance: float
    seed: int


class Ensemble(Frozen):
    """The r lowest states of a Hamiltonian and the ensemble that weights make of them.

    Made by `solve`. Every number comes with its certificate: `residuals` and `error_bounds`
    for the energies, `level_count` for their being the lowest ones, `multiplets` for
    degeneracies. Immutable and picklable.
    """

    def __init__(
        self, hamiltonian: Hamiltonian, levels: Levels, count: int, weights: RealArray | None
    ) -> None:
        self._hamiltonian = hamiltonian
        self._levels = levels
        self._count = count
        self._weights = weights
        for array in (levels.energies, levels.rows, levels.residuals, levels.error_bounds, weights):
            if array is not None:
                read_only(array)

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self._hamiltonian, self._levels, self._count, self._weights)

    @property
    def hamiltonian(self) -> Hamiltonian:
        """The Hamiltonian solved."""
        return self._hamiltonian

    @property
    def weights(self) -> RealArray | None:
        """Weights w_1 >= ... >= w_r in force, shape (r,); None if only levels were asked for."""
        return self._weights

    @property
    def energies(self) -> RealArray:
        """Energies E_1 <= ... <= E_r in the unit of the Hamiltonian, shape (r,)."""
        return self._levels.energies[: self._count]

    @property
    def vectors(self) -> ScalarArray:
        """States as columns, shape (dimension, r).

        The first component within 1e-8 of the largest is real and positive.
        """
        return self._levels.rows[: self._count].T

    @property
    def residuals(self) -> RealArray:
        """Residual norms of H x - E x, shape (r,)."""
        return self._levels.residuals[: self._count]

    @property
    def error_bounds(self) -> RealArray:
        """Bounds on the error of each energy, shape (r,).

        The residual norm, or its square over the gap (Kato and Temple) where that is smaller and
        the level count was checked.
        """
        return self._levels.error_bounds[: self._count]

    @property
    def level_count(self) -> LevelCount:
        """How sure it is that no lower level was missed."""
        return self._levels.level_count

    @property
    def multiplets(self) -> tuple[tuple[int, int], ...]:
        """Ranges (start, stop) of degenerate levels; the last may reach beyond r."""
        return self._levels.multiplets

    @property
    def next_energy(self) -> float | None:
        """The first energy above the last multiplet (less converged); None if there is none."""
        return self._levels.next_energy

    @property
    def products(self) -> int:
        """Products of the Hamiltonian with a vector that the solve took."""
        return self._levels.products

    @property
    def method(self) -> str:
        """How the levels were found: "dense" or "block Lanczos"."""
        return self._levels.method

    @property
    def excitation_energies(self) -> RealArray:
        """E_j - E_1, shape (r,)."""
        return np.asarray(self.energies - self.energies[0])

    @property
    def energy(self) -> float:
        """Ensemble energy E_w = sum_j w_j E_j."""
        return float(self._required_weights() @ self.energies)

    @property
    def energy_error_bound(self) -> float:
        """Bound on the error of the ensemble energy, sum_j w_j x (bound of E_j)."""
        return float(self._required_weights() @ self.error_bounds)

    @cached_property
    def interaction_energy(self) -> float:
        """Tr(Gamma W) = E_w - c - Tr(h gamma)."""
        h = np.broadcast_to(self._hamiltonian.one_body, self._spin_resolved_density_matrix.shape)
        one_body = np.einsum("spq,sqp->", h, self._spin_resolved_density_matrix).real
        return self.energy - self._hamiltonian.constant - float(one_body)

    @cached_property
    def state_density_matrices(self) -> ScalarArray:
        """One-body density matrices <a+_q a_p> of the states.

        Shape (r, d, d), or (r, 2, d, d) for spin-1/2.
        """
        rows = self._levels.rows[: self._count]
        sector = self._hamiltonian.sector
        gamma = _core.density_matrices(sector._core, np.ascontiguousarray(rows))
        gamma = gamma if sector.spins == 2 else gamma[:, 0]
        gamma.flags.writeable = False
        return gamma

    @cached_property
    def density_matrix(self) -> ScalarArray:
        """Ensemble density matrix gamma_pq = sum_j w_j <a+_q a_p>_j.

        Shape (d, d), or (2, d, d) for spin-1/2; the one-body energy is Tr(h gamma), the trace N.
        """
        gamma = np.tensordot(self._required_weights(), self.state_density_matrices, axes=1)
        gamma.flags.writeable = False
        return gamma

    @property
    def _spin_resolved_density_matrix(self) -> ScalarArray:
        d = self._hamiltonian.sector.modes
        return self.density_matrix.reshape(-1, d, d)

    @cached_property
    def _natural(self) -> tuple[RealArray, ScalarArray]:
        values, orbitals = np.linalg.eigh(self.density_matrix)
        occupations = values[..., ::-1].copy()
        natural_orbitals = orbitals[..., ::-1].copy()
        occupations.flags.writeable = natural_orbitals.flags.writeable = False
        return occupations, natural_orbitals

    @property
    def occupations(self) -> RealArray:
        """Natural occupation numbers, decreasing (per spin), shape (d,) or (2, d)."""
        return self._natural[0]

    @property
    def natural_orbitals(self) -> ScalarArray:
        """Natural orbitals as columns in the order of `occupations`, shape (d, d) or (2, d, d).

        Arbitrary inside the blocks that `degenerate_occupations` lists.
        """
        return self._natural[1]

    @property
    def degenerate_occupations(self) -> tuple[Any, ...]:
        """Ranges (start, stop) of occupations equal within 1e-8; for spin-1/2 a tuple each."""
        blocks = tuple(_equal_runs(row) for row in np.atleast_2d(self.occupations))
        return blocks if self._hamiltonian.sector.spins == 2 else blocks[0]

    @cached_property
    def spin_squared(self) -> RealArray:
        """<S^2> = S (S + 1) of each state, shape (r,); spin-1/2 only.

        Raises
        ------
        ArgumentError
            For sectors without spin.
        """
        rows = np.ascontiguousarray(self._levels.rows[: self._count])
        # rounding must not leave a negative square
        squares = _core.spin_squared(self._hamiltonian.sector._core, rows)
        return read_only(np.maximum(squares, 0.0))

    @property
    def total_spin(self) -> RealArray:
        """Total spin S of each state, from `spin_squared`, shape (r,); spin-1/2 only."""
        return np.asarray(np.sqrt(self.spin_squared + 0.25) - 0.5)

    @property
    def cut_multiplets(self) -> tuple[tuple[int, int], ...]:
        """The multiplets whose members carry unequal weights (those beyond r count as zero)."""
        if self._weights is None:
            return ()
        found = len(self._levels.energies)
        padded = np.zeros(found)
        padded[: self._count] = self._weights[:found]
        return tuple(
            (start, stop)
            for start, stop in self.multiplets
            if stop - start > 1 and np.ptp(padded[start:stop]) > _WEIGHT_TOLERANCE
        )

    def symmetrized(self) -> Ensemble:
        """Return the ensemble whose weights are averaged over each whole multiplet.

        The ensemble energy stays; the density matrix becomes unique and has the symmetry of
        the Hamiltonian. The weights then in force are those of the result; r grows to the end
        of the last multiplet.

        Raises
        ------
        ComputationError
            If the last multiplet was too large to be found completely.
        ArgumentError
            If there are no weights.
        """
        weights = self._required_weights()
        if not self._levels.last_multiplet_complete and self._count > self.multiplets[-1][0]:
            raise ComputationError(
                f"the multiplet at energy {self.energies[-1]:.10g} has at least "
                f"{self.multiplets[-1][1] - self.multiplets[-1][0]} levels and was not found "
                "completely; solve with more levels"
            )
        averaged = np.zeros(len(self._levels.energies))
        averaged[: self._count] = weights
        for start, stop in self.multiplets:
            averaged[start:stop] = averaged[start:stop].mean()
        count = int(np.count_nonzero(averaged))
        return Ensemble(self._hamiltonian, self._levels, count, averaged[:count])

    def reweighted(self, weights: npt.ArrayLike) -> Ensemble:
        """Return the ensemble of the same states with other weights, without solving again.

        Parameters
        ----------
        weights : array_like of float
            At most as many as there are levels found.

        Raises
        ------
        ArgumentError
            For weights that are not decreasing, positive and of sum 1, or too many.

        Warns
        -----
        CutMultipletWarning
            If unequal weights fall on a degenerate multiplet.
        """
        values = checked_weights(weights)
        found = len(self._levels.energies)
        if len(values) > found:
            raise ArgumentError(
                "weights", f"{len(values)} weights", f"at most {found}, the levels found; solve"
            )
        return warned(Ensemble(self._hamiltonian, self._levels, len(values), values))

    def exclusion_polytope(
        self, domain: Literal["spin-resolved", "spin-summed"] | None = None
    ) -> ExclusionPolytope:
        """Return the exclusion polytope of the sector and the weights in force.

        Parameters
        ----------
        domain : {"spin-resolved", "spin-summed"}
            Needed for spin-1/2, and only there.
        """
        return ExclusionPolytope(self._hamiltonian.sector, self._required_weights(), domain)

    def to_xarray(self, *, vectors: bool = False) -> xr.Dataset:
        """Return the results as an `xarray.Dataset` with named dimensions and attributes.

        Parameters
        ----------
        vectors : bool
            Whether to include the state vectors.

        Returns
        -------
        xarray.Dataset
            Attributes are what a sweep has in common, all else are variables. Save it with
            ``to_netcdf(path, engine="h5netcdf")`` and open it with the same engine (h5netcdf 1.4
            or newer): complex numbers survive.
        """
        from fockhull._labels import ensemble_dataset  # noqa: PLC0415

        return ensemble_dataset(self, vectors=vectors)

    def _required_weights(self) -> RealArray:
        if self._weights is None:
            raise ArgumentError(
                "weights", "none, only levels", "weights for an ensemble; see Ensemble.reweighted"
            )
        return self._weights

    def __repr__(self) -> str:
        what = f"{self._count} level{'s' if self._count > 1 else ''}"
        if self._weights is not None:
            what += f", energy {self.energy:.10g} +- {self.energy_error_bound:.1e}"
        return f"Ensemble({self._hamiltonian.sector!r}, {what}, levels {self.level_count})"

    def _repr_html_(self) -> str:
        rows: list[tuple[str, object]] = [("sector", self._hamiltonian.sector)]
        if self._weights is not None:
            rows.append(("weights", self._weights))
            rows.append(("ensemble energy", f"{self.energy:.12g} ± {self.energy_error_bound:.1e}"))
        rows += [("energies", self.energies), ("level count", self.level_count)]
        if self._weights is not None:
            rows.append(("natural occupations", self.occupations.round(6)))
        return table("Ensemble", rows)


def checked_weights(weights: npt.ArrayLike) -> RealArray:
    """Return valid ensemble weights, normalised."""
    values = arguments.reals("weights", weights)
    if values.ndim != 1:
        raise ArgumentError("weights", f"shape {values.shape}", "shape (r,)")
    return _core.checked_weights(np.ascontiguousarray(values))


def warned(ensemble: Ensemble) -> Ensemble:
    """Return the same ensemble after warning of multiplets cut by unequal weights."""
    for start, stop in ensemble.cut_multiplets:
        energies = ensemble._levels.energies[start:stop]
        weights = ensemble.weights
        assert weights is not None
        shown = [f"{w:.6g}" for w in weights[start:stop]] + ["0"] * (
            stop - max(start, len(weights))
        )
        warnings.warn(
            f"levels {start + 1} to {stop} are degenerate (energy {energies.mean():.10g}, "
            f"spread {np.ptp(energies):.1e}) but carry the weights {', '.join(shown)}: the "
            "ensemble energy is unique, the density matrix is not; symmetrized() gives the "
            "symmetric one",
            CutMultipletWarning,
            stacklevel=3,
        )
    return ensemble


def _equal_runs(values: RealArray) -> tuple[tuple[int, int], ...]:
    """Ranges of neighbouring values that are equal within the tolerance, longer than one."""
    breaks = np.flatnonzero(-np.diff(values) > OCCUPATION_TOLERANCE) + 1
    edges = [0, *breaks.tolist(), len(values)]
    return tuple((a, b) for a, b in itertools.pairwise(edges) if b - a > 1)
