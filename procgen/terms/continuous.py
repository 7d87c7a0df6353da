"""Continuous-time processes, seen exactly at the steps of the grid."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.kernel import kernel
from procgen.chance.portable import exp, lost
from procgen.spec.declare import Parameter, Real, Record
from procgen.spec.elapsed import Clock
from procgen.terms.arima import Integrated
from procgen.terms.arma import Arma
from procgen.terms.base import LAW, PAST_VALUES, TOTAL_SD, number, signed, stated, without_gap
from procgen.terms.noise import WhiteNoise
from procgen.terms.rows import plain


@kernel
def pulled(phi, a, x):
    """x[t] = φ[t] x[t−1] + a[t]; the first row of `x` is the value before."""
    for t in range(a.shape[0]):
        x[t + 1] = phi[t] * x[t] + a[t]


class Timed(Arma):
    """x[t] = e^(−κΔ)x[t−1] + r(Δ)a[t] for steps of the lengths Δ, a[t] the shock of a step of length 1.

    r(Δ)² = (1 − e^(−2κΔ))/(1 − e^(−2κ)). Before step 0 all steps have the length 1, so that terms with correlated
    shocks start jointly as others do.
    """

    def __init__(self, rate, clock):
        super().__init__({"phi": (_kept(rate),), "sd": 1.0, "total_sd": None, "before": None})
        self.rate, self.clock = rate, clock

    def _paces(self, at):
        """e^(−κΔ) and r(Δ) of the steps, (steps, 1), or (steps, paths) where rates are rows."""
        gone = self.clock.lengths(at)[:, None] * self.rate
        return exp(-gone), np.sqrt(lost(2.0 * gone) / lost(2.0 * self.rate))

    def recurse(self, inputs, state, at):
        if at is None:  # before step 0
            return super().recurse(inputs, state, at)
        phi, ratio = self._paces(at)
        a = ratio * inputs[0]
        x = np.empty((len(a) + 1, max(a.shape[1], state["x"].shape[1])))
        x[:1] = state["x"]
        pulled(phi, a, x)
        return x[1:], {**state, "x": x[-1:].copy()}

    def invert(self, values, known, state, at):
        values, gap = without_gap(values, 0.0)
        skip = gap + 1 if gap or state is None else int(state["skip"][0])
        past = np.zeros((1, values.shape[1])) if state is None else np.broadcast_to(state["x"], (1, values.shape[1]))
        x, (phi, ratio) = np.concatenate([past, values]), self._paces(at)
        # A step without length, such as the day that a zone skipped, tells nothing of its shock.
        a = np.where(ratio > 0.0, (x[1:] - phi * x[:-1]) / np.where(ratio > 0.0, ratio, 1.0), np.nan)
        a[:skip] = np.nan
        return a, {"x": x[-1:].copy(), "skip": np.array([max(0, skip - len(values))])}


class OrnsteinUhlenbeck(Integrated):
    """dX = κ(m − X)dt + σ dW at steps of length 1: x[t] − m = φ(x[t−1] − m) + a[t], φ = e^(−κ).

    The shock has the variance σ²(1 − φ²)/(2κ), so that a grid of half the step sees the same process.
    """

    kind = "ornstein_uhlenbeck"
    smooth = "filter"
    family = "linear"
    purpose = "a level that is pulled back to its mean in continuous time, exact at any length of step"
    source = "Uhlenbeck & Ornstein (1930); Vasicek (1977); on uneven steps Gillespie (1996)"
    example = "ornstein_uhlenbeck: {rate: 0.1, mean: 3, sd: 0.2}"
    knows = "mean, autocovariance at any steps, also uneven ones; Gaussian law for normal shocks; strictly stationary"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter(
            "rate",
            "κ",
            Real(above=0),
            "speed of the pull: half of a distance is left after ln 2/κ",
            unit="1/step",
            per="rate",
            by_time=True,
        ),
        Parameter(
            "clock",
            "",
            Clock(),
            "whether all steps count alike, or by the time that passes: over weekends, in months of 28 to 31 days, on "
            "days when clocks change, between listed times (where `time` is the default); with `time`, numbers without "
            "`per` are for a step of the mean length, which is also that of the steps before step 0",
            default="steps",
        ),
        Parameter("mean", "m", Real(), "where it is pulled to", default=0.0, unit="series"),
        Parameter(
            "sd",
            "σ",
            Real(above=0),
            "volatility of the diffusion",
            default=None,
            unit="series",
            per="diffusion",
            by_time=True,
        ),
        TOTAL_SD,
        LAW,
        Parameter(
            "before",
            "",
            Record(PAST_VALUES),
            "what came before step 0, to leave from a known value instead of the stationary law",
            default=None,
        ),
    )

    by_rows = ("rate", "mean", "sd", "total_sd")
    begins_by_rows = True

    @classmethod
    def check(cls, values):
        if values["before"] is not None and values["total_sd"] is not None:
            yield "total_sd", "a term that leaves from `before` has no stationary spread; give `sd`"
        if _kept(values["rate"]) >= 1.0:
            yield "rate", "the pull is too weak to be felt in a step; use a random_walk"

    def __init__(self, values):
        super().__init__(values)
        self.even = self.clock == "steps"
        steady = {"phi": (_kept(self.rate),), "sd": 1.0, "total_sd": None, "before": None}
        self.core = Arma(steady) if self.even else Timed(self.rate, self.clock)
        self.level = plain(self.values["mean"])

    def misfit(self, inputs):
        noise = inputs[-1].term
        if not self.even and not (isinstance(noise, WhiteNoise) and noise.law.gaussian):
            return (
                "expected normal shocks beside clock: time, for only these add up to the same law over steps of any "
                "length; leave out law and shock, or write clock: steps"
            )
        return None

    def shock_sd(self):
        share = plain(lost(2.0 * self.rate))  # 1 − φ²
        if self.sd is not None:
            return self.sd * plain(np.sqrt(share / (2.0 * self.rate)))
        return self.total_sd * plain(np.sqrt(share))

    def path(self, steps, drifting=False):
        """The mean, at any steps."""
        return np.full(np.shape(steps), self.level)

    def moments(self, axis, noise):
        if not self.even:
            past = None if self.before is None else float(self.before["x"][-1]) - self.level
            return axis.pulled(noise, self.rate, self.clock, past) + axis.known(self.path, constant=True)
        if self.before is not None:
            return self._given(axis, noise)
        return self.core.moments(axis, noise) + axis.known(self.path, constant=True)

    def equation(self, *inputs):
        phi, level = number(_kept(self.rate)), f"{number(self.level)} + " if self.level else ""
        inside = f"(x[t−1] {signed(-self.level, '')})" if self.level else "x[t−1]"
        past = "" if self.before is None else f",  {stated('x', self.before['x'][-1:])}"
        if not self.even:
            return (
                f"x[t] = {level}φ[t] {inside} + r[t] a[t],  φ[t] = exp(−{number(self.rate)} Δ[t]),  "
                f"r[t]² = (1 − φ[t]²)/(1 − exp(−{number(2.0 * self.rate)})),  "
                f"Δ[t] the time since t − 1 in steps of the mean length ({self.clock.every}){past}"
            )
        return f"x[t] = {level}{phi} {inside} + a[t],  {phi} = exp(−{number(self.rate)}){past}"


def _kept(rate):
    """exp(−rate), the share of a distance that is left after a step."""
    return plain(exp(np.array([-rate]))[0])
