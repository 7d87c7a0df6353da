"""Every sequence of shocks there is: exact expectations of what the value code makes of laws of a few points.

A law of 2 or 4 equally likely points takes the place of the laws; each primary draw of a spec (a stream at a step) is
a digit of the number of the path, so that the paths are all the sequences of draws, once each, and a mean over paths is
an expectation. No theory is in it, and no sampling.
"""

from __future__ import annotations

import math
from typing import ClassVar

import numpy as np
from scipy import stats
from scipy.special import ndtr

from procgen.chance.laws import LAWS
from procgen.chance.laws.base import Law
from procgen.chance.streams import Stream
from procgen.spec.reader import read_text
from procgen.spec.records import dataclass
from procgen.terms import catalogue
from procgen.terms.graph import Graph, build

from ..terms.helpers import draw

MOST_PATHS = 1 << 18


class Points(Law):
    """Equally likely points with mean 0 and variance 1."""

    points: ClassVar[tuple[float, ...]]
    source: ClassVar[str] = "from its definition"

    def _of(self, u):
        return np.array(self.points)[np.floor(np.asarray(u) * len(self.points)).astype(int)]

    def shocks(self, u, out=None):
        return self._of(u)

    def shocks_from_normals(self, z, out=None):
        return self._of(np.minimum(ndtr(z), 1 - 2.0**-53))

    def moment(self, k):
        return math.fsum(x**k for x in self.points) / len(self.points)

    @property
    def mean_size(self):
        return self.expect(abs)

    def expect(self, f):
        return math.fsum(float(f(x)) for x in self.points) / len(self.points)

    def distribution(self):
        points, count = np.unique(self.points, return_counts=True)
        return stats.rv_discrete(values=(points, count / len(self.points)))()


@dataclass(frozen=True)
class Coin(Points):
    """-1 or 1: excess kurtosis -2."""

    name: ClassVar[str] = "coin"
    points: ClassVar[tuple[float, ...]] = (-1.0, 1.0)


@dataclass(frozen=True)
class Skewed(Points):
    """sqrt(3) once in four times, else -1/sqrt(3): skewness 2/sqrt(3)."""

    name: ClassVar[str] = "skewed"
    points: ClassVar[tuple[float, ...]] = (-1 / math.sqrt(3), -1 / math.sqrt(3), -1 / math.sqrt(3), math.sqrt(3))


@dataclass(frozen=True)
class Quartet(Points):
    """Four different points, symmetric: E z^4 = 1.64."""

    name: ClassVar[str] = "quartet"
    points: ClassVar[tuple[float, ...]] = (-3 / math.sqrt(5), -1 / math.sqrt(5), 1 / math.sqrt(5), 3 / math.sqrt(5))


OWN = {**LAWS, **{law.name: law for law in (Coin, Skewed, Quartet)}}


def graph_of(series: str, steps: int, rest: str = "") -> Graph:
    """The graph of a spec that may name the laws coin, skewed and quartet."""
    time = f"{{start: 2027-01-04, every: 1d, steps: {steps}}}"
    text = f"procgen: 1\nseed: 11\npaths: 1\ntime: {time}\n{rest}\nseries:\n{series}\n"
    return build(read_text(text, catalogue(), OWN))


def every_path(graph: Graph, steps: int, base: int, monkeypatch) -> dict[str, np.ndarray]:
    """All series along every sequence of draws from `base` equally likely uniforms, (steps, paths)."""
    places: dict[tuple, int] = {}

    def digits(self, first_path, paths, first_step, count, out=None):
        u = np.empty((count, paths)) if out is None else out
        number = np.arange(first_path, first_path + paths)
        for row in range(count):
            place = places.setdefault((self.key, first_step + row), len(places))
            u[row] = (number // base**place % base + 0.5) / base
        return u

    with monkeypatch.context() as patch:
        patch.setattr(Stream, "uniforms", digits)
        draw(graph, 0, 1, [steps])
        paths = base ** len(places)
        assert paths <= MOST_PATHS, f"{len(places)} draws of {base} points are too many sequences"
        return draw(graph, 0, paths, [steps])
