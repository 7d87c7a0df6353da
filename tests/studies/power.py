"""Is the printed "smallest departure caught 9 times in 10" true? Each check's own size is planted and counted.

    python tests/studies/power.py [--seeds 200] [--only WHAT] [--more]

A true ensemble says what size each check finds 9 times in 10 at its share of the level. Exactly that size is planted,
and the share of seeds with p at or below level / m is printed, m the number of checks that were judged.
"""

from __future__ import annotations

import argparse
import math
import sys
from collections.abc import Iterable, Iterator
from dataclasses import replace
from functools import lru_cache
from itertools import chain
from pathlib import Path
from typing import Any

import numpy as np
from scipy import stats

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from tests.studies.departures import SUM, Values, draw, spec_of, sums, verdict
from tests.studies.planted_sizes import MORE, SEASON, tied, tied_phi
from tests.studies.plants import (
    PATHS,
    STEPS,
    Plant,
    across,
    alike_at_first,
    anderson_darling_shift,
    apart,
    ar,
    arch_alpha,
    asymmetric,
    begun,
    drawn,
    error_moments,
    evened,
    followed,
    lone,
    ma_of,
    missing_alike,
    noise,
    score_shift,
    shaped,
    shifted,
    sized_alike,
    solve,
    spoilt,
    swayed,
    t,
    widened,
    wider_by_cosine,
)

LEVEL = 0.001
WALK = [{"random_walk": {"sd": 1}}]
FAT = [{"ar": {"phi": 0.7, "sd": 1}}, {"white_noise": {"sd": 0.5, "law": t(4)}}]
GARCH = [{"garch": {"omega": 0.05, "alpha": 0.10, "beta": 0.85}}]
HEAVY = [{"constant": 0}, {"ar": {"phi": 0.6, "total_sd": 1, "law": t(9)}}, {"white_noise": {"sd": 0.5}}]
COUNTS = [{"poisson": {"mean": 5}}]


def heavy(phi: float = 0.6, level: float = 0.0, times: float = 1.0) -> list[Any]:
    return [
        {"constant": level},
        {"ar": {"phi": phi, "total_sd": times, "law": t(9)}},
        {"white_noise": {"sd": 0.5 * times}},
    ]


@lru_cache(maxsize=2)
def heavy_level(size: float) -> float:
    """The constant that moves the prediction errors' mean by `size`."""
    return size / error_moments(HEAVY, heavy(level=1.0), STEPS)[0]


@lru_cache(maxsize=2)
def heavy_phi(size: float) -> float:
    """The coefficient at which prediction errors of neighbouring steps have the mean product `size`."""
    return solve(size, lambda phi: error_moments(HEAVY, heavy(phi), STEPS)[2], 0.6, 0.9)


def swollen(phi: float = 0.6) -> list[Any]:
    """A product whose squares have no closed covariance; its slope on the step before is φ · SWELL."""
    size = {"exp": [{"ar": {"phi": 0.7, "total_sd": 0.2}, "as": "size"}]}
    return [{"product": [{"ar": {"phi": phi, "total_sd": 1}}, size]}]


SWELL = math.exp(0.04 * 0.7) / math.exp(0.04)  # E exp(s[t] + s[t−1]) / E exp(2 s[t]), s of variance 0.04


def pair(rho: float = 0.35, law: Any = "normal") -> dict[str, Any]:
    y = [{"white_noise": {"sd": 1, "law": law}}]
    return {
        "series": {"x": [{"white_noise": {"sd": 1, "law": law}}], "y": y},
        "correlation": [{"between": ["x.white_noise", "y.white_noise"], "value": rho}],
    }


def late_pair(size: float, seed: int, paths: int, steps: int) -> Values:
    """x follows y one step later, beside what they share at the same step."""
    values = draw(spec_of({"series": pair()["series"]}, paths, steps, seed))
    x, y = values["x"], values["y"]
    x = math.sqrt(1 - size**2) * x
    x[:, 1:] += size * y[:, :-1]
    return {"x": x, "y": y}


