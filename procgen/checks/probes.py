"""Where theory and data are compared, and what theory says there: everything the pass over the data needs.

All numbers of theory are computed before the data are read. What theory does not know is None, with its reason.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import field
from functools import cached_property, partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import rounding
from procgen.checks.pools import Pool, noise, plan_pool
from procgen.checks.saddle import made_of
from procgen.checks.scores import Scores
from procgen.spec.records import dataclass
from procgen.theory.lumps import atoms_of, chance_of
from procgen.theory.mixedlaw import Normal

PAIR_LIMIT = 36  # pairs of series that are compared
_HUGE = 1e9  # times the size of a series
NOTHING = 1e-24  # of the largest variance of a series: a step with less is certain
_NEVER = 1e-9  # chance of what may be left out
_RARE = 9.0  # the kurtosis, that of the exponential law, beyond which a few rare values make most of the spread
_LEAST = 1e-15  # probability in either tail of a law on a lattice that is left out
_VALUES = 4096  # of a law that are summed one by one


def probe_steps(steps: int) -> tuple[int, ...]:
    """About a dozen steps: the start, where the start matters, the middle and the end, each with a neighbour."""
    wanted = [0, 1, 2, 4, steps // 16, steps // 4, steps // 2, steps // 2 + 1, 3 * steps // 4 + 1]
    wanted += [steps - 2, steps - 1]
    return tuple(sorted({t for t in wanted if 0 <= t < steps}))


def probe_pairs(steps: Sequence[int]) -> tuple[tuple[int, int], ...]:
    """Pairs of positions in `steps`: neighbours, and one long reach."""
    n = len(steps)
    pairs = [(i, i + 1) for i in range(n - 1)]
    if n > 3:
        pairs += [(0, 2), (0, n - 1)]
    return tuple(pairs)


@dataclass
class SeriesPlan:
    """One series: its probes, their theory, the window of pooled statistics, and the marginal laws.

    `mean` and `variance` are those of the values as stored, rounding included. They are NaN where theory does not
    know them; `unknown` then says why.
    """

    name: str
    steps: NDArray[np.int64]
    theory: Any
    mean: NDArray
    variance: NDArray
    grain: float = 0.0  # the distance of neighbouring values as stored; 0 when it does not matter
    unknown: str = ""
    pairs: tuple[tuple[int, int], ...] = ()
    covariance: dict[tuple[int, int], float | None] = field(default_factory=dict)
    gaussian: bool = False
    highest: float = 0.0
    scores: dict[int, Scores] = field(default_factory=dict)  # position of a probe -> its marginal law
    product_sd: dict[tuple[int, int], float | None] = field(default_factory=dict)  # of deviations, not Gaussian
    pool: Pool | None = None
    period: int | None = None
    rounded: dict[int, tuple[float, float]] = field(default_factory=dict)  # exact mean and variance, where computed

    def __post_init__(self) -> None:
        self.drawn = self.variance  # before rounding
        self.coarse = np.zeros(len(self.steps), dtype=bool)  # probes hidden by rounding
        self.may_stay = False  # whether two paths may be equal by chance, for their values can be held
        self.smooth = True  # whether by its terms no value lies on a grid
        self.of_few = False  # whether all that chance brings to it may be few values
        self.within = 0.0  # the largest of the known numbers that it is made of
        self._skewness: dict[int, float] = {}

    def reason(self, name: str) -> str:
        return self.theory.reason(name) or "theory has no closed form"

    @cached_property
    def limit(self) -> float:
        """How large values are let into the sums: their powers would overflow. What is farther out is named by itself.

        A billion times what the series has, so that no true value is cut; infinite where that is not known.
        """
        sizes = np.abs(self.mean), np.sqrt(np.maximum(self.variance, 0.0))
        size = sum(float(np.max(each)) for each in sizes)
        return _HUGE * (size or 1.0) if math.isfinite(size) else math.inf

    @property
    def constant(self) -> NDArray[np.bool_]:
        """Probes at which theory leaves nothing to chance."""
        return self.drawn <= 0.0

    def skewness(self, order: int) -> float:
        """The largest size of the skewness of deviations (order 1) or their squares (order 2), where laws are known.

        A sample of a law with a long tail does not show its skewness until it has met the tail. Where no law is known,
        that of rare events follows from the kurtosis: skewness² is at most kurtosis − 1, and so much where there are
        only two values (Pearson 1916).
        """
        if order not in self._skewness:
            laws = list(self.scores.values())
            if self.theory.stationarity.strict_deviations:
                laws = laws[:1]  # they are all the same
            found = [made_of(scores.nodes, lambda z: z**order).skew for scores in laws]
            self._skewness[order] = max(map(abs, found), default=self._of_rare)
        return self._skewness[order]

    @cached_property
    def _of_rare(self) -> float:
        if self.unknown or not self.highest > 4:
            return 0.0
        found = [self.theory.excess_kurtosis_at(int(step)) for step in {self.steps[0], self.steps[-1]}]
        excess = max((each for each in found if each is not None and math.isfinite(each)), default=0.0)
        return math.sqrt(excess + 2.0) if excess + 3.0 > _RARE else 0.0

    @cached_property
    def repeats(self) -> dict[int, float]:
        """By lag of the pool: how many steps in a row are about as good as one, for the average of what it looks at.

        Only asked for where laws are skewed: it takes the variance of the averages, of all lags at once.
        """
        pool = self.pool
        assert pool is not None
        lags = list(dict.fromkeys((0, *pool.lags)))
        steps = pool.last - pool.first - np.array(lags, dtype=np.int64)
        found = self.theory.variance_of_mean(steps) if pool.steady and self.drawn[-1] > 0 else None
        if found is None:
            return dict.fromkeys(lags, 1.0)
        many = np.where(np.isfinite(found), steps * found / self.drawn[-1], 1.0)
        return dict(zip(lags, np.maximum(many, 1.0).tolist(), strict=True))

    @cached_property
    def square_sd(self) -> float | None:
        """Standard deviation of a path's average square over the pool, where moments do not depend on the step.

        Only asked for when there are paths enough: it takes all covariances of squares over the window.
        """
        pool = self.pool
        if pool is None or not self.theory.stationarity.covariance_stationary or not self.highest > 4:
            return None
        width = pool.last - pool.first
        squares = self.theory.autocovariance_of_squares(np.arange(width), pool.first)
        if squares is None:
            return None
        later = float(np.sum((width - np.arange(1, width)) * squares[1:]))
        variance = (width * float(squares[0]) + 2 * later) / width**2
        return math.sqrt(variance) if variance > 0 else None

    def too_coarse(self, sd: float) -> str:
        return f"rounded to {self.grain:g}, too coarse against a standard deviation of {sd:.3g}"


class Marginal:
    """A known law at a probe, made to look like a law of standardised shocks (so that Scores can read it).

    `law` gives it when it is first asked for: only the process that judges must import what it takes.
    """

    gaussian = False

    def __init__(self, law: Callable[[], Any], mean: float, sd: float):
        self._law, self.mean, self.sd = law, mean, sd

    @cached_property
    def frozen(self) -> Any:
        return self._law()

    def distribution(self) -> Marginal:
        return self

    @cached_property
    def lumps(self) -> tuple[NDArray, NDArray]:
        """The values with a chance of their own, and these chances; of very many values none."""
        spacing = getattr(self.frozen, "spacing", 0.0)
        x = np.array(atoms_of(self.frozen))
        if 0.0 < spacing < np.inf:  # inf: that of parts differs
            first, last = (float(self.frozen.ppf(p)) for p in (_LEAST, 1.0 - _LEAST))
            count = (last - first) / spacing + 1.0
            x = first + spacing * np.arange(round(count)) if count <= _VALUES else np.zeros(0)
        if not 0 < len(x) <= _VALUES:
            return np.zeros(0), np.zeros(0)
        return (x - self.mean) / self.sd, np.asarray(chance_of(self.frozen, x), float)

    def cdf(self, z: NDArray) -> NDArray:
        return self.frozen.cdf(self.mean + self.sd * np.asarray(z))

    def sf(self, z: NDArray) -> NDArray:
        return self.frozen.sf(self.mean + self.sd * np.asarray(z))

    def pdf(self, z: NDArray) -> NDArray:
        return self.frozen.pdf(self.mean + self.sd * np.asarray(z)) * self.sd

    def ppf(self, p: Any) -> Any:
        return (self.frozen.ppf(p) - self.mean) / self.sd


def plan_series(
    name: str,
    theory: Any,
    steps: int,
    grain: float,
    periods: Sequence[int],
    blind: bool = False,
    hidden: str = "",
) -> SeriesPlan:
    """The plan of one series from its theory; `blind` when its shocks cannot be recovered.

    `hidden` says why its values do not show what theory knows, where they do not.
    """
    at = np.array(probe_steps(steps), dtype=np.int64)
    mean, variance = (None, None) if hidden else (theory.mean(at), theory.variance(at))
    both = (("mean", mean), ("variance", variance))
    unknown = [hidden or theory.reason(what) or "not known" for what, x in both if x is None]
    blank = np.full(len(at), np.nan)
    plan = SeriesPlan(
        name,
        at,
        theory,
        blank if mean is None else mean,
        blank if variance is None else settled(variance),
        grain,
        "; ".join(dict.fromkeys(unknown)),
        probe_pairs(at.tolist()),
    )
    if hidden:
        return plan
    plan.highest = float(theory.highest_moment or 0.0)
    plan.gaussian = bool(theory.gaussian)
    plan.period = next((p for p in periods if 1 < p < steps), None)
    plan.covariance.update(_between(plan))
    if not plan.unknown:
        _marginals(plan)
        if not plan.gaussian:
            plan.product_sd = _product_sds(plan, [*((i, i) for i in range(len(at))), *plan.pairs])
        plan.coarse = _rounded(plan)
        plan.pool = plan_pool(plan, steps, blind)
        _as_stored(plan)
    else:
        _laws_alone(plan)
    return plan


def _between(plan: SeriesPlan) -> Iterator[tuple[tuple[int, int], float | None]]:
    """Covariances at the pairs of probes, asked for at once; one by one where not all of them are known."""
    first, second = (plan.steps[[pair[side] for pair in plan.pairs]] for side in (0, 1))
    values = plan.theory.covariance(first, second) if plan.pairs else None
    for k, pair in enumerate(plan.pairs):
        value = plan.theory.covariance(first[k : k + 1], second[k : k + 1]) if values is None else values[k : k + 1]
        yield pair, None if value is None else float(np.ravel(value)[0])


def settled(variance: NDArray) -> NDArray:
    """Variances with 0 for what is nothing beside the largest: rounding leaves it where values are certain."""
    largest = float(np.max(variance, where=np.isfinite(variance), initial=0.0))
    return np.where(variance < NOTHING * largest, 0.0, variance)


def _rounded(plan: SeriesPlan) -> NDArray[np.bool_]:
    """Exact moments of the rounded value at the probes that need them; where rounding is coarse."""
    for i in np.flatnonzero(np.isfinite(plan.drawn) & (plan.drawn > 0)):
        share = plan.grain / np.sqrt(plan.drawn[i])
        if share > (rounding.GAUSSIAN_COARSE if plan.gaussian else rounding.FINE):
            law = plan.theory.marginal(int(plan.steps[i]))
            exact = None if law is None else rounding.rounded_moments(law, plan.grain)
            if exact is not None:
                plan.rounded[int(i)] = exact
    return rounding.coarse(plan.grain, plan.mean, plan.drawn, plan.gaussian, plan.rounded)


def _as_stored(plan: SeriesPlan) -> None:
    """Mean and variance of the rounded values."""
    plan.mean = plan.mean.copy()
    plan.variance = np.where(plan.drawn > 0, plan.drawn + noise(plan.grain), plan.drawn)
    for i, (mean, variance) in plan.rounded.items():
        plan.mean[i], plan.variance[i] = mean, variance


def _marginals(plan: SeriesPlan) -> None:
    """Known laws at three of the probes."""
    moving = np.flatnonzero(~plan.constant)
    chosen = sorted({moving[0], moving[len(moving) // 2], moving[-1]}) if len(moving) else []
    for i in map(int, chosen):
        law = partial(plan.theory.marginal, int(plan.steps[i]))
        if plan.gaussian:
            law = partial(Normal, float(plan.mean[i]), float(np.sqrt(plan.variance[i])))
        if np.isfinite(plan.variance[i]) and (plan.gaussian or _moves(law())):  # a normal law is always known
            plan.scores[i] = Scores(Marginal(law, float(plan.mean[i]), float(np.sqrt(plan.variance[i]))))


def _moves(law: Any) -> bool:
    """Whether a law is known and leaves something to chance: of a value that is certain a variance may be left over."""
    return law is not None and float(np.ptp(law.ppf(np.array([_NEVER, 1.0 - _NEVER])))) > 0.0


def _laws_alone(plan: SeriesPlan) -> None:
    """Known laws at three of the probes of a series without moments: about the median, by the quartiles.

    Where a bend has put both quartiles on one value, by all that the law reaches; of one value for certain, by 1.
    """
    for i in sorted({0, len(plan.steps) // 2, len(plan.steps) - 1}):
        law = plan.theory.marginal(int(plan.steps[i]))
        if law is not None:
            least, low, middle, high, most = law.ppf(np.array([_NEVER, 0.25, 0.5, 0.75, 1.0 - _NEVER])).tolist()
            plan.scores[i] = Scores(Marginal(partial(_same, law), middle, (high - low) or (most - least) or 1.0))


def _same(law: Any) -> Any:
    return law


def _product_sds(plan: SeriesPlan, pairs: Sequence[tuple[int, int]]) -> dict[tuple[int, int], float | None]:
    """Standard deviations of products at pairs of probes: all at once, or one by one where some are not known."""
    moving = [pair for pair in pairs if not plan.constant[list(pair)].any()]
    found: dict[tuple[int, int], float | None] = dict.fromkeys(pairs)
    if not moving or not plan.highest > 4:
        return found
    i, j = np.array(moving).T
    squares = plan.theory.covariance_of_squares(plan.steps[j], plan.steps[i])
    known = [plan.variance[a] if a == b else plan.covariance[a, b] for a, b in moving]
    if squares is None or None in known:
        return found | {pair: _product_sd(plan, *pair) for pair in moving}
    variances = squares + plan.variance[i] * plan.variance[j] - np.square(np.array(known, float))
    return found | {
        pair: float(np.sqrt(v)) if v > 0 else None for pair, v in zip(moving, variances.tolist(), strict=True)
    }


def _product_sd(plan: SeriesPlan, i: int, j: int) -> float | None:
    """Standard deviation of the product of the deviations at two probes, from the covariance of their squares."""
    first, lag = int(plan.steps[i]), int(plan.steps[j] - plan.steps[i])
    if i == j:
        excess = plan.theory.excess_kurtosis_at(first)
        return None if excess is None else float(plan.variance[i]) * float(np.sqrt(excess + 2))
    squares, known = plan.theory.autocovariance_of_squares(np.array([lag]), first), plan.covariance[i, j]
    if squares is None or known is None:
        return None
    variance = float(squares[0]) + float(plan.variance[i] * plan.variance[j]) - known**2
    return float(np.sqrt(variance)) if variance > 0 else None


@dataclass
class CrossPlan:
    """Two series: covariances of first(t) and second(s) at pairs of their probes."""

    first: int
    second: int
    places: tuple[tuple[int, int], ...]
    covariance: tuple[float | None, ...]
    reason: str
    gaussian: bool


def plan_cross(plans: Sequence[SeriesPlan], cross: Callable[[str, str], Any]) -> list[CrossPlan]:
    """Pairs of series at a few common probes."""
    out: list[CrossPlan] = []
    for i, a in enumerate(plans):
        for j in range(i + 1, len(plans)):
            if len(out) == PAIR_LIMIT:
                return out
            out.append(_cross_pair(plans, i, j, cross(a.name, plans[j].name)))
    return out


def _cross_pair(plans: Sequence[SeriesPlan], i: int, j: int, theory: Any) -> CrossPlan:
    a, b = plans[i], plans[j]
    n = len(a.steps)
    middle = int(np.searchsorted(a.steps, a.steps[-1] // 2 + 1)) if n > 2 else 0
    places = sorted({(0, 0), (middle, middle), (n - 1, n - 1)} | ({(n - 1, n - 2), (n - 2, n - 1)} if n > 1 else set()))
    values, reason = [], ""
    for p, q in places:
        value = theory.covariance(a.steps[p : p + 1], b.steps[q : q + 1])
        reason = reason or (theory.reason() or "" if value is None else "")
        values.append(None if value is None else float(np.ravel(value)[0]))
    return CrossPlan(i, j, tuple(places), tuple(values), reason, bool(theory.gaussian))
