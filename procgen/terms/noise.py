"""White noise: independent shocks of one law."""

from __future__ import annotations

import numpy as np

from procgen.spec.declare import Parameter, Real
from procgen.terms.base import LAW, Ahead, Draw, Term, number
from procgen.terms.start import Member


class WhiteNoise(Term):
    kind = "white_noise"
    family = "noise"
    purpose = "independent shocks with mean 0 and one variance"
    source = "Box & Jenkins (1970), ch. 3"
    example = "white_noise: {sd: 2, law: {student_t: {df: 6}}}"
    knows = "everything: white, strictly stationary, independent"
    noise = True
    by_rows = ("sd",)
    parameters = (
        Parameter("sd", "σ", Real(above=0), "standard deviation", unit="series", per="diffusion"),
        LAW,
    )

    def draws(self):
        return (Draw("innovation", self.law),)

    def scale(self):
        """Standard deviation, in the series' unit."""
        return self.sd

    def as_member(self):
        """The noise in a joint start with linear terms that it is correlated with."""
        return Member((), (), self.sd)

    def reach(self, head):
        return (head,)

    def begin(self, before):
        if before.joint is not None:
            return before.joint[0][: before.head][::-1], {}
        return self.sd * before.inputs[0][len(before.inputs[0]) - before.head :], {}

    def recurse(self, inputs, state, at):
        return self.sd * inputs[0], state

    def invert(self, values, known, state, at):
        return values / self.sd, {}

    def ahead(self, steps, state, *inputs):
        flat = np.zeros((len(steps), 1))
        return Ahead(flat, flat + self.sd * self.sd)

    def moments(self, axis, *inputs):
        return axis.source(self.address, self.law, self.sd)

    def equation(self, *inputs):
        return f"a[t] = {number(self.sd)} z[t],  z independent {self.law}"
