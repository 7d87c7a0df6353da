"""A bridge: a walk that is pinned at both ends."""

from __future__ import annotations

from typing import ClassVar

import numpy as np

from procgen.chance.kernel import kernel
from procgen.chance.laws import Normal
from procgen.spec.declare import Moment, Parameter, Real
from procgen.terms.base import Ahead, Draw, Term, number

NORMAL = Normal()


@kernel
def pull(z, weight, spread, end, x, out):
    """out[t] = x[t−1] pulled towards `end` by a weight, and a shock; returns the last row."""
    for t in range(z.shape[0]):
        x = (1.0 - weight[t]) * x + weight[t] * end + spread[t] * z[t]
        out[t] = x
    return x


class Bridge(Term):
    kind = "bridge"
    family = "jumps and prices"
    purpose = "a random walk that is known to end at a level: from `start` at step 0 to `end` at a step or date"
    source = "Doob (1949); drawn step by step, as by Glasserman (2003), ch. 3.1"
    example = "bridge: {start: 100, end: 120, until: 500, sd: 2}"
    knows = "mean and covariance σ²s(T − t)/T for s ≤ t; Gaussian. The steps of the spec do not enter, only T does"
    correlates = True
    no_past = "a bridge begins at step 0; lag less"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("start", "x₀", Real(), "value at step 0", default=0.0, unit="series"),
        Parameter("end", "x_T", Real(), "value at the end, and after it", default=0.0, unit="series"),
        Parameter("until", "T", Moment(), "the step or date at which it has arrived"),
        Parameter(
            "sd", "σ", Real(above=0), "standard deviation of a step, far from the end", unit="series", per="diffusion"
        ),
    )

    @classmethod
    def check(cls, values):
        if values["until"] < 1 or not float(values["until"]).is_integer():
            yield "until", f"expected a step after step 0, got {number(values['until'])}; give a later one"

    def draws(self):
        return (Draw("innovation", NORMAL),)

    def past(self):
        return 0

    def reach(self, head):
        return (head,)

    def begin(self, before):
        return None, {}

    def steps(self, at):
        """How far each step is pulled towards the end, and the standard deviation of its shock."""
        left = np.maximum(self.until - at, 0.0)  # steps that come after it
        going = (at > 0) & (at <= self.until)
        weight = np.where(going, 1.0 / (left + 1.0), np.where(at > 0, 1.0, 0.0))
        return weight, np.where(going, self.sd * np.sqrt(left / (left + 1.0)), 0.0)

    def recurse(self, inputs, state, at):
        z, (weight, spread) = inputs[0], self.steps(at)
        x = np.broadcast_to(state.get("x", np.full((1, 1), float(self.start)))[0], z.shape[1:]).copy()
        out = np.empty_like(z)
        return out, {"x": pull(z, weight, spread, float(self.end), x, out)[None, :]}

    def invert(self, values, known, state, at):
        weight, spread = (part[:, None] for part in self.steps(at))
        last = state["x"] if state else np.full((1, values.shape[1]), float(self.start))
        before = np.concatenate([last, values[:-1]])
        moved = values - (1.0 - weight) * before - weight * self.end
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(spread > 0.0, moved / spread, np.nan), {"x": values[-1:]}

    def ahead(self, steps, state, noise):
        now = float(steps[0]) - 1.0 if "x" in state else 0.0
        level = state.get("x", np.full((1, 1), float(self.start)))
        gone, whole = np.clip(steps[:, None] - now, 0.0, None), max(self.until - now, 1e-300)
        share = np.minimum(gone / whole, 1.0)
        return Ahead(level + (self.end - level) * share, self.sd**2 * whole * share * (1.0 - share) + 0.0 * level)

    def moments(self, axis, *inputs):
        end = float(self.until)

        def mean(steps):
            share = np.minimum(np.asarray(steps, float) / end, 1.0)
            return np.where(share < 0.0, np.nan, self.start + (self.end - self.start) * share)

        def covariance(t, s):
            return self.sd**2 * np.minimum(t, s) * np.maximum(end - np.maximum(t, s), 0.0) / end

        pinned = f"{self.address} is pinned at both ends"
        rests = axis.horizon > end + 1.0  # at its end, for the steps that are left
        return axis.stated(self.address, NORMAL, mean, covariance, gaussian=True, varies=pinned, lumpy=rests)

    def equation(self, *inputs):
        step = f"x[t−1] + ({number(self.end)} − x[t−1])/(T − t + 1) + {number(self.sd)} √((T − t)/(T − t + 1)) z[t]"
        return f"x[t] = {step},  T = {number(self.until)},  x[0] = {number(self.start)},  z normal"
