"""Variants of a spec: other values at some of its places, written beside it, on a command line, or in Python.

    variants:
      crisis: {series.load_kw.swing.sd: 9, time.steps: 500}

Places are read in the tree of the spec before it is checked, so that what is put there is checked as if it stood in
the file. A variant draws by the same names as the spec, hence from the same shocks.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import field, replace
from typing import Any

from procgen.spec.entries import read_name
from procgen.spec.model import Fault, Place, SpecError
from procgen.spec.places import OUT, Declared, Nowhere, planted, put
from procgen.spec.records import dataclass
from procgen.spec.tree import TooMuch, Tree, from_data
from procgen.spec.words import did_you_mean, one_of
from procgen.spec.yaml12 import from_text

SECTION = "variants"
BASE, ALL = "base", "all"  # the spec as written; every variant and the spec
MOST = 100


@dataclass(frozen=True)
class Setting:
    """What is to stand at a place: a tree, of which nothing (null) takes out what is there."""

    place: str
    value: Tree
    spot: Place  # where the place itself is written


@dataclass(frozen=True)
class Written:
    """A spec as written, from which variants of it are read."""

    tree: Tree
    catalogue: Mapping[str, Any]
    laws: Mapping[str, Any]
    variants: Mapping[str, tuple[Setting, ...]] = field(default_factory=dict)
    variant: str = ""  # the name of the variant that it is


def read_variants(tree: Tree, reader: Any) -> dict[str, tuple[Setting, ...]]:
    """Return the settings of every variant by its name, after reporting what is none."""
    if not tree.is_map or not tree.value:
        reader.expected(tree, "variants by name, as in {crisis: {series.load.ar.sd: 9}}")
        return {}
    if len(tree.value) > MOST:
        reader.fault(tree, f"expected at most {MOST} variants, got {len(tree.value)}")
        return {}
    found = {}
    for name, inner in tree.value.items():
        read_name(tree.key(name), reader, name)
        if name in (BASE, ALL):
            reader.fault(tree.key(name), f"the name {name} stands for the spec itself or for all; choose another")
        if not inner.is_map or not inner.value:
            reader.expected(inner, "places, each with what is to stand there, as in {series.load.ar.sd: 9}")
            continue
        found[name] = tuple([Setting(place, value, inner.key(place).place) for place, value in inner.value.items()])
    return found


def applied(tree: Tree, settings: Iterable[Setting], declared: Declared, faults: list[Fault]) -> Tree:
    """Return the tree of a spec with its settings in place and without variants; what has no place is a fault."""
    tree = _without(tree, SECTION)
    done: dict[str, str] = {}
    for setting in settings:
        value = setting.value
        new = Tree(OUT, value.place) if value.is_scalar and value.value is None else value
        try:
            tree, path = put(tree, setting.place, new, declared)
        except Nowhere as error:
            faults.append(Fault(setting.spot, str(error)))
            continue
        if path in done:
            first = "" if done[path] == setting.place else f", first as {done[path]}"
            faults.append(Fault(setting.spot, f"{setting.place} is set twice{first}; keep one of them"))
        done[path] = setting.place
    return _pruned(tree)


def rewritten(written: Written, values: Mapping[str, int], declared: Declared) -> Written:
    """Return what is read again once paths, steps or seed are others; it keeps what files said, and for when."""
    settings = settings_of({"time.steps" if name == "steps" else name: value for name, value in values.items()})
    return replace(written, tree=applied(written.tree, settings, declared, []))


def settings_of(values: Mapping[str, Any]) -> tuple[Setting, ...]:
    """Return settings from plain data by place; SpecError with what cannot stand in a spec."""
    faults: list[Fault] = []
    made = []
    if not isinstance(values, Mapping):
        message = f'expected values by place, as in {{"series.load.ar.sd": 9}}, got {type(values).__name__}'
        raise SpecError((Fault(Place(None, 0, 0, ""), message),))
    for place, value in values.items():
        if not isinstance(place, str):
            message = f"expected places that are texts, got {type(place).__name__}"
            faults.append(Fault(Place(None, 0, 0, ""), message))
            continue
        spot = Place(None, 0, 0, place[:200])
        inside: list[Fault] = []
        try:
            made.append(Setting(place, from_data(value, None, inside), spot))
        except TooMuch as refusal:
            inside.append(refusal.fault)
        faults += [Fault(_within(fault.place, place), fault.message) for fault in inside]
    if faults:
        raise SpecError(tuple(faults))
    return tuple(made)


def setting_of(text: str, option: str = "--set") -> Setting:
    """Return the setting of `PLACE=VALUE`, the value in strict YAML 1.2; SpecError names the option."""
    place, given, value = text.partition("=")
    place = place.strip()
    spot = Place(option, 0, 0, place[:200])
    faults: list[Fault] = []
    if not given or not place:
        faults.append(Fault(spot, f"expected PLACE=VALUE such as series.load.ar.phi=0.9, got {text[:100]!r}"))
    elif not value.strip():
        faults.append(Fault(spot, "expected a value behind =, got nothing; null takes out what is there"))
    tree = None if faults else from_text(value, option, faults)
    if faults or tree is None:
        raise SpecError(tuple([Fault(replace(spot, column=0), fault.message) for fault in faults]))
    return Setting(place, _without_lines(tree, option), spot)


def all_settings(texts: Sequence[str]) -> tuple[Setting, ...]:
    """Return the settings of several `PLACE=VALUE`; SpecError lists every fault."""
    made: list[Setting] = []
    faults: list[Fault] = []
    for text in texts:
        try:
            made.append(setting_of(text))
        except SpecError as error:
            faults += error.faults
    if faults:
        raise SpecError(tuple(faults))
    return tuple(made)


def no_such(name: str, names: Sequence[str]) -> str:
    """Return the message for a variant that a spec has not."""
    if not names:
        return f"there is no variant {name[:100]}, for this spec has none; write it under variants:"
    hint = did_you_mean(name, names)
    return f"there is no variant {name[:100]}; expected {one_of([*names, BASE])}" + (f"; {hint}" if hint else "")


def in_variant(fault: Fault, name: str) -> Fault:
    """Return the fault with its place named as one of a variant."""
    if fault.place.path.startswith(f"{SECTION}."):  # it says so itself
        return fault
    path = f"{fault.place.path or 'the spec'} in variant {name}"
    return Fault(replace(fault.place, path=path), fault.message)


def _without(tree: Tree, key: str) -> Tree:
    if not tree.is_map or key not in tree.value:
        return tree
    return Tree({k: t for k, t in tree.value.items() if k != key}, tree.place, tree.keys)


def _pruned(tree: Tree) -> Tree:
    if tree.is_map:
        return replace(tree, value={k: _pruned(t) for k, t in tree.value.items() if t.value is not OUT})
    if tree.is_list:
        return replace(tree, value=tuple([_pruned(t) for t in tree.value if t.value is not OUT]))
    return tree


def _without_lines(tree: Tree, option: str) -> Tree:
    """Return the tree of a value on a command line: its lines and columns are nobody's."""

    def bare(tree: Tree) -> Tree:
        here = Place(option, 0, 0, tree.place.path)
        if tree.is_map:
            keys = {k: Tree(k, Place(option, 0, 0, key.place.path)) for k, key in tree.keys.items()}
            return Tree({k: bare(t) for k, t in tree.value.items()}, here, keys)
        return Tree(tuple([bare(t) for t in tree.value]), here) if tree.is_list else Tree(tree.value, here)

    return bare(planted(tree, ""))


def _within(place: Place, path: str) -> Place:
    return replace(place, path=f"{path}.{place.path}".rstrip("."))
