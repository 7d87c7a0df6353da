"""What names point to: labels of each body, `use` of bodies, series, terms and hidden outputs, and circles."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

from procgen.spec.declare import INVALID
from procgen.spec.domains import Reading
from procgen.spec.entries import children, named, walk
from procgen.spec.model import Entry, Place, Series, Shared
from procgen.spec.records import dataclass
from procgen.spec.tree import Tree
from procgen.spec.words import did_you_mean, one_of

MAX_CHAIN = 50  # uses of uses; more is a mistake, and a burden for everything that follows the chain


@dataclass(frozen=True)
class Target:
    """What a name points to: a whole body, one term of it, or a hidden output of that term."""

    owner: str
    entry: Entry | None = None
    output: str | None = None


class Links:
    """The names of a spec. Labels that stand twice are reported when it is made."""

    def __init__(self, owners: Mapping[str, Series | Shared], reader: Reading) -> None:
        self.owners = owners
        self.reader = reader
        self.labels = {name: self._labels(name, owner.of) for name, owner in owners.items()}

    def find(self, name: str) -> Target:
        """Return what `series`, `series.label` or `series.label.output` names; LookupError says why nothing."""
        owner, *rest = name.split(".")
        if owner not in self.owners:
            raise LookupError(_unknown("series or shared body", owner, self.owners))
        if not rest:
            return Target(owner)
        entry = self._term(owner, *rest)
        if len(rest) == 1:
            return Target(owner, entry)
        outputs = self.outputs(entry)
        output = ".".join(rest[1:])
        if output not in outputs:
            raise LookupError(_unknown(f"hidden output of {owner}.{rest[0]}", output, outputs))
        return Target(owner, entry, output)

    def _term(self, owner: str, label: str, *output: str) -> Entry:
        """Return the term of a body by its label; what has none is found by its kind, where it is the only one."""
        labels = self.labels[owner]
        if label in labels:
            return labels[label]
        body = list(walk(self.owners[owner].of))
        plain = [entry for entry, is_shock in body if entry.kind == label and not named(entry) and not is_shock]
        if len(plain) == 1:
            return plain[0]
        if plain:
            raise LookupError(
                f"{owner} has {len(plain)} terms of kind {label}: write as: some_name beside the one that is meant, "
                f"and name {owner}.some_name"
            )
        driven = [entry for entry, _ in body if entry.shock is not None and entry.shock.kind == label]
        if driven:
            names = one_of([".".join((owner, entry.label, *output)) for entry in driven])
            given = ".".join((owner, label, *output))
            raise LookupError(f"a shock goes by the name of the term that it drives: expected {names}, got {given}")
        kinds = [e.kind for e, is_shock in body if not named(e) and not is_shock and e.kind != "use"]
        raise LookupError(_unknown(f"term of {owner}", label, dict.fromkeys([*labels, *kinds])))

    def outputs(self, entry: Entry) -> list[str]:
        """Return the hidden outputs that go by an entry's label: its own, and those of its unnamed shock."""
        kind = self.reader.catalogue.get(entry.kind)
        read = {key: value for key, value in entry.values.items() if value is not INVALID}
        found = [] if kind is None else list(kind.outputs_of(read))
        if entry.shock is not None and not named(entry.shock):
            found += self.outputs(entry.shock)
        return found

    def sources(self, owner: str) -> list[str]:
        """Return the labels in a body under which something is drawn."""
        return [label for label, entry in self.labels[owner].items() if self.draws(entry)]

    def draws(self, entry: Entry) -> bool:
        """Return whether the primary draws of an entry are found by its own label."""
        if entry.shock is not None:
            return not named(entry.shock) and self.draws(entry.shock)
        kind = self.reader.catalogue.get(entry.kind)
        return kind is None or kind.noise or kind.takes_shock or getattr(kind, "correlates", False)

    def own(self, owner: str, entry: Entry | None) -> list[str]:
        """Return the names of an entry, or of all entries of a body, whose draws no other term's can be mixed with."""
        labels = self.labels[owner].items()
        found = [(label, e) for label, e in labels if (entry is None or e is entry) and not self.draws(e)]
        kinds = [(label, self.reader.catalogue.get(e.kind)) for label, e in found]
        return [f"{owner}.{label}" for label, kind in kinds if getattr(kind, "draws_alone", bool)()]

    def together(self, owner: str, label: str) -> str:
        """Return how two of a term move together whose draws cannot be mixed with others', where its kind says it."""
        return getattr(self.reader.catalogue.get(self.labels[owner][label].kind), "together", "")

    def check(self) -> None:
        """Report every `use` of a name that does not exist, and uses that go in a circle."""
        uses = {}
        for owner in self.owners.values():
            for entry, _ in walk(owner.of):
                if entry.kind == "use" and isinstance(entry.values.get("name"), str):
                    try:
                        uses[id(entry)] = self.find(entry.values["name"])
                    except LookupError as error:
                        self._fault(_use_place(entry), str(error))
        _Circles(self, uses).check()

    def _labels(self, owner: str, body: tuple[Entry, ...]) -> dict[str, Entry]:
        """Return the entries of a body by label, reporting a label that stands twice."""
        found: dict[str, Entry] = {}
        by_kind: dict[str, Entry] = {}  # compositions without a label, which go by their kind
        for entry, is_shock in walk(body):
            kind = self.reader.catalogue.get(entry.kind)
            if not named(entry) and is_shock:
                continue
            if not named(entry) and kind is not None and kind.composition:
                by_kind.setdefault(entry.kind, entry)
            elif entry.label in found:
                self._fault(*_twice(owner, entry, found[entry.label]))
            else:
                found[entry.label] = entry
        for label in [label for label in by_kind if label in found]:
            self._fault(*_twice(owner, found[label], by_kind[label]))
        return found

    def _fault(self, place: Place, message: str) -> None:
        self.reader.fault(Tree(None, place), message)


