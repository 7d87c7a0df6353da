"""Counts: Poisson and negative binomial numbers, of one mean or of a mean that follows a body."""

from __future__ import annotations

from functools import cached_property
from typing import Any, ClassVar

import numpy as np

from procgen.chance.laws import LAWS
from procgen.chance.portable import exp
from procgen.chance.tables import NegativeBinomial, Poisson, uniforms
from procgen.spec.declare import Body, Parameter, Real
from procgen.terms.base import Ahead, Draw, Term, Unknown, number
from procgen.terms.instate import InState
from procgen.terms.rows import each_path
from procgen.terms.support import COUNTS

UNIFORM = LAWS["uniform"]()
MEAN = Parameter(
    "mean", "μ", Real(above=0, at_most=1e5), "mean count a step; with a body, the factor before its exponential", 1.0
)
OF = Parameter(
    "of", "", Body(), "logarithm of the mean, beside the factor `mean`; a list is a sum; none when absent", default=None
)


TOGETHER = "let the mean of each follow a body, as in of: [{ar: {phi: 0.5, sd: 0.3}}], and name those bodies' terms"


class Counts(Term):
    """What both laws share: subclasses give the `law`, and its central moments as polynomials in the mean."""

    family = "counts and demand"
    outputs = ("intensity",)
    together = TOGETHER
    by_rows = ("mean",)
    begins_by_rows = True

    @property
    def untold(self) -> str:  # type: ignore[override]
        if self.arity > 1:
            where = "its counts do not tell where the body of their mean stands"
            return f"{where}; give the terms in it a `before` of their own"
        return "its counts have nothing to do with those before"

    def law(self) -> Any:
        """The law at the mean `mean`; it can count with other means, too."""
        raise NotImplementedError

    def central(self) -> tuple[tuple[float, ...], ...]:
        """Central moments of orders 2, 3, 4 in powers of the mean, from power 0 on."""
        raise NotImplementedError

    @property
    def compiles(self):
        return self.arity > 1  # of one mean they are looked up

    def draws(self):
        return (Draw("count", UNIFORM),)

    def reach(self, head):
        return (head,) * self.arity

    def begin(self, before):
        return self._counted([rows[len(rows) - before.head :] for rows in before.inputs]), {}

    def recurse(self, inputs, state, at):
        return self._counted(inputs), state

    def _counted(self, inputs):
        *body, z = inputs
        if not body:
            return {"": self._alone(uniforms(z)), "intensity": np.zeros((len(z), 1)) + self.mean}
        intensity = exp(body[0])
        intensity = np.multiply(intensity, self.mean, out=None if np.ndim(self.mean) else intensity)
        return {"": self.law().counts(uniforms(z), intensity), "intensity": intensity}

    def _alone(self, u):
        """Counts whose mean does not move, from a table, or from one a path."""
        if not np.ndim(self.mean):
            return self.law().counts(u)
        if not len(u):
            return u
        return np.stack([table.few(u[:, path]) for path, table in enumerate(self._tables)], axis=1)

    @cached_property
    def _tables(self):
        return [term.law().table for term in each_path(self)]

    def unranked(self):
        return ""

    def in_state(self, parts, state):
        if any(part.shocks for part in parts[:-1]):
            return None
        law = self.law().distribution(self.mean * exp(np.asarray(parts[0].level, float)) if len(parts) > 1 else None)
        return InState(0.0, {key: (1.0, source, law) for key, (_, source, _) in parts[-1].shocks.items()})

    def rank(self, values, cell, known, state, at):
        law = self.law().distribution(self.mean * np.exp(known[0]) if len(known) > 1 else None)
        return (law.cdf(cell[0]), law.cdf(cell[1])), {}

    @property
    def watched(self):
        return ("none",)

    def events(self, values, cell, known, state, at):
        law = self.law().distribution(self.mean * np.exp(known[0]) if len(known) > 1 else None)
        return ((values < 0.5, np.broadcast_to(law.pmf(0.0), values.shape)),)

    def ahead(self, steps, state, *inputs):
        if len(inputs) > 1 and np.any(inputs[0].variance != 0.0):
            return Unknown(f"{self.kind} follows the law of its body's forecast, not its mean and variance alone")
        mean = self.mean * np.exp(inputs[0].mean) if len(inputs) > 1 else np.full((len(steps), 1), float(self.mean))
        return Ahead(mean, np.polynomial.polynomial.polyval(mean, self.central()[0]))

    def support(self, *inputs):
        return COUNTS

    def moments(self, axis, *inputs):
        intensity = inputs[0].exp() * self.mean if inputs else axis.level(self.mean)
        law = self.law()
        counts = axis.drawn(
            self.address, UNIFORM, intensity, (0.0, 1.0), self.central(), given=law.distribution, discrete=True
        )
        return axis.offering(counts, intensity=intensity)

    def equation(self, *inputs):
        mean = number(self.mean) if len(inputs) == 1 else f"exp({inputs[0]}[t])"
        if len(inputs) > 1 and self.mean != 1:
            mean = f"{number(self.mean)} {mean}"
        return f"x[t] | m[t] {self.says()},  m[t] = {mean}"


class PoissonCounts(Counts):
    kind = "poisson"
    purpose = "Poisson counts, of one mean, or of a mean whose logarithm is a body: arrivals, orders, defects"
    source = "Cox (1955) for a mean that moves by chance; Zeger (1988) for its moments; inversion: Temme (1979)"
    example = "poisson: {mean: 4, of: [{ar: {phi: 0.9, total_sd: 0.4}}]}"
    knows = "mean, variance E m + Var m, covariance Cov(m, m′), and the law at a step; the same of a known body"
    parameters: ClassVar[tuple[Parameter, ...]] = (MEAN, OF)

    def law(self):
        return Poisson(self.mean)

    def central(self):
        return (0.0, 1.0), (0.0, 1.0), (0.0, 1.0, 3.0)

    def says(self):
        return "Poisson, variance m[t]"


class NegativeBinomialCounts(Counts):
    kind = "negative_binomial"
    purpose = "counts that vary more than Poisson ones: negative binomial, of one mean or of one that follows a body"
    source = "Johnson, Kemp & Kotz (2005), ch. 5; Zeger (1988) for a mean that moves by chance"
    example = "negative_binomial: {mean: 4, size: 2, of: [{seasonal: {period: 7, harmonics: [{amplitude: 0.5}]}}]}"
    knows = "mean, variance E m + E m²/r + Var m, covariance Cov(m, m′), and the law at a step"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        MEAN,
        Parameter(
            "size", "r", Real(at_least=0.01, at_most=10_000), "the variance is m + m²/r: large r is nearly Poisson"
        ),
        OF,
    )

    @classmethod
    def check(cls, values):
        if values["mean"] > 10_000.0 * values["size"]:
            yield (
                "size",
                f"expected a size of at least mean/10,000 = {number(values['mean'] / 10_000.0)}, got "
                f"{number(values['size'])}; raise size, or lower mean",
            )

    def law(self):
        return NegativeBinomial(self.mean, self.size)

    def central(self):
        r = self.size
        third = (0.0, 1.0, 3.0 / r, 2.0 / (r * r))
        fourth = (0.0, 1.0, 7.0 / r + 3.0, (12.0 / r + 6.0) / r, (6.0 / r + 3.0) / (r * r))
        return (0.0, 1.0, 1.0 / r), third, fourth

    def says(self):
        return f"negative binomial, variance m[t] + m[t]²/{number(self.size)}"
