"""Deterministic levels: a constant, and a trend with slope, curvature and bends."""

from __future__ import annotations

from functools import cached_property
from itertools import pairwise

import numpy as np

from procgen.spec.declare import Moment, Parameter, Real, Records
from procgen.terms.base import Ahead, Array, Term, after_last, number, signed
from procgen.terms.rows import row_in
from procgen.terms.support import finite


class Known(Term):
    """A term that is a function of the step alone: subclasses give `at`, everything else follows."""

    def at(self, steps: Array) -> Array:
        """Values at integer steps, which may be negative; same shape."""
        raise NotImplementedError

    def begin(self, before):
        return self._column(np.arange(-before.head, 0)), {}

    def early(self):
        return 0

    def recurse(self, inputs, state, at):
        return self._column(at), state

    def _column(self, steps):
        """Values at steps, (steps, 1), or (steps, paths) where numbers are rows."""
        return self.at(steps[:, None]) if self._by_path else self.at(steps)[:, None]

    @cached_property
    def _by_path(self):
        return bool(self.by_rows and row_in(self.values))

    def ahead(self, steps, state, *inputs):
        mean = self.at(steps)[:, None]
        return Ahead(mean, np.zeros_like(mean))

    def moments(self, axis, *inputs):
        return axis.known(self.at)


class Constant(Known):
    kind = "constant"
    family = "level and shape"
    purpose = "the same value at every step"
    source = "common practice, no source"
    example = "constant: 12.5"
    knows = "mean; no variance"
    short = "level"
    by_rows = ("level",)
    begins_by_rows = True
    parameters = (Parameter("level", "c", Real(), "the value", unit="series"),)

    def at(self, steps):
        return np.full(np.broadcast_shapes(steps.shape, np.shape(self.level)), self.level, dtype=np.float64)

    def equation(self, *inputs):
        return f"x[t] = {number(self.level)}"

    def support(self, *inputs):
        return finite([self.level])

    def moments(self, axis, *inputs):
        return axis.known(self.at, constant=True)


class Trend(Known):
    kind = "trend"
    family = "level and shape"
    purpose = "a straight, curved or bent line"
    source = "common practice, no source"
    example = "trend: {level: 310, slope: 0.02, bends: [{at: 500, slope: -0.01}]}"
    knows = "mean; no variance"
    by_rows = ("level", "slope", "quadratic", "bends")
    begins_by_rows = True
    parameters = (
        Parameter("level", "c", Real(), "value at step 0", default=0.0, unit="series"),
        Parameter("slope", "b", Real(), "change a step", default=0.0, unit="series", per="rate"),
        Parameter("quadratic", "q", Real(), "coefficient of t²", default=0.0, unit="series/step²"),
        Parameter(
            "bends",
            "",
            Records(
                Parameter("at", "τ", Moment(), "the step or date from which the new slope holds"),
                Parameter("slope", "b", Real(), "the slope from there on", unit="series", per="rate"),
            ),
            "points where the slope changes, in order",
            default=(),
        ),
    )

    @classmethod
    def check(cls, values):
        places = [bend["at"] for bend in values["bends"]]
        if any(later <= earlier for earlier, later in pairwise(places)):
            yield (
                "bends",
                "expected bends in order of time, each later than the one before; sort them by `at`",
            )

    def at(self, steps):
        t = steps.astype(np.float64)
        x = self.level + self.slope * t + self.quadratic * (t * t)
        slope = self.slope
        for bend in self.bends:
            at_0 = max(-bend["at"], 0.0)  # the level is the value at step 0, whatever was bent before
            x = x + (bend["slope"] - slope) * (np.maximum(t - bend["at"], 0.0) - at_0)
            slope = bend["slope"]
        return x

    def unfelt(self, steps):
        for bend in self.bends:
            if late := after_last(bend["at"], steps):
                yield f"bends {late}: no value shows it"

    def equation(self, *inputs):
        text = f"x[t] = {number(self.level)} {signed(self.slope, 't')}"
        if self.quadratic:
            text += f" {signed(self.quadratic, 't²')}"
        slope = self.slope
        for bend in self.bends:
            at = bend["at"]
            ramp = f"max(0, t − {number(at)})" if at >= 0 else f"(max(0, t + {number(-at)}) − {number(-at)})"
            text += f" {signed(bend['slope'] - slope, ramp)}"
            slope = bend["slope"]
        return text
