"""Reading a spec: text, file or plain data becomes a checked Spec, or a SpecError with every fault."""

from __future__ import annotations

import copy
from collections.abc import Iterable, Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

from procgen.spec.calendar import Grid
from procgen.spec.columns import Past
from procgen.spec.correlated import read_correlation
from procgen.spec.declare import INVALID, Body, Choice, Parameter, Real, Text, Whole, read_each
from procgen.spec.entries import SERIES_KEYS, read_body, read_name
from procgen.spec.file import text_of
from procgen.spec.groups import OWN, read_groups
from procgen.spec.links import Links
from procgen.spec.model import Correlation, Entry, Fault, Frozen, Place, Series, Shared, Spec, SpecError
from procgen.spec.parameters import Known, check_tables, read_section, read_varying, unused
from procgen.spec.places import Declared
from procgen.spec.timegrid import MOST, TIME, read_time
from procgen.spec.tree import TooMuch, Tree, from_data
from procgen.spec.variants import SECTION, Setting, Written, applied, in_variant, read_variants, rewritten
from procgen.spec.varying import Varying
from procgen.spec.yaml12 import from_text

MAX_FAULTS = 200
MAX_VALUES = 10**13  # 80 TB as float64
RESERVED = ("path", "step", "time", "series", "weight")  # columns and words of the ensemble

HEAD = (
    Parameter("procgen", "", Whole(at_least=1, at_most=1), "version of the spec language", default=1),
    Parameter("title", "", Text(), "free text, shown in reports", default=None),
    Parameter("seed", "", Whole(at_least=0, at_most=2**128 - 1), "the number all draws follow from"),
    Parameter("paths", "P", Whole(at_least=1, at_most=MOST), "number of paths"),
)
SECTIONS = ("time", "reuse", "parameters", "shared", "series", "groups", "correlation", SECTION)
SERIES = (
    Parameter("of", "", Body(), "the terms of the series"),
    Parameter("unit", "", Text(), "unit of the values, kept in the metadata of the column", default=None),
    Parameter("type", "", Choice("float64", "float32", "int64"), "type of the column", default=None),
    Parameter("decimals", "", Whole(at_least=0, at_most=15), "decimals to round to", default=None),
    Parameter("stream", "", Text(), "name its draws are found by; its own when absent", default=None),
    Parameter("note", "", Text(), "free text", default=None),
    Parameter(
        "before",
        "",
        Past(),
        "what came before step 0, one number a step up to step −1: the series leaves from there, given all of it",
        default=None,
        unit="series",
    ),
)


class Reader:
    """Collects faults while a tree is read; what `domains.Reading` asks for."""

    def __init__(self, catalogue: Mapping[str, Any], laws: Mapping[str, Any]) -> None:
        self.catalogue = catalogue
        self.laws = laws
        self.faults: list[Fault] = []
        self.grid: Grid | None = None
        self.subject: Parameter | None = None
        self.known: Known | None = None  # what may stand in place of numbers; None where nothing can vary
        self.made: list[Varying] = []  # what was read in place of numbers
        self.parts = 1  # in how many a step is cut for the bodies that are read

    def fault(self, tree: Tree, message: str) -> None:
        """Report what is wrong at a tree; the same fault of an anchored text once."""
        fault = Fault(tree.place, message)
        here = (tree.place.line, tree.place.column, message)
        if not tree.place.line or here not in {(f.place.line, f.place.column, f.message) for f in self.faults}:
            self.faults.append(fault)
        if len(self.faults) >= MAX_FAULTS:
            raise TooMuch(f"more than {MAX_FAULTS} faults; these are the first", Place(tree.place.file, 0, 0, ""))

    def expected(self, tree: Tree, what: str, hint: str = "") -> Any:
        """Report that something else was expected at a tree, with the meaning of the parameter being read."""
        subject = f" ({self.subject.name}: {self.subject.meaning})" if self.subject else ""
        self.fault(tree, f"expected {what}, got {tree.show()}" + (f"; {hint}" if hint else "") + subject)
        return INVALID

    def about(self, parameter: Parameter | None) -> Reader:
        """Return a reader that shares everything and speaks of `parameter`."""
        other = copy.copy(self)
        other.subject = parameter
        return other

    def varying(self, tree: Tree, domain: Real) -> Any:
        """Return what stands at a tree in place of a number, or INVALID after reporting."""
        found = read_varying(tree, domain, self, self.known)
        if isinstance(found, Varying):
            self.made.append(found)
        return found

    def closed(self) -> Reader:
        """Return a reader of numbers that cannot vary."""
        return self.open(None)

    def by_series(self) -> Reader:
        """Return a reader of numbers that can vary by series, and not by path."""
        return self.open(self.known and replace(self.known, by_path=False))

    def open(self, known: Known | None) -> Reader:
        """Return a reader of numbers that can be what is known by name."""
        other = copy.copy(self)
        other.known = known
        return other

    def cut(self, parts: int) -> Reader:
        """Return a reader of bodies that run on steps cut into so many parts."""
        other = copy.copy(self)
        other.parts = parts
        return other

    def body(self, tree: Tree) -> tuple[Entry, ...]:
        reader = self.about(None)
        if self.parts > 1:
            reader.grid, reader.parts = self.grid and self.grid.cut(self.parts), 1
        return read_body(tree, reader)


