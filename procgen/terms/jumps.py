"""Jumps: the sum of those that fall into a step, a Poisson number of them."""

from __future__ import annotations

from functools import lru_cache
from typing import Any, ClassVar

import numpy as np

from procgen.chance.jumps import Jumps
from procgen.chance.laws import LAWS
from procgen.chance.tables import Poisson, uniforms
from procgen.spec.declare import Parameter, Real
from procgen.terms.base import LAW, Ahead, Draw, Term, number

UNIFORM = LAWS["uniform"]()
MOST_DRAWN = 2.0  # mean number of jumps a step that are drawn one by one


@lru_cache(maxsize=64)
def law_of(jumps: Jumps) -> Any:
    """The law of a sum of jumps, which SciPy takes milliseconds to make: every tile and every probe asks for it."""
    return jumps.distribution()


class CompoundPoisson(Term):
    kind = "compound_poisson"
    family = "jumps and prices"
    purpose = "the sum of the jumps that fall into a step, a Poisson number of them: claims, shocks, rainfalls"
    source = "Feller (1971), ch. VI.4; Merton (1976)"
    example = "compound_poisson: {rate: {value: 3, per: day}, sd: 2}"
    knows = "mean, variance, kurtosis and covariance of squares where the jumps have these; λm with their number"
    outputs = ("jumps",)
    piles = (0.0,)
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("rate", "λ", Real(above=0, at_most=1000), "mean number of jumps a step", unit="1/step", per="rate"),
        Parameter("mean", "m", Real(), "mean of a jump", default=0.0, unit="series"),
        Parameter("sd", "δ", Real(above=0), "standard deviation of a jump", unit="series"),
        LAW,
    )

    @classmethod
    def check(cls, values):
        if not values["law"].gaussian and values["rate"] > MOST_DRAWN:
            yield (
                "rate",
                f"expected a rate of at most {number(MOST_DRAWN)} a step for jumps that are not normal, each of which "
                f"is drawn by itself, got {number(values['rate'])}; lower rate, or leave out law",
            )

    def draws(self):
        count = Draw("count", UNIFORM)
        if self.law.gaussian:  # a sum of normals is one normal
            return (count, Draw("size", self.law))
        table = Poisson(self.rate).table
        most = table.first + int(np.count_nonzero(table.places < table.places[-1]))
        return (count, *(Draw(f"size {n}", self.law) for n in range(1, most + 1)))

    def reach(self, head):
        return (head,) * self.arity

    def begin(self, before):
        return self._summed([rows[len(rows) - before.head :] for rows in before.inputs]), {}

    def recurse(self, inputs, state, at):
        return self._summed(inputs), state

    def _summed(self, inputs):
        count, *sizes = inputs
        jumps = Poisson(self.rate).counts(uniforms(count))
        if self.law.gaussian:
            return {"": jumps * self.mean + np.sqrt(jumps) * (self.sd * sizes[0]), "jumps": jumps}
        total = np.zeros(jumps.shape)
        for n, z in enumerate(sizes, start=1):
            total = total + np.where(jumps >= n, self.mean + self.sd * z, 0.0)
        return {"": total, "jumps": jumps}

    def unranked(self):
        return "" if self.law.gaussian else "the law of a sum of jumps is computed for normal ones only"

    def rank(self, values, cell, known, state, at):
        law = law_of(Jumps(self.rate, self.mean, self.sd))
        return (law.cdf(cell[0]), law.cdf(cell[1])), {}

    @property
    def watched(self):
        return ("jumps", "large jumps")

    def events(self, values, cell, known, state, at):
        law, grain = law_of(Jumps(self.rate, self.mean, self.sd)), float(np.max(cell[1] - cell[0]))
        jumped = 1.0 - float(law.cdf(grain / 2.0) - law.cdf(np.nextafter(-grain / 2.0, -np.inf)))
        large = abs(self.mean) + self.sd
        edge = (np.floor(large / grain) + 0.5) * grain if grain > 1e-9 * large else large
        beyond = float(law.cdf(-edge) + law.sf(edge)) / jumped
        on = (cell[0] >= 0.0) | (cell[1] < 0.0)
        return (on, np.full(values.shape, jumped)), (np.abs(values) > edge, np.where(on, beyond, np.nan))

    def shown(self, output):
        return Jumped(self.rate) if output == "jumps" else None

    def ahead(self, steps, state, *inputs):
        flat = np.ones((len(steps), 1))
        return Ahead(self.rate * self.mean * flat, self.rate * (self.mean**2 + self.sd**2) * flat)

    def moments(self, axis, *inputs):
        m, sd = self.mean, self.sd
        z = [np.inf if (moment := self.law.moment(k)) is None else float(moment) for k in range(5)]
        two = m * m + sd * sd
        three = m**3 + 3.0 * m * sd**2 + sd**3 * z[3]
        four = m**4 + 6.0 * m**2 * sd**2 + 4.0 * m * sd**3 * z[3] + sd**4 * z[4]
        rate, key = axis.level(self.rate), self.address
        central = (0.0, two), (0.0, three), (0.0, four, 3.0 * two * two)
        law = (lambda _: law_of(Jumps(self.rate, m, sd))) if self.law.gaussian else None
        total = axis.drawn(key, UNIFORM, rate, (0.0, m), central, law, lumpy=True, highest=self.law.highest_moment)
        poisson = (0.0, 1.0), (0.0, 1.0), (0.0, 1.0, 3.0)
        jumps = axis.drawn(
            f"{key}.jumps", UNIFORM, rate, (0.0, 1.0), poisson, discrete=True, beside=total, together=(0.0, m)
        )
        return axis.offering(total, jumps=jumps)

    def equation(self, *inputs):
        jump = f"{number(self.mean)} + {number(self.sd)} z,  z independent {self.law}"
        return f"x[t] = J₁ + … + J_N[t],  N[t] Poisson of mean {number(self.rate)},  J = {jump}"


class Jumped:
    """How many jumps fall into each step from `first` on, as a hidden output shows it to checks; none before."""

    watched = ("jumps",)

    def __init__(self, rate: float, first: int = 0):
        self.law, self.first = Poisson(rate).distribution(), first

    def unranked(self) -> str:
        return ""

    def rank(self, values, cell, known, state, at):
        lost = np.where(at < self.first, np.nan, 0.0)[:, None]
        return (self.law.cdf(cell[0]) + lost, self.law.cdf(cell[1]) + lost), {}

    def events(self, values, cell, known, state, at):
        chance = np.where(at < self.first, np.nan, float(self.law.sf(0.0)))[:, None]
        return ((values > 0.5, chance + np.zeros(values.shape)),)
