"""Reading bodies: entries with one kind key, their parameters, shocks and labels."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any, Protocol

from procgen.spec.declare import INVALID, Body, Parameter, Real, read_each
from procgen.spec.domains import Reading, varies
from procgen.spec.model import Entry, Frozen
from procgen.spec.tree import NAME, Tree
from procgen.spec.varying import found_in, joint_issues, labelled, varying_in
from procgen.spec.words import did_you_mean, unknown_key

ENTRY_KEYS = ("as", "times")
SERIES_KEYS = ("of", "unit", "type", "decimals", "stream", "note", "before")
SPREAD = ("sd", "total_sd")
REPLACED = (*SPREAD, "law", "spread")  # what a shock says itself


class KindDeclaration(Protocol):
    """What the reader asks of a kind; `procgen.terms.catalogue()` gives one for every kind."""

    kind: str
    parameters: tuple[Parameter, ...]
    short: str | None
    takes_shock: bool
    noise: bool
    composition: bool
    outputs: tuple[str, ...]

    def check(self, values: Mapping[str, Any]) -> Any: ...
    def outputs_of(self, values: Mapping[str, Any]) -> tuple[str, ...]: ...


def read_body(tree: Tree, reader: Reading) -> tuple[Entry, ...]:
    """Return the entries of a body; what cannot be read is reported and, where its kind is unclear, left out."""
    trees = tree.value if tree.is_list else (tree,)
    if not trees:
        reader.expected(tree, Body().describe())
    entries = [read_entry(item, reader) for item in trees]
    return tuple([entry for entry in entries if entry is not None])


def read_entry(tree: Tree, reader: Reading, owner: str | None = None) -> Entry | None:
    """Return one entry; `owner` is the label a shock takes over. With faults, an entry as far as it goes."""
    kind = _kind(tree, reader)
    if kind is None:
        return None
    places = {"kind": tree.key(kind).place}
    label, times = owner or kind, 1.0
    if "as" in tree.value:
        label = read_name(tree.value["as"], reader, label)
        places["as"] = tree.value["as"].place
    if "times" in tree.value:
        factor = Real().read(tree.value["times"], reader)
        times = 1.0 if factor is INVALID else factor
    if kind not in reader.catalogue:
        return Entry(kind, label, times, Frozen(), Frozen(), None, tree.place, Frozen(places))
    return _Terms(reader, reader.catalogue[kind], label).read(tree, times, places)


def read_name(tree: Tree, reader: Reading, otherwise: str) -> str:
    """Return the name written at `tree`, or `otherwise` after a fault."""
    if isinstance(tree.value, str) and NAME.fullmatch(tree.value) and len(tree.value) <= 100:
        return tree.value
    reader.expected(tree, "a name of at most 100 letters a–z, digits and _, not beginning with a digit")
    return otherwise


def children(entry: Entry) -> Iterator[tuple[Entry, bool]]:
    """Yield the entries directly within an entry, each with whether it is its shock."""
    if entry.shock is not None:
        yield entry.shock, True
    for body in entry.bodies.values():
        for inner in body:
            yield inner, False
    for value in entry.values.values():
        for inner in _entries_in(value):
            yield inner, False


def walk(entries: Sequence[Entry]) -> Iterator[tuple[Entry, bool]]:
    """Yield every entry of a body, nested ones too, in order of writing, each with whether it is a shock."""
    for entry in entries:
        yield entry, False
        yield from _within(entry)


def named(entry: Entry) -> bool:
    """Return whether an entry says its own label with `as`."""
    return "as" in entry.places


class _Terms:
    """Reads one entry whose kind is known."""

    def __init__(self, reader: Reading, kind: KindDeclaration, label: str) -> None:
        self.reader = reader
        self.kind = kind
        self.label = label

    def read(self, tree: Tree, times: float, places: dict[str, Any]) -> Entry:
        inner = self._long_form(tree.value[self.kind.kind])
        shock = self._shock(inner)
        given = inner.value if inner.is_map else {}
        spread = [p.name for p in self.kind.parameters if p.name in SPREAD]
        one_spread = self.kind.takes_shock or len(spread) == 2
        optional = (*REPLACED, *spread) if one_spread else ()
        also = ("shock",) if self.kind.takes_shock else ()
        before, varying = len(self.reader.faults), len(self.reader.made)
        values = read_each(inner, self.kind.parameters, self._reader_of_bodies(given), also, optional)
        if INVALID not in values.values() and len(self.reader.made) - varying > _varying_in(values):
            self.reader.fault(inner, "a number in here cannot vary: it is not one that a path could have for itself")
        if one_spread and inner.is_map:
            self._one_spread(inner, spread)
        if "shock" in given:
            values |= {name: None for name in REPLACED if name in values}
        values = labelled(values, self.label)
        if len(self.reader.faults) == before and INVALID not in values.values():
            self._check(values, inner, "shock" in given)
        places |= {name: value.place for name, value in given.items()}
        bodies = self._bodies(values)
        return Entry(
            self.kind.kind,
            self.label,
            labelled({"times": times}, self.label)["times"],
            Frozen(values),
            Frozen(bodies),
            shock,
            tree.place,
            Frozen(places),
        )

    def _reader_of_bodies(self, given: Mapping[str, Tree]) -> Reading:
        """Return the reader, of finer steps in the bodies where the kind cuts them."""
        name = getattr(self.kind, "finer", "")
        parts = given[name].value if name in given else 1
        cuts = isinstance(parts, int) and not isinstance(parts, bool) and parts > 1
        return self.reader.cut(parts) if cuts else self.reader

    def _bodies(self, values: dict[str, Any]) -> dict[str, tuple[Entry, ...]]:
        """Take the bodies out of the values, in order; of named ones (branches.calm) the names stay as a value."""
        bodies = {}
        for p in self.kind.parameters:
            if isinstance(p.domain, Body):
                bodies[p.name] = values.pop(p.name, INVALID)
            elif isinstance(getattr(p.domain, "each", None), Body) and isinstance(values.get(p.name), Mapping):
                bodies |= {f"{p.name}.{name}": body for name, body in values[p.name].items()}
                values[p.name] = tuple(values[p.name])
        return {name: body for name, body in bodies.items() if isinstance(body, tuple)}

    def _long_form(self, tree: Tree) -> Tree:
        """Return the mapping that a short form stands for: a body alone, or the one parameter alone."""
        main = any(p.name == "of" and isinstance(p.domain, Body) for p in self.kind.parameters)
        if main:
            entry = tree.is_map and "of" not in tree.value and any(k in self.reader.catalogue for k in tree.value)
            short = "of" if entry or not tree.is_map else None
        else:
            rate = tree.is_map and (set(tree.value) == {"value", "per"} or varies(tree))
            short = None if tree.is_map and not rate else self.kind.short
        if short is None:
            return tree
        return Tree({short: tree}, tree.place, {short: tree})

    def _shock(self, inner: Tree) -> Entry | None:
        if not self.kind.takes_shock or not inner.is_map or "shock" not in inner.value:
            return None
        tree, reader = inner.value["shock"], self.reader
        shock = read_entry(tree, reader, self.label)
        if shock is not None and shock.kind in reader.catalogue and not reader.catalogue[shock.kind].noise:
            noises = ", ".join(k for k, kind in reader.catalogue.items() if kind.noise)
            reader.fault(tree, f"expected a noise as shock ({noises}), got {shock.kind}; use one of those")
        for name in REPLACED:
            if name in inner.value:
                message = f"the shock says its own spread and law; remove {name}, or remove shock"
                reader.fault(inner.key(name), message)
        return shock

    def _one_spread(self, inner: Tree, spread: list[str]) -> None:
        given = [name for name in spread if name in inner.value]
        if "shock" in inner.value or len(given) == 1 or not spread:
            return
        if given:
            self.reader.fault(inner.key(given[1]), "expected sd or total_sd, got both; keep one of them")
            return
        ways = {"sd": "sd (of the shock)", "total_sd": "total_sd (of the term itself)"}
        choices = [ways[name] for name in spread] + (["a shock"] if self.kind.takes_shock else [])
        self.reader.fault(inner, f"expected {' or '.join(choices)}, got none of them; give exactly one")

    def _check(self, values: Mapping[str, Any], inner: Tree, shocked: bool) -> None:
        """Report what the kind says of its parameters together."""
        names = {p.name for p in self.kind.parameters}
        if not shocked and "law" in names and "spread" not in names and getattr(values["law"], "needs_spread", False):
            law, way = values["law"], "choose one that has"
            if self.kind.takes_shock:
                way = f"write shock: {{white_noise: {{spread: …, law: {{{law.name}: …}}}}}} in place of law and sd"
            self.reader.fault(inner.value.get("law", inner), f"expected a law with a variance, {law} has none; {way}")
            return
        for name, message in joint_issues(self.kind.check, {**values, "shocked": shocked}):
            self.reader.fault(inner.value.get(name, inner), message)


def _kind(tree: Tree, reader: Reading) -> str | None:
    """Return the one kind key of an entry, known or not; None when there is no telling."""
    if not tree.is_map:
        written = isinstance(tree.value, str) and tree.value in reader.catalogue
        hint = f"write {{{tree.value}: {{…}}}} with its parameters" if written else ""
        reader.expected(tree, Body().describe(), hint)
        return None
    keys = [key for key in tree.value if key not in ENTRY_KEYS]
    known = [key for key in keys if key in reader.catalogue]
    if len(known) > 1:
        message = f"expected one term, got {', '.join(known)}; give each a list item of its own, with a dash"
        reader.fault(tree, message)
        return None
    if not keys:
        reader.expected(tree, Body().describe())
        return None
    kind = known[0] if known else keys[0]
    if not known:
        hint = did_you_mean(kind, reader.catalogue)
        message = f"unknown term {kind[:40]}; {hint + ' ' if hint else ''}`procgen terms` lists them all"
        reader.fault(tree.key(kind), message)
    for key in keys:
        if key != kind:
            reader.fault(tree.key(key), _stray(key, kind, reader))
    return kind


def _stray(key: str, kind: str, reader: Reading) -> str:
    """Return the message for a key beside a kind."""
    declared = reader.catalogue[kind].parameters if kind in reader.catalogue else ()
    if any(p.name == key for p in declared) or key == "shock":
        return f"{key} stands beside {kind}, not in it; indent it under {kind}"
    if key == "of":
        return f"of takes all the terms; put {kind} in it, as in of: [{{{kind}: {{…}}}}]"
    if key in SERIES_KEYS:
        return f"{key} belongs to a series, not to a term; put the terms under of: and {key}: beside it"
    return unknown_key(key, [kind, *ENTRY_KEYS] if kind in reader.catalogue else ENTRY_KEYS)


def _within(entry: Entry) -> Iterator[tuple[Entry, bool]]:
    for inner, is_shock in children(entry):
        yield inner, is_shock
        yield from _within(inner)


def _varying_in(values: Mapping[str, Any]) -> int:
    """Return how many numbers vary in values and in the entries within them."""
    return len(found_in(values)) + sum(1 for entry in _entries_in(values) for _ in varying_in(entry))


def _entries_in(value: Any) -> Iterator[Entry]:
    if isinstance(value, Entry):
        yield value
    elif isinstance(value, tuple):
        for part in value:
            yield from _entries_in(part)
    elif isinstance(value, Mapping):
        for part in value.values():
            yield from _entries_in(part)
