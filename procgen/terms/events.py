"""Things that happen at a known time: an event that shifts the level, and a change from one body to another."""

from __future__ import annotations

import numpy as np

from procgen.chance.portable import exp
from procgen.spec.declare import Body, Choice, Moment, Parameter, Real, Span
from procgen.terms.base import Ahead, Array, Term, after_last, number, steps_since
from procgen.terms.level import Known

LOG_2 = 0.6931471805599453


class Event(Known):
    kind = "event"
    family = "level and shape"
    purpose = "a shift at a known time: a step, a pulse, a ramp to a new level, or a jump that decays"
    source = "Box & Tiao (1975)"
    example = "event: {shape: ramp, at: 20, size: -15, length: 10}"
    knows = "mean; no variance"
    parameters = (
        Parameter(
            "shape",
            "",
            Choice("step", "pulse", "ramp", "decay"),
            "from `at` on; for `length` steps; rising over `length` steps, then there; halving every `length` steps",
            default="step",
        ),
        Parameter("at", "τ", Moment(), "the first step or date at which it is felt; a ramp leaves from there"),
        Parameter("size", "ω", Real(), "height of the shift", unit="series"),
        Parameter("length", "ℓ", Span(), "see `shape`; a pulse without it lasts one step", default=None, unit="steps"),
    )

    @classmethod
    def check(cls, values):
        if values["shape"] == "step" and values["length"] is not None:
            yield "length", "a step lasts for ever; remove length, or choose shape: pulse, ramp or decay"
        if values["shape"] in ("ramp", "decay") and values["length"] is None:
            yield "shape", f"expected a length beside shape: {values['shape']}; give length, as in length: 10"

    def at(self, steps: Array) -> Array:
        since = steps.astype(np.float64) - self.values["at"]
        length = 1.0 if self.length is None else self.length
        if self.shape == "ramp":
            return self.size * np.minimum(np.maximum(since / length, 0.0), 1.0)
        if self.shape == "decay":
            halvings = np.minimum(np.maximum(since / length, 0.0), 900.0)
            return np.where(since < 0.0, 0.0, self.size * exp(-LOG_2 * halvings))
        felt = (since >= 0.0) if self.shape == "step" else (since >= 0.0) & (since < length)
        return np.where(felt, self.size, 0.0)

    def unfelt(self, steps):
        at, length = self.values["at"], 1.0 if self.length is None else self.length
        if late := after_last(at, steps):
            yield f"begins {late}: no value shows it"
        elif self.shape == "pulse" and at + length <= 0.0:
            yield f"is over at step {number(at + length)}, by step 0: no value shows it"

    def equation(self, *inputs):
        start, length = number(self.values["at"]), number(1.0 if self.length is None else self.length)
        size, gone = number(self.size), steps_since(self.values["at"])
        return {
            "step": f"x[t] = {size} for t ≥ {start}, else 0",
            "pulse": f"x[t] = {size} for {start} ≤ t < {start} + {length}, else 0",
            "ramp": f"x[t] = {size} min(max({gone}/{length}, 0), 1)",
            "decay": f"x[t] = {size} · 2^(−{gone}/{length}) for t ≥ {start}, else 0",
        }[self.shape]


class Schedule(Term):
    kind = "schedule"
    smooth = "bend"
    family = "combination"
    purpose = "one body until a date, then another; with `fade`, the first gives way to the second bit by bit"
    source = "common practice, no source"
    example = "schedule: {of: [{ar: {phi: 0.8, sd: 1}}], until: 20, then: [{constant: 12}, {white_noise: {sd: 2}}]}"
    knows = "mean and covariance at any steps, from those of the two bodies"
    composition = True
    parameters = (
        Parameter("of", "", Body(), "the body before; a list is a sum"),
        Parameter("until", "τ", Moment(), "the first step or date at which the second body is there", unit="steps"),
        Parameter("then", "", Body(), "the body after; a list is a sum"),
        Parameter("fade", "ℓ", Span(), "how long the change takes; at once when absent", default=None, unit="steps"),
    )

    def share(self, steps: Array) -> Array:
        """How much of the second body there is at each step."""
        since = steps.astype(np.float64) - self.until
        if self.fade is None:
            return np.where(since >= 0.0, 1.0, 0.0)
        return np.minimum(np.maximum(since / self.fade, 0.0), 1.0)

    def unfelt(self, steps):
        if late := after_last(self.until, steps):
            yield f"changes {late}: its second body is never there"
        elif self.until + (self.fade or 0.0) <= 0.0:
            yield f"has changed by step {number(self.until + (self.fade or 0.0))}: its first body is never there"

    def reach(self, head):
        return (head, head)

    def _mixed(self, steps, first, second):
        w = self.share(steps)[:, None]
        # What has no share is left out rather than multiplied by 0: it may have run off to infinity.
        return np.where(w == 0.0, first, np.where(w == 1.0, second, (1.0 - w) * first + w * second))

    def begin(self, before):
        first, second = (rows[len(rows) - before.head :] for rows in before.inputs)
        return self._mixed(np.arange(-before.head, 0), first, second), {}

    def recurse(self, inputs, state, at):
        return self._mixed(at, *inputs), state

    def ahead(self, steps, state, first, second):
        w = self.share(steps)[:, None]
        mean = self._mixed(steps, first.mean, second.mean)
        return Ahead(mean, (1.0 - w) * (1.0 - w) * first.variance + w * w * second.variance)

    def moments(self, axis, first, second):
        before, after = axis.known(lambda t: 1.0 - self.share(t)), axis.known(self.share)
        return axis.product([before, first]) + axis.product([after, second])

    def equation(self, first, second):
        if self.fade is None:
            return f"y[t] = {first}[t] for t < {number(self.until)}, then {second}[t]"
        share = f"w = min(max({steps_since(self.until)}/{number(self.fade)}, 0), 1)"
        return f"y[t] = (1 − w) {first}[t] + w {second}[t],  {share}"
