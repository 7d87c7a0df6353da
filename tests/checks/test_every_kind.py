"""For every kind of term a saboteur: data of the same kind with one number changed, which validation finds and names.

Kinds whose saboteurs stand in another file are listed with it. Seeds are fixed; sizes are such that a departure is
missed with a probability far below 1e-6.
"""

from __future__ import annotations

from pathlib import Path

import pytest

from procgen.terms import catalogue
from tests.studies.departures import NOISE, Departure, planted
from tests.studies.planted_terms import one, wanderers

ROOT = Path(__file__).parents[1]
SLOW = one("ar", phi=0.9, total_sd=1)
FASTER = one("ar", phi=0.87, total_sd=1)
STAYS = {"durations": {"calm": 40, "storm": 8}}
RESPONSE = {"omega": {"calm": 0.1, "storm": 1}, "beta": {"calm": 0.6, "storm": 0.5}, **STAYS}
DAILY = {"steps": 300, "start": "2027-01-04", "every": "1d"}


def beside(kind, **parameters):
    return [*one(kind, **parameters), *NOISE]


def dated(kind, **parameters):
    return {"time": DAILY, "series": {"x": beside(kind, **parameters)}}


def apart():
    """Two series that wander by themselves: their gap has a unit root."""
    return {"series": {"x": one("random_walk", sd=1), "y": one("random_walk", sd=1)}}


def wide(sd):
    return one("white_noise", sd=sd)


def of_two(kind, sd):
    return one(kind, of=wide(1.0), **{"and": [{"white_noise": {"sd": sd}, "as": "other"}]})


def level(value):
    return one("constant", level=value)


