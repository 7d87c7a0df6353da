"""Specs of several series and terms, and departures planted in one of their terms.

Each departure changes one number of one spec, or spoils its values by hand, and says which series and which kinds of
departure a reader may be told of first. Several kinds are right where one number moves several sides of a series at
once: the weight of a shared factor moves the spread of the series and its dependence on the others.
"""

from __future__ import annotations

import copy
from typing import Any

from tests.studies.departures import Departure

LOAD: dict[str, Any] = {
    "shared": {"weather": [{"ar": {"phi": 0.9, "total_sd": 1}}]},
    "series": {
        "load": {
            "decimals": 2,
            "of": [
                {"trend": {"level": 310, "slope": 0.01}},
                {"seasonal": {"period": 24, "harmonics": [{"amplitude": 42, "peak": 18}, {"amplitude": 9}]}},
                {"use": "weather", "times": 6.5},
                {"arma": {"phi": [0.7, -0.1], "theta": 0.3, "sd": 4}, "as": "swing"},
            ],
        },
        "heat": [{"constant": 80}, {"use": "weather", "times": -3}, {"ar": {"phi": 0.5, "sd": 2}}],
        "price": [{"exp": [{"random_walk": {"sd": 0.01, "drift": -0.00005, "start": 3.2}}]}],
    },
    "correlation": [{"between": ["load.swing", "price.random_walk"], "value": 0.35}],
}

RETURNS: dict[str, Any] = {
    "series": {
        "bond": [{"ma": {"theta": 0.2, "sd": 0.4}}],
        "share": [
            {"constant": 0.02},
            {
                "ma": {
                    "theta": -0.15,
                    "shock": {"garch": {"sd": 1, "alpha": 0.08, "beta": 0.88, "law": {"student_t": {"df": 7}}}},
                }
            },
        ],
        "fund": [{"garch": {"sd": 0.7, "alpha": 0.1, "beta": 0.85}}],
    },
    "correlation": [{"between": ["bond.ma", "fund.garch"], "value": -0.3}],
}

MARKET: dict[str, Any] = {
    "series": {
        "north": [
            {"seasonal": {"period": 12, "harmonics": [{"amplitude": 4, "peak": 3}]}},
            {
                "regimes": {
                    "branches": {
                        "usual": [{"constant": 60}, {"white_noise": {"sd": 5}, "as": "quiet"}],
                        "tight": [{"constant": 85, "as": "raised"}, {"white_noise": {"sd": 12}, "as": "nervous"}],
                    },
                    "durations": {"usual": 40, "tight": 8},
                }
            },
        ],
        "wind": [{"switching_noise": {"sd": {"calm": 1, "gusty": 3}, "durations": {"calm": 30, "gusty": 10}}}],
    }
}

STOCK: dict[str, Any] = {
    "series": {
        "level": [
            {"local_level": {"level_sd": 0.3, "noise_sd": 1, "start": 50}},
            {"seasonal": {"period": 12, "harmonics": [{"amplitude": 2, "peak": 4}]}},
            {"event": {"at": 300, "size": 1.5}},
        ],
        "wear": [
            {"random_walk": {"sd": 0.2, "drift": 0.03}},
            {"ar": {"phi": 0.6, "total_sd": 1}},
            {"white_noise": {"sd": 0.5}},
        ],
        "error": [{"ar": {"phi": 0.4, "sd": 1, "law": {"student_t": {"df": 5}}}}],
        "size": [{"constant": 3}, {"white_noise": {"sd": 2, "law": {"gamma": {"shape": 2}}}}],
    }
}


def changed(spec: dict[str, Any], where: str, value: Any) -> dict[str, Any]:
    """The spec with another value at a dotted place, such as series.load.of.0.trend.slope."""
    raw = copy.deepcopy(spec)
    *way, last = [int(key) if key.isdigit() else key for key in where.split(".")]
    at: Any = raw
    for key in way:
        at = at[key]
    at[last] = value
    return raw


