"""The ensembles of all sweeps in one netCDF file, read back and compared."""

from collections.abc import Mapping
from pathlib import Path

import xarray as xr

from parameter_sweep import Sweep


def write(sweeps: Mapping[str, Sweep], path: Path) -> str:
    """Write one group for each sweep, check that everything comes back, and say so."""
    path.unlink(missing_ok=True)
    described = []
    for group, sweep in sweeps.items():
        dataset = sweep.dataset()
        dataset.to_netcdf(path, mode="a", group=group, engine="h5netcdf")
        with xr.open_dataset(path, group=group, engine="h5netcdf") as file:
            stored = file.load()
        xr.testing.assert_identical(stored, dataset)
        described.append(f"{group} ({stored['density_matrix'].dtype})")
    return f"{', '.join(described)}; read back identical"
