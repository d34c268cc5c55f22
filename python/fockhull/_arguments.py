"""Checks of arguments, shared by all modules.

Each check returns the argument in the one form the builders work with, as a
new array wherever the builder writes to it, or raises an error that names the
argument, what came and what is expected.
"""

import operator
from typing import Any

import numpy as np
import numpy.typing as npt

from fockhull.errors import ArgumentError, ArgumentIndexError, ArgumentTypeError

BOND_LIST = "pairs of site indices, shape (bonds, 2)"

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]
IndexArray = npt.NDArray[np.intp]

LARGEST_INTEGER = np.iinfo(np.int64).max

SYMMETRY_TOLERANCE = 1e-8
"""Largest deviation from Hermiticity, relative to the largest element, that is averaged away."""


def count(argument: str, value: object, minimum: int = 1) -> int:
    """Return `value` as a 64-bit int of at least `minimum`; floats and booleans are refused."""
    expected = f"an integer of at least {minimum}"
    if isinstance(value, bool | np.bool_):
        raise ArgumentTypeError(argument, value, expected)
    try:
        integer = operator.index(value)  # type: ignore[arg-type]
    except TypeError:
        raise ArgumentTypeError(argument, repr(value), expected) from None
    if integer < minimum:
        raise ArgumentError(argument, integer, expected)
    if integer > LARGEST_INTEGER:
        raise ArgumentError(argument, integer, f"{expected} and at most {LARGEST_INTEGER}")
    return integer


def scalars(argument: str, value: npt.ArrayLike) -> ScalarArray:
    """Return finite numbers as a float64 or complex128 array of any shape."""
    array = _as_array(argument, value, "real or complex numbers")
    if array.dtype.kind not in "iufc":
        raise ArgumentTypeError(argument, f"dtype {array.dtype}", "real or complex numbers")
    numbers: ScalarArray = array.astype(np.complex128 if array.dtype.kind == "c" else np.float64)
    if not np.isfinite(numbers).all():
        raise ArgumentError(argument, "NaN or infinity", "finite numbers")
    return numbers


def reals(argument: str, value: npt.ArrayLike) -> RealArray:
    """Return finite real numbers as a float64 array of any shape."""
    return _real(argument, scalars(argument, value))


def number(argument: str, value: npt.ArrayLike) -> ScalarArray:
    """Return one finite number, real or complex, as an array of shape ()."""
    array = scalars(argument, value)
    if array.ndim != 0:
        raise ArgumentError(argument, f"shape {array.shape}", "one number")
    return array


def real(argument: str, value: npt.ArrayLike) -> float:
    """Return one finite real number."""
    return float(_real(argument, number(argument, value)))


def one_or_each(argument: str, value: npt.ArrayLike, length: int, item: str) -> ScalarArray:
    """Return one number for each of `length` items, from one for all or one for each."""
    array = scalars(argument, value)
    if array.shape not in ((), (length,)):
        expected = f"one number, or one for each {item}: shape ({length},)"
        raise ArgumentError(argument, f"shape {array.shape}", expected)
    return np.broadcast_to(array, (length,))


def one_or_each_real(argument: str, value: npt.ArrayLike, length: int, item: str) -> RealArray:
    """Return one real number for each of `length` items, from one for all or one for each."""
    return _real(argument, one_or_each(argument, value, length, item))


def hermitian(argument: str, value: npt.ArrayLike) -> ScalarArray:
    """Return a square Hermitian matrix, made exactly Hermitian if it nearly is."""
    matrix = scalars(argument, value)
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1]:
        raise ArgumentError(argument, f"shape {matrix.shape}", "a square matrix")
    return hermitian_stack(argument, matrix)


def hermitian_stack(argument: str, matrices: ScalarArray, axes: int = 2) -> ScalarArray:
    """Return square matrices made exactly Hermitian if they nearly are.

    The last `axes` axes are one item (a matrix, or one for each spin), those before a batch.
    """
    item = tuple(range(-axes, 0))
    adjoint = matrices.conj().swapaxes(-1, -2)
    deviation = np.abs(matrices - adjoint).max(axis=item, initial=0.0)
    if (deviation > SYMMETRY_TOLERANCE * np.abs(matrices).max(axis=item, initial=0.0)).any():
        raise ArgumentError(
            argument,
            f"a deviation from Hermiticity of {deviation.max():.3g}",
            "a Hermitian matrix (for real numbers: a symmetric one)",
        )
    return np.asarray(0.5 * matrices + 0.5 * adjoint, dtype=matrices.dtype)


def symmetric(argument: str, value: npt.ArrayLike) -> RealArray:
    """Return a real symmetric matrix, made exactly symmetric if it nearly is."""
    return _real(argument, hermitian(argument, value))


def positions(argument: str, value: npt.ArrayLike) -> RealArray:
    """Return the positions of sites as an array of shape (sites, dimensions)."""
    points = reals(argument, value)
    if points.ndim == 1:
        points = points[:, np.newaxis]
    if points.ndim != 2 or points.size == 0:
        expected = "one position for each site: shape (sites,) or (sites, dimensions)"
        raise ArgumentError(argument, f"shape {points.shape}", expected)
    return points


