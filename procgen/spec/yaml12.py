"""Strict YAML 1.2 into trees: the core schema, no tags, no merges, no duplicate keys, nothing executed.

PyYAML's own scanner and parser give the events, in Python even where a C parser is installed, so that a spec reads
the same, and a fault says the same, on every machine. Types are resolved here, by the YAML 1.2 core schema:
https://yaml.org/spec/1.2.2/#103-core-schema.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import Any

import yaml

from procgen.spec.model import Fault, Place
from procgen.spec.records import dataclass
from procgen.spec.tree import HIDDEN, MAX_DEPTH, TooMuch, Tree, check_size, hidden_in, step_into
from procgen.spec.words import did_you_mean

MAX_BYTES = 300_000

_WORDS: dict[str, bool | None] = {"": None, "~": None}
_WORDS |= {word: None for word in ("null", "Null", "NULL")}
_WORDS |= {word: True for word in ("true", "True", "TRUE")}
_WORDS |= {word: False for word in ("false", "False", "FALSE")}
_DECIMAL = re.compile(r"[-+]?[0-9]+", re.ASCII)
_OCTAL = re.compile(r"0o[0-7]+", re.ASCII)
_HEX = re.compile(r"0x[0-9a-fA-F]+", re.ASCII)
_FLOAT = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?", re.ASCII)
_INFINITE = re.compile(r"[-+]?\.(inf|Inf|INF)", re.ASCII)
_LONGEST_NUMBER = 400  # longer runs of digits stay texts; Python refuses to convert them in good time


@dataclass(slots=True)
class _Node:
    """A value as written, before its path is known: an anchored one may stand at many paths."""

    value: Any  # a scalar; list[_Node]; or list[tuple[_Node, _Node]] with `is_map`
    line: int
    column: int
    is_map: bool = False
    plain: bool = False  # a scalar without quotes
    tag: str | None = None
    done: bool = True  # False while its end has not come: an alias to it would contain itself


def from_text(text: str, file: str | None, faults: list[Fault]) -> Tree | None:
    """Return the one document of a YAML text as a tree, or None; what is wrong is appended to `faults`."""
    text = text.removeprefix("\ufeff")
    if len(text) > MAX_BYTES:
        message = f"expected a spec of at most {MAX_BYTES:,} characters, got {len(text):,}"
        faults.append(Fault(Place(file, 0, 0, ""), message))
        return None
    if HIDDEN.search(text):
        faults.extend(_hidden(text, file))
        return None
    try:
        root = _Composer(file).compose(text)
        return _Planter(file, faults).plant(root, "", 0)
    except TooMuch as refusal:
        faults.append(refusal.fault)
    except yaml.YAMLError as error:
        faults.append(_syntax(error, file, text))
    except (ValueError, OverflowError):  # an escape such as "\UFFFFFFFF" that names no character
        message = "this is not valid YAML: an escape in a quoted text names no character; correct it"
        faults.append(Fault(Place(file, 0, 0, ""), message))
    return None


def resolve(text: str) -> Any:
    """Return the value of a plain scalar by the core schema of YAML 1.2."""
    if text in _WORDS:
        return _WORDS[text]
    if text[0] not in "+-.0123456789" or len(text) > _LONGEST_NUMBER:
        return text
    if _DECIMAL.fullmatch(text):
        return int(text)
    if _FLOAT.fullmatch(text):
        return float(text)
    if _OCTAL.fullmatch(text):
        return int(text[2:], 8)
    if _HEX.fullmatch(text):
        return int(text, 16)
    if _INFINITE.fullmatch(text):
        return float(text.replace(".", ""))
    return float("nan") if text in (".nan", ".NaN", ".NAN") else text


class _Composer:
    """Builds nodes from events, with a stack of its own, so that nesting meets a limit and not the interpreter's."""

    def __init__(self, file: str | None) -> None:
        self.file = file
        self.anchors: dict[str, _Node] = {}
        self.stack: list[_Node] = []
        self.pending: list[_Node | None] = []  # of each open mapping: the key that waits for its value
        self.root: _Node | None = None
        self.count = 0

    def compose(self, text: str) -> _Node:
        for event in yaml.parse(text, Loader=yaml.SafeLoader):
            self._take(event)
        if self.root is None:
            raise TooMuch("expected a spec, got an empty text", Place(self.file, 0, 0, ""))
        return self.root

    def _take(self, event: yaml.Event) -> None:
        if isinstance(event, yaml.DocumentStartEvent):
            self._document(event)
        elif isinstance(event, yaml.AliasEvent):
            self._add(self._alias(event))
        elif isinstance(event, yaml.ScalarEvent):
            plain = event.implicit[0] and event.style in (None, "")
            value = resolve(event.value) if plain else event.value
            self._add(self._node(event, value, plain=plain))
        elif isinstance(event, yaml.CollectionStartEvent):
            node = self._node(event, [], is_map=isinstance(event, yaml.MappingStartEvent), done=False)
            self._add(node)
            self.stack.append(node)
            self.pending.append(None)
            if len(self.stack) > MAX_DEPTH:
                check_size(0, len(self.stack), self._place(event))
        elif isinstance(event, yaml.CollectionEndEvent):
            self.stack.pop().done = True
            self.pending.pop()

    def _document(self, event: Any) -> None:
        if self.root is not None:
            raise TooMuch("expected one document; remove the line --- and what follows it", self._place(event))
        if event.version not in (None, (1, 2)):
            given = ".".join(map(str, event.version))
            message = f"expected YAML 1.2, got the line %YAML {given}; remove it"
            raise TooMuch(message, self._place(event))

    def _node(self, event: Any, value: Any, **marks: Any) -> _Node:
        mark = event.start_mark
        node = _Node(value, mark.line + 1, mark.column + 1, tag=event.tag, **marks)
        if event.anchor is not None:
            self.anchors[event.anchor] = node
        return node

    def _alias(self, event: Any) -> _Node:
        node = self.anchors.get(event.anchor)
        if node is None:
            hint = did_you_mean(event.anchor, self.anchors)
            message = f"the alias *{event.anchor} has no anchor &{event.anchor} before it"
            raise TooMuch(f"{message}; {hint or 'write the anchor first'}", self._place(event))
        if not node.done:
            raise TooMuch(f"the anchor &{event.anchor} contains itself; remove the alias", self._place(event))
        return node

    def _add(self, node: _Node) -> None:
        self.count += 1
        check_size(self.count, 0, Place(self.file, node.line, node.column, ""))
        if not self.stack:
            self.root = node
            return
        parent = self.stack[-1]
        if not parent.is_map:
            parent.value.append(node)
        elif self.pending[-1] is None:
            self.pending[-1] = node
        else:
            parent.value.append((self.pending[-1], node))
            self.pending[-1] = None

    def _place(self, event: Any) -> Place:
        return Place(self.file, event.start_mark.line + 1, event.start_mark.column + 1, "")


