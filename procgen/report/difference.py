"""A difference of two ensembles or specs as text for a terminal."""

from __future__ import annotations

from collections.abc import Iterator
from textwrap import wrap
from typing import TYPE_CHECKING

from procgen.checks.words import many, number
from procgen.ensemble.errors import MEND
from procgen.report.text import CAUTION, table

if TYPE_CHECKING:
    from procgen.checks.difference import Difference, SeriesDifference, Side

MOST = 20  # names in one line
STATES = ("renamed", "new", "gone", "differs", "unread")
WORDS = {"differs": "differing", "unread": "not compared"}
LINES = 60  # of a list; all is in --json


def difference_text(difference: Difference) -> str:
    """What differs in meaning, what became of each series, and the paired figures."""
    lines = [f"a  {_side(difference.a)}", f"b  {_side(difference.b)}", ""]
    lines += ["What differs in meaning:", *_some([f"  {change}" for change in difference.meaning])]
    if not difference.meaning:
        lines[-1] = "Both mean the same."
    lines += ["", _headline(difference), *_some([*_series(difference)])]
    if difference.damages:
        lines += ["", *_some([*difference.damages]), MEND]
    if difference.paired:
        lines += ["", *_paired(difference), "", *wrap(CAUTION, 100)]
    alone = [one.name for one in difference.series if one.state == "differs" and not one.shares]
    if alone and difference.compared is not None:
        lines += ["", f"no shocks are shared by {', '.join(alone[:MOST])}: independent draws, which cannot be paired"]
    return "\n".join(lines)


def _some(lines: list[str]) -> list[str]:
    return lines if len(lines) <= LINES else [*lines[:LINES], *_more(len(lines) - LINES)]


def _more(count: int) -> list[str]:
    return [f"  and {count:,} more; --json (.to_dict()) lists them all"]


def _side(side: Side) -> str:
    whole = side.whole
    first = f" from path {whole.first_path:,}" if whole.first_path else ""
    what = "" if side.ensemble is not None else " (not drawn)"
    return f"{side.name}: {many(whole.paths, 'path')} × {many(whole.steps, 'step')}{first}, seed {side.spec.seed}{what}"


def _headline(difference: Difference) -> str:
    counts = {state: sum(1 for one in difference.series if one.state == state) for state in STATES}
    equal = sum(1 for one in difference.series if one.state == "equal")
    said = [f"{count} {WORDS.get(state, state)}" for state, count in counts.items() if count]
    apart = counts["differs"] or counts["unread"]
    said.append(f"all {'others ' if said else ''}equal" if equal and not apart else f"{equal} equal")
    block = difference.compared
    if counts["unread"]:
        how = "values could not be read, for damage"
    elif block is not None:
        both = ", those in both," if _apart(difference) else ""
        how = f"values compared on paths {block.first_path}–{block.end_path - 1}{both}"
        how = f"{how}{'' if both else ','} steps 0–{block.end_step - 1}"
    elif difference.a.ensemble is not None and difference.b.ensemble is not None:
        how = "no path is in both, so that no values could be compared; by what each series depends on"
    else:
        how = "by what each series depends on; nothing drawn"
    return f"Series: {', '.join(said)} ({how})"


def _apart(difference: Difference) -> bool:
    return difference.a.whole.first_path != difference.b.whole.first_path


def _series(difference: Difference) -> Iterator[str]:
    """The series that are not equal, each with why and where; the equal ones in one line."""
    equal = [one.name for one in difference.series if one.state == "equal"]
    if equal:
        yield f"  equal: {', '.join(equal[:MOST])}{', …' if len(equal) > MOST else ''}"
    for one in difference.series:
        if one.state == "renamed":
            yield f"  renamed: {one.was} → {one.name} (same draws)"
        elif one.state in ("new", "gone"):
            yield f"  {one.name}: {'new in b' if one.state == 'new' else 'gone, only in a'}"
        elif one.state == "differs":
            yield f"  {one.name}: {_why(one, difference)}"


def _why(one: SeriesDifference, difference: Difference) -> str:
    terms = ", ".join(one.moved[:MOST]) + (", …" if len(one.moved) > MOST else "")
    if one.first is None:
        return f"would change, by {terms}"
    if one.moved:
        because = f"by {terms}"
    elif difference.damages:
        because = "no term of it differs: values were changed, see below"
    else:
        because = "no term of it differs: the values were changed, or made by other code"
    return f"first at {one.first}; {because}"


def _paired(difference: Difference) -> list[str]:
    """The paired figures as a table, with what its columns are; paths by row where some have no value in both."""
    rows = difference.paired
    every = max(row.paths for row in rows) if difference.compared is None else difference.compared.paths
    some = any(row.paths < every for row in rows)
    beside = ("paths",) if some else ()
    head = ("series", "step", *beside, "mean of a", "mean of b", "change")
    head = (*head, "standard error", "correlation", "variance saved")
    cells = [
        (
            row.series, str(row.step), *(f"{row.paths:,}" for _ in beside),
            number(row.mean_a), number(row.mean_b), number(row.change),
            number(row.standard_error, 3), number(row.correlation, 4), _share(row.saved),
        )
        for row in rows
    ]  # fmt: skip
    return [
        f"Paired change from a to b, path by path with the same shocks ({every:,} paths):",
        *("  " + line for line in table(head, cells[:LINES])),
        *(_more(len(cells) - LINES) if len(cells) > LINES else ()),
        *(["paths: those on which both have a value at the step, of which all figures of the row are"] if some else []),
        "variance saved: of the mean change, against draws of a and b that are independent of each other",
    ]


def _share(saved: float | None) -> str:
    return "–" if saved is None else f"{100.0 * saved:.4g} %".replace("-", "−")
