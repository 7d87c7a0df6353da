"""What the values of each series of a spec depend on, so that two specs can be compared without drawing.

A recipe lists the terms behind a series: its own, those of what it uses, and those that its correlated shocks and
joint starts need, each with its numbers and the addresses of its draws. Two series with one recipe have the same
values; where recipes differ, the terms that differ are those that may have moved them.
"""

from __future__ import annotations

from collections.abc import Hashable, Iterator
from dataclasses import replace
from typing import Any

from procgen.spec.draws import TableDraw
from procgen.spec.entries import children, walk
from procgen.spec.model import Entry, Frozen, Spec
from procgen.spec.records import dataclass
from procgen.spec.varying import PATH, Varying, replaced
from procgen.terms import catalogue
from procgen.terms.graph import Graph, build

AGAIN = "again"  # with the place among what was met, since names need not tell
Part = tuple[str, Hashable]
Address = tuple[Hashable, ...]


@dataclass(frozen=True)
class Recipe:
    """What a series is made of: terms by name in the order in which they are met, and where shocks are drawn."""

    parts: tuple[Part, ...]
    draws: frozenset[Address]

    def moved_from(self, other: Recipe) -> tuple[str, ...]:
        """Return the names of terms that differ from those of another recipe; () when the values are the same.

        A name alone moves nothing: where something is drawn, its address stands in the recipe.
        """
        if [part for _, part in self.parts] == [part for _, part in other.parts]:
            return ()
        for exact in (False, True):
            mine, theirs = self._by_name(exact), other._by_name(exact)
            names = [name for name in {**theirs, **mine} if mine.get(name) != theirs.get(name)]
            if names:
                return tuple(names)
        return ("the order of terms",)

    def shares(self, other: Recipe) -> bool:
        """Return whether some draw is the same, or nothing is drawn in either."""
        return bool(self.draws & other.draws) or not (self.draws or other.draws)

    def _by_name(self, exact: bool) -> dict[str, list[Hashable]]:
        """Return the parts by name; unless `exact`, whatever place in the recipe one has that was met before."""
        found: dict[str, list[Hashable]] = {}
        for name, part in self.parts:
            met = isinstance(part, tuple) and part[0] == AGAIN
            found.setdefault(name, []).append(AGAIN if met and not exact else part)
        return found


def recipes(spec: Spec) -> dict[str, Recipe]:
    """Return the recipe of every series of a spec."""
    kitchen = _Kitchen(spec)
    return {name: kitchen.recipe(name) for name in spec.series}


