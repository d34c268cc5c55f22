"""Sweeps in memory: grids, what a task may return, failed points, warm starts."""
# ruff: noqa: N803

import functools
import threading
import time
import warnings
from concurrent.futures import Executor, Future, ThreadPoolExecutor

import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st

import fockhull as fh
from fockhull.errors import ArgumentError, ArgumentTypeError
from fockhull.sweeps import SweepWarning, points
from fockhull.sweeps import sweep as noisy_sweep
from fockhull.sweeps.folding import point_chunks
from fockhull.sweeps.record import decode, encode, record_of

sweep = functools.partial(noisy_sweep, progress=False)


class Ensemble:
    """A result with labels of its own."""

    def __init__(self, U):
        self.energy = U

    def to_xarray(self):
        levels = self.energy + np.arange(3.0)
        matrix = levels[:, None] * np.array([[1.0, 1j], [-1j, 1.0]])[:, None, :]
        return xr.Dataset(
            {
                "energies": ("state", levels, {"units": "t"}),
                "density_matrix": (("p", "state", "q"), matrix),
            },
            {"p": ["left", "right"], "q": ["left", "right"]},
            {"sector": "4 modes", "energy": self.energy},
        )


def test_results_follow_the_order_of_the_grid():
    result = sweep(lambda U, phase: U * 10 + phase, {"U": [3.0, 1.0], "phase": [0, 2, 1]})
    assert result.result.dims == ("U", "phase")
    np.testing.assert_array_equal(result.result, [[30.0, 32.0, 31.0], [10.0, 12.0, 11.0]])
    np.testing.assert_array_equal(result.U, [3.0, 1.0])
    assert bool(result.finished.all())


def test_values_keep_their_types():
    def task(x):
        return {"i": int(x), "f": x, "c": x * 1j, "b": x > 1, "s": f"x={x}", "a": np.eye(2) * x}

    result = sweep(task, {"x": [1.0, 2.0]})
    kinds = {name: result[name].dtype.kind for name in "ifcb"}
    assert kinds == {"i": "i", "f": "f", "c": "c", "b": "b"}
    assert list(result.s.values) == ["x=1.0", "x=2.0"]
    assert result.a.dims == ("x", "a_dim0", "a_dim1")
    np.testing.assert_array_equal(result.c, [1j, 2j])
    np.testing.assert_array_equal(result.a[1], 2 * np.eye(2))


def test_points_arrive_as_plain_python_values():
    seen = []

    def task(**point):
        seen.append({name: type(value) for name, value in point.items()})
        return 0.0

    axes = {"f": np.array([1.0]), "i": np.array([1]), "s": ["a"], "b": [True], "c": [1j]}
    sweep(task, axes)
    assert seen == [{"f": float, "i": int, "s": str, "b": bool, "c": complex}]


def test_labelled_results_keep_names_labels_and_common_attributes():
    result = sweep(Ensemble, {"U": [0.0, 4.0]})
    assert result.density_matrix.dims == ("U", "p", "state", "q")
    assert list(result.p.values) == ["left", "right"]
    assert result.energies.attrs == {"units": "t"}
    assert result.attrs["sector"] == "4 modes"
    assert "energy" not in result.attrs, "an attribute that differs between points"
    assert result.density_matrix.sel(U=4.0, p="left", q="right", state=0).item() == 4j


def test_labelled_results_in_a_dict_are_prefixed():
    result = sweep(lambda U: {"bare": Ensemble(U), "gap": U}, {"U": [1.0]})
    assert set(result.data_vars) == {"bare_energies", "bare_density_matrix", "gap"}


def test_named_dimensions_of_plain_arrays():
    result = sweep(lambda U: {"levels": (("state",), [U, U + 1])}, {"U": [0.0]})
    assert result.levels.dims == ("U", "state")


def test_bare_xarray_objects():
    result = sweep(lambda U: Ensemble(U).to_xarray(), {"U": [1.0, 2.0]})
    assert set(result.data_vars) == {"energies", "density_matrix"}
    result = sweep(lambda U: Ensemble(U).to_xarray().energies, {"U": [1.0, 2.0]})
    assert result.energies.dims == ("U", "state")
    result = sweep(lambda U: {"levels": Ensemble(U).to_xarray().energies}, {"U": [1.0]})
    assert result.levels.dims == ("U", "state")


def test_table_of_points():
    table = points(U=[1.0, 1.0, 4.0], seed=[0, 0, 7])
    result = sweep(lambda U, seed: U + seed, table)
    assert result.result.dims == ("point",)
    np.testing.assert_array_equal(result.result, [1.0, 1.0, 11.0])
    np.testing.assert_array_equal(result.seed, [0, 0, 7])
    assert result.U.dims == ("point",)


