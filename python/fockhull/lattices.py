"""One-body matrices of lattices.

Every builder returns a plain Hermitian matrix h of shape (sites, sites) for
the one-body term sum_pq h_pq a+_p a_q, usable with every sector (for spin-1/2
it acts alike on both spins). Terms are added: hopping on a chain in a trap is
``chain(6) + harmonic_trap(site_positions(6), 0.1)``. That is why site energies
come as diagonal matrices too: adding a vector would spread it over every row.

Conventions
-----------
* Hopping t enters with a minus sign: h[q, p] = -t for a bond from p to q, and
  h[p, q] = -conj(t).
* A flux phi through a ring is spread evenly over its bonds:
  h[j+1, j] = -t exp(i phi / sites). The matrix is float64 when the hopping is
  real and the flux is exactly zero, complex128 otherwise. A flux of pi or 2 pi
  could be gauged into a real matrix, but that changes density matrices, so it
  is left to the caller: see the example of `from_bonds`.
* Sites of a rectangular lattice are numbered in C order of its shape, as by
  `numpy.ravel_multi_index`.

Energies are in the unit of the arguments, lengths in that of the positions.
"""

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from fockhull import _arguments
from fockhull._arguments import IndexArray, ScalarArray
from fockhull._sites import disorder, distances, harmonic_trap, site_energies, site_positions
from fockhull.errors import ArgumentError

__all__ = [
    "bonds_of",
    "chain",
    "disorder",
    "distances",
    "from_bonds",
    "harmonic_trap",
    "ladder",
    "rectangular",
    "ring",
    "site_energies",
    "site_positions",
]


def chain(sites: int, hopping: npt.ArrayLike = 1.0) -> ScalarArray:
    """Hopping on an open chain, h[j+1, j] = -t_j.

    Parameters
    ----------
    sites : int
        Number of sites, at least 1.
    hopping : array_like, shape () or (sites - 1,)
        t, or t_j for each bond (j, j+1); real or complex.

    Returns
    -------
    ndarray, shape (sites, sites)
        float64, or complex128 for complex hopping. For one real t the
        eigenvalues are -2 t cos(k pi / (sites + 1)), k = 1..sites.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value, shape or type.

    Examples
    --------
    >>> from fockhull import lattices
    >>> lattices.chain(3)
    array([[ 0., -1.,  0.],
           [-1.,  0., -1.],
           [ 0., -1.,  0.]])
    """
    sites = _arguments.count("sites", sites)
    return from_bonds(sites, _consecutive_pairs(sites), hopping)


def ring(sites: int, hopping: npt.ArrayLike = 1.0, flux: float = 0.0) -> ScalarArray:
    """Hopping on a ring threaded by a flux, h[j+1, j] = -t_j exp(i flux / sites).

    Parameters
    ----------
    sites : int
        Number of sites, at least 3: with two sites both bonds join the same
        pair, and whether they add up is the caller's decision.
    hopping : array_like, shape () or (sites,)
        t, or t_j for each bond (j, j+1 mod sites); real or complex.
    flux : float
        Phase in radians gathered on one turn in the direction 0 -> 1 -> 2.

    Returns
    -------
    ndarray, shape (sites, sites)
        float64 if the hopping is real and the flux zero, otherwise
        complex128. For one real t the eigenvalues are
        -2 t cos((2 pi m - flux) / sites), m = 0..sites-1.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value, shape or type.

    Examples
    --------
    >>> import numpy as np
    >>> from fockhull import lattices
    >>> np.linalg.eigvalsh(lattices.ring(4)).round(6) + 0.0
    array([-2.,  0.,  0.,  2.])
    >>> lattices.ring(4, flux=np.pi)[1, 0]
    np.complex128(-0.707107-0.707107j)
    """
    sites = _arguments.count("sites", sites)
    if sites < 3:
        expected = "at least 3 sites (for two sites joined twice use chain(2, t_1 + t_2))"
        raise ArgumentError("sites", sites, expected)
    flux = _arguments.real("flux", flux)
    amplitudes = _arguments.one_or_each("hopping", hopping, sites, "bond")
    if flux != 0.0:
        amplitudes = amplitudes * np.exp(1j * flux / sites)
    closing_bond = np.array([[sites - 1, 0]])
    return from_bonds(sites, np.vstack([_consecutive_pairs(sites), closing_bond]), amplitudes)


def ladder(
    rungs: int,
    hopping: npt.ArrayLike = 1.0,
    rung_hopping: npt.ArrayLike = 1.0,
    *,
    legs: int = 2,
    periodic: bool = False,
    flux: float = 0.0,
) -> ScalarArray:
    """Hopping on a ladder of parallel legs joined by rungs.

    Site number: leg * rungs + rung.

    Parameters
    ----------
    rungs : int
        Number of rungs, that is of sites on each leg.
    hopping, rung_hopping : array_like, shape ()
        t along the legs and along the rungs; real or complex.
    legs : int
        Number of legs, joined in a row.
    periodic : bool
        Whether each leg is closed to a ring (then at least 3 rungs).
    flux : float
        Phase in radians gathered on one turn along the legs; needs
        ``periodic=True``.

    Returns
    -------
    ndarray, shape (legs * rungs, legs * rungs)
        float64, or complex128 for complex hopping or non-zero flux.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value, shape or type.

    Examples
    --------
    >>> from fockhull import lattices
    >>> lattices.ladder(2, hopping=1.0, rung_hopping=0.5)
    array([[ 0. , -1. , -0.5,  0. ],
           [-1. ,  0. ,  0. , -0.5],
           [-0.5,  0. ,  0. , -1. ],
           [ 0. , -0.5, -1. ,  0. ]])
    """
    rungs, legs = _arguments.count("rungs", rungs), _arguments.count("legs", legs)
    (periodic,) = _arguments.flags("periodic", [periodic], 1)
    leg_hopping = _arguments.number("hopping", hopping)
    rung_hopping = _arguments.number("rung_hopping", rung_hopping)
    along_leg = _direction("rungs", rungs, leg_hopping, periodic, _arguments.real("flux", flux))
    along_rung = _direction("legs", legs, rung_hopping, False, 0.0)
    return _kronecker_sum(along_rung, along_leg)


