"""The values farthest from their mean, in standard deviations: one that is absurd is named, before what it distorts.

Of N values the farthest lies beyond d with a probability of at most N times that of one: 2 Φ(−d) for a Gaussian
series, and for any other at most 1/d², or κ/d⁴ with its kurtosis κ (Bonferroni; Bienaymé 1853, Chebyshev 1867).
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import places_beyond
from procgen.checks.judge import Finding
from procgen.checks.verdict import Check
from procgen.checks.words import FARTHEST, number

COUNTED = 32  # values of a series that are counted, the most that are kept of one value
KEPT = COUNTED + 1  # one more shows whether there are others than these
MARK = "all of them are this value, as if it marked what is missing"
_LEAST = 4.0  # standard deviations, below which a value is of no interest
_JUST = 1.0 - 1e-9  # of a size, so that rounding leaves out nothing
_FARTHEST = 1e300  # standard deviations that are told apart
_CHUNK = 1 << 15  # steps whose theory is asked for at once, at most
_KEPT = 4  # chunks of them
_OUTSIDE = math.log(0.05)  # of a value that is farther than all values of N should be
_ABSURD = 2.0  # times as far as the farthest of N should be
_RARE = 100  # one absurd value in so many is an accident, more of them are a behaviour
_MOSTLY = 0.5  # share of what is outside that is absurd: of a tail that is too heavy, most is just outside

Far = list[Any]  # size in sd, minus path, minus step, value, mean, sd: a list, as JSON has it


class Reach:
    """Mean and standard deviation of every step of a series, and the chance of a value so far away."""

    def __init__(self, theory: Any, grain: float, steps: int = _CHUNK, n: int = 0):
        self.theory, self.grain, self.steps, self.size, self.n = theory, grain, steps, min(steps, _CHUNK), n
        self._chunks: dict[int, tuple[NDArray, NDArray]] = {}
        self._kurtosis: dict[int, float | None] = {}

    def prepare(self) -> None:
        """Ask the theory for the first steps, as many as are kept."""
        if self._alike is None:
            for k in range(min(-(-self.steps // self.size), _KEPT)):
                self._chunk(k)

    def look(
        self,
        x: NDArray,
        first_path: int,
        first_step: int,
        known: list[Far],
        ends: tuple[NDArray, NDArray] | None = None,
        least: float = 0.0,
    ) -> tuple[list[Far], tuple[int, int]]:
        """The KEPT farthest of those known and the values of a tile (steps, paths); what is not finite is left out.

        Also how many of its values are outside of what n values reach, and how many are absurd. `ends` (steps,): the
        least and the largest value of each step, where they are known; of sizes below `least` none is wanted.
        """
        least = max(_LEAST, least, known[-1][0] if len(known) == KEPT else 0.0)
        with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
            if ends is not None and self._alike is not None:
                rows = self._rows_beyond(*ends, min(least, self._allowed))
                mean, sd = (np.full(len(rows), value) for value in self._alike)
            else:
                low, high = ends or (np.fmin.reduce(x, axis=1), np.fmax.reduce(x, axis=1))
                mean, sd = self._at(first_step, len(x))
                rows = np.flatnonzero(np.maximum(high - mean, mean - low) / sd >= min(least, self._allowed))
                mean, sd = mean[rows], sd[rows]
            if not rows.size:
                return known, (0, 0)
            room = _JUST * min(least, self._allowed) * sd
            at, paths, values = places_beyond(x, rows, mean - room, mean + room)
            mean, sd = mean[at], sd[at]
            sizes = np.minimum(np.abs(values - mean) / sd, _FARTHEST)
        sizes[~np.isfinite(values)] = 0.0
        found = list(known)
        places = (-first_path - paths).tolist(), (-first_step - rows[at]).tolist()
        seen = zip(sizes.tolist(), *places, values.tolist(), mean.tolist(), sd.tolist(), strict=True)
        found += [list(each) for each in seen if each[0] >= least]
        outside, absurd = (int(np.count_nonzero(sizes > times * self._allowed)) for times in (1.0, _ABSURD))
        return merged(found), (outside, absurd)

    @cached_property
    def _allowed(self) -> float:
        """About how far, in sd, the farthest of n values may lie at the last step."""
        sd = self._at(self.size - 1, 1)[1][0]
        known = self.n > 0 and np.isfinite(sd)
        return _reach(self, [0.0, 0, 1 - self.size, math.nan, math.nan, float(sd)], self.n) if known else math.inf

    def _rows_beyond(self, low: NDArray, high: NDArray, size: float) -> NDArray[np.int64]:
        """The steps with a value so many sd from the mean that all steps share, and maybe some just short of it."""
        assert self._alike is not None
        mean, sd = self._alike
        least, most = mean - _JUST * size * sd, mean + _JUST * size * sd
        if high.max() < most and low.min() > least:
            return np.zeros(0, np.int64)
        return np.flatnonzero((high >= most) | (low <= least))

    @cached_property
    def _alike(self) -> tuple[np.float64, np.float64] | None:
        """Mean and standard deviation of every step, where they are the same at all."""
        mean, sd = self._chunk(0)
        same = bool((mean == mean[0]).all() and (sd == sd[0]).all())
        return (mean[0], sd[0]) if same and self.theory.stationarity.stationary else None

    def _at(self, first: int, count: int) -> tuple[NDArray, NDArray]:
        chunks = [self._chunk(k) for k in range(first // self.size, (first + count - 1) // self.size + 1)]
        if len(chunks) == 1:
            return chunks[0][0][first % self.size :][:count], chunks[0][1][first % self.size :][:count]
        cut = slice(first % self.size, first % self.size + count)
        mean, sd = (np.concatenate(parts)[cut] for parts in zip(*chunks, strict=True))
        return mean, sd

    def _chunk(self, k: int) -> tuple[NDArray, NDArray]:
        k = 0 if k and self.theory.stationarity.stationary else k  # then all are the same
        if k not in self._chunks:
            steps = np.arange(k * self.size, min((k + 1) * self.size, self.steps))
            mean, variance = self.theory.mean(steps), self.theory.variance(steps)
            if mean is None or variance is None:
                mean = variance = np.full(len(steps), np.nan)
            while len(self._chunks) >= _KEPT:
                self._chunks.pop(next(iter(self._chunks)))
            usable = np.isfinite(variance) & (variance > 0.0)
            self._chunks[k] = mean, np.sqrt(np.where(usable, variance, np.nan))
        return self._chunks[k]

    def log_chance(self, far: Far) -> float:
        """Logarithm of the chance, at most, that one value lies so far from its mean."""
        size = far[0] - self.grain / 2.0 / far[5]
        if size <= 1.0:
            return 0.0
        if self.theory.gaussian:
            from scipy.special import log_ndtr

            return math.log(2.0) + float(log_ndtr(-size))
        bounds = [-2.0 * math.log(size)]
        if (self.theory.highest_moment or 0.0) > 4.0:
            excess = self._excess(-far[2])
            bounds += [] if excess is None else [math.log(max(excess, -2.0 + 1e-9) + 3.0) - 4.0 * math.log(size)]
        return min(bounds)

    def _excess(self, step: int) -> float | None:
        """Excess kurtosis at a step, found once where it is the same at all."""
        if self.theory.excess_kurtosis is not None:
            return self.theory.excess_kurtosis
        if step not in self._kurtosis:
            self._kurtosis[step] = self.theory.excess_kurtosis_at(step)
        return self._kurtosis[step]


def merged(found: Sequence[Far]) -> list[Far]:
    """The farthest of all, in order, of equal values the first COUNTED; whichever are merged first."""
    kept: list[Far] = []
    times: Counter[float] = Counter()
    for far in sorted(found, reverse=True):
        times[far[3]] += 1
        if times[far[3]] <= COUNTED:
            kept.append(far)
        if len(kept) == KEPT:
            break
    return kept


def checks(
    series: str, reach: Reach, known: Sequence[Far], n: int, beyond: Sequence[int] = (0, 0)
) -> Iterator[Check]:
    """Whether the farthest of n values of a series is no farther than chance carries it; `beyond` as of Reach."""
    if not known:
        return
    first = known[0]
    logs = [math.log(n) + reach.log_chance(far) for far in known]
    outside = sum(log_p < _OUTSIDE for log_p in logs)
    allowed = _reach(reach, first, n)
    absurd = sum(far[0] > _ABSURD * allowed for far in known[:outside])
    same = outside > 1 and len({far[3] for far in known[:outside]}) == 1
    if outside >= COUNTED:  # more than are kept
        outside, absurd = max(outside, beyond[0]), beyond[1]
    few = outside <= max(1, n // _RARE) and absurd >= (1 if outside <= 3 else _MOSTLY * outside)
    alone = (same or few) and first[0] > _ABSURD * allowed
    # A few absurd values, or one that stands for all, are a fault of the data; others speak of the law.
    kind = "structure" if alone or not outside else "law"
    finding = Finding(first[4], first[3], first[5], min(0.0, logs[0]), _detect(reach, first, n))
    check = Check.of(series, FARTHEST, f"path {-first[1]}, step {-first[2]}", kind, finding)
    if outside:
        check.note = _told(check.probe, first, outside if outside < COUNTED else beyond[0], alone, same)
    yield check


def _told(place: str, first: Far, count: int, alone: bool, same: bool) -> str:
    """The values outside in words; a count of 0 is more than are kept."""
    many = "one value" if count == 1 else f"{count:,} values" if count else f"at least {COUNTED} values"
    each = "" if count == 1 else "such as " if same else "the farthest "
    mark = f"; {MARK}" if same and alone else ""
    return (
        f"{many} {'far ' if alone else ''}outside what the law allows: {each}{place}, value "
        f"{number(first[3], 6)} (expected about {number(first[4], 4)} ± {number(first[5], 3)}){mark}"
    )


def _reach(reach: Reach, far: Far, n: int) -> float:
    """About how far, in sd, the farthest of n values may lie."""
    return _solved(lambda size: math.log(n) + reach.log_chance([size, *far[1:]]), _OUTSIDE)


def _detect(reach: Reach, far: Far, n: int) -> Callable[[float], float]:
    """How far from its mean a single value is found at a level, in the unit of the series."""
    return lambda level: (
        far[5] * _solved(lambda size: math.log(n) + reach.log_chance([size, *far[1:]]), math.log(level))
    )


def _solved(falling: Callable[[float], float], target: float) -> float:
    low, high = 1.0, 2.0
    while falling(high) > target and high < 1e300:
        low, high = high, high * 2.0
    for _ in range(40):
        middle = (low + high) / 2.0
        low, high = (middle, high) if falling(middle) > target else (low, middle)
    return high
