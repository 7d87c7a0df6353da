"""Whether the paths of a table are in an order that tells: each goes on where another one ends, or shares its seed.

Independent paths could stand in any order. So the normal scores of what is compared, a value of a path and one of a
path some places on, are multiplied and summed: over all orders of the paths the sum has mean 0 but for 1/n, variance
one a product, and the kurtosis of a sum of products (Wald & Wolfowitz 1943, An exact test for randomness in the
non-parametric case based on serial correlation).
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.judge import FEW_PATHS, Finding
from procgen.checks.verdict import Check
from procgen.checks.words import CONTINUED, SHIFTED

PAIRS = 45  # pairs of series that are compared
_SHIFTS = (1, -1, 2, -2, 3, -3)
_SAME = 0.9  # a correlation from which on one series is said to repeat the other
_ON = 1.5  # so many times an inner change a step from path to path may be where one goes on from the other

Rows = Mapping[str, NDArray]


def checks(rows: Rows, drawn: Mapping[str, bool]) -> Iterator[Check]:
    """Of each series (paths, 4), the first two and last two values of a path, whether they follow those of others.

    `drawn`: the series whose first and last value chance moves. Paths are in the order of their labels.
    """
    names = [name for name in rows if drawn[name]]
    for name in names:
        on = along(rows[name][:, -1], rows[name][:, 0], 1)
        if on is not None:
            yield Check.of(name, CONTINUED, "path +1", "structure" if _goes_on(rows[name]) else "dependence", on)
    for a, b in list(combinations(names, 2))[:PAIRS]:
        found = {shift: along(rows[b][:, -1], rows[a][:, -1], shift) for shift in _SHIFTS}
        known = {shift: finding for shift, finding in found.items() if finding is not None}
        if known:
            shift, least = min(known.items(), key=lambda item: item[1].log_p)
            finding = replace(least, log_p=min(0.0, least.log_p + math.log(len(known))))  # Bonferroni
            kind = "structure" if abs(finding.estimate) > _SAME else "dependence"
            yield Check.of(f"{a} ~ {b}", SHIFTED, f"path {shift:+d}".replace("-", "−"), kind, finding)


def along(a: NDArray, b: NDArray, shift: int) -> Finding | None:
    """The correlation of a on a path with b on the one `shift` places on, by their normal scores; None where too few.

    a, b: (paths,) numbers of each path, NaN where one is not known.
    """
    n = len(a) - abs(shift)
    if n < FEW_PATHS:
        return None
    x, y = scores(a), scores(b)
    low, high = max(-shift, 0), max(shift, 0)
    x, y = x[low : low + n], y[high : high + n]
    known = np.isfinite(x) & np.isfinite(y)
    pairs = int(known.sum())
    if pairs < FEW_PATHS:
        return None
    products = x[known] * y[known]
    root = math.sqrt(pairs)
    own = scores(a) * scores(b)  # of one path: what is there is not between paths
    mean = -float(np.nanmean(own)) / (len(a) - 1)
    excess = max(float(np.nanmean(x**4) * np.nanmean(y**4)), 9.0) - 3.0
    finding = judge.unit((float(products.sum()) - pairs * mean) / root, 1 / root, excess=excess / pairs)
    return judge.with_doubt(finding, judge.excess_doubt(excess, pairs, "pairs of paths"))


def scores(x: NDArray) -> NDArray:
    """Normal scores of ranks, of mean 0 and mean square 1; NaN where x is not finite, or all of it one value."""
    from scipy.special import ndtri
    from scipy.stats import rankdata

    out, known = np.full(len(x), np.nan), np.isfinite(x)
    if known.sum() > 1 and np.ptp(x[known]) > 0:
        g = ndtri((rankdata(x[known]) - 0.5) / int(known.sum()))
        out[known] = (g - g.mean()) / g.std()
    return out


def _goes_on(x: NDArray) -> bool:
    """Whether it is about as far from the end of a path to the start of the next as from one step to another."""
    if x.shape[1] < 4:
        return False
    x = x - np.nanmean(x, axis=0)
    inner = np.concatenate([x[:, 1] - x[:, 0], x[:, 3] - x[:, 2]])
    return bool(np.nanmedian(np.abs(x[1:, 0] - x[:-1, -1])) < _ON * np.nanmedian(np.abs(inner)))


def natural(labels: Sequence[Any]) -> list[int]:
    """The order of labels by their numbers, as a reader has it: run 2 before run 10."""
    import re

    if not all(isinstance(label, str) for label in labels):
        return list(range(len(labels)))
    keys = [[(int(part), "") if part.isdecimal() else (-1, part) for part in re.split(r"(\d+)", x)] for x in labels]
    return sorted(range(len(labels)), key=lambda k: keys[k])
