"""Interactions between particles on a lattice.

All builders but `pairing` return a plain real symmetric matrix V of shape
(sites, sites) for ``Interaction(sector, density_density=V)``, that is for

    W = 1/2 sum_pq V_pq a+_p a+_q a_q a_p,

normal-ordered, spins summed for spin-1/2. A pair of sites is counted twice by
the sum and halved by the factor, so V_pq = V_qp = v is the energy v n_p n_q.
The diagonal V_pp = U is U n_up n_down for spin-1/2 and (U/2) n (n - 1) for
bosons; for spinless fermions it must vanish. Only `on_site` fills it: the
others leave it zero. Matrices are added: ``on_site(6, 4.0) + screened(...)``.

`pairing` returns the sparse form, for ``Interaction(sector, entries=...)``.

Energies are in the unit of the strengths, lengths in that of the distances.
"""

import numpy as np
import numpy.typing as npt

from fockhull import _arguments
from fockhull._arguments import IndexArray, RealArray, ScalarArray
from fockhull.errors import ArgumentError

__all__ = ["long_range", "nearest_neighbour", "on_site", "pairing", "screened"]


def on_site(sites: int, strength: npt.ArrayLike) -> RealArray:
    """Interaction of particles on the same site, V_pp = U_p.

    Parameters
    ----------
    sites : int
        Number of sites.
    strength : array_like, shape () or (sites,)
        U, the same everywhere or one for each site; negative is attraction.

    Returns
    -------
    ndarray of float64, shape (sites, sites)
        Diagonal matrix. Not for spinless fermions.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value, shape or type.

    Examples
    --------
    >>> from fockhull import couplings
    >>> couplings.on_site(2, 4.0)
    array([[4., 0.],
           [0., 4.]])
    """
    sites = _arguments.count("sites", sites)
    return np.diag(_arguments.one_or_each_real("strength", strength, sites, "site"))


def nearest_neighbour(sites: int, bonds: npt.ArrayLike, strength: npt.ArrayLike) -> RealArray:
    """Interaction v n_p n_q on each bond (p, q).

    Parameters
    ----------
    sites : int
        Number of sites.
    bonds : array_like of int, shape (bonds, 2)
        Each pair of neighbours once, in either order;
        `fockhull.lattices.bonds_of` reads them off a one-body matrix.
    strength : array_like, shape () or (bonds,)
        v, the same for all bonds or one for each; negative is attraction.

    Returns
    -------
    ndarray of float64, shape (sites, sites)
        Symmetric, with zero diagonal.

    Raises
    ------
    ArgumentIndexError
        If a bond names a site that is not there.
    ArgumentError, ArgumentTypeError
        If a bond stands twice or joins a site with itself, or an argument has
        a wrong value, shape or type.

    Examples
    --------
    >>> from fockhull import couplings, lattices
    >>> h = lattices.chain(3)
    >>> couplings.nearest_neighbour(3, lattices.bonds_of(h), 2.0)
    array([[0., 2., 0.],
           [2., 0., 2.],
           [0., 2., 0.]])
    """
    sites = _arguments.count("sites", sites)
    p, q = _arguments.bonds("bonds", bonds, sites).T
    matrix = np.zeros((sites, sites))
    matrix[p, q] = matrix[q, p] = _arguments.one_or_each_real("strength", strength, len(p), "bond")
    return matrix


def screened(distances: npt.ArrayLike, strength: float, screening_length: float) -> RealArray:
    """Screened Coulomb (Yukawa) interaction, V_pq = strength exp(-r_pq / length) / r_pq.

    Parameters
    ----------
    distances : array_like, shape (sites, sites)
        Distances r between the sites; see `fockhull.lattices.distances`.
    strength : float
        Energy times length; negative is attraction.
    screening_length : float
        Length after which the interaction has fallen by the factor e beyond
        1 / r; positive.

    Returns
    -------
    ndarray of float64, shape (sites, sites)
        Symmetric, with zero diagonal.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value, shape or type; if distances are not
        symmetric, zero on the diagonal and positive elsewhere.

    Examples
    --------
    >>> from fockhull import couplings, lattices
    >>> around_ring = lattices.distances(range(4), periods=4)
    >>> couplings.screened(around_ring, strength=1.0, screening_length=2.0)[0]
    array([0.        , 0.60653066, 0.18393972, 0.60653066])
    """
    length = _arguments.real("screening_length", screening_length)
    if length <= 0.0:
        raise ArgumentError("screening_length", length, "a positive length")
    r = _pair_distances(distances)
    return _arguments.real("strength", strength) * np.exp(-r / length) * _off_diagonal(1.0 / r)


