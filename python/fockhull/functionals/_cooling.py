"""The functional by following the smoothed maximiser towards temperature zero."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import numpy.typing as npt

from fockhull.functionals._multiplets import BlockEnsemble, PrimalDualPoint, groupings, polish
from fockhull.functionals._smoothed import SmoothedPoint, SpectralModel, maximise

__all__ = ["candidates"]

RealArray = npt.NDArray[np.float64]

_COOLING = 0.1
_COLDEST = 1e-9
_LARGEST_GROUP = 20
_ACCURACY = 1e-14


def candidates(
    model: SpectralModel, start: RealArray, scale: float, share: float = 1.0
) -> Iterator[PrimalDualPoint]:
    """Potentials with ensembles, better and better; the caller certifies and decides.

    Parameters
    ----------
    model
        The dual on a space of states.
    start : numpy.ndarray
        Coordinates to start from.
    scale : float
        Energy scale of the interaction; the first temperature is a tenth of it.
    share : float
        A factor on the first temperature, below 1 for a start that is nearly right.
    """
    scale = max(scale, 1e-12)
    temperature, coordinates = 0.1 * scale * share, start
    while temperature > _COLDEST * scale:
        point = maximise(model, coordinates, temperature, decrement=0.01 * temperature)
        coordinates = point.coordinates
        for guess in groupings(point):
            cut = max((b - a for groups in guess for a, b in groups), default=0)
            if cut <= _LARGEST_GROUP:
                yield polish(model, point, guess, _ACCURACY * scale).made_admissible()
        yield _unpolished(point)
        temperature *= _COOLING


def _unpolished(point: SmoothedPoint) -> PrimalDualPoint:
    """Take the smoothed ensemble as it is."""
    parts = []
    for level in point.levels:
        count = max(int(np.count_nonzero(level.occupations > 1e-16)), 1)
        occupations = level.occupations[:count].copy()
        occupations *= level.block.weights.sum() / occupations.sum()
        groups = tuple((k, k + 1) for k in range(count))
        matrix = np.diag(occupations).astype(level.states.dtype)
        parts.append(BlockEnsemble(level.block, groups, level.energies, level.states, matrix))
    return PrimalDualPoint(point.coordinates, tuple(parts), point.target)
