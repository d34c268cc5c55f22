"""Limits of single occupations and of their leading sums, from the support function."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from fockhull.polytope import ExclusionPolytope

RealArray = npt.NDArray[np.float64]


class Limits(NamedTuple):
    """Least and largest values over the polytope, in the shape of decreasing occupations."""

    lower: RealArray
    upper: RealArray


def of_leading_sums(polytope: ExclusionPolytope) -> Limits:
    """Limits of n_1 + ... + n_k for k = 1, ..., d (per spin where resolved)."""
    d = polytope.shape[-1]
    leading = np.tril(np.ones((d, d)))
    if len(polytope.shape) == 1:
        upper = -polytope.support(-leading).value
    else:
        h = np.zeros((2, d, 2, d))
        h[0, :, 0], h[1, :, 1] = -leading, -leading
        upper = -polytope.support(h).value
    # decreasing numbers: the first k hold at least their even share, and the centre is allowed
    lower = upper[..., -1:] * np.arange(1, d + 1) / d
    return Limits(lower, upper)


def of_occupations(polytope: ExclusionPolytope) -> Limits:
    """Limits of the k-th largest occupation.

    Averaging the first k occupations stays inside, so the largest n_k is the largest leading sum
    over k; averaging those from k on gives the least.
    """
    sums = of_leading_sums(polytope).upper
    d = sums.shape[-1]
    before = np.concatenate([np.zeros((*sums.shape[:-1], 1)), sums[..., :-1]], axis=-1)
    k = np.arange(1, d + 1)
    return Limits((sums[..., -1:] - before) / (d - k + 1), sums / k)
