"""The law of a sum of normal jumps, a Poisson number of them, beside a normal shock: for theory and checks."""

from __future__ import annotations

from typing import Any

import numpy as np

from procgen.chance.laws.mixture import Normals
from procgen.chance.tables import GRID, Poisson
from procgen.spec.records import dataclass


@dataclass(frozen=True)
class Jumps:
    """shift + spread·Z + the sum of N normal jumps of a mean and sd, N Poisson of mean `rate` (Merton 1976)."""

    rate: float
    mean: float
    sd: float
    shift: float = 0.0
    spread: float = 0.0

    @property
    def parts(self) -> tuple[tuple[float, float, float], ...]:
        """(chance, mean, standard deviation) for each number of jumps that a uniform sees."""
        table = Poisson(self.rate).table
        below = np.concatenate([np.zeros(1), table.places / GRID])
        chances, counts = (below[1:] - below[:-1]).tolist(), range(table.first, table.first + len(below))
        return tuple(
            (p, self.shift + n * self.mean, float(np.sqrt(self.spread * self.spread + n * self.sd * self.sd)))
            for p, n in zip(chances, counts, strict=False)
            if p > 0.0
        )

    def distribution(self, start: float = 0.0) -> Any:
        """The law, or with a `start` that of start·exp of it: cdf, sf, pdf, ppf, mean, var, `atoms` and `chance`.

        atoms: the value without shock and jumps, which has a chance of its own (none beside a shock).
        """
        lumps = [part for part in self.parts if part[2] == 0.0]
        spread = [part for part in self.parts if part[2] > 0.0] or [(0.0, self.shift, 1.0)]
        share = sum(part[0] for part in spread)
        rest = Normals(tuple((p / (share or 1.0), mean, sd) for p, mean, sd in spread)).distribution()
        shift, variance = self.shift, self.spread**2 + self.rate * (self.mean**2 + self.sd**2)
        level = self.shift + self.rate * self.mean
        mean, var = level, variance
        if start:
            once = np.expm1(self.mean + self.sd**2 / 2)
            twice = np.expm1(2 * self.mean + 2 * self.sd**2)
            mean = start * np.exp(shift + self.spread**2 / 2 + self.rate * once)
            var = start**2 * np.exp(2 * shift + 2 * self.spread**2 + self.rate * twice) - mean**2

        class Law:
            lump = sum(part[0] for part in lumps)
            atoms = (float(start * np.exp(shift) if start else shift),) if lumps else ()

            def chance(self, x):
                return self.lump * np.isin(np.asarray(x, float), self.atoms)

            def _inner(self, x):
                with np.errstate(divide="ignore", invalid="ignore"):
                    return np.log(np.maximum(np.asarray(x, float), 0.0) / start) if start else np.asarray(x, float)

            def cdf(self, x):
                y = self._inner(x)
                return share * rest.cdf(y) + self.lump * (y >= shift)

            def sf(self, x):
                y = self._inner(x)
                return share * rest.sf(y) + self.lump * (y < shift)

            def pdf(self, x):
                return share * rest.pdf(self._inner(x)) / (np.asarray(x, float) if start else 1.0)

            def ppf(self, p):
                p = np.asarray(p, float)
                upto = share * rest.cdf(shift)
                with np.errstate(divide="ignore", invalid="ignore"):
                    below, beyond = rest.ppf(p / share), rest.isf((1.0 - p) / share)
                y = np.where(p <= upto, below, np.where(p > upto + self.lump, beyond, shift))
                y = np.where(p <= 0.0, -np.inf, np.where(p >= 1.0, np.inf, y))
                return start * np.exp(y) if start else y

            def isf(self, p):
                return self.ppf(1.0 - np.asarray(p, float))

            def mean(self):
                return float(mean)

            def var(self):
                return float(var)

            def std(self):
                return float(np.sqrt(var))

        return Law()
