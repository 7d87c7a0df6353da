"""Intermittent demand: nothing at most steps, and a size of its own law when there is something; zero inflation."""

from __future__ import annotations

from typing import Any, ClassVar

import numpy as np

from procgen.chance.laws import LAWS, Gamma, Lognormal
from procgen.chance.portable import log1p
from procgen.chance.tables import NegativeBinomial, Poisson, uniforms
from procgen.spec.declare import Body, Choice, Parameter, Real, Span
from procgen.terms.base import Ahead, Draw, Term, Unknown, number
from procgen.terms.flag import Flag, runs
from procgen.terms.instate import InState
from procgen.terms.support import BINARY, COUNTS, EVERYTHING, Support, finite

UNIFORM = LAWS["uniform"]()
LOST = 1e-6  # chance of a size that rounds to nothing, below which that does not matter
LEAST = 2.0**-60  # of its mean: a size that rounding would make nothing of


class Continuous:
    """Sizes of a law that is made of a standardised one."""

    whole = False

    def __init__(self, mean: float, sd: float, law: Any):
        self.mean, self.sd, self.law = mean, sd, law

    def sizes(self, z):
        return np.maximum(self.mean + self.sd * z, LEAST * self.mean)

    def expression(self, axis, key):
        return axis.source(key, self.law, self.sd) + axis.level(self.mean)

    def ranks(self, x):
        return self.law.distribution().cdf((x - self.mean) / self.sd)


class Whole:
    """Sizes of one and more: a count beside the first piece."""

    whole = True

    def __init__(self, counts: Any):
        self.counts, self.law = counts, UNIFORM
        self.mean, self.sd = 1.0 + counts.mean, float(np.sqrt(counts.variance))

    def sizes(self, z):
        return 1.0 + self.counts.counts(uniforms(z))

    def expression(self, axis, key):
        central = tuple((moment,) for moment in self.counts.central)
        law = self.counts.distribution()
        return axis.drawn(
            key, UNIFORM, axis.level(0.0), (self.mean,), central, given=lambda _: law, discrete=True
        )

    def ranks(self, x):
        return self.counts.distribution().cdf(x - 1.0)


def _demand(values):
    """1 where there is demand and 0 where there is none; NaN where the value is lost."""
    return np.where(np.isnan(values), np.nan, np.where(values > 0.0, 1.0, 0.0))


