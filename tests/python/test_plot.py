"""Pictures: what is drawn is what was given, and nothing else changes."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from itertools import permutations
from typing import Any

import matplotlib as mpl
import numpy as np
import numpy.typing as npt
import pytest
import xarray as xr
from matplotlib import pyplot as plt
from mpl_toolkits.mplot3d.art3d import Line3DCollection, Poly3DCollection
from numpy.testing import assert_allclose, assert_array_equal
from scipy.optimize import linprog
from scipy.spatial import ConvexHull

import fockhull as fh
from fockhull.plot import limits, shadow
from refusals import TYPE, VALUE, named, refused

Array = npt.NDArray[Any]
CLOSE: dict[str, Any] = {"rtol": 0.0, "atol": 1e-9}

F = fh.Fermions(4, 2)
P = fh.ExclusionPolytope(F, [0.5, 0.3, 0.2])
N = np.array([0.2, 0.9, 0.8, 0.1])
S = fh.SpinHalfFermions(3, particles=(2, 1))
RESOLVED = fh.ExclusionPolytope(S, [0.6, 0.4], "spin-resolved")
SUMMED = fh.ExclusionPolytope(S, [0.6, 0.4], "spin-summed")
M = np.array([[0.95, 0.95, 0.1], [0.9, 0.1, 0.0]])


@pytest.fixture(autouse=True)
def _closed() -> Iterator[None]:
    """Draw without a screen, and leave no figure open."""
    plt.switch_backend("Agg")
    yield
    plt.close("all")


def solved(repulsion: float) -> fh.Ensemble:
    """Three sites in a ring: degenerate levels at every repulsion."""
    ring = -(np.ones((3, 3)) - np.eye(3))
    interaction = fh.Interaction(S, density_density=repulsion * np.eye(3))
    return fh.solve(fh.Hamiltonian(ring, interaction), [0.6, 0.4], symmetrize=True)


U = np.array([0.0, 1.0, 2.5, 4.0])
ENSEMBLES = [solved(repulsion) for repulsion in U]


@pytest.fixture(scope="module")
def dataset() -> xr.Dataset:
    results = fh.sweep(solved, {"repulsion": U}, progress=False)
    return results.rename(repulsion="U")


DRAWINGS: dict[str, Callable[..., Any]] = {
    "domain": lambda ax: fh.plot.domain(P, points=N, ax=ax),
    "occupation_bars": lambda ax: fh.plot.occupation_bars(P, occupations=N, ax=ax),
    "slack_bars": lambda ax: fh.plot.slack_bars(P, occupations=N, ax=ax),
    "spectrum": lambda ax: fh.plot.spectrum(ENSEMBLES, "U", U, ax=ax),
    "gap": lambda ax: fh.plot.gap(ENSEMBLES, "U", U, ax=ax),
    "occupations": lambda ax: fh.plot.occupations(ENSEMBLES, "U", U, polytope=RESOLVED, ax=ax),
    "slack": lambda ax: fh.plot.slack(ENSEMBLES, "U", U, polytope=RESOLVED, ax=ax),
}


@pytest.mark.parametrize("draw", DRAWINGS.values(), ids=DRAWINGS)
def test_axes_are_taken_and_returned_and_nothing_global_changes(draw: Any) -> None:
    _, given = plt.subplots()
    before = dict(mpl.rcParams)
    assert draw(given) is given
    assert draw(None) is not given
    assert dict(mpl.rcParams) == before
    assert len(plt.get_fignums()) == 2
    for ax in map(plt.Figure.get_axes, map(plt.figure, plt.get_fignums())):
        assert ax[0].get_xlabel()
        ax[0].figure.canvas.draw()


def test_every_drawing_is_covered() -> None:
    assert set(DRAWINGS) == set(fh.plot.__all__)


CASES = [
    *(fh.ExclusionPolytope(fh.Fermions(4, 2), w) for w in ([1.0], [0.7, 0.3], [0.4, 0.4, 0.2])),
    fh.ExclusionPolytope(fh.Fermions(5, 2), [0.4, 0.3, 0.2, 0.1]),
    fh.ExclusionPolytope(fh.Bosons(4, 3), [0.5, 0.3, 0.2]),
    fh.ExclusionPolytope(fh.SpinHalfFermions(4, (2, 1)), [0.5, 0.3, 0.2], "spin-summed"),
]


def shadows(polytope: fh.ExclusionPolytope, modes: int) -> Array:
    """Corners of the hull of all permuted vertices, seen in the first modes."""
    rows = [v[list(o)] for v in polytope.generating_vertices() for o in permutations(range(len(v)))]
    seen = np.unique(np.round(rows, 12), axis=0)[:, :modes]
    return seen[ConvexHull(seen).vertices]


def same_points(found: Array, expected: Array) -> None:
    assert len(found) == len(expected)
    order = [np.lexsort(np.round(points, 6).T) for points in (found, expected)]
    assert_allclose(found[order[0]], expected[order[1]], **CLOSE)


@pytest.mark.parametrize("polytope", CASES, ids=repr)
def test_the_outline_is_the_shadow_of_all_vertices(polytope: fh.ExclusionPolytope) -> None:
    ax = fh.plot.domain(polytope)
    corners = np.array(ax.lines[0].get_data()).T
    assert_array_equal(corners[0], corners[-1])
    same_points(corners[:-1], shadows(polytope, 2))
    assert (ax.get_xlabel(), ax.get_ylabel()) == ("$n_{1}$", "$n_{2}$")


@pytest.mark.parametrize("polytope", CASES, ids=repr)
def test_solids_are_the_shadow_of_all_vertices(polytope: fh.ExclusionPolytope) -> None:
    faces = shadow.faces(shadow.reach_of(polytope, [0, 1, 2]))
    assert faces is not None
    same_points(np.unique(np.round(np.concatenate(faces), 9), axis=0), shadows(polytope, 3))
    hull = ConvexHull(shadows(polytope, 3))
    assert len(faces) == len(np.unique(hull.equations.round(6), axis=0))
    assert_allclose(shadow.size(faces), hull.volume, **CLOSE)
    ax = fh.plot.domain(polytope, (0, 1, 2))
    kinds = [type(artist) for artist in ax.collections]
    assert kinds == [Poly3DCollection, Line3DCollection]
    assert ax.get_zlabel() == "$n_{3}$"


def test_slice_and_shadow_are_the_same() -> None:
    """Corners of the outline are allowed when the other modes share evenly."""
    polytope = CASES[3]
    corners = np.array(fh.plot.domain(polytope, (4, 1)).lines[0].get_data()).T
    n = np.zeros((len(corners), 5))
    n[:, [4, 1]] = corners
    n[:, [0, 2, 3]] = (2.0 - corners.sum(axis=1, keepdims=True)) / 3.0
    assert polytope.contains(occupations=n).all()
    centre = np.full(5, 0.4)
    assert not polytope.contains(occupations=centre + 1.001 * (n - centre)).any()


def test_spins_are_named_in_outlines() -> None:
    ax = fh.plot.domain(RESOLVED, [(0, 0), (1, 2)])
    assert ax.get_xlabel() == r"$n_{1\uparrow}$"
    assert ax.get_ylabel() == r"$n_{3\downarrow}$"


@pytest.mark.parametrize("polytope", [P, RESOLVED], ids=repr)
def test_points_and_labels_of_domains(polytope: fh.ExclusionPolytope) -> None:
    pauli = fh.ExclusionPolytope(polytope.sector, [1.0], None if polytope is P else "spin-resolved")
    vertex = pauli.support(
        np.arange(np.prod(P.shape) if polytope is P else 6.0).reshape(polytope.shape)
    ).occupations
    middle = np.broadcast_to(vertex.mean(axis=-1, keepdims=True), vertex.shape)
    modes: Any = (0, 1) if polytope is P else ((0, 0), (1, 1))
    ax = fh.plot.domain([pauli, polytope], modes, points=[vertex, middle])
    drawn = [np.ma.getdata(artist.get_offsets()) for artist in ax.collections]
    at = [tuple(np.atleast_1d(m)) for m in modes]
    assert_allclose(drawn[0], [[middle[p] for p in at]])
    assert_allclose(drawn[1], [[vertex[p] for p in at]])
    names = [text.get_text() for text in ax.get_legend().get_texts()]
    assert names == [
        "$r = 1$",
        f"$r = {len(polytope.weights)}$",
        "allowed",
        "refused by one or more",
    ]
    assert {line.get_linestyle() for line in ax.lines} == {"-", "--"}
    two = fh.ExclusionPolytope(fh.Fermions(4, 2), [0.6, 0.3, 0.1])
    names = [line.get_label() for line in fh.plot.domain([P, two]).lines]
    assert names == ["$w$ = (0.5, 0.3, 0.2)", "$w$ = (0.6, 0.3, 0.1)"]
    names = [line.get_label() for line in fh.plot.domain([P, two], labels=["a", "b"]).lines]
    assert names == ["a", "b"]


def test_domains_of_one_point_and_many_weights() -> None:
    point = fh.ExclusionPolytope(fh.Fermions(3, 1), np.full(3, 1.0 / 3.0))
    assert_allclose(fh.plot.domain(point).lines[0].get_data(), np.full((2, 2), 1.0 / 3.0))
    weights = np.arange(2000.0, 0.0, -1.0)
    many = fh.ExclusionPolytope(fh.Fermions(40, 20), weights / weights.sum())
    corners = np.array(fh.plot.domain(many).lines[0].get_data())
    assert_allclose(corners.max(), -many.support(-np.eye(40)[0]).value, **CLOSE)


@pytest.mark.parametrize("polytope", [*CASES, RESOLVED], ids=repr)
@pytest.mark.parametrize("leading_sums", [False, True])
def test_limits_are_the_extremes_over_the_polytope(
    polytope: fh.ExclusionPolytope, leading_sums: bool
) -> None:
    """Each by a linear program over the inequalities and the order of the occupations."""
    blocks, d = np.atleast_2d(np.zeros(polytope.shape)).shape
    facets = polytope.inequalities()
    order = np.kron(np.eye(blocks), np.diff(np.eye(d), axis=0))
    rows = np.vstack([order, *(facet.coefficients.reshape(1, -1) for facet in facets)])
    bounds = [*np.zeros(len(order)), *(facet.bound for facet in facets)]
    blockwise = np.kron(np.eye(blocks), np.ones(d))
    numbers = polytope.sector.particles if blocks == 2 else [polytope.sector.total_particles]
    of = limits.of_leading_sums if leading_sums else limits.of_occupations
    single = np.tril(np.ones((d, d))) if leading_sums else np.eye(d)
    for side, sign in zip(of(polytope), (1.0, -1.0), strict=True):
        for goal, found in zip(np.kron(np.eye(blocks), single), side.ravel(), strict=True):
            best = linprog(
                sign * goal, rows, bounds, blockwise, np.atleast_1d(numbers), bounds=(None, None)
            )
            assert_allclose(found, sign * best.fun, rtol=0.0, atol=1e-8)


@pytest.mark.parametrize(("polytope", "point"), [(P, N), (RESOLVED, M), (SUMMED, M.sum(axis=0))])
def test_bars_show_the_numbers_given(polytope: fh.ExclusionPolytope, point: Array) -> None:
    decreasing = -np.sort(-point, axis=-1)
    bars = fh.plot.occupation_bars(polytope, occupations=point).patches[: point.size]
    assert_allclose([bar.get_height() for bar in bars], decreasing.ravel())
    bars = fh.plot.occupation_bars(polytope, occupations=point, leading_sums=True).patches
    sums = np.cumsum(decreasing, axis=-1).ravel()
    assert_allclose([bar.get_height() for bar in bars[: point.size]], sums)
    gamma = np.eye(point.shape[-1]) * point[..., None]
    ax = fh.plot.slack_bars(polytope, gamma)
    inequalities = polytope.inequalities()
    slacks = [inequality.slack(point) for inequality in inequalities]
    bars = ax.patches[: len(slacks)]
    assert_allclose([bar.get_width() for bar in bars], slacks, atol=1e-12)
    violated = np.array(slacks) < -1e-9
    assert violated.any()
    assert [bool(bar.get_hatch()) for bar in bars] == violated.tolist()
    assert len(ax.get_yticklabels()) == len(slacks)
    fewer = fh.plot.slack_bars(polytope, gamma, most=2)
    assert_allclose(
        sorted(bar.get_width() for bar in fewer.patches[:2]), sorted(slacks)[:2], atol=1e-12
    )


def test_names_of_bars() -> None:
    ax = fh.plot.occupation_bars(RESOLVED, occupations=M)
    assert [label.get_text() for label in ax.get_xticklabels()] == [
        "1↑",
        "2↑",
        "3↑",
        "1↓",
        "2↓",
        "3↓",
    ]
    assert ax.get_ylabel() == "occupation"
    ax = fh.plot.occupation_bars(SUMMED, occupations=M.sum(axis=0), leading_sums=True)
    assert ax.get_ylabel() == "sum of leading spin-summed occupations"


def curves(ax: Any) -> dict[str, Array]:
    return {line.get_label(): np.asarray(line.get_ydata()) for line in ax.lines}


def test_spectrum(dataset: xr.Dataset) -> None:
    """The same from ensembles and from a sweep; markers where levels are degenerate."""
    for results, values in ((ENSEMBLES, U), (dataset, None)):
        ax = fh.plot.spectrum(results, "U", values, parameter_unit="t", energy_unit="meV")
        drawn = curves(ax)
        energies = np.array([e.energies for e in ENSEMBLES])
        for level in range(2):
            assert_allclose(drawn[f"$E_{{{level + 1}}}$"], energies[:, level])
        assert_allclose(drawn["ensemble $E_w$"], [e.energy for e in ENSEMBLES])
        assert_allclose(ax.lines[0].get_xdata(), U)
        assert (ax.get_xlabel(), ax.get_ylabel()) == ("U (t)", "energy (meV)")
        markers = [line for line in ax.lines if "levels" in line.get_label()]
        marked = np.unique(np.concatenate([line.get_xdata() for line in markers]))
        degenerate = [u for u, e in zip(U, ENSEMBLES, strict=True) if e.multiplets[0][1] > 1]
        assert_allclose(marked, degenerate)
        assert len(degenerate) > 0


def test_one_marker_for_each_size_of_multiplet() -> None:
    atom = fh.Fermions(5, 1)
    levels = fh.solve(fh.Hamiltonian(np.diag([0.0, 0, 0, 1, 1]), sector=atom), levels=5)
    ax = fh.plot.spectrum([levels], "step", [0])
    markers = {line.get_label(): line for line in ax.lines if "levels" in line.get_label()}
    assert_allclose(markers["3 levels"].get_ydata(), [0, 0, 0], atol=1e-12)
    assert_allclose(markers["2 levels"].get_ydata(), [1, 1])
    assert markers["3 levels"].get_marker() != markers["2 levels"].get_marker()


def test_a_crossing_is_marked_wherever_it_is() -> None:
    """Of doublets that last some are left out, of those at one value none."""
    m = 200
    energies = np.zeros((m, 4))
    energies[:, 2:] = [1.0, 2.0]
    multiplet = np.tile([1, 1, 2, 3], (m, 1))
    energies[77, 3], multiplet[77, 3] = 1.0, 2
    results = xr.Dataset(
        {"energies": (("x", "level"), energies), "multiplet": (("x", "level"), multiplet)},
        {"x": np.arange(m)},
    )
    drawn = [
        line for line in fh.plot.spectrum(results, "x").lines if line.get_label() == "2 levels"
    ]
    (markers,) = drawn
    x, y = markers.get_data()
    assert_array_equal(x[y == 1.0], [77, 77])
    lasting = np.unique(x[y == 0.0])
    assert {0, m - 1} <= set(lasting)
    assert len(lasting) <= 26


def test_gap(dataset: xr.Dataset) -> None:
    ax = fh.plot.gap(dataset, "U", energy_unit="t")
    expected = [e.energies[1] - e.energies[0] for e in ENSEMBLES]
    assert_allclose(ax.lines[0].get_ydata(), expected, atol=1e-12)
    assert ax.get_ylabel() == "energy difference (t)"


def test_occupations(dataset: xr.Dataset) -> None:
    numbers = np.array([e.occupations for e in ENSEMBLES])
    for results, values in ((ENSEMBLES, U), (dataset, None)):
        drawn = curves(fh.plot.occupations(results, "U", values, polytope=RESOLVED))
        for spin, arrow in enumerate(("uparrow", "downarrow")):
            for k in range(3):
                assert_allclose(drawn[f"$n_{{{k + 1}\\{arrow}}}$"], numbers[:, spin, k])
        drawn = curves(fh.plot.occupations(results, "U", values, leading=2))
        assert_allclose(drawn["down"], numbers[:, 1, :2].sum(axis=1))
    summed = [np.linalg.eigvalsh(e.density_matrix.sum(axis=0))[::-1] for e in ENSEMBLES]
    ax = fh.plot.occupations(ENSEMBLES, "U", U, polytope=SUMMED)
    assert_allclose(curves(ax)["$n_{1}$"], np.array(summed)[:, 0])
    assert ax.get_ylabel() == "spin-summed occupation"
    ranges = [line.get_ydata() for line in ax.lines if len(line.get_ydata()) == 2][-3:]
    assert_allclose(ranges, np.transpose(limits.of_occupations(SUMMED)))


def test_slack(dataset: xr.Dataset) -> None:
    inequalities = RESOLVED.inequalities()
    numbers = np.array([e.occupations for e in ENSEMBLES])
    for results, values in ((ENSEMBLES, U), (dataset, None)):
        ax = fh.plot.slack(results, "U", values, polytope=RESOLVED, most=None)
        expected = [inequality.slack(numbers) for inequality in inequalities]
        drawn = [line.get_ydata() for line in ax.lines if len(line.get_ydata()) == len(U)]
        assert_allclose(drawn, expected, atol=1e-12)
        closest = fh.plot.slack(results, "U", values, polytope=RESOLVED, most=1).lines[0]
        assert_allclose(closest.get_ydata().min(), np.min(expected), atol=1e-12)


def test_failed_points_leave_gaps(dataset: xr.Dataset) -> None:
    broken = dataset.copy(deep=True)
    for name in ("energies", "energy", "occupations"):
        broken[name][1] = np.nan
    energies = curves(fh.plot.spectrum(broken, "U"))["$E_{1}$"]
    assert_array_equal(np.isnan(energies), [False, True, False, False])
    slacks = fh.plot.slack(broken, "U", polytope=RESOLVED).lines[0].get_ydata()
    assert_array_equal(np.isnan(slacks), [False, True, False, False])


OTHER = fh.ExclusionPolytope(fh.Fermions(5, 2), [1.0])
LEVELS = [fh.solve(e.hamiltonian, levels=2) for e in ENSEMBLES]
TWO = xr.Dataset({"energies": (("U", "V", "level"), np.zeros((2, 2, 2)))}, {"U": [0, 1]})


@named(
    [
        (TYPE, "polytopes", lambda: fh.plot.domain(F)),
        (TYPE, "polytopes", lambda: fh.plot.domain("P")),
        (TYPE, "polytopes", lambda: fh.plot.domain([P, None])),
        (VALUE, "polytopes", lambda: fh.plot.domain([])),
        (VALUE, "polytopes", lambda: fh.plot.domain([P, OTHER]), "one sector"),
        (VALUE, "polytopes", lambda: fh.plot.domain([RESOLVED, SUMMED]), "domain"),
        (TYPE, "modes", lambda: fh.plot.domain(P, 1)),
        (TYPE, "modes", lambda: fh.plot.domain(P, "01")),
        (TYPE, "modes", lambda: fh.plot.domain(P, (0.0, 1.0))),
        (VALUE, "modes", lambda: fh.plot.domain(P, (0,)), "two or three"),
        (VALUE, "modes", lambda: fh.plot.domain(P, (0, 0)), "different"),
        (VALUE, "modes", lambda: fh.plot.domain(P, (0, 1, 2, 3))),
        (VALUE, "modes", lambda: fh.plot.domain(RESOLVED, (0, 1)), "(spin, mode)"),
        (VALUE, "modes", lambda: fh.plot.domain(P, ((0, 0), (0, 1)))),
        (VALUE, "modes", lambda: fh.plot.domain(SUMMED, (0, 1, 2)), "two modes"),
        (TYPE, "labels", lambda: fh.plot.domain(P, labels="P")),
        (TYPE, "labels", lambda: fh.plot.domain(P, labels=[1])),
        (VALUE, "labels", lambda: fh.plot.domain(P, labels=["a", "b"]), "1 strings"),
        (VALUE, "points", lambda: fh.plot.domain(P, points=[0.5, 0.5]), "4"),
        (VALUE, "points", lambda: fh.plot.domain(P, points=np.full(4, np.nan)), "finite"),
        (TYPE, "points", lambda: fh.plot.domain(P, points=N + 0j)),
        (TYPE, "ax", lambda: fh.plot.domain(P, ax=1)),
        (VALUE, "ax", lambda: fh.plot.domain(P, (0, 1, 2), ax=plt.subplots()[1]), "projection"),
        (TYPE, "polytope", lambda: fh.plot.occupation_bars(F, occupations=N)),
        (VALUE, "density_matrix", lambda: fh.plot.occupation_bars(P)),
        (VALUE, "occupations", lambda: fh.plot.occupation_bars(P, occupations=[N, N]), "single"),
        (VALUE, "occupations", lambda: fh.plot.slack_bars(P, occupations=N[:3])),
        (VALUE, "most", lambda: fh.plot.slack_bars(P, occupations=N, most=0)),
        (TYPE, "results", lambda: fh.plot.spectrum(ENSEMBLES[0], "U", U)),
        (TYPE, "results", lambda: fh.plot.spectrum([1.0], "U", [1.0])),
        (TYPE, "results", lambda: fh.plot.spectrum(3.0, "U")),
        (VALUE, "results", lambda: fh.plot.spectrum([], "U", [])),
        (VALUE, "results", lambda: fh.plot.spectrum(TWO, "U"), ".sel"),
        (VALUE, "results", lambda: fh.plot.spectrum(TWO.drop_vars("energies"), "U"), "energies"),
        (VALUE, "parameter", lambda: fh.plot.spectrum(TWO, "W"), "U"),
        (TYPE, "parameter", lambda: fh.plot.spectrum(ENSEMBLES, U, U)),
        (VALUE, "values", lambda: fh.plot.spectrum(ENSEMBLES, "U"), "each ensemble"),
        (VALUE, "values", lambda: fh.plot.spectrum(ENSEMBLES, "U", U[:2]), "(4,)"),
        (VALUE, "values", lambda: fh.plot.spectrum(TWO, "U", U)),
        (TYPE, "energy_unit", lambda: fh.plot.spectrum(ENSEMBLES, "U", U, energy_unit=1)),
        (TYPE, "parameter_unit", lambda: fh.plot.gap(ENSEMBLES, "U", U, parameter_unit=1)),
        (VALUE, "between", lambda: fh.plot.gap(ENSEMBLES, "U", U, between=[(1, 3)]), "1 to 2"),
        (VALUE, "between", lambda: fh.plot.gap(ENSEMBLES, "U", U, between=[(2, 1)])),
        (VALUE, "between", lambda: fh.plot.gap(ENSEMBLES, "U", U, between=(1, 2))),
        (TYPE, "between", lambda: fh.plot.gap(ENSEMBLES, "U", U, between=[(1.0, 2.0)])),
        (VALUE, "results", lambda: fh.plot.occupations(LEVELS, "U", U), "weights"),
        (VALUE, "leading", lambda: fh.plot.occupations(ENSEMBLES, "U", U, leading=0)),
        (VALUE, "leading", lambda: fh.plot.occupations(ENSEMBLES, "U", U, leading=4), "1 to 3"),
        (TYPE, "leading", lambda: fh.plot.occupations(ENSEMBLES, "U", U, leading=1.0)),
        (TYPE, "polytope", lambda: fh.plot.occupations(ENSEMBLES, "U", U, polytope=F)),
        (VALUE, "polytope", lambda: fh.plot.occupations(ENSEMBLES, "U", U, polytope=P)),
        (TYPE, "polytope", lambda: fh.plot.slack(ENSEMBLES, "U", U, polytope=None)),
    ]
)
def test_bad_input(error: Any, argument: str, call: Any, words: str) -> None:
    refused(error, argument, call, words)
    # what is refused leaves no figure behind, other than one made for the test itself
    assert len(plt.get_fignums()) == (argument == "ax" and words != "")
