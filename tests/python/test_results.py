"""Results as people use them: shown, kept, labelled, weighted anew."""

from __future__ import annotations

import contextlib
import pickle
import re
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from numpy.testing import assert_allclose, assert_array_equal

import fockhull as fh
from fockhull import errors
from reference.random_problems import random_one_body, random_two_body

RNG = np.random.default_rng(7)
SECTOR = fh.SpinHalfFermions(3, particles=(2, 1))
COMPLEX = fh.Hamiltonian(
    random_one_body(RNG, 3, is_complex=True),
    fh.Interaction(SECTOR, two_body=random_two_body(RNG, 3, "complex"), order="dirac"),
    constant=0.5,
)
RING = fh.Hamiltonian(fh.lattices.ring(4), sector=fh.SpinHalfFermions(4, particles=(2, 2)))
"""Free particles: the ground level has four states."""
WEIGHTS = [0.5, 0.3, 0.2]
POLYTOPE = fh.ExclusionPolytope(SECTOR, WEIGHTS, domain="spin-resolved")
OUTSIDE = np.array([[1.1, 0.9, 0.0], [0.9, 0.1, 0.0]])
INSIDE = np.array([[0.8, 0.7, 0.5], [0.5, 0.3, 0.2]])
E = fh.solve(COMPLEX, WEIGHTS)
PROJECTION = POLYTOPE.project(np.array([np.diag(n) for n in OUTSIDE]))


def objects() -> dict[str, Any]:
    """One of each public kind."""
    return {
        "fermions": fh.Fermions(4, 2),
        "spin-half": SECTOR,
        "bosons": fh.Bosons(3, 2),
        "density-density": fh.Interaction(fh.Bosons(3, 2), density_density=np.ones((3, 3))),
        "two-body": COMPLEX.interaction,
        "entries": fh.Interaction(SECTOR, entries=([[0] * 4], [2.0])),
        "sum": COMPLEX.interaction + 2.0 * fh.Interaction(SECTOR, density_density=np.eye(3)),
        "nothing": fh.Interaction(SECTOR, entries=(np.empty((0, 4), int), [])),
        "hamiltonian": COMPLEX,
        "free": RING,
        "memory": COMPLEX.memory_estimate(),
        "ensemble": E,
        "levels": fh.solve(COMPLEX, levels=2),
        "level count": E.level_count,
        "polytope": POLYTOPE,
        "projection": PROJECTION,
        "batch": POLYTOPE.project(occupations=[[OUTSIDE, INSIDE]]),
        "configurations": PROJECTION.ensemble,
        "separator": PROJECTION.separator,
        "member": POLYTOPE.project(occupations=[OUTSIDE, INSIDE])[1],
        "inequality": POLYTOPE.inequalities()[0],
        "tightest": POLYTOPE.tightest(occupations=INSIDE),
        "stretch": POLYTOPE.stretch(occupations=INSIDE),
        "stretches": POLYTOPE.stretch(occupations=[INSIDE, OUTSIDE]),
        "support": POLYTOPE.support(INSIDE),
        "lowest": SECTOR.lowest_configurations([0.0, 1.0, 3.0], 4),
    }


OBJECTS = objects()
CERTIFIED = fh.ExclusionPolytope | fh.Projection | fh.ConfigurationEnsemble | fh.Separator
PLAIN = {"memory", "level count", "support", "lowest", "tightest"}
EVERY_KIND = pytest.mark.parametrize("kind", OBJECTS)


def content(value: Any) -> Any:
    """What an object knows through its public attributes, for comparison."""
    for kind, knows in CONTENT.items():
        if isinstance(value, kind):
            return knows(value)
    return value


def of_ensemble(e: fh.Ensemble) -> list[Any]:
    parts = [e.energies, e.vectors, e.weights, e.next_energy, e.multiplets]
    return parts if e.weights is None else [*parts, e.density_matrix, e.occupations]


def of_projection(p: fh.Projection) -> list[Any]:
    ensemble = p[0, 1].ensemble if np.ndim(p.gap) else p.ensemble
    return [p.occupations, p.normal, p.gap, content(ensemble)]


CONTENT: dict[type, Callable[[Any], Any]] = {
    fh.Interaction: lambda w: content(fh.Hamiltonian(np.zeros((w.sector.modes,) * 2), w)),
    fh.Hamiltonian: lambda h: [h.to_scipy().toarray(), h.one_body, h.constant],
    fh.Ensemble: of_ensemble,
    fh.ExclusionPolytope: lambda p: [p.sector, p.weights, p.domain, p.support(OUTSIDE)],
    fh.Projection: of_projection,
    fh.ConfigurationEnsemble: lambda e: [
        e.probabilities,
        e.occupations(),
        *(e.configurations(k) for k in range(len(e))),
    ],
    fh.Separator: lambda s: [s.potential, s.occupations, s.weights, s.bound, s.value, s.verify()],
    fh.Inequality: lambda i: [i.coefficients, i.bound, i.bound_weights, str(i), i.latex],
    fh.Stretch: lambda s: [s.value, s.lower, s.boundary, s.normal, s.constraint],
}


