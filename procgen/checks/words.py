"""Departures in plain words."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from procgen.checks.verdict import Check

_SAYS = {
    "level": "level: the mean is not the one stated",
    "spread": "spread: the variance is not the one stated",
    "memory": "memory: values depend on earlier ones otherwise than stated",
    "clustering": "clustering: calm and wild stretches follow each other otherwise than stated",
    "law": "law: the shape of the distribution is not the one stated",
    "dependence": "dependence: paths or series hang together otherwise than stated",
}


def number(x: float | None, digits: int = 5) -> str:
    """A number in few letters; a dash for what is not known."""
    if x is None or math.isnan(x):
        return "–"
    if math.isinf(x):
        return "∞" if x > 0 else "−∞"
    return f"{x:.{digits}g}".replace("-", "−")


def p_text(log_p: float) -> str:
    """p in few letters, also far below what a float can hold."""
    if log_p > math.log(1e-4):
        return f"{math.exp(log_p):.4f}"
    if math.isinf(log_p):
        return "0"
    return f"1e{math.floor(log_p / math.log(10)):d}".replace("-", "−")


def sentence(groups: list[list[Check]]) -> str:
    """One line for the departures of one series: a group a kind, the strongest first, in groups too."""
    first, *others = groups
    top = first[0]
    who = f"{top.series}: " if top.series else ""
    if top.kind == "structure":
        return f"{who}structure: {top.note}{_more(first)}"
    if top.what == "values":
        return f"{who}level: {top.note}"
    where = f" at {top.probe}" if top.probe else ""
    p = f", p {p_text(top.log_p)}" if top.log_p is not None else ""
    seen = f"{top.what}{where} is {number(top.estimate, 4)}, stated {number(top.theory, 4)}{p}"
    also = ", ".join(group[0].kind for group in others)
    return f"{who}{_SAYS[top.kind]} ({seen}){_more(first)}" + (
        f"; also {also}, which may follow from it" if also else ""
    )


def _more(group: list[Check]) -> str:
    more = len(group) - 1
    return f", and {more} more row{'s' if more > 1 else ''}" if more else ""
