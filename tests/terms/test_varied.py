"""Parameters by path: path p is the path of the spec with its values written in, whatever is drawn beside it.

No outside reference is needed for addresses: every assertion compares draws bit by bit.
"""

from __future__ import annotations

import copy

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from scipy import stats

from procgen.chance.kernel import available, compiling
from procgen.chance.laws import LAWS
from procgen.spec.reader import read_raw
from procgen.terms import catalogue
from procgen.terms.by_path import run, varied_of
from procgen.terms.graph import Graph, build
from procgen.terms.run import Run

STEPS = 40


def path(law):
    return {"draw": law, "over": "path"}


K = {"parameter": "k"}
RAW = {
    "seed": 5,
    "paths": 64,
    "time": {"steps": STEPS},
    "parameters": {
        "k": path({"uniform": [0.3, 0.9]}),
        "size": {"draw": {"lognormal": {"median": 2, "sigma": 0.5}}, "over": "series"},
    },
    "series": {
        "x": [{"constant": path({"normal": {"mean": 3, "sd": 2}})}, {"ar": {"phi": [K, -0.1], "total_sd": 2}}],
        "y": [{"garch": {"sd": {"parameter": "size"}, "beta": 0.5,
                         "alpha": path({"beta": {"alpha": 2, "beta": 3, "between": [0, 0.3]}})}}],
        "z": [{"ar": {"phi": K, "sd": 1, "law": {"student_t": {"df": 5}}}, "times": path({"choice": [-1, 1, 2]})},
              {"random_walk": {"sd": {"parameter": "size"}, "drift": K}}],
        "w": [{"lag": {"of": [{"ar": {"phi": K, "sd": 1}}], "by": 3}}, {"use": "x"}],
    },
    "correlation": {"between": ["x.ar", "w.ar"], "value": 0.4},
}  # fmt: skip


def spec_of(raw):
    return read_raw(raw, catalogue(), LAWS)


def drawn(raw, first=0, paths=24, tiles=(STEPS,)):
    runner = run(build(spec_of(raw)), first, paths)
    parts = [runner.tile(steps) for steps in tiles]
    return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}


def changed(**sections):
    raw = copy.deepcopy(RAW)
    for name, section in sections.items():
        raw[name] = section
    return raw


@pytest.fixture(scope="module")
def whole():
    return drawn(RAW)


def same(a, b, names=None):
    for name in names or a:
        assert np.array_equal(a[name], b[name]), name


def test_a_path_is_that_of_the_spec_with_its_values_written_in(whole):
    varied = varied_of(build(spec_of(RAW)))
    rows = varied.rows(0, 24)
    for p in (0, 7, 23):
        own = Run(Graph(varied.at({name: float(row[p]) for name, row in rows.items()})), p, 1).tile(STEPS)
        same({name: x[:, p : p + 1] for name, x in whole.items()}, own)


def test_any_paths_alone_and_any_tiles(whole):
    alone = drawn(RAW, first=17, paths=3)
    same({name: x[:, 17:20] for name, x in whole.items()}, alone)
    same(whole, drawn(RAW, tiles=(1, 7, STEPS - 8)))
    longer = drawn({**RAW, "time": {"steps": STEPS + 30}}, tiles=(STEPS + 30,))
    same(whole, {name: x[:STEPS] for name, x in longer.items()})


def test_a_run_goes_on_from_its_state(whole):
    graph = build(spec_of(RAW))
    first = run(graph, 0, 24)
    first.tile(13)
    later = run(graph, 0, 24)
    later.restore(13, {name: rows.copy() for name, rows in first.state().items()})
    same({name: x[13:] for name, x in whole.items()}, later.tile(STEPS - 13))


@pytest.mark.skipif(not available(), reason="numba is not installed")
def test_compiled_is_the_same(whole):
    with compiling():
        same(whole, drawn(RAW))


def test_the_same_draw_serves_every_place(whole):
    rows = varied_of(build(spec_of(RAW))).rows(0, 24)
    assert set(rows) == {"k", "x.constant.level", "y.garch.alpha", "z.ar.times"}
    walk = drawn(changed(series={"z": RAW["series"]["z"][1:], "x": RAW["series"]["x"]}, correlation=[]))
    steps = np.diff(walk["z"], axis=0).mean(axis=0) - rows["k"]
    assert np.all(np.abs(steps) < 5 * 4 / np.sqrt(STEPS))  # sd of `size` is below 4: one in 1e5 beyond 4.4 sd a path


def test_other_parameters_names_and_series_move_nothing(whole):
    more = {**RAW["parameters"], "other": path({"uniform": [0, 1]})}
    body = [*RAW["series"]["x"], {"constant": {"parameter": "other"}, "as": "more", "times": 0}]
    series = {"new": [{"constant": path({"uniform": [0, 1]})}], **RAW["series"], "x": body}
    found = drawn(changed(parameters=dict(reversed(more.items())), series=series))
    same(whole, found, ["y", "z"])
    assert np.allclose(whole["x"], found["x"], rtol=1e-12)


