"""Spaces of one-body potentials: what the dual maximises over."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull.errors import ArgumentError

__all__ = ["PotentialSpace", "commuting_with"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

_RANK_TOLERANCE = 1e-10
_CLOSED = 1e-8
_NOISE = 1e-14


@dataclass(frozen=True, eq=False)
class PotentialSpace:
    """An orthonormal basis of Hermitian one-body operators without trace.

    The constant (one a spin where spins are resolved) is left out: it moves the energy and
    Tr(h gamma) alike.
    """

    basis: ScalarArray
    """Shape (n, components, d, d); Re sum conj(B_i) B_j = delta_ij."""

    @classmethod
    def hermitian(cls, components: int, modes: int, *, is_complex: bool) -> PotentialSpace:
        """All Hermitian (or all real symmetric) operators, independent for each component."""
        return cls.spanned_by(_hermitian_units(components, modes, is_complex))

    @classmethod
    def diagonal(cls, components: int, modes: int) -> PotentialSpace:
        """Site energies, independent for each component."""
        units = np.zeros((components, modes, components, modes, modes))
        for component in range(components):
            for p in range(modes):
                units[component, p, component, p, p] = 1.0
        return cls.spanned_by(units.reshape(-1, components, modes, modes))

    @classmethod
    def spanned_by(cls, operators: ScalarArray) -> PotentialSpace:
        """Return what Hermitian operators of shape (n, components, d, d) span over the reals."""
        d = operators.shape[-1]
        traces = np.trace(operators, axis1=-2, axis2=-1).real / d
        traceless = operators - traces[..., np.newaxis, np.newaxis] * np.eye(d)
        rows = _as_reals(traceless)
        _, singular, rotation = np.linalg.svd(rows, full_matrices=False)
        rank = int(np.count_nonzero(singular > _RANK_TOLERANCE * max(1.0, singular.max(initial=0))))
        rows = np.where(np.abs(rotation[:rank]) > _NOISE, rotation[:rank], 0.0)
        basis = _from_reals(rows, operators)
        return cls(np.asarray(0.5 * (basis + basis.conj().swapaxes(-1, -2))))

    @property
    def is_algebra(self) -> bool:
        """Whether, with the constants, products x y + y x stay inside.

        Then projecting gamma on the space is an average over unitaries, which keeps allowed
        density matrices allowed.
        """
        components, d = self.basis.shape[1:3]
        ones = np.zeros((components, components, d, d))
        ones[np.arange(components), np.arange(components)] = np.eye(d)
        whole = np.concatenate([self.basis, ones])
        products = whole[:, np.newaxis] @ whole
        products = products + products.swapaxes(0, 1)
        return bool(np.abs(products - self.projected(products)).max() <= _CLOSED)

    def projected(self, matrices: ScalarArray) -> ScalarArray:
        """Project on the space and the constants, shape (..., components, d, d)."""
        d = matrices.shape[-1]
        traces = np.trace(matrices, axis1=-2, axis2=-1).real / d
        inside = np.tensordot(self.coordinates(matrices), self.basis, axes=1)
        return np.asarray(inside + traces[..., np.newaxis, np.newaxis] * np.eye(d))

    @property
    def size(self) -> int:
        """Number of basis operators."""
        return len(self.basis)

    def potential(self, coordinates: RealArray) -> ScalarArray:
        """Return the operator sum_i x_i B_i, shape (components, d, d)."""
        return np.tensordot(coordinates, self.basis, axes=1)

    def coordinates(self, gamma: ScalarArray) -> RealArray:
        """Tr(B_i gamma) for matrices of shape (..., components, d, d)."""
        return np.asarray(np.einsum("iapq,...aqp->...i", self.basis, gamma).real)


def commuting_with(unitaries: npt.ArrayLike) -> ScalarArray:
    """Return a basis of the Hermitian one-body operators that commute with given unitaries.

    Parameters
    ----------
    unitaries : array_like, shape (g, d, d)
        Generators of a symmetry group, as matrices over the modes. Real ones give real
        operators only (enough for real interactions and density matrices).

    Returns
    -------
    numpy.ndarray
        Operators, shape (n, d, d), for `variables` of `UniversalFunctional`.

    Raises
    ------
    ArgumentError
        If the matrices are not unitary.
    """
    generators = arguments.scalars("unitaries", unitaries)
    if generators.ndim != 3 or generators.shape[1] != generators.shape[2]:
        raise ArgumentError("unitaries", f"shape {generators.shape}", "shape (g, d, d)")
    d = generators.shape[-1]
    adjoints = generators.conj().swapaxes(1, 2)
    if np.abs(adjoints @ generators - np.eye(d)).max(initial=0.0) > _CLOSED:
        raise ArgumentError("unitaries", "a matrix that is not unitary", "unitary matrices")
    units = _hermitian_units(1, d, np.iscomplexobj(generators))[:, 0]
    changes = generators @ units[:, np.newaxis] @ adjoints - units[:, np.newaxis]
    _, singular, rotation = np.linalg.svd(_as_reals(changes).T)
    rank = int(np.count_nonzero(singular > _RANK_TOLERANCE))
    return np.tensordot(rotation[rank:], units, axes=1)


def _hermitian_units(components: int, modes: int, is_complex: bool) -> ScalarArray:
    units = []
    for component in range(components):
        for p in range(modes):
            for q in range(p + 1):
                for phase in (1.0, 1j) if is_complex and p != q else (1.0,):
                    unit = np.zeros((components, modes, modes), complex if is_complex else float)
                    unit[component, p, q] = phase
                    unit[component, q, p] = np.conj(phase)
                    units.append(unit)
    return np.array(units)


def _as_reals(operators: ScalarArray) -> RealArray:
    flat = operators.reshape(len(operators), -1)
    parts = [flat.real, flat.imag] if np.iscomplexobj(flat) else [flat.real]
    return np.concatenate(parts, axis=1)


def _from_reals(rows: RealArray, like: ScalarArray) -> ScalarArray:
    if np.iscomplexobj(like):
        real, imaginary = np.split(rows, 2, axis=1)
        rows = real + 1j * imaginary
    return rows.reshape(len(rows), *like.shape[1:])
