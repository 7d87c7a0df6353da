"""A verdict, and pictures of what it is about, as one self-contained page.

Nothing is loaded from elsewhere, nothing needs a script.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING

from procgen.checks import coverage
from procgen.checks.attribution import departures
from procgen.checks.words import cause, joined, many, name_of, number, p_text, side_by_side, tally
from procgen.report.pictures import gallery as galleries
from procgen.report.pictures import page
from procgen.report.pictures.gallery import Gallery
from procgen.report.pictures.page import Departure
from procgen.report.pictures.page_style import PAGE
from procgen.report.pictures.safe import breakable, escaped
from procgen.report.pictures.write import MARKS, write
from procgen.report.text import CAUTION, none_is_found, reported

if TYPE_CHECKING:
    from procgen.checks.common import Told
    from procgen.checks.verdict import Check, Verdict

_TITLES = {
    "agrees": "Agrees with its spec",
    "departs": "Departs from its spec",
    "untestable": "Cannot be judged",
}
_HEAD = (
    "series",
    "check",
    "at",
    "theory",
    "estimate",
    "std. error",
    "p",
    "smallest found",
    "outcome",
    "in words",
)
_FIGURES = (3, 4, 5, 7)  # of _HEAD: columns of numbers
OPEN = 12  # checks that agree and are not folded away
# Should a name ever slip through as markup, a browser still loads nothing and runs nothing.
_POLICY = "default-src 'none'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'"
MOST_ROWS = 300  # of a table: more would not be read, and weigh more than all pictures
_CAUTIONS = (
    "Pictures are for looking, the checks are for judging: a band of chance holds 95 times in 100 for each point on "
    "its own, so that a few points outside mean nothing.",
    "Stored values are rounded where the spec has decimals or a type; what is stated is that of the values as drawn.",
)


def write_verdict(verdict: Verdict, path: Path, overwrite: bool = False) -> Path:
    """Write the page of a verdict, with the day; the folder must exist. Returns the path."""
    return write(path, verdict_page(verdict, date.today()), overwrite)


def verdict_page(verdict: Verdict, day: date | None = None) -> str:
    """The page of a verdict, with pictures where it knows its data; `day` is that of the judgement."""
    return whole_page(galleries.of_verdict(verdict), verdict, day)


def whole_page(gallery: Gallery | None, verdict: Verdict | None = None, day: date | None = None) -> str:
    """A page of pictures, of a verdict, or of both."""
    about = verdict.about if verdict is not None else {}
    title = escaped(about.get("title") or (gallery.title if gallery else "") or "Verdict")
    judged = f" – {_said(verdict)}" if verdict is not None else ""
    parts = [
        "<!doctype html>",
        f'<html lang="en"><head><meta charset="utf-8">{MARKS["html"]}',
        f'<meta http-equiv="Content-Security-Policy" content="{_POLICY}">',
        '<meta name="viewport" content="width=device-width, initial-scale=1">',
        f"<title>{title}{judged}</title>",
        f"<style>{PAGE}</style></head><body>",
        f"<header><h1>{title}</h1>",
        *(_lead(verdict, day) if verdict is not None else _unjudged()),
        *(_seen(gallery) if gallery is not None else ()),
        "</header><main>",
    ]
    if verdict is not None:
        parts += _found(verdict)
    if gallery is not None:
        parts += page.series(gallery, _by_series(verdict))
    if verdict is not None:
        parts += [*_covered(verdict), *_tables(verdict)]
    if gallery is not None:
        parts += page.provenance(gallery)
    elif verdict is not None:
        parts += _digests(verdict)
    cautions = "".join(f"<p>{escaped(text)}</p>" for text in (CAUTION, *(_CAUTIONS if gallery is not None else ())))
    return "\n".join([*parts, f"</main><footer>{cautions}</footer></body></html>", ""])


def _said(verdict: Verdict) -> str:
    """The verdict in a few words."""
    partly = verdict.verdict == "agrees" and any(each.missing for each in verdict.coverage)
    return "Agrees in part: not all could be judged" if partly else _TITLES[verdict.verdict]


def _lead(verdict: Verdict, day: date | None) -> Iterator[str]:
    about = verdict.about
    yield f'<p class="verdict {verdict.verdict}">{_said(verdict)}</p>'
    if judged := _judged(verdict, day):
        yield f'<p class="facts">{breakable(judged)}.</p>'
    size = f"{many(about['paths'], 'path')} × {many(about['steps'], 'step')}. " if "paths" in about else ""
    if verdict.verdict != "departs":  # then there is no more in it than stands above
        yield f'<p class="facts">{escaped(verdict.title)}.</p>'
    elif part := about.get("judged_on"):
        yield f'<p class="facts">{escaped(part[0].upper() + part[1:])}.</p>'
    checks = f"{many(len(verdict.rows), 'check')}: {tally(verdict.counts)}"
    yield f'<p class="facts">{escaped(size)}{escaped(checks)}.</p>'
    yield from (f'<p class="facts">{escaped(line)}.</p>' for line in reported(verdict))
    yield (
        '<p class="facts">Data of exactly the stated behaviour are called departing at most '
        f"{number(verdict.false_alarm)} of the time, over all checks together (Holm).</p>"
    )


def _judged(verdict: Verdict, day: date | None) -> str:
    """What was held against which spec, and when, as far as that is known: it tells two pages apart."""
    data, spec = verdict.about.get("where"), verdict.about.get("spec_file")
    what = " ".join(filter(None, [data, f"against {spec}" if spec else ""]))
    when = f" on {day.isoformat()}" if day is not None else ""
    return f"Judged{when}{': ' if what else ''}{what}" if what or when else ""


def _unjudged() -> Iterator[str]:
    yield '<p class="facts">What a spec states, and a few paths of it. Nothing has been judged.</p>'


def _seen(gallery: Gallery) -> Iterator[str]:
    yield (
        '<p class="facts">In the pictures, what is stated is blue, what is seen is in ink, and what chance allows is '
        f"grey. They show {escaped(gallery.sample.says)}.</p>"
    )
    yield from page.contents(gallery)


def _digests(verdict: Verdict) -> Iterator[str]:
    yield "<section><h2>Where this is from</h2><dl>"
    for what, name in (("digest", "values"), ("spec_digest", "spec")):
        if verdict.about.get(what):
            yield f"<dt>SHA-256 of the {name}</dt><dd>{escaped(verdict.about[what])}</dd>"
    yield "</dl></section>"


def _found(verdict: Verdict) -> Iterator[str]:
    told = verdict.told
    if told:
        yield '<section id="found"><h2>What departs</h2>'
        yield from page.departures([Departure(each.cause, _effects(each)) for each in told])
        yield "</section>"


def _effects(told: Told) -> list[str]:
    """What is said in small letters below a departure that stands for others."""
    also = [f"also {joined(told.effects)}, which may follow from it"] if told.effects else []
    return also + ([f"alike in {told.alike}"] if told.alike else [])


def _covered(verdict: Verdict) -> Iterator[str]:
    lines = list(coverage.lines(verdict.coverage))
    if lines:
        yield '<section><h2>What was judged</h2><ul class="plain">'
        yield from (f"<li>{breakable(line)}</li>" for line in lines)
        yield "</ul></section>"


def _by_series(verdict: Verdict | None) -> dict[str, Sequence[Departure]]:
    """The departures of each series, with a sentence for each kind: what explains most, and what may follow from it."""
    found: dict[str, list[Departure]] = {}
    for groups in departures(verdict.rows if verdict is not None else ()):
        series = groups[0][0].series
        first, *others = (cause(rows).removeprefix(f"{series}: ") for rows in groups)
        found.setdefault(series, []).append(Departure(first, others, "What may follow from it:"))
    return dict(found)


def _tables(verdict: Verdict) -> Iterator[str]:
    """Departures and the smallest p open, the other checks and what was not judged folded away."""
    departs = [row for row in verdict.rows if row.outcome == "departs"]
    agrees = [row for row in verdict.rows if row.outcome == "agrees"]
    rest = [row for row in verdict.rows if row.outcome not in ("departs", "agrees")]
    yield '<section id="checks"><h2>Checks, the largest disagreement first</h2>'
    yield from _table([*departs, *agrees[:OPEN]])
    if agrees[OPEN:]:
        more = len(agrees[OPEN:])
        yield from _folded(f"{many(more, 'more check')} that {'agrees' if more == 1 else 'agree'}", agrees[OPEN:])
    if rest:
        were = "was not judged, with the reason" if len(rest) == 1 else "were not judged, with the reasons"
        yield from _folded(f"{many(len(rest), 'check')} that {were}", rest)
    yield "</section>"


def _folded(summary: str, rows: list[Check]) -> Iterator[str]:
    yield f"<details><summary>{summary}</summary>"
    yield from _table(rows)
    yield "</details>"


def _table(rows: list[Check]) -> Iterator[str]:
    yield '<div class="scroll"><table class="checks"><thead><tr>'
    for place, name in enumerate(_HEAD):
        yield f'<th scope="col"{" class=n" if place in _FIGURES else ""}>{name}</th>'
    yield "</tr></thead><tbody>"
    yield from map(_row, rows[:MOST_ROWS])
    yield "</tbody></table></div>"
    if rows[MOST_ROWS:]:
        yield f'<p class="facts">{len(rows) - MOST_ROWS:,} more are not shown here; validate --json lists all.</p>'


def _row(row: Check) -> str:
    p = ""
    if row.log_p is not None:
        width = min(4.0, -row.log_p / math.log(10) * 0.35)
        p = f'<span class="bar" style="width:{width:.2f}rem"></span>{p_text(row.log_p)}'
    smallest = "none" if none_is_found(row) else number(row.detectable, 3)
    cells = [breakable(text) for text in (row.series, name_of(row), row.probe)]
    figures = [*side_by_side(row.theory, row.estimate), number(row.standard_error)]
    return (
        f'<tr class="{row.outcome}">'
        + "".join(f"<td>{cell}</td>" for cell in cells)
        + "".join(f'<td class="n">{figure}</td>' for figure in figures)
        + f'<td class="p">{p}</td><td class="n">{smallest}</td>'
        + f'<td class="{row.outcome}">{row.outcome}</td><td class="note">{breakable(_words(row))}</td></tr>'
    )


def _words(row: Check) -> str:
    """What departs in a sentence; of others what there is to say."""
    if row.outcome != "departs" or row.kind == "structure" or row.what == "values":
        return row.note
    said = cause([row]).removeprefix(f"{row.series}: ").partition(" (")[0]  # its numbers stand beside it
    return f"{said}; {row.note}" if row.note else said
