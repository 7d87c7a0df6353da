"""Functions of the value: hinge, clip, abs, power, sigmoid, logit, and the larger or smaller of two bodies."""

from __future__ import annotations

import numpy as np

from procgen.chance.portable import exp, log
from procgen.spec.declare import Body, Parameter, Real, Whole
from procgen.terms.base import Ahead, Array, Term, Unknown, number
from procgen.terms.combine import OF
from procgen.terms.support import INF, Support, either, finite

LARGEST = 700.0  # where exp overflows; a sigmoid is flat long before
TOLD = 16 * 2.0**-52  # of a level's size: as far from it, double precision tells values apart


class Elementwise(Term):
    """A function of one body's value at the same step: subclasses give `of_value`."""

    family = "combination"
    composition = True

    def of_value(self, x: Array) -> Array:
        """The function, elementwise, made of portable operations."""
        raise NotImplementedError

    def reach(self, head):
        return (head,)

    def begin(self, before):
        return self.of_value(before.inputs[0][len(before.inputs[0]) - before.head :]), {}

    def recurse(self, inputs, state, at):
        return self.of_value(inputs[0]), state

    def ahead(self, steps, state, body):
        if np.any(body.variance != 0.0):
            return Unknown(f"{self.kind} bends the law of its body: mean and variance do not pass through")
        return Ahead(self.of_value(body.mean), body.variance)


class Hinge(Elementwise):
    kind = "hinge"
    purpose = "how far its body is above a threshold, or below one, and 0 on the other side: degree-hours"
    source = "Price (1958) and Plackett (1954) for the covariance"
    example = "hinge: {of: [{ar: {phi: 0.9, total_sd: 4}}, {constant: 12}], below: 15}"
    knows = "mean and covariance of a Gaussian or known body"
    parameters = (
        OF,
        Parameter("above", "θ", Real(), "the threshold above which it counts", default=None, unit="series"),
        Parameter("below", "θ", Real(), "the threshold below which it counts", default=None, unit="series"),
    )

    @classmethod
    def check(cls, values):
        if (values["above"] is None) == (values["below"] is None):
            yield "above", "expected `above` or `below`, exactly one of them; for both, add up two hinges"

    def of_value(self, x):
        return np.maximum(x - self.above if self.below is None else self.below - x, 0.0)

    def support(self, body):
        away = body + finite([-self.above]) if self.below is None else body * finite([-1.0]) + finite([self.below])
        return away.within(0.0, INF)

    def moments(self, axis, body):
        if self.below is None:
            return axis.hinge(body + axis.level(-self.above))
        return axis.hinge(body * -1.0 + axis.level(self.below))

    def equation(self, body):
        side = f"{body}[t] − {number(self.above)}" if self.below is None else f"{number(self.below)} − {body}[t]"
        return f"y[t] = max({side}, 0)"


class Clip(Elementwise):
    kind = "clip"
    purpose = "its body held within bounds: what is beyond one is put on it"
    source = "Tobin (1958) for the mean; Price (1958) and Plackett (1954) for the covariance"
    example = "clip: {of: [{ar: {phi: 0.8, total_sd: 2}}], low: -1, high: 3}"
    knows = "mean and covariance of a Gaussian or known body"
    parameters = (
        OF,
        Parameter("low", "l", Real(), "the least value; none when absent", default=None, unit="series"),
        Parameter("high", "h", Real(), "the largest value; none when absent", default=None, unit="series"),
    )

    @classmethod
    def check(cls, values):
        low, high = values["low"], values["high"]
        if low is None and high is None:
            yield "low", "expected `low`, `high` or both, got none of them; give one"
        elif low is not None and high is not None and not low < high:
            yield "low", f"expected low below high, got {number(low)} and {number(high)}; exchange them"

    def of_value(self, x):
        if self.low is not None:
            x = np.maximum(x, self.low)
        return x if self.high is None else np.minimum(x, self.high)

    def support(self, body):
        return body.within(-INF if self.low is None else self.low, INF if self.high is None else self.high)

    def moments(self, axis, body):
        return axis.bounded(body, self.low, self.high)

    def equation(self, body):
        text = f"{body}[t]" if self.low is None else f"max({body}[t], {number(self.low)})"
        return f"y[t] = {text if self.high is None else f'min({text}, {number(self.high)})'}"


class Abs(Elementwise):
    kind = "abs"
    smooth = "bend"
    purpose = "the size of its body, without its sign"
    source = "Leone, Nelson & Nottingham (1961) for the folded normal law; Price (1958) for the covariance"
    example = "abs: [{ar: {phi: 0.7, sd: 1}}, {constant: 0.5}]"
    knows = "mean and covariance of a Gaussian or known body"
    parameters = (OF,)

    def of_value(self, x):
        return np.abs(x)

    def support(self, body):
        if body.values is not None:
            return finite(abs(x) for x in body.values)
        return either([body, body * finite([-1.0])]).within(0.0, INF)

    def moments(self, axis, body):
        return axis.folded(body)

    def equation(self, body):
        return f"y[t] = |{body}[t]|"


