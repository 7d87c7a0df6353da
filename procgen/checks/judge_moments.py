"""The tests of values at probes, of averages along paths, and of pairs of series."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from procgen.checks import judge, special, waves
from procgen.checks.gather import Gather
from procgen.checks.judge import Finding
from procgen.checks.judge_pools import pooled_checks
from procgen.checks.limits import limit, sample_of
from procgen.checks.probes import CrossPlan, SeriesPlan
from procgen.checks.start import scatter_checks, start_checks
from procgen.checks.verdict import Check
from procgen.checks.words import side_by_side
from procgen.theory.lumps import atoms_of

_QUANTILES = (0.01, 0.99)
_UNSPREAD = 1e-4  # cell over sd up to which double precision's own does not show in the law of values
_MOVED = 25  # values, at least, that coarse rounding must move by a cell before their mean can be judged


def moment_checks(gather: Gather, column: int) -> Iterator[Check]:
    """Every check of one series that needs only values, not shocks."""
    plan = gather.plan.series[column]
    if plan.unknown:
        yield Check(plan.name, "moments", "", "level", outcome="untestable", note=plan.unknown)
        yield from _laws(gather, column)
        return
    for i in range(len(plan.steps)):
        if plan.constant[i]:
            yield _constant(gather, column, i)
        else:
            yield from _mean_and_variance(gather, column, i)
    yield from _covariances(gather, column)
    yield from _growth(gather, column)
    yield from _laws(gather, column)
    yield from pooled_checks(gather, column)
    if column in gather.plan.starts:
        yield from start_checks(plan.name, plan.steps, sample_of(gather.starts, gather.plan.starts.index(column)))
    if column in gather.plan.waved:
        first = waves.SIZE * gather.plan.waved.index(column)
        yield from waves.wave_checks(plan, [sample_of(gather.waves, first + k) for k in range(waves.SIZE)])
    if column in gather.plan.scattered:
        found = sample_of(gather.scatter, gather.plan.scattered.index(column))
        yield from scatter_checks(plan.name, gather.plan.steps, found)


def _constant(gather: Gather, column: int, i: int) -> Check:
    """A step at which theory leaves nothing to chance."""
    plan = gather.plan.series[column]
    k = gather.plan.offset[column] + i
    mean = float(plan.mean[i])
    widest = math.sqrt(float(np.max(plan.drawn, where=np.isfinite(plan.drawn), initial=0.0)))
    room = plan.grain / 2 + 1e-9 * max(1.0, abs(mean), float(np.abs(plan.mean).max()), widest)
    n = gather.moments.n
    spread = math.sqrt(max(float(gather.moments.scatter[k, k]), 0.0) / max(n, 1))
    off = abs(float(gather.moments.mean[k]))
    fault = ""
    if n and max(off, spread) > room:
        seen = mean + float(gather.moments.mean[k])
        stated, given = side_by_side(mean, seen, 6)
        fault = f"every path must be {stated} at {_at(plan, i)}; the paths' mean is {given}, their sd {spread:.3g}"
    check = Check.fact(plan.name, "constant", _at(plan, i), fault, "the same known value on every path")
    check.kind, check.theory, check.estimate = "level", mean, mean + float(gather.moments.mean[k])
    return check


def _at(plan: SeriesPlan, i: int) -> str:
    return f"step {plan.steps[i]}"


def _mean_and_variance(gather: Gather, column: int, i: int) -> Iterator[Check]:
    plan, moments = gather.plan.series[column], gather.moments
    k, n = gather.plan.offset[column] + i, moments.n
    mu, sigma2 = float(plan.mean[i]), float(plan.variance[i])
    if not math.isfinite(sigma2):
        reason = plan.theory.reason("variance") or "its variance is infinite: no central limit theorem holds"
        yield Check(plan.name, "mean", _at(plan, i), "level", outcome="untestable", note=reason)
        return
    if plan.coarse[i] and (i not in plan.rounded or n * sigma2 < _MOVED * plan.grain**2):
        note = plan.too_coarse(math.sqrt(plan.drawn[i]))
        for what, kind in (("mean", "level"), ("variance", "spread")):
            yield Check(plan.name, what, _at(plan, i), kind, outcome="untestable", note=note)
        return
    if plan.gaussian and not plan.coarse[i]:
        if n >= 1:
            mean = judge.normal_mean(float(moments.mean[k]), mu, math.sqrt(sigma2), n)
            yield Check.of(plan.name, "mean", _at(plan, i), "level", mean)
        if n >= 2:
            variance = judge.variance(moments.covariance(k, k), sigma2, n - 1)
            yield Check.of(plan.name, "variance", _at(plan, i), "spread", variance)
        return
    sample = sample_of(gather.deviations, gather.plan.deviations.index(k))
    yield limit(plan, "mean", _at(plan, i), "level", sample, mu, 1, math.sqrt(sigma2), plan.skewness(1))
    product = gather.plan.products.index((column, i, i))
    sd = None if plan.coarse[i] else plan.product_sd.get((i, i))
    sample, hidden = sample_of(gather.products, product), plan.skewness(2) if sd is None else 0.0
    yield limit(plan, "variance", _at(plan, i), "spread", sample, sigma2, 2, sd, hidden)


def _covariances(gather: Gather, column: int) -> Iterator[Check]:
    plan, moments = gather.plan.series[column], gather.moments
    for i, j in plan.pairs:
        if plan.constant[i] or plan.constant[j]:
            continue
        probe = f"steps {plan.steps[i]}, {plan.steps[j]}"
        known = plan.covariance[i, j]
        if plan.coarse[i] or plan.coarse[j]:
            note = plan.too_coarse(math.sqrt(min(plan.drawn[i], plan.drawn[j])))
            yield Check(plan.name, "covariance", probe, "memory", outcome="untestable", note=note)
        elif known is None or not math.isfinite(known):
            yield Check(plan.name, "covariance", probe, "memory", outcome="untestable", note=plan.reason("covariance"))
        elif plan.gaussian:
            if moments.n >= 2:
                a, b = gather.plan.offset[column] + i, gather.plan.offset[column] + j
                s1, s2 = math.sqrt(plan.variance[i]), math.sqrt(plan.variance[j])
                finding = judge.covariance(moments.covariance(a, b), s1, s2, known / (s1 * s2), moments.n - 1)
                yield Check.of(plan.name, "covariance", probe, "memory", finding)
        else:
            sample = sample_of(gather.products, gather.plan.products.index((column, i, j)))
            sd, variance = plan.product_sd.get((i, j)), float(plan.variance[i])
            if sd is not None:
                yield limit(plan, "covariance", probe, "memory", sample, known, 2, sd)
            else:
                slope = sample.scaled(1 / variance)
                what, hidden = "slope on the earlier step", plan.skewness(1) ** 2
                yield limit(plan, what, probe, "memory", slope, known / variance, 2, None, hidden)


def _growth(gather: Gather, column: int) -> Iterator[Check]:
    """How far a series that is not stationary moves from its first moving probe to its last."""
    plan, moments = gather.plan.series[column], gather.moments
    moving = np.flatnonzero(~plan.constant & ~plan.coarse)
    if not plan.gaussian or moments.n < 2 or len(moving) < 2 or plan.theory.stationarity.covariance_stationary:
        return
    i, j = int(moving[0]), int(moving[-1])
    cov = plan.theory.covariance(plan.steps[i : i + 1], plan.steps[j : j + 1])
    if cov is None:
        return
    stated = float(plan.variance[i] + plan.variance[j] - 2 * np.ravel(cov)[0])
    a, b = gather.plan.offset[column] + i, gather.plan.offset[column] + j
    seen = moments.covariance(a, a) + moments.covariance(b, b) - 2 * moments.covariance(a, b)
    if stated > max(plan.grain, 1e-9 * math.sqrt(float(plan.variance[j]))) ** 2:
        finding = judge.variance(seen, stated, moments.n - 1)
        yield Check.of(
            plan.name, "variance of the change", f"steps {plan.steps[i]} to {plan.steps[j]}", "spread", finding
        )


def _laws(gather: Gather, column: int) -> Iterator[Check]:
    from scipy.special import ndtr

    plan = gather.plan.series[column]
    mine = [(k, i) for k, (owner, i) in enumerate(gather.plan.kept) if owner == column]
    for k, i in mine:
        values = gather.kept.values(gather.plan.seen_with(k))
        if len(values) < 8:
            continue
        law = plan.scores[i].distribution
        own = 0.0 < plan.grain <= np.spacing(abs(law.mean))  # double precision's own: no number lies within a cell
        grain = 0.0 if own else plan.grain
        if getattr(law.frozen, "spacing", 0.0):
            yield from special.whole_numbers(plan.name, _at(plan, i), law.frozen, values[:, k], i, grain)
            continue
        if atoms_of(law.frozen):
            yield from special.lumps(plan.name, _at(plan, i), law.frozen, values[:, k], i, grain)
            continue
        x = values[:, k]
        spread = plan.grain > 0.02 * law.sd / math.sqrt(len(x))
        if spread:
            z = (x - law.mean + plan.grain * (np.random.default_rng(i).random(len(x)) - 0.5)) / law.sd
            plan.scores[i].room = plan.grain / law.sd
            x = law.mean + law.sd * plan.scores[i].folded(z)
        if plan.grain > (_UNSPREAD if own and not plan.gaussian else 0.5 / len(values) ** 0.25) * law.sd:
            note = f"values are rounded to {plan.grain:g}, too coarse for the law"
            yield Check(plan.name, "law", _at(plan, i), "law", outcome="untestable", note=note)
            continue
        note = f"Anderson–Darling, {len(x)} paths"
        u = ndtr(z) if own and spread and plan.gaussian else law.frozen.cdf(x)
        yield Check.of(plan.name, "law", _at(plan, i), "law", judge.anderson_darling(u), note)
        if plan.gaussian:
            continue
        for q in _QUANTILES:
            below = int(np.count_nonzero(x < law.frozen.ppf(q)))
            yield Check.of(
                plan.name, f"share below the {q:.0%} quantile", _at(plan, i), "law", judge.share(below, len(x), q)
            )


def cross_moments(gather: Gather, place: int) -> Iterator[Check]:
    """Covariances of two series at common probes."""
    pair = gather.plan.cross[place]
    a, b = (gather.plan.series[k] for k in (pair.first, pair.second))
    start = sum(len(p.places) for p in gather.plan.cross[:place] if not p.gaussian)
    name = f"{a.name} ~ {b.name}"
    stated = [value for value in pair.covariance if value is not None]
    if len(stated) < len(pair.covariance):
        yield Check(name, "covariance between series", "", "dependence", outcome="untestable", note=pair.reason)
        return
    for k, (i, j) in enumerate(pair.places):
        if a.constant[i] or b.constant[j]:
            continue
        probe = f"steps {a.steps[i]}, {b.steps[j]}"
        hidden = [plan.too_coarse(math.sqrt(plan.drawn[q])) for plan, q in ((a, i), (b, j)) if plan.coarse[q]]
        if hidden:
            yield Check(name, "covariance between series", probe, "dependence", outcome="untestable", note=hidden[0])
            continue
        yield from _cross_one(gather, pair, a, b, i, j, stated[k], start + k, name, probe)


def _cross_one(
    gather: Gather,
    pair: CrossPlan,
    a: SeriesPlan,
    b: SeriesPlan,
    i: int,
    j: int,
    known: float,
    k: int,
    name: str,
    probe: str,
) -> Iterator[Check]:
    moments = gather.moments
    if not math.isfinite(known):
        return
    if pair.gaussian:
        s1, s2 = math.sqrt(a.variance[i]), math.sqrt(b.variance[j])
        if moments.n >= 2 and math.isfinite(s1 * s2):
            p, q = gather.plan.offset[pair.first] + i, gather.plan.offset[pair.second] + j
            finding: Finding = judge.covariance(moments.covariance(p, q), s1, s2, known / (s1 * s2), moments.n - 1)
            yield Check.of(name, "covariance between series", probe, "dependence", finding)
        return
    weaker = a if a.highest <= b.highest else b
    sample = sample_of(gather.crossed, k).scaled(1 / float(b.variance[j]))
    slope, hidden = known / float(b.variance[j]), a.skewness(1) * b.skewness(1)
    check = limit(weaker, "slope between series", probe, "dependence", sample, slope, 2, None, hidden)
    check.series = name
    yield check
