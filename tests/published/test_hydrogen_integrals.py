"""Integrals of the demo's hydrogen script against published values.

Source: A. Szabo and N. S. Ostlund, *Modern Quantum Chemistry*, the worked
example of the hydrogen molecule in a minimal basis (R = 1.4 bohr, exponent
1.24). The book prints four digits (recalled); the longer digits were
recomputed independently.
"""

import importlib.util
from pathlib import Path
from types import ModuleType

import numpy as np
import numpy.typing as npt
import pytest
from scipy.integrate import quad

SCRIPT = Path(__file__).parents[2] / "demo" / "hydrogen_integrals.py"
R = 1.4


@pytest.fixture(scope="module")
def script() -> ModuleType:
    spec = importlib.util.spec_from_file_location(SCRIPT.stem, SCRIPT)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def two_electron_levels(
    one_body: npt.NDArray[np.float64], mulliken: npt.NDArray[np.float64]
) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
    """Singlet and triplet levels: exchange-symmetric and antisymmetric orbital functions."""
    d = len(one_body)
    unit = np.eye(d)
    interaction = mulliken.transpose(0, 2, 1, 3).reshape(d * d, d * d)
    hamiltonian = np.kron(one_body, unit) + np.kron(unit, one_body) + interaction
    exchange = np.einsum("ik,jl->ijlk", unit, unit).reshape(d * d, d * d)
    parities, pairs = np.linalg.eigh(exchange)
    levels = []
    for parity in (1.0, -1.0):
        basis = pairs[:, np.isclose(parities, parity)]
        levels.append(np.linalg.eigvalsh(basis.T @ hamiltonian @ basis))
    return levels[0], levels[1]


@pytest.fixture(scope="module")
def molecular(script: ModuleType) -> dict[str, float]:
    """Integrals over the molecular orbitals g and u, which symmetry fixes."""
    one_body, two_body, _ = script.hydrogen_integrals([0.0, R])
    orbitals = np.array([[1.0, 1.0], [1.0, -1.0]]) / np.sqrt(2.0)
    h = np.einsum("pq,ip,jq->ij", one_body, orbitals, orbitals)
    v = np.einsum("pqrs,ip,jq,kr,ls->ijkl", two_body, *4 * [orbitals])
    return {
        "gg": h[0, 0],
        "uu": h[1, 1],
        "gu": h[0, 1],
        "gg|gg": v[0, 0, 0, 0],
        "gg|uu": v[0, 0, 1, 1],
        "uu|uu": v[1, 1, 1, 1],
        "gu|gu": v[0, 1, 0, 1],
        "gg|gu": v[0, 0, 0, 1],
    }


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("gg", -1.2527971883),
        ("uu", -0.4756028068),
        ("gu", 0.0),
        ("gg|gg", 0.6745943874),
        ("gg|uu", 0.6635639645),
        ("uu|uu", 0.6974950125),
        ("gu|gu", 0.1812578852),
        ("gg|gu", 0.0),
    ],
)
def test_molecular_integrals(molecular: dict[str, float], name: str, value: float) -> None:
    assert molecular[name] == pytest.approx(value, abs=1e-9)


def test_energies_of_the_molecule(script: ModuleType, molecular: dict[str, float]) -> None:
    one_body, two_body, repulsion = script.hydrogen_integrals([0.0, R])
    singlets, triplets = two_electron_levels(one_body, two_body)
    assert repulsion == pytest.approx(1.0 / R, rel=1e-15)
    expected = [-1.8515616189, -0.8835781454, -0.2331489714]
    np.testing.assert_allclose(singlets, expected, rtol=0, atol=1e-9)
    np.testing.assert_allclose(triplets, [-1.2460939158], rtol=0, atol=1e-9)
    assert singlets[0] + repulsion == pytest.approx(-1.1372759046, abs=1e-9)
    mean_field = 2 * molecular["gg"] + molecular["gg|gg"]
    assert singlets[0] - mean_field == pytest.approx(-0.0205616297, abs=1e-9)


def test_overlapping_basis_to_the_digits_in_print(script: ModuleType) -> None:
    """Overlap 0.6593, T_11 0.7600, (11|11) 0.7746, (11|22) 0.5697 in the book (recalled)."""
    nuclei = np.array([[0.0, 0.0, 0.0], [0.0, 0.0, R]])
    overlap, _, repulsion = script.atomic_integrals(nuclei, 1.24)
    assert overlap[0, 1] == pytest.approx(0.6593, abs=5e-5)
    assert repulsion[0, 0, 0, 0] == pytest.approx(0.7746, abs=5e-5)
    assert repulsion[0, 0, 1, 1] == pytest.approx(0.5697, abs=5e-5)
    np.testing.assert_allclose(np.diag(overlap), 1.0, rtol=1e-14)


