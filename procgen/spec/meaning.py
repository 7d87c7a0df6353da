"""What differs in meaning between two specs: places with what stood there and what stands there now.

Checked specs are compared, not texts: short and long forms, defaults written or not, and the order of series mean
the same. Terms are found by their labels. Titles and notes mean nothing.
"""

from __future__ import annotations

import hashlib
from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import fields, replace
from itertools import combinations
from typing import Any

import numpy as np

from procgen.spec.calendar import Grid
from procgen.spec.elapsed import Elapsed
from procgen.spec.entries import children, named, walk
from procgen.spec.local import DaySet, LocalClock, Part, YearDay
from procgen.spec.model import Entry, Frozen, Series, Shared, Spec
from procgen.spec.places import plain_at
from procgen.spec.records import dataclass
from procgen.spec.varying import Varying, replaced

LONGEST = 80
Owner = Series | Shared
_NO_CLOCK = LocalClock(Grid(1))


@dataclass(frozen=True)
class Change:
    """One place that differs; `old` or `new` is None where there is nothing of the kind."""

    place: str
    old: str | None
    new: str | None

    def __str__(self) -> str:
        if self.old is None:
            return f"{self.place}: new, {self.new}"
        if self.new is None:
            return f"{self.place}: gone, was {self.old}"
        return f"{self.place}: {self.old} → {self.new}"


@dataclass(frozen=True)
class _Fact:
    value: Any  # checked, which decides
    text: str  # as written, which is shown


Facts = dict[str, _Fact]


def changes(old: Spec, new: Spec) -> tuple[Change, ...]:
    """Return every place at which two specs differ in meaning, in the order of the specs."""
    found = [*_compared(_head(old), _head(new))]
    for section in ("shared", "series"):
        found += _owners(section, old, new)
    return (*_by_group(found, old, new), *_compared(_correlation(old), _correlation(new)), *_order(old, new))


def shown(value: Any) -> str:
    """Return plain data in one line, as a spec would have it, shortened."""
    text = _flow(value)
    return text if len(text) <= LONGEST else text[: LONGEST - 1] + "…"


def _flow(value: Any) -> str:
    if isinstance(value, Mapping):
        return "{" + ", ".join(f"{key}: {_flow(inner)}" for key, inner in value.items()) + "}"
    if isinstance(value, list | tuple):
        return "[" + ", ".join([_flow(inner) for inner in value]) + "]"
    if isinstance(value, bool) or value is None:
        return {True: "true", False: "false", None: "nothing"}[value]
    return str(value)


def _compared(old: Facts, new: Facts) -> Iterator[Change]:
    for place in dict.fromkeys([*old, *new]):
        if place not in new:
            yield Change(place, old[place].text, None)
        elif place not in old:
            yield Change(place, None, new[place].text)
        elif old[place].value != new[place].value:
            yield Change(place, *_texts(old[place], new[place]))


def _texts(old: _Fact, new: _Fact) -> tuple[str, str]:
    """Return what is shown of two facts that differ; what is written alike is told apart by what it comes to."""
    if old.text != new.text:
        return old.text, new.text
    return f"{old.text} = {shown(old.value)}", f"{new.text} = {shown(new.value)}"


def _head(spec: Spec) -> Facts:
    facts = {"seed": _Fact(spec.seed, str(spec.seed)), "paths": _Fact(spec.paths, str(spec.paths))}
    written = spec.raw.get("time", {})
    for one in fields(spec.time):
        value = getattr(spec.time, one.name)
        if spec.time.at and one.name in ("start", "at"):  # the start is the first of them
            facts["time.at"] = _Fact(spec.time.at, _times(spec.time.at))
            continue
        facts[f"time.{one.name}"] = _Fact(value, shown(written.get(one.name, value if value != () else None)))
    raw = spec.raw.get("parameters", {})
    for name, varying in spec.parameters.items():
        facts[f"parameters.{name}"] = _Fact(varying, shown(raw[name]) if name in raw else str(varying))
    return facts


