"""Energies and positions of lattice sites; public in `fockhull.lattices`."""

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from fockhull import _arguments
from fockhull._arguments import RealArray
from fockhull.errors import ArgumentError


def site_energies(energies: npt.ArrayLike) -> RealArray:
    """On-site energies as a diagonal one-body matrix.

    Parameters
    ----------
    energies : array_like, shape (sites,)
        Real energies of the sites.

    Returns
    -------
    ndarray of float64, shape (sites, sites)

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If the energies are not a list of finite real numbers.

    Examples
    --------
    >>> from fockhull import lattices
    >>> lattices.chain(2) + lattices.site_energies([0.3, -0.3])
    array([[ 0.3, -1. ],
           [-1. , -0.3]])
    """
    values = _arguments.reals("energies", energies)
    if values.ndim != 1 or values.size == 0:
        expected = "one energy for each site: shape (sites,)"
        raise ArgumentError("energies", f"shape {values.shape}", expected)
    return np.diag(values)


def harmonic_trap(
    positions: npt.ArrayLike, strength: float, centre: npt.ArrayLike | None = None
) -> RealArray:
    """Site energies ``strength * |x - centre|^2`` of a harmonic trap.

    Parameters
    ----------
    positions : array_like, shape (sites,) or (sites, dimensions)
        Positions x of the sites; see `site_positions`.
    strength : float
        Energy at unit distance from the centre.
    centre : array_like, shape (dimensions,), optional
        Centre of the trap, by default the mean of the positions.

    Returns
    -------
    ndarray of float64, shape (sites, sites)
        Diagonal matrix.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value, shape or type.

    Examples
    --------
    >>> from fockhull import lattices
    >>> lattices.harmonic_trap(lattices.site_positions(3), 0.5).diagonal()
    array([0.5, 0. , 0.5])
    """
    points = _arguments.positions("positions", positions)
    curvature = _arguments.real("strength", strength)
    if centre is None:
        origin = points.mean(axis=0)
    else:
        dimensions = points.shape[1]
        origin = np.atleast_1d(_arguments.reals("centre", centre))
        if origin.shape != (dimensions,):
            expected = f"one coordinate for each dimension: shape ({dimensions},)"
            raise ArgumentError("centre", f"shape {origin.shape}", expected)
    return site_energies(curvature * ((points - origin) ** 2).sum(axis=1))


def disorder(sites: int, width: float, seed: int | np.random.Generator) -> RealArray:
    """Random site energies, uniform between -width/2 and width/2.

    Parameters
    ----------
    sites : int
        Number of sites.
    width : float
        Width of the distribution, not negative.
    seed : int or numpy.random.Generator
        An integer always gives the same energies; a generator is drawn from
        and moves on.

    Returns
    -------
    ndarray of float64, shape (sites, sites)
        Diagonal matrix.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value or type.

    Notes
    -----
    The distribution is that of Anderson's model of disorder, Phys. Rev. 109,
    1492 (1958) (source recalled).

    Examples
    --------
    >>> import numpy as np
    >>> from fockhull import lattices
    >>> a, b = lattices.disorder(4, 2.0, seed=7), lattices.disorder(4, 2.0, seed=7)
    >>> np.array_equal(a, b), bool(abs(a).max() <= 1.0)
    (True, True)
    """
    sites = _arguments.count("sites", sites)
    width = _arguments.real("width", width)
    if width < 0.0:
        raise ArgumentError("width", width, "a width that is not negative")
    if isinstance(seed, np.random.Generator):
        generator = seed
    else:
        generator = np.random.default_rng(_arguments.count("seed", seed, minimum=0))
    return site_energies(width * (generator.random(sites) - 0.5))


def site_positions(shape: int | Sequence[int]) -> RealArray:
    """Positions of the sites of a chain or a rectangular lattice, spacing 1.

    Parameters
    ----------
    shape : int or sequence of int
        Number of sites in each direction.

    Returns
    -------
    ndarray of float64, shape (sites, directions)
        In the order of sites of `rectangular`.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If the shape is not made of integers of at least 1.

    Examples
    --------
    >>> from fockhull import lattices
    >>> lattices.site_positions((2, 2))
    array([[0., 0.],
           [0., 1.],
           [1., 0.],
           [1., 1.]])
    """
    lengths = _arguments.lattice_shape(shape)
    return np.indices(lengths, dtype=np.float64).reshape(len(lengths), -1).T.copy()


def distances(positions: npt.ArrayLike, periods: npt.ArrayLike | None = None) -> RealArray:
    """Distances between all pairs of sites.

    Parameters
    ----------
    positions : array_like, shape (sites,) or (sites, dimensions)
        Positions of the sites, in any unit of length.
    periods : array_like, shape () or (dimensions,), optional
        Length after which each coordinate returns to itself, zero for an open
        direction; distances are then those to the nearest image. By default
        all directions are open.

    Returns
    -------
    ndarray of float64, shape (sites, sites)
        Symmetric, with zero diagonal.

    Raises
    ------
    ArgumentError, ArgumentTypeError
        If an argument has a wrong value, shape or type.

    Examples
    --------
    Along a chain and around a ring of four sites:

    >>> from fockhull import lattices
    >>> lattices.distances(range(4))[0]
    array([0., 1., 2., 3.])
    >>> lattices.distances(range(4), periods=4)[0]
    array([0., 1., 2., 1.])
    """
    points = _arguments.positions("positions", positions)
    separations = points[:, np.newaxis, :] - points[np.newaxis, :, :]
    if periods is not None:
        dimensions = points.shape[1]
        lengths = _arguments.one_or_each_real("periods", periods, dimensions, "dimension")
        if (lengths < 0.0).any():
            raise ArgumentError("periods", lengths.min(), "positive lengths, or 0 where open")
        closed = lengths > 0.0
        wound = separations[..., closed]
        separations[..., closed] -= lengths[closed] * np.rint(wound / lengths[closed])
    result: RealArray = np.linalg.norm(separations, axis=-1)
    return result
