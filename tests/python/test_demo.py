"""The demo runs at small size, says what it should and writes files that can be read."""

import os
import subprocess
import sys
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

xr = pytest.importorskip("xarray")
pytest.importorskip("h5netcdf")
pytest.importorskip("matplotlib")

RUN = Path(__file__).parents[2] / "demo" / "run.py"
FILES = ["energies.png", "limits.png", "repair.png", "ensembles.nc"]


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    """The report and the folder of its files; a warning would end the run."""
    folder = tmp_path_factory.mktemp("demo")
    finished = subprocess.run(
        [sys.executable, "-W", "error", str(RUN), "--small", "--output", str(folder)],
        env=os.environ | {"MPLBACKEND": "Agg"},
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert finished.returncode == 0, finished.stderr
    assert finished.stderr == ""
    return finished.stdout, folder


def test_report_has_its_sections(demo):
    report, _ = demo
    lines = report.splitlines()
    headings = [a for a, b in pairwise(lines) if a and b == "-" * len(a)]
    assert [h.split()[0] for h in headings] == ["Hydrogen", "Ring", "Chain", "Noisy", "Files"]


def test_report_gives_verdicts_in_words(demo):
    report, _ = demo
    assert "E_w is unique there" in report  # a cut multiplet is not passed over
    assert "Tightest constraint at 1.2 bohr: n4(" in report
    assert "n1(up) + n2(up) + n1(down) + n2(down) <= N_up + N_down - 1 + w1 = 3.5" in report
    assert report.count(": yes") == 2  # the repaired matrix is allowed, its ensemble verified


def test_files_are_written_and_named(demo):
    report, folder = demo
    for name in FILES:
        assert (folder / name).stat().st_size > 10_000
        assert name in report
    for name in FILES[:3]:
        assert (folder / name).read_bytes().startswith(b"\x89PNG")


def test_netcdf_keeps_complex_density_matrices(demo):
    _, folder = demo
    with xr.open_dataset(folder / "ensembles.nc", group="ring", engine="h5netcdf") as file:
        ring = file.load()
    gamma = ring["density_matrix"]
    assert gamma.dtype == np.complex128
    assert gamma.dims == ("flux", "mode", "mode_2")
    assert np.abs(gamma.imag).max() > 1e-3
    np.testing.assert_allclose(np.trace(gamma.values, axis1=1, axis2=2), 3.0, atol=1e-10)
    occupations = np.linalg.eigvalsh(gamma.values)[:, ::-1]
    np.testing.assert_allclose(ring["occupations"], occupations, atol=1e-10)


def test_netcdf_ensemble_energies_are_weighted_sums(demo):
    _, folder = demo
    for group in ("hydrogen", "ring", "bosons"):
        with xr.open_dataset(folder / "ensembles.nc", group=group, engine="h5netcdf") as file:
            stored = file.load()
        weighted = (stored["weights"] * stored["energies"].fillna(0.0)).sum("level")
        np.testing.assert_allclose(weighted, stored["energy"], atol=1e-10)
        assert (stored["stretch"] >= 1.0 - 1e-9).all()