def trailing_pair(size: float, seed: int, paths: int, steps: int) -> Values:
    """x follows ten earlier steps of y a little: the correlations at lags 3 to 12 add up to `size`."""
    values = draw(spec_of({"series": pair()["series"]}, paths, steps, seed))
    weight, y = size / 10, values["y"]
    x = math.sqrt(1 - 10 * weight**2) * values["x"]
    for lag in range(3, 13):
        x[:, lag:] += weight * y[:, :-lag]
    return {"x": x, "y": y}


GAPS = (0.2, 0.1)
GAPPED = {"series": {name: [{"missing": {"of": [{"white_noise": {"sd": 1}}], "share": share}}]
                     for name, share in zip("xy", GAPS, strict=True)}}  # fmt: skip


def changed(stated: Any, change: Any) -> Any:
    """Values of the stated spec, of which `change` makes others, given the size and a generator."""
    return lambda size, seed, paths, steps: change(
        draw(spec_of(stated, paths, steps, seed)), size, np.random.default_rng(seed)
    )


LONG = [{"fractional_gaussian_noise": {"hurst": 0.7, "sd": 1}}, {"white_noise": {"sd": 1}}]
LONG_MEAN = STEPS ** (2 * 0.7 - 2) + 1 / STEPS  # of fractional Gaussian noise the variance of a mean is n^(2H − 2)


def long_walk(sd: float = 0.3) -> list[Any]:
    """A walk that no filter undoes: of the variance of a change over k steps, k sd² is its own."""
    return [LONG[0], {"random_walk": {"sd": sd}}]


def _wider(total: float, size: float) -> float:
    return math.sqrt(1 + size / total)


