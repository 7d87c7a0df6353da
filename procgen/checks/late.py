"""Tables that begin after step 0: rows that are missing, as others may be anywhere, or windows of something longer.

A window departs from nothing: it lacks what its values are to be held against, and is refused. Rows are missing where
it is known which steps are there, and those at the start are few, or such as the spec leaves out.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.files import TableError
from procgen.checks.roles import option
from procgen.checks.words import many

_FEW = 20  # of so many steps one may be missing at the start; common practice, no source
_RARE = 1e-6  # chance of more, below which they are not what the spec leaves out


def refuse_unknown(where: str, first: int, last: int, stated: int, on_clock: bool) -> None:
    """TableError where steps might count from elsewhere: no time tells them, and they do not end as the spec's do."""
    if first > 0 and not on_clock and last != stated - 1:
        raise _window(where, first, last)


def refuse_window(where: str, first: int, steps: int, paths: int, gaps: Mapping[str, Any], names: Any) -> None:
    """TableError where more is missing at the start than rows of `paths` paths that have `steps` steps.

    gaps: the terms that leave values of series out.
    """
    if first > max(1, steps // _FEW) and not (set(names) <= set(gaps) and _chance(gaps, first, paths) > _RARE):
        raise _window(where, first, steps - 1)


def refuse_closed_up(where: str, stated: int, rows: int, values: Mapping[str, NDArray], gaps: Mapping) -> None:
    """TableError where rows without steps are fewer than stated, and may be what is left of those with missing values.

    stated: rows of all paths with all steps of the spec. values: of each series. Where a row has none, rows are taken
    to stand for all steps.
    """
    if rows >= stated or not set(values) <= set(gaps):
        return
    if not np.logical_and.reduce([np.isnan(x) for x in values.values()]).any():
        raise TableError(
            f"{where} cannot be judged as it is: it has {many(rows, 'row')} of the {stated:,} that the spec states, "
            f"which says that values are missing, and no column of steps or times that tells which; "
            f"{option('step')}, or give every step a row, with an empty value where it is missing"
        )


def _chance(gaps: Mapping[str, Any], first: int, paths: int) -> float:
    """Of no path having a value before step `first`; of a share that is drawn it is not computed, and is 0."""
    total = 0.0
    for term in {id(term): term for term in gaps.values()}.values():
        if term.drawn:
            return 0.0
        _, stay = term.chain.chances
        total += math.log(term.share) + (first - 1) * math.log(stay) if term.share * stay > 0 else -math.inf
    return math.exp(paths * total)


def refuse_cuts(where: str, labels: Sequence[Any], path: NDArray, step: NDArray) -> None:
    """TableError where paths are as many steps each, in a row, and begin at steps of their own: a record, cut."""
    count = np.bincount(path)
    first = np.full(len(count), np.iinfo(np.int64).max)
    last = np.zeros(len(count), np.int64)
    np.minimum.at(first, path, step)
    np.maximum.at(last, path, step)
    if len(count) < 2 or len(np.unique(first)) < len(first) or np.any(last - first + 1 != count) or np.ptp(count):
        return
    later = int(np.argsort(first)[1])
    raise TableError(
        f"{where} cannot be judged as it is: expected each path to have steps from 0 on, got "
        f"{many(len(count), 'path')} of {many(int(count[0]), 'step')} each that begin at steps of their own, such "
        f"as {labels[later]} at step {first[later]}, as windows cut from one long record do; number the steps "
        f"of each path from 0, or, if they are one path, give them one name"
    )


def _window(where: str, first: int, last: int) -> TableError:
    one = " (if its steps count from 1, number them from 0)" if first == 1 else ""
    rows = "a row with an empty value" if first == 1 else "rows with empty values"
    it = "it is" if first == 1 else "they are"
    return TableError(
        f"{where} cannot be judged as it is: expected steps from 0 on, got {_steps(first, last)}{one}; a spec states "
        f"its values from step 0 on, so give {_steps(0, first - 1)} too, as {rows} where {it} missing; where the spec "
        f"states the same of every step, numbers from 0 will do"
    )


def _steps(first: int, last: int) -> str:
    return f"step {first}" if first == last else f"steps {first} to {last:,}"
