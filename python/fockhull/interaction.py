"""Two-body interactions, in the three forms in which people have them."""

from __future__ import annotations

from numbers import Real
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from fockhull import _arguments as arguments
from fockhull import _core
from fockhull._html import table
from fockhull.errors import ArgumentError, ArgumentTypeError
from fockhull.sectors import Sector

__all__ = ["Interaction"]

ORDERS = ("dirac", "mulliken")


class Interaction:
    r"""A two-body interaction W on a sector.

    .. math:: W = \tfrac12 \sum_{pqrs} v_{pqrs}\, a^+_p a^+_q a_s a_r,
              \qquad v_{pqrs} = \langle pq | v | rs \rangle

    Exactly one of `density_density`, `two_body` and `entries` is given; sums
    (``W1 + W2``) and real multiples (``2.0 * W``) make the rest. Integrals are *not*
    antisymmetrised: antisymmetrised ones would count exchange twice.

    Parameters
    ----------
    sector : Sector
        For spin-1/2, `two_body` and `entries` are spin-free integrals over orbitals.
    density_density : array_like of float, shape (d, d), optional
        Real symmetric V for 1/2 sum_pq V_pq a+_p a+_q a_q a_p (normal-ordered). For
        spin-1/2 the spins are summed, so V_pp = U gives U n_up n_down; for bosons
        V_pp = U gives (U/2) n (n - 1); for spinless fermions V_pp must be zero.
    two_body : array_like, shape (d, d, d, d), optional
        All integrals, real or complex, in the order named by `order`.
    order : {"dirac", "mulliken"}
        Index order of `two_body`; there is no default, since for real arrays both
        orders can satisfy every symmetry. "dirac": ``v[p, q, r, s]`` = <pq|v|rs>.
        "mulliken": ``v[p, q, r, s]`` = (pq|rs) = <pr|v|qs>.
    entries : (indices, values), optional
        The complete list of non-zero v_pqrs in Dirac order: integers (n, 4) and numbers
        (n,), each index once, symmetry partners included.

    Raises
    ------
    ArgumentError
        Unless exactly one form is given, with a fitting shape, finite numbers and the
        symmetries v_pqrs = v_qpsr = conj(v_rspq). A deviation up to 1e-8 of the largest
        element is averaged away.
    ArgumentIndexError
        If `entries` names a mode out of range.
    ArgumentTypeError
        If numbers are not numeric, or `density_density` is complex.

    Examples
    --------
    >>> import numpy as np
    >>> import fockhull as fh
    >>> sector = fh.SpinHalfFermions(orbitals=2, particles=(1, 1))
    >>> fh.Interaction(sector, density_density=4.0 * np.eye(2))
    Interaction(SpinHalfFermions(orbitals=2, particles=(1, 1)), density-density, real)
    """

    __slots__ = ("_core", "_kinds", "_sector")

    __array_ufunc__ = None  # NumPy numbers scale an interaction, NumPy arrays are refused

    def __init__(
        self,
        sector: Sector,
        *,
        density_density: npt.ArrayLike | None = None,
        two_body: npt.ArrayLike | None = None,
        order: Literal["dirac", "mulliken"] | None = None,
        entries: tuple[npt.ArrayLike, npt.ArrayLike] | None = None,
    ) -> None:
        if not isinstance(sector, Sector):
            raise ArgumentTypeError("sector", type(sector).__name__, "a sector of fockhull")
        forms = {"density_density": density_density, "two_body": two_body, "entries": entries}
        given = [name for name, value in forms.items() if value is not None]
        if len(given) != 1:
            expected = "exactly one of " + ", ".join(forms) + " (add interactions for sums)"
            raise ArgumentError("interaction", " and ".join(given) or "no form", expected)
        if order is not None and two_body is None:
            raise ArgumentError("order", repr(order), "an order only together with two_body")
        self._sector = sector
        self._kinds: tuple[str, ...] = (given[0].replace("_", "-"),)
        if density_density is not None:
            self._core = _from_density_density(sector, density_density)
        elif two_body is not None:
            self._core = _from_two_body(sector, two_body, order)
        else:
            self._core = _from_entries(sector, entries)

    @property
    def sector(self) -> Sector:
        """The sector acted on."""
        return self._sector

    @property
    def dtype(self) -> np.dtype[Any]:
        """float64 or complex128."""
        return np.dtype(np.complex128 if self._core.is_complex else np.float64)

    def __add__(self, other: Interaction) -> Interaction:
        if not isinstance(other, Interaction):
            return NotImplemented
        if self._sector != other._sector:
            expected = f"an interaction on {self._sector!r} too"
            raise ArgumentError("other", repr(other._sector), expected)
        kinds = tuple(dict.fromkeys(self._kinds + other._kinds))
        return _wrap(self._sector, kinds, self._core.plus(other._core))

    def __mul__(self, factor: float) -> Interaction:
        if not isinstance(factor, Real):
            return NotImplemented
        return _wrap(self._sector, self._kinds, self._core.times(float(factor)))

    __rmul__ = __mul__

    def __neg__(self) -> Interaction:
        return self * -1.0

    def __sub__(self, other: Interaction) -> Interaction:
        return self + (-other)

    def __repr__(self) -> str:
        number = "complex" if self._core.is_complex else "real"
        return f"Interaction({self._sector!r}, {' + '.join(self._kinds)}, {number})"

    def _repr_html_(self) -> str:
        rows = [("sector", self._sector), ("form", " + ".join(self._kinds)), ("dtype", self.dtype)]
        return table("Interaction", rows)

    def __reduce__(self) -> tuple[Any, ...]:
        return _rebuild, (self._sector, self._kinds, self._core.parts())