def bonds(argument: str, value: npt.ArrayLike, sites: int) -> IndexArray:
    """Return a list of distinct bonds between distinct sites, shape (bonds, 2)."""
    pairs = _as_array(argument, value, BOND_LIST)
    if pairs.size == 0:
        return np.empty((0, 2), dtype=np.intp)
    if pairs.dtype.kind not in "iu":
        raise ArgumentTypeError(argument, f"dtype {pairs.dtype}", BOND_LIST + ", of integers")
    if pairs.ndim != 2 or pairs.shape[1] != 2:
        raise ArgumentError(argument, f"shape {pairs.shape}", BOND_LIST)
    outside = (pairs < 0) | (pairs >= sites)
    if outside.any():
        raise ArgumentIndexError(
            argument, f"site {pairs[outside][0]}", f"sites from 0 to {sites - 1}"
        )
    loops = pairs[:, 0] == pairs[:, 1]
    if loops.any():
        expected = "bonds between two different sites (use site energies for the diagonal)"
        raise ArgumentError(argument, _pair(pairs[loops][0]), expected)
    distinct, repeats = np.unique(np.sort(pairs, axis=1), axis=0, return_counts=True)
    if (repeats > 1).any():
        expected = "each bond once, in one direction (add the amplitudes of parallel bonds)"
        raise ArgumentError(argument, f"{_pair(distinct[repeats > 1][0])} twice", expected)
    return pairs.astype(np.intp)


def indices(argument: str, value: npt.ArrayLike) -> npt.NDArray[np.uint64]:
    """Return integers counted from 0, of any shape."""
    array = _as_array(argument, value, "integers")
    if array.dtype == object and all(type(number) is int for number in array.flat):
        raise ArgumentIndexError(argument, "an integer beyond 64 bits", "64-bit integers")
    array = _integers(argument, array)
    if (array < 0).any():
        raise ArgumentIndexError(argument, array[array < 0][0], "integers counted from 0")
    return array.astype(np.uint64)


def position(argument: str, value: object, length: int) -> int:
    """Return one index from 0 to `length` - 1."""
    try:
        index = operator.index(value)  # type: ignore[arg-type]
    except TypeError:
        raise ArgumentTypeError(argument, repr(value), "an integer") from None
    if not 0 <= index < length:
        raise ArgumentIndexError(argument, f"index {index}", f"0 to {length - 1}")
    return index


def occupation_numbers(argument: str, value: npt.ArrayLike) -> npt.NDArray[np.uint32]:
    """Return numbers of particles, of any shape."""
    array = _integers(argument, value)
    if (array < 0).any() or (array > np.iinfo(np.uint32).max).any():
        raise ArgumentError(argument, "a negative or huge number", "numbers of particles")
    return array.astype(np.uint32)


def positive(argument: str, value: npt.ArrayLike) -> float:
    """Return one finite positive real number."""
    result = real(argument, value)
    if result <= 0.0:
        raise ArgumentError(argument, result, "a positive number")
    return result


def tensor(argument: str, value: npt.ArrayLike, *shapes: tuple[int, ...]) -> ScalarArray:
    """Return a C-contiguous array of one of the given shapes."""
    array = scalars(argument, value)
    if array.shape not in shapes:
        expected = " or ".join(str(shape) for shape in dict.fromkeys(shapes))
        raise ArgumentError(argument, f"shape {array.shape}", f"shape {expected}")
    return np.ascontiguousarray(array)


def vectors(argument: str, value: npt.ArrayLike, dimension: int) -> ScalarArray:
    """Return vectors as columns, (dimension,) or (dimension, k), without a copy if possible.

    Whether they are finite is left to the core, which looks in parallel.
    """
    array = _as_array(argument, value, "real or complex numbers")
    if array.dtype not in (np.float64, np.complex128):
        array = scalars(argument, array)
    if array.ndim not in (1, 2) or array.shape[0] != dimension:
        expected = f"shape ({dimension},) or ({dimension}, k), columns being vectors"
        raise ArgumentError(argument, f"shape {array.shape}", expected)
    return array


def flags(argument: str, value: object, length: int) -> tuple[bool, ...]:
    """Return one boolean for each of `length` directions, from one for all or one for each."""
    expected = f"True or False, or one for each direction: {length} of them"
    array = _as_array(argument, value, expected)
    if array.dtype.kind != "b":
        raise ArgumentTypeError(argument, repr(value), expected)
    if array.shape not in ((), (length,)):
        raise ArgumentError(argument, f"shape {array.shape}", expected)
    return tuple(bool(flag) for flag in np.broadcast_to(array, (length,)))


def lattice_shape(shape: object) -> tuple[int, ...]:
    """Return the number of sites in each direction of a rectangular lattice."""
    try:
        lengths: list[object] = list(shape)  # type: ignore[call-overload]
    except TypeError:
        lengths = [shape]
    if not lengths:
        raise ArgumentError("shape", "no direction", "at least one number of sites")
    return tuple(count("shape", length) for length in lengths)


def _as_array(argument: str, value: object, expected: str) -> npt.NDArray[Any]:
    try:
        return np.asarray(value)
    except (ValueError, TypeError):
        given = f"{type(value).__name__} that does not form a regular array"
        raise ArgumentTypeError(argument, given, expected) from None


def _integers(argument: str, value: npt.ArrayLike) -> npt.NDArray[Any]:
    array = _as_array(argument, value, "integers")
    if array.dtype.kind not in "iu":
        raise ArgumentTypeError(argument, f"dtype {array.dtype}", "integers")
    return array


def _real(argument: str, array: ScalarArray) -> RealArray:
    if array.dtype.kind == "c":
        expected = "real numbers (take .real yourself if the imaginary part is meant to go)"
        raise ArgumentTypeError(argument, "complex numbers", expected)
    return array.astype(np.float64, copy=False)


def _pair(pair: IndexArray) -> str:
    return f"the bond ({pair[0]}, {pair[1]})"
