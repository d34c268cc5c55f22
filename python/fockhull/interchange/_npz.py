"""Plain NumPy archives; nothing in them is pickled."""

import zipfile
from pathlib import Path
from typing import Any

import numpy as np

from fockhull.errors import ArgumentError
from fockhull.interchange.records import DensityMatrix, Integrals

_INTEGRALS = "fockhull integrals, dirac order"
_DENSITY_MATRIX = "fockhull density matrix, <a+_q a_p>"


def write_integrals(path: Path, integrals: Integrals) -> None:
    arrays: dict[str, Any] = {
        "content": _INTEGRALS,
        "one_body": integrals.one_body,
        "constant": integrals.constant,
    }
    if integrals.two_body is not None:
        arrays["two_body"] = integrals.two_body
        arrays["order"] = "dirac"
    if integrals.particles is not None:
        arrays["particles"] = integrals.particles
    _write(path, arrays)


def read_integrals(path: Path) -> Integrals:
    arrays = _read(path, _INTEGRALS)
    two_body, particles = arrays.get("two_body"), arrays.get("particles")
    return Integrals(
        arrays["one_body"],
        two_body,
        order=None if two_body is None else str(arrays["order"]),  # type: ignore[arg-type]
        constant=float(arrays["constant"]),
        particles=None if particles is None else (int(particles[0]), int(particles[1])),
    )


def write_density_matrix(path: Path, record: DensityMatrix) -> None:
    content = {"content": _DENSITY_MATRIX, "domain": record.domain}
    _write(path, {**content, "density_matrix": record.matrix})


def read_density_matrix(path: Path) -> DensityMatrix:
    arrays = _read(path, _DENSITY_MATRIX)
    return DensityMatrix(arrays["density_matrix"], str(arrays["domain"]))


def _write(path: Path, arrays: dict[str, Any]) -> None:
    with path.open("wb") as file:  # a name would get the ending .npz
        np.savez_compressed(file, **arrays)


def _read(path: Path, content: str) -> dict[str, Any]:
    try:
        with np.load(path, allow_pickle=False) as file:
            arrays = {name: file[name] for name in file.files}
    except (OSError, ValueError, AttributeError, TypeError, zipfile.BadZipFile) as error:
        raise ArgumentError("path", f"{str(path)!r} ({error})", "an npz archive") from error
    found = str(arrays.get("content", "an archive that does not say what it holds"))
    if found != content:
        raise ArgumentError("path", f"{str(path)!r} with {found}", content)
    return arrays
