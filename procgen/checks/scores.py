"""From recovered shocks to scores: uniforms, normal scores, and the shape of their distribution in bins.

A shock z of a stated law F gives u = F(z) and g = Phi^-1(u); under the theory these are uniform and standard normal,
independent of each other (Rosenblatt 1952). Counts in equal bins of u keep all that the tests of the law need.
"""

from __future__ import annotations

from functools import cache, cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.saddle import REACH, Nodes, Summand, made_of, nodes
from procgen.theory.mixedlaw import Normal

BINS = 4096
_ORDER = 8  # Legendre components; two of them are spent on level and spread
_REACH, _CELLS = 16.0, 1 << 16
_FINE = 1e-6  # the error of the table that is let stand
_LIMIT = 8.3  # the size of a normal score that no shock of the stated law reaches (1e-16)
_CLEAR, _DOUBT = 1e-3, 0.1  # beyond an end by more than this is no rounding error; more room than this is unclear
_ROOM = 1e-7  # how far beyond the ends of a bounded law a shock may lie by rounding in double precision

ENDS = ("within the law's ends", "lie beyond the ends of the stated law", "no shock lies beyond them")


class Scores:
    """Maps the standardised shocks of one law to scores, and binned counts to test statistics.

    Parameters
    ----------
    law : Law
        As in the chance room: `gaussian`, `distribution()`.
    beyond : texts
        Of the check that no shock lies where the law has none: its name, what is wrong with one, what is expected.

    Attributes
    ----------
    room : float
        How far beyond the ends of a bounded law rounding may carry a shock.
    """

    def __init__(self, law: Any, beyond: tuple[str, str, str] = ENDS):
        self.law, self.beyond = law, beyond
        self.gaussian = bool(law.gaussian)
        self.room = _ROOM
        self._summands: dict[tuple[int, int], Summand] = {}

    @cached_property
    def distribution(self) -> Any:
        return Normal() if self.gaussian else self.law.distribution()

    def normal_scores(self, z: NDArray) -> NDArray:
        """g for shocks z of any shape: by a fine table (error below 1e-6), exactly where the table is too coarse."""
        if self.gaussian:
            return z
        z = self.folded(z)
        place = (z + _REACH) * (_CELLS / (2 * _REACH))
        cell = np.fmin(np.fmax(place, 0.0), _CELLS - 1.0).astype(np.int64)  # what is unknown has a cell, and no score
        part = place - cell
        g = self._table[cell] + part * (self._table[cell + 1] - self._table[cell])
        far = (place < 0) | (place > _CELLS) | ~np.isfinite(g) | self._rough[cell]
        if far.any():
            g[far] = self._exact(z[far])
        return g

    @property
    def bounded(self) -> bool:
        """Whether the law ends somewhere, and rounding leaves no doubt of what lies beyond."""
        return not self.gaussian and bool(np.isfinite(self._ends).any()) and self.room < _DOUBT

    def outside(self, z: NDArray) -> int:
        """How many of the shocks lie farther beyond the ends of the law than rounding can carry them."""
        if not self.bounded:
            return 0
        low, high = self._ends
        room = max(self.room, _CLEAR)
        return int(np.count_nonzero((z < low - room) | (z > high + room)))

    def folded(self, z: NDArray) -> NDArray:
        """Shocks beyond an end of the law, mirrored back.

        A score beyond an end is boundless. Where nothing but rounding put the shock there, the mirror restores a
        density that is level up to the end; where the law is another one, `outside` has counted the shock, and the
        mirror keeps a few of them from outweighing all the rest in every other test.
        """
        low, high = self._ends
        below, above = z < low, z > high
        if not below.any() and not above.any():
            return z
        return np.where(below, 2 * low - z, np.where(above, 2 * high - z, z))

    @cached_property
    def _ends(self) -> tuple[float, float]:
        return float(self.distribution.ppf(0.0)), float(self.distribution.ppf(1.0))

    @cached_property
    def _table(self) -> NDArray:
        return self._exact(np.linspace(-_REACH, _REACH, _CELLS + 1))

    @cached_property
    def _rough(self) -> NDArray[np.bool_]:
        """Cells in which a straight line is no match for g: where a density ends, g has no slope at all."""
        width = 2 * _REACH / _CELLS
        bend = np.abs(np.diff(self._table, 2, prepend=self._table[0], append=self._table[-1])) / 8
        rough = ~(np.maximum(bend[:-1], bend[1:]) < _FINE)
        rough[[0, -1]] = True
        for end in self._ends:
            if abs(end) < _REACH:
                at = int((end + _REACH) / width)
                rough[max(0, at - 1) : at + 2] = True
        return rough

    def _exact(self, z: NDArray) -> NDArray:
        from scipy.special import ndtri

        tiny = 1e-300
        below = z < self.median
        g = np.empty(np.shape(z))
        g[below] = ndtri(np.maximum(self.distribution.cdf(z[below]), tiny))
        g[~below] = -ndtri(np.maximum(self.distribution.sf(z[~below]), tiny))
        return np.clip(g, -_LIMIT, _LIMIT)  # what cannot be must not outweigh all the rest

    @cached_property
    def median(self) -> float:
        return float(self.distribution.ppf(0.5))

    @cached_property
    def components(self) -> NDArray:
        """(BINS, 8) orthonormal functions on the bins: each has mean 0 and variance 1 over equal bins.

        Columns 0 and 1 answer first to a shift and to a change of scale of z; the other six answer to neither,
        so they speak of the shape alone (Neyman 1937, smooth tests, with the two directions projected out).
        """
        return _normal_components() if self.gaussian else _components(self.distribution)

    @cached_property
    def component_laws(self) -> list[Summand]:
        """The law of each component of one shock."""
        return [Summand(column, np.ones(BINS)) for column in self.components.T]

    def summand(self, order: int, n: int) -> Summand:
        """The law of one shock (order 1) or its square (order 2), without what no sum of n may rest on."""
        if (order, n) not in self._summands:
            sd = np.sqrt(max(float(self.law.moment(2 * order)) - float(order == 2), 0.0))
            self._summands[order, n] = made_of(self.nodes, lambda z: z**order, REACH * sd * np.sqrt(n))
        return self._summands[order, n]

    @cached_property
    def nodes(self) -> Nodes:
        """The law as values and weights."""
        return nodes(self.distribution)

    def component_sums(self, counts: NDArray) -> NDArray:
        """(8,) standardised component sums, each asymptotically standard normal."""
        return (counts @ self.components) / np.sqrt(counts.sum())


