"""Explicit ensembles of configurations: the certificate that occupations are allowed."""

from __future__ import annotations

from typing import Any, TypeAlias, TypeVar, cast

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull._frozen import Frozen, read_only
from fockhull._html import table
from fockhull.sectors import Bosons, Sector

__all__ = ["ConfigurationEnsemble"]

RealArray: TypeAlias = npt.NDArray[np.float64]
_Numbers = TypeVar("_Numbers", bound=npt.NDArray[Any])

VERIFY_TOLERANCE = 1e-9


class ConfigurationEnsemble(Frozen):
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
        self._weights = read_only(weights)
        self._domain = domain
        self._parts = parts
        self._line_up_probabilities, self._potentials = parts[:2]
        self._permutation_probabilities, self._permutations = parts[2:]

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self._sector, self._weights, self._domain, self._parts)

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
        term = arguments.position("term", term, len(self))
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
        tol = arguments.positive("tol", tol)
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

    def _repr_html_(self) -> str:
        rows: list[tuple[str, object]] = [
            ("sector", self._sector),
            ("domain", self._domain),
            ("configurations in each term", len(self._weights)),
            ("probabilities", self.probabilities.round(6)),
            ("occupations", self.occupations().round(6)),
        ]
        return table("Ensemble of configurations", rows)
