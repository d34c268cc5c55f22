"""Sweeps through lost workers, lost drivers and interrupts."""
# ruff: noqa: N803, PLC0415

import functools
import multiprocessing
import os
import signal
import subprocess
import sys
import textwrap
import threading
import time
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

import fockhull.sweeps
from fockhull.sweeps import SweepError, SweepWarning
from fockhull.sweeps import sweep as noisy_sweep

sweep = functools.partial(noisy_sweep, progress=False)
GRID = {"U": [0.0, 1.0, 2.0, 4.0, 6.0, 8.0], "phase": [0.0, 0.2, 0.4, 0.6, 0.8, 1.0]}
PATIENCE = 60.0


def diagonalized(U, phase):
    """Levels of a flux-threaded ring: something with rounding in it."""
    hop = -np.exp(1j * np.pi * phase / 6)
    matrix = np.diag(U * np.arange(6.0)) + 0j
    for site in range(6):
        matrix[site, (site + 1) % 6] += hop
        matrix[(site + 1) % 6, site] += np.conj(hop)
    levels, vectors = np.linalg.eigh(matrix)
    return {"levels": ("state", levels), "weight": ("site", np.abs(vectors[:, 0]) ** 2)}


def executions(folder):
    """Process and point of each execution, from the files the task left."""
    return [path.name.split("_")[:2] for path in Path(folder).iterdir()]


def wait_until(condition):
    end = time.monotonic() + PATIENCE
    while not condition():
        assert time.monotonic() < end, "waited in vain"
        time.sleep(0.01)


def test_dask_cluster_with_a_killed_worker(tmp_path):
    distributed = pytest.importorskip("distributed")
    marks, store = tmp_path / "marks", tmp_path / "store"
    marks.mkdir()
    compute = diagonalized

    def task(U, phase):
        import os
        import time
        from pathlib import Path

        Path(marks, f"{os.getpid()}_{U}-{phase}_{time.monotonic_ns()}").touch()
        time.sleep(0.05)
        return compute(U, phase)

    with (
        distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        victims = list(client.run(os.getpid).values())

        def kill_half_way():
            wait_until(lambda: len(executions(marks)) >= 18)
            os.kill(victims[0], signal.SIGKILL)

        killer = threading.Thread(target=kill_half_way)
        killer.start()
        result = sweep(task, GRID, store=store, executor=client.get_executor()).load()
        killer.join()
        done = executions(marks)
        again = sweep(task, GRID, store=store, executor=client.get_executor()).load()

    assert bool(result.finished.all())
    assert {point for _, point in done} == {f"{U}-{p}" for U in GRID["U"] for p in GRID["phase"]}
    assert str(os.getpid()) not in {process for process, _ in done}
    assert len({process for process, _ in done}) >= 2
    assert len(done) <= 36 + 4, "finished points were computed again"
    serial = sweep(diagonalized, GRID)
    xr.testing.assert_allclose(result, serial, rtol=1e-12, atol=1e-12)
    assert executions(marks) == done, "the second call computed something"
    xr.testing.assert_identical(again, result)


STUDY = """
import logging, sys, time
from pathlib import Path

def task(x):
    Path("marks", f"{x}_{time.monotonic_ns()}").touch()
    time.sleep(0.02)
    return {"square": x * x, "z": x * 1j}

class Reported(logging.Handler):
    def emit(self, record):
        if record.event == "done":
            print(record.facts["number"], flush=True)

if __name__ == "__main__":
    import study
    from fockhull.sweeps import sweep

    logger = logging.getLogger("fockhull.sweep")
    logger.setLevel(logging.DEBUG)
    logger.addHandler(Reported())
    sweep(study.task, {"x": range(150)}, store="store", progress=False)
"""


@pytest.mark.parametrize("ending", [signal.SIGKILL, signal.SIGINT])
def test_driver_stopped_half_way(tmp_path, monkeypatch, ending):
    (tmp_path / "study.py").write_text(textwrap.dedent(STUDY))
    (tmp_path / "marks").mkdir()
    package = str(Path(fockhull.sweeps.__file__).parents[2])
    with subprocess.Popen(
        [sys.executable, "study.py"],
        cwd=tmp_path,
        env=os.environ | {"PYTHONPATH": package},
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        text=True,
    ) as driver:
        reported = []
        for line in driver.stdout:
            reported.append(int(line))
            if len(reported) == 75:
                driver.send_signal(ending)
        assert driver.wait(PATIENCE) != 0
    assert 75 <= len(reported) < 150

    so_far = xr.open_zarr(tmp_path / "store" / "results.zarr").load()
    finished = so_far.x.values[so_far.finished.values]
    np.testing.assert_array_equal(so_far.square.sel(x=finished), finished**2)
    if ending == signal.SIGINT:
        assert set(reported) <= set(finished.tolist())

    monkeypatch.chdir(tmp_path)
    monkeypatch.syspath_prepend(tmp_path)
    sys.modules.pop("study", None)
    import study

    result = sweep(study.task, {"x": range(150)}, store="store")
    assert bool(result.finished.all())
    np.testing.assert_array_equal(result.square, np.arange(150) ** 2)
    np.testing.assert_array_equal(result.z, np.arange(150) * 1j)
    runs = [int(path.name.split("_")[0]) for path in (tmp_path / "marks").iterdir()]
    assert all(runs.count(number) == 1 for number in reported), "a reported point was lost"


def fatal_at_three(x):
    if x == 3:
        os.kill(os.getpid(), signal.SIGKILL)
    time.sleep(0.01)
    return x


def two_processes():
    return ProcessPoolExecutor(2, mp_context=multiprocessing.get_context("fork"))


def test_a_point_that_kills_its_worker_fails_alone():
    with pytest.warns(SweepWarning, match="1 of 8 points failed.*worker lost 3 times"):
        result = sweep(fatal_at_three, {"x": range(8)}, executor=two_processes)
    assert list(np.flatnonzero(~result.finished.values)) == [3]


def test_a_broken_executor_without_replacement_keeps_what_is_done(tmp_path):
    grid = {"x": range(8)}
    with two_processes() as executor, pytest.raises(SweepError, match="to have it replaced"):
        sweep(fatal_at_three, grid, store=tmp_path / "s", executor=executor, lost_retries=5)
    with pytest.warns(SweepWarning, match="1 of 8"):
        result = sweep(fatal_at_three, grid, store=tmp_path / "s", executor=two_processes)
    assert int(result.finished.sum()) == 7


def test_a_task_that_cannot_be_pickled_is_named():
    with two_processes() as executor, pytest.warns(SweepWarning, match="pickle"):
        sweep(lambda x: x, {"x": [1, 2]}, executor=executor)