class Power(Elementwise):
    kind = "power"
    smooth = "bend"
    purpose = "its body to a whole power"
    source = "Isserlis (1918) for the moments"
    example = "power: {of: [{ar: {phi: 0.6, sd: 1}}, {constant: 2}], exponent: 2}"
    knows = "mean and covariance of a Gaussian body; the law at a step of one whose law is known"
    parameters = (OF, Parameter("exponent", "n", Whole(at_least=2, at_most=6), "the power"))

    def of_value(self, x):
        y = x
        for _ in range(self.exponent - 1):
            y = y * x
        return y

    def support(self, body):
        if self.exponent % 2 and not body.everything:
            return body.mapped(self.of_value)
        return Support(low=0.0) if self.exponent % 2 == 0 else body

    def moments(self, axis, body):
        return axis.power(body, self.exponent)

    def equation(self, body):
        return f"y[t] = {body}[t]^{self.exponent}"


class Sigmoid(Elementwise):
    kind = "sigmoid"
    purpose = "its body squeezed between two levels by an S-curve: shares, filling levels, duty cycles"
    source = "Mehler (1866) for the covariance by Hermite series"
    example = "sigmoid: {of: [{ar: {phi: 0.9, total_sd: 1}}], low: 0, high: 100}"
    knows = "mean and covariance of a Gaussian or known body, to 1e-10 of its variance"
    blurs = True
    parameters = (
        OF,
        Parameter("low", "l", Real(), "the level that it comes from", default=0.0, unit="series"),
        Parameter("high", "h", Real(), "the level that it goes to", default=1.0, unit="series"),
    )

    @classmethod
    def check(cls, values):
        return _low_below_high(values)

    def of_value(self, x):
        rest = exp(np.minimum(np.maximum(-x, -LARGEST), LARGEST))
        return self.low + (self.high - self.low) / (1.0 + rest)

    @property
    def told(self):
        width = self.high - self.low
        end = min(float(log(width / (TOLD * max(abs(self.low), width)))), LARGEST)
        return -end if self.low else -LARGEST, end

    def invert(self, values, known, state, at):
        if np.any((values <= self.low) | (values >= self.high)):
            return Unknown(f"some values are not between {number(self.low)} and {number(self.high)}")
        odds, (least, most) = _log_odds(values, self.low, self.high), self.told
        if np.any((odds <= least) | (odds >= most)):
            levels = f"{number(self.low)} or {number(self.high)}"
            return Unknown(f"some values are nearer to {levels} than double precision tells apart")
        return odds, {}

    def support(self, body):
        return Support(float(self.low), float(self.high))

    def moments(self, axis, body):
        return axis.squeezed(body, self.of_value, float(self.low), float(self.high), self.told)

    def equation(self, body):
        return f"y[t] = {number(self.low)} + {number(self.high - self.low)}/(1 + exp(−{body}[t]))"


class Logit(Elementwise):
    kind = "logit"
    smooth = "bend"
    purpose = "the log odds of its body between two levels: what undoes a sigmoid"
    source = "Berkson (1944)"
    example = "logit: [{sigmoid: [{ar: {phi: 0.9, total_sd: 1}}]}]"
    knows = "values of a known body; no closed moments of a random one"
    blurs = True
    parameters = Sigmoid.parameters

    @classmethod
    def check(cls, values):
        return _low_below_high(values)

    def of_value(self, x):
        return _log_odds(x, self.low, self.high)  # not a number beyond the levels, which a render refuses

    def invert(self, values, known, state, at):
        return Sigmoid.of_value(self, values), {}  # type: ignore[arg-type]

    def moments(self, axis, body):
        return axis.log_odds(body, self.of_value, float(self.low), float(self.high))

    def equation(self, body):
        return f"y[t] = log(({body}[t] − {number(self.low)})/({number(self.high)} − {body}[t]))"


class Larger(Term):
    kind = "max"
    family = "combination"
    purpose = "the larger of two bodies"
    source = "Clark (1961)"
    example = "max: {of: [{ar: {phi: 0.7, sd: 1}}], and: [{white_noise: {sd: 2}}]}"
    knows = "mean and covariance of Gaussian or known bodies; the law at a step also of any independent ones"
    composition = True
    parameters = (OF, Parameter("and", "", Body(), "the other body; a list is a sum"))
    sign = 1.0

    def reach(self, head):
        return (head, head)

    def _chosen(self, first, second):
        return np.maximum(first, second) if self.sign > 0 else np.minimum(first, second)

    def begin(self, before):
        return self._chosen(*(rows[len(rows) - before.head :] for rows in before.inputs)), {}

    def recurse(self, inputs, state, at):
        return self._chosen(*inputs), state

    def support(self, first, second):
        both = first | second
        low = max(first.low, second.low) if self.sign > 0 else both.low
        return both.within(low, INF if self.sign > 0 else min(first.high, second.high))

    def moments(self, axis, first, second):
        return axis.larger(first, second, self.sign)

    def equation(self, first, second):
        return f"y[t] = {self.kind}({first}[t], {second}[t])"


class Smaller(Larger):
    kind = "min"
    purpose = "the smaller of two bodies"
    example = "min: {of: [{ar: {phi: 0.7, sd: 1}}], and: [{constant: 0.8}]}"
    sign = -1.0


def _low_below_high(values):
    if not values["low"] < values["high"]:
        low, high = number(values["low"]), number(values["high"])
        yield "low", f"expected low below high, got {low} and {high}; exchange them"


def _log_odds(x: Array, low: float, high: float) -> Array:
    inside = (x > low) & (x < high)
    x = np.where(inside, x, 0.5 * (low + high))
    return np.where(inside, log((x - low) / (high - x)), np.nan)
