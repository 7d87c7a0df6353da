"""One number in many places of a series whose law gives hardly any number twice: gaps filled with it, or a cut-off end.

Only for a table, whose values are all in memory. Each value is counted where it comes anew: what stays for some steps
is told elsewhere, and so are copies and rounding, where many numbers are there twice.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from procgen.checks.copies import BEGUN, Repeats
from procgen.checks.verdict import Check

FILLED = "one number in many places"
_FEWEST = 5  # times that a number is there
_NUMBERS = 3  # that may be there so often: what fills gaps, and both ends
_TWICE = 0.1  # share of all others that may be there twice
_CERTAIN = 1e-12  # expected number of numbers that chance puts in so many places, below which it is no chance
_HALF = 0.5  # of a value in a given cell: from there on chance repeats anything


def check(series: str, x: NDArray, repeats: Repeats) -> Check:
    """Whether some number is there more often than chance puts it; x: values (paths, steps), NaN where there is none.

    0 is left to a check of its own, and early steps, at which paths may begin late, are where there are later ones.
    """
    begun = BEGUN if x.shape[1] > BEGUN else 1
    new = np.isfinite(x[:, begun:]) & (x[:, begun:] != x[:, begun - 1 : -1]) & (x[:, begun:] != 0.0)
    values, counts = np.unique(x[:, begun:][new], return_counts=True)
    often = counts >= _needed(int(counts.sum()), repeats.chance)
    others = counts[~often]
    fault = ""
    if others.size and 0 < np.count_nonzero(often) <= _NUMBERS and others[others > 1].sum() <= _TWICE * others.sum():
        fault = _told(x, begun, values[often][np.argsort(-counts[often], kind="stable")])
    return Check.fact(series, FILLED, "all steps", fault, "no number is there more often than chance puts it")


def _needed(n: int, chance: float) -> float:
    """Times that chance does not put any number, where each of n values falls on a given one with at most `chance`.

    There are no more than n (n chance)^(k − 1) / k! groups of k equal values to be expected.
    """
    if n * chance >= _HALF or not n:
        return math.inf
    k = _FEWEST
    while math.log(n) + (k - 1) * math.log(n * chance) - math.lgamma(k + 1) > math.log(_CERTAIN):
        k += 1
    return k


def _told(x: NDArray, begun: int, numbers: NDArray) -> str:
    """The numbers in words, as the ends of all values where they are that."""
    others = x[np.isfinite(x) & ~np.isin(x, numbers)]
    near = float(others.std())  # an end at which values were cut off has others beside it
    ends = {float(np.nanmin(x)): "the smallest, "} if others.min() - np.nanmin(x) <= near else {}
    ends |= {float(np.nanmax(x)): "the largest, "} if np.nanmax(x) - others.max() <= near else {}
    parts = []
    for number in numbers.tolist():
        here = x == number
        here[:, :begun] = False
        shown = np.format_float_positional(number, trim="-") if 1e-4 <= abs(number) < 1e15 else repr(number)
        parts.append(f"{int(here.sum()):,} values are exactly {ends.get(number, '')}{shown.replace('-', '−')}")
    path, step = np.argwhere(x[:, begun:] == numbers[0])[0].tolist()
    why = ", as if cut off there" if all(number in ends for number in numbers.tolist()) else ""
    return f"{' and '.join(parts)}{why}; the first at path {path}, step {step + begun}"
