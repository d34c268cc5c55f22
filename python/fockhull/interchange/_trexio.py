"""The open TREXIO format for electrons, through its own library.

Conventions of the format, from its published specification (*TREX configuration file*,
sections on molecular orbitals and on reduced density matrices): two-electron integrals are
sparse, <pq|rs> in physicists' notation (Dirac order), of real orbitals; indices count from 0 in
Python; energies in hartree. Only symmetry-distinct integrals are written; a file may hold any
members of each class of eight.
"""

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from fockhull._core import __version__
from fockhull.errors import ArgumentError
from fockhull.interchange.records import DensityMatrix, Integrals

_SYMMETRY_TOLERANCE = 1e-8
_EQUIVALENT = (
    (0, 1, 2, 3),
    (2, 1, 0, 3),
    (0, 3, 2, 1),
    (2, 3, 0, 1),
    (1, 0, 3, 2),
    (3, 0, 1, 2),
    (1, 2, 3, 0),
    (3, 2, 1, 0),
)
"""Permutations of p, q, r, s that leave <pq|rs> of real orbitals as it is."""


def write_integrals(path: Path, integrals: Integrals) -> None:
    h = integrals.one_body
    if h.ndim == 3 and not np.array_equal(h[0], h[1]):
        _refuse("one_body", "one-body terms that differ between the spins", "equal ones")
    h = h if h.ndim == 2 else h[0]
    two_body = _eightfold(integrals.two_body)
    with _file(path, "w") as (trexio, file):
        trexio.write_metadata_description(file, f"written by fockhull {__version__}")
        trexio.write_mo_num(file, integrals.orbitals)
        trexio.write_mo_1e_int_core_hamiltonian(file, np.ascontiguousarray(h.real))
        if np.iscomplexobj(h):
            trexio.write_mo_1e_int_core_hamiltonian_im(file, np.ascontiguousarray(h.imag))
        trexio.write_nucleus_repulsion(file, integrals.constant)
        if integrals.particles is not None:
            up, down = integrals.particles
            trexio.write_electron_num(file, up + down)
            trexio.write_electron_up_num(file, up)
            trexio.write_electron_dn_num(file, down)
        if two_body is not None:
            indices, values = _distinct(two_body)
            trexio.write_mo_2e_int_eri(file, 0, len(values), indices, values)


def read_integrals(path: Path) -> Integrals:
    with _file(path, "r") as (trexio, file):
        _require(path, trexio.has_mo_1e_int_core_hamiltonian(file), "a core Hamiltonian")
        _refuse_spin_orbitals(path, trexio, file)
        d = trexio.read_mo_num(file)
        h = trexio.read_mo_1e_int_core_hamiltonian(file)
        if trexio.has_mo_1e_int_core_hamiltonian_im(file):
            h = h + 1j * trexio.read_mo_1e_int_core_hamiltonian_im(file)
        two_body = _all_integrals(trexio, file, d) if trexio.has_mo_2e_int_eri(file) else None
        counted = trexio.has_electron_up_num(file) and trexio.has_electron_dn_num(file)
        return Integrals(
            np.reshape(h, (d, d)),
            two_body,
            order=None if two_body is None else "dirac",
            constant=(
                trexio.read_nucleus_repulsion(file) if trexio.has_nucleus_repulsion(file) else 0.0
            ),
            particles=(
                (trexio.read_electron_up_num(file), trexio.read_electron_dn_num(file))
                if counted
                else None
            ),
        )


def write_density_matrix(path: Path, record: DensityMatrix) -> None:
    gamma = record.matrix
    if record.domain == "spinless":
        _refuse("domain", "a spinless density matrix", "one of electrons with spin")
    if np.iscomplexobj(gamma):
        _refuse("density_matrix", "complex numbers", "real ones")
    with _file(path, "w") as (trexio, file):
        trexio.write_metadata_description(file, f"written by fockhull {__version__}")
        trexio.write_mo_num(file, gamma.shape[-1])
        if record.domain == "spin-summed":
            trexio.write_rdm_1e(file, np.ascontiguousarray(gamma))
        else:
            up, down = gamma
            trexio.write_rdm_1e(file, up + down)
            trexio.write_rdm_1e_up(file, np.ascontiguousarray(up))
            trexio.write_rdm_1e_dn(file, np.ascontiguousarray(down))


