"""The catalogue of terms and laws as text, made from their declarations."""

from __future__ import annotations

import re
from collections.abc import Iterable
from textwrap import fill, shorten
from typing import Any

from procgen.chance.laws import LAWS, Law
from procgen.spec.declare import Parameter, Record, Records
from procgen.spec.words import did_you_mean
from procgen.terms import catalogue

STANDARD = "a law has mean 0 and variance 1 before it is scaled by sd"
SHOWN = {  # numbers of an example of each law that has some
    "student_t": "{df: 6}",
    "skewed_t": "{df: 8, skew: -0.3}",
    "ged": "{shape: 1.5}",
    "skew_normal": "{alpha: 4}",
    "gamma": "{shape: 2}",
    "lognormal": "{sigma: 0.5}",
    "mixture": "{weight: 0.1, ratio: 3}",
    "normal_mixture": "{components: [{weight: 3}, {weight: 1, mean: 2, sd: 0.5}]}",
    "bernoulli": "{p: 0.2}",
    "empirical": "{values: [2, 3, 3, 5, 9]}",
    "stable": "{alpha: 1.7, beta: 0}",
}
FAMILY = 20  # letters of the longest family, and a gap
SHOCK = "any noise-like term in place of sd, total_sd and law"


class UnknownName(ValueError):
    """A name that the catalogue does not have; the message gives the nearest one."""


def screen(width: int = 80) -> str:
    """The names of all terms by family, and the laws: one screen."""
    lines = [_hanging(name, ", ".join(kinds), FAMILY, width) for name, kinds in families().items()]
    lines += ["", _hanging("laws of a shock", ", ".join(LAWS), FAMILY, width)]
    more = [("procgen terms FAMILY", "what each of its terms is, such as linear, or level for level and shape")]
    more += [("procgen terms NAME", "all of a term or law: parameters, equation, theory, an example that runs")]
    return "\n".join([*lines, "", *(_hanging(name, text, FAMILY + 4, width) for name, text in more)])


def families() -> dict[str, list[str]]:
    """The kinds of term by family."""
    found: dict[str, list[str]] = {}
    for kind, term in catalogue().items():
        found.setdefault(term.family, []).append(kind)
    return found


def family_page(name: str, width: int = 100) -> str:
    """The terms of a family, one line each."""
    kinds = families()[name]
    pad = max(len(kind) for kind in kinds) + 4
    lines = [name]
    for kind in kinds:
        brief = shorten(re.split("[:;] ", catalogue()[kind].purpose)[0], width - pad, placeholder=" …")
        lines.append(f"  {kind}".ljust(pad) + brief)
    return "\n".join(lines)


def page(name: str, width: int = 100) -> str:
    """One term or law: purpose, equation, parameters, an example that runs, what theory knows, source; or a family.

    A family may go by its first word. Raises UnknownName with the nearest name when there is nothing of the name.
    """
    if name in catalogue():
        return _term_page(name, width)
    if name in LAWS:
        return _law_page(name, width)
    for family in families():
        if name in (family, family.split()[0]):
            return family_page(family, width)
    known = [*catalogue(), *LAWS, *families()]
    hint = did_you_mean(name, known)
    raise UnknownName(f"there is no term, law or family {name}; {hint or 'the names are: ' + ', '.join(known)}")


def example_spec(kind: str) -> str:
    """A whole spec around the example of a term."""
    shared = "shared:\n  weather: [{ar: {phi: 0.9, total_sd: 1}}]\n" if kind == "use" else ""
    head = "procgen: 1\nseed: 1\npaths: 100\ntime: {start: 2027-01-04, every: 1h, steps: 50}\n"
    return f"{head}{shared}series:\n  x: [{{{catalogue()[kind].example}}}]\n"


def equation(kind: str) -> str:
    """The equation of a term, with the numbers of its example."""
    from procgen.spec.reader import read_text
    from procgen.terms.graph import build

    if kind == "use":
        return "y[t] = x[t], the value of what is named"
    graph = build(read_text(example_spec(kind), catalogue(), LAWS))
    node = next(node for _, node in graph.terms() if node.term.kind == kind)
    return node.term.equation(*[_letter(i, node.term) for i, _ in enumerate(node.inputs)])


def rows(parameters: Iterable[Parameter], prefix: str = "") -> list[tuple[str, str, str, str, str]]:
    """Parameters as (name, symbol, domain, default, meaning with unit), those of records below their record."""
    out = []
    for p in parameters:
        out.append((prefix + p.name, p.symbol, p.domain.describe(), default(p), meaning(p)))
        if isinstance(p.domain, (Record, Records)):
            out += rows(p.domain.parameters, f"{prefix}{p.name}.")
    return out