def _case(name: str, spec: dict[str, Any], where: str, value: Any, series: str, *kinds: str) -> Departure:
    return Departure(name, spec, changed(spec, where, value), kinds=kinds, series=series)


_LOAD = "series.load.of"
_SHARE = "series.share.1.ma"
_NORTH = "series.north.1.regimes"

CASES = (
    _case("trend slope 0.010 drawn as 0.012", LOAD, f"{_LOAD}.0.trend.slope", 0.012, "load", "level"),
    _case("trend slope doubled", LOAD, f"{_LOAD}.0.trend.slope", 0.02, "load", "level"),
    _case("trend level 310 drawn as 310.5", LOAD, f"{_LOAD}.0.trend.level", 310.5, "load", "level"),
    _case("daily peak one step late", LOAD, f"{_LOAD}.1.seasonal.harmonics.0.peak", 19, "load", "level"),
    _case("daily amplitude 42 drawn as 42.3", LOAD, f"{_LOAD}.1.seasonal.harmonics.0.amplitude", 42.3, "load", "level"),
    _case("period 24 drawn as 25", LOAD, f"{_LOAD}.1.seasonal.period", 25, "load", "level"),
    _case("factor weight 6.5 drawn as 6.8", LOAD, f"{_LOAD}.2.times", 6.8, "load", "spread", "memory", "dependence"),
    _case("factor weight −3 drawn as 3", LOAD, "series.heat.1.times", 3, "load ~ heat", "dependence"),
    _case("factor φ 0.9 drawn as 0.91", LOAD, "shared.weather.0.ar.phi", 0.91, "load", "memory", "dependence"),
    _case("arma φ₁ 0.70 drawn as 0.72", LOAD, f"{_LOAD}.3.arma.phi", [0.72, -0.1], "load", "memory"),
    _case("arma sign of θ", LOAD, f"{_LOAD}.3.arma.theta", -0.3, "load", "memory"),
    _case("arma sd 4 drawn as 4.1", LOAD, f"{_LOAD}.3.arma.sd", 4.1, "load", "spread"),
    _case("decimals 2 drawn as 4", LOAD, "series.load.decimals", 4, "load", "structure"),
    _case("constant 80 drawn as 80.1", LOAD, "series.heat.0.constant", 80.1, "heat", "level"),
    _case("ar φ 0.50 drawn as 0.52", LOAD, "series.heat.2.ar.phi", 0.52, "heat", "memory"),
    _case(
        "walk drift −0.00005 drawn as 0.00005", LOAD, "series.price.0.exp.0.random_walk.drift", 5e-5, "price", "level"
    ),
    _case("walk sd 0.0100 drawn as 0.0102", LOAD, "series.price.0.exp.0.random_walk.sd", 0.0102, "price", "spread"),
    _case("walk start 3.2 drawn as 3.21", LOAD, "series.price.0.exp.0.random_walk.start", 3.21, "price", "level"),
    _case("correlation 0.35 drawn as 0.30", LOAD, "correlation.0.value", 0.30, "load ~ price", "dependence"),
    _case("correlation 0.35 forgotten", LOAD, "correlation.0.value", 0.0, "load ~ price", "dependence"),
    _case("ma θ 0.20 drawn as 0.21", RETURNS, "series.bond.0.ma.theta", 0.21, "bond", "memory"),
    _case("ma sign of θ", RETURNS, f"{_SHARE}.theta", 0.15, "share", "memory"),
    _case("garch α 0.08 drawn as 0.11", RETURNS, f"{_SHARE}.shock.garch.alpha", 0.11, "share", "clustering"),
    _case("garch β 0.88 drawn as 0.80", RETURNS, f"{_SHARE}.shock.garch.beta", 0.80, "share", "clustering"),
    _case(
        "garch drawn as white noise",
        RETURNS,
        f"{_SHARE}.shock",
        {"white_noise": {"sd": 1, "law": {"student_t": {"df": 7}}}},
        "share",
        "clustering",
    ),
    _case("garch sd 1.00 drawn as 1.03", RETURNS, f"{_SHARE}.shock.garch.sd", 1.03, "share", "spread"),
    _case("law t(7) drawn as t(10)", RETURNS, f"{_SHARE}.shock.garch.law", {"student_t": {"df": 10}}, "share", "law"),
    _case("law t(7) drawn as normal", RETURNS, f"{_SHARE}.shock.garch.law", "normal", "share", "law"),
    _case("level 0.02 drawn as 0.03", RETURNS, "series.share.0.constant", 0.03, "share", "level"),
    _case("correlation sign", RETURNS, "correlation.0.value", 0.3, "bond ~ fund", "dependence"),
    _case("garch α as arch at lag 2", RETURNS, "series.fund.0.garch.alpha", [0.0, 0.1], "fund", "clustering"),
    _case(
        "stay in usual 40 drawn as 60",
        MARKET,
        f"{_NORTH}.durations.usual",
        60,
        "north",
        "memory",
        "clustering",
        "level",
        "spread",
        "law",
    ),
    _case(
        "stays both half as long",
        MARKET,
        f"{_NORTH}.durations",
        {"usual": 20, "tight": 4},
        "north",
        "memory",
        "clustering",
    ),
    _case(
        "regime spread 12 drawn as 14",
        MARKET,
        f"{_NORTH}.branches.tight.1.white_noise.sd",
        14,
        "north",
        "spread",
        "law",
    ),
    _case("regime level 85 drawn as 88", MARKET, f"{_NORTH}.branches.tight.0.constant", 88, "north", "level", "spread"),
    _case("gusty sd 3.0 drawn as 3.2", MARKET, "series.wind.0.switching_noise.sd.gusty", 3.2, "wind", "spread", "law"),
    _case(
        "gusts half as long, half as apart",
        MARKET,
        "series.wind.0.switching_noise.durations",
        {"calm": 15, "gusty": 5},
        "wind",
        "clustering",
    ),
    _case(
        "level sd 0.30 drawn as 0.31",
        STOCK,
        "series.level.0.local_level.level_sd",
        0.31,
        "level",
        "spread",
        "memory",
    ),
    _case(
        "noise sd 1.00 drawn as 1.02", STOCK, "series.level.0.local_level.noise_sd", 1.02, "level", "spread", "memory"
    ),
    _case("event size 1.5 drawn as 1.8", STOCK, "series.level.2.event.size", 1.8, "level", "level"),
    _case("event ten steps late", STOCK, "series.level.2.event.at", 310, "level", "level"),
    _case("drift 0.030 drawn as 0.032", STOCK, "series.wear.0.random_walk.drift", 0.032, "wear", "level"),
    _case("walk sd 0.20 drawn as 0.21", STOCK, "series.wear.0.random_walk.sd", 0.21, "wear", "spread", "memory"),
    _case("ar total sd 1.00 drawn as 1.03", STOCK, "series.wear.1.ar.total_sd", 1.03, "wear", "spread"),
    _case("ar t(5) drawn as t(8)", STOCK, "series.error.0.ar.law", {"student_t": {"df": 8}}, "error", "law"),
    _case("ar φ 0.40 drawn as 0.38", STOCK, "series.error.0.ar.phi", 0.38, "error", "memory"),
    _case("ar sd 1.00 drawn as 1.03", STOCK, "series.error.0.ar.sd", 1.03, "error", "spread"),
    _case(
        "gamma shape 2.0 drawn as 2.2", STOCK, "series.size.1.white_noise.law", {"gamma": {"shape": 2.2}}, "size", "law"
    ),
    _case("noise sd 2.00 drawn as 2.02", STOCK, "series.size.1.white_noise.sd", 2.02, "size", "spread"),
    _case("level 3.00 drawn as 3.02", STOCK, "series.size.0.constant", 3.02, "size", "level"),
)