PLANTS = (
    Plant("mean", "step 50", ar(), drawn(lambda d: ar(level=d)), by="constant"),
    Plant("variance", "step 50", ar(), drawn(lambda d: ar(total_sd=_wider(1, d))), by="sd"),
    Plant("covariance", "steps 100, 101", ar(), drawn(lambda d: ar(phi=0.6 + d)), by="φ, same variance"),
    Plant("law", "step 199", ar(), lambda d, seed, paths, steps: draw(
        spec_of(ar(level=anderson_darling_shift(d, paths)), paths, steps, seed)), by="constant"),
    Plant("mean over steps", "steps 104–199", ar(), drawn(lambda d: ar(level=d)), by="constant"),
    Plant("variance over steps", "steps 104–199", ar(), drawn(lambda d: ar(total_sd=_wider(1, d))), by="sd"),
    Plant("autocovariance over steps", "steps 104–199, lag 1", ar(), drawn(lambda d: ar(phi=0.6 + d)),
          by="φ, same variance"),
    Plant("variance of the change", "steps 1 to 199", WALK,
          drawn(lambda d: [{"random_walk": {"sd": _wider(198, d)}}]), by="sd of a walk"),
    Plant("shocks: mean", "all steps", noise(), drawn(lambda d: noise(level=d)), by="constant"),
    Plant("shocks: variance", "all steps", noise(), drawn(lambda d: noise(_wider(1, d))), by="sd"),
    Plant("shocks: autocorrelation", "lag 1", noise(), drawn(ma_of), by="θ of an ma"),
    Plant("shocks: autocorrelation", "lag 5", noise(), drawn(lambda d: ma_of(d, 5)), by="θ of an ma at lag 5"),
    Plant("shocks: variance of sums", "16 steps", noise(), spoilt(noise(), lambda x, d, _: swayed(x, d, 16)),
          by="slow sways"),
    Plant("shocks: variance of sums", "64 steps", noise(), spoilt(noise(), lambda x, d, _: swayed(x, d, 64)),
          by="slow sways"),
    Plant("shocks: clustering", "lag 1", noise(), drawn(lambda d: [
        {"constant": 0}, {"arch": {"sd": 1, "alpha": arch_alpha(round(d, 9))}}]), by="α of an arch"),
    Plant("shocks: asymmetric clustering", "lag 1", noise(), spoilt(noise(), asymmetric), by="leverage"),
    Plant("shocks: shape of the law", "all steps", noise(), spoilt(noise(), shaped), by="density of the shocks"),
    Plant("shocks: distribution function", "all steps", noise(),
          drawn(lambda d: noise(level=2 * stats.norm.ppf((1 + d) / 2))), by="constant"),
    Plant("shocks: level by step", "sum over steps", noise(), spoilt(noise(), lambda x, d, _: shifted(x, d, 1)),
          by="level by step"),
    Plant("shocks: level by step", "worst", noise(), lambda d, seed, paths, steps: draw(spec_of(
        [*noise(), {"event": {"shape": "pulse", "at": 77, "size": d / math.sqrt(paths), "length": 1}}],
        paths, steps, seed)), by="event of one step"),
    Plant("shocks: spread by step", "sum over steps", noise(), spoilt(noise(), lambda x, d, _: widened(x, d, 1)),
          by="sd by step"),
    Plant("shocks: level by path", "sum over paths", noise(), spoilt(noise(), lambda x, d, _: shifted(x, d, 0)),
          by="level by path"),
    Plant("shocks: spread by path", "sum over paths", noise(), spoilt(noise(), lambda x, d, _: widened(x, d, 0)),
          by="sd by path"),
    Plant("shocks: level by phase", "period 12", SEASON, drawn(lambda d: [
        *SEASON, {"seasonal": {"period": 2, "harmonics": [{"amplitude": d}]}, "as": "more"}]),
        by="another harmonic"),
    Plant("shocks: neighbouring paths", "path − 1", noise(), spoilt(noise(), lambda x, d, _: across(x, d)),
          by="paths mixed with their neighbour"),
    Plant("size of the start", "steps 0–1", ar(law=t(9)), spoilt(ar(law=t(9)), lambda x, d, _: begun(x, d)),
          by="sd of the first values"),
    Plant("mean cosine of values", "11 steps", FAT, spoilt(FAT, lambda x, d, _: wider_by_cosine(FAT, x, d)), by="sd"),
    Plant("scatter of the start", "steps 0–11", GARCH, spoilt(GARCH, lambda x, d, _: alike_at_first(x, d)),
          by="mean squares of the first values"),
    Plant("shocks: balance of paths", "sum over steps", noise(), spoilt(noise(), lambda x, d, _: evened(x, d)),
          by="paths' mean by step"),
    Plant("shocks: correlation between series", "same step", pair(), drawn(lambda d: pair(0.35 + d)), "x ~ y",
          by="correlation"),
    Plant("shocks: correlation between series", "lag +1", pair(0.0), late_pair, "x ~ y", by="weight of y's last step"),
    Plant("shocks: correlation of sizes", "same step", {"series": pair()["series"]}, changed(
        {"series": pair()["series"]}, sized_alike), "x ~ y", by="sizes drawn together"),
    Plant("shocks: correlation at longer lags", "lags +3 to 12", {"series": pair()["series"]}, trailing_pair, "x ~ y",
          by="weights of y's last steps"),
    Plant("missing values: correlation between series", "all steps", GAPPED, changed(
        GAPPED, lambda values, d, rng: missing_alike(values, d, rng, GAPS)), "x ~ y", by="gaps drawn together"),
    *(Plant(f"shocks: {what} by path", "worst: path 7", noise(), spoilt(noise(), lambda x, d, _, what=what: lone(
        x, d, what)), by=f"{what} of one path") for what in ("level", "spread", "memory")),
    Plant("covariance between series", "steps 100, 100", pair(), drawn(lambda d: pair(0.35 + d)), "x ~ y",
          by="correlation"),
    Plant("slope between series", "steps 100, 100", pair(0.0, t(9)), lambda d, seed, paths, steps: _leaning(
        d, seed, paths, steps), "x ~ y", by="weight of y"),
    Plant("shocks: level score", "all steps", noise(law=t(3)),
          drawn(lambda d: noise(level=score_shift(d, 0, 3, False), law=t(3))), by="constant"),
    Plant("shocks: spread score", "all steps", noise(law=t(3)),
          drawn(lambda d: noise(math.exp(score_shift(d, 1, 3, True)), law=t(3))), by="sd"),
    Plant("share below the 1% quantile", "step 199", noise(law=t(9)), drawn(lambda d: noise(
        stats.t.ppf(0.01, 9) / stats.t.ppf(0.01 + d, 9), law=t(9))), by="sd"),
    Plant("share below the 99% quantile", "step 199", noise(law=t(9)), drawn(lambda d: noise(
        stats.t.ppf(0.99, 9) / stats.t.ppf(0.99 - d, 9), law=t(9))), by="sd"),
    Plant("shocks: slope on the value before", "all steps", COUNTS, spoilt(COUNTS, followed), by="counts that follow"),
    Plant("mean", "step 50", noise(law=t(9)), drawn(lambda d: noise(level=d, law=t(9))), by="constant"),
    Plant("variance", "step 50", noise(law="laplace"), drawn(lambda d: noise(_wider(1, d), law="laplace")), by="sd"),
    Plant("covariance", "steps 100, 101", ar(law="laplace"), drawn(lambda d: ar(phi=0.6 + d, law="laplace")),
          by="φ, same variance"),
    Plant("slope on the earlier step", "steps 100, 101", swollen(), drawn(lambda d: swollen(0.6 + d / SWELL)),
          by="φ, same variance"),
    Plant("mean over steps", "steps 0–199", ar(law=t(9)), drawn(lambda d: ar(level=d, law=t(9))), by="constant"),
    Plant("variance over steps", "steps 0–199", ar(law="laplace"),
          drawn(lambda d: ar(total_sd=_wider(1, d), law="laplace")), by="sd"),
    Plant("slope over steps", "steps 0–199, lag 1", ar(law="laplace"),
          drawn(lambda d: ar(phi=0.6 + d, law="laplace")), by="φ, same variance"),
    Plant("slope over steps", "steps 0–199, lag 8", tied(), drawn(lambda d: tied(tied_phi(d, 8))),
          by="φ of an intensity"),
    *(Plant("variance of changes", f"{k} steps", long_walk(), drawn(lambda d, k=k: long_walk(math.sqrt(0.09 + d / k))),
            by="sd of a walk") for k in (8, 32)),
    Plant("variance of path means", "steps 0–199", LONG, spoilt(LONG, lambda x, d, _: apart(x, d, LONG_MEAN)),
          by="averages further apart"),
    Plant("prediction errors: mean", "all steps", HEAVY, drawn(lambda d: heavy(level=heavy_level(d))), by="constant"),
    Plant("prediction errors: variance", "all steps", HEAVY, drawn(lambda d: heavy(times=_wider(1, d))), by="both sd"),
    Plant("prediction errors: autocorrelation", "lag 1", HEAVY, drawn(lambda d: heavy(phi=heavy_phi(d))),
          by="φ, same variance"),
    Plant("prediction errors: neighbouring paths", "pairs", HEAVY,
          spoilt(HEAVY, lambda x, d, _: _paired(x, d)), by="pairs of paths mixed"),
    Plant("neighbouring paths", "averages over steps", LONG, spoilt(LONG, lambda x, d, _: across(x, d)),
          by="paths mixed with their neighbour"),
    Plant("shocks: variance", "all steps", SUM, drawn(lambda d: [
        {"random_walk": {"sd": 0.3 * _wider(1, d)}}, {"ar": {"phi": 0.5, "sd": _wider(1, d)}}]), by="both sd"),
    *MORE,
)  # fmt: skip