def _from_density_density(sector: Sector, value: npt.ArrayLike) -> _core.Interaction:
    matrix = arguments.reals("density_density", value)
    if matrix.ndim != 2:
        expected = f"shape ({sector.modes}, {sector.modes})"
        raise ArgumentError("density_density", f"shape {matrix.shape}", expected)
    return _core.Interaction.density_density(sector._core, np.ascontiguousarray(matrix))


def _from_two_body(sector: Sector, value: npt.ArrayLike, order: str | None) -> _core.Interaction:
    if order not in ORDERS:
        given = "no order" if order is None else repr(order)
        expected = (
            'order="dirac" for v[p, q, r, s] = <pq|v|rs> or order="mulliken" for (pq|rs); '
            "it cannot be told from the array"
        )
        raise ArgumentError("order", given, expected)
    tensor = arguments.tensor("two_body", value, (sector.modes,) * 4)
    return _core.Interaction.two_body(sector._core, tensor, order)


def _from_entries(sector: Sector, value: Any) -> _core.Interaction:
    expected = "a pair (indices, values) with shapes (n, 4) and (n,)"
    try:
        indices, values = value
    except (TypeError, ValueError):
        raise ArgumentTypeError("entries", type(value).__name__, expected) from None
    numbers = arguments.scalars("entries", values)
    modes = arguments.indices("entries", indices)
    if numbers.ndim != 1 or modes.shape != (len(numbers), 4):
        raise ArgumentError("entries", f"shapes {modes.shape} and {numbers.shape}", expected)
    return _core.Interaction.entries(
        sector._core, np.ascontiguousarray(modes, dtype=np.int64), np.ascontiguousarray(numbers)
    )


def _wrap(sector: Sector, kinds: tuple[str, ...], core: _core.Interaction) -> Interaction:
    interaction = Interaction.__new__(Interaction)
    interaction._sector, interaction._kinds, interaction._core = sector, kinds, core
    return interaction


def _rebuild(sector: Sector, kinds: tuple[str, ...], parts: Any) -> Interaction:
    """Put an unpickled interaction together from its parts."""
    density, tensor, entries = parts
    built = []
    if density is not None:
        built.append(_core.Interaction.density_density(sector._core, density))
    if tensor is not None:
        built.append(_core.Interaction.two_body(sector._core, tensor, "dirac"))
    if entries is not None or not built:
        indices, values = entries or (np.empty((0, 4), dtype=np.int64), np.empty(0))
        built.append(_core.Interaction.entries(sector._core, indices, values))
    core = built[0]
    for part in built[1:]:
        core = core.plus(part)
    return _wrap(sector, kinds, core)
