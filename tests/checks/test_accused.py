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
