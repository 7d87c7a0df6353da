"""Laws for the tests of theory, made from SciPy alone, so that they depend on no other room."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import stats
from scipy.integrate import quad


@dataclass(frozen=True)
class ReferenceLaw:
    """A standardised law as the theory room sees one; `excess` and `highest` from the textbook formulas."""

    name: str
    base: str
    args: tuple[float, ...] = ()
    excess_kurtosis: float | None = 0.0
    highest_moment: float = np.inf
    skewness: float = 0.0
    needs_spread = False
    points = None

    @property
    def gaussian(self) -> bool:
        return self.base == "norm"

    def distribution(self):
        law = getattr(stats, self.base)(*self.args)
        scale = 1.0 / law.std()
        return getattr(stats, self.base)(*self.args, loc=-law.mean() * scale, scale=scale)

    def moment(self, k):
        return float(self.distribution().moment(k)) if k < self.highest_moment else None

    def shocks_from_normals(self, z):
        law = self.distribution()
        return np.where(z < 0, law.ppf(stats.norm.cdf(z)), law.isf(stats.norm.sf(z)))

    def expect(self, f):
        law = self.distribution()
        halves = (quad(lambda z: f(z) * law.pdf(z), *ends, limit=400)[0] for ends in ((-np.inf, 0), (0, np.inf)))
        return sum(halves)


NORMAL = ReferenceLaw("normal", "norm")
LAPLACE = ReferenceLaw("laplace", "laplace", (), 3.0)
UNIFORM = ReferenceLaw("uniform", "uniform", (), -1.2)
EXPONENTIAL = ReferenceLaw("exponential", "expon", (), 6.0, np.inf, 2.0)


def student(df: float) -> ReferenceLaw:
    """Student's t, standardised: excess kurtosis 6/(df - 4) (Bollerslev 1987; REFERENCES 3.3)."""
    return ReferenceLaw(f"t{df:g}", "t", (df,), 6.0 / (df - 4.0) if df > 4 else None, df)
