"""One path drawn by threads, each from a step on that it guesses the state of, has the values of one thread."""

import math

import numpy as np
import pytest

import procgen as pg
from procgen.chance import kernel
from procgen.ensemble import draw, job
from procgen.terms import catalogue
from procgen.terms.given import spec_of
from procgen.terms.graph import build
from procgen.terms.run import Run

pytestmark = pytest.mark.skipif(not kernel.available(), reason="threads draw by compiled kernels")
GARCH = {"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.6}}
FORGETS = {
    "noise": [{"white_noise": {"sd": 2}}],
    "ar": [{"ar": {"phi": [0.75, -0.5], "sd": 1}}],
    "arma of a garch": [{"arma": {"phi": 0.5, "theta": [0.3, 0.1], "shock": GARCH}}],
    "moving average": [{"ma": {"theta": 0.5, "sd": 1}}],
    "threshold": [{"gjr_garch": {"omega": 0.1, "alpha": 0.05, "gamma": 0.1, "beta": 0.5}}],
    "exponential": [{"egarch": {"scale": 1, "alpha": 0.2, "gamma": -0.1, "beta": 0.7}}],
    "sum": [{"constant": 80}, {"seasonal": {"period": 24, "harmonics": [{"amplitude": 12}]}}, GARCH],
}
KEEPS = {
    "walk": [{"random_walk": {"sd": 1}}],
    "held": [{"hold": {"of": [{"white_noise": {"sd": 3}}], "every": 8}}],
    "no variance": [{"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.9, "before": {"variance": [1.0]}}}],
}


@pytest.fixture
def short(monkeypatch):
    monkeypatch.setattr(draw, "APART_LEAST", 500)
    monkeypatch.setattr(draw, "CACHED", 900)
    monkeypatch.setattr(job, "repays", lambda *about: True)


@pytest.fixture
def seen(monkeypatch):
    """Whether guesses were right, one after the other."""
    found, are_same = [], draw._are_same
    monkeypatch.setattr(draw, "_are_same", lambda a, b: (found.append(are_same(a, b)), found[-1])[1])
    return found


def of(terms, steps=20_000):
    return {"procgen": 1, "seed": 3, "paths": 1, "time": {"steps": steps}, "series": {"x": terms}}


def values(spec, workers):
    with kernel.compiling():
        return pg.render(spec, workers=workers, reveal="all")


@pytest.mark.parametrize("terms", FORGETS.values(), ids=FORGETS)
@pytest.mark.parametrize("workers", [2, 3])
def test_what_forgets_is_drawn_apart(terms, workers, short, seen):
    with kernel.compiling(False):
        plain = pg.render(of(terms), workers=1, reveal="all")
    apart = values(of(terms), workers)
    assert seen == [True] * (workers - 1)
    for name in plain:
        assert np.array_equal(plain[name].view(np.uint64), apart[name].view(np.uint64))


@pytest.mark.parametrize("terms", KEEPS.values(), ids=KEEPS)
def test_what_does_not_is_not(terms, short, seen):
    assert values(of(terms), 3).digest == values(of(terms), 1).digest
    assert seen == []


def test_a_term_is_drawn_apart_only_where_it_says_so():
    """A state of another step must do: whoever says it is named here, and tested above or by its like."""
    said = {kind for kind, term in catalogue().items() if term.early is not catalogue()["random_walk"].early}
    assert {"white_noise", "arma", "ar", "ma", "garch", "arch", "gjr_garch", "egarch", "sum", "constant"} <= said
    assert not said & {"hold", "rolling_mean", "regimes", "integrate", "poisson", "stochastic_volatility", "missing"}


@pytest.mark.parametrize("phi", [0.5, 0.999])
def test_a_wrong_guess_is_drawn_again(phi, short, seen, monkeypatch):
    """0.999 forgets too slowly to be guessed in 40 steps, and what is planted is wrong whatever the term."""
    spec = of([{"ar": {"phi": phi, "sd": 1}}])
    one = values(spec, 1)
    early = Run.early
    monkeypatch.setattr(Run, "early", lambda self: (early(self), 40)[1])
    apart = values(spec, 3)
    assert apart.digest == one.digest and len(seen) == 2 and (phi == 0.5 or seen == [False] * 2)
    del seen[:]
    restore = Run.restore
    monkeypatch.setattr(Run, "restore", lambda self, step, state: restore(self, step, planted(state)))
    monkeypatch.setattr(Run, "early", lambda self: (early(self), 1)[1])
    assert values(spec, 3).digest == one.digest and seen == [False] * 2


def planted(state):
    return {name: rows + 1.0 for name, rows in state.items()}


def test_a_guess_that_ends_in_no_number_is_drawn_again(short, monkeypatch):
    spec = of([GARCH])
    one = values(spec, 1).digest
    restore = Run.restore
    wrong = math.nan
    monkeypatch.setattr(Run, "restore", lambda self, step, s: restore(self, step, {k: v + wrong for k, v in s.items()}))
    assert values(spec, 3).digest == one


def test_how_long_a_graph_remembers_is_the_sum_of_its_terms():
    def early(terms):
        return Run(build(spec_of(of(terms))), 0, 1).early()

    assert early(FORGETS["noise"]) == 0
    alone = early([GARCH])
    assert 36.7 / -math.log(0.7) < alone < 400  # 0.7 to that power is 2^-53
    assert early(FORGETS["arma of a garch"]) > alone
    assert early(KEEPS["walk"]) == early([*FORGETS["noise"], *KEEPS["walk"]]) == math.inf