def _leaning(size: float, seed: int, paths: int, steps: int) -> Values:
    """x leans on y with this slope."""
    values = draw(spec_of({"series": pair(law=t(9))["series"]}, paths, steps, seed))
    values["x"] = math.sqrt(1 - size**2) * values["x"] + size * values["y"]
    return values


def _paired(x: np.ndarray, size: float) -> np.ndarray:
    """Each second path mixed with the one before it."""
    out = x.copy()
    out[1::2] = size * x[::2] + math.sqrt(1 - size**2) * x[1::2]
    return out


def _checks(plant: Plant, data: Any) -> Iterable[Any]:
    """The checks among which the plant's is, and hardly more: the others cost time and are not looked at."""
    if plant.whole:
        return _validated(plant, data).rows
    from procgen.checks.judge_shocks import cross_checks, shock_checks
    from procgen.checks.judgement import judged
    from procgen.checks.untied import untied_checks

    gather = sums(plant.stated, data)
    pair = tuple(plant.series.split(" ~ "))
    if plant.what == "shocks: correlation between series":
        return cross_checks(plant.series, gather.cross[pair], gather.plan.shock_pairs[pair].at)
    if plant.what.startswith("shocks: correlation "):
        return untied_checks(plant.series, gather.cross[pair])
    if plant.what.startswith("shocks: "):
        rows = shock_checks(plant.series, gather.shocks[plant.series], "")
        return chain(rows, gather.led[plant.series].checks(plant.series)) if plant.series in gather.led else rows
    return judged(gather)


