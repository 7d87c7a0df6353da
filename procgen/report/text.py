"""A verdict as text for a terminal."""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

from procgen.checks import coverage
from procgen.checks.words import alike, many, name_of, number, p_text, side_by_side, tally

if TYPE_CHECKING:
    from procgen.checks.verdict import Check, Verdict

CAUTION = (
    "These are scenarios of a stated model, not forecasts and not advice. That paths behave as the model says does "
    "not make the model right; they do not replace the rules that bind you or the judgement of a licensed professional."
)
_BAR = 12
_WANTED = re.compile(r" paths? of at least (\d+): reported")


def table(head: Sequence[str], rows: Sequence[Sequence[str]], left: Sequence[int] = (0,)) -> list[str]:
    """Lines of a table with aligned columns; the columns in `left` are flush left, the others flush right."""
    widths = [max(len(row[k]) for row in [head, *rows]) for k in range(len(head))]

    def line(cells: Sequence[str]) -> str:
        padded = [c.ljust(w) if k in left else c.rjust(w) for k, (c, w) in enumerate(zip(cells, widths, strict=True))]
        return "  ".join(padded).rstrip()

    return [line(head), *map(line, rows)]


def verdict_text(verdict: Verdict, rows: int = 8) -> str:
    """Verdict and counts, departures in words, the smallest p, what could have been seen, what was not judged."""
    lines = [verdict.title]
    lines += [f"  {line}" for line in verdict.headline]
    lines += ["", *_counts(verdict)]
    judged = [row for row in verdict.rows if row.log_p is not None][:rows]
    if judged:
        lines += ["", "Smallest p (bar: −log₁₀ p; │ marks the level that one check alone must pass)"]
        lines += _worst(judged, verdict)
    covered = list(coverage.lines(verdict.coverage))
    if covered:
        lines += ["", "What was judged:"]
        lines += [f"  {line}" for text in covered for line in _hung(text)]
    seen = list(_detectable(verdict.rows))
    if seen:
        lines += ["", "Smallest departures of all paths and steps together that would have been found 9 times in 10:"]
        lines += [f"  {line}" for line in seen]
    left = list(_not_judged(verdict.rows))
    if left:
        lines += ["", "Checks that were not judged:"]
        lines += [f"  {line}" for text in left for line in _hung(text)]
    return "\n".join([*lines, "", *_wrapped(CAUTION)])


def _counts(verdict: Verdict) -> list[str]:
    counts = tally(verdict.counts)
    about = verdict.about
    size = f"{many(about['paths'], 'path')} × {many(about['steps'], 'step')}; " if "paths" in about else ""
    return [
        f"{size}{many(len(verdict.rows), 'check')}: {counts}",
        *reported(verdict),
        f"a true ensemble is called departing at most {number(verdict.false_alarm)} of the time (Holm)",
    ]


def reported(verdict: Verdict) -> list[str]:
    """What the word `reported` in the tally stands for, where it stands there."""
    notes = [row.note for row in verdict.rows if row.outcome == "reported"]
    if not notes:
        return []
    wanted = {int(found[1]) for note in notes if (found := _WANTED.search(note))}
    few = f"fewer than {' or '.join(str(n) for n in sorted(wanted))} paths are too few for these checks"
    why = few if wanted else "the reasons stand below"
    return [f"reported: shown, not judged; {why}"]


def _worst(rows: Sequence[Check], verdict: Verdict) -> list[str]:
    family = max(1, sum(row.log_p is not None for row in verdict.rows))
    level = -math.log10(verdict.false_alarm / family)
    head = ("", "series", "check", "at", "theory", "estimate", "p")
    cells = [
        (
            bar(row.log_p or 0.0, level), row.series, name_of(row), row.probe, *side_by_side(row.theory, row.estimate),
            p_text(row.log_p or 0.0),
        )
        for row in rows
    ]  # fmt: skip
    return ["  " + line for line in table(head, cells, left=(0, 1, 2, 3))]


def bar(log_p: float, level: float) -> str:
    """−log₁₀ p as a bar of _BAR letters with the level marked."""
    size = -log_p / math.log(10)
    mark = _BAR * 2 // 3
    filled = round(min(_BAR, size / level * mark))
    return "".join("│" if k == mark and filled <= mark else ("█" if k < filled else "·") for k in range(_BAR))