class Intermittent(Term):
    kind = "intermittent"
    family = "counts and demand"
    purpose = "demand that comes now and then: nothing at most steps, else a size above 0 of a law of its own"
    source = "Croston (1972) for the setting; Feller (1968), ch. XV, for the chain that it comes and goes by"
    example = "intermittent: {share: 0.2, stay: 3, size: 12, sd: 6}"
    knows = "mean, covariance p(1 − p)r^|lag|·m² and variance, kurtosis, covariance of squares"
    outputs = ("occurs",)
    piles = (0.0,)
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("share", "p", Real(above=0, below=1), "share of the steps with demand"),
        Parameter(
            "stay",
            "ℓ",
            Span(),
            "mean number of steps in a row with demand; when absent, every step is drawn by itself",
            default=None,
            unit="steps",
        ),
        Parameter("size", "m", Real(above=0), "mean size where there is demand", unit="series"),
        Parameter("sd", "s", Real(above=0), "standard deviation of a size", default=None, unit="series"),
        Parameter(
            "law",
            "",
            Choice("gamma", "lognormal", "counts"),
            "law of a size; counts: 1, 2, …, one more than a Poisson count, or with `sd` than a negative binomial one",
            default="gamma",
        ),
    )

    @classmethod
    def check(cls, values):
        yield from Flag.check({**values, "spans": ()})
        size, sd, law = values["size"], values["sd"], values["law"]
        if law == "counts":
            yield from _counts(size, sd)
        elif sd is None:
            yield "sd", f"expected sd, the standard deviation of a size, for law: {law}; give one"
        elif law == "gamma" and not 0.01 <= sd / size <= 1.41:
            yield (
                "sd",
                f"expected an sd between 0.01 and 1.41 of the size for law: gamma, got {number(sd / size)} of it; "
                "change sd, or take lognormal",
            )
        elif law == "lognormal" and not 0.001 <= sd / size <= 7.0:
            yield "sd", f"expected an sd between 0.001 and 7 of the size, got {number(sd / size)} of it; change sd"

    def __init__(self, values):
        super().__init__(values)
        self.flag = Flag({"share": self.share, "stay": self.stay, "spans": ()})
        self.law_of_size = self._law_of_size()

    def _law_of_size(self):
        ratio = 0.0 if self.sd is None else self.sd / self.size
        if self.law == "gamma":
            return Continuous(self.size, self.sd, Gamma(1.0 / (ratio * ratio)))
        if self.law == "lognormal":
            return Continuous(self.size, self.sd, Lognormal(float(np.sqrt(log1p(ratio * ratio)))))
        rest = self.size - 1.0
        if self.sd is None:
            return Whole(Poisson(rest))
        return Whole(NegativeBinomial(rest, rest * rest / (self.sd * self.sd - rest)))

    def draws(self):
        return (Draw("chain", UNIFORM), Draw("size", self.law_of_size.law))

    def reach(self, head):
        return (head, head)

    def begin(self, before):
        on, state = self.flag.begin(before)
        return None if on is None else self._values(on, before.inputs[1][len(before.inputs[1]) - before.head :]), state

    def recurse(self, inputs, state, at):
        on, state = self.flag.recurse(inputs[:1], state, at)
        return self._values(on, inputs[1]), state

    def _values(self, on, z):
        return {"": np.where(on > 0.0, self.law_of_size.sizes(z), 0.0), "occurs": on}

    def unranked(self):
        return ""

    def rank(self, values, cell, known, state, at):
        """The chance of demand depends on whether there was some at the step before."""
        lost = self.law_of_size.ranks(np.max(cell[1] - cell[0]) / 2.0)
        if self.stay and not self.law_of_size.whole and lost > LOST:
            return Unknown(f"rounding makes nothing of small sizes of {self.address}: where demand came is not known")
        on = _demand(values)
        enter, stay = self.flag.chances
        first = np.full((1, values.shape[1]), np.nan) if state is None else state["on"]
        before = np.concatenate([first, on[:-1]])
        chance = np.where(np.isnan(before), self.share, enter + (stay - enter) * np.nan_to_num(before))
        lower, upper = (
            np.where(edge >= 0.0, 1.0 - chance + chance * self.law_of_size.ranks(edge), 0.0) for edge in cell
        )
        return (lower, upper), {"on": on[-1:]}

    @property
    def watched(self):
        comes = ("demand",) if self.stay is None else ("demand after demand", "demand after none")
        return (*comes, "large sizes", "small sizes")

    def events(self, values, cell, known, state, at):
        size, on, grain = self.law_of_size, values > 0.0, float(np.max(cell[1] - cell[0]))
        seen = 1.0 - float(size.ranks(grain / 2.0))  # what does not round to nothing
        found = [(x, seen * p) for x, p in runs(_demand(values), state, *self.flag.chances, self.stay is not None)]
        for level, above in ((size.mean + 1.2 * size.sd, True), (size.mean - 0.8 * size.sd, False)):
            edge = (np.floor(level / grain) + 0.5) * grain if grain > LEAST * size.mean else level
            below = float(size.ranks(edge)) - (1.0 - seen)
            chance = (seen - below if above else below) / seen
            found.append((values > edge if above else values < edge, np.where(on, chance, np.nan)))
        return found

    def shown(self, output):
        return self.flag if output == "occurs" else None

    def ahead(self, steps, state, *inputs):
        comes, size = self.flag.ahead(steps, state), self.law_of_size
        square = size.mean * size.mean + size.sd * size.sd
        return Ahead(comes.mean * size.mean, comes.mean * square - (comes.mean * size.mean) ** 2)

    def support(self, *inputs):
        return COUNTS if self.law == "counts" else Support(low=0.0)

    def support_of(self, output):
        return BINARY if output == "occurs" else EVERYTHING

    def moments(self, axis, *inputs):
        occurs = self.flag_moments(axis)
        size = self.law_of_size.expression(axis, f"{self.address}.size")
        return axis.offering(axis.inflated(occurs, size, 1.0 - self.share), occurs=occurs)

    def flag_moments(self, axis):
        enter, stay = self.flag.chances
        return axis.chain(self.address, UNIFORM, self.share, stay - enter)

    def equation(self, *inputs):
        enter, stay = self.flag.chances
        size = self.law_of_size
        comes = f"{number(stay)} after demand, {number(enter)} after none" if self.stay else number(self.share)
        law = f"{self.law} of mean {number(size.mean)}, sd {number(size.sd)}"
        return f"x[t] = b[t]·s[t],  P(b[t] = 1) = {comes},  s independent {law}"


