"""Values on a lattice: rounded to the nearest multiple of a number, or down, or up to one."""

from __future__ import annotations

import numpy as np

from procgen.spec.declare import Parameter, Real
from procgen.terms.base import number
from procgen.terms.combine import OF
from procgen.terms.shape import Elementwise
from procgen.terms.support import Support

TO = Parameter("to", "Δ", Real(above=0), "what the values are multiples of", default=1.0, unit="series")


class Round(Elementwise):
    kind = "round"
    purpose = "its body to the nearest multiple of a number, the even one of two: readings, lots, price ticks"
    source = "Widrow & Kollár (2008), ch. 4, for the moments; Plackett (1954) for the covariance"
    example = "round: {of: [{ar: {phi: 0.8, total_sd: 2}}], to: 0.5}"
    knows = "mean, variance and law of a Gaussian body; its covariance to 1e-10 of the variance"
    parameters = (OF, TO)
    shift = 0.0  # by which a body is moved, in multiples, so that to round it is to do what the term does

    def of_value(self, x):
        return np.rint(x / self.to) * self.to

    def support(self, body):
        ends = body.mapped(lambda x: float(self.of_value(np.float64(x))))
        return ends if ends.values is not None else Support(ends.low, ends.high, self.to)

    def moments(self, axis, body):
        return axis.rounded(body, self.of_value, self.to, self.shift)

    def equation(self, body):
        return f"y[t] = {number(self.to)} · round({body}[t]/{number(self.to)})"


class Floor(Round):
    kind = "floor"
    purpose = "its body down to a multiple of a number: full pallets, completed years"
    example = "floor: {of: [{ar: {phi: 0.8, total_sd: 2}}, {constant: 20}], to: 4}"
    shift = -0.5

    def of_value(self, x):
        return np.floor(x / self.to) * self.to

    def equation(self, body):
        return f"y[t] = {number(self.to)} · ⌊{body}[t]/{number(self.to)}⌋"


class Ceiling(Round):
    kind = "ceiling"
    purpose = "its body up to a multiple of a number: begun hours, packs that must be ordered"
    example = "ceiling: {of: [{ar: {phi: 0.8, total_sd: 2}}, {constant: 20}], to: 4}"
    shift = 0.5

    def of_value(self, x):
        return -np.floor(-x / self.to) * self.to

    def equation(self, body):
        return f"y[t] = {number(self.to)} · ⌈{body}[t]/{number(self.to)}⌉"
