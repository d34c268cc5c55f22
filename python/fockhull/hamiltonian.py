"""Hamiltonians H = c + h + W on a sector."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull import _core
from fockhull._html import table
from fockhull.errors import ArgumentError, ArgumentTypeError
from fockhull.interaction import Interaction
from fockhull.sectors import Sector

if TYPE_CHECKING:
    from scipy.sparse import csr_array
    from scipy.sparse.linalg import LinearOperator

__all__ = ["Hamiltonian", "MemoryEstimate"]

ScalarArray = npt.NDArray[np.float64 | np.complex128]


@dataclass(frozen=True)
class MemoryEstimate:
    """What a Hamiltonian takes, in bytes."""

    representation: str
    """How products are done.

    "stored matrix", "row by row", "low and high modes" or "product of spins"; only the first
    keeps the matrix.
    """
    operator: int
    """For the tables or the matrix that products use."""
    vector: int
    """For one vector."""
    matrix: int
    """For the whole matrix in sparse rows, as `Hamiltonian.to_scipy` gives it (estimated)."""


class Hamiltonian:
    r"""A Hermitian operator on a sector.

    .. math:: H = c + \sum_{pq} h_{pq}\, a^+_p a_q + W

    Nothing large is built before the first product. Spin-1/2 goes through the product of up and
    down configurations, spinless particles with density couplings through that of low and high
    modes; both without a stored matrix. What is left is kept as a sparse matrix where it is
    small, and worked out row by row where it is not.

    Parameters
    ----------
    one_body : array_like, shape (d, d)
        Hermitian h, in the unit of all energies; for spin-1/2 also (2, d, d), up first.
    interaction : Interaction, optional
        W; its sector is that of the Hamiltonian.
    constant : float
        The constant c.
    sector : Sector, optional
        Needed without an interaction.

    Raises
    ------
    ArgumentError
        For a wrong shape, NaN, infinity, an h that is not Hermitian (a deviation up to 1e-8
        of the largest element is averaged away), or a sector that is missing or different
        from the interaction's.
    ArgumentTypeError
        If an argument has a wrong type.

    Examples
    --------
    >>> import fockhull as fh
    >>> sector = fh.Fermions(modes=4, particles=2)
    >>> H = fh.Hamiltonian(fh.lattices.chain(4), sector=sector)
    >>> H.apply([1, 0, 0, 0, 0, 0])
    array([ 0., -1.,  0.,  0.,  0.,  0.])
    """

    __slots__ = ("_constant", "_core", "_interaction", "_one_body", "_sector")

    def __init__(
        self,
        one_body: npt.ArrayLike,
        interaction: Interaction | None = None,
        constant: float = 0.0,
        *,
        sector: Sector | None = None,
    ) -> None:
        self._sector = _common_sector(interaction, sector)
        self._interaction = interaction
        self._constant = arguments.real("constant", constant)
        d, spins = self._sector.modes, self._sector.spins
        shapes = [(d, d)] + ([(2, d, d)] if spins == 2 else [])
        h = arguments.tensor("one_body", one_body, *shapes)
        h = arguments.hermitian_stack("one_body", h, axes=h.ndim)
        h.flags.writeable = False
        self._one_body = h
        self._core = _core.Hamiltonian(
            self._sector._core,
            np.ascontiguousarray(np.broadcast_to(h, (spins, d, d))),
            None if interaction is None else interaction._core,
            self._constant,
        )

    @property
    def sector(self) -> Sector:
        """The sector acted on."""
        return self._sector

    @property
    def one_body(self) -> ScalarArray:
        """The one-body terms, exactly Hermitian, in the shape given (read-only)."""
        return self._one_body

    @property
    def interaction(self) -> Interaction | None:
        """The interaction."""
        return self._interaction

    @property
    def constant(self) -> float:
        """The constant c."""
        return self._constant

    @property
    def dimension(self) -> int:
        """Exact number of configurations."""
        return self._sector.dimension

    @property
    def shape(self) -> tuple[int, int]:
        """(dimension, dimension)."""
        return (self.dimension, self.dimension)

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of the matrix elements: complex128 if h or W is complex, otherwise float64."""
        return np.dtype(np.complex128 if self._core.is_complex else np.float64)

    def apply(self, x: npt.ArrayLike, out: ScalarArray | None = None) -> ScalarArray:
        """Multiply with one vector or with a block of vectors.

        Parameters
        ----------
        x : array_like, shape (dimension,) or (dimension, k)
            Columns are vectors. Blocks in Fortran order are read without a copy.
        out : numpy.ndarray, optional
            Where to write the result: the shape of `x`, the type of the result, not
            overlapping with `x`; blocks in Fortran order are written without a copy.

        Returns
        -------
        numpy.ndarray
            H x, complex if H or x is.

        Raises
        ------
        ArgumentError
            For a wrong shape, NaN or infinity, or an `out` that does not fit.
        SizeError
            If the vector or the tables do not fit in memory.
        """
        vectors = arguments.vectors("x", x, self.dimension)
        if vectors.dtype.kind == "c" and self.dtype.kind == "f":
            parts = np.concatenate([np.atleast_2d(vectors.T.real), np.atleast_2d(vectors.T.imag)])
            real, imaginary = np.split(self._apply_rows(parts, None), 2)
            result = (real + 1j * imaginary).T.reshape(vectors.shape)
            return result if out is None else _copy_into(out, result, vectors)
        rows = np.atleast_2d(vectors.T.astype(self.dtype, copy=False))
        if out is None:
            return self._apply_rows(rows, None).T.reshape(vectors.shape)
        target = np.atleast_2d(_fitting(out, vectors.shape, self.dtype, vectors).T)
        if target.flags.c_contiguous:
            self._apply_rows(rows, target)
            return out
        return _copy_into(out, self._apply_rows(rows, None).T.reshape(vectors.shape), vectors)

    def _apply_rows(self, rows: ScalarArray, out: ScalarArray | None) -> ScalarArray:
        rows = np.ascontiguousarray(rows)
        result = np.empty(rows.shape, self.dtype) if out is None else out
        self._core.apply(rows, result)
        return result

    def diagonal(self) -> npt.NDArray[np.float64]:
        """Diagonal matrix elements, shape (dimension,), in the order of the configurations."""
        return self._core.diagonal()

    def to_scipy(self) -> csr_array:
        """Return the whole matrix as a `scipy.sparse.csr_array`.

        Raises
        ------
        SizeError
            If it does not fit in memory (checked before anything is allocated).
        """
        from scipy.sparse import csr_array  # noqa: PLC0415

        starts, columns, values = self._core.to_csr()
        if len(values) < np.iinfo(np.int32).max:
            starts, columns = starts.astype(np.int32), columns.astype(np.int32)
        return csr_array((values, columns, starts), shape=self.shape)

    def as_linear_operator(self) -> LinearOperator:
        """Return a `scipy.sparse.linalg.LinearOperator` that multiplies through `apply`."""
        from fockhull._linear_operator import HamiltonianOperator  # noqa: PLC0415

        return HamiltonianOperator(self)

    def memory_estimate(self) -> MemoryEstimate:
        """Estimate the memory that products and the stored matrix take, without building them.

        Raises
        ------
        SizeError
            If the dimension exceeds 64-bit indices.
        """
        return MemoryEstimate(**self._core.memory_estimate())

    def __repr__(self) -> str:
        kind = "without interaction" if self._interaction is None else "with interaction"
        return f"Hamiltonian({self._sector!r}, {kind}, dimension {self.dimension}, {self.dtype})"

    def _repr_html_(self) -> str:
        rows = [
            ("sector", self._sector),
            ("dimension", f"{self.dimension:,}"),
            ("interaction", self._interaction),
            ("constant", self._constant),
            ("dtype", self.dtype),
        ]
        return table("Hamiltonian", rows)

    def __reduce__(self) -> tuple[Any, ...]:
        arguments_ = (self._one_body, self._interaction, self._constant, self._sector)
        return _rebuild, arguments_


