"""The moving-blocks bootstrap: stretches of a recorded series, drawn and set end to end."""

from __future__ import annotations

import numpy as np

from procgen.chance.laws import LAWS
from procgen.spec.columns import Undated
from procgen.spec.declare import Flag, Parameter, Span
from procgen.terms.base import Ahead, Draw, Term, number
from procgen.terms.support import EVERYTHING, finite
from procgen.terms.window import whole

UNIFORM = LAWS["uniform"]()
ROOT_12 = 3.4641016151377544
SURE = 1e-9  # the rank of what cannot be
NEAR = 1e-9  # of the largest number: what is as near as this to a number is that number


class MovingBlocks(Term):
    kind = "moving_blocks"
    family = "combination"
    purpose = "stretches of a recorded series, each as likely, set end to end: the moving-blocks bootstrap"
    source = "Künsch (1989); Politis & Romano (1992) for the circular one"
    example = "moving_blocks: {values: [3, 5, 4, 6, 2, 5, 7], length: 3}"
    knows = "mean, variance and covariance at any steps, given the numbers"
    outputs = ("block_start",)
    parameters = (
        Parameter(
            "values",
            "v",
            Undated(),
            "the recorded numbers, or a column of a file, whose numbers then become a part of the spec",
            unit="series",
        ),
        Parameter("length", "ℓ", Span(), "how long a block is; one begins at step 0", unit="steps"),
        Parameter("circular", "", Flag(), "whether a block may go on from the last number to the first", default=False),
    )

    @classmethod
    def check(cls, values):
        yield from whole("length", values["length"], "a length")
        count = len(values["values"].numbers)
        if values["length"] > count:
            yield (
                "length",
                f"expected blocks no longer than the {count:,} numbers they are taken from, got "
                f"{number(values['length'])}; shorten the blocks, or give more numbers",
            )

    def __init__(self, values):
        super().__init__(values)
        self.numbers = np.array(self.values["values"].numbers, dtype=np.float64)
        self.size = int(self.values["length"])
        self.starts = len(self.numbers) - (0 if self.circular else self.size - 1)  # how many there are

    def draws(self):
        return (Draw("block", UNIFORM),)

    def reach(self, head):
        return (-(-head // self.size) * self.size,)

    def _chosen(self, z):
        """The number that a block begins with, counted from 0, from the uniforms of its first step."""
        return np.minimum(np.floor((z / ROOT_12 + 0.5) * self.starts), self.starts - 1.0)

    def _out(self, start, place):
        at = (start.astype(np.int64) + place[:, None]) % len(self.numbers)
        return {"": self.numbers[at], "block_start": start}

    def begin(self, before):
        steps = np.arange(-before.head, 0)
        place, z = steps % self.size, before.inputs[0]
        if not before.head:
            return None, {}
        return self._out(self._chosen(z[len(z) + steps - place]), place), {}

    def recurse(self, inputs, state, at):
        place, z = at % self.size, inputs[0]
        rows = at - place - at[0]
        start = self._chosen(z[np.maximum(rows, 0)])
        if rows[0] < 0:
            start = np.where((rows < 0)[:, None], state["start"], start)
        return self._out(start, place), {"start": start[-1:].copy()}

    def unranked(self):
        return ""

    def rank(self, values, cell, known, state, at):
        """Of the first value of a block; what follows one that is found once is sure, and wrong where it differs."""
        numbers, slack = self.numbers, NEAR * float(np.max(np.abs(self.numbers)))
        lower, upper = cell[0] - slack, cell[1] + slack
        order = np.argsort(numbers[: self.starts], kind="stable")
        firsts = numbers[: self.starts][order]
        start = np.full(values.shape[1], np.nan) if state is None else state["start"][0]
        below, upto = np.full(values.shape, np.nan), np.full(values.shape, np.nan)
        for row, place in enumerate(at % self.size):
            gone = np.isnan(values[row])
            if place == 0:
                a, b = np.searchsorted(firsts, lower[row], "right"), np.searchsorted(firsts, upper[row], "right")
                below[row], upto[row] = np.where(gone, np.nan, a / self.starts), np.where(gone, np.nan, b / self.starts)
                start = np.where((b - a == 1) & ~gone, order[np.minimum(a, self.starts - 1)], np.nan)
                continue
            expected = numbers[(np.nan_to_num(start).astype(np.int64) + place) % len(numbers)]
            wrong = ((expected <= lower[row]) | (expected > upper[row])) & ~np.isnan(start) & ~gone
            side = np.where(expected > upper[row], SURE, 1.0 - SURE)
            below[row] = upto[row] = np.where(wrong, side, np.nan)
        return (below, upto), {"start": start[None, :]}

    def ahead(self, steps, state, *inputs):
        place, axis = steps % self.size, np.arange(self.starts)
        table = self.numbers[(axis[:, None] + place) % len(self.numbers)]
        mean = table.mean(axis=0)[:, None]
        variance = ((table - mean[:, 0]) ** 2).mean(axis=0)[:, None]
        if "start" not in state:
            return Ahead(mean, variance)
        going_on = np.logical_and.accumulate(place > 0)[:, None]
        sure = self._out(state["start"], place)[""]
        return Ahead(np.where(going_on, sure, mean), np.where(going_on, 0.0, variance))

    def support(self, *inputs):
        return finite(self.numbers.tolist())

    def support_of(self, output):
        return finite(range(self.starts)) if output == "block_start" else EVERYTHING

    def moments(self, axis, *inputs):
        return axis.blocks(self.address, UNIFORM, self.numbers, self.size, bool(self.circular))

    def equation(self, *inputs):
        ring = f" mod {len(self.numbers)}" if self.circular else ""
        return (
            f"x[t] = v[S + t mod {self.size}{ring}],  S uniform on 0 … {self.starts - 1} for every {self.size} steps, "
            f"v: {len(self.numbers):,} numbers"
        )
