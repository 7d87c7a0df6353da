"""Departures in plain words."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from procgen.checks.verdict import Check

_SAYS = {
    "structure": "structure",
    "level": "level: the mean is not the one stated",
    "spread": "spread: the variance is not the one stated",
    "memory": "memory: values depend on earlier ones otherwise than stated",
    "clustering": "clustering: calm and wild stretches follow each other otherwise than stated",
    "law": "law: the shape of the distribution is not the one stated",
    "dependence": "dependence: paths or series hang together otherwise than stated",
}


def number(x: float | None) -> str:
    """Four significant digits; a dash for what is not known."""
    return "–" if x is None else f"{x:.4g}".replace("-", "−")


def sentence(group: list[Check]) -> str:
    """One line for the departures of one kind in one series, the strongest first in `group`."""
    first = group[0]
    who = f"{first.series}: " if first.series else ""
    if first.kind == "structure":
        return f"{who}structure: {first.note}" + _more(group)
    where = f" at {first.probe}" if first.probe else ""
    seen = f"{first.what}{where} is {number(first.estimate)}, stated {number(first.theory)}"
    return f"{who}{_SAYS[first.kind]} ({seen}{_sigmas(first)})" + _more(group)


def _sigmas(check: Check) -> str:
    if check.estimate is None or check.theory is None or not check.standard_error:
        return ""
    distance = abs(check.estimate - check.theory) / check.standard_error
    return f", {distance:.1f} standard errors away" if distance < 1e6 else ""


def _more(group: list[Check]) -> str:
    more = len(group) - 1
    return f", and {more} more row{'s' if more > 1 else ''}" if more else ""
