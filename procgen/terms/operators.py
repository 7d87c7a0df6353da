"""Operators along time: lag, difference, integrate."""

from __future__ import annotations

import numpy as np

from procgen.spec.declare import Body, Parameter, Real, Whole
from procgen.terms.base import Ahead, Term, number
from procgen.terms.walk import accumulate

FURTHEST = 100_000  # steps that an operator reads back
OF = Parameter("of", "", Body(), "what it is applied to; a list is a sum")


class Lag(Term):
    kind = "lag"
    smooth = "filter"
    family = "combination"
    purpose = "its body as it was some steps earlier; before step 0 it reads the body's own past"
    source = "common practice, no source"
    example = "lag: {of: [{ar: {phi: 0.8, sd: 1}}], by: 3}"
    knows = "whatever is known of its body, shifted; walks are followed backwards at random before step 0"
    composition = True
    parameters = (
        OF,
        Parameter("by", "k", Whole(at_least=0, at_most=FURTHEST), "how many steps earlier", default=1),
    )

    def reach(self, head):
        return (head + self.by,)

    def begin(self, before):
        rows = before.inputs[0][len(before.inputs[0]) - self.by - before.head :]
        return rows[: before.head], {"x": rows[before.head :]}

    def recurse(self, inputs, state, at):
        rows = np.concatenate(_same_width(state["x"], inputs[0]))
        return rows[: len(inputs[0])], {"x": rows[len(inputs[0]) :].copy()}

    def ahead(self, steps, state, body):
        known = state["x"][: len(steps)]
        left = max(0, len(steps) - self.by)
        width = max(known.shape[1], body.mean.shape[1])
        mean = np.concatenate(_same_width(known, body.mean[:left] + np.zeros((1, width))))
        variance = np.concatenate(_same_width(np.zeros((len(known), 1)), body.variance[:left] + np.zeros((1, width))))
        return Ahead(mean, variance)

    def support(self, body):
        return body

    def moments(self, axis, body):
        return body.lag(self.by)

    def equation(self, body):
        return f"y[t] = {body}[t−{self.by}]"


class Difference(Term):
    kind = "difference"
    smooth = "filter"
    family = "combination"
    purpose = "the change of its body over some steps; before step 0 it reads the body's own past"
    source = "Box & Jenkins (1970), ch. 4"
    example = "difference: {of: [{random_walk: {sd: 1}}], by: 1}"
    knows = "whatever is known of its body, differenced"
    composition = True
    parameters = (
        OF,
        Parameter("by", "s", Whole(at_least=1, at_most=FURTHEST), "how many steps back it compares with", default=1),
        Parameter("order", "d", Whole(at_least=1, at_most=12), "how often it is applied", default=1),
    )

    @classmethod
    def check(cls, values):
        if values["order"] * values["by"] > FURTHEST:
            yield (
                "by",
                f"expected at most {FURTHEST:,} steps read back in all (order × by), got "
                f"{values['order'] * values['by']:,}; lower `by` or `order`",
            )

    def reach(self, head):
        return (head + self.by * self.order,)

    def begin(self, before):
        depth = self.by * self.order
        rows = before.inputs[0][len(before.inputs[0]) - depth - before.head :]
        return self._apply(rows)[: before.head], {"x": rows[before.head :]}

    def _apply(self, rows):
        for _ in range(self.order):
            rows = rows[self.by :] - rows[: len(rows) - self.by]
        return rows

    def recurse(self, inputs, state, at):
        rows = np.concatenate(_same_width(state["x"], inputs[0]))
        return self._apply(rows), {"x": rows[len(inputs[0]) :].copy()}

    def moments(self, axis, body):
        return body.difference(self.by, self.order)

    def equation(self, body):
        power = f"^{self.order}" if self.order > 1 else ""
        return f"y[t] = (1 − B{'' if self.by == 1 else f'^{self.by}'}){power} {body}[t]"


class Integrate(Term):
    kind = "integrate"
    smooth = "filter"
    family = "combination"
    purpose = "the running sum of its body: y[0] is `start`, y[t] = y[t−1] + x[t]"
    source = "Box & Jenkins (1970), ch. 4"
    example = "integrate: {of: [{ar: {phi: 0.5, sd: 1}}], start: 100}"
    knows = "mean and covariance at any steps, from those of its body"
    composition = True
    parameters = (OF, Parameter("start", "y₀", Real(), "value at step 0", default=0.0, unit="series"))

    def reach(self, head):
        return (head,)

    def begin(self, before):
        # Two-sided, as the walk: through `start` at step 0, and backwards from there.
        y, past = np.full((1, 1), float(self.start)), []
        increments = [before.peek(0)[0], *before.inputs[0][::-1]] if before.head else []
        for x in increments[: before.head]:
            y = y - x
            past.append(y[0])
        return np.array(past[::-1]).reshape(before.head, -1) if past else None, {}

    def recurse(self, inputs, state, at):
        x = inputs[0]
        if "y" not in state:  # step 0 is the start itself
            x = x.copy()
            x[0] = self.start
        y = state.get("y", np.zeros((1, 1)))[0] + np.zeros(x.shape[1])
        out = np.empty_like(x)
        return out, {"y": accumulate(x, out, y)[None, :]}

    def invert(self, values, known, state, at):
        last = state["y"] if state else np.full((1, values.shape[1]), np.nan)
        return values - np.concatenate([last, values[:-1]]), {"y": values[-1:]}

    def moments(self, axis, body):
        return body.integrate(self.start)

    def equation(self, body):
        return f"y[t] = y[t−1] + {body}[t],  y[0] = {number(self.start)}"


def _same_width(*parts):
    width = max(part.shape[1] for part in parts)
    return [np.broadcast_to(part, (len(part), width)) for part in parts]
