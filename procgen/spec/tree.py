"""Trees of scalars, lists and mappings whose nodes know their places; from YAML (`yaml12`) or plain data."""

from __future__ import annotations

import datetime
import math
import re
from collections.abc import Mapping
from dataclasses import field
from typing import Any

from procgen.spec.model import Fault, Place
from procgen.spec.records import dataclass

MAX_DEPTH = 60
MAX_NODES = 100_000

NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*", re.ASCII)
# What no editor shows: controls except tab and line end, odd line ends, byte order marks, halves of characters.
HIDDEN = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\u2028\u2029\ufeff\ufffe\uffff\ud800-\udfff]")


class TooMuch(Exception):
    """A tree is refused before it does harm; the message says what there is too much of."""

    def __init__(self, message: str, place: Place) -> None:
        super().__init__(message)
        self.fault = Fault(place, message)


@dataclass(slots=True)
class Tree:
    """A scalar, a list of trees, or a mapping of names to trees, with the place it was written at."""

    value: Any  # None, bool, int, float or str; tuple[Tree, ...]; dict[str, Tree]
    place: Place
    keys: dict[str, Tree] = field(default_factory=dict)  # of a mapping: each key as a text with its own place
    origin: Any = None  # what stood here before the values of a file did, and the file's table

    @property
    def is_map(self) -> bool:
        return isinstance(self.value, dict)

    @property
    def is_list(self) -> bool:
        return isinstance(self.value, tuple)

    @property
    def is_scalar(self) -> bool:
        return not isinstance(self.value, (dict, tuple))

    def key(self, name: str) -> Tree:
        """Return the key itself, for faults about its name."""
        return self.keys.get(name, self)

    def plain(self) -> Any:
        """Return the tree as plain dicts, lists and scalars."""
        if self.is_map:
            return {key: tree.plain() for key, tree in self.value.items()}
        return [tree.plain() for tree in self.value] if self.is_list else self.value

    def show(self) -> str:
        """Return what stands here in a few words, for the "got" of a message."""
        if self.is_map:
            return f"a mapping with {_listed(self.value, 'key')}" if self.value else "an empty mapping"
        if self.is_list:
            return f"a list of {len(self.value)}" if self.value else "an empty list"
        return show_scalar(self.value)


def show_scalar(value: Any) -> str:
    """Return a scalar as YAML would write it, shortened."""
    if value is None:
        return "nothing"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        text = "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in value[:41])
        return f'"{text[:40]}…"' if len(text) > 40 else f'"{text}"'
    if isinstance(value, float) and not math.isfinite(value):
        return ".nan" if value != value else ".inf" if value > 0 else "-.inf"
    if isinstance(value, int) and abs(value) >= 10**40:
        return f"a number of {int(math.log10(abs(value))) + 1} digits"
    return repr(value)


def step_into(path: str, key: str) -> str:
    """Return the dotted path of a key; `of` is left out, so that short and long forms share their paths."""
    if key == "of" and path not in ("series", "shared"):
        return path
    part = key if NAME.fullmatch(key) and len(key) <= 100 else f"[{show_scalar(key)}]"
    return f"{path}.{part}" if path and not part.startswith("[") else path + part


def from_data(data: Any, file: str | None, faults: list[Fault]) -> Tree:
    """Return plain data (mappings, lists, scalars, dates) as a tree; what is none of these is a fault."""
    count = 0

    def grow(value: Any, path: str, depth: int) -> Tree:
        nonlocal count
        count += 1
        place = Place(file, 0, 0, path)
        check_size(count, depth, place)
        if getattr(value, "ndim", 0) and callable(getattr(value, "tolist", None)):  # an array, or a column of a table
            if getattr(value, "size", 0) > MAX_NODES:
                check_size(value.size, depth, place)
            value = value.tolist()
        if isinstance(value, Mapping):
            return branch(value, path, depth, place)
        if isinstance(value, (list, tuple, range)):
            return Tree(tuple([grow(v, f"{path}[{i}]", depth + 1) for i, v in enumerate(value)]), place)
        return Tree(leaf(value, place), place)

    def branch(value: Mapping[Any, Any], path: str, depth: int, place: Place) -> Tree:
        items = {}
        for key, inner in value.items():
            if isinstance(key, str):
                inside = step_into(path, key)
                key = leaf(key, Place(file, 0, 0, inside))
                items[key] = grow(inner, inside, depth + 1)
            else:
                faults.append(Fault(place, f"expected keys that are texts, got {type(key).__name__}"))
        return Tree(items, place, {key: Tree(key, tree.place) for key, tree in items.items()})

    def leaf(value: Any, place: Place) -> Any:
        value = _scalar(value)
        if isinstance(value, str) and (hidden := hidden_in(value)):
            faults.append(Fault(place, hidden))
            return HIDDEN.sub("", value)
        if value is None or isinstance(value, (bool, int, float, str)):
            return value
        what = type(value).__name__
        faults.append(Fault(place, f"expected a text, number, list or mapping, got {what}; convert it"))
        return None

    return grow(data, "", 0)


def check_size(count: int, depth: int, place: Place) -> None:
    """Raise TooMuch when a tree has too many values or levels."""
    if depth > MAX_DEPTH:
        raise TooMuch(f"expected at most {MAX_DEPTH} levels of nesting; take the inner levels apart", place)
    if count > MAX_NODES:
        why = "count what anchors and aliases (& and *) expand to"
        raise TooMuch(f"expected at most {MAX_NODES:,} values, with aliases expanded; {why}", place)


def hidden_in(text: str) -> str:
    """Return a message about the first character of a text that no editor shows, or ""."""
    if text.isprintable():
        return ""
    match = HIDDEN.search(text)
    return f"the invisible character U+{ord(match[0]):04X} is not allowed; remove it" if match else ""


def _scalar(value: Any) -> Any:
    """Return plain Python for dates and for scalars of array libraries."""
    if isinstance(value, (datetime.date, datetime.datetime)):
        return value.isoformat()
    if type(value) not in (bool, int, float, str) and callable(getattr(value, "item", None)):
        try:
            return value.item()
        except (TypeError, ValueError):
            return value
    return value


def _listed(keys: Mapping[str, Any], noun: str) -> str:
    names = [show_scalar(key)[1:-1] for key in list(keys)[:4]]
    more = ", …" if len(keys) > 4 else ""
    return f"the {noun}{'s' if len(keys) > 1 else ''} {', '.join(names)}{more}"
