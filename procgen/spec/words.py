"""The words that faults share: nearest names, lists of choices, bounds, and what a value looks like."""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable

# what people call things elsewhere, and what they go by here, where that is among the choices; a logarithm by nothing
OTHERWISE = {
    "sigma": ("sd", "total_sd"),
    "std": ("sd", "total_sd"),
    "stdev": ("sd", "total_sd"),
    "scale": ("sd",),
    "variance": ("sd",),
    "var": ("sd",),
    "sine": ("seasonal",),
    "sin": ("seasonal",),
    "cos": ("seasonal",),
    "cosine": ("seasonal",),
    "normal": ("white_noise",),
    "gaussian": ("white_noise", "normal"),
    "noise": ("white_noise",),
    "level": ("constant",),
    "mean": ("constant",),
    "linear": ("trend",),
    "slope": ("trend",),
    "drift": ("trend",),
    "log": (),
    "multiply": ("product",),
    "divide": ("product",),
    "add": ("sum",),
    "shift": ("lag",),
    "cumsum": ("integrate",),
    "lognormal": ("exp",),
}


def row_told(row: int) -> str:
    """Where a row of a table without lines is, counted from 0 as by pandas, and so that nobody takes it otherwise."""
    return f"row {row}, counted from 0" if row else "row 0, the first"


def unknown_key(key: str, allowed: Iterable[str]) -> str:
    """Return the message for a key nobody declared, with the nearest valid one."""
    allowed = list(allowed)
    hint = did_you_mean(key, allowed)
    return f"unknown key {key[:40]}; expected {one_of(allowed)}" + (f"; {hint}" if hint else "")


def did_you_mean(given: object, names: Iterable[str]) -> str:
    """Return "did you mean X?" for the nearest of `names`, or "" when none is near."""
    near = nearest(given, names)
    return f"did you mean {near}?" if near else ""


def nearest(given: object, names: Iterable[str]) -> str | None:
    """Return the nearest of `names` to a misspelt one, or None."""
    if not isinstance(given, str) or len(given) > 100:
        return None
    names = list(names)
    if given in OTHERWISE:
        return next((name for name in OTHERWISE[given] if name in names), None)
    swapped = [name for name in names if sorted(name) == sorted(given)]
    return next(iter(swapped or difflib.get_close_matches(given, names, n=1, cutoff=0.6)), None)


def one_of(words: Iterable[str]) -> str:
    """Return "a", "a or b", "one of a, b, c"; "no key" for none."""
    words = list(words)
    if len(words) > 2:
        return f"one of {', '.join(words)}"
    return " or ".join(words) if words else "no key"


def bounds(above: float | None, below: float | None, at_least: float | None, at_most: float | None) -> str:
    """Return bounds in words that follow "a number", such as " above 0" or " in (0, 1]"."""
    low = above if above is not None else at_least
    high = below if below is not None else at_most
    if low is not None and low == high:
        return f" equal to {_figure(low)}"
    if low is not None and high is not None:
        left, right = "(" if above is not None else "[", ")" if below is not None else "]"
        return f" in {left}{_figure(low)}, {_figure(high)}{right}"
    if low is not None:
        return f" above {_figure(low)}" if above is not None else f" of at least {_figure(low)}"
    if high is not None:
        return f" below {_figure(high)}" if below is not None else f" of at most {_figure(high)}"
    return ""


def _figure(number: float) -> str:
    """Return a number in few characters; 2^k − 1 as such, for it is nothing in decimals."""
    if isinstance(number, int) and number > 10**15 and (number + 1) & number == 0:
        return f"2^{number.bit_length()} − 1"
    return f"{number:g}"


def unquote(value: object) -> str:
    """Return a hint when a text looks like a number."""
    if not isinstance(value, str) or len(value) > 40:
        return ""
    if value.endswith("%"):
        return "write a share, such as 0.05 for 5 %"
    try:
        if not math.isfinite(float(value)):
            return "it must be finite: give the number itself, or take it out"
    except ValueError:
        try:
            float(value.replace(",", "."))
        except ValueError:
            return ""
        return "write the decimal sign as a point"
    return "this is a text; write the number plainly, without quotes, spaces or underscores"