class _Circles:
    """A walk along everything that everything needs, without recursion: circles and long chains are reported."""

    def __init__(self, links: Links, uses: Mapping[int, Target]) -> None:
        self.links = links
        self.uses = uses
        self.depth: dict[int | str, int] = {}  # longest chain of uses below what is finished
        self.open: dict[int | str, Entry | None] = {}  # what is being followed, in order

    def check(self) -> None:
        for owner in self.links.owners:
            if owner not in self.depth:
                self._follow(owner)

    def _follow(self, owner: str) -> None:
        stack = [self._enter(owner, None)]
        while stack:
            key, entry, needs = stack[-1]
            for need_key, need in needs:
                if need_key in self.open:
                    self._circle(need_key, entry)
                elif need_key not in self.depth:
                    stack.append(self._enter(need_key, need))
                    break
            else:
                stack.pop()
                del self.open[key]
                self._leave(key, entry)

    def _enter(self, key: int | str, entry: Entry | None) -> tuple[int | str, Entry | None, Iterator]:
        self.open[key] = entry
        return key, entry, iter(self._needs(key, entry))

    def _leave(self, key: int | str, entry: Entry | None) -> None:
        below = max((self.depth.get(k, 0) for k, _ in self._needs(key, entry)), default=0)
        self.depth[key] = below + (key in self.uses)
        if key in self.uses and self.depth[key] == MAX_CHAIN + 1:
            assert entry is not None
            message = f"expected at most {MAX_CHAIN} uses of uses, got more; take the middle of the chain out"
            self.links._fault(_use_place(entry), message)

    def _needs(self, key: int | str, entry: Entry | None) -> list[tuple[int | str, Entry | None]]:
        if entry is None:
            return [(id(e), e) for e in self.links.owners[str(key)].of]
        if key in self.uses:
            target = self.uses[int(key)]
            return [(target.owner, None) if target.entry is None else (id(target.entry), target.entry)]
        return [(id(e), e) for e, _ in children(entry)]

    def _circle(self, key: int | str, entry: Entry | None) -> None:
        assert entry is not None
        keys = list(self.open)
        uses = [e for e in list(self.open.values())[keys.index(key) :] if e is not None and e.kind == "use"]
        names = " → ".join(e.values["name"] for e in [*uses, uses[0]])
        self.links._fault(_use_place(uses[-1]), f"these uses go in a circle, {names}; remove one of them")


def _twice(owner: str, entry: Entry, first: Entry) -> tuple[Place, str]:
    line = f" in line {first.place.line}" if first.place.line else ""
    if named(entry):
        return entry.places["as"], f"the label {entry.label} is taken in {owner}{line}; choose another"
    need = f"needs a label of its own, by which it and its draws are found; write as: some_name beside {entry.kind}"
    if first.kind == entry.kind and not named(first):
        return entry.place, f"a second {entry.kind} in {owner} (the first is{line or ' before it'}) {need}"
    return entry.place, f"the label {entry.label} is taken in {owner}{line}, so this {entry.kind} {need}"


def _use_place(entry: Entry) -> Place:
    return entry.places.get("name", entry.places["kind"])


def _unknown(what: str, given: str, known: Mapping[str, object] | list[str]) -> str:
    if not known:
        return f"expected a {what}, got {given[:100]}; there is none"
    hint = did_you_mean(given, known)
    choices = f"; expected {one_of(list(known)[:20])}" + (", …" if len(known) > 20 else "")
    return f"there is no {what} named {given[:100]}{choices}" + (f"; {hint}" if hint else "")