def assert_same(first: Any, second: Any) -> None:
    first, second = content(first), content(second)
    if isinstance(first, list | tuple):
        assert len(first) == len(second)
        for a, b in zip(first, second, strict=True):
            assert_same(a, b)
    elif isinstance(first, np.ndarray):
        assert first.dtype == second.dtype
        assert_array_equal(first, second)
    else:
        assert first == second


@EVERY_KIND
@pytest.mark.parametrize("protocol", range(2, pickle.HIGHEST_PROTOCOL + 1))
def test_pickling(kind: str, protocol: int) -> None:
    original = OBJECTS[kind]
    copy = pickle.loads(pickle.dumps(original, protocol))
    assert type(copy) is type(original)
    assert_same(copy, original)
    assert repr(copy) == repr(original)
    again = pickle.loads(pickle.dumps(copy, protocol))
    assert_same(again, original)


@pytest.mark.parametrize(
    "error",
    [
        errors.ArgumentError("weights", "[0.3, 0.7]", "a decreasing list"),
        errors.ArgumentIndexError("index", 7, "0 to 5"),
        errors.ArgumentTypeError("modes", 1.5, "an integer"),
        errors.SizeError("too large"),
        errors.ConvergenceError("not there yet", E),
    ],
    ids=lambda error: type(error).__name__,
)
def test_errors_are_pickled(error: Exception) -> None:
    copy = pickle.loads(pickle.dumps(error))
    assert type(copy) is type(error)
    assert str(copy) == str(error)
    if isinstance(error, errors.ConvergenceError):
        assert_same(copy.result, E)


@EVERY_KIND
def test_reprs(kind: str) -> None:
    """Short, and telling what the thing is; the domain wherever there is a choice of it."""
    value = OBJECTS[kind]
    text = repr(value)
    assert text.startswith(type(value).__name__ + "(")
    assert "object at 0x" not in text
    assert len(text) < 220 or kind in PLAIN
    if isinstance(value, CERTIFIED):
        assert "spin-resolved" in text


@EVERY_KIND
def test_html(kind: str) -> None:
    if kind in PLAIN or hasattr(OBJECTS[kind], "_repr_latex_"):
        pytest.skip("a plain tuple or dataclass shown by its repr, or a formula")
    html = OBJECTS[kind]._repr_html_()
    assert html.startswith("<table>")
    assert html.endswith("</table>")
    for tag in ("table", "caption", "tbody", "tr", "th", "td"):
        assert len(re.findall(rf"<{tag}\b", html)) == html.count(f"</{tag}>") > 0
    assert "object at 0x" not in html


def attributes_of(value: Any) -> set[str]:
    of_class = {name for name in dir(type(value)) if not callable(getattr(type(value), name))}
    names = of_class | set(getattr(value, "__dict__", ()))
    return {name for name in names if not name.startswith("_")}


@EVERY_KIND
@pytest.mark.parametrize("pickled", [False, True], ids=["made", "unpickled"])
def test_immutability(kind: str, pickled: bool) -> None:
    """No public attribute can be set, no array of an object written."""
    value = pickle.loads(pickle.dumps(OBJECTS[kind])) if pickled else OBJECTS[kind]
    for name in attributes_of(value):
        try:
            attribute = getattr(value, name)
        except fh.FockhullError:  # an ensemble without weights
            attribute = None
        with pytest.raises((AttributeError, TypeError)):
            setattr(value, name, attribute)
        if isinstance(attribute, np.ndarray) and kind not in PLAIN:
            kept = getattr(value, name) is attribute
            assert not (kept and attribute.flags.writeable), name


def test_equal_sectors_are_equal_and_hashable() -> None:
    assert fh.Fermions(4, 2) == fh.Fermions(np.int64(4), particles=np.int32(2))
    assert fh.SpinHalfFermions(4, (2, 1)) == fh.SpinHalfFermions(4, particles=[2, 1])
    assert len({fh.Fermions(4, 2), fh.Fermions(4, 2), fh.Bosons(4, 2), fh.Fermions(4, 3)}) == 3