@pytest.mark.parametrize("argument", [0.0, 1e-300, 1e-12, 1e-3, 1.0, 20.0])
def test_boys_function_is_its_integral(script: ModuleType, argument: float) -> None:
    value, _ = quad(lambda u: np.exp(-argument * u * u), 0.0, 1.0, epsabs=1e-13)
    assert script.boys_f0(argument) == pytest.approx(value, rel=1e-12)


def test_repulsion_of_three_centres_by_quadrature(script: ModuleType) -> None:
    """1/r = 2/sqrt(pi) int exp(-u^2 r^2) du leaves plain Gaussian integrals for each u."""
    nuclei = np.array([[0.0, 0.0, 0.0], [0.3, 0.0, 1.5], [0.0, 1.1, 2.9]])
    i, j, k, m = 0, 1, 1, 2
    exponents = script.EXPONENTS * 1.24**2
    bare = script.COEFFICIENTS * (2 * exponents / np.pi) ** 0.75
    bare /= np.sqrt(bare @ (np.pi / (exponents[:, None] + exponents)) ** 1.5 @ bare)
    terms = [(a, x, nuclei[0]) for a, x in zip(exponents, bare, strict=True)]

    def product(first: int, second: int) -> list[tuple[float, float, npt.NDArray[np.float64]]]:
        pairs = []
        for a, x, _ in terms:
            for b, y, _ in terms:
                separation = nuclei[first] - nuclei[second]
                centre = (a * nuclei[first] + b * nuclei[second]) / (a + b)
                factor = x * y * np.exp(-a * b / (a + b) * separation @ separation)
                pairs.append((a + b, factor, centre))
        return pairs

    def integrand(u: float) -> float:
        total = 0.0
        for p, x, centre in product(i, j):
            for q, y, other in product(k, m):
                determinant = p * q + (p + q) * u * u
                separation = centre - other
                decay = np.exp(-p * q * u * u / determinant * separation @ separation)
                total += x * y * (np.pi**2 / determinant) ** 1.5 * decay
        return float(2 / np.sqrt(np.pi) * total)

    value, _ = quad(integrand, 0.0, np.inf, epsabs=1e-12, epsrel=1e-10)
    repulsion = script.atomic_integrals(nuclei, 1.24)[2]
    assert repulsion[i, j, k, m] == pytest.approx(value, rel=1e-9)


def test_symmetry_and_rotation_of_a_chain(script: ModuleType) -> None:
    along = np.array([0.0, 1.3, 3.1, 4.4])
    direction = np.array([2.0, -1.0, 2.0]) / 3.0
    one_body, two_body, repulsion = script.hydrogen_integrals(along)
    rotated = script.hydrogen_integrals(np.outer(along, direction) + 5.0)
    np.testing.assert_allclose(rotated.one_body, one_body, atol=1e-12)
    np.testing.assert_allclose(rotated.two_body, two_body, atol=1e-12)
    assert rotated.nuclear_repulsion == pytest.approx(repulsion, rel=1e-13)
    np.testing.assert_allclose(one_body, one_body.T, atol=1e-13)
    for axes in [(1, 0, 2, 3), (0, 1, 3, 2), (2, 3, 0, 1)]:
        np.testing.assert_allclose(two_body, two_body.transpose(axes), atol=1e-13)


def test_far_atoms_are_free_atoms(script: ModuleType) -> None:
    """The singlet of two distant atoms has twice the energy of one (common practice)."""
    atom = script.hydrogen_integrals([0.0])
    assert atom.nuclear_repulsion == 0.0
    one_body, two_body, repulsion = script.hydrogen_integrals([0.0, 60.0])
    singlets, triplets = two_electron_levels(one_body, two_body)
    assert singlets[0] + repulsion == pytest.approx(2 * atom.one_body[0, 0], abs=1e-9)
    assert triplets[0] == pytest.approx(singlets[0], abs=1e-9)


def test_ten_atoms(script: ModuleType) -> None:
    one_body, two_body, _ = script.hydrogen_integrals(1.8 * np.arange(10))
    assert one_body.shape == (10, 10)
    assert two_body.shape == (10, 10, 10, 10)
    as_matrix = two_body.reshape(100, 100)
    assert np.linalg.eigvalsh(as_matrix).min() > -1e-12  # a Coulomb energy is positive


@pytest.mark.parametrize(
    "positions", [[], [[0.0, 1.0]], 1.0, [0.0, 0.0], [0.0, np.nan], np.zeros((1, 1, 3))]
)
def test_bad_positions_are_refused(script: ModuleType, positions: npt.ArrayLike) -> None:
    with pytest.raises(ValueError, match="positions"):
        script.hydrogen_integrals(positions)
