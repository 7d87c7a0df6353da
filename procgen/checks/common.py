"""Departures that series have in common: laid to the body that these series share, where all of them show it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import combinations
from typing import TYPE_CHECKING, Any

from procgen.checks.words import cause, effects, joined, sort_of
from procgen.spec.records import dataclass

if TYPE_CHECKING:
    from procgen.checks.attribution import Groups

_OF_A_BODY = ("spread", "memory", "clustering")  # a level is added to each series in its own way, and so is a law


@dataclass(frozen=True)
class Told:
    """A departure in a sentence, the sorts of departure that may follow from it, and where else it shows alike."""

    cause: str
    effects: tuple[str, ...] = ()
    alike: str = ""

    @property
    def line(self) -> str:
        """All of it in one line."""
        also = f"; also {', '.join(self.effects)}, which may follow from it" if self.effects else ""
        return self.cause + also + (f"; alike in {self.alike}" if self.alike else "")


def users(spec: Any) -> dict[str, list[str]]:
    """The shared bodies of a spec that several series use themselves, and these series."""
    from procgen.spec.entries import walk

    found: dict[str, list[str]] = {body: [] for body in spec.shared}
    for name, series in spec.series.items():
        named = {entry.values.get("name") for entry, _ in walk(series.of) if entry.kind == "use"}
        for body in found:
            if body in named:
                found[body].append(name)
    return {body: names for body, names in found.items() if len(names) > 1}


def tell(found: Sequence[Groups], shared: Mapping[str, Sequence[str]]) -> list[Told]:
    """What departs, series by series and in order; once for all series that share a body which explains them.

    It does where each of them departs first in the same of its spread, memory or clustering, and every two of them
    depend on each other otherwise than stated.
    """
    by_series = {groups[0][0].series: groups for groups in found if sort_of(groups[0][0]) != "structure"}
    once: dict[int, Told | None] = {}
    for body, names in shared.items():
        pairs = [pair for a, b in combinations(names, 2) for pair in (f"{a} ~ {b}", f"{b} ~ {a}") if pair in by_series]
        if not set(names) <= by_series.keys() or len(pairs) < len(names) * (len(names) - 1) // 2:
            continue
        sorts = {sort_of(by_series[name][0][0]) for name in names}
        if len(sorts) != 1 or not sorts <= set(_OF_A_BODY):
            continue
        mine = [by_series[name] for name in (*names, *pairs)]
        first = next(groups for groups in found if any(groups is one for one in mine[: len(names)]))
        says = f"{body}, which {joined(names)} share: {cause(first[0])}"
        for groups in mine:
            once.setdefault(id(groups), None)
        once[id(first)] = once[id(first)] or Told(says, tuple(effects(first)), joined([*names, *pairs]))
    every = [once.get(id(groups), Told(cause(groups[0]), tuple(effects(groups)))) for groups in found]
    return [each for each in every if each is not None]
