"""Labelled netCDF files through xarray and h5netcdf; complex numbers are kept."""

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from fockhull._core import __version__
from fockhull.errors import ArgumentError
from fockhull.interchange.records import DensityMatrix, Integrals

if TYPE_CHECKING:
    import xarray as xr

_SPIN = {"spin": ["up", "down"]}


def write_integrals(path: Path, integrals: Integrals) -> None:
    h = integrals.one_body
    dims = ("mode", "mode_2") if h.ndim == 2 else ("spin", "mode", "mode_2")
    variables: dict[str, Any] = {
        "one_body": (dims, h),
        "constant": ((), integrals.constant),
    }
    if integrals.two_body is not None:
        named = {"order": "dirac", "meaning": "v[p, q, r, s] = <pq|v|rs>, not antisymmetrised"}
        axes = ("mode", "mode_2", "mode_3", "mode_4")
        variables["two_body"] = (axes, integrals.two_body, named)
    if integrals.particles is not None:
        variables["particles"] = ("spin", np.array(integrals.particles))
    _write(path, "integrals", variables, _SPIN if _has_spin(variables) else {})


def read_integrals(path: Path) -> Integrals:
    data = _read(path, "integrals")
    two_body = data.get("two_body")
    particles = data.get("particles")
    return Integrals(
        data["one_body"].values,
        None if two_body is None else two_body.values,
        order=None if two_body is None else two_body.attrs.get("order"),
        constant=float(data["constant"]),
        particles=None if particles is None else (int(particles[0]), int(particles[1])),
    )


def write_density_matrix(path: Path, record: DensityMatrix) -> None:
    dims = ("mode", "mode_2") if record.matrix.ndim == 2 else ("spin", "mode", "mode_2")
    attributes = {"domain": record.domain, "meaning": "gamma_pq = <a+_q a_p>"}
    variables = {"density_matrix": (dims, record.matrix, attributes)}
    _write(path, "density matrix", variables, _SPIN if _has_spin(variables) else {})


def read_density_matrix(path: Path) -> DensityMatrix:
    matrix = _read(path, "density matrix")["density_matrix"]
    return DensityMatrix(matrix.values, matrix.attrs["domain"])


def _has_spin(variables: dict[str, Any]) -> bool:
    return any("spin" in variable[0] for variable in variables.values())


def _xarray() -> Any:
    try:
        import h5netcdf  # noqa: F401, PLC0415
        import xarray  # noqa: PLC0415
    except ImportError as error:
        given = f"netcdf, whose library {error.name} is not installed"
        expected = "it installed: pip install fockhull[xarray]"
        raise ArgumentError("format", given, expected) from error
    return xarray


def _write(path: Path, content: str, variables: Any, coordinates: Any) -> None:
    attributes = {"content": content, "fockhull_version": __version__}
    data = _xarray().Dataset(variables, coordinates, attributes)
    data.to_netcdf(path, engine="h5netcdf")


def _read(path: Path, content: str) -> "xr.Dataset":
    xarray = _xarray()
    try:
        with xarray.open_dataset(path, engine="h5netcdf") as file:
            data: xr.Dataset = file.load()
    except (OSError, ValueError) as error:
        raise ArgumentError("path", f"{str(path)!r} ({error})", "a netCDF file") from error
    found = data.attrs.get("content", "something it does not name")
    if found != content:
        raise ArgumentError("path", f"{str(path)!r} with {found}", content)
    return data
