"""Integrals of hydrogen atoms in a minimal basis, in hartree and bohr.

One 1s function for each atom, a fixed sum of three s-Gaussians: the standard
three-term expansion of a Slater function, W. J. Hehre, R. F. Stewart and J. A.
Pople, J. Chem. Phys. 51, 2657 (1969). The integrals over s-Gaussians are the
closed formulas of A. Szabo and N. S. Ostlund, *Modern Quantum Chemistry*,
appendix A; overlap and kinetic energy share one product of Gaussians, and both
Coulomb integrals lead to the Boys function F0.
"""

from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.special import erf

FloatArray = npt.NDArray[np.float64]

# Expansion of the Slater function with exponent 1 in normalised s-Gaussians;
# the printed coefficients normalise it to six digits only (see `_Products`).
EXPONENTS = np.array([0.109818, 0.405771, 2.22766])
COEFFICIENTS = np.array([0.444635, 0.535328, 0.154329])
SLATER_EXPONENT = 1.24  # the usual choice for hydrogen in molecules


class Integrals(NamedTuple):
    """Integrals in an orthonormal basis, ready for `fockhull` with ``order="mulliken"``."""

    one_body: FloatArray
    """Kinetic energy and attraction of the nuclei, shape (atoms, atoms)."""
    two_body: FloatArray
    """(pq|rs), shape (atoms, atoms, atoms, atoms)."""
    nuclear_repulsion: float


def hydrogen_integrals(
    positions: npt.ArrayLike, slater_exponent: float = SLATER_EXPONENT
) -> Integrals:
    """Integrals of hydrogen atoms in symmetrically orthogonalised 1s orbitals.

    Parameters
    ----------
    positions : array_like, shape (atoms,) or (atoms, 3)
        Nuclei in bohr, along a line or in space.
    slater_exponent : float
        Exponent of the Slater function that each orbital stands for.

    Returns
    -------
    Integrals
        (one_body, two_body, nuclear_repulsion) in hartree. The orbitals belong
        to the atoms in the order given (Löwdin's orthogonalisation).

    Raises
    ------
    ValueError
        If positions do not have this shape or nuclei coincide.
    """
    nuclei = _nuclei(positions)
    overlap, one_body, two_body = atomic_integrals(nuclei, slater_exponent)
    transform = _inverse_square_root(overlap)
    for _ in range(4):  # each pass transforms the first index and moves it to the end
        two_body = np.tensordot(two_body, transform, axes=(0, 0))
    return Integrals(transform @ one_body @ transform, two_body, _nuclear_repulsion(nuclei))


