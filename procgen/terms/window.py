"""Over several steps: a value held until the next is read, and the mean of the last ones."""

from __future__ import annotations

import numpy as np

from procgen.spec.declare import Moment, Parameter, Span
from procgen.terms.base import Array, Term, number, steps_since
from procgen.terms.combine import OF
from procgen.terms.support import Support

LONGEST = 100_000


def whole(name: str, value: float, what: str):
    if not float(value).is_integer():
        yield name, f"expected {what} in whole steps, got {number(value)} steps; choose a multiple of a step"
    elif abs(value) > LONGEST:
        yield name, f"expected {what} of at most {LONGEST:,} steps, got {number(value)}; choose longer steps"


class Hold(Term):
    kind = "hold"
    smooth = "bend"
    family = "level and shape"
    purpose = "its body read every so many steps and held until the next reading: a value drawn once a day"
    source = "common practice, no source"
    example = "hold: {of: [{white_noise: {sd: 3}}], every: 8}"
    knows = "whatever is known of its body at the steps that are read"
    composition = True
    parameters = (
        OF,
        Parameter("every", "k", Span(), "how long a reading is held", unit="steps"),
        Parameter("first", "τ", Moment(), "a step at which it is read", default=0.0, unit="steps"),
    )

    @classmethod
    def check(cls, values):
        yield from whole("every", values["every"], "a length")
        yield from whole("first", values["first"], "a time")

    def read_at(self, steps: Array) -> Array:
        """The step whose value each step has."""
        every, first = int(self.every), int(self.first)
        return steps - (steps - first) % every

    def reach(self, head):
        return (-int(self.read_at(np.array([-head]))[0]),)

    def begin(self, before):
        body, steps = before.inputs[0], np.arange(-before.head, 0)
        values = body[len(body) + self.read_at(steps)] if before.head else None
        now = int(self.read_at(np.array([0]))[0])
        return values, {"x": body[len(body) + now : len(body) + now + 1]} if now < 0 else {}

    def recurse(self, inputs, state, at):
        rows = self.read_at(at) - at[0]
        inside = inputs[0][np.maximum(rows, 0)]
        values = inside if rows[0] >= 0 else np.where((rows < 0)[:, None], state["x"], inside)
        return values, {"x": values[-1:].copy()}

    def support(self, body):
        return body

    def moments(self, axis, body):
        return axis.held(body, self.read_at, int(self.every))

    def equation(self, body):
        return f"y[t] = {body}[t − {steps_since(self.first)} mod {number(self.every)}]"


class RollingMean(Term):
    kind = "rolling_mean"
    smooth = "filter"
    family = "combination"
    purpose = "the mean of its body over the last steps, this one among them; before step 0 it reads its past"
    source = "common practice, no source"
    example = "rolling_mean: {of: [{ar: {phi: 0.8, sd: 1}}], over: 7}"
    knows = "whatever is known of its body, averaged; a walk before step 0 is followed backwards at random"
    composition = True
    parameters = (OF, Parameter("over", "k", Span(), "how long the window is", unit="steps"))

    @classmethod
    def check(cls, values):
        yield from whole("over", values["over"], "a window")

    def reach(self, head):
        return (head + int(self.over) - 1,)

    def begin(self, before):
        depth = int(self.over) - 1
        body = before.inputs[0]
        rows = body[len(body) - depth - before.head :]
        return self._means(rows)[: before.head] if before.head else None, {"x": rows[before.head :]}

    def _means(self, rows: Array) -> Array:
        """Means of windows that lie within the rows. Sums of 2ⁿ steps are made of two halves, so a window of a
        thousand takes ten additions, and always the same ones."""
        k = int(self.over)
        count = len(rows) - k + 1
        total, sums, size, gone = np.zeros((1, 1)), rows, 1, 0
        while True:
            if k & size:
                total, gone = total + sums[gone : gone + count], gone + size
            if 2 * size > k:
                return total / k
            sums, size = sums[: len(sums) - size] + sums[size:], 2 * size

    def recurse(self, inputs, state, at):
        width = max(state["x"].shape[1], inputs[0].shape[1])
        rows = np.concatenate([np.broadcast_to(x, (len(x), width)) for x in (state["x"], inputs[0])])
        return self._means(rows), {"x": rows[len(inputs[0]) :].copy()}

    def support(self, body):
        return Support(body.low, body.high)

    def moments(self, axis, body):
        k = int(self.over)
        total, sums, size, gone = None, body, 1, 0
        while True:
            if k & size:
                part = sums.lag(gone)
                total, gone = part if total is None else total + part, gone + size
            if 2 * size > k:
                return total * (1.0 / k)
            sums, size = sums + sums.lag(size), 2 * size

    def equation(self, body):
        return f"y[t] = ({body}[t] + … + {body}[t−{int(self.over) - 1}])/{int(self.over)}"