def read_density_matrix(path: Path) -> DensityMatrix:
    with _file(path, "r") as (trexio, file):
        if trexio.has_rdm_1e_up(file) and trexio.has_rdm_1e_dn(file):
            matrices = (trexio.read_rdm_1e_up(file), trexio.read_rdm_1e_dn(file))
            return DensityMatrix(np.stack(matrices), "spin-resolved")
        _require(path, trexio.has_rdm_1e(file), "a one-body density matrix")
        return DensityMatrix(trexio.read_rdm_1e(file), "spin-summed")


def _eightfold(two_body: Any) -> npt.NDArray[np.float64] | None:
    """Refuse integrals that are not those of real orbitals."""
    if two_body is None:
        return None
    if np.iscomplexobj(two_body):
        _refuse("two_body", "complex two-body integrals", "real ones")
    turned = two_body.transpose(2, 1, 0, 3)
    deviation = np.abs(two_body - turned).max(initial=0.0)
    if deviation > _SYMMETRY_TOLERANCE * np.abs(two_body).max(initial=0.0):
        given = f"integrals with <pq|rs> - <rq|ps> up to {deviation:.3g}"
        _refuse("two_body", given, "the eightfold symmetry of real orbitals")
    averaged: npt.NDArray[np.float64] = (two_body + turned) / 2
    return averaged


def _distinct(two_body: Any) -> tuple[npt.NDArray[np.int32], npt.NDArray[np.float64]]:
    """Pick one of each class of eight, those that vanish left out."""
    p, q, r, s = np.indices(two_body.shape, sparse=True)
    first, second = p * (p + 1) // 2 + r, q * (q + 1) // 2 + s
    chosen = (p >= r) & (q >= s) & (first >= second) & (two_body != 0.0)
    chosen[0, 0, 0, 0] = True  # an empty list cannot be written
    return np.argwhere(chosen).astype(np.int32), two_body[chosen]


def _all_integrals(trexio: Any, file: Any, d: int) -> npt.NDArray[np.float64]:
    count = trexio.read_mo_2e_int_eri_size(file)
    indices, values, _, _ = trexio.read_mo_2e_int_eri(file, 0, count)
    two_body = np.zeros((d,) * 4)
    for order in _EQUIVALENT:
        two_body[tuple(indices[:, order].T)] = values
    return two_body


def _refuse_spin_orbitals(path: Path, trexio: Any, file: Any) -> None:
    if trexio.has_mo_spin(file) and np.any(trexio.read_mo_spin(file)):
        given = f"{str(path)!r} with different orbitals for up and down"
        raise ArgumentError("path", given, "integrals over one set of orbitals")


def _refuse(argument: str, given: str, needed: str) -> None:
    expected = f"{needed}, since TREXIO has no place for others (npz and netcdf do)"
    raise ArgumentError(argument, given, expected)


def _require(path: Path, present: bool, what: str) -> None:
    if not present:
        raise ArgumentError("path", f"{str(path)!r} without it", f"a TREXIO file with {what}")


@contextmanager
def _file(path: Path, mode: str) -> Iterator[tuple[Any, Any]]:
    try:
        import trexio  # noqa: PLC0415
    except ImportError as error:
        expected = "it installed: pip install fockhull[trexio]"
        raise ArgumentError("format", "trexio, which is not installed", expected) from error
    try:
        file = trexio.File(str(path), mode=mode, back_end=trexio.TREXIO_HDF5)
    except trexio.Error as error:
        given = f"{str(path)!r} ({error})"
        raise ArgumentError("path", given, "a TREXIO file (HDF5)") from error
    with file:
        yield trexio, file
