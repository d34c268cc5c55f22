"""Hamiltonians as SciPy linear operators (imported only when asked for)."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from scipy.sparse.linalg import LinearOperator

if TYPE_CHECKING:
    from fockhull.hamiltonian import Hamiltonian


class HamiltonianOperator(LinearOperator):  # type: ignore[misc]
    """A Hermitian `LinearOperator` that multiplies through `Hamiltonian.apply`."""

    def __init__(self, hamiltonian: Hamiltonian) -> None:
        super().__init__(hamiltonian.dtype, hamiltonian.shape)
        self._hamiltonian = hamiltonian

    def _matvec(self, x: Any) -> Any:
        return self._hamiltonian.apply(x.reshape(-1))

    def _matmat(self, X: Any) -> Any:  # noqa: N803
        return self._hamiltonian.apply(X)

    def _adjoint(self) -> HamiltonianOperator:
        return self
