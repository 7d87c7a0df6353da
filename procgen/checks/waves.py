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
from procgen.theory.characteristic import Characteristic, refusal
from procgen.theory.unknown import Unknown

LAGS = (1, 2)
SIZE = 1 + len(LAGS)
_WIDER = 1.1  # times the values, by which it is seen how the spread of cosines grows with theirs
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


def stated(plan: Any, characteristic: Characteristic) -> list[float]:
    """What these are by theory; NaN where no pair of steps is so far apart."""
    sd = np.sqrt(np.maximum(plan.drawn, 0.0))
    steps, alike = plan.steps.tolist(), plan.theory.stationarity.strict_deviations
    at = _moving(plan)
    first = at[:1] if alike else at

    def of(places: tuple[int, ...], u: tuple[float, ...]) -> float:
        return characteristic([steps[i] for i in places], [f / sd[i] for f, i in zip(u, places, strict=True)]).real

    out = [float(np.mean([of((i,), (1.0,)) for i in first]))]
    for lag in LAGS:
        pairs = _pairs(plan, lag)[: 1 if alike else None]
        found = [0.5 * (of(pair, (1.0, -1.0)) - of(pair, (1.0, 1.0))) for pair in pairs]
        out.append(float(np.mean(found)) if found else math.nan)
    return out


def spread(plan: Any, characteristic: Characteristic, times: float = 1.0) -> tuple[float, float]:
    """Mean and standard deviation of a path's mean cosine, by theory, of values so many times as wide.

    E cos(a) cos(b) is half the sum of E cos(a + b) and E cos(a − b).
    """
    at = _moving(plan)
    u, steps = times / np.sqrt(plan.drawn[at]), plan.steps[at].tolist()
    alike, known = plan.theory.stationarity.strict_deviations, {}

    def of(i: int, j: int) -> tuple[float, float]:
        key = (0, steps[j] - steps[i]) if alike else (i, j)
        if key not in known:
            places = ([steps[i]], [2.0 * u[i]]) if i == j else ([steps[i], steps[j]], [u[i], u[j]])
            both = characteristic(*places).real
            apart = 1.0 if i == j else characteristic(places[0], [u[i], -u[j]]).real
            known[key] = (0.5 * (both + apart), characteristic([steps[i]], [u[i]]).real)
        return known[key]

    n = len(at)
    mean = sum(of(i, i)[1] for i in range(n)) / n
    square = sum((2.0 - (i == j)) * of(i, j)[0] for i in range(n) for j in range(i, n)) / n**2
    return mean, math.sqrt(max(square - mean**2, 0.0))


def wave_checks(plan: Any, samples: list[Sample]) -> Iterator[Check]:
    """The checks of these, where there are paths enough."""
    probes = many(len(_moving(plan)), "step")
    names = [(COSINES, probes, "spread"), *((SINES, f"lag {lag}", "memory") for lag in LAGS)]
    if samples[0].n < FEW_PATHS:
        return
    try:
        of = Characteristic(plan.theory.expression)
        known, spreads = stated(plan, of), [spread(plan, of, times) for times in (1.0, _WIDER)]
    except Unknown:  # of very many shocks
        return
    for (what, probe, kind), sample, theory in zip(names, samples, known, strict=True):
        if math.isfinite(theory) and sample.n >= FEW_PATHS and sample.sd > 0.0:
            apart = replace(sample, mean=sample.mean - theory)
            finding = _cosines(apart, theory, spreads) if what == COSINES else judge.sample_mean(apart, theory)
            yield Check.of(plan.name, what, probe, kind, finding)


def _cosines(sample: Sample, theory: float, spreads: list[tuple[float, float]]) -> Finding:
    """The mean cosine, whose spread is known, with the smallest departure to wider values: theirs spread more."""
    (mean, sd), (less, more) = spreads
    error, grows = sd / math.sqrt(sample.n), max(more / sd - 1.0, 0.0) / max(mean - less, 1e-9)
    finding = judge.sample_mean(sample, theory, sd)
    mirrored = judge.sample_mean(replace(sample, mean=-sample.mean, skew=-sample.skew), theory, sd)

    def detect(level: float) -> float:
        size = (mirrored.detect(level) or math.inf) / (1.0 - power.Z_POWER * error * grows)
        return size if 0.0 < size <= theory else math.inf  # no cosine of what is wide is below 0 by as much

    return replace(finding, detect=detect)


def _moving(plan: Any) -> list[int]:
    return np.flatnonzero(plan.drawn > 0.0).tolist()


def _pairs(plan: Any, lag: int) -> list[tuple[int, int]]:
    """Pairs of probes that are so many steps apart."""
    at = _moving(plan)
    return [(i, j) for i in at for j in at if plan.steps[j] - plan.steps[i] == lag]