def read_text(text: str, catalogue: Mapping[str, Any], laws: Mapping[str, Any], file: str | None = None) -> Spec:
    """Return the Spec of a YAML text; SpecError lists every fault.

    Parameters
    ----------
    text : the spec, strict YAML 1.2.
    catalogue, laws : the kinds of term and the laws that a spec may name.
    file : name for the places in faults.
    """
    faults: list[Fault] = []
    tree = from_text(text, file, faults)
    faults += () if tree is None else unused(tree)
    return _read(tree, faults, catalogue, laws, file)


def read_file(path: str | Path, catalogue: Mapping[str, Any], laws: Mapping[str, Any]) -> Spec:
    """Return the Spec of a YAML file in UTF-8; SpecError when it cannot be read, or lists every fault."""
    return read_text(text_of(Path(path)), catalogue, laws, str(path))


def read_raw(
    data: Mapping[str, Any], catalogue: Mapping[str, Any], laws: Mapping[str, Any], file: str | None = None
) -> Spec:
    """Return the Spec of plain data in the spec language, such as `Spec.raw`; SpecError lists every fault."""
    faults: list[Fault] = []
    try:
        tree = from_data(data, file, faults)
    except TooMuch as refusal:
        raise SpecError((*faults, refusal.fault)) from None
    return _read(tree, faults, catalogue, laws, file)


def _read(
    tree: Tree | None, faults: list[Fault], catalogue: Mapping[str, Any], laws: Mapping[str, Any], file: str | None
) -> Spec:
    spec = None if tree is None else _checked(tree, faults, catalogue, laws, file)
    if faults or spec is None:
        raise _error(faults)
    return spec


def _checked(
    tree: Tree, faults: list[Fault], catalogue: Mapping[str, Any], laws: Mapping[str, Any], file: str | None
) -> Spec | None:
    """Return the Spec of a tree, its variants tried, or None after adding every fault."""
    reader = Reader(catalogue, laws)
    reader.faults = faults
    try:
        spec = _spec(tree, reader, file)
        variants = read_variants(tree.value[SECTION], reader) if tree.is_map and SECTION in tree.value else {}
    except TooMuch as refusal:
        faults.append(refusal.fault)
        return None
    if spec is None:
        return None
    spec = replace(spec, written=Written(tree, Frozen(catalogue), Frozen(laws), Frozen(variants)))
    for name in variants:
        _try(spec, name, reader)
    return spec


def _try(spec: Spec, name: str, reader: Reader) -> None:
    """Report what is wrong with a variant, unless another has it as well."""
    try:
        variant(spec, name)
    except SpecError as error:
        for fault in error.faults:
            if not any((fault.place.line, fault.message) == (f.place.line, f.message) for f in reader.faults):
                reader.faults.append(in_variant(fault, name))


def variant(spec: Spec, name: str) -> Spec:
    """Return a variant of a spec by its name, which it has; SpecError lists every fault."""
    found = settled(spec, _written(spec).variants[name])
    return replace(found, written=replace(_written(found), variant=name))