def rectangular(
    shape: int | Sequence[int],
    hopping: npt.ArrayLike = 1.0,
    *,
    periodic: bool | Sequence[bool] = False,
    flux: npt.ArrayLike = 0.0,
) -> ScalarArray:
    """Hopping between nearest neighbours of a rectangular lattice.

    Parameters
    ----------
    shape : int or sequence of int
        Number of sites in each direction; any number of directions.
    hopping : array_like, shape () or (directions,)
        t, the same everywhere or one for each direction; real or complex.
    periodic : bool or sequence of bool
        Whether the lattice is closed, in all directions or in each; a closed
        direction has at least 3 sites.
    flux : array_like, shape () or (directions,)
        Phase in radians gathered on one turn in each closed direction; zero in
        open ones.

    Returns
    -------
    ndarray, shape (sites, sites)
        The Kronecker sum of the matrices of the directions, sites in C order
        of `shape`; float64, or complex128 for complex hopping or non-zero flux.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value, shape or type.

    Examples
    --------
    >>> from fockhull import lattices
    >>> h = lattices.rectangular((3, 4), periodic=(True, False))
    >>> h.shape, len(lattices.bonds_of(h))
    ((12, 12), 21)
    """
    lengths = _arguments.lattice_shape(shape)
    directions = len(lengths)
    hoppings = _arguments.one_or_each("hopping", hopping, directions, "direction")
    fluxes = _arguments.one_or_each_real("flux", flux, directions, "direction")
    closed = _arguments.flags("periodic", periodic, directions)
    total: ScalarArray = np.zeros((1, 1))
    for length, t, is_closed, phase in zip(lengths, hoppings, closed, fluxes, strict=True):
        total = _kronecker_sum(total, _direction("shape", length, t, is_closed, phase))
    return total


def from_bonds(sites: int, bonds: npt.ArrayLike, hopping: npt.ArrayLike = 1.0) -> ScalarArray:
    """Hopping along the bonds of a list.

    Parameters
    ----------
    sites : int
        Number of sites.
    bonds : array_like of int, shape (bonds, 2)
        A bond (p, q) gives h[q, p] = -t and h[p, q] = -conj(t). Each bond
        stands once, in either direction.
    hopping : array_like, shape () or (bonds,)
        t, the same for all bonds or one for each; real or complex.

    Returns
    -------
    ndarray, shape (sites, sites)
        float64, or complex128 for complex hopping.

    Raises
    ------
    ArgumentIndexError
        If a bond names a site that is not there.
    ArgumentError, ArgumentTypeError
        If a bond stands twice or joins a site with itself, or an argument has
        a wrong value, shape or type.

    Examples
    --------
    A ring with flux pi in real numbers: one bond with the opposite sign.

    >>> import numpy as np
    >>> from fockhull import lattices
    >>> h = lattices.from_bonds(4, [(0, 1), (1, 2), (2, 3), (3, 0)], [1, 1, 1, -1])
    >>> np.linalg.eigvalsh(h)
    array([-1.414214, -1.414214,  1.414214,  1.414214])
    """
    sites = _arguments.count("sites", sites)
    pairs = _arguments.bonds("bonds", bonds, sites)
    amplitudes = _arguments.one_or_each("hopping", hopping, len(pairs), "bond")
    start, end = pairs.T
    matrix = np.zeros((sites, sites), dtype=amplitudes.dtype)
    matrix[end, start] = -amplitudes
    matrix[start, end] = -amplitudes.conj()
    return matrix


def bonds_of(one_body: npt.ArrayLike) -> IndexArray:
    """Pairs of sites that a one-body matrix joins.

    Parameters
    ----------
    one_body : array_like, shape (sites, sites)
        A Hermitian matrix, as the builders of this module return it.

    Returns
    -------
    ndarray of int, shape (bonds, 2)
        The pairs p < q with a non-zero element, in lexicographic order.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If the matrix is not square, finite and Hermitian.

    Examples
    --------
    >>> from fockhull import lattices
    >>> lattices.bonds_of(lattices.ring(4)).tolist()
    [[0, 1], [0, 3], [1, 2], [2, 3]]
    """
    return np.argwhere(np.triu(_arguments.hermitian("one_body", one_body), k=1))


def _consecutive_pairs(sites: int) -> IndexArray:
    first = np.arange(sites - 1)
    return np.column_stack([first, first + 1])


def _direction(
    argument: str, length: int, hopping: ScalarArray, periodic: bool, flux: float
) -> ScalarArray:
    """Hopping in one direction of a rectangular lattice, which is `length` sites long."""
    if periodic:
        if length < 3:
            raise ArgumentError(argument, length, "at least 3 sites in a periodic direction")
        return ring(length, hopping, flux)
    if flux != 0.0:
        raise ArgumentError("flux", flux, "zero in a direction that is not periodic")
    return chain(length, hopping)


def _kronecker_sum(slow: ScalarArray, fast: ScalarArray) -> ScalarArray:
    """Matrix on pairs of sites, the first index the slow one, hopping in one index at a time."""
    in_slow, in_fast = np.kron(slow, np.eye(len(fast))), np.kron(np.eye(len(slow)), fast)
    total: ScalarArray = in_slow + in_fast + 0.0  # the last term turns -0.0 into 0.0
    return total
