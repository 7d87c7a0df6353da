"""Recipes: a series has the same values in two specs exactly where its recipes are the same, as drawing shows."""

from pathlib import Path

import numpy as np
import pytest

import procgen as pg
from procgen.terms.recipe import recipes
from procgen.terms.varied import Varied

GALLERY = sorted((Path(__file__).parents[2] / "specs").glob("*.yaml"))
SPEC = """procgen: 1
seed: 5
paths: 20
time: {steps: 30, start: 2027-01-04T00:00, every: 1h}
parameters:
  k: {draw: {uniform: [0.3, 0.6]}, over: path}
shared:
  wind: [{ar: {phi: 0.9, total_sd: 1}}]
series:
  load:
    decimals: 3
    of:
      - constant: 80
      - trend: {level: 1, slope: {value: 0.9, per: day}}
      - seasonal: {period: 1d, harmonics: [{amplitude: 12, peak: 18:00}]}
      - {use: wind, times: 2}
      - arma: {phi: 0.7, theta: 0.3, shock: {garch: {sd: 6, alpha: 0.1, beta: 0.85}}}
        as: swing
  price: [{exp: [{random_walk: {sd: 0.01, start: 3}}]}]
  first: {ar: {phi: 0.5, sd: 1}}
  second: {ar: {phi: 0.8, sd: 1}}
  third: {white_noise: {sd: 1}}
  mode: {regimes: {branches: {calm: {ar: {phi: 0.5, sd: 1}}, wild: [{white_noise: {sd: 4}}]},
    durations: {calm: 10, wild: 8}}}
  echo: [{use: load.swing.variance, times: 0.1}, {white_noise: {sd: 1}}]
  wide: [{use: load}, {constant: 1}]
  drawn: {ar: {phi: {parameter: k}, sd: {draw: {lognormal: {median: 1, sigma: 0.2}}, over: series}}}
  flat: {constant: 3}
correlation:
  - {between: [first.ar, second.ar], value: 0.5}
  - {between: [first.ar, third.white_noise], value: 0.3}
  - {between: [load.swing, price.random_walk], value: 0.35}
"""
ALL = {"load", "price", "first", "second", "third", "mode", "echo", "wide", "drawn", "flat"}
EDITS = {
    "title": ({"title": "x"}, set()),
    "seed": ({"seed": 6}, ALL - {"flat"}),
    "more paths": ({"paths": 25}, set()),
    "more steps": ({"time.steps": 40}, set()),
    "another day": ({"time.start": "2027-03-01T00:00"}, set()),
    "another hour": ({"time.start": "2027-01-04T05:00"}, {"load", "wide"}),
    "another step": ({"time.every": "30min"}, {"load", "wide"}),
    "another unit": ({"series.load.unit": "MW"}, set()),
    "decimals": ({"series.load.decimals": 1}, {"load"}),
    "a level": ({"series.load.constant": 81}, {"load", "wide"}),
    "the name of what is not drawn": ({"series.load.trend.as": "rise"}, set()),
    "what is shared": ({"shared.wind.ar.phi": 0.8}, {"load", "wide"}),
    "a factor": ({"series.load.use.times": 3}, {"load", "wide"}),
    "a leader": ({"series.load.swing.phi": 0.6}, {"load", "wide"}),
    "the shock of a leader": ({"series.load.swing.shock.garch.alpha": 0.09}, {"load", "wide", "echo"}),
    "who follows": ({"series.price.random_walk.sd": 0.02}, {"price"}),
    "a correlation": ({"correlation[2].value": 0.4}, {"price"}),
    "a joint start": ({"series.first.ar.phi": 0.4}, {"first", "second"}),
    "a joint start, of the later one": ({"series.second.ar.phi": 0.4}, {"second"}),
    "correlation of a joint start": ({"correlation[0].value": 0.4}, {"second", "third"}),  # third is mixed from both
    "correlation of a noise": ({"correlation[1].value": 0.4}, {"third"}),
    "none": ({"correlation": None}, {"second", "third", "price"}),
    "a branch": ({"series.mode.ar.phi": 0.4}, {"mode"}),
    "durations": ({"series.mode.regimes.durations.calm": 12}, {"mode"}),
    "a stream": ({"series.third.stream": "other"}, {"third"}),
    "a stream that leads": ({"series.first.stream": "other"}, {"first", "second", "third"}),
    "a law by path": ({"parameters.k.draw.uniform[1]": 0.7}, {"drawn"}),
    "a law by series": ({"series.drawn.ar.sd.draw.lognormal.median": 2}, {"drawn"}),
    "a law of shocks": ({"series.echo.white_noise.law": {"student_t": {"df": 5}}}, {"echo"}),
    "an order": ({"series.wide": [{"constant": 1}, {"use": "load"}]}, {"wide"}),
}
MAY_BE_EQUAL = {"an order"}  # sums of two are the same in either order; recipes say what may have moved


@pytest.fixture(scope="module")
def base():
    spec = pg.load(_mapping())
    return spec, recipes(spec), pg.render(spec)


def _mapping():
    from procgen.spec.yaml12 import from_text

    return from_text(SPEC, None, []).plain()


@pytest.mark.parametrize("name", EDITS)
def test_a_series_moves_exactly_where_its_recipe_differs(base, name):
    spec, before, old = base
    edit, expected = EDITS[name]
    other = spec.set(edit)
    after, new = recipes(other), pg.render(other)
    moved = {series for series in before if after[series].moved_from(before[series])}
    assert moved == expected
    drawn = {s for s in before if not np.array_equal(old[s], new[s][:20, :30])}
    assert drawn == expected or name in MAY_BE_EQUAL


def test_the_terms_that_may_have_moved_a_series_are_named(base):
    spec, before, _ = base

    def moved(series, edit):
        return recipes(spec.set(edit))[series].moved_from(before[series])

    assert moved("wide", {"shared.wind.ar.phi": 0.8}) == ("wind.ar",)
    assert moved("second", {"series.first.ar.phi": 0.4}) == ("first.ar",)
    assert moved("load", {"series.load.swing": None, "correlation": None, "series.echo.use": None}) == (
        "load", "load.swing",
    )  # fmt: skip
    assert moved("load", {"series.load.decimals": 1}) == ("load as stored",)


def test_which_series_share_shocks(base):
    spec, before, _ = base
    other = recipes(spec.set({"seed": 9}))
    assert [name for name in before if before[name].shares(other[name])] == ["flat"]
    assert before["load"].shares(before["wide"]) and not before["load"].shares(before["third"])


@pytest.mark.parametrize("file", GALLERY, ids=lambda file: file.stem)
def test_every_spec_of_the_gallery_has_recipes_that_its_seed_changes(file):
    spec = pg.load(file)
    before = recipes(spec)
    assert before == recipes(pg.load(spec.raw)) == recipes(spec.changed(paths=max(1, spec.paths - 1)))
    other = recipes(spec.changed(seed=spec.seed + 1))
    random = {name for name in before if before[name].draws} | {p.owner for p in Varied(spec).by_series.values()}
    for name in before:
        assert bool(other[name].moved_from(before[name])) == (name in random), name
