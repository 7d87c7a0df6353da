"""Laws of whole numbers as SciPy-like objects: less their mean, with more zeros, and with a parameter that is drawn."""

from __future__ import annotations

from collections.abc import Callable
from functools import cached_property
from typing import Any

import numpy as np

from procgen.chance.laws.distributions import Gaussian
from procgen.theory.lumps import Point, parts_of

NODES = 120
NOTHING = 1e-18
LISTED = 1 << 20  # chances of counts at nodes up to which they are kept in a table
FELT = 1e-8  # weight of a node from which on its step counts
FINE = 0.8  # most steps between nodes in standard deviations of the law: the rule errs by exp(-2 pi² / FINE²), 4e-14
MOST = 2_000  # nodes: a cdf over what is wider is off by some 6e-5
AT_ONCE = 1 << 19  # chances
MARKS = 512
FARTHEST = 2.0**52  # whole numbers are no longer exact beyond
ROUNDING = 1e-12
LARGEST = 0.1 / ROUNDING  # mean about which whole numbers are still told apart


class Centred:
    """A law less its mean; `spacing` is the distance of neighbouring values where only such have a chance, else 0.

    `mean` is given where the law's own leaves out what is too rare for its nodes.
    """

    def __init__(self, law: Any, mean: float | None = None):
        self.law, self.base = law, float(law.mean()) if mean is None else mean
        self.spacing = 1.0 if hasattr(law, "pmf") else 0.0

    def _with_mean(self, x):
        """Values with the mean added again; whole numbers are whole once more, or their chance would be missed."""
        x = np.asarray(x, float) + self.base
        near, size = np.rint(x), np.maximum(np.abs(x), max(abs(self.base), 1.0))
        return np.where(np.abs(x - near) <= ROUNDING * size, near, x) if self.spacing else x

    def cdf(self, x):
        return self.law.cdf(self._with_mean(x))

    def sf(self, x):
        return self.law.sf(self._with_mean(x))

    def pdf(self, x):
        return self.law.pdf(np.asarray(x, float) + self.base)

    def ppf(self, p):
        return self.law.ppf(p) - self.base

    def isf(self, p):
        return self.law.isf(p) - self.base

    def mean(self) -> float:
        return 0.0

    def var(self) -> float:
        return float(self.law.var())


class Inflated:
    """A law of whole numbers, but 0 with a chance of its own before all else (Lambert 1992)."""

    def __init__(self, law: Any, share: float):
        self.law, self.share, self.spacing = law, share, law.spacing

    def cdf(self, x):
        return self.share * (np.asarray(x, float) >= 0.0) + (1.0 - self.share) * self.law.cdf(x)

    def sf(self, x):
        return self.share * (np.asarray(x, float) < 0.0) + (1.0 - self.share) * self.law.sf(x)

    def ppf(self, p):
        p = np.asarray(p, float)
        below = (1.0 - self.share) * self.law.cdf(-self.spacing / 2.0)
        lower = self.law.ppf(np.minimum(p / (1.0 - self.share), 1.0))
        upper = self.law.ppf(np.clip((p - self.share) / (1.0 - self.share), 0.0, 1.0))
        return np.where(
            p <= below, lower, np.where(p <= below + self.share, np.minimum(lower, 0.0), np.maximum(upper, 0.0))
        )

    def isf(self, p):
        return self.ppf(1.0 - np.asarray(p, float))

    def mean(self) -> float:
        return (1.0 - self.share) * float(self.law.mean())

    def var(self) -> float:
        return (1.0 - self.share) * (float(self.law.var()) + self.share * float(self.law.mean()) ** 2)


def _nodes(of: Any, count: int) -> tuple[np.ndarray, np.ndarray]:
    """Weights of equal steps of a normal number, and the quantiles of a law there."""
    norm, z = Gaussian(), np.linspace(-8.3, 8.3, count)
    weights = np.exp(-z * z / 2.0)
    return weights / weights.sum(), np.where(z < 0, of.ppf(norm.cdf(z)), of.isf(norm.sf(z)))


