"""A verdict as one self-contained page: nothing is loaded from elsewhere, and it reads without a script."""

from __future__ import annotations

import math
from collections.abc import Iterator
from html import escape
from pathlib import Path
from typing import TYPE_CHECKING

from procgen.checks import coverage
from procgen.checks.words import number, p_text
from procgen.report.text import CAUTION, reported

if TYPE_CHECKING:
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
    "smallest departure found",
    "outcome",
    "note",
)
_STYLE = """
:root { color-scheme: light dark; --ink: #1d2730; --soft: #5c6b78; --paper: #fcfbf8; --card: #ffffff; --line: #dcd8cf;
  --good: #1b6b5c; --bad: #a5361c; --open: #7a6420; --bar: #4a7fa5; }
@media (prefers-color-scheme: dark) { :root { --ink: #e4e6e3; --soft: #9aa7b0; --paper: #15191c; --card: #1d2327;
  --line: #343d43; --good: #6cc3ae; --bad: #f0907a; --open: #d8bd6a; --bar: #7fb2d6; } }
* { box-sizing: border-box; }
body { margin: 0 auto; max-width: 76rem; padding: 2rem 1.2rem 4rem; background: var(--paper); color: var(--ink);
  font: 16px/1.5 "Iowan Old Style", "Palatino Linotype", Palatino, Georgia, serif; }
h1 { font-size: 1.1rem; font-weight: 500; color: var(--soft); margin: 0; }
h2 { font-size: 1.15rem; margin: 2.4rem 0 .6rem; }
.verdict { font-size: 2.3rem; line-height: 1.15; margin: .2rem 0 .8rem; }
.agrees { color: var(--good); } .departs { color: var(--bad); } .untestable, .reported { color: var(--open); }
.facts { color: var(--soft); margin: 0; }
ul.found { padding: 0; list-style: none; }
ul.found li { background: var(--card); border: 1px solid var(--line); border-left: .35rem solid var(--bad);
  padding: .6rem .9rem; margin: .5rem 0; overflow-wrap: anywhere; }
.scroll { overflow-x: auto; border: 1px solid var(--line); background: var(--card); }
table { border-collapse: collapse; width: 100%; font: 13px/1.45 ui-sans-serif, system-ui, "Segoe UI", sans-serif;
  font-variant-numeric: tabular-nums; }
th, td { padding: .35rem .6rem; text-align: left; vertical-align: top; border-bottom: 1px solid var(--line); }
th { color: var(--soft); font-weight: 600; background: var(--card); position: sticky; top: 0; }
td.n { text-align: right; white-space: nowrap; }
td.note { min-width: 14rem; color: var(--soft); }
td.p { min-width: 6.5rem; white-space: nowrap; }
.bar { display: inline-block; height: .55rem; background: var(--bar); margin-right: .4rem; vertical-align: baseline; }
tr.departs .bar { background: var(--bad); }
tr.departs td { background: color-mix(in srgb, var(--bad) 8%, transparent); }
summary { cursor: pointer; color: var(--soft); margin: 1.4rem 0 .5rem; }
.caution { border-top: 1px solid var(--line); margin-top: 3rem; padding-top: 1rem; color: var(--soft);
  max-width: 46rem; }
code { font-size: .85em; overflow-wrap: anywhere; }
@media print { body { max-width: none; padding: 0; background: #fff; } th { position: static; }
  details > * { display: block; } .scroll { overflow: visible; } }
"""


def write_verdict(verdict: Verdict, path: Path) -> Path:
    """Write the page; the folder must exist. Returns the path."""
    path.write_text(verdict_page(verdict), encoding="utf-8")
    return path


def verdict_page(verdict: Verdict) -> str:
    """The whole page as HTML."""
    title = escape(str(verdict.about.get("title") or "Verdict"))
    return "\n".join(
        [
            "<!doctype html>",
            '<html lang="en"><head><meta charset="utf-8">',
            '<meta name="viewport" content="width=device-width, initial-scale=1">',
            f"<title>{title} – {_TITLES[verdict.verdict]}</title>",
            f"<style>{_STYLE}</style></head><body>",
            f"<header><h1>{title}</h1>",
            f'<p class="verdict {verdict.verdict}">{_TITLES[verdict.verdict]}</p>',
            f'<p class="facts">{escape(verdict.title)}</p>',
            *_facts(verdict),
            "</header><main>",
            *_found(verdict),
            *_covered(verdict),
            *_tables(verdict),
            f'</main><footer class="caution"><p>{escape(CAUTION)}</p></footer></body></html>',
            "",
        ]
    )


def _facts(verdict: Verdict) -> Iterator[str]:
    about = verdict.about
    counts = ", ".join(f"{count} {what}" for what, count in sorted(verdict.counts.items()))
    size = f"{about['paths']:,} paths × {about['steps']:,} steps. " if "paths" in about else ""
    yield f'<p class="facts">{escape(size)}{len(verdict.rows)} checks: {escape(counts)}.</p>'
    yield from (f'<p class="facts">{escape(line)}.</p>' for line in reported(verdict))
    yield (
        '<p class="facts">Data of exactly the stated behaviour are called departing at most '
        f"{number(verdict.false_alarm)} of the time, over all checks together (Holm).</p>"
    )
    for what, name in (("digest", "values"), ("spec_digest", "spec")):
        if about.get(what):
            yield f'<p class="facts">SHA-256 of the {name}: <code>{escape(about[what])}</code></p>'


def _found(verdict: Verdict) -> Iterator[str]:
    lines = verdict.headline
    if lines:
        yield "<h2>What departs</h2><ul class='found'>"
        yield from (f"<li>{escape(line)}</li>" for line in lines)
        yield "</ul>"


def _covered(verdict: Verdict) -> Iterator[str]:
    lines = list(coverage.lines(verdict.coverage))
    if lines:
        yield "<h2>What was judged</h2><ul>"
        yield from (f"<li>{escape(line)}</li>" for line in lines)
        yield "</ul>"


def _tables(verdict: Verdict) -> Iterator[str]:
    """Departures and the judged checks open, what was not judged folded away."""
    judged = [row for row in verdict.rows if row.outcome in ("departs", "agrees")]
    rest = [row for row in verdict.rows if row.outcome not in ("departs", "agrees")]
    yield "<h2>Checks, the largest disagreement first</h2>"
    yield from _table(judged)
    if rest:
        yield f"<details><summary>{len(rest)} checks that could not be judged, with the reasons</summary>"
        yield from _table(rest)
        yield "</details>"


def _table(rows: list[Check]) -> Iterator[str]:
    yield '<div class="scroll"><table><thead><tr>'
    yield "".join(f'<th scope="col">{name}</th>' for name in _HEAD)
    yield "</tr></thead><tbody>"
    yield from map(_row, rows)
    yield "</tbody></table></div>"


def _row(row: Check) -> str:
    p = ""
    if row.log_p is not None:
        width = min(4.0, -row.log_p / math.log(10) * 0.35)
        p = f'<span class="bar" style="width:{width:.2f}rem"></span>{p_text(row.log_p)}'
    cells = [escape(text) for text in (row.series, row.what, row.probe)]
    figures = [number(x) for x in (row.theory, row.estimate, row.standard_error)]
    return (
        f'<tr class="{row.outcome}">'
        + "".join(f"<td>{cell}</td>" for cell in cells)
        + "".join(f'<td class="n">{figure}</td>' for figure in figures)
        + f'<td class="p">{p}</td><td class="n">{number(row.detectable, 3)}</td>'
        + f'<td class="{row.outcome}">{row.outcome}</td><td class="note">{escape(row.note)}</td></tr>'
    )
