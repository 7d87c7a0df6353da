"""Series that repeat each other bit for bit, though they are not one.

Fingerprints of paths weigh the steps of all series alike, so that those of two series can be compared. Where chance
may give both the same path, as in short paths of few values, only pairs that go together by their number tell: of
paths that differ from each other, k of two independent series match in a stated order with a chance of at most 1/k!.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.verdict import Check
from procgen.checks.words import many

_CERTAIN = 1e-12  # chance below which what is equal is no accident
_SHIFTS = (0, 1, -1)  # paths on which a path may be repeated
_WHAT = "repeated series"

Pairs = Sequence[tuple[str, str, bool]]


def strangers(graph: Any, names: Sequence[str]) -> list[tuple[str, str, bool]]:
    """The pairs of series that share no term or source, and whether their shocks are correlated, by less than 1."""
    if graph.varied is not None and graph.varied.parameters:  # parameters drawn by path may be common to both
        return []
    behind, groups = {}, {}
    for name in names:
        nodes = graph.order([graph.series[name]], drawn=True)
        mine = [group for node in nodes if (group := getattr(node, "group", None)) is not None]
        behind[name] = {id(node) for node in nodes}
        groups[name] = {id(group) for group in mine}
    apart = [(a, b) for a, b in combinations(names, 2) if not behind[a] & behind[b]]
    return [(a, b, bool(groups[a] & groups[b])) for a, b in apart]


def checks(
    pairs: Pairs, names: Sequence[str], paths: NDArray, prints: NDArray, chance: Mapping[str, float]
) -> Iterator[Check]:
    """Whether series that are not one have paths in common.

    paths (n,), prints (n, series): fingerprints. chance: for each series, that two of its paths are equal; that a path
    of one equals one of an independent one is at most the root of the product of both (Cauchy & Schwarz). What is
    correlated is judged where chance makes no two paths equal.
    """
    if not pairs:
        return
    prints, found = prints[np.argsort(paths, kind="stable")], False
    columns = {name: prints[:, k] for k, name in enumerate(names)}
    apart = {name: np.unique(column) for name, column in columns.items()}
    for a, b, correlated in pairs if _some_twice(list(apart.values())) else ():
        if correlated and chance[a] + chance[b] > 0.0:
            continue
        shared = int(np.intersect1d(apart[a], apart[b], assume_unique=True).size)
        by_chance = math.sqrt(chance[a] * chance[b]) * float(len(paths)) ** 2
        matched = {shift: _matched(columns[a], columns[b], shift) for shift in _SHIFTS if abs(shift) < len(paths)}
        shift = max(matched, key=lambda each: matched[each])
        certain = by_chance < _CERTAIN or math.lgamma(matched[shift] + 1) > -math.log(_CERTAIN)
        if shared and certain:
            found = True
            count = matched[shift]
            place = "the same path" if shift == 0 else "the next path" if shift < 0 else "the path before"
            where = f", {many(count, 'time')} in {place}" if count else ", in other paths"
            fault = f"{many(shared, 'path')} of {b} repeat{'s' * (shared == 1)} {a} bit for bit{where}"
            yield Check.fact(f"{a} ~ {b}", _WHAT, "all pairs", fault)
    if not found:
        yield Check.fact("", _WHAT, "all pairs", "", "no two series have a path in common")


def _some_twice(columns: Sequence[NDArray]) -> bool:
    both = np.sort(np.concatenate(columns))
    return bool((both[1:] == both[:-1]).any())


def _matched(a: NDArray, b: NDArray, shift: int) -> int:
    """How many paths of b equal path + shift of a, among those that are unlike all others of their series."""
    one, other = _alone(a), _alone(b)
    n = len(a) - abs(shift)
    at, to = max(shift, 0), max(-shift, 0)
    same = (a[at : at + n] == b[to : to + n]) & one[at : at + n] & other[to : to + n]
    return int(np.count_nonzero(same))


def _alone(column: NDArray) -> NDArray[np.bool_]:
    _, inverse, counts = np.unique(column, return_inverse=True, return_counts=True)
    return counts[inverse] == 1
