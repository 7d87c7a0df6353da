"""Random walk: the running sum of shocks, with a drift, from a start."""

from __future__ import annotations

import numpy as np

from procgen.chance.kernel import kernel
from procgen.spec.declare import Parameter, Real, Record
from procgen.terms.base import LAW, PAST_VALUES, SD, Ahead, Term, number, rows, signed, stated


@kernel
def accumulate(a, out, x):
    """x[t] = x[t−1] + a[t], from the row `x`; returns the last row."""
    for t in range(a.shape[0]):
        x = x + a[t]
        out[t] = x
    return x


class RandomWalk(Term):
    kind = "random_walk"
    smooth = "filter"
    family = "linear"
    purpose = "the running sum of shocks: x[0] is `start`, and the variance at step t is t·σ²"
    source = "Box & Jenkins (1970), ch. 4; Hamilton (1994), ch. 15"
    example = "random_walk: {sd: 0.01, drift: -0.00005, start: 3.9}"
    knows = "mean and covariance at any steps; what reads it before step 0 finds it followed backwards at random"
    takes_shock = True
    by_rows = ("sd", "drift", "start")
    begins_by_rows = True
    parameters = (
        SD,
        Parameter("drift", "d", Real(), "mean change a step", default=0.0, unit="series", per="rate"),
        Parameter("start", "x₀", Real(), "value at step 0", default=0.0, unit="series"),
        LAW,
        Parameter(
            "before",
            "",
            Record(PAST_VALUES),
            "what came before step 0; then step 0 is one step away from the last of it, and `start` is not used",
            default=None,
        ),
    )

    def past(self):
        return None if self.before is None else len(self.before["x"])

    def shock_sd(self):
        return self.sd

    def reach(self, head):
        return (head,)

    def begin(self, before):
        if self.before is not None:
            x = rows(self.before["x"])
            return x[len(x) - before.head :], {"x": x[-1:]}
        # Two-sided: the walk passes through `start` at step 0 and is followed backwards from there.
        x, past = np.array(self.start, dtype=np.float64).reshape(1, -1), []
        increments = [before.peek(0)[0], *before.inputs[0][::-1]] if before.head else []
        for a in increments[: before.head]:
            x = x - (self.drift + a)
            past.append(x[0])
        return np.array(past[::-1]) if past else None, {}

    def recurse(self, inputs, state, at):
        a = self.drift + inputs[0]
        if "x" not in state:  # step 0 is the start itself; its shock only matters to what lies before
            a[0] = self.start
        x = state.get("x", np.zeros((1, 1)))[0] + np.zeros(a.shape[1])
        out = np.empty_like(a)
        return out, {"x": accumulate(a, out, x)[None, :]}

    def invert(self, values, known, state, at):
        last = state["x"] if state else np.full((1, values.shape[1]), np.nan)
        previous = np.concatenate([last, values[:-1]])
        return values - previous - self.drift, {"x": values[-1:]}

    def ahead(self, steps, state, noise):
        first = 1 if "x" in state else 0
        count = np.arange(first, first + len(steps), dtype=np.float64)[:, None]
        steps_taken = noise.variance.copy()
        steps_taken[: 1 - first] = 0.0  # step 0 is the start itself
        level = state.get("x", rows([self.start]))
        return Ahead(level + self.drift * count, np.add.accumulate(steps_taken, axis=0))

    def moments(self, axis, noise):
        if self.before is None:
            return axis.walk(noise, self.drift, self.start)
        level = axis.filtered(noise, (1.0,), (), before_x=tuple(self.before["x"]), before_shocks=())
        return level + axis.known(lambda steps: self.drift * np.maximum(steps + 1.0, 0.0))

    def equation(self, *inputs):
        drift = f" {signed(self.drift, '')}" if self.drift else ""
        start = f"x[0] = {number(self.start)}" if self.before is None else stated("x", self.before["x"][-1:])
        return f"x[t] = x[t−1]{drift} + a[t],  {start}"
