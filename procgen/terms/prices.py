"""Prices: geometric Brownian motion, and with jumps as by Merton."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.jumps import Jumps
from procgen.chance.kernel import kernel
from procgen.chance.laws import LAWS, Normal
from procgen.chance.portable import exp, log
from procgen.chance.tables import Poisson, uniforms
from procgen.spec.declare import Parameter, Real, Record
from procgen.terms.base import Ahead, Draw, Term, Unknown, number, signed
from procgen.terms.jumps import Jumped, law_of
from procgen.terms.support import POSITIVE
from procgen.terms.walk import RandomWalk

UNIFORM, NORMAL = LAWS["uniform"](), Normal()
DRIFT = Parameter(
    "drift", "μ", Real(), "growth of its mean: E x[t] = x₀ exp(μt)", default=0.0, unit="1/step", per="rate"
)
SD = Parameter("sd", "σ", Real(above=0), "volatility: standard deviation of the logarithm's shock", per="diffusion")
START = Parameter("start", "x₀", Real(above=0), "value at step 0", default=1.0, unit="series")
COARSE = 0.02  # rounding beyond this share of a step's volatility blurs where the price was
FAR = 4.0  # volatilities: hardly any shock moves a price so far in a step, most jumps do
NO_PAST = "its jumps begin after step 0; lag less"
BEFORE = Parameter(
    "before",
    "",
    Record(Parameter("x", "x₋₁", Real(above=0), "value at step −1", unit="series")),
    "where it leaves from; then step 0 is one step away from there, and `start` is not used",
    default=None,
)


class Brownian(Term):
    kind = "geometric_brownian_motion"
    smooth = "filter"
    family = "jumps and prices"
    purpose = "a price whose logarithm is a random walk, and whose mean grows at a rate that is stated"
    source = "Samuelson (1965); Black & Scholes (1973)"
    example = "geometric_brownian_motion: {drift: {value: 0.08, per: year}, sd: {value: 0.2, per: year}, start: 100}"
    knows = "mean, covariance and lognormal law at any steps; before step 0 it is followed backwards at random"
    leaves_as = "exp: [{random_walk: {sd: σ, drift: μ − σ²/2}}]"
    correlates = True
    parameters: ClassVar[tuple[Parameter, ...]] = (DRIFT, SD, START)

    def __init__(self, values):
        super().__init__(values)
        drift = self.drift - self.sd * self.sd / 2.0
        self.walk = RandomWalk({"sd": self.sd, "drift": drift, "start": 0.0, "before": None})

    def draws(self):
        return (Draw("innovation", NORMAL),)

    def reach(self, head):
        return (head,)

    def begin(self, before):
        logs, state = self.walk.begin(_Scaled(before, self.sd))
        return None if logs is None else self.start * exp(logs), state

    def recurse(self, inputs, state, at):
        logs, state = self.walk.recurse((self.sd * inputs[0],), state, at)
        return self.start * exp(logs, out=logs), state

    def invert(self, values, known, state, at):
        if not np.all(values > 0.0):
            return Unknown("some values are not above 0, which an exponential always is")
        shocks, state = self.walk.invert(log(values / self.start), known, state, at)
        return shocks / self.sd, state

    def ahead(self, steps, state, noise):
        shock = Ahead(noise.mean, self.sd**2 * noise.variance)
        logs = self.walk.ahead(steps, state, shock)
        mean = self.start * np.exp(logs.mean + logs.variance / 2.0)
        return Ahead(mean, mean * mean * np.expm1(logs.variance))

    def support(self, *inputs):
        return POSITIVE

    def moments(self, axis, *inputs):
        noise = axis.source(self.address, NORMAL, self.sd)
        return axis.walk(noise, self.walk.drift, 0.0).exp() * self.start

    def equation(self, *inputs):
        drift = signed(self.walk.drift, "")
        return f"ln x[t] = ln x[t−1] {drift} + {number(self.sd)} z[t],  x[0] = {number(self.start)},  z normal"


class _Scaled:
    """A `Before` whose inputs are shocks of a standard deviation."""

    def __init__(self, before, sd):
        self.head, self.inputs = before.head, tuple(sd * rows for rows in before.inputs)
        self.peek = lambda i: sd * before.peek(i)


@kernel
def jumping(z, jumps, size, drift, sd, mean, spread, x, out):
    """Sums from x on of drift + σ z[t] and of the jumps of a step, m each with the standard deviation δ."""
    for t in range(z.shape[0]):
        x = x + (drift + sd * z[t] + (jumps[t] * mean + np.sqrt(jumps[t]) * (spread * size[t])))
        out[t] = x
    return x


class Merton(Term):
    kind = "merton"
    smooth = "filter"
    family = "jumps and prices"
    purpose = "a price that moves by many small shocks and now and then by a jump"
    source = "Merton (1976)"
    example = (
        "merton: {drift: {value: 0.08, per: year}, sd: {value: 0.2, per: year}, rate: {value: 6, per: year}, "
        "jump_mean: -0.02, jump_sd: 0.05, start: 100}"
    )
    knows = "mean, covariance, and the law at a step, which is a mixture of lognormal ones"
    correlates = True
    outputs = ("jumps",)
    no_past = NO_PAST
    leaves_from_last = True
    parameters: ClassVar[tuple[Parameter, ...]] = (
        DRIFT,
        SD,
        Parameter("rate", "λ", Real(above=0, at_most=1000), "mean number of jumps a step", unit="1/step", per="rate"),
        Parameter("jump_mean", "m", Real(at_least=-5, at_most=5), "mean of the logarithm's jump", default=0.0),
        Parameter("jump_sd", "δ", Real(above=0, at_most=5), "standard deviation of the logarithm's jump"),
        START,
        BEFORE,
    )

    @property
    def level(self):
        """The known value that it leaves from: that of step −1, or of step 0."""
        return self.start if self.before is None else self.before["x"]

    @property
    def moved(self):
        """Steps that it has moved at step 0."""
        return 0 if self.before is None else 1

    def draws(self):
        return (Draw("innovation", NORMAL), Draw("count", UNIFORM), Draw("size", NORMAL))

    def past(self):
        return self.moved

    def reach(self, head):
        return (0,) * 3

    def begin(self, before):
        if self.before is None:
            return None, {}
        return np.full((before.head, 1), float(self.level)), {"x": np.zeros((1, 1))}

    def step_drift(self):
        """What the logarithm gains in a step without shock and jump: its jumps are paid for in the mean."""
        each = float(exp(self.jump_mean + self.jump_sd * self.jump_sd / 2.0)) - 1.0
        return self.drift - self.sd * self.sd / 2.0 - self.rate * each

    def recurse(self, inputs, state, at):
        z, count, size = inputs
        jumps, first = Poisson(self.rate).counts(uniforms(count)), int("x" not in state)
        logs = np.empty_like(jumps)
        logs[:first], jumps[:first] = 0.0, 0.0  # step 0 is the start itself
        x = np.zeros(jumps.shape[1]) + (0.0 if first else state["x"][0])
        numbers = self.step_drift(), self.sd, self.jump_mean, self.jump_sd
        x = jumping(*(rows[first:] for rows in (z, jumps, size)), *numbers, x, logs[first:])
        prices = exp(logs, out=logs)
        return {"": np.multiply(prices, self.level, out=prices), "jumps": jumps}, {"x": x[None, :]}

    def change(self, steps=1):
        """The law of the logarithm's change over some steps."""
        spread = self.sd * float(np.sqrt(float(steps)))
        return Jumps(self.rate * steps, self.jump_mean, self.jump_sd, self.step_drift() * steps, spread)

    def unranked(self):
        return ""

    def rank(self, values, cell, known, state, at):
        if np.max((cell[1] - cell[0]) / values) > COARSE * self.sd:
            return Unknown(f"values of {self.address} are rounded too coarsely for the change of a step")
        logs, law = np.log(values), law_of(self.change())
        first = self._log_before(values) if state is None else state["x"]
        before = np.concatenate([first, logs[:-1]])
        lower, upper = (law.cdf(np.log(edge) - before) for edge in cell)
        return (lower, upper), {"x": logs[-1:]}

    def _log_before(self, values):
        """The logarithm at step −1 where it is known, else NaN."""
        return np.full((1, values.shape[1]), np.log(self.level) if self.moved else np.nan)

    @property
    def watched(self):
        return (f"changes beyond {FAR:g}σ",)

    def shown(self, output):
        return Jumped(self.rate, first=1 - self.moved) if output == "jumps" else None

    def events(self, values, cell, known, state, at):
        law, logs = law_of(self.change()), np.log(values)
        first = self._log_before(values) if state is None else state["x"]
        moved = np.abs(np.diff(np.concatenate([first, logs]), axis=0) - self.step_drift())
        beyond = law.cdf(self.step_drift() - FAR * self.sd) + law.sf(self.step_drift() + FAR * self.sd)
        return ((moved > FAR * self.sd, np.where(np.isnan(moved), np.nan, beyond)),)

    def ahead(self, steps, state, *inputs):
        first = 1 if "x" in state else 0
        count = np.arange(first, first + len(steps), dtype=float)[:, None]
        now = np.exp(state["x"]) if "x" in state else np.ones((1, 1))
        mean = self.level * now * np.exp(self.drift * count)
        return Ahead(mean, mean * mean * np.expm1(self._growth() * count))

    def _growth(self):
        """How fast E x² outgrows (E x)²: σ² + λ E (exp J − 1)²."""
        once = float(exp(self.jump_mean + self.jump_sd * self.jump_sd / 2.0)) - 1.0
        twice = float(exp(2.0 * self.jump_mean + 2.0 * self.jump_sd * self.jump_sd)) - 1.0
        return self.sd * self.sd + self.rate * (twice - 2.0 * once)

    def support(self, *inputs):
        return POSITIVE

    def moments(self, axis, *inputs):
        def mean(steps):
            steps = steps + self.moved
            return np.where(steps < 0, np.nan, self.level * np.exp(self.drift * steps))

        def covariance(t, s):
            return mean(t) * mean(s) * np.expm1(self._growth() * (np.minimum(t, s) + self.moved))

        price = axis.stated(
            self.address, NORMAL, mean, covariance, grows=f"{self.address} moves on from where it is",
            law=lambda step: self.change(step + self.moved).distribution(self.level),
        )  # fmt: skip
        poisson = (0.0, 1.0), (0.0, 1.0), (0.0, 1.0, 3.0)
        rate, key = axis.known(self._rate_at), f"{self.address}.jumps"
        jumps = axis.drawn(key, UNIFORM, rate, (0.0, 1.0), poisson, discrete=True, beside=price)
        return axis.offering(price, jumps=jumps)

    def _rate_at(self, steps):
        return np.where(steps < 1 - self.moved, 0.0, self.rate)

    def equation(self, *inputs):
        jump = f"N[t] jumps of N({number(self.jump_mean)}, {number(self.jump_sd)}²)"
        step = f"ln x[t−1] {signed(self.step_drift(), '')} + {number(self.sd)} z[t] + {jump}"
        begins = f"x[{number(-self.moved)}] = {number(self.level)}"
        return f"ln x[t] = {step},  N Poisson of mean {number(self.rate)},  {begins}"