def settled(spec: Spec, settings: Iterable[Setting]) -> Spec:
    """Return the spec with other things at some places, checked anew; SpecError lists every fault."""
    written = _written(spec)
    faults: list[Fault] = []
    tree = applied(written.tree, settings, settable(written.catalogue), faults)
    made = _checked(tree, faults, written.catalogue, written.laws, spec.file)
    if faults or made is None:
        raise _error(faults)
    return made


def settable(catalogue: Mapping[str, Any]) -> Declared:
    """Return which keys a spec can have where, for places in it."""
    return Declared(catalogue, _SETTABLE, _names(TIME), _names(SERIES), (*_names(SERIES), *OWN))


def _names(parameters: Iterable[Parameter]) -> tuple[str, ...]:
    return tuple([parameter.name for parameter in parameters])


_SETTABLE = tuple([p.name for p in HEAD if p.name != "procgen"] + [s for s in SECTIONS if s not in ("reuse", SECTION)])


def _written(spec: Spec) -> Written:
    if spec.written is None:
        raise ValueError("this Spec was put together by hand; load a file or a mapping")
    return spec.written


def _error(faults: list[Fault]) -> SpecError:
    """Return the error of all faults in order of their lines, those without a line last."""
    faults = sorted(faults, key=lambda f: (f.place.line == 0, f.place.line, f.place.column))
    return SpecError(tuple(faults[: MAX_FAULTS + 1]))


def _spec(tree: Tree, reader: Reader, file: str | None) -> Spec | None:
    if not tree.is_map:
        reader.expected(tree, "a mapping with the keys procgen, seed, paths, time and series")
        return None
    head = read_each(tree, HEAD, reader, also=SECTIONS)
    reader.grid = _grid(tree, reader)
    parameters = read_section(tree.value["parameters"], reader) if "parameters" in tree.value else {}
    terms = reader.open(Known(parameters))
    shared = {name: _shared(name, t, terms) for name, t in _named(tree, "shared", reader).items()}
    series = {name: _series(name, t, terms) for name, t in _named(tree, "series", reader).items()}
    if "groups" in tree.value:
        series = _with_groups(tree.value["groups"], series, reader, parameters)
    elif not series:
        _need(tree, "series", "a mapping of names to bodies, as in {load: [{white_noise: {sd: 1}}]}", reader)
    _unique(tree, shared, series, reader)
    links = Links({**shared, **series}, reader)
    links.check()
    correlation = Correlation()
    if "correlation" in tree.value:
        correlation = read_correlation(tree.value["correlation"], links, reader)
    if reader.faults or reader.grid is None:
        return None
    check_size(tree, head["paths"], reader.grid.steps, len(series), reader)
    spec = Spec(
        head["title"],
        head["seed"],
        head["paths"],
        reader.grid,
        Frozen(shared),
        Frozen(series),
        correlation,
        raw=_raw(tree),
        file=file,
        parameters=Frozen(parameters),
    )
    check_tables(tree, spec, reader)
    return spec


def _raw(tree: Tree) -> dict[str, Any]:
    """Return a spec as plain data, without its variants."""
    return {key: inner.plain() for key, inner in tree.value.items() if key != SECTION}


def change(spec: Spec, **values: int) -> Spec:
    """Return a spec with another number of `paths` or `steps`, or another `seed`; SpecError when out of range."""
    time = {**spec.raw["time"], **{key: value for key, value in values.items() if key == "steps"}}
    raw = {**spec.raw, **{key: value for key, value in values.items() if key != "steps"}, "time": time}
    reader = Reader({}, {})
    tree = from_data(raw, spec.file, reader.faults)
    head = read_each(tree, HEAD, reader, also=SECTIONS)
    grid = read_time(tree.value["time"], reader)
    if not reader.faults and grid is not None:
        check_size(tree, head["paths"], grid.steps, len(spec.series), reader)
    if reader.faults or grid is None:
        raise _error(reader.faults)
    written = spec.written and rewritten(spec.written, values, settable(spec.written.catalogue))
    changed = replace(spec, seed=head["seed"], paths=head["paths"], time=grid, raw=tree.plain(), written=written)
    check_tables(tree, changed, reader)
    if reader.faults:
        raise _error(reader.faults)
    return changed


