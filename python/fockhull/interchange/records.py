"""What goes into files and comes out of them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull._frozen import read_only
from fockhull.errors import ArgumentError, ArgumentTypeError
from fockhull.hamiltonian import Hamiltonian
from fockhull.interaction import Interaction
from fockhull.sectors import Bosons, Sector, SpinHalfFermions

ScalarArray = npt.NDArray[np.float64 | np.complex128]

DOMAINS = {"spin-resolved": 3, "spin-summed": 2, "spinless": 2}
"""Number of axes of a density matrix in each domain."""


class Integrals:
    """One- and two-body integrals with the constant of the energy.

    Parameters
    ----------
    one_body : array_like, shape (d, d) or (2, d, d)
        Hermitian h_pq over orthonormal orbitals; (2, d, d) with up first.
    two_body : array_like, shape (d, d, d, d), optional
        Integrals that are not antisymmetrised, in the order named by `order`.
    order : {"dirac", "mulliken"}
        Index order of `two_body`, as for `fockhull.Interaction`; there is no default.
    constant : float
        Constant of the energy, such as the repulsion of the nuclei, in the unit of h.
    particles : (int, int), optional
        Numbers of up and down electrons, for those who want to keep them with the integrals.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        As `fockhull.Interaction` and `fockhull.Hamiltonian` do.

    Examples
    --------
    >>> import numpy as np
    >>> from fockhull.interchange import Integrals
    >>> two_body = np.zeros((2, 2, 2, 2))
    >>> two_body[0, 0, 0, 0] = two_body[1, 1, 1, 1] = 4.0
    >>> Integrals([[0, -1], [-1, 0]], two_body, order="mulliken", particles=(1, 1))
    Integrals(2 orbitals, one- and two-body, real, particles (1, 1))
    """

    __slots__ = ("_constant", "_one_body", "_particles", "_two_body")

    def __init__(
        self,
        one_body: npt.ArrayLike,
        two_body: npt.ArrayLike | None = None,
        *,
        order: Literal["dirac", "mulliken"] | None = None,
        constant: float = 0.0,
        particles: tuple[int, int] | None = None,
    ) -> None:
        h = arguments.scalars("one_body", one_body)
        if h.ndim not in (2, 3) or h.shape[-1] != h.shape[-2] or h.shape[:-2] not in ((), (2,)):
            raise ArgumentError("one_body", f"shape {h.shape}", "shape (d, d) or (2, d, d)")
        self._one_body = read_only(arguments.hermitian_stack("one_body", h, axes=h.ndim))
        self._two_body = _dirac(len(h[-1]), two_body, order)
        self._constant = arguments.real("constant", constant)
        self._particles = None if particles is None else _up_and_down(particles)

    @classmethod
    def of(cls, hamiltonian: Hamiltonian) -> Integrals:
        """Return the integrals of a Hamiltonian, whatever form its interaction was given in.

        Parameters
        ----------
        hamiltonian : Hamiltonian
            With a spin-1/2 sector, `particles` come from there.

        Raises
        ------
        ArgumentTypeError
            If it is no Hamiltonian.
        """
        if not isinstance(hamiltonian, Hamiltonian):
            raise ArgumentTypeError("hamiltonian", type(hamiltonian).__name__, "a Hamiltonian")
        sector, interaction = hamiltonian.sector, hamiltonian.interaction
        return cls(
            hamiltonian.one_body,
            None if interaction is None else _tensor(interaction),
            order=None if interaction is None else "dirac",
            constant=hamiltonian.constant,
            particles=sector.particles if isinstance(sector, SpinHalfFermions) else None,
        )

    @property
    def orbitals(self) -> int:
        """Number of orbitals d."""
        return int(self._one_body.shape[-1])

    @property
    def one_body(self) -> ScalarArray:
        """h_pq, shape (d, d) or (2, d, d), exactly Hermitian (read-only)."""
        return self._one_body

    @property
    def two_body(self) -> ScalarArray | None:
        """v[p, q, r, s] = <pq|v|rs> (Dirac order), shape (d, d, d, d); None without interaction."""
        return self._two_body

    @property
    def two_body_mulliken(self) -> ScalarArray | None:
        """(pq|rs) = <pr|v|qs>, the same numbers in Mulliken order."""
        return None if self._two_body is None else self._two_body.swapaxes(1, 2)

    @property
    def constant(self) -> float:
        """Constant of the energy."""
        return self._constant

    @property
    def particles(self) -> tuple[int, int] | None:
        """Numbers of up and down electrons, where they were given."""
        return self._particles

    def hamiltonian(self, sector: Sector | None = None) -> Hamiltonian:
        """Build the Hamiltonian.

        Parameters
        ----------
        sector : Sector, optional
            By default spin-1/2 fermions with `particles`.

        Raises
        ------
        ArgumentError
            If there is neither a sector nor `particles`, or they do not fit the integrals.
        """
        if sector is None:
            if self._particles is None:
                expected = "a sector, since these integrals come without numbers of particles"
                raise ArgumentError("sector", "none", expected)
            sector = SpinHalfFermions(self.orbitals, self._particles)
        if self._two_body is None:
            return Hamiltonian(self._one_body, constant=self._constant, sector=sector)
        interaction = Interaction(sector, two_body=self._two_body, order="dirac")
        return Hamiltonian(self._one_body, interaction, self._constant)

    def __repr__(self) -> str:
        what = "one-body" if self._two_body is None else "one- and two-body"
        arrays = [self._one_body] + ([] if self._two_body is None else [self._two_body])
        number = "complex" if any(np.iscomplexobj(array) for array in arrays) else "real"
        counted = "" if self._particles is None else f", particles {self._particles}"
        return f"Integrals({self.orbitals} orbitals, {what}, {number}{counted})"

    def __reduce__(self) -> tuple[Any, ...]:
        order = None if self._two_body is None else "dirac"
        return _rebuild, (self._one_body, self._two_body, order, self._constant, self._particles)


@dataclass(frozen=True, eq=False)
class DensityMatrix:
    """A one-body density matrix and what it is."""

    matrix: Any
    """gamma_pq = <a+_q a_p>, shape (d, d), or (2, d, d) with up first (read-only)."""
    domain: str
    """"spin-resolved", "spin-summed" or "spinless"."""

    def __post_init__(self) -> None:
        if self.domain not in DOMAINS:
            raise ArgumentError("domain", repr(self.domain), f"one of {', '.join(DOMAINS)}")
        matrix = arguments.scalars("density_matrix", self.matrix)
        axes = DOMAINS[self.domain]
        square = matrix.ndim == axes and matrix.shape[-1] == matrix.shape[-2]
        if not square or matrix.shape[:-2] not in ((), (2,)):
            shape = "(2, d, d)" if axes == 3 else "(d, d)"
            expected = f"shape {shape} in the {self.domain} domain"
            raise ArgumentError("density_matrix", f"shape {matrix.shape}", expected)
        hermitian = arguments.hermitian_stack("density_matrix", matrix, axes=axes)
        object.__setattr__(self, "matrix", read_only(hermitian))


def _rebuild(
    one_body: ScalarArray, two_body: ScalarArray | None, order: Any, constant: float, particles: Any
) -> Integrals:
    return Integrals(one_body, two_body, order=order, constant=constant, particles=particles)


def _dirac(
    orbitals: int, two_body: npt.ArrayLike | None, order: Literal["dirac", "mulliken"] | None
) -> ScalarArray | None:
    """Return checked integrals in Dirac order; the core checks them as for any interaction."""
    if two_body is None:
        if order is not None:
            raise ArgumentError("order", repr(order), "an order only together with two_body")
        return None
    return _tensor(Interaction(Bosons(orbitals, 1), two_body=two_body, order=order))


def _tensor(interaction: Interaction) -> ScalarArray:
    """Return all v_pqrs in Dirac order."""
    d = interaction.sector.modes
    v: Any = np.zeros((d,) * 4, dtype=interaction.dtype)
    density, tensor, entries = interaction._core.parts()
    if density is not None:
        p, q = np.ogrid[:d, :d]
        v[p, q, p, q] += density
    if tensor is not None:
        v += tensor
    if entries is not None:
        indices, values = entries
        np.add.at(v, tuple(indices.T), values)
    return read_only(v)


def _up_and_down(particles: object) -> tuple[int, int]:
    expected = "numbers of up and down electrons, (up, down)"
    if not isinstance(particles, tuple | list) or len(particles) != 2:
        raise ArgumentTypeError("particles", repr(particles), expected)
    up, down = (arguments.count("particles", number, 0) for number in particles)
    return up, down