def test_failed_points_are_recorded_and_the_rest_goes_on():
    def task(x):
        if x == 1:
            raise ValueError("no bound state")
        return {"n": x, "ok": True}

    with pytest.warns(SweepWarning, match="1 of 4 points failed.*no bound state"):
        result = sweep(task, {"x": [0, 1, 2, 3]})
    assert list(result.finished.values) == [True, False, True, True]
    assert result.failure.values[1] == "ValueError: no bound state"
    np.testing.assert_array_equal(result.n, [0, np.nan, 2, 3])
    np.testing.assert_array_equal(result.ok, [1, np.nan, 1, 1])


@pytest.mark.parametrize(
    ("later", "message"),
    [
        (np.zeros(3), "dimension 'result_dim0' has length 3"),
        (np.zeros((2, 2)), "has dimensions"),
        (np.zeros(2, dtype=complex), "is complex128; the first result had float64"),
        ({"other": 1.0}, "variables"),
        ({"result": None}, "dtype object"),
    ],
)
def test_a_result_unlike_the_first_is_a_failed_point(later, message):
    results = {0: np.zeros(2), 1: later, 2: np.ones(2)}
    with pytest.warns(SweepWarning):
        result = sweep(lambda x: results[x], {"x": [0, 1, 2]}, executor=ThreadPoolExecutor(1))
    assert message in result.failure.values[1]
    np.testing.assert_array_equal(result.result[[0, 2]], [[0, 0], [1, 1]])


def test_integers_fit_where_the_first_result_was_real():
    result = sweep(lambda x: 0 if x else 0.5, {"x": [0, 1]}, executor=ThreadPoolExecutor(1))
    np.testing.assert_array_equal(result.result, [0.5, 0.0])


def test_all_points_failed():
    def task(x):
        raise RuntimeError("never")

    with pytest.warns(SweepWarning):
        result = sweep(task, {"x": [0, 1]})
    assert not result.finished.any()


def test_window_bounds_what_is_under_way():
    lock, under_way, most = threading.Lock(), 0, 0

    def task(x):
        nonlocal under_way, most
        with lock:
            under_way += 1
            most = max(most, under_way)
        time.sleep(0.005)
        with lock:
            under_way -= 1
        return x

    with ThreadPoolExecutor(8) as executor:
        sweep(task, {"x": range(20)}, executor=executor, window=3)
    assert most == 3


def test_warm_starts_run_along_the_axis_and_skip_failures():
    def task(x, y, previous):
        if (x, y) == (1, 0):
            raise RuntimeError("lost")
        before = 0.0 if previous is None else float(previous.total)
        return {"total": before + 1}

    with pytest.warns(SweepWarning):
        result = sweep(task, {"x": [0, 1, 2, 3], "y": [0, 1]}, warm_start="x")
    np.testing.assert_array_equal(result.total.sel(y=1), [1, 2, 3, 4])
    np.testing.assert_array_equal(result.total.sel(y=0), [1, np.nan, 1, 2])


def test_functionals_in_threads_never_touch_the_filters_of_warnings():
    repulsion = fh.Interaction(fh.SpinHalfFermions(3, (1, 1)), density_density=4.0 * np.eye(3))
    functional = fh.UniversalFunctional(repulsion, [0.6, 0.4], domain="spin-summed")
    seen = []

    def value(x):
        gamma = np.diag([2 / 3 - x, 2 / 3, 2 / 3 + x])
        found = functional.evaluate(gamma, tol=1e-6).value
        seen.extend(f for f in warnings.filters if f[2] is fh.CutMultipletWarning)
        return {"value": found}

    with ThreadPoolExecutor(8) as executor:
        result = sweep(value, {"x": np.linspace(0.0, 0.1, 16)}, executor=executor)
    assert not seen
    assert result.finished.all()


def returns(value):
    return lambda x: value


@pytest.mark.parametrize(
    ("arguments", "error", "message"),
    [
        ((3, {"x": [1]}), ArgumentTypeError, "`task`"),
        ((returns(1), [1, 2]), ArgumentTypeError, "`grid`"),
        ((returns(1), {}), ArgumentError, "`grid`"),
        ((returns(1), {"x": []}), ArgumentError, r"`grid\['x'\]`"),
        ((returns(1), {"x": [[1, 2]]}), ArgumentError, r"shape \(1, 2\)"),
        ((returns(1), {"x": [1, 1]}), ArgumentError, "distinct"),
        ((returns(1), {"x": [1, "a"]}), ArgumentTypeError, "mixed"),
        ((returns(1), {"x": [object()]}), ArgumentTypeError, "dtype object"),
        ((returns(1), {"x": [np.nan]}), ArgumentError, "NaN"),
        ((returns(1), {"finished": [1]}), ArgumentError, "'finished'"),
        ((returns(1), [{"x": 1}, {"y": 1}]), ArgumentError, "point 1"),
        ((returns({"x": 1.0}), {"x": [1]}), ArgumentError, "variable 'x'"),
        ((returns({"a": ("x", [1.0])}), {"x": [1]}), ArgumentError, "dimension 'x'"),
        ((returns({"a": ("a", [1.0])}), {"x": [1]}), ArgumentError, "variable 'a'"),
    ],
)
def test_bad_arguments(arguments, error, message):
    with pytest.raises(error, match=message):
        sweep(*arguments)