def _rebuild(
    one_body: ScalarArray, interaction: Interaction | None, constant: float, sector: Sector
) -> Hamiltonian:
    return Hamiltonian(one_body, interaction, constant, sector=sector)


def _common_sector(interaction: Interaction | None, sector: Sector | None) -> Sector:
    if interaction is not None and not isinstance(interaction, Interaction):
        given = type(interaction).__name__
        raise ArgumentTypeError("interaction", given, "an Interaction (or none, with sector=)")
    if sector is not None and not isinstance(sector, Sector):
        raise ArgumentTypeError("sector", type(sector).__name__, "a sector of fockhull")
    if interaction is None:
        if sector is None:
            raise ArgumentError("sector", "none", "sector= where there is no interaction")
        return sector
    if sector is not None and sector != interaction.sector:
        raise ArgumentError("sector", repr(sector), f"{interaction.sector!r}, the interaction's")
    return interaction.sector


def _fitting(
    out: Any, shape: tuple[int, ...], dtype: np.dtype[Any], vectors: ScalarArray
) -> ScalarArray:
    if not isinstance(out, np.ndarray):
        raise ArgumentTypeError("out", type(out).__name__, "a NumPy array")
    if out.shape != shape or out.dtype != dtype or not out.flags.writeable:
        given = f"shape {out.shape} of {out.dtype}" + ("" if out.flags.writeable else ", read-only")
        raise ArgumentError("out", given, f"a writable array of shape {shape} of {dtype}")
    if np.may_share_memory(out, vectors):
        raise ArgumentError("out", "an array that shares memory with x", "a separate array")
    return out


def _copy_into(out: Any, result: ScalarArray, vectors: ScalarArray) -> ScalarArray:
    target = _fitting(out, result.shape, result.dtype, vectors)
    target[...] = result
    return target