class _Planter:
    """Turns nodes into trees, aliases expanded, with the faults that need a path."""

    def __init__(self, file: str | None, faults: list[Fault]) -> None:
        self.file = file
        self.faults = faults
        self.count = 0

    def plant(self, node: _Node, path: str, depth: int) -> Tree:
        place = Place(self.file, node.line, node.column, path)
        self.count += 1
        check_size(self.count, depth, place)
        if node.tag is not None:
            self._fault(place, f"tags such as {node.tag[:40]} are not allowed; remove it, or quote a text")
        if node.is_map:
            return self._mapping(node, place, depth)
        if isinstance(node.value, list):
            inner = [self.plant(item, f"{path}[{i}]", depth + 1) for i, item in enumerate(node.value)]
            return Tree(tuple(inner), place)
        if isinstance(node.value, str) and (hidden := hidden_in(node.value)):
            self._fault(place, hidden)
            return Tree(HIDDEN.sub("", node.value), place)
        return Tree(node.value, place)

    def _mapping(self, node: _Node, place: Place, depth: int) -> Tree:
        values: dict[str, Tree] = {}
        keys: dict[str, Tree] = {}
        for key, value in node.value:
            name = self._key(key, place.path, alone=value.value is None)
            if name is None:
                continue
            spot = Place(self.file, key.line, key.column, step_into(place.path, name))
            if name in values:
                first = keys[name].place.line
                self._fault(spot, f"the key {name[:40]} is written twice, first in line {first}; remove one")
                continue
            values[name] = self.plant(value, spot.path, depth + 1)
            keys[name] = Tree(name, spot)
        return Tree(values, place, keys)

    def _key(self, key: _Node, path: str, alone: bool) -> str | None:
        place = Place(self.file, key.line, key.column, path)
        if key.plain and key.value == "<<":
            self._fault(place, "merge keys (<<) are not part of YAML 1.2; write the keys out, or use one alias")
        elif key.tag is not None:
            self._fault(place, f"tags such as {key.tag[:40]} are not allowed; remove it, or quote a text")
        elif not isinstance(key.value, str):
            comma = "; write a decimal sign as a point, and no comma within a number" if key.plain and alone else ""
            self._fault(place, f"expected a key that is a text, got {Tree(_outline(key), place).show()}{comma}")
        elif hidden := hidden_in(key.value):
            self._fault(place, hidden)
        else:
            return key.value
        return None

    def _fault(self, place: Place, message: str) -> None:
        self.faults.append(Fault(place, message))


