"""Continuous-time processes, seen exactly at the steps of the grid."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.portable import exp, lost
from procgen.spec.declare import Parameter, Real, Reals, Record
from procgen.terms.arima import Integrated
from procgen.terms.arma import Arma
from procgen.terms.base import LAW, TOTAL_SD, number, signed, stated


class OrnsteinUhlenbeck(Integrated):
    """dX = κ(m − X)dt + σ dW at steps of length 1: x[t] − m = φ(x[t−1] − m) + a[t], φ = e^(−κ).

    The shock has the variance σ²(1 − φ²)/(2κ), so that a grid of half the step sees the same process.
    """

    kind = "ornstein_uhlenbeck"
    family = "linear"
    purpose = "a level that is pulled back to its mean in continuous time, exact at any length of step"
    source = "Uhlenbeck & Ornstein (1930); Vasicek (1977)"
    example = "ornstein_uhlenbeck: {rate: 0.1, mean: 3, sd: 0.2}"
    knows = "mean, autocovariance at any lag; Gaussian law for normal shocks; strictly stationary"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter(
            "rate",
            "κ",
            Real(above=0),
            "speed of the pull: half of a distance is left after ln 2/κ",
            unit="1/step",
            per="rate",
        ),
        Parameter("mean", "m", Real(), "where it is pulled to", default=0.0, unit="series"),
        Parameter(
            "sd", "σ", Real(above=0), "volatility of the diffusion", default=None, unit="series", per="diffusion"
        ),
        TOTAL_SD,
        LAW,
        Parameter(
            "before",
            "",
            Record(Parameter("x", "x", Reals(), "values before step 0, oldest first", unit="series")),
            "what came before step 0, to leave from a known value instead of the stationary law",
            default=None,
        ),
    )

    by_rows = ("rate", "mean", "sd", "total_sd")

    @classmethod
    def check(cls, values):
        if values["before"] is not None and values["total_sd"] is not None:
            yield "total_sd", "a term that leaves from `before` has no stationary spread; give `sd`"
        if _kept(values["rate"]) >= 1.0:
            yield "rate", "the pull is too weak to be felt in a step; use a random_walk"

    def __init__(self, values):
        super().__init__(values)
        self.core = Arma({"phi": (_kept(self.rate),), "sd": 1.0, "total_sd": None, "before": None})
        self.level = float(self.values["mean"])

    def shock_sd(self):
        share = float(lost(2.0 * self.rate))  # 1 − φ²
        if self.sd is not None:
            return self.sd * float(np.sqrt(share / (2.0 * self.rate)))
        return self.total_sd * float(np.sqrt(share))

    def path(self, steps, drifting=False):
        """The mean, at any steps."""
        return np.full(np.shape(steps), self.level)

    def moments(self, axis, noise):
        if self.before is not None:
            return self._given(axis, noise)
        return self.core.moments(axis, noise) + axis.known(self.path, constant=True)

    def equation(self, *inputs):
        phi, level = number(_kept(self.rate)), f"{number(self.level)} + " if self.level else ""
        inside = f"(x[t−1] {signed(-self.level, '')})" if self.level else "x[t−1]"
        past = "" if self.before is None else f",  {stated('x', self.before['x'][-1:])}"
        return f"x[t] = {level}{phi} {inside} + a[t],  {phi} = exp(−{number(self.rate)}){past}"


def _kept(rate):
    """exp(−rate), the share of a distance that is left after a step."""
    return float(exp(np.array([-rate]))[0])
