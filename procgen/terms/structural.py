"""Structural components: levels, slopes and seasons that drift, by Gaussian disturbances of their own.

A disturbance is a stream of its own role (`level`, `slope`, `noise`), so that switching one off moves no other.
States are given at step 0, as for a random walk. The stochastic cycle is in `cycle.py`.
"""

from __future__ import annotations

from dataclasses import replace
from typing import ClassVar

import numpy as np

from procgen.chance.kernel import is_compiling, kernel
from procgen.chance.laws import Normal
from procgen.spec.declare import REQUIRED, Choice, Parameter, Real, Reals, Record, Span
from procgen.terms.arima import LONGEST, SHOCK_SD, Integrated, filled
from procgen.terms.arma import Arma
from procgen.terms.base import LAW, PAST_VALUES, Ahead, Draw, Term, number
from procgen.terms.walk import accumulate

NORMAL = Normal()
WIDE = 256  # paths from which a row at a time is quicker than a tile at a time


@kernel
def drifted(a, b, noise, level_sd, slope_sd, noise_sd, level, slope, x, levels, slopes):
    """Value, level and slope from the level and slope before them; returns the last of both."""
    for t in range(x.shape[0]):
        level = level + (slope + level_sd * a[t])
        slope = slope + slope_sd * b[t]
        x[t] = level + noise_sd * noise[t]
        levels[t] = level
        slopes[t] = slope
    return level, slope


def spread(name, symbol, of, default=0.0, per=None, no_per=None):
    """The standard deviation of a disturbance; 0 where there is none."""
    meaning = f"standard deviation of the disturbance of the {of} at a step"
    return Parameter(name, symbol, Real(at_least=0), meaning, default=default, unit="series", per=per, no_per=no_per)


NOISE_SD = Parameter(
    "noise_sd", "σ_ε", Real(at_least=0), "standard deviation of the noise around the level", default=0.0, unit="series"
)
START = Parameter("start", "μ₀", Real(), "level at step 0", default=0.0, unit="series")


class Disturbed(Term):
    """A term of several Gaussian disturbances, each with a role and a standard deviation; those of 0 are not drawn."""

    def disturbances(self) -> dict[str, float]:
        """The standard deviation of each role, in order."""
        raise NotImplementedError

    def draws(self):
        return tuple(Draw(role, NORMAL) for role, sd in self.disturbances().items() if _moves(sd))

    def scaled(self, inputs):
        """The disturbances by role, from the shocks that were drawn; zeros for the others."""
        found, left = {}, list(inputs)
        for role, sd in self.disturbances().items():
            found[role] = sd * left.pop(0) if _moves(sd) else np.zeros((len(inputs[0]), 1))
        return found

    def sources(self, axis):
        """The disturbances by role as expressions; those of 0 are known to be 0."""
        return {
            role: axis.source(f"{self.address}.{role}", NORMAL, sd) if sd else axis.known(_zero, constant=True)
            for role, sd in self.disturbances().items()
        }

    def reach(self, head):
        return (head,) * self.arity

    def ahead(self, steps, state, *inputs):
        count = max([1, *(part.shape[1] for part in state.values())])
        mean = self._alone(steps, state, np.zeros((len(steps), count)), None)
        still = {name: np.zeros((len(part), 1)) for name, part in state.items()}
        pulses = np.concatenate([np.zeros((len(steps), 1)), np.eye(len(steps))], axis=1)
        variance = np.zeros((len(steps), 1))
        for i, shock in enumerate(inputs):
            x = self._alone(steps, still, pulses, i)
            response = x[:, 1:] - x[:, :1]  # the first column is what no shock gives
            variance = variance + (response * response) @ shock.variance
        return Ahead(mean, variance)

    def _alone(self, steps, state, shocks, which):
        """Values when only the input `which` has shocks, and all others none."""
        still = np.zeros_like(shocks)
        values, _ = self.recurse([shocks if i == which else still for i in range(self.arity)], state, steps)
        return values[""]


