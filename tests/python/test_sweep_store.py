"""Stores of sweeps: resume, refusal, reading while running, ragged results."""
# ruff: noqa: N803, PLC0415

import functools
import shutil
import time

import numpy as np
import pytest
import xarray as xr

from fockhull.errors import ArgumentError
from fockhull.sweeps import SweepWarning, points
from fockhull.sweeps import sweep as noisy_sweep
from fockhull.sweeps.identity import source_hash
from fockhull.sweeps.journal import Journal

sweep = functools.partial(noisy_sweep, progress=False)
GRID = {"U": [0.0, 1.0, 4.0], "phase": [0.0, 0.5]}


def stored(store):
    return xr.open_zarr(store / "results.zarr").load()


@pytest.fixture
def store(tmp_path):
    return tmp_path / "study"


def test_store_equals_a_sweep_in_memory_and_resumes_without_computing(store):
    calls = []

    def task(U, phase):
        calls.append(U)
        return {
            "amplitude": ("site", U * np.exp(1j * phase * np.arange(3))),
            "levels": int(U) + 2,
            "bound": U > 0,
            "name": f"U = {U}",
        }

    first = sweep(task, GRID, store=store).load()
    assert len(calls) == 6
    xr.testing.assert_identical(first, sweep(task, GRID, store=store).load())
    assert len(calls) == 6
    xr.testing.assert_equal(first, sweep(task, GRID))
    xr.testing.assert_equal(first, stored(store)[list(first.data_vars)])
    assert first.levels.dtype == np.int64
    assert first.bound.dtype == np.bool_
    assert first.amplitude.dtype == np.complex128


def test_netcdf_round_trip(store, tmp_path):
    def task(U, phase):
        return {"z": U * np.exp(1j * phase), "n": 1, "s": "text"}

    result = sweep(task, GRID, store=store)
    result.to_netcdf(tmp_path / "study.nc", engine="h5netcdf")
    back = xr.open_dataset(tmp_path / "study.nc", engine="h5netcdf")
    np.testing.assert_array_equal(back.z, result.z)
    assert back.z.dtype == np.complex128
    assert list(back.s.values.ravel()) == ["text"] * 6
    assert back.attrs == result.attrs


def test_failed_points_wait_until_asked_for(store):
    broken = [True]
    calls = []

    def task(U, phase):
        calls.append((U, phase))
        if broken and U == 1.0:
            raise RuntimeError("out of licence")
        return U + phase

    with pytest.warns(SweepWarning, match="2 of 6"):
        sweep(task, GRID, store=store)
    with pytest.warns(SweepWarning, match="2 of 6"):
        sweep(task, GRID, store=store)
    assert len(calls) == 6
    broken.clear()
    result = sweep(task, GRID, store=store, retry_failed=True)
    assert len(calls) == 8
    assert bool(result.finished.all())
    assert set(result.failure.values.ravel()) == {""}
    np.testing.assert_array_equal(result.result, [[0.0, 0.5], [1.0, 1.5], [4.0, 4.5]])


def test_refused_stores_name_the_difference(store):
    def task(U, phase):
        return U + phase

    def other(U, phase):
        return U - phase

    sweep(task, GRID, store=store, version="1")
    refused = [
        ((other, GRID), {"version": "1"}, "the task is .*other"),
        ((other, GRID), {"version": "1"}, "hash of the task's source"),
        ((task, GRID), {"version": "2"}, "version= is 2, the stored one 1"),
        ((task, GRID | {"U": [0.0, 1.0]}), {"version": "1"}, r"grid\['U'\] has 2 values"),
        ((task, GRID | {"U": [0.0, 1.0, 5.0]}), {"version": "1"}, r"grid\['U'\]\[2\] is 5.0"),
        ((task, dict(reversed(GRID.items()))), {"version": "1"}, "the grid's names are"),
        ((task, points(U=[0.0], phase=[0.0])), {"version": "1"}, "the grid is a table"),
        ((task, GRID), {"version": "1", "ragged": ["x"]}, "ragged="),
        ((task, GRID), {"version": "1", "resume": False}, "resume=False"),
    ]
    for arguments, options, message in refused:
        with pytest.raises(ArgumentError, match=message):
            sweep(*arguments, store=store, **options)


def test_another_package_version_is_refused(store, monkeypatch):
    sweep(abs_of, {"x": [1]}, store=store)
    monkeypatch.setattr("fockhull.sweeps.identity._package", lambda: "99.0")
    with pytest.raises(ArgumentError, match=r"version of fockhull is 99\.0"):
        sweep(abs_of, {"x": [1]}, store=store)


def test_a_folder_with_other_files_is_refused(tmp_path):
    (tmp_path / "thesis.txt").write_text("do not lose")
    with pytest.raises(ArgumentError, match="other files"):
        sweep(abs_of, {"x": [1]}, store=tmp_path)
    assert (tmp_path / "thesis.txt").read_text() == "do not lose"


def test_a_second_driver_is_refused(store):
    def outer(x):
        with pytest.raises(ArgumentError, match="in use"):
            sweep(outer, {"x": [1]}, store=store)
        return x

    assert sweep(outer, {"x": [1]}, store=store).result.item() == 1


def test_readable_while_it_runs(store):
    grid = {"x": range(3)}

    def task(x):
        if x == 2:
            time.sleep(1.6)
            with xr.open_zarr(store / "results.zarr") as so_far:
                return int(so_far.finished.sum())
        return x

    assert sweep(task, grid, store=store).result.values[2] == 2