class ZeroInflated(Term):
    kind = "zero_inflated"
    family = "counts and demand"
    purpose = "its body, but 0 at a share of the steps: more zeros than its law has by itself"
    source = "Lambert (1992)"
    example = "zero_inflated: {of: [{poisson: {mean: 4}}], share: 0.3}"
    knows = "mean and covariance from those of its body"
    outputs = ("passes",)
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("of", "", Body(), "what it is applied to; a list is a sum"),
        Parameter("share", "π", Real(above=0, below=1), "share of the steps that are put to 0"),
    )

    def __init__(self, values):
        super().__init__(values)
        self.flag = Flag({"share": 1.0 - self.share, "stay": None, "spans": ()})

    def draws(self):
        return (Draw("chain", UNIFORM),)

    def reach(self, head):
        return (head, head)

    def begin(self, before):
        body, z = (rows[len(rows) - before.head :] for rows in before.inputs)
        return self._values(body, self.flag.recurse((z,), {}, None)[0] if before.head else z), {}

    def recurse(self, inputs, state, at):
        return self._values(inputs[0], self.flag.recurse(inputs[1:], {}, at)[0]), {}

    def _values(self, body, passes):
        return {"": np.where(passes > 0.0, body, 0.0), "passes": passes}

    def chained(self, inputs):
        return self.flag.chained(inputs[1:])

    def in_state(self, parts, state):
        return parts[0] if state else InState(0.0)

    def output_in_state(self, output, state):
        return InState(float(state))

    def shown(self, output):
        return self.flag if output == "passes" else None

    def ahead(self, steps, state, body, *inputs):
        share = 1.0 - self.share
        mean = share * body.mean
        return Ahead(mean, share * (body.variance + body.mean * body.mean) - mean * mean)

    def support(self, body, *inputs):
        return body | finite([0.0])

    def support_of(self, output):
        return BINARY if output == "passes" else EVERYTHING

    def moments(self, axis, body):
        passes = axis.chain(self.address, UNIFORM, 1.0 - self.share, 0.0)
        return axis.offering(axis.inflated(passes, body, self.share), passes=passes)

    def equation(self, body, *inputs):
        return f"y[t] = {body}[t] with probability {number(1.0 - self.share)}, else 0"


def _counts(size, sd):
    if size <= 1.0:
        yield "size", f"expected a mean size above 1 for law: counts, got {number(size)}; sizes are 1, 2, …"
    elif sd is not None and not (size - 1.0) * 1.0001 < sd * sd < (size - 1.0) * 10_000.0:
        yield (
            "sd",
            f"expected an sd above √(size − 1) = {number(np.sqrt(size - 1.0))} for law: counts, got {number(sd)}; "
            "raise sd, or leave it out for Poisson counts",
        )
