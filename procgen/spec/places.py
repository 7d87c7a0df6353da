"""Dotted places in a spec as written: found, and put in their place with something else.

A place is what faults print, `series.load_kw[3].arma.sd`, or says the label of a term, `series.load_kw.swing.sd`;
`of` is left out, as in faults. A parameter that is not written but declared is a place, too. Trees are not changed:
what is put somewhere gives a new one, which shares the rest.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import replace
from typing import Any

from procgen.spec.declare import Body, Parameter, Record, Records
from procgen.spec.domains import varies
from procgen.spec.entries import ENTRY_KEYS
from procgen.spec.named import Named
from procgen.spec.records import dataclass
from procgen.spec.tree import Tree, step_into
from procgen.spec.words import nearest, one_of

_STEP = re.compile(r"(?:^|(?!^)\.)([A-Za-z_][A-Za-z0-9_]*)|\[([0-9]{1,9})\]", re.ASCII)
_BODIES = ("shared", "series", "groups")

OUT = object()  # stands in a tree for what is taken out
Step = str | int
Steps = Sequence[Step]
Way = Callable[[Tree, Steps], Tree]


class Nowhere(LookupError):
    """A place that is not there: the message says what is, and the nearest.

    `lost`, where a name was not found: the path up to it, the name, those that are there, and the steps behind it.
    """

    lost: tuple[str, Step, Sequence[str], Steps] | None = None


def steps_of(place: str) -> tuple[Step, ...]:
    """Return the names and numbers of a place; Nowhere when it is none."""
    found, end = [], 0
    for match in _STEP.finditer(place):
        if match.start() != end:
            break
        found.append(match[1] if match[1] else int(match[2]))
        end = match.end()
    if not found or end != len(place) or len(place) > 500:
        raise Nowhere(f"expected a place such as series.load.ar.phi or correlation[0].value, got {place[:100]!r}")
    return tuple(found)


def planted(tree: Tree, path: str) -> Tree:
    """Return a tree as it stands at another dotted path; where it was written, line and column, it keeps."""

    def moved(tree: Tree, path: str) -> Tree:
        here = replace(tree.place, path=path)
        if tree.is_map:
            keys = {k: Tree(k, replace(tree.key(k).place, path=step_into(path, k))) for k in tree.value}
            return Tree({k: moved(t, step_into(path, k)) for k, t in tree.value.items()}, here, keys)
        if tree.is_list:
            return Tree(tuple([moved(t, f"{path}[{i}]") for i, t in enumerate(tree.value)]), here)
        return Tree(tree.value, here)

    return moved(tree, path)


def plain_at(tree: Tree, path: str) -> Any:
    """Return what is written at a place of faults, as plain data; None where nothing is."""
    for step in steps_of(path):
        while tree.is_map and step not in tree.value and "of" in tree.value:
            tree = tree.value["of"]
        if isinstance(step, int):
            if not tree.is_list or step >= len(tree.value):
                return None
            tree = tree.value[step]
        elif not tree.is_map or step not in tree.value:
            return None
        else:
            tree = tree.value[step]
    return tree.plain()


def put(tree: Tree, place: str, new: Tree, declared: Declared) -> tuple[Tree, str]:
    """Return a spec's tree with something else at a place, and that place as faults print it; Nowhere raised."""
    writer = _Writer(new, declared)
    try:
        return writer.spec(tree, steps_of(place)), writer.path
    except Nowhere as error:
        raise Nowhere(f"there is no place {place[:200]} in this spec; {writer.hint(tree, place, error)}") from None


@dataclass(frozen=True)
class Declared:
    """The declarations that say which keys can be written where: kinds of term, and keys."""

    catalogue: Mapping[str, Any]
    sections: tuple[str, ...]
    time: tuple[str, ...]
    series: tuple[str, ...]
    groups: tuple[str, ...]