class LocalLevel(Disturbed):
    kind = "local_level"
    smooth = "filter"
    family = "linear"
    purpose = "a level that walks, seen through noise; the level is a hidden output"
    source = "Harvey (1989), sec. 2.3.1 and 4.1; Durbin & Koopman (2012), ch. 2"
    example = "local_level: {level_sd: 38.3, noise_sd: 122.9, start: 1120}"
    knows = "mean and covariance at any steps, of its level too; Gaussian law"
    outputs: ClassVar[tuple[str, ...]] = ("level",)
    by_rows: ClassVar[tuple[str, ...]] = ("level_sd", "noise_sd", "start")
    begins_by_rows = True
    parameters: ClassVar[tuple[Parameter, ...]] = (
        spread("level_sd", "σ_η", "level", default=REQUIRED, per="diffusion"),
        NOISE_SD,
        START,
    )

    @classmethod
    def check(cls, values):
        names = [name for name in ("level_sd", "slope_sd", "noise_sd") if name in values]
        if not any(values[name] for name in names):
            yield names[0], f"expected a standard deviation above 0 among {', '.join(names)}; or use a trend"

    def disturbances(self):
        return {"level": self.level_sd, "noise": self.noise_sd}

    def begin(self, before):
        part = {role: x[len(x) - before.head :] for role, x in self.scaled(before.inputs).items()}
        if not before.head:
            return None, {}
        now = self.scaled([before.peek(i) for i in range(self.arity)])
        return self._before(part, now, before.head), {}

    def _before(self, part, now, head):
        """Values before step 0, followed backwards from the states there; `now` are the disturbances at step 0."""
        level = _backwards(self.start, [now["level"][0], *part["level"][::-1]], head)
        return {"": level + part["noise"], "level": level}

    def recurse(self, inputs, state, at):
        part = self.scaled(inputs)
        level, last = _walked(part["level"], state.get("level"), self.start, inputs[0])
        return {"": level + part["noise"], "level": level}, {"level": last}

    def moments(self, axis, *inputs):
        part = self.sources(axis)
        level = axis.walk(part["level"], 0.0, self.start)
        return with_outputs(level + part["noise"], level=level)

    def equation(self, *inputs):
        return f"x[t] = μ[t] + ε[t],  μ[t] = μ[t−1] + η[t],  μ[0] = {number(self.start)},  {self._spreads()}"

    def _spreads(self):
        signs = {"level": "η", "slope": "ζ", "noise": "ε"}
        return ", ".join(f"sd {signs[role]} = {number(sd)}" for role, sd in self.disturbances().items())


class LocalLinearTrend(LocalLevel):
    kind = "local_linear_trend"
    smooth = "filter"
    purpose = "a level that walks with a slope that walks too, seen through noise; level and slope are hidden outputs"
    source = "Harvey (1989), sec. 2.3.2"
    example = "local_linear_trend: {level_sd: 0.5, slope_sd: 0.02, noise_sd: 1, start: 100, slope: 0.3}"
    knows = "mean and covariance at any steps, of its level and slope too; Gaussian law"
    outputs = ("level", "slope")
    by_rows = ("level_sd", "slope_sd", "noise_sd", "start", "slope")
    parameters: ClassVar[tuple[Parameter, ...]] = (
        spread("level_sd", "σ_η", "level", per="diffusion"),
        spread("slope_sd", "σ_ζ", "slope", no_per="a slope is itself a change a step, so its spread scales otherwise"),
        NOISE_SD,
        START,
        Parameter("slope", "β₀", Real(), "slope at step 0", default=0.0, unit="series", per="rate"),
    )

    def disturbances(self):
        return {"level": self.level_sd, "slope": self.slope_sd, "noise": self.noise_sd}

    def _before(self, part, now, head):
        slope = _backwards(self.slope, [now["slope"][0], *part["slope"][::-1]], head)
        steps = [s + a for s, a in zip(slope[::-1], [now["level"][0], *part["level"][::-1]], strict=False)]
        level = _backwards(self.start, steps, head)
        return {"": level + part["noise"], "level": level, "slope": slope}

    def recurse(self, inputs, state, at):
        if inputs[0].shape[1] < WIDE and not is_compiling():
            return self._summed(inputs, state)
        spreads, left = self.disturbances(), list(inputs)
        a, b, noise = (left.pop(0) if _moves(sd) else np.zeros((len(inputs[0]), 1)) for sd in spreads.values())
        x, levels, slopes = (np.empty_like(inputs[0]) for _ in range(3))
        first = 0 if state else 1  # step 0 is the start
        if state:
            level, slope = (state[name][0] + np.zeros(x.shape[1]) for name in ("level", "slope"))
        else:
            level, slope = (np.zeros(x.shape[1]) + start for start in (self.start, self.slope))
            levels[0], slopes[0], x[0] = level, slope, level + self.noise_sd * noise[0]
        level, slope = drifted(
            a[first:], b[first:], noise[first:], *spreads.values(), level, slope, x[first:], levels[first:],
            slopes[first:],
        )  # fmt: skip
        return {"": x, "level": levels, "slope": slopes}, {"level": level[None, :], "slope": slope[None, :]}

    def _summed(self, inputs, state):
        """`recurse` by one sum after the other, which takes less of the interpreter for a few paths."""
        part = self.scaled(inputs)
        slope, last_slope = _walked(part["slope"], state.get("slope"), self.slope, inputs[0])
        before = state["slope"] if "slope" in state else np.zeros((1, 1))  # not used: step 0 is the start
        earlier = np.concatenate([np.broadcast_to(before, (1, slope.shape[1])), slope[:-1]])
        level, last = _walked(earlier + part["level"], state.get("level"), self.start, inputs[0])
        return {"": level + part["noise"], "level": level, "slope": slope}, {"level": last, "slope": last_slope}

    def moments(self, axis, *inputs):
        part = self.sources(axis)
        slope = axis.walk(part["slope"], 0.0, self.slope)
        level = (slope.lag(1) + part["level"]).integrate(self.start)
        return with_outputs(level + part["noise"], level=level, slope=slope)

    def equation(self, *inputs):
        return (
            "x[t] = μ[t] + ε[t],  μ[t] = μ[t−1] + β[t−1] + η[t],  β[t] = β[t−1] + ζ[t],  "
            f"μ[0] = {number(self.start)},  β[0] = {number(self.slope)},  {self._spreads()}"
        )


