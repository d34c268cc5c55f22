"""Second quantisation on the full Fock space, projected on one sector.

Fermion signs come from the Jordan-Wigner construction, bosons from ladder matrices
cut after N quanta (exact in the sector of N particles), spin-1/2 fermions are 2d
fermion modes with every up mode left of every down mode.  Sector states are made by
letting creation operators act on the vacuum, in the order |I> = a+_i1 a+_i2 ... |0>.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, reduce
from itertools import combinations, combinations_with_replacement
from math import factorial
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

Array = npt.NDArray[Any]
Statistics = Literal["fermions", "spin-1/2", "bosons"]


def jordan_wigner(modes: int) -> list[Any]:
    """Annihilation matrices of `modes` fermion modes on the 2**modes Fock space."""
    lower = sp.csr_array(np.array([[0.0, 1.0], [0.0, 0.0]]))
    parity = sp.csr_array(np.diag([1.0, -1.0]))
    one = sp.eye_array(2, format="csr")
    return [_kron([parity] * mode + [lower] + [one] * (modes - mode - 1)) for mode in range(modes)]


def truncated_ladders(modes: int, quanta: int) -> list[Any]:
    """Annihilation matrices of boson modes, each cut after `quanta` quanta."""
    lower = sp.csr_array(np.diag(np.sqrt(np.arange(1.0, quanta + 1)), k=1))
    one = sp.eye_array(quanta + 1, format="csr")
    return [_kron([one] * mode + [lower] + [one] * (modes - mode - 1)) for mode in range(modes)]


def colexicographic_sets(modes: int, particles: int) -> list[tuple[int, ...]]:
    """Strictly increasing sets, compared by their largest member first."""
    return sorted(combinations(range(modes), particles), key=lambda members: members[::-1])


def colexicographic_multisets(modes: int, particles: int) -> list[tuple[int, ...]]:
    """Multisets in the order of the strictly increasing sets j_k + k they map to."""

    def increasing_set(members: tuple[int, ...]) -> tuple[int, ...]:
        return tuple(member + place for place, member in enumerate(members))[::-1]

    return sorted(combinations_with_replacement(range(modes), particles), key=increasing_set)


@dataclass(frozen=True)
class ReferenceSector:
    """One particle-number sector; all matrices are dense in the sector's basis order."""

    statistics: Statistics
    modes: int
    particles: tuple[int, ...]

    @cached_property
    def states(self) -> list[tuple[tuple[int, ...], ...]]:
        """Occupied modes of each basis state, one tuple per spin."""
        if self.statistics == "spin-1/2":
            up, down = (colexicographic_sets(self.modes, n) for n in self.particles)
            return [(u, v) for u in up for v in down]
        listing = colexicographic_multisets if self.statistics == "bosons" else colexicographic_sets
        return [(members,) for members in listing(self.modes, self.particles[0])]

    @property
    def dimension(self) -> int:
        return len(self.states)

    @cached_property
    def occupations(self) -> Array:
        """Occupation numbers, shape (dimension, d), for spin-1/2 (dimension, 2, d)."""
        table = np.zeros((self.dimension, len(self.particles), self.modes), dtype=int)
        for row, state in zip(table, self.states, strict=True):
            for block, members in zip(row, state, strict=True):
                np.add.at(block, list(members), 1)
        return table if self.statistics == "spin-1/2" else table[:, 0]

    @cached_property
    def annihilators(self) -> list[Any]:
        """Annihilation matrices on the full Fock space; for spin-1/2 ups, then downs."""
        if self.statistics == "bosons":
            return truncated_ladders(self.modes, self.particles[0])
        return jordan_wigner(self.modes * len(self.particles))

    @cached_property
    def basis(self) -> Any:
        """Sector states as columns in the full Fock space."""
        columns = []
        for state in self.states:
            modes = [p + self.modes * spin for spin, members in enumerate(state) for p in members]
            vector = np.zeros(self.annihilators[0].shape[0])
            vector[0] = 1.0
            for mode in reversed(modes):
                vector = self.annihilators[mode].T @ vector
            norm = np.prod([float(factorial(modes.count(mode))) for mode in set(modes)])
            columns.append(sp.coo_array(vector / np.sqrt(norm)).reshape((-1, 1)))
        return sp.hstack(columns, format="csr")

    def one_body(self, one_body: Array) -> Array:
        """Matrix of sum_pq h_pq a+_p a_q; h of shape (d, d), for spin-1/2 also (2, d, d)."""
        blocks = np.broadcast_to(one_body, (len(self.particles), self.modes, self.modes))
        spin_orbitals = sp.block_diag([sp.csr_array(block) for block in blocks], format="csr")
        return self._sandwich([a @ self.basis for a in self.annihilators], spin_orbitals)

    def two_body(self, dirac: Array) -> Array:
        """Matrix of 1/2 sum v_pqrs a+_p a+_q a_s a_r, v spin-free in Dirac order."""
        d, spins = self.modes, range(len(self.particles))
        coupling = sp.csr_array(np.asarray(dirac).reshape(d * d, d * d))
        total: Array = np.zeros((self.dimension, self.dimension))
        for sigma in spins:
            for tau in spins:
                pairs = [
                    self.annihilators[s + d * tau] @ (self.annihilators[r + d * sigma] @ self.basis)
                    for r in range(d)
                    for s in range(d)
                ]
                total = total + 0.5 * self._sandwich(pairs, coupling)
        return total

    def density_density(self, coupling: Array) -> Array:
        """Matrix of 1/2 sum_pq V_pq (n_p n_q - delta_pq n_p), n summed over the spins."""
        n = self.occupations.reshape(self.dimension, -1, self.modes).sum(axis=1)
        energies = 0.5 * (np.einsum("ip,pq,iq->i", n, coupling, n) - n @ np.diagonal(coupling))
        return np.diag(energies)

    def hamiltonian(
        self,
        one_body: Array | None = None,
        *,
        two_body: Array | None = None,
        density_density: Array | None = None,
        entries: tuple[Array, Array] | None = None,
        constant: float = 0.0,
    ) -> Array:
        """Sum of the given terms as a dense matrix, entry by entry in the basis order."""
        total: Array = constant * np.eye(self.dimension)
        if one_body is not None:
            total = total + self.one_body(one_body)
        if two_body is not None:
            total = total + self.two_body(two_body)
        if density_density is not None:
            total = total + self.density_density(density_density)
        if entries is not None:
            total = total + self.two_body(dense_from_entries(*entries, modes=self.modes))
        return total

    def density_matrix(self, vector: Array) -> Array:
        """gamma_pq = <a+_q a_p>, shape (d, d), for spin-1/2 (2, d, d)."""
        state = self.basis @ vector
        removed = np.array([a @ state for a in self.annihilators])
        blocks = removed.reshape(len(self.particles), self.modes, -1)
        gamma: Array = blocks @ blocks.conj().transpose(0, 2, 1)
        return gamma if self.statistics == "spin-1/2" else gamma[0]

    def spin_squared(self) -> Array:
        """Matrix of S^2 = S- S+ + M (M + 1) in a sector of fixed (up, down)."""
        up, down = self.annihilators[: self.modes], self.annihilators[self.modes :]
        raising = sum(u.T @ v for u, v in zip(up, down, strict=True))
        raised = raising @ self.basis
        m = 0.5 * (self.particles[0] - self.particles[1])
        result: Array = (raised.T @ raised).toarray() + m * (m + 1) * np.eye(self.dimension)
        return result

    def _sandwich(self, removed: list[Any], coupling: Any) -> Array:
        """sum_ij coupling_ij removed_i^+ removed_j."""
        stack = sp.vstack(removed, format="csr")
        identity = sp.eye_array(removed[0].shape[0], format="csr")
        result: Array = (stack.T @ sp.kron(coupling, identity, format="csr") @ stack).toarray()
        return result


