"""Averages over paths whose law is not exact: judged by a central limit theorem, where moments and paths allow it."""

from __future__ import annotations

import math

from procgen.checks import judge
from procgen.checks.judge import FEW_PATHS, Sample
from procgen.checks.probes import SeriesPlan
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check
from procgen.checks.words import many

_MOVES = 0.1  # share of the stated spread of a number from which on it moves as stated, however large it is
_STILL = {1: 1e-9, 2: 1e-7}  # by order: a spread below this share of the stated value is one of rounding


def sample_of(powers: Powers, k: int) -> Sample:
    """Statistic k of the paths in which it is known."""
    n = int(powers.n[k])
    return Sample.from_powers(n, powers.sums[:, k].tolist()) if n else Sample(0, math.nan, 0.0, 0.0, 0.0)


def few_paths(n: int, wanted: int) -> str:
    """Why an estimate of n paths is not judged; that it is the same on all of them where these would be enough."""
    why = f"only {many(n, 'path')} of at least {wanted}" if n < wanted else f"it is the same on all {n} paths"
    return f"{why}: reported, not judged"


def limit(
    plan: SeriesPlan,
    what: str,
    probe: str,
    kind: str,
    sample: Sample,
    theory: float,
    order: int,
    sd: float | None,
    hidden: float = 0.0,
) -> Check:
    """A check by a central limit theorem, where moments and paths allow it."""
    if sample.n == 0:
        return Check(plan.name, what, probe, kind, theory, outcome="untestable", note=plan.reason("covariance"))
    if not plan.highest > 3 * order:
        bound = (
            f"moments are known to exist only below order {plan.highest:g}"
            if plan.highest
            else "how many moments exist is not known"
        )
        note = f"{bound}: the tail of this estimate is not that of a central limit theorem"
        return Check(plan.name, what, probe, kind, theory, theory + sample.mean, outcome="untestable", note=note)
    still = sd is None or sample.sd < _MOVES * sd
    if sample.n >= FEW_PATHS and still and sample.sd <= _STILL[order] * abs(theory):
        note = "it is the same on every path but for rounding: reported, not judged"
        return Check(plan.name, what, probe, kind, theory, theory + sample.mean, outcome="reported", note=note)
    if sample.n < FEW_PATHS or sample.sd == 0.0:
        note = few_paths(sample.n, FEW_PATHS)
        return Check(plan.name, what, probe, kind, theory, theory + sample.mean, outcome="reported", note=note)
    finding = judge.sample_mean(sample, theory, sd, hidden)
    if kind == "spread":
        finding = judge.of_scale(finding)
    return Check.of(plan.name, what, probe, kind, finding)


def clustering(
    series: str,
    what: str,
    probe: str,
    powers: Powers,
    k: int,
    theory: float,
    least: int = FEW_PATHS,
    times: float = 1.0,
    grows: bool = False,
    wider: float = 1.0,
) -> Check:
    """A check of clustering by averages along paths, of which there must be `least`; `times` as for `sample_mean`.

    grows: whether an estimate above theory is the less certain, as one of a spread is. wider: how many times as far
    apart the averages are where clustering is as much stronger as is found.
    """
    sample = sample_of(powers, k)
    if sample.n < least or sample.sd == 0.0:
        estimate, note = theory + sample.mean, few_paths(sample.n, least)
        return Check(series, what, probe, "clustering", theory, estimate, outcome="reported", note=note)
    finding = judge.of_products(judge.sample_mean(sample, theory, times=times), sample, times, wider)
    return Check.of(series, what, probe, "clustering", judge.of_scale(finding) if grows else finding)