def _times(at: tuple[int, ...]) -> str:
    """Return listed times in words, with a digest of all of them."""
    first, last = (f"{np.datetime64(time, 'us').item().isoformat()}Z" for time in (at[0], at[-1]))
    digest = hashlib.sha256(np.array(at, "<i8").tobytes()).hexdigest()[:8]
    return f"{len(at):,} times from {first} to {last} (digest {digest}…)"


def _owners(section: str, old: Spec, new: Spec) -> Iterator[Change]:
    before, after = getattr(old, section), getattr(new, section)
    for name in dict.fromkeys([*before, *after]):
        place = f"{section}.{name}"
        if name not in after:
            yield Change(place, _summary(before[name]), None)
        elif name not in before:
            yield Change(place, None, _summary(after[name]))
        else:
            yield from _terms(place, (old, before[name]), (new, after[name]))


def _summary(owner: Owner) -> str:
    return " + ".join(entry.label for entry in owner.of)


def _terms(place: str, old: tuple[Spec, Owner], new: tuple[Spec, Owner]) -> Iterator[Change]:
    yield from _compared(_attributes(place, old[1]), _attributes(place, new[1]))
    before, after = _labelled(old[1]), _labelled(new[1])
    for label in dict.fromkeys([*before, *after]):
        here = f"{place}.{label}"
        if _with_parent(label, before, after) or _with_parent(label, after, before):
            continue
        if label not in after:
            yield Change(here, _written(old[0], before[label][0]), None)
        elif label not in before:
            yield Change(here, None, _written(new[0], after[label][0]))
        else:
            yield from _compared(_facts(here, old[0], *before[label]), _facts(here, new[0], *after[label]))
    both = [
        [label for label, (entry, _) in labels.items() if label in other and entry.label == label]
        for labels, other in ((before, after), (after, before))
    ]
    if both[0] != both[1]:
        yield Change(f"{place}, the order of its terms", ", ".join(both[0]), ", ".join(both[1]))


def _with_parent(label: str, here: Mapping[str, tuple[Entry, str]], there: Mapping[str, tuple[Entry, str]]) -> bool:
    """Whether a term is only here, and so is what it is in, which says it all."""
    return label in here and label not in there and here[label][1] in here and here[label][1] not in there


def _attributes(place: str, owner: Owner) -> Facts:
    if not isinstance(owner, Series):
        return {}
    found = {name: getattr(owner, name) for name in ("unit", "type", "decimals", "stream")}
    facts = {f"{place}.{name}": _Fact(value, shown(value)) for name, value in found.items()}
    past = owner.before
    told = "nothing" if past is None else f"{len(past)} values, the last {past[-1]}"
    return facts | {f"{place}.before": _Fact(past, told)}


def _labelled(owner: Owner) -> dict[str, tuple[Entry, str]]:
    """Return every entry by its label, with the label of what it is in; compositions may share one.

    A shock that has no label of its own goes by the term that it drives, as in swing.shock.garch.
    """
    found: dict[str, tuple[Entry, str]] = {}
    parents = {id(inner): entry for entry, _ in walk(owner.of) for inner, _ in children(entry)}
    labels: dict[int, str] = {}
    for entry, is_shock in walk(owner.of):
        parent = labels.get(id(parents.get(id(entry))), "")
        label = plain = f"{parent}.shock.{entry.kind}" if is_shock and not named(entry) else entry.label
        count = 1
        while label in found:
            count += 1
            label = f"{plain} (no. {count})"
        labels[id(entry)] = label
        found[label] = (entry, parent)
    return found


def _facts(place: str, spec: Spec, entry: Entry, parent: str) -> Facts:
    facts = {place: _Fact((entry.kind, parent), f"{entry.kind} in {parent}" if parent else entry.kind)}
    facts[f"{place}.times"] = _Fact(_named(entry.times, spec), _at(spec, entry, "times", entry.times))
    for name, value in entry.values.items():
        value = _without_grid(value)
        facts[f"{place}.{name}"] = _Fact(_named(value, spec), _at(spec, entry, name, value))
    return facts


