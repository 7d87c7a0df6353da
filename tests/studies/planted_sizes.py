"""Plants of checks that ask for other data than 500 paths of 200 steps, or for more than a changed parameter.

Hidden states: a filter of two states by NumPy (Hamilton 1989) turns scores into values whose ranks given their past are
these scores; memory, level and spread are planted in them. Long paths, one path, short garches, drawn parameters: the
spec in another shape. Each size becomes a parameter by hand, but for the short garch's, found by a long simulation.
"""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any

import numpy as np
from scipy import optimize, special

from tests.studies.departures import draw, spec_of
from tests.studies.plants import Plant, Planter, arch_alpha, drawn, ma_of, noise

SEASON = [{"seasonal": {"period": 12, "harmonics": [{"amplitude": 1, "peak": 3}]}}, {"white_noise": {"sd": 1}}]


def regimes(stay: float = 4, law: Any = "normal") -> list[Any]:
    """A spread of 1 or 2, in two states of stays equally long."""
    branches = {
        "a": [{"white_noise": {"sd": 1, "law": law}}],
        "b": [{"white_noise": {"sd": 2, "law": law}, "as": "wide"}],
    }
    return [{"regimes": {"branches": branches, "durations": {"a": stay, "b": stay}}}]


# ranks given hidden states


def through_states(g: np.ndarray) -> np.ndarray:
    """Values of `regimes()` whose ranks given their past are Phi(g), for scores g (paths, steps)."""
    chances = np.full((2, len(g)), 0.5)
    out, spreads = np.empty(g.shape), np.array([[1.0], [2.0]])
    for t, u in enumerate(special.ndtr(g).T):
        low, high = np.minimum(g[:, t], 2 * g[:, t]), np.maximum(g[:, t], 2 * g[:, t])  # in one state, or the other
        for _ in range(40):
            middle = 0.5 * (low + high)
            narrow, wide = special.ndtr(middle / spreads)
            above = chances[0] * narrow + chances[1] * wide > u
            low, high = np.where(above, low, middle), np.where(above, middle, high)
        out[:, t] = 0.5 * (low + high)
        chances = chances * np.exp(-0.5 * (out[:, t] / spreads) ** 2) / spreads
        chances /= chances.sum(axis=0)
        chances = 0.75 * chances + 0.25 * chances[::-1]  # stays of 4 steps
    return out


def ranked(scores_of: Any) -> Planter:
    """Values whose scores are drawn from the spec that a size turns into."""
    return lambda size, seed, paths, steps: {
        "x": through_states(draw(spec_of(scores_of(size), paths, steps, seed))["x"])
    }


def rank_shift(size: float) -> float:
    """The constant beside normal scores at which sqrt(12) (Phi − 1/2) has this mean: E Phi(z + c) = Phi(c / sqrt 2)."""
    return math.sqrt(2) * float(special.ndtri(0.5 + size / math.sqrt(12)))


def rank_sd(size: float) -> float:
    """The sd of scores at which the ranks' variance is larger by `size`: of s z it is 6/π asin(s² / (1 + s²))."""
    share = math.sin(math.pi * (1 + size) / 6)
    return math.sqrt(share / (1 - share))


def rank_correlation(size: float) -> float:
    """The correlation of scores whose ranks have the correlation `size` (Pearson 1907)."""
    return 2 * math.sin(math.pi * size / 6)


# slope of squares


def stay_of(size: float, lag: int, kurtosis: float) -> float:
    """The stay, 8 when nothing is planted, at which the slope of squares at a lag is larger by `size`.

    The variance h is 1 or 4 and its autocovariance 2.25 r^lag, r = 1 − 2/stay; that of h z² is E h² kurtosis − 2.5².
    """
    share = 2.25 / (8.5 * kurtosis - 6.25)
    return 2 / (1 - (0.75**lag + size / share) ** (1 / lag))


# long paths


def tied(phi: float = 0.8, mean: float = 4.0, sd: float = 0.4) -> list[Any]:
    """Counts whose intensity has log-sd `sd`: at lag k it has the covariance mean² (exp(sd² φ^k) − 1)."""
    return [{"poisson": {"mean": mean / math.exp(sd**2 / 2), "of": [{"ar": {"phi": phi, "total_sd": sd}}]}}]


def tied_phi(size: float, lag: int, mean: float = 4.0, sd: float = 0.4) -> float:
    """The φ at which the slope on the step `lag` earlier is larger by `size`; the variance is the mean + Var m."""
    own = mean**2 / (mean + mean**2 * math.expm1(sd**2))
    slope = own * math.expm1(sd**2 * 0.8**lag) + size
    return (math.log1p(slope / own) / sd**2) ** (1 / lag)


def tied_sd(size: float, mean: float, sd: float) -> float:
    """The log-sd at which the variance of a count is larger by `size`."""
    return math.sqrt(math.log1p(math.expm1(sd**2) + size / mean**2))


# sizes of neighbours


def short_garch(alpha: float = 0.10) -> list[Any]:
    """Of variance 1 and persistence 0.8."""
    return [{"garch": {"omega": 0.2, "alpha": alpha, "beta": 0.8 - alpha}}]