@pytest.mark.parametrize("damage", ["folder", "array", "mask"])
def test_the_journal_rebuilds_a_lost_zarr_store(store, damage):
    calls = []

    def task(U, phase):
        calls.append(U)
        return {"e": U + phase}

    first = sweep(task, GRID, store=store).load()
    lost = {"folder": "results.zarr", "array": "results.zarr/e", "mask": "results.zarr/finished"}
    shutil.rmtree(store / lost[damage])
    xr.testing.assert_equal(first, sweep(task, GRID, store=store).load())
    assert len(calls) == 6


def test_ragged_dimensions_are_padded(store):
    def task(n):
        dataset = xr.Dataset(
            {"levels": ("level", np.arange(n, dtype=float)), "count": ("level", np.arange(n))},
            {"level": np.arange(n)},
        )
        return {"a": dataset, "names": ("level", [f"L{i}" for i in range(n)])}

    grid = {"n": [2, 4, 1, 3]}
    result = sweep(task, grid, store=store, ragged=["level"]).load()
    nan = np.nan
    expected = [[0, 1, nan, nan], [0, 1, 2, 3], [0, nan, nan, nan], [0, 1, 2, nan]]
    np.testing.assert_array_equal(result.a_levels, expected)
    np.testing.assert_array_equal(result.a_count, expected)
    assert list(result.names.values[0]) == ["L0", "L1", "", ""]
    assert list(result.level.values) == [0, 1, 2, 3]
    xr.testing.assert_equal(result, sweep(task, grid, ragged=["level"]))


def test_many_points_cross_chunks(store):
    grid = {"a": range(7), "b": range(50), "c": range(3)}
    result = sweep(lambda a, b, c: a * 1000 + b * 10 + c, grid, store=store)
    a, b, c = np.meshgrid(*(np.array(axis) for axis in grid.values()), indexing="ij")
    np.testing.assert_array_equal(result.result, a * 1000 + b * 10 + c)
    files = sum(1 for path in (store / "results.zarr" / "result").rglob("*") if path.is_file())
    assert files <= 2 + 1050 // 64


def test_warm_starts_resume_from_the_store(store):
    broken = [True]

    def task(x, previous):
        if broken and x == 2:
            raise RuntimeError("not yet")
        return {"total": x + (0 if previous is None else int(previous.total))}

    with pytest.warns(SweepWarning):
        sweep(task, {"x": [0, 1, 2]}, store=store, warm_start="x")
    broken.clear()
    result = sweep(task, {"x": [0, 1, 2]}, store=store, warm_start="x", retry_failed=True)
    np.testing.assert_array_equal(result.total, [0, 1, 3])


def abs_of(x):
    return abs(x)


SCALE = 2.0


def helped(x):
    return SCALE * abs_of(x)


def test_source_hash_sees_what_matters():
    def bound(scale):
        return lambda x: scale * x

    assert source_hash(bound(1.0)) == source_hash(bound(1.0))
    assert source_hash(bound(1.0)) != source_hash(bound(2.0))
    assert source_hash(functools.partial(abs_of, 1)) != source_hash(functools.partial(abs_of, 2))


def test_source_hash_sees_constants_and_helpers_of_the_module(monkeypatch):
    before = source_hash(helped)
    monkeypatch.setattr(f"{__name__}.SCALE", 3.0)
    scaled = source_hash(helped)
    assert scaled != before
    monkeypatch.undo()
    assert source_hash(helped) == before
    monkeypatch.setitem(globals(), "abs_of", helped.__class__(helped.__code__, globals()))
    assert source_hash(helped) != before


def test_source_hash_ignores_comments_and_blank_lines(tmp_path, monkeypatch):
    monkeypatch.syspath_prepend(tmp_path)
    (tmp_path / "plain_study.py").write_text("def task(x):\n    return x + 1\n")
    (tmp_path / "noted_study.py").write_text(
        "def task(x):\n    # more\n\n    return x + 1  # one\n"
    )
    (tmp_path / "other_study.py").write_text("def task(x):\n    return x + 2\n")
    import noted_study
    import other_study
    import plain_study

    assert source_hash(plain_study.task) == source_hash(noted_study.task)
    assert source_hash(plain_study.task) != source_hash(other_study.task)


def test_nothing_is_unpickled_on_reading(store, monkeypatch):
    def task(U, phase):
        return {"s": "text", "z": np.exp(1j * phase), "levels": ("level", np.arange(3))}

    first = sweep(task, GRID, store=store).load()

    def refuse(*arguments, **options):
        raise AssertionError("unpickled")

    for name in ("load", "loads", "Unpickler"):
        monkeypatch.setattr(f"pickle.{name}", refuse)
    xr.testing.assert_identical(first, sweep(task, GRID, store=store).load())


def test_everything_is_folded_anew_after_the_machine_went_down(store):
    def task(U, phase):
        return {"e": U + phase}

    first = sweep(task, GRID, store=store).load()
    journal = Journal(store / "journal.sqlite")
    journal.write([], {"writing_system": "before the power cut"})
    journal.close()
    for chunk in (store / "results.zarr" / "e").rglob("c/*/*"):
        chunk.write_bytes(b"")
    xr.testing.assert_identical(first, sweep(task, GRID, store=store).load())


def test_attributes_that_stop_being_common_are_left_out(store):
    broken = [True]

    def task(x):
        if x == 2 and broken:
            raise RuntimeError("later")
        return xr.Dataset({"e": ((), float(x), {"units": "t"})}, attrs={"sector": min(x, 1)})

    with pytest.warns(SweepWarning):
        first = sweep(task, {"x": [1, 2, 3]}, store=store)
    assert first.attrs["sector"] == 1
    broken.clear()
    result = sweep(task, {"x": [1, 2, 3]}, store=store, retry_failed=True)
    assert result.attrs["sector"] == 1
    assert "sector" not in sweep(task, {"x": [0, 1]}).attrs
    assert result.e.attrs == {"units": "t"}