@cache
def _normal_components() -> NDArray:
    """Those of all normal shocks."""
    return _components(Normal())


def _components(distribution: Any) -> NDArray:
    """See `Scores.components`."""
    centre = (2 * np.arange(BINS) + 1) / BINS - 1
    basis = np.polynomial.legendre.legvander(centre, _ORDER)[:, 1:]
    basis -= basis.mean(axis=0)
    gram = np.einsum("bi,bj->ij", basis, basis) / BINS
    basis = np.einsum("bi,ij->bj", basis, np.linalg.inv(np.linalg.cholesky(gram)).T)
    edges = np.arange(1, BINS) / BINS
    q = distribution.ppf(edges)
    density = distribution.pdf(q)
    rise = np.diff(basis, axis=0)
    level, spread = np.einsum("bi,b->i", rise, density), np.einsum("bi,b->i", rise, q * density)
    spread_first = np.linalg.qr(np.column_stack([level, spread, np.eye(_ORDER)]))[0]
    signs = np.sign([level @ spread_first[:, 0], spread @ spread_first[:, 1]])
    spread_first[:, :2] *= np.where(signs == 0, 1.0, signs)
    return np.einsum("bi,ij->bj", basis, spread_first)


def largest_gap(counts: NDArray) -> float:
    """Kolmogorov's distance at the bin edges."""
    n = counts.sum()
    return float(np.max(np.abs(np.cumsum(counts) / n - np.arange(1, BINS + 1) / BINS)))


def cluster_scores(u: NDArray) -> NDArray:
    """sqrt(5) times the second Legendre polynomial of u: bounded, mean 0, variance 1, large where |z| is large."""
    v = u - 0.5
    v *= v
    v *= 6 * np.sqrt(5.0)
    v -= 0.5 * np.sqrt(5.0)
    return v
