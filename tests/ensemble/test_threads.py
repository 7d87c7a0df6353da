"""Threads that draw at once have the values of one: what terms and laws keep between calls is no thread's alone."""

import sys
import threading
import time
from functools import partial

import numpy as np
import pytest

import procgen as pg
from procgen.chance import kernel
from procgen.ensemble import draw, job, part, plan
from procgen.terms.given import spec_of
from procgen.terms.graph import build
from procgen.terms.hands import at_hand, behind, each, hands
from procgen.terms.run import strands
from tests.golden_specs import NAMES, one_small


@pytest.fixture
def many_threads(monkeypatch):
    """Batches of 16 paths, drawn by threads whatever their size, that take turns as often as can be."""
    monkeypatch.setattr(plan, "GROUP_ROWS", 16 * 60)
    monkeypatch.setattr(plan, "NARROW", 16)
    monkeypatch.setattr(job, "repays", lambda *about: True)
    before = sys.getswitchinterval()
    sys.setswitchinterval(1e-6)
    yield
    sys.setswitchinterval(before)


@pytest.mark.parametrize("name", NAMES)
def test_five_threads_draw_what_one_draws(name, many_threads):
    spec = one_small(name, paths=100)
    one = pg.render(spec, workers=1).digest
    for compiled in (False, kernel.available()):
        with kernel.compiling(compiled):
            assert pg.render(spec, workers=5).digest == one


@pytest.fixture
def few_at_once(monkeypatch):
    """Small tiles and threads that take turns as often as can be, compiled or not."""
    monkeypatch.setattr(draw, "CACHED", 16 * 20)
    monkeypatch.setattr(draw, "TILE", 16 * 20)
    monkeypatch.setattr(part, "hands", lambda count: hands(5))
    before = sys.getswitchinterval()
    sys.setswitchinterval(1e-6)
    yield
    sys.setswitchinterval(before)


@pytest.mark.parametrize("name", NAMES)
def test_the_series_of_a_chain_shared_among_threads_have_the_same_values(name, few_at_once, tmp_path):
    spec = one_small(name, paths=20)
    one = pg.render(spec, workers=1).digest
    for compiled in (False, kernel.available()):
        with kernel.compiling(compiled):
            assert pg.render(spec, tmp_path / str(compiled), workers=1, reveal="all").digest is not None
            assert pg.render(spec, tmp_path / f"{compiled}-plain", workers=1).digest == one


def test_each_answers_in_order_and_does_every_item_once():
    done = []
    with hands(3):
        assert at_hand() == 3
        assert each(lambda k: (done.append(k), k * k)[1], range(200)) == [k * k for k in range(200)]
        assert each(lambda k: each(lambda j: j + k, range(3)), range(3)) == [[0, 1, 2], [1, 2, 3], [2, 3, 4]]
    assert at_hand() == 1 and sorted(done) == [*range(200)]
    assert threading.active_count() == 1


def test_an_error_is_raised_when_no_thread_is_at_work_any_more():
    left = []

    def work(k):
        if k == 1:
            raise ValueError("one")
        time.sleep(0.05)
        left.append(k)

    with hands(4):
        with pytest.raises(ValueError, match="one"):
            each(work, range(100))
        seen = len(left)
        time.sleep(0.1)
        assert len(left) == seen < 100


def test_what_is_behind_is_one_call_at_a_time_and_has_ended_in_the_end():
    made = []

    def call(k):
        made.append(k)
        time.sleep(0.02)
        made.append(k)

    with hands(2), behind() as later:
        for k in range(5):
            later.begin(partial(call, k))
    assert made == [0, 0, 1, 1, 2, 2, 3, 3, 4, 4]
    with behind() as later:  # nobody else is there
        later.begin(partial(call, 5))
        assert made[-2:] == [5, 5]
    assert threading.active_count() == 1


def test_what_a_call_behind_raises_is_raised_by_what_waits_for_it_and_an_error_waits_too():
    def wrong():
        raise OSError("full")

    with hands(2):
        with pytest.raises(OSError, match="full"), behind() as later:
            later.begin(wrong)
            later.begin(lambda: None)
        with pytest.raises(OSError, match="full"), behind() as later:
            later.begin(wrong)
        left = []
        with pytest.raises(ValueError, match="drawn"), behind() as later:
            later.begin(lambda: (time.sleep(0.05), left.append(1)))
            raise ValueError("drawn")
        assert left == [1]


def test_one_path_written_while_it_is_drawn_has_the_same_values(tmp_path, monkeypatch):
    spec = {
        "procgen": 1, "seed": 1, "paths": 1, "time": {"steps": 5_000},
        "series": {"x": [{"ar": {"phi": 0.5, "sd": 1}}], "y": [{"poisson": {"mean": 3}}]},
    }  # fmt: skip
    one = pg.render(spec, workers=1).digest
    monkeypatch.setattr(plan, "ALONE_BYTES", 2 * 8 * 300)
    monkeypatch.setattr(part, "hands", lambda count: hands(3))
    found = pg.render(spec, tmp_path / "out", workers=1)
    assert found.digest == one and np.array_equal(found["x"], pg.render(spec, workers=1)["x"])


def test_threads_compile_and_treat_overflows_as_their_caller_does():
    with hands(3), np.errstate(over="raise"), kernel.compiling(kernel.available()):
        found = each(lambda k: (time.sleep(0.01), kernel.is_compiling(), np.geterr()["over"])[1:], range(9))
    assert found == [(kernel.available(), "raise")] * 9


def test_strands_of_a_graph_read_nothing_of_each_other():
    spec = {
        "procgen": 1, "seed": 1, "paths": 2, "time": {"steps": 3},
        "shared": {"common": [{"ar": {"phi": 0.5, "sd": 1}}]},
        "series": {
            "a": [{"use": "common"}, {"white_noise": {"sd": 1}}],
            "b": [{"use": "common"}],
            "c": [{"ar": {"phi": 0.2, "sd": 1}}],
            "d": [{"ar": {"phi": 0.3, "sd": 1}}],
            "e": [{"use": "d"}, {"constant": 1}],
        },
        "correlation": [{"between": ["c.ar", "d.ar"], "value": 0.5}],
    }  # fmt: skip
    graph = build(spec_of(spec))
    order = graph.order(list(graph.series.values()), drawn=True)
    found = strands(order)
    assert sorted(map(id, order)) == sorted(id(node) for strand in found for node in strand)
    place = {id(node): k for k, strand in enumerate(found) for node in strand}
    assert all(place[id(part)] == place[id(node)] for node in order for part in getattr(node, "inputs", ()))
    of = {name: place[id(node)] for name, node in graph.series.items()}
    assert of["a"] == of["b"] and of["d"] == of["e"] and len({*of.values()}) == 3
