"""The reference page of the spec language, specs/README.md: its tables are made from the declarations.

    python -m procgen.report.reference specs/README.md

writes the tables again between their marks, and leaves the prose around them as it is.
"""

from __future__ import annotations

import re
import sys
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import Any

from procgen.chance.laws import LAWS
from procgen.report.catalogue import SHOCK, equation, example_spec, noises, purpose, rows
from procgen.spec.declare import Parameter
from procgen.spec.draws import DRAWS
from procgen.spec.entries import walk
from procgen.spec.groups import TEMPLATE
from procgen.spec.model import Series, Shared, Spec
from procgen.spec.reader import HEAD, SERIES, read_file
from procgen.spec.timegrid import TIME
from procgen.terms import catalogue

MARK = re.compile(r"(<!-- generated: (\w+) -->\n).*?(<!-- end -->)", re.DOTALL)


def rewritten(page: str, folder: Path) -> str:
    """The page with every generated part made again; `folder` holds the gallery."""
    parts: dict[str, Callable[[], str]] = {
        "keys": lambda: table(HEAD),
        "time": lambda: table(TIME),
        "series": lambda: table(SERIES),
        "draws": draws,
        "groups": lambda: table(TEMPLATE),
        "terms": terms,
        "laws": laws,
        "gallery": lambda: gallery(folder),
    }
    return MARK.sub(lambda found: f"{found[1]}\n{parts[found[2]]()}\n\n{found[3]}", page)


def table(parameters: Iterable[Parameter]) -> str:
    """Parameters as a Markdown table."""
    lines = ["| key | symbol | value | when absent | meaning |", "| --- | --- | --- | --- | --- |"]
    for name, symbol, domain, rest, text in rows(parameters):
        lines.append(_row(f"`{name}`", symbol, domain, rest, text))
    return "\n".join(lines)


def terms() -> str:
    """Every term by family: purpose, equation, parameters, example, theory, source."""
    out: list[str] = []
    family = None
    for kind, term in catalogue().items():
        if term.family != family:
            family = term.family
            out.append(f"### {family.capitalize()}")
        out.append(_term(kind, term))
    return "\n\n".join(out)


def draws() -> str:
    """Every law that a parameter can be drawn from."""
    out = []
    for name, law in DRAWS.items():
        out.append(f"- `{name}`: {law.purpose}.")
        out += [f"  - `{p}` {s}: {d}; {rest}. {text}." for p, s, d, rest, text in rows(law.parameters)]
    return "\n".join(out)


def laws() -> str:
    """Every law with its parameters."""
    out = []
    for name, law in LAWS.items():
        out.append(f"- `{name}`: {purpose(law)} Source: {law.source}.")
        out += [f"  - `{p}` {s}: {d}; {rest}. {text}." for p, s, d, rest, text in rows(law.parameters)]
    return "\n".join(out)


def gallery(folder: Path) -> str:
    """The specs of a folder, each with what its first line says it is for, and the terms in it."""
    lines = ["| spec | what it is for | terms |", "| --- | --- | --- |"]
    for file in sorted(folder.glob("*.yaml")):
        purpose = file.read_text(encoding="utf-8").splitlines()[0].removeprefix("# ")
        used = kinds(read_file(file, catalogue(), LAWS))
        lines.append(_row(f"[{file.name}]({file.name})", purpose, ", ".join(k for k in catalogue() if k in used)))
    return "\n".join(lines)


def kinds(spec: Spec) -> set[str]:
    """The kinds of term that a spec uses."""
    bodies: list[Shared | Series] = [*spec.shared.values(), *spec.series.values()]
    return {entry.kind for body in bodies for entry, _ in walk(body.of)}


def _term(kind: str, term: Any) -> str:
    facts = [
        f"#### `{kind}`",
        f"{_sentence(term.purpose)} In symbols, with the numbers of the example: `{equation(kind)}`.",
    ]
    if term.parameters:
        facts.append(table(term.parameters))
    if term.takes_shock:
        facts.append(f"`shock` may stand for {SHOCK}: {', '.join(f'`{k}`' for k in noises())}.")
    if term.outputs:
        facts.append(f"Hidden outputs: {', '.join(f'`{name}`' for name in term.outputs)}.")
    bodies = example_spec(kind).partition("steps: 50}\n")[2].strip()
    facts.append(f"```yaml\n{bodies}\n```")
    facts.append(f"Theory: {term.knows}. Source: {term.source}.")
    return "\n\n".join(facts)


def _sentence(text: str) -> str:
    return text[0].upper() + text[1:] + "."


def _row(*cells: str) -> str:
    return "| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |"


def main(path: str) -> None:
    page = Path(path)
    page.write_text(rewritten(page.read_text(encoding="utf-8"), page.parent), encoding="utf-8")


if __name__ == "__main__":
    main(*sys.argv[1:])
