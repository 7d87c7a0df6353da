"""Parameters that vary: drawn once a path or once a series, or read from a table, in place of a number in a spec.

A number of a term may be written as `{draw: {uniform: [0.3, 0.9]}, over: path}`, as `{parameter: k}` for a draw that
`parameters:` declares once for several places, as `{from_table: {file: f.csv, key: path}}`, or, within a group of
series, as `{column: name}` of the group's table.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import field
from typing import Any

from procgen.spec.declare import INVALID, Choice, Parameter, Real, read_each
from procgen.spec.domains import FORMS, Reading
from procgen.spec.draws import DrawOf, TableDraw
from procgen.spec.model import Fault, Spec
from procgen.spec.records import dataclass
from procgen.spec.tables import TABLE, read_lookup
from procgen.spec.tree import Tree
from procgen.spec.varying import PATH, SERIES, Varying, varying_of
from procgen.spec.words import did_you_mean, one_of

DRAWN = (
    Parameter("draw", "", DrawOf(), "the law that it is drawn from"),
    Parameter("over", "", Choice(PATH, SERIES), "whether each path or each series has a value of its own"),
)
Values = Mapping[str, Any]


@dataclass(frozen=True)
class Known:
    """What may stand in place of numbers while a body is read."""

    declared: Mapping[str, Varying] = field(default_factory=dict)
    row: Mapping[str, Any] = field(default_factory=dict)  # of the group's table
    series: str = ""  # the member of a group that is read
    by_path: bool = True  # whether a number may differ from path to path


def read_section(tree: Tree, reader: Reading) -> dict[str, Varying]:
    """Return what `parameters:` declares, by name."""
    if not tree.is_map or not tree.value:
        reader.expected(tree, "a mapping of names to draws, as in {k: {draw: {uniform: [0.3, 0.9]}, over: path}}")
        return {}
    found = {name: _declared(name, inner, reader) for name, inner in tree.value.items()}
    return {name: varying for name, varying in found.items() if varying is not INVALID}


def unused(tree: Tree) -> Iterator[Fault]:
    """Yield a fault for every declared parameter that nothing in a spec, its variants included, names.

    Where some name is declared nowhere there is a fault already, which is likely the cause.
    """
    if not tree.is_map or "parameters" not in tree.value or not tree.value["parameters"].is_map:
        return
    section = tree.value["parameters"]
    named = set(_mentioned(tree))
    if named <= set(section.value):
        for name in section.value:
            if name not in named:
                mend = f"write {{parameter: {name}}} in the place of a number, or remove it"
                yield Fault(section.key(name).place, f"nothing uses the parameter {name[:100]}; {mend}")


def _mentioned(tree: Tree) -> Iterator[str]:
    """Yield every name in {parameter: name}, without recursion: trees may be deep."""
    waiting = [tree]
    while waiting:
        inner = waiting.pop()
        if inner.is_map:
            name = inner.value.get("parameter")
            if name is not None and isinstance(name.value, str):
                yield name.value
            waiting += inner.value.values()
        elif inner.is_list:
            waiting += inner.value


def _declared(name: str, tree: Tree, reader: Reading) -> Any:
    return _from_table(tree, name, reader, name) if tree.is_map and TABLE in tree.value else _drawn(tree, reader, name)


def _drawn(tree: Tree, reader: Reading, name: str = "") -> Any:
    values = read_each(tree, DRAWN, reader.closed())
    return INVALID if INVALID in values.values() or not values else Varying(values["draw"], values["over"], name)


def _from_table(tree: Tree, column: str, reader: Reading, name: str = "") -> Any:
    law = read_lookup(tree, column, reader.closed())
    return INVALID if law is INVALID else Varying(law, SERIES if law.by_series else PATH, name)


def read_varying(tree: Tree, domain: Real, reader: Reading, known: Known | None) -> Any:
    """Return what stands at `tree` in place of a number: a Varying, or the number of a group's table.

    INVALID after reporting a fault; `known` is None where nothing can vary.
    """
    if known is None:
        reader.fault(tree, f"this number cannot vary, numbers of terms can; write {domain.describe()}")
        return INVALID
    form = next(form for form in FORMS if form in tree.value)
    found = _READERS[form](tree, reader.about(None), known, getattr(reader, "subject", None))
    if found is INVALID:
        return INVALID
    if not isinstance(found, Varying):
        return _number(found, tree, domain, reader, known)
    if found.over == PATH and not known.by_path:
        why = "the numbers of a law cannot vary by path, for the shocks of a term have one law"
        reader.fault(tree, f"{why}; write over: series, or {domain.describe()}")
        return INVALID
    if not found.law.fits(domain):
        reader.fault(tree, f"expected {domain.describe()}, got {_reach(found, domain)}")
        return INVALID
    return found


def _number(found: Any, tree: Tree, domain: Real, reader: Reading, known: Known) -> Any:
    """Return a number of a group's table, checked."""
    if isinstance(found, int | float) and not isinstance(found, bool) and domain.holds(float(found)):
        return float(found)
    what = f"expected {domain.describe()}, got {found!r} in column {tree.value['column'].value} for {known.series}"
    reader.fault(tree, f"{what}; mend the table")
    return INVALID