def _without_grid(value: Any) -> Any:
    """Return a value without the grid that it was read on: what differs in that is told once, as the spec's time."""
    if isinstance(value, Elapsed):
        return "time"
    if isinstance(value, Part | DaySet | YearDay):
        return replace(value, clock=_NO_CLOCK)
    if isinstance(value, tuple):
        return tuple([_without_grid(part) for part in value])
    return Frozen({key: _without_grid(part) for key, part in value.items()}) if isinstance(value, Mapping) else value


def _named(value: Any, spec: Spec) -> Any:
    """Return a value with the parameters in it by name: their draws are told once, where they are declared."""

    def by_name(varying: Varying) -> Any:
        name, scale = varying.name, varying.scale
        return (name, scale) if name in spec.parameters else varying

    return replaced(value, by_name)


def _at(spec: Spec, entry: Entry, name: str, value: Any) -> str:
    """Return what is written for a parameter, or its value where nothing is."""
    where = entry.places.get(name)
    if name == "times":
        path = f"{entry.place.path}.times"
    else:
        path = "" if where is None else where.path
    written = plain_at(spec.written.tree, path) if spec.written is not None and path else None
    return shown(value if written is None else written)


def _written(spec: Spec, entry: Entry) -> str:
    written = None if spec.written is None else plain_at(spec.written.tree, entry.place.path)
    if isinstance(written, Mapping) and len(written) == 1 and "as" not in written:
        return f"{entry.kind}: {shown(written.get(entry.kind, written))}"
    return entry.kind if written is None else shown(written)


def _by_group(found: list[Change], old: Spec, new: Spec) -> Iterator[Change]:
    """Yield the changes, one for all series of a group where they are alike in all of them."""
    alike: dict[tuple[str, str, str | None, str | None], list[Change]] = {}
    for change in found:
        group, rest = _group_of(change.place, old, new)
        alike.setdefault((group, rest, change.old, change.new), []).append(change)
    sizes = Counter(one.group for one in {**old.series, **new.series}.values())
    for (group, rest, before, after), same in alike.items():
        if group and len(same) == sizes[group] > 1:
            yield Change(f"groups.{group}{rest} ({len(same)} series)", before, after)
        else:
            yield from same


def _group_of(place: str, old: Spec, new: Spec) -> tuple[str, str]:
    section, _, rest = place.partition(".")
    name, dot, inner = rest.partition(".")
    name, comma, tail = name.partition(",")
    series = new.series.get(name) or old.series.get(name)
    if section != "series" or series is None or series.group is None:
        return "", place
    return series.group, f"{comma}{tail}{dot}{inner}"


def _correlation(spec: Spec) -> Facts:
    names, matrix = spec.correlation.names, spec.correlation.matrix
    facts = {}
    for i, first in enumerate(names):
        for j in range(i + 1, len(names)):
            pair = sorted((first, names[j]))
            if matrix[i][j] != 0.0:
                facts[f"correlation of {pair[0]} and {pair[1]}"] = _Fact(matrix[i][j], shown(matrix[i][j]))
    for each in spec.correlation.following:
        for (i, first), (j, second) in combinations(enumerate(each.names), 2):
            values = {state: matrix[i][j] for state, matrix in zip(each.states, each.matrices, strict=True)}
            if any(values.values()):
                pair = sorted((first, second))
                fact = _Fact((each.by, values), f"by {each.by} {shown(values)}")
                facts[f"correlation of {pair[0]} and {pair[1]}"] = fact
    for copula in spec.correlation.copulas:
        place = f"t copula of {', '.join(sorted(copula.names)[:4])}{', …' if len(copula.names) > 4 else ''}"
        facts[place] = _Fact((sorted(copula.names), copula.df), f"df {shown(copula.df)}")
    return facts


def _order(old: Spec, new: Spec) -> Iterator[Change]:
    """Yield a change where the correlated shocks are mixed in another order, which changes values."""
    before, after = old.correlation.names, new.correlation.names
    both = [[name for name in names if name in other] for names, other in ((before, after), (after, before))]
    if both[0] != both[1]:
        yield Change("correlation, the order of its names", *(shown(names) for names in both))