# What is stated, what is drawn, and what the first line begins with.
SABOTEURS = {
    "arch": (one("arch", sd=1, alpha=0.5), one("arch", sd=1, alpha=0.4), "x: clustering"),
    "egarch": (
        one("egarch", scale=1, alpha=0.2, gamma=-0.1, beta=0.9),
        one("egarch", scale=1, alpha=0.2, gamma=0.0, beta=0.9),
        "x: clustering",
    ),
    "switching_garch": (
        one("switching_garch", alpha={"calm": 0.05, "storm": 0.3}, **RESPONSE),
        one("switching_garch", alpha={"calm": 0.2, "storm": 0.3}, **RESPONSE),
        "x: ",
    ),
    "switching_noise": (
        one("switching_noise", sd={"calm": 1, "storm": 4}, **STAYS),
        one("switching_noise", sd={"calm": 1, "storm": 4}, durations={"calm": 20, "storm": 4}),
        "x: clustering",
    ),
    "arima": (one("arima", phi=0.5, d=1, sd=1), one("arima", phi=0.45, d=1, sd=1), "x: memory"),
    "local_linear_trend": (
        one("local_linear_trend", level_sd=0.5, slope_sd=0.10, noise_sd=1),
        one("local_linear_trend", level_sd=0.5, slope_sd=0.12, noise_sd=1),
        "x: memory",
    ),
    "ornstein_uhlenbeck": (
        one("ornstein_uhlenbeck", rate=0.10, total_sd=1),
        one("ornstein_uhlenbeck", rate=0.12, total_sd=1),
        "x: memory",
    ),
    "seasonal_random_walk": (
        one("seasonal_random_walk", period=4, sd=1),
        one("seasonal_random_walk", period=4, sd=1.05),
        "x: spread",
    ),
    "fractional_gaussian_noise": (
        one("fractional_gaussian_noise", hurst=0.80, sd=1),
        one("fractional_gaussian_noise", hurst=0.77, sd=1),
        "x: memory",
    ),
    "distributed_lag": (one("distributed_lag", of=NOISE, phi=0.70), one("distributed_lag", of=NOISE, phi=0.67), "x: "),
    "aggregate": (one("aggregate", of=SLOW, over=4, by="sum"), one("aggregate", of=FASTER, over=4, by="sum"), "x: "),
    "subsample": (one("subsample", of=SLOW, over=3), one("subsample", of=FASTER, over=3), "x: memory"),
    "rolling_mean": (one("rolling_mean", of=NOISE, over=7), one("rolling_mean", of=NOISE, over=8), "x: "),
    "hold": (one("hold", of=SLOW, every=5), one("hold", of=SLOW, every=4), "x: "),
    "schedule": (
        one("schedule", of=NOISE, until=100, then=SLOW),
        one("schedule", of=NOISE, until=100, then=FASTER),
        "x: ",
    ),
    "moving_blocks": (
        beside("moving_blocks", values=[3, 5, 4, 6, 2, 5, 7, 1], length=4),
        beside("moving_blocks", values=[3, 5, 4, 6, 2, 5, 7, 1], length=2),
        "x: memory",
    ),
    "logit": (one("logit", of=one("sigmoid", of=SLOW)), one("logit", of=one("sigmoid", of=FASTER)), "x: "),
    "annual": (
        dated("annual", harmonics=[{"amplitude": 8, "peak": "07-20"}]),
        dated("annual", harmonics=[{"amplitude": 8, "peak": "07-22"}]),
        "x: level",
    ),
    "calendar": (
        dated("calendar", by="weekday", values=[0, 0, 0, 0, -5, -20, -25]),
        dated("calendar", by="weekday", values=[0, 0, 0, 0, -20, -5, -25]),
        "x: level",
    ),
    "holidays": (
        dated("holidays", days=["2027-05-06"], size=-3),
        dated("holidays", days=["2027-05-07"], size=-3),
        "x: level",
    ),
    "event": (beside("event", at=150, size=0.2), beside("event", at=150, size=0.15), "x: level"),
    "damped_trend": (
        beside("damped_trend", level=50, slope=2, damping=0.95),
        beside("damped_trend", level=50, slope=2, damping=0.951),
        "x: level",
    ),
    "exponential_trend": (
        beside("exponential_trend", level=40, rate=0.0020, base=10),
        beside("exponential_trend", level=40, rate=0.0021, base=10),
        "x: level",
    ),
    "logistic_trend": (
        beside("logistic_trend", capacity=100, rate=0.15, midpoint=25),
        beside("logistic_trend", capacity=100, rate=0.15, midpoint=25.1),
        "x: level",
    ),
    "constant": (beside("constant", level=3), beside("constant", level=3.02), "x: level"),
    "trend": (beside("trend", slope=0.010), beside("trend", slope=0.0101), "x: level"),
    "given": (beside("given", values=[1, 2] * 150), beside("given", values=[2, 1] * 150), "x: level"),
    "ma": (one("ma", theta=0.40, sd=1), one("ma", theta=0.37, sd=1), "x: memory"),
    "sum": (one("sum", of=[*SLOW, *NOISE]), one("sum", of=[*FASTER, *NOISE]), "x: "),
    "difference": (one("difference", of=SLOW), one("difference", of=FASTER), "x: "),
    "integrate": (one("integrate", of=SLOW), one("integrate", of=FASTER), "x: "),
    "exp": (one("exp", of=one("ar", phi=0.9, total_sd=0.3)), one("exp", of=one("ar", phi=0.9, total_sd=0.31)), "x: "),
    "product": (one("product", of=[*wide(1.0), *level(3)]), one("product", of=[*wide(1.0), *level(3.1)]), "x: spread"),
    **{
        kind: (one(kind, of=wide(1.0), **more), one(kind, of=wide(1.04), **more), "x: ")
        for kind, more in {
            "abs": {},
            "ceiling": {"to": 1},
            "clip": {"low": -1, "high": 1},
            "floor": {"to": 1},
            "hinge": {"above": 0.5},
            "power": {"exponent": 2},
            "round": {"to": 1},
            "sigmoid": {},
        }.items()
    },
    "max": (of_two("max", 1.0), of_two("max", 1.1), "x: "),
    "min": (of_two("min", 1.0), of_two("min", 1.1), "x: "),
    "vector_error_correction": (wanderers(-0.10), apart(), "x ~ y: spread"),
}
TABLE = "studies/departures.py"
TERMS = "studies/planted_terms.py"
SPECIAL = "checks/test_special.py"
ELSEWHERE = {
    TABLE: "ar garch random_walk seasonal white_noise",
    TERMS: "arfima arma compound_poisson gjr_garch inar intermittent lag local_level missing negative_binomial poisson "
    "regimes stochastic_cycle stochastic_volatility use",
    SPECIAL: "bridge flag geometric_brownian_motion merton zero_inflated",
    "checks/test_systems.py": "vector_arma",
    "checks/test_chains.py": "chain",
}


@pytest.mark.parametrize("kind", SABOTEURS)
def test_another_number_is_found_and_named(kind):
    stated, drawn, begins = SABOTEURS[kind]
    found = planted(Departure(kind, stated, drawn), seed=5, paths=600, steps=300)
    assert found.agrees is False
    assert found.headline[0].startswith(begins), found.headline


def test_a_gap_that_never_closes_is_named_as_the_gap():
    """Without adjustment the gap of two series is a random walk: its variance is that, and not the steady one."""
    found = planted(Departure("", wanderers(-0.10), apart()), seed=5, paths=300, steps=120)
    assert "of the gap between x and y" in found.headline[0]
    rows = [row for row in found.rows if row.series == "x ~ y" and row.outcome == "departs"]
    assert rows and all("of the gap" in row.what for row in rows if row.what.startswith("variance over"))


def test_every_kind_has_a_saboteur():
    texts = {file: (ROOT / file).read_text(encoding="utf-8") for file in ELSEWHERE}
    listed = [(kind, file) for file, kinds in ELSEWHERE.items() for kind in kinds.split()]
    assert set(SABOTEURS) | {kind for kind, _ in listed} == set(catalogue())
    assert all(kind in texts[file] for kind, file in listed)