def test_another_law_draws_from_the_same_uniforms():
    rows = [
        varied_of(build(spec_of(changed(parameters={**RAW["parameters"], "k": path(law)})))).rows(0, 64)["k"]
        for law in ({"uniform": [0.3, 0.9]}, {"uniform": [0.0, 0.5]})
    ]
    assert np.allclose((rows[0] - 0.3) / 0.6, rows[1] / 0.5)


def test_a_renamed_series_keeps_its_draws_by_its_stream():
    series = {("q" if name == "y" else name): body for name, body in RAW["series"].items()}
    moved = drawn(changed(series=series))
    series["q"] = {"of": series["q"], "stream": "y"}
    kept = drawn(changed(series=series))
    same(drawn(RAW), {**kept, "y": kept["q"]}, ["y"])
    assert not np.array_equal(moved["q"], kept["q"])


def test_by_series_every_series_has_its_own_and_paths_share_it():
    parameters = {"level": {"draw": {"normal": {"mean": 0, "sd": 1}}, "over": "series"}}
    names = [f"s{i}" for i in range(40)]
    series = {name: [{"constant": {"parameter": "level"}}] for name in names}
    x = drawn(changed(parameters=parameters, series=series, correlation=[]), paths=3)
    assert all(np.unique(x[name]).size == 1 for name in names)
    levels = np.array([x[name][0, 0] for name in names])
    assert np.unique(levels).size == len(names)
    assert stats.kstest(levels, "norm").pvalue > 1e-8
    assert not varied_of(build(spec_of(changed(parameters=parameters, series=series, correlation=[])))).parameters


def test_draws_follow_their_law_and_are_independent():
    """Kolmogorov's distance, and correlations of two parameters and of neighbours, each false once in 1e8."""
    rows = varied_of(build(spec_of(RAW))).rows(0, 4000)
    assert stats.kstest(rows["k"], stats.uniform(0.3, 0.6).cdf).pvalue > 1e-8
    assert stats.kstest(rows["x.constant.level"], stats.norm(3, 2).cdf).pvalue > 1e-8
    assert stats.kstest(rows["y.garch.alpha"], stats.beta(2, 3, scale=0.3).cdf).pvalue > 1e-8
    bound = stats.norm.isf(0.5e-8) / np.sqrt(4000)
    assert abs(np.corrcoef(rows["k"], rows["x.constant.level"])[0, 1]) < bound
    assert abs(np.corrcoef(rows["k"][1:], rows["k"][:-1])[0, 1]) < bound


def test_values_of_a_table():
    table = {"from_table": {"key": "path", "values": [float(p) for p in range(10)]}}
    raw = changed(series={"x": [{"constant": table}]}, correlation=[], paths=10)
    assert np.array_equal(drawn(raw, first=2, paths=5)["x"][0], np.arange(2.0, 7.0))
    with pytest.raises(ValueError, match="has values of 10 paths, and path 11 is asked for; add it there"):
        drawn(raw, first=8, paths=4)


BETA = {"beta": {"alpha": 2, "beta": 2, "between": [0, 0.8]}}
LAW = st.sampled_from(({"uniform": [0.1, 0.6]}, {"choice": [0.2, 0.5]}, BETA))
NUMBER = st.one_of(st.just(K), st.builds(path, LAW), st.just(0.5))
TERM = st.one_of(
    st.fixed_dictionaries({"ar": st.fixed_dictionaries({"phi": NUMBER, "sd": st.just(1)})}),
    st.fixed_dictionaries({"random_walk": st.fixed_dictionaries({"sd": st.just(1), "drift": NUMBER, "start": NUMBER})}),
    st.fixed_dictionaries({"ma": st.fixed_dictionaries({"theta": st.lists(NUMBER, min_size=1, max_size=2),
                                                        "total_sd": st.just(2)})}),
    st.fixed_dictionaries({"trend": st.fixed_dictionaries({"level": NUMBER, "slope": NUMBER}), "times": NUMBER}),
    st.fixed_dictionaries({"ornstein_uhlenbeck": st.fixed_dictionaries({"rate": st.just(0.3), "mean": NUMBER,
                                                                        "total_sd": st.just(1)})}),
)  # fmt: skip


@settings(max_examples=12, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
@given(st.lists(TERM, min_size=1, max_size=3, unique_by=lambda entry: sorted(entry)[0]), st.integers(0, 40))
def test_any_path_of_any_spec_alone(body, p):
    raw = changed(series={"x": body}, correlation=[])
    few = drawn(raw, first=max(p - 2, 0), paths=5, tiles=(9, 3))["x"]
    alone = drawn(raw, first=p, paths=1, tiles=(12,))["x"]
    assert np.array_equal(few[:, p - max(p - 2, 0)], alone[:, 0])
