"""A body that runs on finer steps than its series, which sees sums, means or single values of it."""

from __future__ import annotations

import numpy as np

from procgen.spec.declare import Choice, Parameter, Whole
from procgen.terms.base import Ahead, Array, Term, Unknown
from procgen.terms.combine import OF
from procgen.terms.support import Support

MOST = 10_000
OVER = Parameter("over", "k", Whole(at_least=2, at_most=MOST), "how many of its body's steps make one of the series")


class Finer(Term):
    """Step t of the series is made of the steps k t … k t + k − 1 of its body; subclasses give `of_blocks`."""

    family = "combination"
    composition = True
    finer = "over"

    def of_blocks(self, blocks: Array) -> Array:
        """(steps, paths) from the body's values, (steps, k, paths)."""
        raise NotImplementedError

    def reach(self, head):
        return (head * self.over,)

    def _blocks(self, rows: Array) -> Array:
        return rows.reshape(-1, self.over, rows.shape[1])

    def begin(self, before):
        rows = before.inputs[0]
        return self.of_blocks(self._blocks(rows[len(rows) - self.over * before.head :])), {}

    def recurse(self, inputs, state, at):
        return self.of_blocks(self._blocks(inputs[0])), state


class Aggregate(Finer):
    kind = "aggregate"
    smooth = "filter"
    purpose = "the sum, mean or last value of a body that runs on finer steps: daily totals of an hourly process"
    source = "Silvestrini & Veredas (2008)"
    example = "aggregate: {of: [{ar: {phi: 0.9, sd: 1}}], over: 4, by: sum}"
    knows = "whatever is known of its body, added up over the steps of a block"
    parameters = (
        OF,
        OVER,
        Parameter("by", "", Choice("sum", "mean", "last"), "what the series sees of a block", default="sum"),
    )

    def of_blocks(self, blocks):
        if self.by == "last":
            return blocks[:, -1]
        total = blocks[:, 0]
        for j in range(1, self.over):
            total = total + blocks[:, j]
        return total if self.by == "sum" else total / self.over

    def ahead(self, steps, state, body):
        if self.by != "last" and np.any(body.variance != 0.0):
            return Unknown("a sum over a block needs the covariances of its steps, which no forecast carries")
        still = np.zeros_like(body.mean) if self.by != "last" else body.variance
        return Ahead(self.of_blocks(self._blocks(body.mean)), self._blocks(still + 0.0 * body.mean)[:, -1])

    def support(self, body):
        if self.by == "last":
            return body
        if self.by == "mean":
            return Support(body.low, body.high)
        whole = body.lattice()
        return Support(self.over * whole.low, self.over * whole.high, whole.step, self.over * whole.offset)

    def moments(self, axis, body):
        k = self.over
        if self.by == "last":
            return axis.every(body, k, k - 1)
        total, sums, size, gone = None, body, 1, 0
        while True:  # sums of 2^n steps are made of two halves, as for a rolling mean
            if k & size:
                part = sums.lag(gone)
                total, gone = part if total is None else total + part, gone + size
            if 2 * size > k:
                return axis.every(total * (1.0 if self.by == "sum" else 1.0 / k), k, k - 1)
            sums, size = sums + sums.lag(size), 2 * size

    def equation(self, body):
        k = self.over
        if self.by == "last":
            return f"y[t] = {body}[{k}t + {k - 1}],  {body} on steps a {_part(k)} as long"
        total = f"{body}[{k}t] + … + {body}[{k}t + {k - 1}]" if k > 2 else f"{body}[2t] + {body}[2t + 1]"
        total = total if self.by == "sum" else f"({total})/{k}"
        return f"y[t] = {total},  {body} on steps a {_part(k)} as long"


class Subsample(Finer):
    kind = "subsample"
    smooth = "filter"
    purpose = "a body that runs on finer steps, seen at the first of every so many"
    source = "Brewer (1973) for what an ARMA becomes"
    example = "subsample: {of: [{ar: {phi: 0.9, sd: 1}}], over: 12}"
    knows = "whatever is known of its body at the steps that are seen"
    parameters = (OF, OVER)

    def of_blocks(self, blocks):
        return blocks[:, 0]

    def ahead(self, steps, state, body):
        return Ahead(*(self._blocks(rows + 0.0 * body.mean)[:, 0] for rows in (body.mean, body.variance)))

    def support(self, body):
        return body

    def moments(self, axis, body):
        return axis.every(body, self.over, 0)

    def equation(self, body):
        return f"y[t] = {body}[{self.over}t],  {body} on steps a {_part(self.over)} as long"


def _part(k: int) -> str:
    return "half" if k == 2 else f"{k}th"
