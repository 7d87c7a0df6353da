"""One series as a picture sees it: what is stated of it, and what of its paths is there."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.words import number
from procgen.report.pictures.ends import ends
from procgen.report.pictures.sample import Sample
from procgen.report.pictures.seen import deviations
from procgen.report.pictures.stated import Stated
from procgen.spec.records import dataclass

LEVELS = (0.05, 0.25, 0.5, 0.75, 0.95)


@dataclass(frozen=True)
class Subject:
    """A series: its name, its theory, and its sample."""

    name: str
    unit: str | None
    grain: float  # distance of neighbouring values as stored, 0 where it is not declared
    stated: Stated
    sample: Sample
    seasons: tuple[int, ...] = ()  # whole periods of its mean and of its terms, in steps

    @property
    def values(self) -> NDArray:
        """(paths, steps)."""
        return self.sample.values[self.name]

    @property
    def paths(self) -> int:
        return len(self.values)

    @property
    def steps(self) -> int:
        return self.values.shape[1]

    @property
    def grid(self) -> Any:
        return self.sample.spec.time

    @property
    def past(self) -> NDArray:
        """What was recorded before step 0, oldest first; nothing where it leaves from nothing."""
        return np.array(self.sample.spec.series[self.name].before or ())

    @property
    def called(self) -> str:
        """Its name, with the unit."""
        return f"{self.name} ({self.unit})" if self.unit else self.name

    @cached_property
    def deviations(self) -> NDArray | None:
        """Values less their mean at each step; None where no mean can be had."""
        if self.paths and self.values.size:
            return deviations(self.values, self.stated.mean(np.arange(self.steps)))
        return None

    def whose(self) -> str:
        """Whose values are looked at, in a few words."""
        return "the path" if self.paths == 1 else f"{self.paths:,} paths"


def subjects(sample: Sample, theory: Any) -> list[Subject]:
    """Every series of the sample."""
    from procgen.terms.graph import build

    out, graph = [], build(sample.spec)
    for name in sample.values:
        declared = sample.spec.series[name]
        whole = declared.decimals is not None or declared.type == "int64"
        stated = Stated(theory[name], sample.steps, ends(graph.series[name]))
        grain = 10.0 ** -(declared.decimals or 0) if whole else 0.0
        out.append(Subject(name, declared.unit, grain, stated, sample, _seasons(graph, name, stated)))
    return out


def _seasons(graph: Any, name: str, stated: Stated) -> tuple[int, ...]:
    """The periods of what repeats in the mean, and of the terms that a series is made of."""
    terms = [getattr(node, "term", None) for node in graph.order([graph.series[name]])]
    found = [term.values.get("period") for term in terms if term is not None]
    every = {float(p) for p in [*stated.periods, *found] if isinstance(p, int | float)}
    return tuple(sorted(int(p) for p in every if p > 1 and p.is_integer()))


def texts(*columns: Any) -> list[tuple[str, ...]]:
    """Rows of a table from columns of numbers; texts stay as they are."""
    cells = [[x if isinstance(x, str) else number(float(x)) for x in column] for column in columns]
    return list(zip(*cells, strict=True))


def some(count: int, most: int) -> NDArray:
    """At most `most` evenly spread places out of `count`, both ends among them."""
    return np.unique(np.linspace(0, count - 1, min(count, most)).round().astype(np.int64))


def share(inside: NDArray) -> str:
    """How many of some, in words: "46 of 48"."""
    return f"{int(inside.sum()):,} of {inside.size:,}"