class _Writer:
    """Puts one thing in one place; `path` is where that was, after the fact."""

    def __init__(self, new: Tree, declared: Declared) -> None:
        self.new, self.declared, self.catalogue = new, declared, declared.catalogue
        self.path = ""

    def spec(self, tree: Tree, steps: Steps) -> Tree:
        ways: dict[str, Way] = {name: self._owners for name in _BODIES}
        ways["time"] = lambda t, s: self._key(t, s, lambda name: self._plain, self.declared.time)
        return self._key(tree, steps, lambda name: ways.get(name, self._plain), self.declared.sections)

    def hint(self, tree: Tree, place: str, error: Nowhere) -> str:
        """Return what may have been meant by a place that is not there."""
        steps, otherwise = steps_of(place), str(error)
        groups = tree.value.get("groups") if tree.is_map else None
        if steps[0] == "series" and len(steps) > 1 and groups is not None and groups.is_map:
            name = next((name for name, group in groups.value.items() if _has_member(group, steps[1])), None)
            if name is not None:
                instead = _joined("groups", (name, *steps[2:]))
                return f"{steps[1]} is one of the group {name}, whose series are written once; set {instead} for all"
        moved = [_joined(section, steps) for section in (*_BODIES, "time")]
        moved += [_joined(section, steps[1:]) for section in _BODIES if steps[0] in _BODIES and len(steps) > 2]
        meant = next((other for other in [*moved, *self._fitting(error)] if self._is_place(tree, other)), None)
        if meant is not None:
            return f"did you mean {meant}?"
        if len(steps) == 2 and steps[0] in _BODIES and self.new.value is not OUT and "did you mean" not in otherwise:
            what = {"series": "series", "groups": "group", "shared": "shared body"}[str(steps[0])]
            return (
                f"{otherwise}; a setting changes what is there and adds no {what}: write {steps[1]} in the spec, and "
                "take it out (null) where it is not wanted"
            )
        return otherwise

    def _fitting(self, error: Nowhere) -> Iterator[str]:
        """Yield places like the one that was lost: with the nearest name, without the name, with another one."""
        if error.lost is None or not error.lost[3]:
            return
        path, name, there, rest = error.lost
        near = nearest(name, there)
        if near is not None:
            yield _joined(path, (near, *rest))
        if path:
            yield _joined(path, rest)
            yield from (_joined(path, (other, *rest)) for other in there)

    def _is_place(self, tree: Tree, place: str) -> bool:
        try:
            _Writer(self.new, self.declared).spec(tree, steps_of(place))
        except Nowhere:
            return False
        return True

    # one step of the way

    def _new(self, path: str) -> Tree:
        self.path = path
        return planted(self.new, path)

    def _key(self, tree: Tree, steps: Steps, way: Callable[[str], Way], allowed: Iterable[str] = ()) -> Tree:
        name, rest = steps[0], steps[1:]
        written = tree.value if tree.is_map else {}
        if not isinstance(name, str) or not (name in written or (name in allowed and tree.is_map)):
            self._of_file(tree, name, tree.place.path)
            raise self._nowhere(tree.place.path, name, [*written, *(a for a in allowed if a not in written)], rest)
        path = step_into(tree.place.path, name)
        if not rest:
            return _with(tree, name, self._new(path))
        if name not in written:
            raise Nowhere(f"{path} is not written; set it as a whole")
        return _with(tree, name, way(name)(tree.value[name], rest))

    def _item(self, tree: Tree, steps: Steps, way: Way) -> Tree:
        i, rest = steps[0], steps[1:]
        assert isinstance(i, int)
        if not tree.is_list:
            if i == 0:  # a scalar stands for a list of one
                return way(tree, rest) if rest else self._new(tree.place.path)
            raise Nowhere(f"{tree.place.path} is no list; write {tree.place.path}")
        if i >= len(tree.value):
            raise Nowhere(f"{tree.place.path} has {len(tree.value)}, counted from [0]")
        path = f"{tree.place.path}[{i}]"
        made = way(tree.value[i], rest) if rest else self._new(path)
        here = tree.place
        if way == self._plain and all(isinstance(step, int) for step in rest):  # a list of numbers that is now another
            here = replace(made.place, path=here.path)
        return Tree((*tree.value[:i], made, *tree.value[i + 1 :]), here)

    def _of_file(self, tree: Tree, name: Step, path: str) -> None:
        """Nowhere for a key of what stood where the numbers of a file do now."""
        written = tree.origin[0].value if tree.origin is not None else {}
        if name in written:
            keys = ", ".join(f"{key}: …" for key in written)
            raise Nowhere(f"{path} has the numbers of its file by now; set the whole of it, as in {path}={{{keys}}}")

    def _nowhere(self, path: str, name: Step, there: Sequence[str], rest: Steps) -> Nowhere:
        near = None if rest else nearest(name, there)
        where = path or "a spec"
        said = f"{where} has {one_of(there[:20])}{', …' if len(there) > 20 else ''}"
        if near is not None:
            said = f"did you mean {_joined(path, (near,))}?"
        elif not there:
            said = f"{where} is a value without places in it"
        error = Nowhere(said)
        error.lost = (path, name, there, rest)
        return error

    def _plain(self, tree: Tree, steps: Steps) -> Tree:
        if isinstance(steps[0], int):
            return self._item(tree, steps, self._plain)
        return self._key(tree, steps, lambda name: self._plain)

    # bodies

    def _owners(self, tree: Tree, steps: Steps) -> Tree:
        ways = {"series": self.declared.series, "groups": self.declared.groups, "shared": ("of",)}
        keys = ways[tree.place.path]
        owner = tree.value.get(steps[0]) if tree.is_map and len(steps) == 1 else None
        if owner is not None and _is_long(owner, keys, self.catalogue) and self._is_body():
            steps = (*steps, "of")  # its unit and its like stay
        return self._key(tree, steps, lambda name: lambda t, s: self._owner(t, s, keys))

    def _owner(self, tree: Tree, steps: Steps, keys: tuple[str, ...]) -> Tree:
        """A series, a group or a shared body, in its short or its long form."""
        long = _is_long(tree, keys, self.catalogue)
        if steps[0] in keys and steps[0] != "of":
            form = tree if long else Tree({"of": tree}, tree.place, {"of": Tree("of", tree.place)})
            return self._key(form, steps, lambda name: self._plain, keys)
        body = tree.value.get("of") if long else tree
        rest = steps[1:] if steps[0] == "of" else steps
        if body is None:
            raise self._nowhere(tree.place.path, steps[0], keys, steps[1:])
        made = self._body(body, rest, keys) if rest else self._new(body.place.path)
        return _with(tree, "of", made) if long else made

    def _body(self, tree: Tree, steps: Steps, keys: Sequence[str] = ()) -> Tree:
        """A body: steps that begin with a label are followed by way of its entry."""
        name = steps[0]
        if isinstance(name, int):
            return self._item(tree, steps, self._entry)
        if tree.is_map and (name in tree.value or name in ENTRY_KEYS):
            return self._entry(tree, steps)
        labels = list(self._labels(tree))
        ways = [(way, kind) for label, kind, way in labels if label == name]
        if not ways:
            known = [*dict.fromkeys(label for label, _, _ in labels)]
            raise self._nowhere(tree.place.path, name, [*known, *(k for k in keys if k != "of")], steps[1:])
        if len(ways) > 1:
            places = one_of([_joined(tree.place.path, way) for way, _ in ways])
            raise Nowhere(f"{len(ways)} terms of {tree.place.path} are called {name}; write {places}")
        way, kind = ways[0]
        rest = steps[1:]
        inside = rest[0] not in (*ENTRY_KEYS, kind) if rest else self._is_value()
        full = (*way, kind, *rest) if inside else (*way, *rest)
        if not full:
            return self._new(tree.place.path)
        return self._body(tree, full) if way else self._entry(tree, full)

    def _is_body(self) -> bool:
        """Whether what is put is a body, terms alone, and not a series with its attributes, or nothing."""
        new = self.new
        return new.is_list or (new.is_map and any(k in self.catalogue for k in new.value))

    def _is_value(self) -> bool:
        """Whether what is put at a label is what the term says, and not a whole entry, or nothing."""
        entry = self.new.is_map and any(k in self.catalogue for k in self.new.value)
        return not entry and self.new.value is not OUT

    def _labels(self, body: Tree) -> Iterator[tuple[str, str, tuple[Step, ...]]]:
        """Yield label, kind and way of each entry of a body, nested ones after the one they are in."""
        entries = enumerate(body.value) if body.is_list else [(None, body)]
        for i, entry in entries:
            kind = next((k for k in entry.value if k in self.catalogue), None) if entry.is_map else None
            if kind is None:
                continue
            way = () if i is None else (i,)
            label = entry.value["as"].value if "as" in entry.value else kind
            yield label, kind, way
            inner = entry.value[kind]
            for name, inside in self._bodies(kind, inner):
                yield from ((label, k, (*way, kind, *name, *more)) for label, k, more in self._labels(inside))

    def _bodies(self, kind: str, inner: Tree) -> Iterator[tuple[tuple[str, ...], Tree]]:
        """Yield the bodies within a term, each with the steps to it; `of` needs none."""
        parameters = {p.name: p.domain for p in self.catalogue[kind].parameters}
        if isinstance(parameters.get("of"), Body) and self._short(inner):
            yield (), inner
            return
        for name, domain in parameters.items():
            if not inner.is_map or name not in inner.value:
                continue
            if isinstance(domain, Body):
                yield (() if name == "of" else (name,)), inner.value[name]
            elif _named_bodies(domain) and inner.value[name].is_map:
                yield from (((name, branch), t) for branch, t in inner.value[name].value.items())

    def _short(self, inner: Tree) -> bool:
        """Whether a term that takes a body has it alone, without the key `of`."""
        return not inner.is_map or ("of" not in inner.value and any(k in self.catalogue for k in inner.value))

    # terms

    def _entry(self, tree: Tree, steps: Steps) -> Tree:
        def way(name: str) -> Way:
            return self._term(self.catalogue[name]) if name in self.catalogue else self._plain

        return self._key(tree, steps, way, ENTRY_KEYS)

    def _term(self, kind: Any) -> Way:
        parameters: dict[str, Parameter] = {p.name: p for p in kind.parameters}
        main = "of" in parameters and isinstance(parameters["of"].domain, Body)
        allowed = (*parameters, *(("shock",) if kind.takes_shock else ()))

        def within(tree: Tree, steps: Steps) -> Tree:
            body = tree if main and self._short(tree) else tree.value.get("of") if main and tree.is_map else None
            if body is not None and (steps[0] == "of" or steps[0] not in allowed):
                rest = steps[1:] if steps[0] == "of" else steps
                made = self._body(body, rest, allowed) if rest else self._new(body.place.path)
                return made if body is tree else _with(tree, "of", made)
            form = tree if body is not tree else Tree({"of": tree}, tree.place, {"of": tree})
            if not main and kind.short and not _long(tree):
                form = Tree({kind.short: tree}, tree.place, {kind.short: Tree(kind.short, tree.place)})
            return self._key(form, steps, lambda name: self._parameter(parameters.get(name)), allowed)

        return within

    def _parameter(self, parameter: Parameter | None) -> Way:
        if parameter is None:  # the shock of a term
            return self._entry
        domain = parameter.domain
        if isinstance(domain, Body):
            return self._body
        if _named_bodies(domain):
            return lambda tree, steps: self._key(tree, steps, lambda name: self._body)
        if isinstance(domain, Record | Records):
            return self._record(_names(domain.parameters))
        return self._plain

    def _record(self, names: Sequence[str]) -> Way:
        def way(tree: Tree, steps: Steps) -> Tree:
            if isinstance(steps[0], int):
                return self._item(tree, steps, way)
            return self._key(tree, steps, lambda name: self._plain, names)

        return way