@lru_cache(maxsize=4)
def garch_alpha(size: float, lag: int, steps: int) -> float:
    """The α at which bounded sizes so far apart, less their stated mean, have a mean product larger by `size`."""
    from procgen.checks.planning import plan_of

    plan = plan_of(spec_of(short_garch(), 8, steps, 1)).squares["x"]
    stated, mean, c = plan.sizes.covariances[plan.lags.index(lag)], plan.sizes.mean, plan.sizes.square
    z = np.random.default_rng(1).standard_normal((300, 20_000)) ** 2

    def product(alpha: float) -> float:
        h, y = np.ones(z.shape[1]), np.empty((200, z.shape[1]))
        for t, each in enumerate(z, -100):
            if t >= 0:
                y[t] = each * h / (each * h + c) - mean
            h = 0.2 + (alpha * each + 0.8 - alpha) * h
        return float(np.mean(y[lag:] * y[:-lag]))

    return float(optimize.brentq(lambda alpha: product(alpha) - stated - size, 0.05, 0.5, xtol=1e-5))


# drawn parameters


def by_path(law: Any) -> dict[str, Any]:
    """White noise around a level that each path draws."""
    level = {"constant": {"draw": law, "over": "path"}}
    return {"series": {"x": [level, {"white_noise": {"sd": 1}}]}}


def normal_level(shift: float = 0.0) -> dict[str, Any]:
    return by_path({"normal": {"mean": 5 + 2 * shift, "sd": 2}})


def chosen_level(share: float = 0.2) -> dict[str, Any]:
    return by_path({"choice": {"values": [1, 2], "weights": [share, 1 - share]}})


def rendered(body_of: Any) -> Any:
    """An ensemble of the spec that a size turns into, with its table of parameters."""

    def plant(size: float, seed: int, paths: int, steps: int) -> Any:
        from procgen.ensemble import render

        return render(spec_of(body_of(size), paths, steps, seed), out=None)

    return plant


def gap_shift(size: float) -> float:
    """The shift of a normal law, in its sd, that leaves this gap between distribution functions."""
    return 2 * float(special.ndtri((1 + size) / 2))


_LEVEL = "parameter x.constant.level: "
_SPANS = {"shape": (2, 50_000), "whole": True}
_MANY = 20.0, 0.2  # mean and log-sd of counts that are less skewed

MORE = (
    Plant("shocks: mean", "all steps", regimes(), ranked(lambda d: noise(level=rank_shift(d))),
          by="level of ranks given hidden states"),
    Plant("shocks: variance", "all steps", regimes(), ranked(lambda d: noise(rank_sd(d))),
          by="spread of ranks given hidden states"),
    Plant("shocks: autocorrelation", "lag 1", regimes(), ranked(lambda d: ma_of(rank_correlation(d))),
          by="memory of ranks given hidden states"),
    Plant("shocks: clustering", "lag 1", regimes(), ranked(lambda d: [
        {"constant": 0}, {"arch": {"sd": 1, "alpha": arch_alpha(round(d, 9))}}]),
          by="arch of ranks given hidden states"),
    *(Plant("slope of squares", f"lag {lag}", regimes(8, "uniform"),
            drawn(lambda d, lag=lag: regimes(stay_of(d, lag, 1.8), "uniform")), by="stays in regimes, uniform")
      for lag in (1, 4)),
    Plant("slope of squares", "lag 1", regimes(8), drawn(lambda d: regimes(stay_of(d, 1, 3.0))),
          by="stays in regimes, normal", shape=(2000, 200)),
    *(Plant("covariance of bounded sizes", f"lag {lag}", short_garch(), lambda d, seed, paths, steps, lag=lag: draw(
        spec_of(short_garch(garch_alpha(d, lag, steps)), paths, steps, seed)), by="α of a garch", shape=(4000, 30))
      for lag in (1, 5)),
    Plant("shocks: level by phase", "period 12", SEASON, drawn(lambda d: [
        *SEASON, {"seasonal": {"period": 2, "harmonics": [{"amplitude": d}]}, "as": "more"}]),
        by="another harmonic", shape=(1, 6000)),
    Plant("mean over steps", "steps 0–63 of", tied(), rendered(lambda d: tied(mean=4 + d)), by="mean of counts",
          **_SPANS),
    Plant("variance over steps", "steps 0–63 of", tied(0.8, *_MANY), rendered(
        lambda d: tied(0.8, 20, tied_sd(d, *_MANY))), by="sd of an intensity", **_SPANS),
    *(Plant("slope over steps", f"steps 0–63, lag {lag} of", tied(0.8, *_MANY), rendered(
        lambda d, lag=lag: tied(tied_phi(d, lag, *_MANY), *_MANY)), by="φ of an intensity", **_SPANS)
      for lag in (1, 16)),
    Plant(f"{_LEVEL}distribution function", "all paths", normal_level(),
          rendered(lambda d: normal_level(gap_shift(d))), "", by="mean of the drawn law", shape=(500, 20), whole=True),
    Plant(f"{_LEVEL}share of 1", "all paths", chosen_level(), rendered(lambda d: chosen_level(0.2 + d)), "",
          by="weight of a choice", shape=(500, 20), whole=True),
)  # fmt: skip