def atomic_integrals(
    nuclei: FloatArray, slater_exponent: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Overlap, one-body integrals and (pq|rs) in the normalised but overlapping 1s orbitals."""
    products = _Products(nuclei, slater_exponent)
    return (
        products.contracted(products.overlap()),
        products.contracted(products.kinetic() + products.attraction()),
        products.contracted_pairs(products.repulsion()),
    )


class _Products:
    """All products of two primitive s-Gaussians, each again an s-Gaussian.

    exp(-a |x - A|^2) exp(-b |x - B|^2) has exponent p = a + b, centre
    P = (a A + b B) / p and the factor exp(-a b / p |A - B|^2). Arrays run over
    (atom, primitive, atom, primitive), flattened.
    """

    def __init__(self, nuclei: FloatArray, slater_exponent: float) -> None:
        exponents = EXPONENTS * slater_exponent**2
        self.nuclei = nuclei
        self.shape = 2 * (len(nuclei), len(exponents))
        a = np.tile(exponents, len(nuclei))
        centres = np.repeat(nuclei, len(exponents), axis=0)
        weights = np.tile(_normalised_coefficients(exponents), len(nuclei))

        exponent = a[:, None] + a
        reduced = a[:, None] * a / exponent
        weighted = a[:, None] * centres
        squared_distance = _squared_distances(centres, centres)
        factor = weights[:, None] * weights * np.exp(-reduced * squared_distance)
        self.centre = ((weighted[:, None] + weighted) / exponent[..., None]).reshape(-1, 3)
        self.exponent: FloatArray = exponent.ravel()
        self.reduced: FloatArray = reduced.ravel()
        self.factor: FloatArray = factor.ravel()
        self.squared_distance: FloatArray = squared_distance.ravel()

    def overlap(self) -> FloatArray:
        return self.factor * (np.pi / self.exponent) ** 1.5

    def kinetic(self) -> FloatArray:
        return self.reduced * (3 - 2 * self.reduced * self.squared_distance) * self.overlap()

    def attraction(self) -> FloatArray:
        argument = self.exponent[:, None] * _squared_distances(self.centre, self.nuclei)
        potential: FloatArray = boys_f0(argument).sum(axis=1)
        return -2 * np.pi / self.exponent * self.factor * potential

    def repulsion(self) -> FloatArray:
        p, q = self.exponent[:, None], self.exponent
        argument = p * q / (p + q) * _squared_distances(self.centre, self.centre)
        charges: FloatArray = 2 * np.pi**2.5 * self.factor[:, None] * self.factor
        return charges / (p * q * np.sqrt(p + q)) * boys_f0(argument)

    def contracted(self, values: FloatArray) -> FloatArray:
        """Sum over the primitives of both orbitals: (atom, atom)."""
        sums: FloatArray = values.reshape(self.shape).sum(axis=(1, 3))
        return sums

    def contracted_pairs(self, values: FloatArray) -> FloatArray:
        """Sum over the primitives of all four orbitals: (atom, atom, atom, atom)."""
        sums: FloatArray = values.reshape(2 * self.shape).sum(axis=(1, 3, 5, 7))
        return sums


def boys_f0(argument: npt.ArrayLike) -> FloatArray:
    """F0(t), the integral of exp(-t u^2) over u from 0 to 1."""
    t = np.asarray(argument, dtype=np.float64)
    root = np.sqrt(np.where(t > 0.0, t, 1.0))
    return np.where(t > 0.0, np.sqrt(np.pi) / 2 * erf(root) / root, 1.0)


def _normalised_coefficients(exponents: FloatArray) -> FloatArray:
    """Factors of the bare primitives that normalise the contracted orbital exactly."""
    bare = COEFFICIENTS * (2 * exponents / np.pi) ** 0.75
    overlaps = (np.pi / (exponents[:, None] + exponents)) ** 1.5
    normalised: FloatArray = bare / np.sqrt(bare @ overlaps @ bare)
    return normalised


def _squared_distances(points: FloatArray, others: FloatArray) -> FloatArray:
    result: FloatArray = ((points[:, None, :] - others) ** 2).sum(axis=-1)
    return result


def _inverse_square_root(overlap: FloatArray) -> FloatArray:
    values, vectors = np.linalg.eigh(overlap)
    root: FloatArray = vectors / np.sqrt(values) @ vectors.T
    return root


def _nuclear_repulsion(nuclei: FloatArray) -> float:
    first, second = np.triu_indices(len(nuclei), k=1)
    return float((1.0 / np.linalg.norm(nuclei[first] - nuclei[second], axis=1)).sum())


def _nuclei(positions: npt.ArrayLike) -> FloatArray:
    points = np.asarray(positions, dtype=np.float64)
    if points.ndim == 1:
        points = np.outer(points, [0.0, 0.0, 1.0])
    if points.ndim != 2 or points.shape[1] != 3 or len(points) == 0:
        raise ValueError(f"positions: expected shape (atoms,) or (atoms, 3), got {points.shape}")
    if not np.isfinite(points).all():
        raise ValueError("positions: expected finite numbers, got NaN or infinity")
    if len(np.unique(points, axis=0)) < len(points):
        raise ValueError("positions: expected different positions, got two nuclei at the same")
    return points