@pytest.mark.parametrize(
    ("options", "error", "message"),
    [
        ({"executor": 2}, ArgumentTypeError, "`executor`"),
        ({"ragged": "state"}, ArgumentTypeError, "`ragged`"),
        ({"ragged": ["level"]}, ArgumentError, "'level'"),
        ({"warm_start": "y"}, ArgumentError, "`warm_start`"),
        ({"window": 0}, ArgumentError, "`window`"),
        ({"lost_retries": -1}, ArgumentError, "`lost_retries`"),
        ({"version": 2}, ArgumentTypeError, "`version`"),
    ],
)
def test_bad_options(options, error, message):
    with pytest.raises(error, match=message):
        sweep(returns({"a": ("state", [1.0])}), {"x": [1]}, **options)


def test_columns_of_different_length():
    with pytest.raises(ArgumentError, match="lengths"):
        points(U=[1.0, 2.0], seed=[1])


VALUES = st.one_of(
    st.booleans(),
    st.integers(-(2**63), 2**63 - 1),
    st.floats(),
    st.complex_numbers(),
    st.text(),
    st.lists(st.complex_numbers(), max_size=4).map(lambda v: np.array(v, dtype=complex)),
    st.lists(st.text(), min_size=1, max_size=4).map(lambda v: np.array(v, dtype=object)),
)


@given(st.dictionaries(st.text(min_size=1), VALUES, max_size=4))
def test_records_survive_the_journal(result):
    record = record_of(result)
    back = decode(encode(record))
    assert list(back.variables) == list(record.variables)
    for name, variable in record.variables.items():
        assert back.variables[name].kind == variable.kind
        assert back.variables[name].dims == variable.dims
        np.testing.assert_array_equal(back.variables[name].data, variable.data)


@given(st.lists(st.integers(1, 300), min_size=1, max_size=4).map(tuple), st.integers(1, 200))
def test_chunks_hold_enough_points(shape, points_per_chunk):
    chunks = point_chunks(shape, points_per_chunk)
    enough = min(points_per_chunk, int(np.prod(shape)))
    assert all(1 <= chunk <= length for chunk, length in zip(chunks, shape, strict=True))
    assert np.prod(chunks) >= enough


class Forgetful(Executor):
    """An executor that loses each point the first `times` times."""

    def __init__(self, times):
        self.times, self.seen = times, {}

    def submit(self, function, /, call):
        number, future = call.number, Future()
        self.seen[number] = self.seen.get(number, 0) + 1
        if self.seen[number] <= self.times:
            future.cancel()
        else:
            future.set_result(function(call))
        return future


def test_lost_points_are_tried_again_a_bounded_number_of_times():
    executor = Forgetful(times=2)
    assert sweep(lambda x: x, {"x": range(5)}, executor=executor).finished.all()
    assert executor.seen == dict.fromkeys(range(5), 3)
    executor = Forgetful(times=10)
    with pytest.warns(SweepWarning, match="5 of 5 .*worker lost 2 times"):
        sweep(lambda x: x, {"x": range(5)}, executor=executor, lost_retries=1)
    assert executor.seen == dict.fromkeys(range(5), 2)


def test_progress_shows_counts_and_failures(capsys):
    with pytest.warns(SweepWarning):
        noisy_sweep(lambda x: 1 / x, {"x": [0, 1, 2]})
    shown = capsys.readouterr().err
    assert "3/3" in shown
    assert "failed=1" in shown


def test_events_are_logged_with_their_facts(caplog):
    with caplog.at_level("DEBUG", "fockhull.sweep"), pytest.warns(SweepWarning):
        sweep(lambda x: 1 / x, {"x": [0, 1]}, executor=ThreadPoolExecutor(1))
    events = {record.event: record.facts for record in caplog.records}
    assert events["start"] == {"points": 2, "missing": 2}
    assert events["failed"]["point"] == {"x": 0}
    assert "ZeroDivisionError" in events["trace"]["trace"]
    assert events["done"]["point"] == {"x": 1}
    assert events["done"]["seconds"] >= 0
    assert events["end"] == {"failed": 1}
