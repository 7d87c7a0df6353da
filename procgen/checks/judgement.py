"""All checks of what one pass over the data has gathered, in the order in which they are told."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from procgen.checks import farthest, missing, repeated
from procgen.checks.atoms import few_shocks
from procgen.checks.gather import Gather, Plan
from procgen.checks.judge_moments import cross_moments, moment_checks
from procgen.checks.judge_shocks import cross_checks, shock_checks
from procgen.checks.probes import SeriesPlan
from procgen.checks.recover import Cannot, Route
from procgen.checks.special import lumpy
from procgen.checks.tied import tied_checks
from procgen.checks.untied import UntiedSums, untied_checks
from procgen.checks.verdict import Check
from procgen.checks.words import side_by_side

_LONGEST = 1 << 14  # steps over which the end of a forgotten start is looked for


def judged(gather: Gather) -> Iterator[Check]:
    """All checks of what one pass has gathered."""
    plan = gather.plan
    equal = {p.name: _chance_of_equal(p, plan) + missing.chance_of_none(plan, p) for p in plan.series}
    yield from gather.structure.checks(equal)
    if gather.structure.prints:
        yield from repeated.checks(plan.strangers, plan.names, *gather.structure.fingerprints(), equal)
    for column, series in enumerate(plan.series):
        yield from missing.checks(gather, series.name)
        if not plan.precision[column].random:
            yield _known(gather, series)
            continue
        yield from moment_checks(gather, column)
        yield from _shocks(gather, series.name)
        if series.name in gather.squares and not series.unknown:
            yield from gather.squares[series.name].checks(series.name)
    for place in range(len(plan.cross)):
        yield from cross_moments(gather, place)
    for relation, powers in zip(plan.relations, gather.related, strict=True):
        yield from relation.checks(powers)
    pairs = math.comb(len(plan.series), 2)
    if pairs > len(plan.cross):
        note = f"{len(plan.cross)} of the {pairs} pairs of series are compared, the first ones of the spec"
        yield Check("", "pairs of series", "", "dependence", outcome="reported", note=note)
    for pair, sums in gather.cross.items():
        name, stated = " ~ ".join(pair), plan.shock_pairs[pair]
        stopped = "; ".join(f"{one}: {gather.stopped[one]}" for one in pair if one in gather.stopped)
        if why := stated.unknown or stopped:
            yield Check(name, "shocks: correlation between series", "", "dependence", outcome="untestable", note=why)
        elif stated.tie is not None:
            yield from tied_checks(name, sums, stated)
        else:
            yield from cross_checks(name, sums, stated.at)
            if isinstance(sums, UntiedSums):
                yield from untied_checks(name, sums)


def _known(gather: Gather, series: SeriesPlan) -> Check:
    """A series without chance must be its mean."""
    if series.unknown:
        return Check(series.name, "values", "all steps", "level", outcome="untestable", note=series.unknown)
    gap, _, _, seen, stated = gather.gaps.get(series.name, (0.0, 0, 0, math.nan, math.nan))
    scale = float(np.max(np.abs(series.mean)))
    room = series.grain / 2 + max(1e-9 * scale, 1e-12 * series.within, 1e-309)
    given, wanted = side_by_side(seen, stated, 10)
    fault = "" if gap <= room else f"a value is {given}, stated {wanted}, without any chance in the spec"
    check = Check.fact(series.name, "values", "all steps", fault, "every value is the known one")
    check.kind, check.theory, check.estimate = "level", stated, seen
    return check


def _shocks(gather: Gather, name: str) -> Iterator[Check]:
    way = gather.plan.routes[name]
    if isinstance(way, Cannot):
        yield Check(name, "recovered shocks", "all steps", "law", outcome="untestable", note=str(way))
        return
    if name in gather.errors:
        series = next(plan for plan in gather.plan.series if plan.name == name)
        yield from gather.errors[name].checks(name, series.highest)
        return
    sums = gather.shocks[name]
    if name in gather.stopped:
        note = gather.stopped[name]
        yield Check(name, "recovered shocks", "all steps", "law", outcome="untestable", note=note)
        return
    noise = gather.plan.noise.get(name, 0.0)
    if math.isinf(noise):
        note = "stored rounding hides which of the values of its law a shock has"
        yield Check(name, "recovered shocks", "all steps", "law", outcome="untestable", note=note)
        return
    if sums.n and noise > 0.1 * math.sqrt(2 / sums.n):
        note = f"stored rounding moves the shocks by {math.sqrt(noise):.2g} of their sd, too much for {sums.n} of them"
        yield Check(name, "recovered shocks", "all steps", "law", outcome="untestable", note=note)
        return
    if sums.n == 0:
        yield Check(name, "recovered shocks", "", "law", outcome="untestable", note=_none_recovered(way, gather))
        return
    yield from shock_checks(name, sums, way.words)
    if name in gather.led:
        yield from gather.led[name].checks(name)
    ranks = way.ranked is not None or way.few is not None
    yield from farthest.checks(name, sums.scores, sums.far, sums.n, noise, ranks)
    points = getattr(sums.scores.law, "points", None) is not None or lumpy(way.theory)
    if not (ranks or points or noise or way.grain):
        yield from farthest.ties(name, sums.scores, sums.far, sums.n)
    if name in gather.events:
        yield from gather.events[name].checks(name)


def _none_recovered(way: Route, gather: Gather) -> str:
    """Why a way that can be gone has led to no shock, and how many steps would mend it."""
    needed = way.needed(_LONGEST)
    if needed is None:
        return f"no shock could be recovered: {_LONGEST} steps would not be enough to forget what came before step 0"
    if needed > gather.plan.steps:
        return (
            f"no shock could be recovered: what came before step 0 is not known and must be forgotten first, which "
            f"needs about {needed} steps, not {gather.plan.steps}"
        )
    return "no shock could be recovered: no path has finite values throughout"


def _chance_of_equal(series: SeriesPlan, plan: Plan) -> float:
    """Probability that two paths of a series are equal: 0 where chance parts them, 1 where that is not known."""
    few = few_shocks(series.theory)
    if few is not None and not series.grain:
        return few.same**plan.steps
    if series.may_stay:
        return 1.0
    step = plan.precision[plan.names.index(series.name)].possible.support.step
    if lumpy(series.theory):
        return _equal_lumps(series, step, plan.steps)
    if step:
        return _equal_on_lattice(series, max(step, series.grain), plan.steps)
    if series.of_few:
        return 1.0
    if not np.isfinite(series.variance).all():
        return 0.0
    moving = int(np.count_nonzero(series.drawn > 0))
    if series.grain == 0.0:
        return 0.0 if moving else 1.0
    way = plan.routes[series.name]
    sd = math.sqrt(float(series.drawn.max()))
    if isinstance(way, Route) and way.kalman is not None:
        sd = min(sd, way.kalman.roots[-1])
        moving = plan.steps - 1 if moving < len(series.steps) else plan.steps
    # Two normals of this sd fall in one cell with probability grain / (2 sqrt(pi) sd).
    return min(1.0, series.grain / (2 * math.sqrt(math.pi) * sd)) ** max(moving, 1) if sd else 1.0


def _equal_lumps(series: SeriesPlan, step: float, steps: int) -> float:
    """The same of values that have chances of their own: at a step Σ p² by their law, or more by what is new in it.

    Two paths that have been equal so far have more in common than their law, and sticky values do: of both numbers the
    larger one is taken, and a third of the steps. Where either is not known, equal paths are no wonder.
    """
    if not step or not series.scores:
        return 1.0
    by_law = [np.sum(scores.distribution.lumps[1] ** 2) for scores in series.scores.values()]
    return max(max(by_law) or 1.0, _equal_on_lattice(series, step, 1)) ** (steps / 3)


def _equal_on_lattice(series: SeriesPlan, step: float, steps: int) -> float:
    """The same of values that a term has put on a lattice, by what is new in each since the step before it.

    Where theory does not know that, or it is small beside the lattice, equal paths are no wonder.
    """
    neighbours = [(i, j, cov) for (i, j), cov in series.covariance.items() if series.steps[j] == series.steps[i] + 1]
    if not neighbours or not np.all(series.variance > 0) or any(cov is None for _, _, cov in neighbours):
        return 1.0
    new = min(float(series.variance[j]) - (cov or 0.0) ** 2 / float(series.variance[i]) for i, j, cov in neighbours)
    return min(1.0, step / (2 * math.sqrt(math.pi * new))) ** steps if new > 0 else 1.0