def default(parameter: Parameter) -> str:
    """What holds when the parameter is not written, in words."""
    if parameter.required:
        return "required"
    if parameter.default is None or parameter.default == ():
        return "optional"
    value = parameter.default
    return str(value).lower() if isinstance(value, bool) else f"{value:g}" if _is_number(value) else str(value)


def meaning(parameter: Parameter) -> str:
    """Meaning, unit, and whether `per` may stand beside the value."""
    notes = []
    if parameter.unit == "series":
        notes.append("in the unit of the series")
    elif parameter.unit != "1":
        notes.append(f"in {parameter.unit}")
    if parameter.per:
        notes.append("may say per:" if parameter.per == "rate" else "may say per:, which goes with √time")
    return parameter.meaning + (f" ({'; '.join(notes)})" if notes else "")


def noises() -> list[str]:
    """The kinds that may stand as a shock."""
    return [kind for kind, term in catalogue().items() if term.noise]


def _term_page(kind: str, width: int) -> str:
    term: Any = catalogue()[kind]
    facts = [
        ("family", term.family),
        ("equation", equation(kind)),
        ("theory", term.knows),
        ("source", term.source),
    ]
    if term.outputs:
        facts.append(("outputs", f"{', '.join(term.outputs)} (hidden; use: series.label.output, or --reveal)"))
    if not term.portable:
        facts.append(("portable", f"no: {term.why_not_portable}"))
    lines = [f"{kind}: {term.purpose}", ""]
    lines += [_hanging(name, text, 12, width) for name, text in facts]
    lines += ["", "parameters", *_parameters(term.parameters, width)]
    if term.takes_shock:
        lines += ["", _hanging("shock", f"{SHOCK}: {', '.join(noises())}", 12, width)]
    lines += ["", "a spec that runs", *(f"  {line}" for line in example_spec(kind).splitlines())]
    return "\n".join(lines)


def _law_page(name: str, width: int) -> str:
    law = LAWS[name]
    written = f"{{{name}: {{{', '.join(f'{p.name}: …' for p in law.parameters)}}}}}" if law.parameters else name
    lines = [_hanging(f"{name}:", purpose(law), len(name) + 2, width), ""]
    lines += [_hanging("written as", f"law: {written}", 12, width), _hanging("source", law.source, 12, width)]
    if law.parameters:
        lines += ["", "parameters", *_parameters(law.parameters, width)]
    unit = "it has no variance: white_noise scales it by `spread`" if law.scaled_by == "spread" else STANDARD
    lines += ["", unit, "", "a spec that runs", *(f"  {line}" for line in law_spec(name).splitlines())]
    return "\n".join([*lines, "", _hanging("its moments", _moments(name), 13, width)])


def law_spec(name: str) -> str:
    """A whole spec with white noise of a law."""
    law = f"{{{name}: {SHOWN[name]}}}" if name in SHOWN else name
    head = "procgen: 1\nseed: 1\npaths: 100\ntime: {start: 2027-01-04, every: 1h, steps: 50}\n"
    return f"{head}series:\n  x: [{{white_noise: {{{LAWS[name].scaled_by}: 1, law: {law}}}}}]\n"


def _moments(name: str) -> str:
    """Skewness and excess kurtosis of a law with the numbers of its example, and which moments it has."""
    from procgen.spec.reader import read_text

    law = read_text(law_spec(name), catalogue(), LAWS).series["x"].of[0].values["law"]
    told = [("skewness", law.skewness), ("excess kurtosis", law.excess_kurtosis)] if not law.needs_spread else []
    said = [f"{what} {value + 0.0:.6g}" if value is not None else f"no {what}" for what, value in told]
    highest = float(law.highest_moment)
    said.append("all exist" if highest == float("inf") else f"those below order {highest:.6g} exist")
    return ", ".join(said)


def purpose(law: type[Law]) -> str:
    """The first paragraph of what a law says of itself."""
    return " ".join((law.__doc__ or "").strip().split("\n\n")[0].split())


def _parameters(parameters: Iterable[Parameter], width: int) -> list[str]:
    """Columns of name, symbol and default, then meaning and domain, wrapped."""
    table = rows(parameters)
    if not table:
        return ["  none"]
    name, sign, rest = (max(len(row[i]) for row in table) + 2 for i in (0, 1, 3))
    return [
        _hanging(
            f"  {row[0]:{name}}{row[1]:{sign}}{row[3]:{rest}}",
            f"{row[4]}: {row[2]}",
            2 + name + sign + rest,
            width,
        )
        for row in table
    ]


def _hanging(head: str, text: str, indent: int, width: int) -> str:
    """`text` wrapped, indented behind `head`."""
    start = head.ljust(indent) if len(head) <= indent else f"{head}  "
    return fill(text, max(width, indent + 30), initial_indent=start, subsequent_indent=" " * indent)


def _letter(place: int, term: Any) -> str:
    return "a" if term.takes_shock else "xuvw"[place] if place < 4 else f"x{place}"


def _is_number(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool)