_IN_WORDS = {
    "shocks: mean": "a shift of all shocks by {} of their sd",
    "shocks: variance": "a shock variance off by a factor of 1 ± {}",
    "shocks: autocorrelation": "a correlation of {} between shocks of one path",
    "shocks: clustering": "a correlation of {} between the sizes of shocks of one path",
    "shocks: neighbouring paths": "a correlation of {} between shocks of neighbouring paths",
    "shocks: correlation between series": "a correlation between series' shocks off by {}",
    "prediction errors: mean": "a shift of all one-step errors by {} of their sd",
    "prediction errors: variance": "a variance of one-step errors off by a factor of 1 ± {}",
    "prediction errors: autocorrelation": "a correlation of {} between one-step errors",
    "mean over steps": "a mean off by {} at all steps",
    "variance over steps": "a variance off by {} at all steps",
    "autocovariance over steps": "an autocovariance off by {} at all steps",
    "slope over steps": "a slope on earlier steps off by {}",
    "slope of squares": "a slope of squares on earlier squares off by {}",
    "mean": "a mean off by {} at one step",
    "variance": "a variance off by {} at one step",
    "covariance": "a covariance off by {} at one pair of steps",
    "covariance between series": "a covariance off by {} at one pair of steps",
    "slope between series": "a slope of one on the other off by {} at one pair of steps",
}

_NONE = {
    "shocks: autocorrelation": "no correlation between shocks of one path",
    "shocks: clustering": "no correlation between the sizes of shocks of one path",
    "shocks: neighbouring paths": "no correlation between shocks of neighbouring paths",
    "shocks: correlation between series": "no wrong correlation between series' shocks",
    "prediction errors: autocorrelation": "no correlation between one-step errors",
}  # of which none is certain to be found where that would take one beyond 1
_FACTORS = ("shocks: variance", "prediction errors: variance")


def _detectable(rows: Sequence[Check]) -> Iterator[str]:
    """For the series, the sharpest detectable size of each sort, in words; series of the same sizes share a line."""
    found: dict[str, dict[str, float]] = {}
    for row in rows:
        if row.what in _IN_WORDS and row.detectable is not None and math.isfinite(row.detectable):
            mine = found.setdefault(row.series, {})
            mine[row.what] = min(mine.get(row.what, math.inf), math.inf if none_is_found(row) else row.detectable)
    lines: dict[str, list[str]] = {}
    for series, sizes in sorted(found.items(), key=lambda item: " ~ " in item[0]):
        sharp = {what: size for what, size in sizes.items() if what.startswith(("shocks", "prediction"))}
        sizes = sharp or sizes
        text = "; ".join(_found_from(what, sizes[what]) for what in _IN_WORDS if what in sizes)
        lines.setdefault(text, []).append(series)
    for text, series_of in lines.items():
        yield from _hung(f"{', '.join(series_of)}: {text}")


def none_is_found(row: Check) -> bool:
    """Whether a check is certain to find no departure at all: the smallest would be a correlation beyond 1."""
    return row.what in _NONE and row.detectable is not None and row.detectable > 1.0 + abs(row.theory or 0.0)


def _found_from(what: str, size: float) -> str:
    """The smallest departure of a sort that is found, in words; which of them are not, where some cannot be."""
    if math.isinf(size):
        return f"{_NONE[what]} is certain to be found"
    words = _IN_WORDS[what].format(number(size, 2))
    if what in _FACTORS and size >= 1.0:  # a variance below 0 there is none
        return f"{words.replace('±', '+')}, while no smaller one is certain to be found"
    return words


def _hung(text: str) -> list[str]:
    """A long line in several, the later ones set in."""
    first, *rest = _wrapped(text) or [""]
    return [first, *("  " + line for line in (_wrapped(" ".join(rest), 98) if rest else ()))]


def _not_judged(rows: Sequence[Check]) -> Iterator[str]:
    """Reasons, with the checks that they stopped."""
    groups: dict[tuple[str, str], Counter[str]] = {}
    left = [row for row in rows if row.outcome in ("untestable", "reported")]
    said = alike(row.note for row in left)
    for row in left:
        groups.setdefault((row.series, said[row.note]), Counter())[row.what] += 1
    for (series, note), whats in groups.items():
        parts = ", ".join(f"{what} ×{count}" if count > 1 else what for what, count in whats.items())
        yield f"{series + ': ' if series else ''}{parts}: {note}"


def _wrapped(text: str, width: int = 100) -> list[str]:
    from textwrap import wrap

    return wrap(text, width, break_on_hyphens=False, break_long_words=False)
