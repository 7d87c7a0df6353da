"""What differs in meaning: place by place, whatever way it is written."""

from pathlib import Path

import pytest

import procgen as pg
from procgen.spec.meaning import changes

GALLERY = sorted((Path(__file__).parents[2] / "specs").glob("*.yaml"))
GARCH = {"sd": 6, "alpha": 0.1, "beta": 0.85}
BASE = {
    "procgen": 1,
    "seed": 5,
    "paths": 20,
    "time": {"steps": 30, "start": "2027-01-04T00:00", "every": "1h"},
    "shared": {"wind": [{"ar": {"phi": 0.9, "total_sd": 1}}]},
    "series": {
        "load": [
            {"constant": 80},
            {"trend": {"level": 1, "slope": {"value": 0.9, "per": "day"}}},
            {"use": "wind", "times": 2},
            {"arma": {"phi": [0.7], "theta": 0.3, "shock": {"garch": GARCH}}, "as": "s"},
        ],
        "price": [{"exp": [{"random_walk": {"sd": 0.01, "start": 3}}]}],
    },
    "groups": {"shops": {"names": ["a", "b"], "of": [{"white_noise": {"sd": 1}}]}},
    "correlation": [{"between": ["load.s", "price.random_walk"], "value": 0.35}],
}


def said(settings):
    spec = pg.load(BASE)
    return [str(change) for change in changes(spec, spec.set(settings))]


@pytest.mark.parametrize(
    "same",
    [
        {"title": "another"},
        {"series.load.constant.level": 80},
        {"series.load.constant.level": 80.0},
        {"series.load.s.phi": 0.7},
        {"series.load.s.theta": [0.3]},
        {"series.load.note": "a note"},
        {"series.price.decimals": None},
        {"series.price.random_walk.drift": 0},
        {"series.load.trend.slope": 0.0375},
        {"correlation": {"between": ["load.s", "price.random_walk"], "value": 0.35}},
        {"time.zone": None},
    ],
)
def test_what_means_the_same_is_no_change(same):
    assert said(same) == []


@pytest.mark.parametrize(
    ("settings", "expected"),
    [
        ({"seed": 6}, ["seed: 5 → 6"]),
        ({"paths": 30, "time.steps": 40}, ["paths: 20 → 30", "time.steps: 30 → 40"]),
        ({"shared.wind.ar.phi": 0.8}, ["shared.wind.ar.phi: 0.9 → 0.8"]),
        ({"series.load.unit": "kW"}, ["series.load.unit: nothing → kW"]),
        ({"series.load.use.times": 3}, ["series.load.use.times: 2 → 3"]),
        ({"series.load.s.phi": [0.6, 0.1]}, ["series.load.s.phi: [0.7] → [0.6, 0.1]"]),
        ({"series.load.s.shock.garch.sd": 7}, ["series.load.s.shock.garch.sd: 6 → 7"]),
        ({"series.price.random_walk.drift": 0.1}, ["series.price.random_walk.drift: 0.0 → 0.1"]),
        (
            {"series.load.s.shock": {"white_noise": {"sd": 6}}},
            [
                "series.load.s.shock.garch: gone, was garch: {sd: 6, alpha: 0.1, beta: 0.85}",
                "series.load.s.shock.white_noise: new, white_noise: {sd: 6}",
            ],
        ),
        ({"series.load.constant": None}, ["series.load.constant: gone, was constant: 80"]),
        (
            {"series.load.constant": {"constant": 80, "as": "floor"}},
            ["series.load.constant: gone, was constant: 80", "series.load.floor: new, {constant: 80, as: floor}"],
        ),
        (
            {"series.price": [{"random_walk": {"sd": 0.01, "start": 3}}]},
            [
                "series.price.exp: gone, was exp: [{random_walk: {sd: 0.01, start: 3}}]",
                "series.price.random_walk: random_walk in exp → random_walk",
            ],
        ),
        (
            {"series.load[0]": {"use": "wind", "times": 2}, "series.load[2]": {"constant": 80}},
            ["series.load, the order of its terms: constant, trend, use, s → use, trend, constant, s"],
        ),
        ({"series.price": None, "correlation": None}, [
            "series.price: gone, was exp", "correlation of load.s and price.random_walk: gone, was 0.35",
        ]),
        ({"correlation[0].value": 0.4}, ["correlation of load.s and price.random_walk: 0.35 → 0.4"]),
        (
            {"correlation[0].between": ["price.random_walk", "load.s"]},
            ["correlation, the order of its names: [load.s, price.random_walk] → [price.random_walk, load.s]"],
        ),
        ({"groups.shops.white_noise.sd": 2}, ["groups.shops.white_noise.sd (2 series): 1 → 2"]),
        (
            {"time.every": "30min"},
            [
                "time.every: 1h → 30min",
                "series.load.trend.slope: {value: 0.9, per: day} = 0.0375 → {value: 0.9, per: day} = 0.01875",
            ],
        ),
    ],
)  # fmt: skip
def test_a_change_is_said_with_its_place_and_both_values(settings, expected):
    assert said(settings) == expected


def test_a_series_that_is_added_is_one_change():
    more = {**BASE, "series": {"first": [{"constant": 1}, {"white_noise": {"sd": 1}}], **BASE["series"]}}
    found = changes(pg.load(BASE), pg.load(more))
    assert [(c.place, c.old, c.new) for c in found] == [("series.first", None, "constant + white_noise")]
    back = changes(pg.load(more), pg.load(BASE))
    assert [str(c) for c in back] == ["series.first: gone, was constant + white_noise"]


@pytest.mark.parametrize("file", GALLERY, ids=lambda file: file.stem)
def test_a_spec_of_the_gallery_means_what_it_means_and_a_seed_is_one_change(file):
    spec = pg.load(file)
    assert changes(spec, pg.load(spec.raw)) == ()
    assert [c.place for c in changes(spec, spec.changed(seed=spec.seed + 1))] == ["seed"]
    for name in spec.variants:
        places = [c.place for c in changes(spec, spec.variant(name))]
        assert sorted(places) == sorted(setting.place for setting in spec.written.variants[name])
