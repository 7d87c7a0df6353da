"""What is said where data have other numbers of paths and steps than the spec states: they are judged as they are."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from procgen.checks.verdict import Check
from procgen.checks.words import many


def told(paths: int, steps: int, spec: Any) -> list[str]:
    """What the first line of a verdict says of them."""
    found = [of_steps(steps, spec.time.steps)]
    if paths != spec.paths:
        fewer, other = f"{paths:,} of the {many(spec.paths, 'path')} stated", many(paths, "path")
        found.append(fewer if paths < spec.paths else f"{other}, {spec.paths:,} stated")
    return [text for text in found if text]


def checks(paths: int, steps: int, spec: Any) -> Iterator[Check]:
    """The same as rows of a verdict."""
    if steps != spec.time.steps:
        yield _row("steps", of_steps(steps, spec.time.steps))
    if paths != spec.paths:
        other = f"{many(paths, 'path')}, where the spec states {spec.paths:,}"
        yield _row("paths", f"{other}: judged on those that are there")


def of_steps(steps: int, stated: int) -> str:
    """What is said where the last steps of a spec are in no path, or paths have more of them."""
    if steps == stated:
        return ""
    if steps > stated:
        more = f"step {stated} is" if steps == stated + 1 else f"steps {stated}–{steps - 1} are"
        return f"{more} beyond the {many(stated, 'step')} of the spec; judged on all {steps:,}"
    last = f"step {steps} is" if steps == stated - 1 else f"steps {steps}–{stated - 1} are"
    return f"{last} absent; judged on {many(steps, 'step')}"


def _row(what: str, note: str) -> Check:
    return Check("", what, "all rows", "structure", outcome="reported", note=note)
