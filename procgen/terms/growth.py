"""Deterministic growth: exponential, logistic (an S-curve), and a trend whose slope fades."""

from __future__ import annotations

import numpy as np

from procgen.chance.portable import exp, log
from procgen.spec.declare import Moment, Parameter, Real
from procgen.terms.base import Array, number, signed, steps_since
from procgen.terms.level import Known

LARGEST = 600.0  # exponents are held within ±600: no level that means anything is near e^600


class ExponentialTrend(Known):
    kind = "exponential_trend"
    family = "level and shape"
    purpose = "growth or decay by a constant rate, towards or away from a base"
    source = "common practice, no source"
    example = "exponential_trend: {level: 40, rate: 0.02, base: 10}"
    knows = "mean; no variance"
    parameters = (
        Parameter("level", "c", Real(), "height above the base at step 0", unit="series"),
        Parameter("rate", "r", Real(), "continuous growth rate; below 0 it decays", unit="1/step", per="rate"),
        Parameter("base", "b", Real(), "what it grows away from, or decays to", default=0.0, unit="series"),
    )

    def at(self, steps: Array) -> Array:
        return self.base + self.level * _exp(self.rate * steps.astype(np.float64))

    def equation(self, *inputs):
        return _beside(self.base, signed(self.level, f"exp({number(self.rate)} t)"))


class LogisticTrend(Known):
    kind = "logistic_trend"
    family = "level and shape"
    purpose = "an S-curve from a floor to a capacity"
    source = "Verhulst (1838)"
    example = "logistic_trend: {capacity: 100, rate: 0.15, midpoint: 25}"
    knows = "mean; no variance"
    parameters = (
        Parameter("capacity", "K", Real(), "the level that it grows to", unit="series"),
        Parameter("rate", "r", Real(above=0), "growth rate far below the capacity", unit="1/step", per="rate"),
        Parameter("midpoint", "τ", Moment(), "where it is halfway", unit="steps"),
        Parameter("floor", "b", Real(), "the level that it comes from", default=0.0, unit="series"),
    )

    def at(self, steps: Array) -> Array:
        rest = _exp(self.rate * (self.midpoint - steps.astype(np.float64)))
        return self.floor + (self.capacity - self.floor) / (1.0 + rest)

    def equation(self, *inputs):
        bend = f"/(1 + exp(−{signed(self.rate, steps_since(self.midpoint)).removeprefix('+ ')}))"
        return _beside(self.floor, signed(self.capacity - self.floor, "") + bend)


class DampedTrend(Known):
    kind = "damped_trend"
    family = "level and shape"
    purpose = "a line whose slope fades by a factor each step; before step 0 it is straight"
    source = "Gardner & McKenzie (1985)"
    example = "damped_trend: {level: 50, slope: 2, damping: 0.95}"
    knows = "mean; no variance"
    parameters = (
        Parameter("level", "c", Real(), "value at step 0", default=0.0, unit="series"),
        Parameter("slope", "b", Real(), "change from step 0 to step 1", unit="series", per="rate"),
        Parameter("damping", "φ", Real(above=0, below=1), "factor from one step's slope to the next"),
    )

    def at(self, steps: Array) -> Array:
        t = steps.astype(np.float64)
        gone = 1.0 - _exp(np.maximum(t, 0.0) * log(self.damping))
        return self.level + self.slope * np.where(t < 0.0, t, gone / (1.0 - self.damping))

    def equation(self, *inputs):
        last = self.slope / (1.0 - self.damping)
        return _beside(self.level, signed(last, f"(1 − {number(self.damping)}^t)"))


def _beside(level: float, rest: str) -> str:
    """A level and what is added to it; a level of 0 is not written."""
    return f"x[t] = {number(level)} {rest}" if level else f"x[t] = {rest.removeprefix('+ ')}"


def _exp(x: Array) -> Array:
    return exp(np.minimum(np.maximum(x, -LARGEST), LARGEST))
