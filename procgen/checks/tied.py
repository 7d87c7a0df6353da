"""Shocks of two series that are tied in another way than by correlated normals: their scores, and their joint tails.

Where both ways to the shocks end at one shock a step, the pairs of a step follow a law that is known whole, whose
correlation alone would not tell it from the normal copula: both are far out together more often, or in some states.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.shocks import CrossSums
from procgen.checks.verdict import Check

SHARE = 0.01  # the tails that are counted
SAME = 1e-4  # of the variance of a prediction error: so much of it may be rounding, beside the one shock
_EXCESS = 105.0  # of a product of two normal scores: at most E g^8
_TAILS = "tails"


class TiedSums(CrossSums):
    """The sums of a pair, and how often both shocks of a step are in their tails (on sides that go together)."""

    def __init__(self, same_sides: bool):
        super().__init__()
        self.side = 1.0 if same_sides else -1.0
        self.sums[_TAILS] = np.zeros(2)  # type: ignore[index]  # pairs, and those with both far out

    def absorb(self, a: NDArray, b: NDArray, steps: int, ready: int, totals: NDArray) -> None:
        super().absorb(a, b, steps, ready, totals)
        first = max(steps - len(a), ready, 0)  # of the new steps, those whose scores are held and settled
        if first >= steps:
            return
        from scipy.special import ndtri

        end = -float(ndtri(SHARE))
        x, y = a[len(a) - steps + first :], b[len(b) - steps + first :] * self.side
        far = ((x > end) & (y > end)) | ((x < -end) & (y < -end))
        both = np.isfinite(x) & np.isfinite(y)
        self.sums[_TAILS] += np.array([np.count_nonzero(both), np.count_nonzero(far)])  # type: ignore[index]

    def merge(self, other: CrossSums) -> None:
        super().merge(other)
        self.sums[_TAILS] += other.sums[_TAILS]  # type: ignore[index]


def shock_of(way: Any) -> tuple[Any, float, int] | None:
    """The one source whose shocks come out, their correlation with these, and the step from which on; None if several.

    The source is a name in the space of sources.
    """
    if way.kalman is None:
        return way.source.name, 1.0, 0
    system = way.theory.system()
    if len(system.sources) != 1:
        return None
    ready = way.kalman.prepare()
    pushed = float(way.kalman.c @ system.loading[:, 0]) * math.sqrt(float(system.noise[0, 0]))
    same = pushed / way.kalman.roots[-1]
    return (system.sources[0], same, ready) if same * same > 1.0 - SAME else None


def tied_checks(pair: str, sums: CrossSums, stated: Any) -> Iterator[Check]:
    """Correlations of the scores at each lag, and the share of joint tails."""
    first, second = stated.tie.scores
    for lag in sums.lags:
        n, total = sums.sums[lag]
        if not n:
            continue
        mean, variance = (stated.at[0], second - first * first) if lag == 0 else (0.0, 1.0)
        error = math.sqrt(variance / n)
        finding = judge.unit((total / n - mean) / error, error, theory=mean, excess=_EXCESS / n)
        finding = judge.with_doubt(finding, judge.excess_doubt(_EXCESS, int(n), "pairs of shocks"))
        probe = "same step" if lag == 0 else f"lag {lag:+d}"
        yield Check.of(pair, "shocks: correlation between series", probe, "dependence", finding, str(stated.tie))
    pairs, count = (int(x) for x in sums.sums[_TAILS])  # type: ignore[index]
    if pairs:
        chance = 2.0 * stated.oriented.joint_tail(SHARE)
        what = f"shocks: both in their outer {SHARE:.0%}"
        yield Check.of(pair, what, "same step", "dependence", judge.share(count, pairs, chance), str(stated.tie))