def long_range(distances: npt.ArrayLike, strength: float, exponent: float = 1.0) -> RealArray:
    """Power-law interaction, V_pq = strength / r_pq^exponent.

    Parameters
    ----------
    distances : array_like, shape (sites, sites)
        Distances r between the sites; see `fockhull.lattices.distances`.
    strength : float
        Energy at unit distance; negative is attraction.
    exponent : float
        1 for Coulomb, 3 for parallel dipoles, 6 for van der Waals; positive.

    Returns
    -------
    ndarray of float64, shape (sites, sites)
        Symmetric, with zero diagonal.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value, shape or type; if distances are not
        symmetric, zero on the diagonal and positive elsewhere.

    Examples
    --------
    >>> from fockhull import couplings, lattices
    >>> couplings.long_range(lattices.distances([0.0, 1.0, 3.0]), 2.0, exponent=1.0)
    array([[0.        , 2.        , 0.66666667],
           [2.        , 0.        , 1.        ],
           [0.66666667, 1.        , 0.        ]])
    """
    power = _arguments.real("exponent", exponent)
    if power <= 0.0:
        raise ArgumentError("exponent", power, "a positive exponent")
    r = _pair_distances(distances)
    return _arguments.real("strength", strength) * _off_diagonal(r**-power)


def pairing(orbitals: int, strength: npt.ArrayLike) -> tuple[IndexArray, ScalarArray]:
    """Scattering of pairs between orbitals, W = -sum_jk g_jk b+_j b_k.

    For spin-1/2 fermions b+_j = a+_j,up a+_j,down. The two orders of the spins
    give the same term and cancel the factor 1/2 of the interaction, so the
    elements are v_jjkk = -g_jk in Dirac order <jj|v|kk>, all others zero. For
    bosons the same elements mean -1/2 sum_jk g_jk a+_j a+_j a_k a_k; spinless
    fermions cannot pair in one mode, there they have no effect.

    The model with one g is solved by Richardson's equations; see the review
    arXiv:nucl-th/0405011 (recalled).

    Parameters
    ----------
    orbitals : int
        Number of orbitals.
    strength : array_like, shape () or (orbitals, orbitals)
        g, one real number or a Hermitian matrix g_jk; positive is attraction.

    Returns
    -------
    indices : ndarray of int, shape (n, 4)
        Rows (j, j, k, k): the complete list of elements that are not zero.
    values : ndarray, shape (n,)
        v_jjkk; float64, or complex128 for a complex matrix.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value, shape or type.

    Examples
    --------
    >>> from fockhull import couplings
    >>> indices, values = couplings.pairing(2, 0.4)
    >>> indices.tolist()
    [[0, 0, 0, 0], [0, 0, 1, 1], [1, 1, 0, 0], [1, 1, 1, 1]]
    >>> values
    array([-0.4, -0.4, -0.4, -0.4])
    """
    orbitals = _arguments.count("orbitals", orbitals)
    if _arguments.scalars("strength", strength).ndim == 0:
        matrix: ScalarArray = np.full((orbitals, orbitals), _arguments.real("strength", strength))
    else:
        matrix = _arguments.hermitian("strength", strength)
        if len(matrix) != orbitals:
            expected = f"one real number or shape ({orbitals}, {orbitals})"
            raise ArgumentError("strength", f"shape {matrix.shape}", expected)
    j, k = np.nonzero(matrix)
    return np.column_stack([j, j, k, k]), -matrix[j, k]


def _pair_distances(distances: npt.ArrayLike) -> RealArray:
    """Check distances between sites, and set the diagonal to one so that powers of it exist."""
    r = _arguments.symmetric("distances", distances)
    if np.diagonal(r).any():
        raise ArgumentError("distances", "a non-zero diagonal", "distance 0 of a site to itself")
    np.fill_diagonal(r, 1.0)
    if (r <= 0.0).any():
        p, q = np.argwhere(r <= 0.0)[0]
        given = f"{r[p, q]} between sites {p} and {q}"
        raise ArgumentError("distances", given, "positive distances between different sites")
    return r


def _off_diagonal(matrix: RealArray) -> RealArray:
    np.fill_diagonal(matrix, 0.0)
    return matrix