def _reach(varying: Varying, domain: Real) -> str:
    law = varying.law
    if domain.holds(max(min(law.low, 1e300), -1e300)) and domain.holds(max(min(law.high, 1e300), -1e300)):
        worst = law.low if not domain.holds(law.low) else law.high
        return f"draws {law}, which can meet {worst:g}; draw from inside"
    if abs(law.low) == float("inf") or abs(law.high) == float("inf"):
        return f"draws {law}, which have no end there; give `within: [low, high]` inside that range"
    worst = law.low if not domain.holds(law.low) else law.high
    return f"draws {law}, which reach {worst:g}; draw from a range inside"


def _inline(tree: Tree, reader: Reading, known: Known, subject: Parameter | None) -> Any:
    del known, subject
    return _drawn(tree, reader)


def _named(tree: Tree, reader: Reading, known: Known, subject: Parameter | None) -> Any:
    del subject
    return _looked_up("parameter", known.declared, "parameter", "declare it under parameters:", tree, reader)


def _column(tree: Tree, reader: Reading, known: Known, subject: Parameter | None) -> Any:
    del subject
    if not known.series:
        reader.fault(tree, "only a series of a group has a row of a table; use from_table, or put it under groups:")
        return INVALID
    return _looked_up("column", known.row, "column in the group's table", "add it there", tree, reader)


def _table(tree: Tree, reader: Reading, known: Known, subject: Parameter | None) -> Any:
    del known
    return _from_table(tree, subject.name if subject else "", reader)


_READERS: Mapping[str, Callable[[Tree, Reading, Known, Parameter | None], Any]] = {
    "draw": _inline,
    "from_table": _table,
    "parameter": _named,
    "column": _column,
}


def _looked_up(form: str, names: Values, what: str, mend: str, tree: Tree, reader: Reading) -> Any:
    if set(tree.value) != {form} or not isinstance(tree.value[form].value, str):
        return reader.expected(tree, f"the key {form} alone, with a name, as in {{{form}: {next(iter(names), 'k')}}}")
    name = tree.value[form].value
    if name in names:
        return names[name]
    hint = did_you_mean(name, names)
    listed = f"expected {one_of(list(names)[:20])}" if names else mend
    reader.fault(tree.value[form], f"there is no {what} named {name[:100]}; {listed}" + (f"; {hint}" if hint else ""))
    return INVALID


def check_tables(tree: Tree, spec: Spec, reader: Reading) -> None:
    """Report tables that have no value for a path or a series of a spec."""
    for owner, varying in varying_of(spec):
        law = varying.law
        if not isinstance(law, TableDraw):
            continue
        name = varying.key(owner)
        if law.by_series and owner not in law.values:
            reader.fault(tree, f"the table of {name} has no value for {owner}; add a row, or take it out of there")
        elif not law.by_series and len(law.values) < spec.paths:
            what = f"the table of {name} has values of {len(law.values):,} paths, and there are {spec.paths:,}"
            reader.fault(tree.key("paths"), f"{what}; add rows, or ask for fewer paths")
            return
