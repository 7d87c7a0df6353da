"""Terms of many paths side by side: the same bits as one by one, for every term of the catalogue that takes numbers."""

from __future__ import annotations

import numpy as np
import pytest

from procgen.chance.kernel import available, compiling
from procgen.chance.laws import LAWS
from procgen.spec.model import SpecError
from procgen.spec.reader import read_raw
from procgen.spec.varying import varying_of
from procgen.terms import catalogue
from procgen.terms.by_path import run, varied_of
from procgen.terms.graph import Graph, build
from procgen.terms.run import Run
from procgen.terms.stack import Stack

PATHS, STEPS = 5, 12
BODIES = {
    "noise": {"white_noise": {"sd": 1.5}},
    "ar1": {"ar": {"phi": 0.6, "sd": 1.2}},
    "ar2": {"ar": {"phi": [0.5, -0.3], "total_sd": 2.0}},
    "ar_student": {"ar": {"phi": 0.5, "sd": 1.0, "law": {"student_t": {"df": 5.5}}}},
    "ar_before": {"ar": {"phi": 0.5, "sd": 1.0, "before": {"x": [4.0]}}},
    "ma": {"ma": {"theta": [0.4, 0.2], "sd": 1.0}},
    "arma_garch": {"arma": {"phi": 0.5, "theta": 0.3, "shock": {"garch": {"sd": 2.0, "alpha": 0.1, "beta": 0.7}}}},
    "walk": {"random_walk": {"sd": 0.5, "drift": 0.1, "start": 3.0}},
    "ou": {"ornstein_uhlenbeck": {"rate": 0.3, "mean": 2.0, "sd": 0.5}},
    "garch": {"garch": {"omega": 0.1, "alpha": [0.1, 0.05], "beta": 0.7}},
    "arima": {"arima": {"d": 1, "phi": 0.4, "theta": -0.3, "drift": 0.2, "sd": 1.0}},
    "gjr": {"gjr_garch": {"omega": 0.1, "alpha": 0.05, "gamma": 0.1, "beta": 0.7}},
    "volatility": {"stochastic_volatility": {"sd": 1.0, "phi": 0.9, "eta": 0.3}},
    "leverage": {"stochastic_volatility": {"sd": 1.0, "phi": 0.9, "eta": 0.3, "rho": -0.5}},
    "trend": {"trend": {"level": 3.0, "slope": 0.2, "bends": [{"at": 4, "slope": -0.1}]}},
    "season": {"seasonal": {"period": 6, "harmonics": [{"amplitude": 2.0}, {"amplitude": 0.5}]}},
    "profile": {"seasonal": {"period": 3, "profile": [1.0, 2.0, 4.0]}},
    "cycle": {"stochastic_cycle": {"period": 8, "rho": 0.9, "total_sd": 1.0}},
    "levels": {"local_linear_trend": {"level_sd": 0.5, "slope_sd": 0.1, "noise_sd": 1.0}},
    "clip": {"clip": {"of": [{"ar": {"phi": 0.5, "sd": 1.0}}], "low": -0.5, "high": 0.75}},
    "regimes": {"regimes": {"branches": {"a": [{"ar": {"phi": 0.5, "sd": 1.0}}], "b": [{"constant": 4.0}]},
                            "durations": {"a": 5.0, "b": 3.0}}},
    "counts": {"poisson": {"mean": 3.0}},
}  # fmt: skip


def places(value, at=()):
    """Every number with a fraction of a body, by the keys that lead to it."""
    if isinstance(value, float):
        yield at
    elif isinstance(value, dict | list):
        for key, inner in value.items() if isinstance(value, dict) else enumerate(value):
            yield from places(inner, (*at, key))


def varied(value, at):
    """A body with the number at a place drawn from 0.9 to 1 of itself."""
    if not at:
        low, high = sorted((0.9 * value, value))
        return {"draw": {"uniform": [low, high]}, "over": "path"}
    made = dict(value) if isinstance(value, dict) else list(value)
    made[at[0]] = varied(value[at[0]], at[1:])
    return made


CASES = [(name, at) for name, body in BODIES.items() for at in places(body)]


def spec_of(body):
    raw = {"seed": 3, "paths": PATHS, "time": {"steps": STEPS}, "series": {"x": [body]}}
    return read_raw(raw, catalogue(), LAWS)


@pytest.mark.parametrize("name, at", CASES, ids=[f"{name}-{'.'.join(map(str, at))}" for name, at in CASES])
def test_every_number_of_a_term_may_vary(name, at):
    """All but those of laws, which vary by series only, and lengths of time."""
    if "law" in at or "durations" in at:
        with pytest.raises(SpecError, match="cannot vary by path" if "law" in at else "unknown key draw"):
            spec_of(varied(BODIES[name], at))
        return
    spec = spec_of(varied(BODIES[name], at))
    assert len([*varying_of(spec)]) == 1
    graph = build(spec)
    runner = run(graph, 0, PATHS)
    found = np.concatenate([runner.tile(7)["x"], runner.tile(STEPS - 7)["x"]])
    rows = varied_of(graph).rows(0, PATHS)
    for p in range(PATHS):
        own = Graph(varied_of(graph).at({key: float(row[p]) for key, row in rows.items()}))
        assert np.array_equal(found[:, p], Run(own, p, 1).tile(STEPS)["x"][:, 0]), p
    if available():
        with compiling():
            assert np.array_equal(found, run(graph, 0, PATHS).tile(STEPS)["x"])


BY_ROWS = ["noise", "ar1", "ar2", "ma", "walk", "ou", "garch", "trend", "season", "gjr", "ar_student"]


@pytest.mark.parametrize("name", BY_ROWS)
def test_these_begin_and_run_as_rows(name):
    at = next(iter(places(BODIES[name])))
    assert run(build(spec_of(varied(BODIES[name], at))), 0, PATHS).together


@pytest.mark.parametrize("name", ["noise", "ar1", "garch", "ar_student"])
def test_these_run_as_rows_beside_one_that_begins_path_by_path(name):
    """Here a stochastic volatility with leverage: then all paths have graphs of their own."""
    body = varied(BODIES[name], next(iter(places(BODIES[name]))))
    series = {"x": [body], "y": [varied(BODIES["leverage"], ("stochastic_volatility", "phi"))]}
    raw = {"seed": 3, "paths": PATHS, "time": {"steps": STEPS}, "series": series}
    runner = run(build(read_raw(raw, catalogue(), LAWS)), 0, PATHS)
    stacks = [node.term for node, _ in runner._nodes if node.name.startswith("x.")]
    assert stacks and all(isinstance(stack, Stack) and stack.one is not None for stack in stacks)


def test_the_search_for_cycles_goes_on_after_the_graphs_are_made():
    import gc

    assert gc.isenabled()
    runner = run(build(spec_of(varied(BODIES["volatility"], next(iter(places(BODIES["volatility"])))))), 0, PATHS)
    assert gc.isenabled()
    runner.tile(3)
    assert gc.isenabled()
