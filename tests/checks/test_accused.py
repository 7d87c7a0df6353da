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


RARELY = {"white_noise": {"sd": 1, "law": {"bernoulli": {"p": 0.03}}}}
TREND = {"ma": {"theta": 0.5, "sd": 1, "law": {"bernoulli": {"p": 0.03}}}}
WALK = {"random_walk": {"sd": 1, "law": {"bernoulli": {"p": 0.03}}}}
NOISE = {"white_noise": {"sd": 1}}
MOSTLY_0 = {"zero_inflated": {"of": [NOISE], "share": 0.97}}
OF_FEW = {
    "an exponential": {"exp": [RARELY]},
    "a power": {"power": {"exponent": 3, "of": [TREND]}},
    "a size": {"abs": [WALK]},
    "an average over steps": {"aggregate": {"of": [WALK], "over": 4, "by": "mean"}},
    "one of two regimes": {"regimes": {"branches": {"p": [TREND], "q": [NOISE]}, "durations": {"p": 10, "q": 4}}},
    "a difference of what is mostly 0": {"difference": {"of": [MOSTLY_0]}},
    "demand at every twelfth step": {
        "subsample": {"of": [{"intermittent": {"share": 0.03, "size": 12, "sd": 6}}], "over": 12}
    },
    "what is near its end": {"sigmoid": {"of": [WALK], "high": 100}},
}
STORED = {
    "a difference": {"difference": {"of": [RARELY]}},
    "an exponential of counts": {"exp": [{"poisson": {"mean": 0.05}}]},
    "an exponential of a flag": {"exp": [{"flag": {"share": 0.05, "stay": 5}}]},
    "a bend of a flag": {"sigmoid": {"of": [{"flag": {"share": 0.05, "stay": 5}}], "high": 100}},
    "a bend of a chain": {"sigmoid": {"of": [{"chain": {"states": ["a", "b"], "durations": {"a": 9, "b": 3}}}]}},
    "what was rounded before": {"round": {"of": [{"white_noise": {"sd": 1, "law": "laplace"}}], "to": 0.5}},
}


@pytest.mark.parametrize("name", OF_FEW)
def test_paths_of_few_values_may_be_the_same(name):
    verdict = pg.validate(pg.render(HEAD | {"seed": 3, "time": {"steps": 40}, "series": {"x": [OF_FEW[name]]}}))
    assert verdict.agrees is not False, verdict.headline


@pytest.mark.parametrize("name", STORED)
def test_few_values_that_are_stored_with_decimals_are_not_what_they_were(name):
    series = {"x": {"of": [STORED[name]], "decimals": 3}}
    verdict = pg.validate(pg.render(HEAD | {"seed": 3, "time": {"steps": 40}, "series": series}))
    assert verdict.agrees is not False, verdict.headline


def test_counts_that_are_stored_with_decimals_are_judged_as_they_are():
    series = {"x": {"of": [{"poisson": {"mean": 2}}, {"constant": 0.5}], "decimals": 1}}
    verdict = pg.validate(pg.render(HEAD | {"time": {"steps": 40}, "series": series}))
    assert verdict.agrees is True and (verdict.checks.what == "shocks: autocorrelation").any(), verdict.headline