class _Kitchen:
    """Follows what a series needs, each term once."""

    def __init__(self, spec: Spec) -> None:
        self.graph: Graph = build(spec)
        left = {name: self.graph.spec.series[name] for name in self.graph.left}
        self.spec = replace(spec, series=Frozen({**spec.series, **left})) if left else spec
        self.drawn = {(s.stream.name, s.stream.label) for s in self.graph.sources}
        owners: dict[str, Any] = {**self.spec.shared, **self.spec.series}
        self.entries: dict[str, dict[str, Entry]] = {name: {} for name in owners}
        for name, owner in owners.items():
            for entry, _ in walk(owner.of):
                self.entries[name].setdefault(entry.label, entry)
        self.known: dict[int, Hashable] = {}
        self.bodies = {name: owner.of for name, owner in owners.items()}
        self.joint = {node.name: node.joint for node in self.graph.order() if getattr(node, "joint", None) is not None}

    def recipe(self, name: str) -> Recipe:
        series = self.spec.series[name]
        parts: list[Part] = [(f"{name} as stored", (series.type or "float64", series.decimals))]
        self._body(name, parts, {id(self.bodies[name]): 0})
        draws = {part[1][-1] for part in parts if isinstance(part[1], tuple) and len(part[1]) == _SIZE}
        return Recipe(tuple(parts), frozenset(address for address in draws if address is not None))

    def _body(self, owner: str, parts: list[Part], seen: dict[int, int]) -> None:
        parts.append((owner, ("a sum of", len(self.bodies[owner]))))
        for entry in self.bodies[owner]:
            self._entry(entry, owner, parts, seen)

    def _entry(self, entry: Entry, owner: str, parts: list[Part], seen: dict[int, int], starts: bool = True) -> None:
        name = f"{owner}.{entry.label}"
        if id(entry) in seen:
            parts.append((name, (AGAIN, seen[id(entry)])))
            return
        seen[id(entry)] = len(seen)
        if id(entry) not in self.known:
            self.known[id(entry)] = self._own(entry, owner)
        parts.append((name, self.known[id(entry)]))
        for by in self._follows(name):
            self._used(by, parts, seen)
        if entry.kind == "use":
            self._used(entry.values["name"], parts, seen)
        for inner, is_shock in children(entry):
            parts.append((name, "shock" if is_shock else "body"))
            self._entry(inner, owner, parts, seen)
        for other, label in self._starts_with(name) if starts else ():  # all that lead it: they need not say theirs
            self._entry(self.entries[other][label], other, parts, seen, starts=False)

    def _used(self, name: str, parts: list[Part], seen: dict[int, int]) -> None:
        owner, *rest = name.split(".")
        if rest:
            output = ".".join(rest[1:])
            parts.append((name, ("used", output)))
            self._entry(_with_output(self.entries[owner][rest[0]], output), owner, parts, seen)
        elif id(self.bodies[owner]) in seen:
            parts.append((owner, (AGAIN, seen[id(self.bodies[owner])])))
        else:
            seen[id(self.bodies[owner])] = len(seen)
            self._body(owner, parts, seen)

    def _own(self, entry: Entry, owner: str) -> Hashable:
        """Return what a term is by itself: kind, factor, numbers, bodies by name, its place in a mix, its address.

        What is used follows in the recipe, whatever it is called.
        """
        own = {k: v for k, v in entry.values.items() if k != "name"} if entry.kind == "use" else entry.values
        times, values = (replaced(value, lambda v: self._varying(v, owner)) for value in (entry.times, Frozen(own)))
        stream = self._stream(owner)
        address = (self.spec.seed, stream, entry.label) if (stream, entry.label) in self.drawn else None
        counts = tuple([(name, len(body)) for name, body in entry.bodies.items()])
        return entry.kind, times, values, counts, self._mix(f"{owner}.{entry.label}"), address

    def _varying(self, varying: Varying, owner: str) -> Hashable:
        by_name = varying.name and varying.over == PATH
        where = varying.name if by_name else (self._stream(owner), varying.name or varying.label)
        if isinstance(varying.law, TableDraw):
            where = owner if varying.law.by_series else ""
        return varying.law, varying.over, varying.scale, self.spec.seed, where

    def _stream(self, owner: str) -> str:
        return self.spec.series[owner].stream if owner in self.spec.series else owner

    def _mix(self, name: str) -> Hashable:
        """Return how the primary normals of a term are mixed from its own and those that lead it."""
        if name not in self.spec.correlation.names:
            return None
        source = self.graph.source_of(name)
        if source.group is None:
            return None
        place = [s is source for s in source.group.sources].index(True)
        sources, how = source.group.made_from(place)
        return None if how is None else (tuple([(s.stream.seed, s.stream.name, s.stream.label) for s in sources]), how)

    def _follows(self, name: str) -> Iterator[str]:
        """Yield what says the state that the correlations of a term follow, where that moves it."""
        for following in self.spec.correlation.following:
            if name in following.names and self._mix(name) is not None:
                yield following.by

    def _starts_with(self, name: str) -> Iterator[tuple[str, str]]:
        """Yield the terms, owner and label, whose stationary past is drawn before that of this one, jointly."""
        if name in self.joint:
            _, place, sources = self.joint[name]
            for source in sources[:place]:
                owner, _, label = source.name.partition(".")
                yield owner, label


def _with_output(entry: Entry, output: str) -> Entry:
    """Return the entry that has a hidden output: a term, or the shock that drives it."""
    while output and output not in catalogue()[entry.kind].outputs_of(entry.values) and entry.shock is not None:
        entry = entry.shock
    return entry


_SIZE = 6  # of what `_own` returns; what else is in a recipe says where something stands
