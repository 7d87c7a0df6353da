"""One long path in pieces has the bits of one step after the other, whatever is guessed: held against plain loops."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import procgen as pg
from procgen.chance import kernel
from procgen.ensemble import draw
from procgen.terms import egarch, garch, gjr, pieces
from procgen.terms.hands import hands
from procgen.terms.pieces import in_pieces
from tests.terms.test_rows import drawn

pytestmark = pytest.mark.skipif(not kernel.available(), reason="pieces are for compiled kernels")
STEPS = 24_000


@pytest.fixture(autouse=True)
def short(monkeypatch):
    """Pieces of some hundred steps, so that there are many of them."""
    monkeypatch.setattr(pieces, "LEAST", 20)
    monkeypatch.setattr(pieces, "WORTH", 0)


def shocks(seed, steps=STEPS):
    return np.random.default_rng(seed).standard_normal((steps, 1))


def one_by_one(recursion, arguments, tiles, rows):
    """The kernel's own text, run by Python in one go."""
    out = [np.full((STEPS, 1), np.nan) for _ in range(tiles)]
    with np.errstate(all="ignore"):
        after = recursion.plain(*arguments, *out, *(np.array([row]) for row in rows))
    return out, after if isinstance(after, tuple) else (after,)


def held(recursion, arguments, tiles, rows, early, threads=1):
    """Hold what is run in pieces against that; how often a piece was run again."""
    expected, last = one_by_one(recursion, arguments, tiles, rows)
    out, again = [np.full((STEPS, 1), np.nan) for _ in range(tiles)], []

    def counted(*args):
        again.append(len(args[0]))
        return type(recursion).__call__(recursion, *args)

    with kernel.compiling(), hands(threads), np.errstate(all="ignore"):
        watched = Watched(recursion, counted)
        after = in_pieces(watched, lambda: early, *arguments, *out, *(np.array([row]) for row in rows))
    for found, wanted in zip([*out, *after], [*expected, *last], strict=True):
        assert np.array_equal(found.view(np.uint64), wanted.view(np.uint64))
    return again[1:]  # the first call is for the steps before all pieces


class Watched:
    """A kernel whose calls for steps one after the other are counted."""

    def __init__(self, recursion, call):
        self.carries, self.beside, self.call = recursion.carries, recursion.beside, call

    def __call__(self, *args):
        return self.call(*args)


# What forgets quickly, slowly, hardly (alpha + beta of 1, Engle & Bollerslev 1986), and not at all (beyond it).
WEIGHTS = st.one_of(
    st.tuples(st.floats(0.0, 0.6), st.floats(0.0, 0.99)),
    st.floats(0.0, 0.3).map(lambda a: (a, 1.0 - a)),
    st.tuples(st.floats(0.3, 2.0), st.floats(0.7, 1.05)),
)


@settings(max_examples=40, deadline=None)
@given(WEIGHTS, st.integers(0, 400), st.sampled_from([1, 3]), st.integers(0, 2**32 - 1))
def test_a_garch_in_pieces_is_the_plain_loop(weights, early, threads, seed):
    held(garch.first_order, (shocks(seed), 0.05, *weights), 2, (1.0, 2.0), early, threads)


@settings(max_examples=25, deadline=None)
@given(WEIGHTS, st.floats(0.0, 0.4), st.integers(0, 400), st.sampled_from([1, 3]), st.integers(0, 2**32 - 1))
def test_a_threshold_garch_in_pieces_is_the_plain_loop(weights, more, early, threads, seed):
    alpha, beta = weights
    held(gjr.recursion, (shocks(seed), 0.05, alpha, more, beta), 2, (1.0,), early, threads)


@settings(max_examples=25, deadline=None)
@given(st.floats(0.0, 1.0), st.integers(0, 400), st.sampled_from([1, 3]), st.integers(0, 2**32 - 1))
def test_a_log_variance_in_pieces_is_the_plain_loop(beta, early, threads, seed):
    held(egarch.log_recursion, (shocks(seed), -0.3, beta), 1, (0.5,), early, threads)


def test_no_piece_is_run_again_where_guesses_are_right_and_all_where_none_can_be():
    z = shocks(1)
    assert held(garch.first_order, (z, 0.05, 0.1, 0.6), 2, (1.0, 2.0), 400) == []
    again = held(garch.first_order, (z, 0.05, 0.1, 0.6), 2, (1.0, 2.0), 0)
    assert len(again) == pieces.BESIDE - 1  # a variance of 2.0 is nobody's else
    wide = held(egarch.log_recursion, (z, 0.0, 1.0), 1, (0.5,), 400)  # a random walk forgets nothing
    assert len(wide) == pieces.BESIDE - 1


def test_one_wrong_guess_is_mended_alone(monkeypatch):
    """A wrong state is planted where one piece begins: it is run again, and those behind it are right as they are."""
    beside, planted = kernel.Kernel.beside, []

    def wrong(self, stride, steps, keep, *args):
        found = beside(self, stride, steps, keep, *args)
        if not keep:
            args[-1][5] = math.nextafter(args[-1][5], math.inf)
            planted.append(5)
        return found

    monkeypatch.setattr(kernel.Kernel, "beside", wrong)
    again = held(garch.first_order, (shocks(2), 0.05, 0.1, 0.6), 2, (1.0, 2.0), 400)
    assert planted == [5] and len(again) == 1


def test_a_kernel_that_reads_other_steps_is_run_as_it_is():
    @kernel.kernel
    def behind(z, out, x):
        for t in range(z.shape[0]):
            x = 0.5 * x + z[t - 1]
            out[t] = x
        return x

    held(behind, (shocks(3),), 1, (0.0,), 100)


@pytest.mark.parametrize("term", [
    {"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.85}},
    {"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.9, "before": {"variance": [2.0]}}},
    {"garch": {"omega": 0.05, "alpha": [0.1, 0.1], "beta": 0.7}},
    {"garch": {"omega": 0.05, "alpha": drawn(0.1, 0.2), "beta": 0.7}},
    {"gjr_garch": {"omega": 0.05, "alpha": 0.05, "gamma": 0.1, "beta": 0.8}},
    {"egarch": {"omega": 0.05, "alpha": 0.05, "gamma": -0.1, "beta": 0.9}},
], ids=str)  # fmt: skip
def test_a_long_path_has_the_same_digest_however_it_is_drawn(term, monkeypatch):
    monkeypatch.setattr(pieces, "WORTH", 2)
    monkeypatch.setattr(draw, "CACHED", 9_000)
    monkeypatch.setattr(draw, "TILE", 9_000)
    spec = {"procgen": 1, "seed": 3, "paths": 2, "time": {"steps": 40_000}, "series": {"x": [term]}}
    plain = pg.render(spec, workers=1, reveal="all").digest
    assert plain == pg.render(spec, workers=1).digest
    for workers in (1, 2, 5):
        with kernel.compiling():
            one = pg.render(spec, paths=1, workers=workers)
            assert pg.render(spec, workers=workers).digest == plain
        assert np.array_equal(one["x"], pg.render(spec, workers=1)["x"][:1])
