"""Ensembles that are as stated and hard to read: wide laws whose powers overflow, values behind sums of sums."""

import pytest

import procgen as pg

HEAD = {"procgen": 1, "seed": 5, "paths": 300}
WIDE = {
    "an autoregression of sd 7": ({"ar": {"phi": 0.5, "total_sd": 7}}, 10),
    "an autoregression of sd 14": ({"ar": {"phi": 0.5, "total_sd": 14}}, 10),
    "an autoregression of sd 20": ({"ar": {"phi": 0.5, "total_sd": 20}}, 10),
    "a walk of sd 0.5": ({"random_walk": {"sd": 0.5}}, 200),
    "a walk of sd 2": ({"random_walk": {"sd": 2}}, 200),
}
FLAG = {"flag": {"share": 0.3, "stay": 4}}
RARE = {"intermittent": {"share": 0.3, "size": 3, "sd": 1}}


@pytest.mark.parametrize("name", WIDE)
def test_exponentials_of_wide_laws_agree(name):
    body, steps = WIDE[name]
    verdict = pg.validate(pg.render(HEAD | {"time": {"steps": steps}, "series": {"x": [{"exp": [body]}]}}))
    assert verdict.agrees is True, verdict.headline


@pytest.mark.parametrize("body", [FLAG, RARE], ids=["flag", "intermittent"])
@pytest.mark.parametrize("times", [1, 2])
def test_sums_of_what_comes_now_and_then_agree(body, times):
    for _ in range(times):
        body = {"integrate": {"of": [body]}}
    verdict = pg.validate(pg.render(HEAD | {"time": {"steps": 100}, "series": {"x": [body]}}))
    assert verdict.agrees is not False, verdict.headline


KNOWN = {"constant": 0.6}
JUMPS = {"compound_poisson": {"rate": 0.5, "mean": 0.1, "sd": 0.1}}
UNDONE = {
    "a surplus": [{"integrate": {"of": [KNOWN, JUMPS | {"times": -1}], "start": 100}}],
    "a stock": [{"integrate": {"of": [KNOWN, RARE | {"times": -1}], "start": 100}}],
    "hours run": [{"integrate": [KNOWN, FLAG]}, {"trend": {"slope": 0.1}}],
    "a price that jumps": [{"exp": [JUMPS, {"trend": {"slope": 0.01}}]}],
    "a price that jumps and is summed": [{"exp": [{"integrate": [JUMPS, {"constant": 0.01}]}]}],
    "a level that is switched": [{"exp": [FLAG, KNOWN]}],
}


@pytest.mark.parametrize("name", UNDONE)
def test_what_is_nothing_at_most_steps_is_nothing_after_a_sum_is_undone(name):
    """Of x[t] − x[t−1] − 0.6 none is 0 to the last bit, where nothing came."""
    verdict = pg.validate(pg.render(HEAD | {"time": {"steps": 80}, "series": {"x": UNDONE[name]}}))
    assert verdict.agrees is True, verdict.headline
