"""Integrals and density matrices in and out of open files.

Three formats, chosen by the name's ending or by ``format=``: ``"npz"`` (NumPy), ``"netcdf"``
(xarray and h5netcdf) and ``"trexio"`` (the open TREXIO library, an optional extra). The index
order of two-body arrays is always said: callers name theirs, files say ``dirac``, and what is
read comes in Dirac order.

==============  ============  ===========  =====================================
what            npz           netCDF       TREXIO (real, spin-free, hartree)
==============  ============  ===========  =====================================
one-body        yes           yes          same for both spins; may be complex
two-body        yes           yes          real orbitals (eightfold symmetry)
density matrix  yes           yes          real; spin-resolved or spin-summed
endings         ``.npz``      ``.nc``      ``.h5``, ``.hdf5``, ``.trexio``
==============  ============  ===========  =====================================

What a format has no place for is refused, never dropped.
"""

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from os import PathLike
from pathlib import Path
from types import ModuleType
from typing import Literal

import numpy.typing as npt

from fockhull.errors import ArgumentError, ArgumentTypeError
from fockhull.interchange import _netcdf, _npz, _trexio
from fockhull.interchange.records import DensityMatrix, Integrals

__all__ = [
    "DensityMatrix",
    "Integrals",
    "read_density_matrix",
    "read_integrals",
    "write_density_matrix",
    "write_integrals",
]

_FORMATS: dict[str, ModuleType] = {"npz": _npz, "netcdf": _netcdf, "trexio": _trexio}
_ENDINGS = {
    ".npz": "npz",
    ".nc": "netcdf",
    ".h5": "trexio",
    ".hdf5": "trexio",
    ".trexio": "trexio",
}


def write_integrals(
    path: str | PathLike[str],
    integrals: Integrals,
    *,
    format: Literal["npz", "netcdf", "trexio"] | None = None,
    overwrite: bool = False,
) -> None:
    """Write integrals to a file.

    Parameters
    ----------
    path : path
        Its ending names the format: ``.npz``, ``.nc``, ``.h5``, ``.hdf5`` or ``.trexio``.
    integrals : Integrals
        See also `Integrals.of` for those of a Hamiltonian.
    format : {"npz", "netcdf", "trexio"}, optional
        Needed where the ending does not say it.
    overwrite : bool
        Replace an existing file (at once, when the new one is complete).

    Raises
    ------
    ArgumentError
        If the file exists, the format is not known, its library is not installed, or it has no
        place for these integrals (TREXIO: complex two-body arrays, real ones without the
        eightfold symmetry of real orbitals, one-body terms that differ between the spins).
    ArgumentTypeError
        If `integrals` is something else.
    """
    if not isinstance(integrals, Integrals):
        expected = "Integrals(one_body, two_body, order=...) or Integrals.of(hamiltonian)"
        raise ArgumentTypeError("integrals", type(integrals).__name__, expected)
    target, module = _resolved(path, format)
    with _replacing(target, overwrite) as part:
        module.write_integrals(part, integrals)


def read_integrals(
    path: str | PathLike[str],
    *,
    format: Literal["npz", "netcdf", "trexio"] | None = None,
) -> Integrals:
    """Read integrals from a file.

    Parameters
    ----------
    path, format
        As for `write_integrals`. TREXIO files of other programs serve as well, if they hold
        one- and two-electron integrals over orthonormal molecular orbitals.

    Returns
    -------
    Integrals
        Two-body array in Dirac order, shape (d, d, d, d), units those of the file (TREXIO:
        hartree; the constant is the nuclear repulsion, 0 where the file has none).

    Raises
    ------
    ArgumentError
        If the file does not exist, cannot be read or lacks something.
    """
    target, module = _resolved(path, format)
    _require_file(target)
    integrals: Integrals = module.read_integrals(target)
    return integrals


def write_density_matrix(
    path: str | PathLike[str],
    density_matrix: npt.ArrayLike,
    *,
    domain: Literal["spin-resolved", "spin-summed", "spinless"],
    format: Literal["npz", "netcdf", "trexio"] | None = None,
    overwrite: bool = False,
) -> None:
    """Write a one-body density matrix gamma_pq = <a+_q a_p> to a file.

    Parameters
    ----------
    path, format, overwrite
        As for `write_integrals`.
    density_matrix : array_like, shape (d, d) or (2, d, d)
        Hermitian.
    domain : {"spin-resolved", "spin-summed", "spinless"}
        What the matrix is: (2, d, d) with up first, the sum of both, or without spin. The shape
        does not tell the last two apart, so there is no default.

    Raises
    ------
    ArgumentError
        For a wrong shape, a matrix that is not Hermitian, or one that the format has no place
        for (TREXIO: complex or spinless ones); also as for `write_integrals`.
    """
    record = DensityMatrix(density_matrix, domain)
    target, module = _resolved(path, format)
    with _replacing(target, overwrite) as part:
        module.write_density_matrix(part, record)


def read_density_matrix(
    path: str | PathLike[str],
    *,
    format: Literal["npz", "netcdf", "trexio"] | None = None,
) -> DensityMatrix:
    """Read a one-body density matrix from a file.

    Parameters
    ----------
    path, format
        As for `write_integrals`.

    Returns
    -------
    DensityMatrix
        The matrix, and the domain that says what it is. A TREXIO file that has both spins apart
        gives the spin-resolved one.

    Raises
    ------
    ArgumentError
        If the file does not exist, cannot be read or holds no density matrix.
    """
    target, module = _resolved(path, format)
    _require_file(target)
    record: DensityMatrix = module.read_density_matrix(target)
    return record


def _resolved(path: str | PathLike[str], name: str | None) -> tuple[Path, ModuleType]:
    try:
        target = Path(path)
    except TypeError:
        raise ArgumentTypeError("path", type(path).__name__, "a path") from None
    chosen = _ENDINGS.get(target.suffix.lower()) if name is None else name
    if chosen is None:
        expected = f"an ending out of {', '.join(_ENDINGS)}, or format="
        raise ArgumentError("path", repr(str(target)), expected)
    if chosen not in _FORMATS:
        raise ArgumentError("format", repr(chosen), f"one of {', '.join(_FORMATS)}")
    return target, _FORMATS[chosen]


def _require_file(path: Path) -> None:
    if not path.exists():
        raise ArgumentError("path", repr(str(path)), "a file that exists")


@contextmanager
def _replacing(target: Path, overwrite: bool) -> Iterator[Path]:
    """Give a temporary name beside the target; the file gets its name when it is complete."""
    if target.exists() and not overwrite:
        expected = "a file that does not exist yet (or overwrite=True)"
        raise ArgumentError("path", repr(str(target)), expected)
    if not target.parent.is_dir():
        raise ArgumentError("path", repr(str(target)), "a file in a folder that exists")
    with tempfile.TemporaryDirectory(dir=target.parent, prefix=".writing-") as folder:
        part = Path(folder, target.name)
        yield part
        os.replace(part, target)
