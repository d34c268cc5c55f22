"""What a projection found, as plain data that can be pickled."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from fockhull import _core

RealArray = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Projected:
    """The same attributes as the compiled result."""

    occupations: RealArray
    normals: RealArray
    distance: RealArray
    distance_lower: RealArray
    gap: RealArray
    converged: npt.NDArray[np.bool_]
    ensembles: tuple[Any, ...]

    @classmethod
    def copy(cls, found: _core.Projections | Projected, members: Sequence[int]) -> Projected:
        """Take members of the batch out of a result, their explicit ensembles included."""
        chosen = list(members)
        return cls(
            found.occupations[chosen],
            found.normals[chosen],
            found.distance[chosen],
            found.distance_lower[chosen],
            found.gap[chosen],
            found.converged[chosen],
            tuple(found.ensemble(index) for index in chosen),
        )

    def ensemble(self, index: int) -> Any:
        """Return the parts of the explicit ensemble of one member of the batch."""
        return self.ensembles[index]
