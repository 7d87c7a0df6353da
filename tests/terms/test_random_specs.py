"""Any spec that the declarations allow is read or refused with a sentence, and then keeps the laws."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings

from procgen.chance.laws import LAWS
from procgen.spec.model import SpecError
from procgen.spec.reader import read_raw
from procgen.terms import catalogue
from procgen.terms.graph import build
from procgen.terms.run import Run
from procgen.theory import theory

from .helpers import draw
from .strategies import specs

QUIET = settings(
    max_examples=40,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.filter_too_much],
)


def graph_or_refusal(raw):
    try:
        return build(read_raw(raw, catalogue(), LAWS))
    except SpecError as error:
        assert all(len(fault.message) > 15 for fault in error.faults)
        return None


@QUIET
@given(specs())
@pytest.mark.filterwarnings("ignore::RuntimeWarning")  # explosive products may overflow; the store refuses them
def test_values_do_not_depend_on_tiles_paths_or_resuming(raw):
    graph = graph_or_refusal(raw)
    assume(graph is not None)
    steps = graph.spec.time.steps
    whole = draw(graph, 0, 20, [steps])
    cut = draw(graph, 0, 20, [1] * steps)
    part = draw(graph, 7, 5, [steps])
    run = Run(graph, 0, 20)
    half = run.tile(steps // 2) if steps > 1 else None
    again = Run(graph, 0, 20)
    again.restore(run.step, run.state())
    rest = again.tile(steps - run.step) if half is not None else whole
    for name, values in whole.items():
        assert values.shape == (steps, 20)
        assert np.array_equal(cut[name], values, equal_nan=True)
        assert np.array_equal(part[name], values[:, 7:12], equal_nan=True)
        assert np.array_equal(rest[name], values[run.step if half is not None else 0 :], equal_nan=True)


@QUIET
@given(specs())
@pytest.mark.filterwarnings("ignore::RuntimeWarning")
def test_theory_gives_a_number_or_a_reason(raw):
    graph = graph_or_refusal(raw)
    assume(graph is not None)
    said = theory(graph.spec, graph).as_dict([0, graph.spec.time.steps - 1], lags=3)
    for series in said["series"].values():
        assert series["stationarity"]["verdict"] and series["stationarity"]["reasons"]
        for name in ("mean", "variance"):
            assert series[name] is not None or len(series["unknown"][name]) > 10
