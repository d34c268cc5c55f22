"""States followed through level crossings of a sweep."""

import functools

import numpy as np
import pytest
import xarray as xr

from fockhull.errors import ArgumentError, ArgumentTypeError
from fockhull.sweeps import SweepWarning, follow_states
from fockhull.sweeps import sweep as noisy_sweep

sweep = functools.partial(noisy_sweep, progress=False)


def crossing_levels(x, coupling=0.0, phase=0.7):
    """Two levels x and 1 - x, which cross at 1/2 (unless coupled), and one far above."""
    matrix = np.diag([x, 1 - x, 5.0]).astype(complex)
    matrix[0, 1] = coupling * np.exp(1j * phase)
    matrix[1, 0] = np.conj(matrix[0, 1])
    energies, vectors = np.linalg.eigh(matrix)
    return {
        "energies": ("level", energies),
        "vectors": (("configuration", "level"), vectors * np.exp(1j * x)),
    }


AXIS = [0.0, 0.2, 0.4, 0.6, 0.8]


def test_states_keep_their_character_through_a_crossing():
    followed = follow_states(sweep(crossing_levels, {"x": AXIS}), "x")
    axis = np.array(AXIS)
    np.testing.assert_allclose(followed.energies, np.stack([axis, 1 - axis, 0 * axis + 5], -1))
    assert followed.followed_crossing.sel(x=0.6).values.tolist() == [True, True, False]
    assert int(followed.followed_crossing.sum()) == 2
    np.testing.assert_allclose(followed.followed_overlap[1:], 1.0)
    assert followed.followed_level.sel(x=0.8).values.tolist() == [1, 0, 2]
    np.testing.assert_allclose(np.abs(followed.vectors.sel(x=0.8)), np.eye(3), atol=1e-14)


def test_avoided_crossings_in_small_steps_keep_the_order():
    grid = {"coupling": [0.0, 0.2], "x": np.linspace(0, 1, 22)}
    followed = follow_states(sweep(crossing_levels, grid), "x")
    crossed = followed.followed_crossing.any(["x", "level"])
    assert crossed.values.tolist() == [True, False]
    assert float(followed.followed_overlap.min()) > 0.9


def test_missing_points_are_stepped_over():
    def task(x):
        if x == 0.6:
            raise RuntimeError("no convergence")
        return crossing_levels(x)

    with pytest.warns(SweepWarning):
        followed = follow_states(sweep(task, {"x": AXIS}), "x")
    assert followed.followed_level.sel(x=0.6).values.tolist() == [-1, -1, -1]
    assert followed.followed_crossing.sel(x=0.8).values.tolist() == [True, True, False]
    np.testing.assert_allclose(followed.energies.sel(x=0.8), [0.8, 0.2, 5.0])


def test_wrong_names():
    results = sweep(crossing_levels, {"x": AXIS})
    with pytest.raises(ArgumentTypeError, match="`results`"):
        follow_states({"vectors": 1}, "x")
    with pytest.raises(ArgumentError, match="'finished'"):
        follow_states(results.drop_vars("finished"), "x")
    with pytest.raises(ArgumentError, match=r"`vectors`.*'orbitals'"):
        follow_states(results, "x", vectors="orbitals")
    with pytest.raises(ArgumentError, match=r"`dim`.*'y'"):
        follow_states(results, "y")
    with pytest.raises(ArgumentError, match=r"`state`.*'level'"):
        follow_states(results, "x", state="place")


def test_the_results_are_left_alone():
    results = sweep(crossing_levels, {"x": AXIS})
    before = results.copy(deep=True)
    follow_states(results, "x")
    xr.testing.assert_identical(results, before)
