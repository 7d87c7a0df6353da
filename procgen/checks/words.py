"""Departures in plain words."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from procgen.checks.verdict import Check

_SAYS = {
    "level": "the mean is {} stated",
    "spread": "the variance is {} stated",
    "memory": "values follow earlier ones otherwise than stated",
    "clustering": "calm and wild stretches follow each other otherwise than stated",
    "law": "the shape of the distribution is not the one stated",
    "dependence": "paths or series hang together otherwise than stated",
}
_SHARES = {
    "none": "share of zeros",
    "jumps": "rate of jumps",
    "on": "share of steps that are on",
    "demand": "share of steps with demand",
    "missing": "share of missing values",
    "missing after present": "rate of new gaps",
    "missing after missing": "share of gaps that go on",
}  # "share: " and what follows; of all others "share of " and that
_NAMES = {"slope of squares": "slope of squares on earlier squares"}
_OUTCOMES = {"agrees": "agree", "departs": "depart"}  # of several
_MORE_LESS = {"level": ("higher than", "lower than"), "spread": ("larger than", "smaller than")}
_SIGNED = ("mean", "variance", "level score", "spread score")  # how the checks end whose sign says more or less
BALANCE = "shocks: balance of paths"
BY_PHASE = "shocks: level by phase"
LED = "shocks: slope on the value before"
COSINES, SINES = "mean cosine of values", "mean product of sines of values"
START, SCATTER = "size of the start", "scatter of the start"
_BETWEEN_PATHS = ("neighbouring paths", BALANCE)  # how the checks end
_WHOLE = {
    "shocks: level by step": "the shocks' mean at a step is off by {} of their sd, root mean square",
    BY_PHASE: "the shocks' mean at a phase of the season is off by {} of their sd, root mean square",
    "shocks: spread by step": "the shocks' sd differs from step to step, by about {} %, root mean square",
    "shocks: level by path": "each path keeps a level of its own, by {} of a shock's sd, root mean square",
    "shocks: spread by path": "the shocks' sd differs from path to path, by about {} %, root mean square",
    BALANCE: "the paths' mean shock has {} of the variance that independent paths give it",
    START: "the first values' mean size, y²/(1 + y²) for y in sd, less that of the last ones is {}",
    SCATTER: "the mean of l²/(1 + l²), of l the log of a path's first mean square, less that of later ones is {}",
    "shocks: shape of the law": "the shocks' density is off by {}, root mean square",
    "shocks: distribution function": "the shocks' distribution function is off by up to {}",
}
_PERCENT = ("shocks: spread by step", "shocks: spread by path")
_STATISTICS = {
    "law": "the Anderson–Darling statistic of the values at {} is {}, expected about {}",
    "shocks: variance of sums": "sums of shocks over {} have {} times the variance of independent ones, stated {}",
    "shocks: neighbouring paths": "shocks of path p and {} correlate by {}, stated {}",
}  # what was compared, where the name of a check does not say it
_SCORE = 50.0 * math.sqrt(2.0)  # a variance off by a moves the normal score of a shock's size by a/√2, its sd by a/2
_CORRELATIONS = {
    "autocorrelation": "autocovariance in stated variances",
    "correlation between series": "covariance between series in stated sd",
    "neighbouring paths": "covariance of neighbouring paths in stated variances",
    "clustering": "covariance of sizes in stated variances",
}  # how checks end whose estimate is a correlation as long as spreads are as stated -> what it is in any case
_DRAWN = ": distribution function"  # how the check of a drawn parameter ends
FARTHEST, FARTHEST_SHOCK = "farthest value", "shocks: farthest"
_STAYS = re.compile(r"share: (.+) after \1, (up to \d+ steps?|longer)")
CUT = "tails are cut"  # how the note of a shock begins that is the farthest, and not far
CONTINUED, SHIFTED = "end of a path and start of the next", "values some paths apart"  # as `ordered` has them
GAP, TOGETHER = " of the gap", " of the sum"  # how the checks of a combination of series end, as `relations` has them
_ALL_DIGITS = 17  # that tell any two numbers apart
_COUNT = re.compile(r"(?<![\w.,−-])\d[\d,]*(?= (?:pairs? of )?(?:paths?|shocks?|cases?|steps?|values?)\b)")
_FACTS = ("values", "constant")  # checks without chance, whose note says what is wrong
_LEAST_P = math.log(1e-300)  # below this a p is only said to be smaller


def many(count: int, what: str) -> str:
    """The count with its noun, such as 1 path or 1,000 paths."""
    return f"{count:,} {what}{'' if count == 1 else 's'}"


def joined(words: Sequence[str]) -> str:
    """Words in a row: a, b and c."""
    return " and ".join(filter(None, [", ".join(words[:-1]), *words[-1:]]))


def number(x: float | None, digits: int = 5) -> str:
    """A number in few letters; a dash for what is not known."""
    if x is None or math.isnan(x):
        return "–"
    if math.isinf(x):
        return "∞" if x > 0 else "−∞"
    return f"{x:.{digits}g}".replace("-", "−")


def side_by_side(x: float | None, y: float | None, digits: int = 5) -> tuple[str, str]:
    """Two numbers beside each other, with as many digits more as it takes to see that they differ."""
    if x is None or y is None or x == y:
        return number(x, digits), number(y, digits)
    shown = ((number(x, k), number(y, k)) for k in range(digits, _ALL_DIGITS + 1))
    return next((both for both in shown if both[0] != both[1]), (number(x, digits), number(y, digits)))


def alike(notes: Iterable[str]) -> dict[str, str]:
    """For each note, what is said in its place: notes that differ in counts alone are told once, with their range."""
    groups: dict[str, list[str]] = {}
    for note in dict.fromkeys(notes):
        groups.setdefault(_COUNT.sub("#", note), []).append(note)
    said: dict[str, str] = {}
    for group in groups.values():
        counts = zip(*([int(each.replace(",", "")) for each in _COUNT.findall(note)] for note in group), strict=True)
        ranges = [f"{min(each):,}" + f"–{max(each):,}" * (min(each) < max(each)) for each in counts]
        first, *rest = _COUNT.split(group[0])
        text = first + "".join(a + b for a, b in zip(ranges, rest, strict=True))
        said |= dict.fromkeys(group, text if len(group) > 1 else group[0])
    return said


def p_text(log_p: float) -> str:
    """p in few letters, to the nearest of two digits; below 1e-300, only that it is."""
    if log_p > math.log(1e-4):
        return f"{math.exp(log_p):.4f}"
    if log_p < _LEAST_P:
        return "< 1e−300"
    power = math.floor(log_p / math.log(10))
    digits = f"{math.exp(log_p - power * math.log(10)):.1f}"
    digits, power = ("1.0", power + 1) if digits == "10.0" else (digits, power)
    return f"{digits.removesuffix('.0')}e{power:d}".replace("-", "−")


def sort_of(row: Check) -> str:
    """The kind of a check; for the share of an event that stands for itself, such as jumps, its name."""
    if row.what in (FARTHEST, FARTHEST_SHOCK) and row.kind == "structure":
        return FARTHEST
    return name_of(row) if row.what.startswith("share: ") and row.kind == "level" else row.kind


def of_stays(row: Check) -> bool:
    """Whether a check is about how long the stays in a state are, whatever their mean."""
    return _STAYS.fullmatch(row.what) is not None


def is_signed(row: Check) -> bool:
    """Whether the sign of what is seen says that there is more, or less, than stated."""
    return row.what.split(" over ")[0].endswith(_SIGNED) or row.what.startswith("variance of")


def name_of(row: Check) -> str:
    """What a check compares, for a reader: a correlation goes by that name only where it can be one."""
    if row.what.startswith("share: "):
        event, *which = row.what.removeprefix("share: ").split(", ")
        return ", ".join([_SHARES.get(event, f"share of {event}"), *which])
    if row.estimate is not None and abs(row.estimate) > 1.0:
        for end, other in _CORRELATIONS.items():
            if row.what.endswith(end):
                return row.what.removesuffix(end) + other
    return _NAMES.get(row.what, row.what)


def tally(counts: Mapping[str, int]) -> str:
    """How many checks had which outcome, such as 1 departs, 40 agree."""
    words = ((count, what if count == 1 else _OUTCOMES.get(what, what)) for what, count in sorted(counts.items()))
    return ", ".join(f"{count:,} {what}" for count, what in words)


def sentence(groups: list[list[Check]]) -> str:
    """One line for the departures of one series: a group a kind, the one that explains most first."""
    also = ", ".join(effects(groups))
    return cause(groups[0]) + (f"; also {also}, which may follow from it" if also else "")


def effects(groups: list[list[Check]]) -> list[str]:
    """The sorts of departure that may follow from the first one, where that is no fact which says it all."""
    top = groups[0][0]
    if _of_a_fact(top) and top.kind != "structure":
        return []
    other = ((group[0].series, sort_of(group[0])) for group in groups[1:])
    return [sort if series == top.series else f"{sort} of {joined(series.split(' ~ '))}" for series, sort in other]


def cause(first: list[Check]) -> str:
    """What departs in a series, of one kind, in a sentence without what may follow from it."""
    top = first[0]
    who = f"{top.series}: " if top.series else ""
    if top.what in (FARTHEST, FARTHEST_SHOCK):
        return f"{who}{top.note}"
    if top.kind == "structure" and top.log_p is None:
        return f"{who}structure: {top.note}{_more(first)}"
    if top.what in _FACTS and top.note:
        return f"{who}level: {top.note}{_more(first)}"
    p = f", p {p_text(top.log_p)}" if top.log_p is not None else ""
    return f"{who}{sort_of(top)}: {_says(top)} ({_seen(top)}{p}){_more(first)}"


def _of_a_fact(top: Check) -> bool:
    known = top.kind == "structure" and top.log_p is None and top.what not in (FARTHEST, FARTHEST_SHOCK)
    return known or (top.what in _FACTS and bool(top.note))


def _says(top: Check) -> str:
    """The departure in general, with its direction where the check has one."""
    if sort_of(top) != top.kind:
        return f"{'smaller' if (top.estimate or 0.0) < (top.theory or 0.0) else 'larger'} than stated"
    if top.what in (CONTINUED, SHIFTED):
        return _of_order(top)
    if of_stays(top):
        return "lengths of stays are not as stated"
    if top.what.endswith(_BETWEEN_PATHS):
        return "paths are not independent of each other"
    if top.what == START:
        size = "smaller" if (top.estimate or 0.0) < 0 else "larger"
        return f"first values are mostly {size} than later ones: their variance is another, or only their tails are"
    if top.what == COSINES:
        wider = (top.estimate or 0.0) < (top.theory or 0.0)
        return f"values are spread {'wider' if wider else 'less wide'} than stated"
    if top.what == SCATTER:
        return "paths start with variances that are not spread as those they go on with"
    way = "not the one"
    if is_signed(top) and top.kind in _MORE_LESS and top.estimate is not None and top.theory is not None:
        way = _MORE_LESS[top.kind][int(top.estimate < top.theory)]
    return _SAYS[top.kind].format(way)


def _of_order(top: Check) -> str:
    """What it means that the order of paths tells."""
    if top.kind != "structure":
        return _SAYS["dependence"]
    if top.what == CONTINUED:
        return "each path goes on where the one before ended, as windows cut from one long path do"
    a, b = top.series.split(" ~ ")
    shift = top.probe.removeprefix("path ")
    return f"path p of {b} repeats the draws of path p{shift} of {a}, as where a seed is the sum of two numbers"


def _seen(top: Check) -> str:
    """What was seen, in numbers."""
    if top.log_p is None and top.kind == "law":
        return top.note
    if top.what.endswith(_DRAWN) and top.what not in _WHOLE:
        return f"the distribution function of {top.what.removesuffix(_DRAWN)} is off by up to {number(top.estimate, 4)}"
    if top.what in _WHOLE and not top.probe.startswith("worst"):
        factor = _SCORE if top.what in _PERCENT else 1.0
        said = _WHOLE[top.what].format(number((top.estimate or 0.0) * factor, 4 if factor == 1.0 else 2))
        return f"{said}, {top.note}" if top.what == BY_PHASE and top.note else said
    if top.probe.startswith("worst"):
        return f"{name_of(top)} is off most at {top.probe.removeprefix('worst: ')}, by {number(top.estimate, 4)} se"
    where = f" at {top.probe}" if top.probe else ""
    between = f" between {joined(top.series.split(' ~ '))}" if top.what.endswith(GAP) else ""
    between = f" of {joined(top.series.split(' ~ '))} in sd" if top.what.endswith(TOGETHER) else between
    seen, stated = side_by_side(top.estimate, top.theory, 4)
    if name_of(top) in _STATISTICS:
        return _STATISTICS[top.what].format(top.probe.replace("path −", "p −"), seen, stated)
    return f"{name_of(top)}{between}{where} is {seen}, stated {stated}"


def _more(group: list[Check]) -> str:
    more = len(group) - 1
    return f", and {more} more row{'s' if more > 1 else ''}" if more else ""
