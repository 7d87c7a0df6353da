"""What is special to whole numbers and to values with a chance of their own: ranks given the past, shares, events.

An event whose chance given the past is p at each step happens Σp times but for a martingale of variance Σp(1 − p): the
number of stays, of jumps, of steps with demand is judged so, whatever the runs are like.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.blocks import across, add_products
from procgen.checks.verdict import Check
from procgen.terms.base import Unknown
from procgen.terms.ranks import Ranking, ranking
from procgen.theory.lumps import nearest

FEW = 25.0  # variance of a number of events, at least, that is judged
NEAR = 1e-12  # of the size of values: what is as near to an atom is it
_SHARES = (0.02, 0.98)  # chances of a value between which its share is worth a check
_BESIDE, _ROUNDED = 1e-6, 2.0**-50  # of the spread and the size of a law: how far from an atom rounding carries a value
_FEW_ATOMS = 4  # more values with a chance of their own are judged by their law alone


def lumpy(theory: Any) -> bool:
    """Whether some values of a series have a chance of their own."""
    return bool(theory.discrete or getattr(theory, "lumpy", False))


def strayed(graph: Any, series: str, theory: Any, grain: float, steps: int) -> float:
    """How far from whole numbers stored values are where they are undone; infinite where that cannot be told."""
    if not grain or getattr(theory, "mixture", None) is not None:
        return 0.0
    way = ranking(graph, series, theory.discrete, grain)
    return way.strayed(steps) if isinstance(way, Ranking) and not way.plain else 0.0


def ranked(graph: Any, series: str, theory: Any, grain: float, off: float = math.inf) -> Ranking | Unknown | None:
    """A way to the ranks of a series given its past; why there is none, or None where no term has ranks.

    off: how far whole numbers have `strayed`.
    """
    if getattr(theory, "mixture", None) is not None:
        return None
    way = ranking(graph, series, theory.discrete, grain)
    if isinstance(way, Ranking) and grain and not way.plain and not way.told_apart(off):
        return Unknown(f"values of {series} are rounded after they were changed: what lies behind them is not known")
    return way


def whole_numbers(series: str, probe: str, law: Any, x: NDArray, seed: int, grain: float = 0.0) -> Iterator[Check]:
    """A law of whole numbers (or of few values) at a probe: ranks spread over their steps, and the least.

    law: of the values x, with `spacing`, `cdf` and `ppf`. grain: the distance of neighbouring values as stored, or 0.
    """
    if not math.isfinite(law.spacing):
        note = "values lie on several grids, whose law is not computed"
        yield Check(series, "law", probe, "law", outcome="untestable", note=note)
        return
    reach = max(law.spacing, grain) / 2.0
    below, upto = law.cdf(x - reach), law.cdf(x + reach)
    v = np.random.default_rng(seed).random(len(x))
    note = f"Anderson–Darling, {len(x)} paths, ranks spread over the chance of each value"
    yield Check.of(series, "law", probe, "law", judge.anderson_darling(below + v * (upto - below)), note)
    least = law.spacing * round(float(law.ppf(1e-12)) / law.spacing, 6)
    chance = float(law.cdf(least + law.spacing / 2.0))
    if _SHARES[0] < chance < _SHARES[1]:
        count = int(np.count_nonzero(x < least + law.spacing / 2.0))
        yield Check.of(series, f"share of {least:.6g}", probe, "law", judge.share(count, len(x), chance))


def lumps(series: str, probe: str, law: Any, x: NDArray, seed: int, grain: float = 0.0) -> Iterator[Check]:
    """A law in which some values have a chance of their own: ranks spread over it, and how often such a value is met.

    law: of the values x, with `atoms`, `chance`, `cdf` and `ppf`. grain: the distance of neighbouring values as stored.
    """
    v = np.random.default_rng(seed).random(len(x))
    if grain:
        below, upto = law.cdf(x - grain / 2.0), law.cdf(x + grain / 2.0)
    else:
        x = _at_atoms(law, x)
        upto = law.cdf(x)
        below = upto - law.chance(x)
    note = f"Anderson–Darling, {len(x)} paths, ranks spread over the chance of a value"
    yield Check.of(series, "law", probe, "law", judge.anderson_darling(below + v * (upto - below)), note)
    atoms = law.atoms if len(law.atoms) <= _FEW_ATOMS else ()
    if float(sum(law.chance(np.array(atoms)))) > 1.0 - NEAR:
        atoms = atoms[:-1]  # the share of the last one follows
    for atom in atoms:
        chance, met = float(law.chance(atom)), x == atom
        if grain:
            stored = grain * np.rint(atom / grain)
            chance = float(law.cdf(stored + grain / 2.0) - law.cdf(stored - grain / 2.0))
            met = np.abs(x - stored) < grain / 2.0
        if _SHARES[0] < chance < _SHARES[1]:
            count = int(np.count_nonzero(met))
            yield Check.of(series, f"share of {atom + 0.0:.6g}", probe, "law", judge.share(count, len(x), chance))


def _at_atoms(law: Any, x: NDArray) -> NDArray:
    """Values with those that are an atom but for rounding put on it."""
    atom = nearest(law.atoms, x)
    spread, size = float(law.ppf(0.9)) - float(law.ppf(0.1)), max(map(abs, law.atoms))
    near = min(NEAR * (spread + size), _BESIDE * spread + _ROUNDED * size)  # of large atoms a little share is much
    return np.where(np.abs(x - atom) <= near, atom, x)


class EventSums:
    """Numbers of the events that a term watches, and what chance says of them; mergeable."""

    def __init__(self, names: Sequence[str]):
        self.names = names
        self.sums = np.zeros((len(names), 5))  # cases, events, sums of chances, of their variances, of third moments

    def lane(self, paths: int) -> NDArray:
        """What is carried for one range of paths: the same sums by path."""
        return np.zeros((*self.sums.shape, paths))

    def absorb(self, seen: Sequence[tuple[NDArray, NDArray]], first_step: int, lane: NDArray) -> None:
        """Add a tile: for each name whether it has happened (steps, paths), and its chance (NaN: none taken)."""
        for sums, (happened, p) in zip(lane, seen, strict=True):
            asked, v = np.where(np.isnan(p), np.nan, 1.0), p * (1.0 - p)
            self.add((asked, asked * happened, p, v, v * (1.0 - 2.0 * p)), first_step, sums)

    def add(self, rows: Sequence[NDArray], first_step: int, sums: NDArray) -> None:
        """Add the five rows of one event, (steps, paths) each."""
        for total, row in zip(sums, rows, strict=True):
            add_products(total, row, None, first_step)

    def finish(self, lane: NDArray) -> None:
        """Close a range of paths."""
        self.sums += across(lane)

    def merge(self, other: EventSums) -> None:
        self.sums += other.sums

    def checks(self, series: str) -> Iterator[Check]:
        """The share of each event, where enough of them can be expected."""
        for name, (n, count, mean, variance, third) in zip(self.names, self.sums.tolist(), strict=True):
            what, kind = f"share: {name}", "memory" if " after " in name else "level"
            if variance < FEW:
                if n:
                    note = f"{mean:.3g} of {n:.0f} are expected, too few to be judged by their number"
                    yield Check(series, what, "all steps", kind, mean / n, count / n, outcome="reported", note=note)
                continue
            z, root = (count - mean) / math.sqrt(variance), math.sqrt(variance)
            finding = replace(judge.unit(z, root / n, mean / n, third / root**3), estimate=count / n)
            doubt = judge.excess_doubt(n / variance - 6.0, int(n), "cases")
            yield Check.of(series, what, "all steps", kind, judge.with_doubt(finding, doubt))