def _nodes_for(law: Callable[[Any], Any], of: Any) -> tuple[np.ndarray, np.ndarray]:
    """Nodes that are close enough beside the spread of the law at each."""
    if isinstance(of, Point):
        return np.ones(1), np.array([of.value])
    weights, at = _nodes(of, NODES)
    apart = np.diff(at) / np.maximum(np.ravel(law(at[1:, None]).std()), 1e-300)
    most = float(np.max(apart[weights[1:] > FELT], initial=0.0))
    return (weights, at) if most <= FINE else _nodes(of, min(int(NODES * most / FINE) + 1, MOST))


class Compound:
    """Whole numbers whose parameter is itself drawn from a continuous law: by an average over its quantiles.

    The parameter's ranks are mapped to normals, where a rule with equal steps is exact to rounding for what is smooth.
    A law whose own spread is small beside the step from one node to the next is not: it gets more of them. Of a
    mixture each part has nodes of its own: between them its quantiles may leap.
    """

    def __init__(self, law: Callable[[Any], Any], of: Any):
        nodes = [(share, *_nodes_for(law, part)) for share, part in parts_of(of)]
        self.weights = np.concatenate([share * weights for share, weights, _ in nodes])
        self.laws = law(np.concatenate([at for *_, at in nodes])[:, None])  # one for each node, a row each

    def _averaged(self, name: str, x: Any) -> np.ndarray:
        x = np.asarray(x, float)
        parts = np.array_split(x.ravel(), 1 + x.size * len(self.weights) // AT_ONCE)
        return np.concatenate([getattr(self.laws, name)(part).T @ self.weights for part in parts]).reshape(x.shape)

    def pmf(self, x):
        return self._averaged("pmf", x)

    def cdf(self, x):
        return self._averaged("cdf", x)

    def sf(self, x):
        return self._averaged("sf", x)

    @cached_property
    def _top(self) -> float:
        """A count beyond which nothing has a chance worth a look, a power of 2."""
        top = 64.0
        while top < FARTHEST and float(self.sf(top)) > NOTHING:
            top *= 2
        return top

    @cached_property
    def _tables(self) -> tuple[np.ndarray, np.ndarray]:
        counts = np.arange(self._top + 1.0)
        return self.cdf(counts), -self.sf(counts)

    def ppf(self, p):
        p = np.asarray(p, float)
        if self._top * len(self.weights) <= LISTED:
            return np.searchsorted(self._tables[0], p).astype(float)
        marks, below, _ = self._marks
        return self._first(lambda k: self.cdf(k) >= p, marks, np.searchsorted(below, p))

    def isf(self, p):
        p = np.asarray(p, float)
        if self._top * len(self.weights) <= LISTED:
            return np.searchsorted(self._tables[1], -p).astype(float)
        marks, _, beyond = self._marks
        return self._first(lambda k: self.sf(k) <= p, marks, np.searchsorted(beyond, -p))

    @cached_property
    def _marks(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Some counts up to the last, each a few in a hundred above the one before, with the areas to both sides."""
        marks = np.unique(np.floor(np.geomspace(1.0, self._top, MARKS)))
        return marks, self.cdf(marks), -self.sf(marks)

    def _first(self, enough: Callable[[np.ndarray], np.ndarray], marks: np.ndarray, at: np.ndarray) -> np.ndarray:
        """The least count of which `enough` is true, by halving between the marks before and at `at`.

        What lies beyond the last is put there.
        """
        below = np.concatenate([[-1.0], marks])[at]
        reached = np.concatenate([marks, [self._top]])[at]
        while np.any(reached - below > 1.0):
            middle = np.floor(0.5 * (below + reached))
            true = enough(middle)
            below, reached = np.where(true, below, middle), np.where(true, middle, reached)
        return reached

    def mean(self) -> float:
        return float(self.weights @ np.ravel(self.laws.mean()))

    def var(self) -> float:
        return float(self.weights @ np.ravel(self.laws.var() + (self.laws.mean() - self.mean()) ** 2))
