"""Processes whose moments a term states itself, and numbers drawn step by step from a law that follows a body."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from itertools import combinations
from typing import Any

import numpy as np

from procgen.theory import known, markov
from procgen.theory.bootstrap import Blocks
from procgen.theory.counted import LARGEST, Centred, Compound, Inflated
from procgen.theory.elapsed import Pulled, forecast
from procgen.theory.expression import Expression, product
from procgen.theory.known import Known
from procgen.theory.linear import At, Linear, base_of
from procgen.theory.lumps import Lumped, Point, atoms_of
from procgen.theory.processes import Held, Process, alone, at_any, mean_at
from procgen.theory.sources import Space
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import CYCLES, GROWS, LEAVES, VARIES, judge

Steps = np.ndarray
Covariance = Callable[[Steps, Steps], np.ndarray]


class Stated(Process):
    """A process of which its term states the moments, less its mean; see `Stating.stated`."""

    def __init__(
        self,
        name: str,
        ingredients: tuple[Any, ...],
        covariance: Covariance,
        law: Callable[[int], Any] | None = None,
        moment: Callable[[Steps, int, Steps, int], np.ndarray] | None = None,
        gaussian: bool = False,
        discrete: bool = False,
        lumpy: bool = False,
        grows: str = "",
        varies: str = "",
        cycles: str = "",
    ):
        found = ((GROWS, grows), (VARIES, varies), (CYCLES, cycles))
        says = tuple((verdict, why) for verdict, why in found if why)
        super().__init__(name, ingredients, says)
        self._covariance, self._law, self._moment = covariance, law, moment
        self.gaussian, self.discrete, self.lumpy = gaussian, discrete, lumpy or discrete

    def covariance(self, t, s):
        return self._covariance(t, s)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, Held):
            return other.detail.with_expression(alone_of(self, own), s, t)
        return super().with_process(own, other, t, s)

    def product(self, factors, t, s):
        if self._moment is None:
            return super().product(factors, t, s)
        (a, scale, back), (b, other, by) = (powers_of(self, factors, side) for side in (0, 1))
        if a > 2 or b > 2:
            raise Unknown(f"moments of order {a + b} of {self.name} are not known in closed form")
        t, s = t - back, s - by
        zero = np.zeros_like(t)
        apart = self._moment(t, a, zero, 0) * self._moment(s, b, zero, 0)
        return scale * other * apart, scale * other * (self._moment(t, a, s, b) - apart)

    def marginal(self, step):
        at = np.array([step], np.int64)
        if float(self.covariance(at, at)[0]) <= 0.0:
            raise Unknown("the value at that step is known, not random")
        if self._law is None:
            return super().marginal(step)
        law = self._law(step)
        return less(law, law.mean()) if atoms_of(law) else Centred(law)


class Drawn(Process):
    """Numbers drawn step by step, independently given a body L, less their mean.

    `level` is the mean of a value given L, `path` its mean; `central` (orders 2, 3, 4) has the conditional moments as
    polynomials in L. What is left of a value beside `level` is uncorrelated with all else.
    """

    def __init__(
        self,
        name: str,
        driver: Expression,
        body: Expression,
        level: Expression,
        path: Known,
        central: Sequence[Sequence[float]],
        law: Callable[[float], Any] | None,
        discrete: bool,
        lumpy: bool,
    ):
        super().__init__(name, (body, driver))
        self.driver, self.body, self.level, self.path = driver, body, level, path
        self.law, self.discrete, self.lumpy = law, discrete, lumpy or discrete
        self.central = [polynomial(body, each) for each in central]
        self.together: dict[int, Expression] = {}  # covariance given L with what is drawn with it at the same step
        self._powers: dict[tuple[int, int], Expression] = {}  # by the orders at one step, and at another beside it

    def covariance(self, t, s):
        same = t == s
        total = at_any(self.level, self.level, t, s) if self.level.sources else np.zeros(t.shape)
        return total + np.where(same, mean_at(self.central[0], np.where(same, t, 0)), 0.0) if same.any() else total

    def with_expression(self, other, t, s):
        own = list(self.driver.sources)
        if any(self.body.space.dependent(source, drawn) for source in other.sources for drawn in own):
            return super().with_expression(other, t, s)
        return at_any(self.level, other, t, s)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, Held):
            return other.detail.with_expression(alone_of(self, own), s, t)
        if isinstance(other.detail, Drawn):
            together = self.together.get(id(other.detail)) or other.detail.together.get(id(self))
            if together is not None:
                same = mean_at(together, np.where(t == s, t, 0))
                apart = self.level.sources and other.detail.level.sources
                total = at_any(self.level, other.detail.level, t, s) if apart else np.zeros(t.shape)
                return total + np.where(t == s, same, 0.0)
            drawn = [source for x in (self.driver, other.detail.driver) for source in x.sources]
            if not any(self.body.space.dependent(a, b) for a, b in combinations(drawn, 2)):
                return at_any(self.level, other.detail.level, t, s)
            return super().with_process(own, other, t, s)
        return self.with_expression(alone_of(self, other), t, s)

    def product(self, factors, t, s):
        """Given L, a power of the value less its mean is a polynomial in L: two of them at most at two steps."""
        (a, scale, back), (b, other, by) = (powers_of(self, factors, side) for side in (0, 1))
        if a > 2 or b > 2 or a + b >= self.highest_moment:
            raise Unknown(f"moments of order {a + b} of {self.name} are not known in closed form, or do not exist")
        t, s = t - back, s - by
        m, n, same = self._power(a), self._power(b), t == s
        apart, cross = mean_at(m, t) * mean_at(n, s), np.zeros(t.shape)
        if m.sources and n.sources:
            cross = at_any(m, n, t, s)
        if a and b and same.any():
            cross = cross + np.where(same, mean_at(self._more_at_once(a, b), np.where(same, t, 0)), 0.0)
        return scale * other * apart, scale * other * cross

    def _deviation(self) -> Expression:
        return self.level + Expression(self.body.space, self.path.scaled(-1.0))

    def _power(self, order: int) -> Expression:
        if (order, 0) not in self._powers:
            self._powers[order, 0] = self._power_of(order)
        return self._powers[order, 0]

    def _power_of(self, order: int) -> Expression:
        """E (x - E x)^order given L, as an expression."""
        if order == 0:
            return Expression(self.body.space, known.constant(1.0))
        if order == 1:
            return self._deviation()
        return self.central[0] + product(self.body.space, [self._deviation()] * 2)

    def _more_at_once(self, a: int, b: int) -> Expression:
        if (a, b) not in self._powers:
            self._powers[a, b] = self._more(a, b)
        return self._powers[a, b]

    def _more(self, a: int, b: int) -> Expression:
        """What E of powers a and b at one step, given L, has beyond the product of both."""
        two, three, four = self.central
        deviation, space = self._deviation(), self.body.space
        if a + b == 2:
            return two
        if a + b == 3:
            return three + product(space, [two, deviation]) * 2.0
        squares = product(space, [two, two]) * -1.0 + product(space, [two, deviation, deviation]) * 4.0
        return four + product(space, [three, deviation]) * 4.0 + squares

    def marginal(self, step):
        from procgen.theory.laws import marginal

        if self.law is None:
            return super().marginal(step)
        at = np.array([step], np.int64)
        if not self.body.sources:
            law = self.law(float(mean_at(self.body, at)[0]))
            return less(law, law.mean()) if atoms_of(law) else Centred(law)
        if not self.discrete:
            return super().marginal(step)
        mean = float(mean_at(self.level, at)[0])
        if not mean < LARGEST:
            raise Unknown(f"its mean is {mean:.3g}: less that, one count is no longer told from the next")
        return Centred(Compound(self.law, marginal(self.body, step)), mean)


class Stating:
    """The part of an Axis where terms state what they know themselves."""

    space: Space

    @property
    def name(self) -> str:
        """The term at work, as reasons name it."""
        return self.space.name

    def source(self, key: str, law: Any, sd: float) -> Expression:
        raise NotImplementedError

    def process(self, process: Process, mean: Known | None = None) -> Expression:
        raise NotImplementedError

    def blocks(self, key: str, driver: Any, numbers: Any, size: int, circular: bool) -> Expression:
        """Blocks of given numbers from starts that the stream `key` of a law draws; offers `block_start`."""
        of = Blocks(numbers, size, circular)
        why = f"a new block every {size} steps in {self.name}" if size > 1 else ""
        mean = of.mean if np.ptp(of.means) > 0.0 else of.level
        more = {"law": of.law, "moment": of.moment, "lumpy": True, "cycles": why}
        x = self.stated(key, driver, mean, of.covariance, period=size, **more)
        (drawn,) = x.sources

        def together(t: Steps, s: Steps) -> np.ndarray:
            return np.where(t // size == s // size, (of.starts**2 - 1.0) / 12.0, 0.0)

        start = Stated(self.name, drawn.detail.ingredients, together, lumpy=True, cycles=why)
        return markov.offering(x, {"block_start": self.process(start, known.constant((of.starts - 1.0) / 2.0))})

    def stated(
        self, key: str, driver: Any, mean: Any, covariance: Covariance, period: float | None = None, **more: Any
    ) -> Expression:
        """A process driven by the stream `key` of a law, of which all that is known is said.

        mean: a number, or a function of int64 steps. covariance: of two arrays of steps of one shape. Further, where
        known, `law`: function of a step, the frozen SciPy law of the value; `moment`: function (t, a, s, b) for
        E (x(t) - E x)^a (x(s) - E x)^b; `gaussian`, `discrete` (whole numbers), `lumpy` (some values have a chance of
        their own); `grows` or `varies`: why its variance does; `cycles`: why it repeats every `period` steps.
        """
        if callable(mean):
            path = known.observed(("stated", self.name), mean, self.space.horizon, self.name, period)
        else:
            path = known.constant(float(mean))
        return self.process(Stated(self.name, (self.source(key, driver, 1.0),), covariance, **more), path)

    def pulled(self, noise: Expression, rate: float, clock: Any, past: float | None) -> Expression:
        """x(t) = e^(-rate D) x(t-1) + r(D) a(t) over steps of the lengths D that a clock tells, stationary.

        r(D)^2 = (1 - e^(-2 rate D)) / (1 - e^(-2 rate)), a(t) the normal shock of a step of length 1. With `past` it
        leaves from this value at step -1.
        """
        path = known.constant(0.0)
        if past:
            note = f"{self.name} {LEAVES}"
            key = ("pulled", self.name, rate, past)
            path = known.whole(key, lambda t: forecast(rate, clock, past, t), note=note, settles=True)
        return self.process(Pulled(self.name, noise, rate, clock, past is not None), path)

    def drawn(
        self,
        key: str,
        driver: Any,
        body: Expression,
        mean: Sequence[float],
        central: Sequence[Sequence[float]],
        given: Callable[[float], Any] | None = None,
        discrete: bool = False,
        lumpy: bool = False,
        highest: float = np.inf,
        beside: Expression | None = None,
        together: Sequence[float] | None = None,
    ) -> Expression:
        """Values drawn from the stream `key` of a law, independently from step to step given a body.

        Their mean, and their central moments of orders 2, 3 and 4, are polynomials in the body (coefficients, lowest
        power first); `given` makes the frozen SciPy law at a value of the body; `highest` is the order below which
        moments exist. `beside` is what else is drawn with them; `together` is the covariance of both at a step given
        the body, a polynomial in it, where both are drawn given the same body. None: it has no closed form.
        """
        level = polynomial(body, mean)
        path = _mean_path(level, self.name)
        shocks = self.source(key, driver, 1.0)
        shocks = shocks if beside is None else shocks + beside
        process = Drawn(self.name, shocks, body, level, path, central, given, discrete, lumpy)
        process.highest_moment = float(highest)
        if beside is not None and together is not None:
            for source in beside.sources:
                if isinstance(source.detail, Drawn):
                    process.together[id(source.detail)] = polynomial(body, together)
        return self.process(process, path)

    def inflated(self, passes: Expression, body: Expression, share: float) -> Expression:
        """A body where `passes` is 1, which it is with probability 1 - share, and 0 where it is 0."""

        def law(step: int) -> Any:
            from procgen.theory.laws import marginal

            inner = marginal(body, step)
            if getattr(inner, "spacing", 0.0):
                return Inflated(inner, share)
            return Lumped((share, 1.0 - share), (Point(0.0), inner))

        return replace(product(self.space, [passes, body]), law=law)


def _mean_path(level: Expression, name: str) -> Known:
    """E of an expression at each step, as a known path; recognised where it is constant."""
    if not level.terms:
        return level.mean_path
    if judge(level).covariance_stationary and level.mean_path.value is not None:
        return known.constant(float(mean_at(level, np.zeros(1, np.int64))[0]))
    paths = [level.mean_path, *(path for term in level.terms for path in term.knowns)]
    periods = [path.periods for path in paths if path.periods is not None]
    still = all(form.is_plain for term in level.terms for form in (*term.factors, term.exponent)) and not any(
        term.summed for term in level.terms
    )
    cycle = frozenset().union(*periods) if still and len(periods) == len(paths) else None
    notes = known.said(note for path in paths for note in path.notes) or f"the mean moves in {name}"
    return known.whole(("mean of", name), lambda steps: mean_at(level, np.asarray(steps, np.int64)), cycle, notes)


def polynomial(x: Expression, coefficients: Sequence[float]) -> Expression:
    """A polynomial of an expression, lowest power first."""
    total = Expression(x.space, known.constant(float(coefficients[0])))
    for power, c in enumerate(coefficients[1:], start=1):
        if c:
            total = total + (x if power == 1 else product(x.space, [x] * power)) * float(c)
    return total


def powers_of(process: Process, factors: list[tuple[Linear, int]], side: int) -> tuple[int, float, int]:
    """How often a process itself is multiplied on a side, times what number, and how many steps ago it is."""
    forms = [form for form, at in factors if at == side]
    keys = [(key, c) for form in forms for key, c in form.items()]
    single = len(keys) == len(forms) and all(base_of(key).source.detail is process for key, _ in keys)
    delays = {key.delay for key, _ in keys if isinstance(key, At) and not key.base.phi}
    if not single or len(delays) > 1 or any(not isinstance(key, At) for key, _ in keys):
        raise Unknown(f"moments of {process.name} at three steps, or with what it depends on, are not known")
    return len(forms), float(np.prod([c for _, c in keys])), min(delays, default=0)


def less(law: Any, mean: float) -> Any:
    """A law less its mean."""
    from procgen.theory.laws import Affine

    return Affine(law, -float(mean), 1.0)


def alone_of(process: Any, source: Any) -> Expression:
    """A process as an expression, without its mean."""
    return alone(process.ingredients[0].space, source)