def _outline(node: _Node) -> Any:
    if node.is_map:
        return {}
    return () if isinstance(node.value, list) else node.value


def _hidden(text: str, file: str | None) -> Iterator[Fault]:
    """Yield a fault for each of the first characters that no editor shows, in the lines they stand in."""
    for number, line in enumerate(re.split("\r\n|\r|\n", text), start=1):
        if match := HIDDEN.search(line):
            yield Fault(Place(file, number, match.start() + 1, ""), hidden_in(line))


def _syntax(error: yaml.YAMLError, file: str | None, text: str) -> Fault:
    """Return the fault of a text that is not YAML, in the words of someone who wrote it by hand."""
    problem = getattr(error, "problem", None) or str(error)
    mark = getattr(error, "problem_mark", None)
    place = Place(file, mark.line + 1, mark.column + 1, "") if mark else Place(file, 0, 0, "")
    if mark and (bare := _unquoted(re.split("\r\n|\r|\n", text)[mark.line :][:1], mark.column)):
        wants = f'a name with brackets or braces wants quotes; write "{bare}"'
        return Fault(place, f"this is not valid YAML: {wants}")
    for pattern, words in _PLAIN_WORDS.items():
        if match := re.search(pattern, problem):
            return Fault(place, f"this is not valid YAML: {match.expand(words)}")
    return Fault(place, f"this is not valid YAML: {problem}")


def _unquoted(lines: list[str], column: int) -> str | None:
    """Return the name with brackets or braces, as in series.load[0].ar.phi, that a parser stumbles over at a column."""
    begin = max(column - _NEAR, 0)  # long lines are not looked through: their repeats would take hours
    near = [line[begin : column + _NEAR] for line in lines]
    column -= begin
    found = (match for line in near for match in _BRACKETED.finditer(line) if match.start() < column <= match.end())
    return next((match[0].rstrip(".") for match in found), None)


_NEAR = 200  # letters
_INDEX = r"[\[{]\s*\w+\s*[\]}]"
_BRACKETED = re.compile(rf"[\w.]+(?:{_INDEX}[\w.]*)+|{_INDEX}[\w.]+(?:{_INDEX}[\w.]*)*")
_PLAIN_WORDS = {
    r"found character '\\t'": "a tab; indent and separate with spaces",
    r"found character '(.)' that cannot start": r"a text cannot begin with \1; put it in quotes",
    "mapping values are not allowed": "a second colon in one value; put the text in quotes, or the inner key on a "
    "line of its own",
    "expected <block end>": "this line is indented differently from the lines it belongs to; align it",
    "could not find expected ':'": "expected a colon and a space between a key and its value",
    "found unexpected end of stream": "a quote is opened and not closed",
    r"expected ',' or '(.)'": r"expected a comma or \1 here",
    "expected the node content": "expected a value here",
    "expected '<document start>'": "expected nothing after the end of the document",
    "tag": "tags are not allowed; remove what begins with !",
}
