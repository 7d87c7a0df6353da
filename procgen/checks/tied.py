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
from procgen.checks.together import CrossSums
from procgen.checks.verdict import Check

SHARE = 0.01  # the tails that are counted
SAME = 1e-4  # of the variance of a prediction error: so much of it may be rounding, beside the one shock
_EXCESS = 105.0  # of a product of two normal scores: at most E g^8
_TAILS = "tails"


class TiedSums(CrossSums):
    """The sums of a pair, and how often both shocks of a step are in their tails (on sides that go together).

    `lasting`: whether what ties them lasts for more than a step; then signs of products are followed, too.
    """

    def __init__(self, same_sides: bool, lasting: bool):
        super().__init__()
        self.side, self.lasting = 1.0 if same_sides else -1.0, lasting
        # Pairs, those with both far out, paths; pairs of products one step apart, and the sum of their signs.
        self.sums[_TAILS] = np.zeros(5)  # type: ignore[index]

    def absorb(self, a: NDArray, b: NDArray, steps: int, ready: int, totals: NDArray) -> None:
        super().absorb(a, b, steps, ready, totals)
        held = min(len(a), len(b))  # one of two ways to the shocks may have settled later
        first = max(steps - held, ready, 0)  # of the new steps, those whose scores are held and settled
        if first >= steps:
            return
        from scipy.special import ndtri

        end = -float(ndtri(SHARE))
        x, y = a[len(a) - steps + first :], b[len(b) - steps + first :] * self.side
        far = ((x > end) & (y > end)) | ((x < -end) & (y < -end))
        both = np.isfinite(x) & np.isfinite(y)
        self.sums[_TAILS][:2] += np.array([np.count_nonzero(both), np.count_nonzero(far)])  # type: ignore[index]
        new = min(steps, steps - ready - 1, held - 1)
        if self.lasting and new > 0:
            products = np.sign(a[len(a) - new - 1 :] * b[len(b) - new - 1 :])
            pairs = products[1:] * products[:-1]
            known = np.isfinite(pairs)
            seen = [np.count_nonzero(known), float(np.where(known, pairs, 0.0).sum())]
            self.sums[_TAILS][3:] += np.array(seen)  # type: ignore[index]

    def finish(self, totals: NDArray) -> None:
        super().finish(totals)
        self.sums[_TAILS][2] += totals.shape[1]  # type: ignore[index]

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
    """Correlations of the scores at each lag, the share of joint tails, and how long the tie lasts."""
    tie, note = stated.tie, str(stated.tie)
    pairs, far, paths, twos, signs = sums.sums[_TAILS].tolist()  # type: ignore[index]
    lasting = _Lasting(tie, pairs / max(paths, 1.0), paths) if hasattr(tie, "states") else None
    first, second = tie.scores
    for lag in sums.lags:
        n, total = (float(x) for x in sums.sums[lag])
        if not n:
            continue
        mean, variance = (stated.at[0], second - first * first) if lag == 0 else (0.0, 1.0)
        excess = _EXCESS / n
        if lasting and lag == 0:
            variance, excess = lasting.added([each.scores[0] for each in tie.states], variance, excess)
        probe = "same step" if lag == 0 else f"lag {lag:+d}"
        finding = _sum_finding(total / n, mean, variance, n, excess)
        yield Check.of(pair, "shocks: correlation between series", probe, "dependence", finding, note)
    if not pairs:
        return
    chance, what = 2.0 * stated.oriented.joint_tail(SHARE), f"shocks: both in their outer {SHARE:.0%}"
    if lasting is None:
        finding = judge.share(int(far), int(pairs), chance)
    else:
        each, v = [2.0 * one.joint_tail(SHARE) for one in stated.oriented.states], chance * (1.0 - chance)
        variance, excess = lasting.added(each, v, (1.0 / v - 6.0) / pairs)
        finding = _sum_finding(far / pairs, chance, variance, pairs, excess)
    yield Check.of(pair, what, "same step", "dependence", finding, note)
    if lasting is not None and twos:
        count = max(round(twos / paths), 1)
        mean, whole, between = tie.signs(count)
        excess = lasting.of_signs(whole / count, between / count, count)
        finding = _sum_finding(signs / twos, mean, whole / count, twos, excess)
        yield Check.of(pair, "shocks: signs that go together", "lag 1", "dependence", finding, note)


class _Lasting:
    """What the states add to the variance of sums over steps in a row, `count` of them on each of some paths."""

    def __init__(self, tie: Any, count: float, paths: float):
        self.tie, self.count, self.paths = tie, max(round(count), 1), max(paths, 1.0)

    def added(self, numbers: list[float], variance: float, excess: float) -> tuple[float, float]:
        """Variance a step, and excess kurtosis of the sum, when each step has a mean that is a number of its state.

        `variance` is that of one step, whatever the state. Means over a path lie within the numbers' range r: where
        they have the variance v, their excess is at most r^2/v.
        """
        mean = float(np.dot(self.tie.shares, numbers))
        own = float(np.dot(self.tie.shares, np.square(np.array(numbers) - mean)))
        more = self.tie.spread_of_sum(numbers, self.count) / self.count - own
        return variance + more, excess + self._excess(more + own, variance + more, float(np.ptp(numbers)), self.count)

    def of_signs(self, whole: float, between: float, count: int) -> float:
        """Excess kurtosis, at most, of the sum of signs over all paths; by its variances a step, as in `_excess`."""
        means = [2.0 / np.pi * np.arcsin(tie.rho) for tie in self.tie.states]
        products = [a * b for a in means for b in means]
        return 2.0 / (count * self.paths) + self._excess(between, whole, float(np.ptp(products)), count)

    def _excess(self, between: float, whole: float, reach: float, count: int) -> float:
        """That of a sum over paths, by variances a step: of what the states do, and of all."""
        return between * count * reach**2 / (whole**2 * self.paths)


def _sum_finding(seen: float, mean: float, variance: float, n: float, excess: float) -> judge.Finding:
    """A mean of n numbers of known variance a step, the excess kurtosis of which is at most so much."""
    error = math.sqrt(variance / n)
    finding = judge.unit((seen - mean) / error, error, theory=mean, excess=excess)
    return judge.with_doubt(finding, judge.excess_doubt(excess * n, int(n), "pairs of shocks"))
