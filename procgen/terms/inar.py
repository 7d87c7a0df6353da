"""Integer-valued autoregression: what is left of the last count, each one staying by chance, and new ones."""

from __future__ import annotations

from functools import cached_property
from typing import ClassVar

import numpy as np

from procgen.chance.laws import LAWS
from procgen.chance.portable import exp, log1p
from procgen.chance.tables import GRID, NegativeBinomial, Poisson, Table, thinning, uniforms
from procgen.chance.thinnings import Thinnings
from procgen.spec.declare import Parameter, Real, Record, Whole
from procgen.terms.base import Ahead, Draw, Term, number
from procgen.terms.rows import each_path, row_in
from procgen.terms.support import COUNTS

UNIFORM = LAWS["uniform"]()
MOST = 2000  # counts for which survivors are tabled
LEAST = 2.0**-70
KEPT = 63  # counts up to which the tables of survivors are kept, some 20 KiB


class Inar(Term):
    kind = "inar"
    family = "counts and demand"
    purpose = "counts with a memory: each one counted stays for the next step by chance, and new ones come"
    source = "McKenzie (1985); Al-Osh & Alzaid (1987); thinning and its laws: Steutel & van Harn (1979)"
    example = "inar: {alpha: 0.6, mean: 5}"
    knows = "mean, covariance σ²α^|lag|, kurtosis, covariance of squares, the law at a step"
    by_rows = ("alpha", "mean")
    begins_by_rows = True
    no_past = "the past of negative binomial counts is not drawn; lag less, or leave out `size` for Poisson ones"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter(
            "alpha",
            "α",
            Real(at_least=0, below=1),
            "chance that one counted stays, and autocorrelation at lag 1",
            no_per="it is a chance to stay for a whole step, which does not scale with the length of a step",
        ),
        Parameter("mean", "μ", Real(above=0, at_most=1000), "mean count"),
        Parameter(
            "size", "r", Real(above=0), "negative binomial counts with variance μ + μ²/r; Poisson when absent", None
        ),
        Parameter(
            "before",
            "",
            Record(Parameter("x", "x₋₁", Whole(at_least=0, at_most=MOST), "count at step −1")),
            "what came before step 0; then step 0 is one step away from it",
            default=None,
        ),
    )
    leaves_from_last = True

    @classmethod
    def check(cls, values):
        if values["size"] is None:
            return
        if _reach(values["mean"], values["size"]) > MOST:
            yield (
                "size",
                f"expected counts that stay below {MOST:,}, got a mean of {number(values['mean'])} with a size of "
                f"{number(values['size'])}, whose law reaches further; raise size, or lower mean",
            )

    @property
    def law(self):
        """The law of the count at every step."""
        return Poisson(self.mean) if self.size is None else NegativeBinomial(self.mean, self.size)

    @cached_property
    def arrivals(self) -> Table:
        """The law of the new ones: by its generating function G(s), that of the counts is F(s) = F(1 − α + αs) G(s)."""
        if self.size is None:
            return Poisson(self.mean * (1.0 - self.alpha)).table
        # The derivative of log G is r (q/(1 − q s) − p/(1 − p s)): positive numbers make up its coefficients.
        each, r = self.mean / self.size, self.size
        q, p = each / (1.0 + each), self.alpha * each / (1.0 + self.alpha * each)
        chance = float(exp(r * (log1p(self.alpha * each) - log1p(each))))
        chances, long, gap, left = [chance], 0.0, 0.0, 1.0 - chance
        while (left > LEAST and chance > LEAST) or len(chances) < 2:
            gap = (q - p) * (chance + long) + p * gap
            long = q * (chance + long)
            chance = r * gap / len(chances)
            chances.append(chance)
        return Table(np.array(chances))

    compiles = True
    _tables = None

    def draws(self):
        return (Draw("innovation", UNIFORM), Draw("thinning", UNIFORM))

    def past(self):
        if self.before is not None:
            return 1
        return None if self.size is None else 0

    def reach(self, head):
        return (head, head) if self.before is None else (0, 0)

    def begin(self, before):
        if self.before is not None:
            x = float(self.before["x"])
            return np.full((before.head, 1), x), {"x": np.full((1, 1), x)}
        if not before.head:
            return None, {}
        # Poisson counts look the same backwards (McKenzie 1985), so the past is drawn from step 0 on down.
        first = self._counts("first", uniforms(before.peek(0)))[0]
        new, stay = (uniforms(rows[len(rows) - before.head :][::-1]) for rows in before.inputs)
        return self._moved(self._counts("arrivals", new), stay, first)[::-1].copy(), {}

    def recurse(self, inputs, state, at):
        new, stay = (uniforms(rows) for rows in inputs)
        if "x" in state:
            out = self._moved(self._counts("arrivals", new), stay, state["x"][0] + np.zeros(new.shape[1]))
        else:  # step 0 is drawn from the law of the counts
            first = self._counts("first", new[:1])
            out = np.concatenate([first, self._moved(self._counts("arrivals", new[1:]), stay[1:], first[0])])
        return out, {"x": out[-1:].copy()}

    @property
    def first(self) -> Table:
        return self.law.table

    @cached_property
    def _each(self) -> list[Inar]:
        """The terms of all paths where numbers are rows."""
        return each_path(self)

    def _counts(self, name, u):
        """Counts of uniforms by the table of this name: `first`, of step 0, or `arrivals`."""
        if not row_in(self.values):
            return getattr(self, name).counts(u)
        return np.stack([getattr(own, name).few(u[:, path]) for path, own in enumerate(self._each)], axis=1)

    def _moved(self, new, stay, x):
        """Counts of the steps of `new` arrivals, from x before them."""
        out, done = np.empty_like(new), 0
        while done < len(new):  # the table grows with the counts that come, which changes no entry
            most = 31
            while most < x.max():
                most = 2 * most + 1  # up to 2047, for which a table has room
            if most > KEPT and np.ndim(self.alpha):
                rows = self._moved_one_by_one(new[done:], stay[done:], x)
            else:
                rows = self._thinning(most).moved(x, new[done:], stay[done:])
            out[done : done + len(rows)] = rows
            done += len(rows)
            x = out[done - 1]
        return out

    def _moved_one_by_one(self, new, stay, x):
        """The same path by path: tables of many large counts would not all find room."""
        each = enumerate(self._each)
        return np.stack([own._moved(new[:, p : p + 1], stay[:, p : p + 1], x[p : p + 1])[:, 0] for p, own in each], 1)

    def _thinning(self, most):
        """The tables of `alpha`, kept while they are small: there may be as many terms as paths."""
        if self._tables is None or self._tables.most != most:
            self._tables = (Thinnings if np.ndim(self.alpha) else thinning)(self.alpha, most)
        tables = self._tables
        if most > KEPT:
            self._tables = None
        return tables

    def unranked(self):
        return ""

    def rank(self, values, cell, known, state, at):
        """Given n before, the count is a binomial one of n and the arrivals: the law is their convolution."""
        values, known = np.rint(values), np.nan if self.before is None else float(self.before["x"])
        first = np.full((1, values.shape[1]), known) if state is None else state["x"]
        before, past = np.concatenate([first, values[:-1]]), self.law.distribution()
        lower, upper = (np.where(np.isnan(before), past.cdf(edge), 0.0) for edge in cell)
        for n in np.unique(before[~np.isnan(before)]):
            here, cdf = before == n, self.following(int(n))
            for out, edge in ((lower, cell[0]), (upper, cell[1])):
                k = np.clip(np.floor(edge[here]).astype(int) + 1, 0, len(cdf) - 1)
                out[here] = cdf[k]
        return (lower, upper), {"x": values[-1:]}

    def following(self, n):
        """P(X ≤ k) after a count of n, for k from −1 on."""
        places = np.concatenate([np.zeros(self.arrivals.first), self.arrivals.places / GRID, np.ones(1)])
        new = np.diff(places, prepend=0.0)
        chances = np.ones(1)
        for _ in range(n):
            chances = np.convolve(chances, [1.0 - self.alpha, self.alpha])
        return np.concatenate([np.zeros(1), np.minimum(np.cumsum(np.convolve(chances, new)), 1.0)])

    def ahead(self, steps, state, *inputs):
        power = self.alpha ** np.arange(1.0, len(steps) + 1.0)[:, None]
        spread = self.law.variance
        if "x" not in state:
            return Ahead(np.full((len(steps), 1), float(self.mean)), np.full((len(steps), 1), spread))
        x = state["x"]
        new = spread * (1.0 - power * power) - self.mean * power * (1.0 - power)
        return Ahead(self.mean + power * (x - self.mean), new + power * (1.0 - power) * x)

    def support(self, *inputs):
        return COUNTS

    def moments(self, axis, *inputs):
        if self.before is not None:
            return self._given(axis, float(self.before["x"]))
        alpha, mean, law = self.alpha, self.mean, self.law
        central = dict(enumerate((1.0, 0.0, *law.central)))

        def covariance(t, s):
            return law.variance * alpha ** np.abs(t - s).astype(float)

        def moment(t, a, s, b):
            """E (x(t) − μ)^a (x(s) − μ)^b, a and b at most 2: given the earlier count n, α^h n stay on average."""
            left = alpha ** np.abs(t - s).astype(float)
            new = law.variance * (1.0 - left * left) - mean * left * (1.0 - left)

            def of(early, late):
                m = {k: central[early + k] for k in range(late + 1)}
                if late < 2:
                    return m[0] if late == 0 else left * m[1]
                return left * left * m[2] + left * (1.0 - left) * (m[1] + mean * m[0]) + new * m[0]

            return np.where(t >= s, of(b, a), of(a, b))

        return axis.stated(
            self.address, UNIFORM, mean, covariance,
            law=lambda step: law.distribution(), moment=moment, discrete=True,
        )  # fmt: skip

    def _given(self, axis, n):
        """Moments from a count of n at step −1: of these α^(t+1) stay on average, and the rest is as it always is."""

        def left(steps):
            return self.alpha ** np.maximum(steps + 1.0, 0.0)

        def mean(steps):
            return self.mean + left(steps) * (n - self.mean)

        def covariance(t, s):
            p = left(np.minimum(t, s))
            new = self.law.variance * (1.0 - p * p) - self.mean * p * (1.0 - p)
            return self.alpha ** np.abs(t - s).astype(float) * (new + p * (1.0 - p) * n)

        why = f"{self.address} leaves from its count at step −1"
        law = self._law_after if self.size is None else None
        return axis.stated(self.address, UNIFORM, mean, covariance, law=law, discrete=True, varies=why)

    def _law_after(self, step):
        """A binomial count of those before and a Poisson one of those since (McKenzie 1985)."""
        from scipy import stats

        p, n = self.alpha ** (step + 1.0), int(self.before["x"])
        new = np.arange(int(_reach(self.mean, np.inf)) + 1)
        chances = np.convolve(stats.binom(n, p).pmf(np.arange(n + 1)), stats.poisson(self.mean * (1.0 - p)).pmf(new))
        return stats.rv_discrete(values=(np.arange(len(chances)), chances / chances.sum()))

    def equation(self, *inputs):
        margin = f"Poisson of mean {number(self.mean)}"
        if self.size is not None:
            margin = f"negative binomial of mean {number(self.mean)} and size {number(self.size)}"
        begins = "" if self.before is None else f",  x[−1] = {number(self.before['x'])}"
        what = f"a such that x is {margin}{' in the end' if begins else ''}"
        return f"x[t] = {number(self.alpha)}∘x[t−1] + a[t],  n∘ counts who of n stay,  {what}{begins}"


def _reach(mean, size):
    """About the largest count that is ever drawn."""
    return mean + 45.0 * (1.0 + mean / size) + 10.0 * float(np.sqrt(mean * (1.0 + mean / size)))
