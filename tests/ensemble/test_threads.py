"""Threads that draw at once have the values of one: what terms and laws keep between calls is no thread's alone."""

import sys

import pytest

import procgen as pg
from procgen.chance import kernel
from procgen.ensemble import job, plan
from tests.golden_specs import small


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


@pytest.mark.parametrize("name, spec", [pytest.param(*each, id=each[0]) for each in small(paths=100)])
def test_five_threads_draw_what_one_draws(name, spec, many_threads):
    one = pg.render(spec, workers=1).digest
    for compiled in (False, kernel.available()):
        with kernel.compiling(compiled):
            assert pg.render(spec, workers=5).digest == one