def fermions(modes: int, particles: int) -> ReferenceSector:
    """Spinless fermions."""
    return ReferenceSector("fermions", modes, (particles,))


def bosons(modes: int, particles: int) -> ReferenceSector:
    """Bosons."""
    return ReferenceSector("bosons", modes, (particles,))


def spin_half(orbitals: int, particles: tuple[int, int]) -> ReferenceSector:
    """Spin-1/2 fermions at fixed (up, down)."""
    return ReferenceSector("spin-1/2", orbitals, particles)


def dense_from_entries(indices: Array, values: Array, modes: int) -> Array:
    """Four-index array of a complete list of entries v_pqrs."""
    dense = np.zeros((modes,) * 4, dtype=np.asarray(values).dtype)
    dense[tuple(np.asarray(indices).T)] = values
    return dense


def entries_from_dense(dirac: Array) -> tuple[Array, Array]:
    """Complete list of the non-zero entries of a four-index array."""
    indices = np.argwhere(dirac != 0)
    return indices, dirac[tuple(indices.T)]


def dense_from_density_density(coupling: Array) -> Array:
    """v_pqrs = V_pq delta_pr delta_qs."""
    one = np.eye(len(coupling))
    dirac: Array = np.einsum("pq,pr,qs->pqrs", coupling, one, one)
    return dirac


def _kron(factors: list[Any]) -> Any:
    return reduce(lambda left, right: sp.kron(left, right, format="csr"), factors)
