"""Series without the moments for averages of squares, judged by cosines and sines: bounded, with exact means by theory.

For the deviation d of a series of variance s², the mean of cos(d / s) is its characteristic function, and that of
sin(d / s) sin(d' / s) of two steps half the difference of those of d − d' and d + d' (Feuerverger & Mureika 1977, The
empirical characteristic function and its applications). Both are known for sums of independent shocks of any law.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge, power
from procgen.checks.judge import FEW_PATHS, Finding, Sample
from procgen.checks.verdict import Check
from procgen.checks.words import COSINES, SINES, many
from procgen.theory.characteristic import characteristic, refusal
from procgen.theory.unknown import Unknown

LAGS = (1, 2)
SIZE = 1 + len(LAGS)
_ENOUGH = 8.0  # moments with which averages of squares are judged
_FINE = 0.01  # grain over sd up to which rounding moves no cosine


def waved(plan: Any, way: Any) -> bool:
    """Whether a series (its plan, and its way to its shocks or the reason why there is none) is judged so."""
    expression = getattr(plan.theory, "expression", None)
    if expression is None or plan.unknown or plan.gaussian or plan.scores or getattr(way, "scores", None) is not None:
        return False
    known = np.isfinite(plan.variance).all() and (plan.drawn > 0.0).any() and not plan.highest > _ENOUGH
    return bool(known) and plan.grain <= _FINE * float(plan.drawn.max()) ** 0.5 and not refusal(expression)


def statistics(plan: Any, deviations: NDArray) -> NDArray:
    """(paths, SIZE) of deviations (paths, probes): the mean cosine of probes, and of products of sines of pairs."""
    at = _moving(plan)
    scaled = deviations / np.where(plan.drawn > 0.0, np.sqrt(np.maximum(plan.drawn, 0.0)), 1.0)
    columns = [np.cos(scaled[:, at]).mean(axis=1)]
    sines = np.sin(scaled)
    for lag in LAGS:
        found = [sines[:, i] * sines[:, j] for i, j in _pairs(plan, lag)]
        columns.append(np.mean(found, axis=0) if found else np.full(len(deviations), np.nan))
    return np.column_stack(columns)


def stated(plan: Any) -> list[float]:
    """What these are by theory; NaN where no pair of steps is so far apart."""
    x, sd = plan.theory.expression, np.sqrt(np.maximum(plan.drawn, 0.0))
    steps, alike = plan.steps.tolist(), plan.theory.stationarity.strict_deviations
    at = _moving(plan)
    first = at[:1] if alike else at

    def of(places: tuple[int, ...], u: tuple[float, ...]) -> float:
        return characteristic(x, [steps[i] for i in places], [f / sd[i] for f, i in zip(u, places, strict=True)]).real

    out = [float(np.mean([of((i,), (1.0,)) for i in first]))]
    for lag in LAGS:
        pairs = _pairs(plan, lag)[: 1 if alike else None]
        found = [0.5 * (of(pair, (1.0, -1.0)) - of(pair, (1.0, 1.0))) for pair in pairs]
        out.append(float(np.mean(found)) if found else math.nan)
    return out


def wave_checks(plan: Any, samples: list[Sample]) -> Iterator[Check]:
    """The checks of these, where there are paths enough."""
    probes = many(len(_moving(plan)), "step")
    names = [(COSINES, probes, "spread"), *((SINES, f"lag {lag}", "memory") for lag in LAGS)]
    if samples[0].n < FEW_PATHS:
        return
    try:
        known = stated(plan)
    except Unknown:  # of very many shocks
        return
    for (what, probe, kind), sample, theory in zip(names, samples, known, strict=True):
        if math.isfinite(theory) and sample.n >= FEW_PATHS and sample.sd > 0.0:
            apart = replace(sample, mean=sample.mean - theory)
            finding = judge.sample_mean(apart, theory)
            yield Check.of(plan.name, what, probe, kind, _wider(finding, sample.n) if what == COSINES else finding)


def _wider(finding: Finding, n: int) -> Finding:
    """The same, with the smallest departure to wider values: whose cosines spread more, about as 1 − mean²."""
    theory, error = finding.theory, finding.standard_error
    assert theory is not None and error is not None

    def detect(level: float) -> float:
        x = (finding.detect(level) or math.inf) / error - power.Z_POWER  # of the sum over root of squares
        if not x * x < n:
            return math.inf
        reach, size = error * (x * math.sqrt((n - 1) / (n - x * x)) + power.Z_POWER), 0.0
        for _ in range(60):
            size = reach * math.sqrt((1.0 - min(abs(theory - size), 1.0) ** 2) / (1.0 - theory**2))
        return size if size <= theory else math.inf  # no cosine of what is wide is below 0 by as much

    return replace(finding, detect=detect)


def _moving(plan: Any) -> list[int]:
    return np.flatnonzero(plan.drawn > 0.0).tolist()


def _pairs(plan: Any, lag: int) -> list[tuple[int, int]]:
    """Pairs of probes that are so many steps apart."""
    at = _moving(plan)
    return [(i, j) for i in at for j in at if plan.steps[j] - plan.steps[i] == lag]
