"""Counts by compiled loops have the bits of the plain ones, and tables looked up by a guide those of a search."""

import numpy as np
import pytest

import procgen as pg
from procgen.chance import counting, kernel
from procgen.chance.tables import GRID, NegativeBinomial, Poisson, thinning
from procgen.chance.thinnings import Thinnings
from procgen.ensemble import draw
from procgen.ensemble.plan import Block
from procgen.ensemble.source import SpecSource

RNG = np.random.default_rng(4)
FAR = np.concatenate([2.0 ** -np.arange(1, 53, 0.05), 1 - 2.0 ** -np.arange(1, 53, 0.05)])
U = (np.floor(np.concatenate([RNG.random(20_000), FAR]) * GRID) + 0.5) / GRID
U = U[U < 1]
needs_numba = pytest.mark.skipif(not kernel.available(), reason="numba is not installed")


@needs_numba
@pytest.mark.parametrize("mean", [0.01, 1.0, 5.5, 25.9, 40.0, "moving"])
@pytest.mark.parametrize("size", [None, 0.05, 2.0])
def test_counts_compiled_are_counts_plain(mean, size):
    means = 4 * np.exp(0.9 * RNG.standard_normal(U.shape)) if mean == "moving" else np.full(U.shape, mean)

    def counts():
        return counting.poisson(U, means) if size is None else counting.negative_binomial(U, means, size)

    plain = counts()
    with kernel.compiling():
        assert np.array_equal(counts(), plain)


@needs_numba
@pytest.mark.parametrize(("alpha", "most"), [(0.6, 15), (0.01, 31), (0.999, 63), (0.7, 2047), (0.0, 31)])
def test_thinning_compiled_is_thinning_plain(alpha, most):
    shape = (50, 40)
    new, stay = RNG.poisson(5 * (1 - alpha), shape).astype(float), U[RNG.integers(0, len(U), shape)]
    new[30, 7] = most + 40.0  # beyond the table: rows end there
    x = RNG.poisson(5, shape[1]).astype(float)
    plain = thinning(alpha, most).moved(x, new, stay)
    with kernel.compiling():
        assert np.array_equal(thinning(alpha, most).moved(x, new, stay), plain)
    alone = [thinning(alpha, most).moved(x[p : p + 1], new[:, p : p + 1], stay[:, p : p + 1]) for p in range(len(x))]
    assert all(np.array_equal(one[: len(plain), 0], plain[:, p]) for p, one in enumerate(alone))
    assert min(map(len, alone)) == 31
    assert len(plain) == 31 and np.array_equal(plain[0], thinning(alpha, most).counts(x, stay[0]) + new[0])


@pytest.mark.parametrize("most", [31, 63])
@pytest.mark.parametrize("compiled", [False, pytest.param(True, marks=needs_numba)])
def test_thinnings_of_many_paths_are_the_thinning_of_each(most, compiled):
    alphas = np.concatenate([[0.0, 0.999, 1e-9], RNG.random(300)])
    shape = (20, len(alphas))
    new, stay = RNG.poisson(8 * (1 - alphas), shape).astype(float), U[RNG.integers(0, len(U), shape)]
    new[12, 5] = most + 9.0  # beyond the table: rows end there
    x = RNG.poisson(8, shape[1]).astype(float)
    with kernel.compiling(compiled):
        found = Thinnings(alphas, most).moved(x, new, stay)
    assert len(found) == 13
    for p, alpha in enumerate(alphas.tolist()):
        own = thinning(alpha, most).moved(x[p : p + 1], new[:13, p : p + 1], stay[:13, p : p + 1])
        assert np.array_equal(found[:, p], own[:, 0]), p


@pytest.mark.parametrize("law", [Poisson(0.3), Poisson(5), Poisson(900.0), NegativeBinomial(4, 0.02)], ids=str)
def test_a_guide_finds_what_a_search_finds(law):
    table = law.table
    wanted = table.first + np.searchsorted(table.places, np.floor(U * GRID).astype(np.int64), side="right")
    assert np.array_equal(table.counts(U), wanted)
    edges = (table.places[(table.places > 0) & (table.places < GRID)][:, None] + np.array([-1, 0])).ravel()
    edges = edges[edges >= 0]
    wanted = table.first + np.searchsorted(table.places, edges, side="right")
    assert np.array_equal(table.counts((edges + 0.5) / GRID), wanted)


@needs_numba
def test_long_renders_turn_to_compiling_on_their_way(monkeypatch):
    """Where the switch happens moves no value."""
    terms = {"poisson": {"mean": 4, "of": [{"ar": {"phi": 0.9, "total_sd": 0.4}}]}}, {"inar": {"alpha": 0.6, "mean": 5}}
    head = {"procgen": 1, "seed": 3, "paths": 640, "time": {"steps": 50}}
    spec = pg.load({**head, "series": {"x": [terms[0]], "y": [terms[1]]}})
    plain = pg.render(spec)
    monkeypatch.setattr(draw, "WIDE_REPAYS", 10_000)
    drawer, found = draw.Drawer(SpecSource(spec)), []
    for first in (0, 320):
        block = Block(first, 320, 0, 50)
        out = draw.empty(block, drawer.source.columns)
        drawer.fill(block, out)
        found.append(out)
        assert drawer.compile is True  # from the second block on
    for name in ("x", "y"):
        assert np.array_equal(np.concatenate([out[name] for out in found]), plain[name])
    assert not SpecSource(pg.load({**head, "series": {"x": [{"white_noise": {"sd": 1}}]}})).gains