class SeasonalRandomWalk(Integrated):
    kind = "seasonal_random_walk"
    smooth = "filter"
    family = "linear"
    purpose = "a seasonal pattern that drifts: the value of a season ago plus a shock; or seasons sum to shocks"
    source = "Harvey (1989), sec. 2.3.4 for the dummy form; Box & Jenkins (1970), ch. 9"
    example = "seasonal_random_walk: {period: 4, sd: 0.3, start: [5, -2, -4, 1]}"
    knows = "mean and covariance at any steps; Gaussian law for normal shocks"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("period", "s", Span(), "length of a season, a whole number of steps", unit="steps"),
        Parameter(
            "form",
            "",
            Choice("walk", "dummy"),
            "`walk`: x[t] = x[t−s] + a[t]; `dummy`: any s values in a row sum to a shock, so the level stays",
            default="walk",
        ),
        Parameter(
            "start",
            "x₀",
            Reals(),
            "the pattern of the first season before its shocks, which come from step 1 on; 0 when absent",
            default=None,
            unit="series",
        ),
        SHOCK_SD,
        LAW,
        Parameter(
            "before",
            "",
            Record(PAST_VALUES),
            "what came before step 0; then step 0 is the first random step, and `start` is not used",
            default=None,
        ),
    )

    @classmethod
    def check(cls, values):
        period, start, before = values["period"], values["start"] or (0.0,), values["before"]
        if not (period.is_integer() and 2 <= period <= LONGEST):
            yield "period", f"expected a whole number of steps from 2 to {LONGEST:,}, got {number(period)}"
            return
        needs = int(period) - (values["form"] == "dummy")
        if len(start) not in (1, period):
            yield "start", f"expected {number(period)} values, one a step of a season, or one for all, got {len(start)}"
        elif values["form"] == "dummy" and abs(_total(start)) > 1e-9 * max(abs(v) for v in start):
            yield "start", f"expected a pattern that sums to 0, got {number(_total(start))}; subtract its mean"
        if before is not None and len(before["x"]) < needs:
            yield "before", f"expected {needs} past values in `x` (one a lag of the recursion), got {len(before['x'])}"

    def __init__(self, values):
        super().__init__(values)
        self.season = int(self.period)
        self.core = Arma({"sd": 1.0, "total_sd": None, "before": None})
        pattern = filled(self.start, self.season)
        self.pattern = np.array(pattern)
        if self.form == "walk":
            self.delta, self.known = (0.0,) * (self.season - 1) + (1.0,), (*pattern[1:], pattern[0])
        else:
            self.delta, self.known = (-1.0,) * (self.season - 1), (*pattern[2:], pattern[0])

    def path(self, steps, drifting=False):
        """The pattern at any steps, or zeros when `drifting`."""
        return (0.0 if drifting else 1.0) * self.pattern[np.asarray(steps) % self.season]

    def moments(self, axis, noise):
        if self.before is not None:
            return self._given(axis, noise)
        x = noise.integrate(every=self.season)
        if self.form == "dummy":
            x = x.difference()
        return x + axis.known(self.path)

    def equation(self, *inputs):
        if self.form == "walk":
            return ",  ".join([f"x[t] = x[t−{self.season}] + a[t]", *self.shown_past()])
        lags = range(1, self.season)
        shown = [f"− x[t−{i}]" for i in (lags if len(lags) < 4 else (1, 2, lags[-1]))]
        if len(lags) > 3:
            shown.insert(2, "− …")
        return ",  ".join([f"x[t] = {' '.join(shown)} + a[t]".replace("= − ", "= −"), *self.shown_past()])


def _walked(a, state, start, like):
    """The running sum of `a` from its state (from `start` at step 0), and its last row."""
    a = a + np.zeros((1, like.shape[1]))
    if state is None:
        a[0] = start
    last = (np.zeros((1, 1)) if state is None else state)[0] + np.zeros(a.shape[1])
    out = np.empty_like(a)
    return out, accumulate(a, out, last)[None, :]


def _backwards(start, increments, head):
    """A walk at steps −head … −1 from its value at step 0 and its increments at steps 0, −1, …"""
    x, past = np.zeros(increments[0].shape) + start, []
    for a in increments[:head]:
        x = x - a
        past.append(x)
    return np.array(past[::-1]).reshape(len(past), -1)


def with_outputs(x, **outputs):
    """An expression with hidden outputs."""
    return replace(x, outputs={name: lambda value=value: value for name, value in outputs.items()})


def _moves(sd):
    """Whether there is a disturbance of this standard deviation; of a row, on any path."""
    return bool(np.any(np.not_equal(sd, 0.0)))


def _zero(steps):
    return np.zeros(steps.shape)


def _total(values):
    total = 0.0
    for value in values:
        total = total + value
    return total