def check_size(tree: Tree, paths: int, steps: int, series: int, reader: Reader) -> None:
    """Report an ensemble that nobody can mean to draw."""
    values = paths * steps * series
    if values > MAX_VALUES:
        size = f"{paths:,} paths × {steps:,} steps × {series:,} series = {values:.1e} values, {values * 8e-12:,.0f} TB"
        reader.fault(tree.key("paths"), f"expected at most {MAX_VALUES:.0e} values, got {size}; ask for fewer")


def _grid(tree: Tree, reader: Reader) -> Grid | None:
    if "time" not in tree.value:
        _need(tree, "time", "steps, and a start when there are dates, as in {steps: 100}", reader)
        return None
    return read_time(tree.value["time"], reader)


def _need(tree: Tree, key: str, what: str, reader: Reader) -> None:
    if key not in tree.value:
        reader.fault(tree, f"expected the key {key} ({what})")


def _named(tree: Tree, section: str, reader: Reader) -> dict[str, Tree]:
    """Return the bodies of a section by name, the names checked."""
    if section not in tree.value:
        return {}
    bodies = tree.value[section]
    if not bodies.is_map or not bodies.value:
        reader.expected(bodies, "a mapping of names to bodies, as in {load: [{white_noise: {sd: 1}}]}")
        return {}
    for name in bodies.value:
        key = bodies.key(name)
        if name in RESERVED:
            reader.fault(key, f"the name {name} is reserved for a column of the ensemble; choose another")
        else:
            read_name(key, reader, name)
    return dict(bodies.value)


def _shared(name: str, tree: Tree, reader: Reader) -> Shared:
    body = tree.value["of"] if tree.is_map and set(tree.value) == {"of"} else tree
    return Shared(name, read_body(body, reader), tree.place)


def _series(name: str, tree: Tree, reader: Reader) -> Series:
    if not _has_attributes(tree, reader):
        return Series(name, read_body(tree, reader), None, None, None, name, None, tree.place)
    values = read_each(tree, SERIES, reader)
    stream = read_name(tree.value["stream"], reader, name) if values["stream"] not in (None, INVALID) else name
    if values["type"] == "int64" and values["decimals"]:
        reader.fault(tree.key("decimals"), "an int64 has no decimals; remove decimals, or choose float64")
    body = values["of"] if isinstance(values["of"], tuple) else ()
    return Series(
        name,
        body,
        values["unit"],
        values["type"],
        values["decimals"],
        stream,
        values["note"],
        tree.place,
        before=None if values["before"] is INVALID else values["before"],
    )


def _with_groups(
    tree: Tree, series: dict[str, Series], reader: Reader, parameters: Mapping[str, Varying]
) -> dict[str, Series]:
    """Return the series of a spec and after them those of its groups."""
    members = read_groups(tree, reader, parameters, _series)
    for name, member in members.items():
        if name in series or name in RESERVED:
            what = "a series already" if name in series else "reserved for a column of the ensemble"
            message = f"the name {name} of a series in {member.group} is {what}; rename it"
            reader.fault(Tree(None, member.place), message)
    return {**series, **members}


def _has_attributes(tree: Tree, reader: Reader) -> bool:
    """Return whether a series is written in its long form, {of: …, unit: …}."""
    if not tree.is_map or any(key in reader.catalogue for key in tree.value):
        return False
    return any(key in SERIES_KEYS for key in tree.value)


def _unique(tree: Tree, shared: dict[str, Shared], series: dict[str, Series], reader: Reader) -> None:
    """Report names and streams that stand for two things."""
    for name in series:
        if name in shared:
            reader.fault(_series_key(tree, series[name]), f"the name {name} is a shared body already; rename one")
    streams = {name: f"shared body {name}" for name in shared}
    for name, one in series.items():
        if one.stream in streams and name not in shared:
            key = tree.value["series"].value[name].value["stream"] if one.stream != name else None
            message = f"the stream {one.stream} belongs to the {streams[one.stream]}; two would draw the same values"
            reader.fault(key or _series_key(tree, one), f"{message}; choose another")
        streams.setdefault(one.stream, f"series {name}")


def _series_key(tree: Tree, series: Series) -> Tree:
    """Return where the name of a series is written: its key, or its group."""
    return Tree(None, series.place) if series.group else tree.value["series"].key(series.name)