@pytest.mark.parametrize("vectors", [False, True], ids=["no vectors", "vectors"])
def test_labelled_data_survive_a_file(tmp_path: Path, vectors: bool) -> None:
    """NetCDF through h5netcdf, complex numbers included."""
    data = E.to_xarray(vectors=vectors)
    path = tmp_path / "ensemble.nc"
    data.to_netcdf(path, engine="h5netcdf")
    with xr.open_dataset(path, engine="h5netcdf") as read:
        xr.testing.assert_identical(read.load(), data)
        assert read["density_matrix"].dtype == np.complex128
    assert_array_equal(data["density_matrix"], E.density_matrix)
    assert_array_equal(data["occupations"].sel(spin="down"), E.occupations[1])
    assert data["state_density_matrices"].dims == ("level", "spin", "mode", "mode_2")
    assert ("vectors" in data) is vectors
    needed = {"convention", "domain", "sector", "fockhull_version", "seed", "tolerance"}
    assert needed <= set(data.attrs)


def test_labelled_data_of_levels_and_spinless_sectors() -> None:
    levels = fh.solve(COMPLEX, levels=2).to_xarray()
    assert "weights" not in levels
    assert "density_matrix" not in levels
    spinless = fh.solve(fh.Hamiltonian(np.diag([0.0, 1.0]), sector=fh.Bosons(2, 2)), [1.0])
    data = spinless.to_xarray()
    assert data["density_matrix"].dims == ("mode", "mode_2")
    assert data.attrs["domain"] == "spinless"


def test_labelled_data_are_copies() -> None:
    data = E.to_xarray()
    before = E.density_matrix.copy()
    with contextlib.suppress(ValueError):  # read-only is as good
        data["density_matrix"][...] = 0.0
    assert_array_equal(E.density_matrix, before)


def test_reweighted() -> None:
    """The same states: as solving anew, without solving."""
    other = E.reweighted([0.6, 0.4])
    fresh = fh.solve(COMPLEX, [0.6, 0.4])
    assert other.products == E.products
    assert_allclose(other.energy, fresh.energy, rtol=0.0, atol=1e-12)
    assert_allclose(other.density_matrix, fresh.density_matrix, rtol=0.0, atol=1e-10)
    assert_array_equal(E.weights, WEIGHTS)
    from_levels = fh.solve(COMPLEX, levels=3).reweighted(WEIGHTS)
    assert_allclose(from_levels.density_matrix, E.density_matrix, rtol=0.0, atol=1e-12)
    assert_array_equal(E.reweighted([1.0, 0.0, 0.0]).weights, [1.0])


def test_levels_instead_of_weights() -> None:
    levels = fh.solve(COMPLEX, levels=3)
    assert levels.weights is None
    assert levels.cut_multiplets == ()
    assert_array_equal(levels.energies, E.energies)
    assert_array_equal(levels.state_density_matrices, E.state_density_matrices)


def test_cut_multiplet_is_warned_about() -> None:
    """In words: which levels, their energy and spread, the weights, what to do."""
    with pytest.warns(fh.CutMultipletWarning) as caught:
        ensemble = fh.solve(RING, WEIGHTS)
    assert len(caught) == 1
    assert caught[0].filename == __file__
    text = str(caught[0].message)
    for words in ("levels 1 to 4", "energy -4", "spread", "0.5, 0.3, 0.2, 0", "symmetrized()"):
        assert words in text
    assert ensemble.cut_multiplets == ((0, 4),)
    assert "cut" not in repr(fh.solve(COMPLEX, WEIGHTS))
    with pytest.warns(fh.CutMultipletWarning, match="weights 1, 0, 0, 0"):
        ensemble.reweighted([1.0])


def test_symmetrized() -> None:
    """The energy stays, the weights are averaged, the density matrix has the symmetry."""
    with pytest.warns(fh.CutMultipletWarning):
        ensemble = fh.solve(RING, [0.4, 0.3, 0.2, 0.06, 0.04])
    symmetric = ensemble.symmetrized()
    assert_allclose(symmetric.weights[:4], 0.24, rtol=0.0, atol=1e-15)
    level = symmetric.multiplets[1]
    assert_allclose(symmetric.weights[slice(*level)], 0.04 / (level[1] - level[0]))
    assert_allclose(symmetric.energy, ensemble.energy, rtol=0.0, atol=1e-12)
    assert symmetric.cut_multiplets == ()
    shifted = np.roll(symmetric.density_matrix, 1, axis=(1, 2))
    assert_allclose(shifted, symmetric.density_matrix, rtol=0.0, atol=1e-12)
    assert_allclose(symmetric.density_matrix[0], symmetric.density_matrix[1], atol=1e-12)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        fh.solve(RING, symmetric.weights)


def test_whole_multiplets_are_not_warned_about() -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        fh.solve(RING, [0.25] * 4)
        fh.solve(RING, levels=2)
        fh.solve(COMPLEX, WEIGHTS)