def _validated(plant: Plant, ensemble: Any) -> Any:
    """The verdict on an ensemble that another seed has drawn."""
    from procgen.checks.validate import validate

    paths, steps = ensemble.spec.paths, ensemble.spec.time.steps
    return validate(ensemble, spec_of(plant.stated, paths, steps, 2_000_003), LEVEL)


def row_of(plant: Plant, rows: Iterable[Any]) -> Any:
    """The row that a plant is about; None when there is none that was judged."""
    for row in rows:
        if (row.series, row.what) == (plant.series, plant.what) and row.probe.startswith(plant.probe):
            return row if row.log_p is not None else None
    return None


def size_of(plant: Plant, paths: int, steps: int) -> tuple[float, float] | None:
    """(the size that the check prints, the logarithm of its share of the level), from a true ensemble."""
    true = spec_of(plant.stated, paths, steps, 1_000_003)
    if plant.whole:
        from procgen.ensemble import render

        answer = _validated(plant, render(true, out=None))
    else:
        answer = verdict(plant.stated, draw(true), LEVEL)
    row = row_of(replace(plant, probe=plant.probe.split(": path")[0]), answer.rows)
    judged = sum(each.log_p is not None for each in answer.rows)
    return None if row is None or row.detectable is None else (row.detectable, math.log(LEVEL / judged))


def caught(plant: Plant, seeds: range, shape: tuple[int, int] | None = None) -> tuple[float, int, int]:
    """(size, times that the check had p at or below its share of the level, seeds); `shape` is (paths, steps)."""
    paths, steps = shape or plant.shape
    found = size_of(plant, paths, steps)
    if found is None:
        return math.nan, 0, 0
    size, level = found
    hits = 0
    for seed in seeds:
        row = row_of(plant, _checks(plant, plant.plant(size, seed, paths, steps)))
        hits += row is not None and row.log_p <= level
    return size, hits, len(seeds)


def table(seeds: int, only: str = "", more: bool = False) -> Iterator[str]:
    """Lines of a Markdown table, one a check."""
    yield f"| check ({PATHS} × {STEPS}, or as said) | at | planted by | size | caught |"
    yield "| --- | --- | --- | --- | --- |"
    for plant in MORE if more else PLANTS:
        if only in plant.what:
            size, hits, runs = caught(plant, range(1, seeds + 1))
            share = f"{100 * hits / runs:.0f} %" if runs else "not judged"
            at = plant.probe.removesuffix(" of") + (" of spans" if plant.probe.endswith(" of") else "")
            if plant.shape != (PATHS, STEPS):
                at += f" ({plant.shape[0]:,} × {plant.shape[1]:,})"
            yield f"| {plant.what} | {at} | {plant.by} | {size:.3g} | {share} |"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=200)
    parser.add_argument("--only", default="", help="checks whose name contains this")
    parser.add_argument("--more", action="store_true", help="plants of planted_sizes.py alone")
    options = parser.parse_args()
    for line in table(options.seeds, options.only, options.more):
        print(line, flush=True)


if __name__ == "__main__":
    main()
