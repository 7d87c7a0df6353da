"""White noise: independent shocks of one law."""

from __future__ import annotations

import numpy as np

from procgen.spec.declare import Parameter, Real
from procgen.terms.base import LAW, Ahead, Draw, Term, Unknown, number
from procgen.terms.start import Member


class WhiteNoise(Term):
    kind = "white_noise"
    smooth = "filter"
    family = "noise"
    purpose = "independent shocks with mean 0 and one variance"
    source = "Box & Jenkins (1970), ch. 3"
    example = "white_noise: {sd: 2, law: {student_t: {df: 6}}}"
    knows = "everything: white, strictly stationary, independent"
    noise = True
    by_rows = ("sd", "spread")
    begins_by_rows = True
    parameters = (
        Parameter("sd", "σ", Real(above=0), "standard deviation", default=None, unit="series", per="diffusion"),
        Parameter(
            "spread",
            "γ",
            Real(above=0),
            "unit of a law that has no variance, instead of `sd`",
            default=None,
            unit="series",
            no_per="how a spread scales with the length of a step depends on the law",
        ),
        LAW,
    )

    @classmethod
    def check(cls, values):
        sd, spread, law = values["sd"], values["spread"], values["law"]
        if law.needs_spread:
            if sd is not None:
                yield "sd", f"expected spread in place of sd, for {law} has no variance; write spread: {number(sd)}"
            elif spread is None:
                yield "spread", f"expected the key spread (the unit of {law}, which has no variance: a number above 0)"
        elif spread is not None:
            yield "spread", f"expected sd in place of spread, for {law} has a variance; write sd: {number(spread)}"
        elif sd is None:
            yield "sd", "expected the key sd (standard deviation: a number above 0)"

    def draws(self):
        return (Draw("innovation", self.law),)

    def scale(self):
        """Standard deviation, or the spread of a law without one, in the series' unit."""
        sd, spread = self.values["sd"], self.values.get("spread")
        return spread if sd is None else sd

    def as_member(self):
        """The noise in a joint start with linear terms that it is correlated with."""
        return Member((), (), self.scale())

    def reach(self, head):
        return (head,)

    def begin(self, before):
        if before.joint is not None:
            return before.joint[0][: before.head][::-1], {}
        return self.scale() * before.inputs[0][len(before.inputs[0]) - before.head :], {}

    def early(self):
        return 0

    def recurse(self, inputs, state, at):
        return self.scale() * inputs[0], state

    def invert(self, values, known, state, at):
        return values / self.scale(), {}

    def in_state(self, parts, state):
        return parts[0].times(self.scale())

    def ahead(self, steps, state, *inputs):
        flat = np.zeros((len(steps), 1))
        if self.law.moment(1) is None:
            return Unknown(f"{self.law} has no mean")
        return Ahead(flat, flat + (np.inf if self.law.needs_spread else self.sd * self.sd))

    def moments(self, axis, *inputs):
        return axis.source(self.address, self.law, self.scale())

    def equation(self, *inputs):
        return f"a[t] = {number(self.scale())} z[t],  z independent {self.law}"