def _is_long(tree: Tree, keys: Sequence[str], catalogue: Mapping[str, Any]) -> bool:
    """Whether a series, a group or a shared body is written with its attributes and `of`."""
    return tree.is_map and not any(k in catalogue for k in tree.value) and any(k in keys for k in tree.value)


def _long(tree: Tree) -> bool:
    """Whether what a term says is a mapping of its parameters, and not the one of them that may stand alone."""
    return tree.is_map and set(tree.value) != {"value", "per"} and not varies(tree)


def _named_bodies(domain: Any) -> bool:
    return isinstance(domain, Named) and isinstance(domain.each, Body)


def _with(tree: Tree, name: str, made: Tree) -> Tree:
    key = tree.keys.get(name, Tree(name, made.place))
    return Tree({**tree.value, name: made}, tree.place, {**tree.keys, name: key})


def _has_member(group: Tree, name: Step) -> bool:
    """Whether a group, as written, has a series of this name: in its list, by prefix and number, or in its table."""
    if not group.is_map:
        return False
    names, table = (group.value[key] if key in group.value else None for key in ("names", "table"))
    if table is not None and table.is_map and name in table.value:
        return True
    if names is None or not names.is_map:
        return names is not None and names.is_list and any(each.value == name for each in names.value)
    prefix, count = (names.value[key].value if key in names.value else None for key in ("prefix", "count"))
    number = str(name).removeprefix(str(prefix))
    return f"{prefix}{number}" == name and number.isdecimal() and isinstance(count, int) and 1 <= int(number) <= count


def _names(parameters: Iterable[Parameter]) -> tuple[str, ...]:
    return tuple([p.name for p in parameters])


def _joined(path: str, steps: Steps) -> str:
    for step in steps:
        path += f"[{step}]" if isinstance(step, int) else f".{step}" if path else str(step)
    return path
