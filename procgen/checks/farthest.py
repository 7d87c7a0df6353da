"""The shock farthest out in its law: one that is absurd is named, though the value that it made may look harmless.

Shocks are independent and their law is exact, so that of N the least tail area a has the law 1 − (1 − 2a)^N: a value
that is rare only given its past is found by it, where the law of all values leaves room. The other side of the same
law finds tails that are cut: none of N shocks is as far out as one should be.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.blocks import places_beyond
from procgen.checks.judge import Finding
from procgen.checks.scores import Scores
from procgen.checks.verdict import Check
from procgen.checks.words import CUT, FARTHEST_SHOCK, number

KEPT = 32  # shocks of a series
LEAST = 3.0  # normal scores, below which a shock is of no interest
_OUTSIDE = math.log(0.05)  # of a shock that is farther out than all N should be
_APART = 1.2  # times as far as the farthest of N should be
_SPAN = 12  # steps of a path in which the shocks lie that one wrong value makes
_EQUAL = 1e-9  # normal scores, within which shocks are one; between the farthest of N chance leaves 1e-2
_TIED = 4  # equal shocks that no continuous law gives
_CLIPPED = 1e-15  # tail area below which a uniform in double precision, or a clipped score, tells nothing

Far = list[Any]  # size of the normal score, minus step, minus path, shock, value: a list, as JSON has it


def farthest(
    g: NDArray,
    z: NDArray,
    x: NDArray,
    first_path: int,
    first_step: int,
    known: Sequence[Far],
    worst: NDArray | None = None,
    least: float = LEAST,
) -> list[Far]:
    """The KEPT farthest of those known, of earlier steps, and a tile (steps, paths) of scores g, shocks z, values x.

    Of scores of one size the earlier are kept. `worst`: the largest sizes of runs of steps, as many in each, where all
    scores are known; only scores larger than `least` are wanted.
    """
    least = max(least, known[-1][0]) if len(known) == KEPT else least
    with np.errstate(invalid="ignore"):
        if worst is None:
            worst = np.fmax(np.fmax.reduce(g, axis=1), -np.fmin.reduce(g, axis=1))
        elif np.count_nonzero(worst > least) > KEPT:  # the KEPT largest of these are enough, a row has one at least
            least = max(least, float(np.nextafter(np.partition(worst, -KEPT)[-KEPT], 0.0)))
        if not (worst > least).any():
            return list(known)
        rows = np.flatnonzero(worst > least if len(worst) == len(g) else np.repeat(worst > least, len(g) // len(worst)))
        bound = np.full(len(rows), least)
        at, paths, found = places_beyond(g, rows, -bound, bound)
    places = zip((-np.abs(found)).tolist(), rows[at].tolist(), paths.tolist(), strict=True)
    new: list[Far] = []
    for size, row, path in sorted(places)[:KEPT]:
        new.append([-size, -first_step - row, -first_path - path, float(z[row, path]), float(x[row, path])])
    return merged([*known, *new])


def merged(found: Sequence[Far]) -> list[Far]:
    """The farthest of all, in order."""
    return sorted(found, key=lambda far: far[:3], reverse=True)[:KEPT]


def checks(
    series: str, scores: Scores, known: Sequence[Far], n: int, noise: float = 0.0, ranks: bool = False
) -> Iterator[Check]:
    """Whether the farthest of n shocks is as far out as chance carries it, no more and no less.

    `noise` is the variance that rounding adds to a shock; `ranks` are uniforms that are as fine as doubles.
    """
    room = 10.0 * math.sqrt(noise) if noise or ranks or scores.gaussian else scores.room
    nearer = _log_nearer(scores, known, room, n)
    if not known:
        yield _cut(series, nearer, LEAST, n)
        return
    logs = [judge.of_many(math.log(2.0) + _log_tail(scores, far, room), n) for far in known]
    best = int(np.argmin(logs))
    first, log_p = known[best], logs[best]
    outside = [far for far, log in zip(known, logs, strict=True) if log < _OUTSIDE]
    size = _score(_log_tail(scores, first, room))
    alone = bool(outside) and _one_place(outside) and size > _APART * _score(math.log(-math.log1p(-0.05) / (2 * n)))
    if nearer < log_p:
        yield _cut(series, nearer, size, n)
        return
    log_p = min(0.0, math.log(2.0) + log_p)
    finding = Finding(0.0, math.copysign(size, first[3]), 1.0, log_p, lambda level: judge.reach_of_worst(level, n))
    check = Check.of(series, FARTHEST_SHOCK, f"path {-first[2]}, step {-first[1]}", "law", finding)
    if alone:
        check.kind = "structure"  # a fault of the data; others speak of the law
    if outside:
        check.note = (
            f"{'one shock far' if alone else 'a shock'} outside what the law allows: {check.probe}, value "
            f"{number(first[4], 6)}, which given its past is as rare as {number(size, 3)} sd of a normal law"
        )
    yield check


def _cut(series: str, log_p: float, size: float, n: int) -> Check:
    """The check where the farthest of n shocks is rather too near: `size` is that of its score."""
    least = _usual(n, math.log(0.5))
    log_p = min(0.0, math.log(2.0) + log_p)
    finding = Finding(least, size, 1.0, log_p, lambda level: least - _usual(n, math.log(level / 2.0)))
    check = Check.of(series, FARTHEST_SHOCK, "all steps", "law", finding)
    if log_p < _OUTSIDE:
        check.note = (
            f"{CUT}: of {n:,} shocks none is farther out than {number(size, 3)} sd of a normal law, where "
            f"{number(least, 3)} is to be expected"
        )
    return check


def _usual(n: int, log_none: float) -> float:
    """The size beyond which none of n normal scores lies with this chance, given as its logarithm."""
    return _score(math.log(-math.expm1(log_none / n)) - math.log(2.0))


def _log_nearer(scores: Scores, known: Sequence[Far], room: float, n: int) -> float:
    """log of (1 − 2a)^n: that none of n is farther out than the farthest, or, if none is known, than the least."""
    from scipy.special import log_ndtr

    tail = math.exp(float(log_ndtr(-LEAST)))
    if known and scores.gaussian:
        tail = math.exp(float(log_ndtr(-abs(known[0][3]) - room)))
    elif known:
        z = float(scores.folded(np.array([known[0][3]]))[0])
        law = scores.distribution
        tail = float(law.cdf(z - room) if z < scores.median else law.sf(z + room))
    return n * math.log1p(-2.0 * max(tail, _CLIPPED))


def ties(series: str, scores: Scores, known: Sequence[Far], n: int) -> Iterator[Check]:
    """Whether several of the farthest of n shocks of a continuous law are one and the same.

    Those outside what the law allows are not of interest: they are told of as such, and no cut made them.
    """
    known = [far for far in known if judge.of_many(math.log(2.0) + _log_tail(scores, far, 0.0), n) >= _OUTSIDE]
    groups: list[list[Far]] = []
    for far in sorted(known, key=lambda far: (far[0], abs(far[3])), reverse=True):
        last = groups[-1][-1] if groups else [math.inf] * 5
        if last[0] - far[0] <= _EQUAL and abs(last[3]) - abs(far[3]) <= _EQUAL * abs(far[3]):
            groups[-1].append(far)
        else:
            groups.append([far])
    most, fault = max(groups, key=len, default=[]), ""
    if len(most) >= _TIED:
        fault = (
            f"{len(most)} of the {len(known)} shocks farthest out are equal, the first at path {-most[0][2]}, step "
            f"{-most[0][1]}, value {number(most[0][4], 6)}, as if cut there, or rounded"
        )
    yield Check.fact(series, "shocks: equal ones", "the farthest", fault, "no two of the farthest shocks are the same")


def _one_place(outside: Sequence[Far]) -> bool:
    """Whether shocks lie so near to each other that one wrong value explains them."""
    steps = [-far[1] for far in outside]
    return len({far[2] for far in outside}) == 1 and max(steps) - min(steps) <= _SPAN


def _log_tail(scores: Scores, far: Far, room: float) -> float:
    """Logarithm of the tail area of a shock that is moved inwards by `room`, and no less than can be told."""
    from scipy.special import log_ndtr

    z = far[3]
    if scores.gaussian:
        return float(log_ndtr(-max(abs(z) - room, 0.0)))
    side = scores.folded(np.array([z]))
    inwards = side + room if side[0] < scores.median else side - room
    return max(float(log_ndtr(-abs(scores.normal_scores(inwards)[0]))), math.log(_CLIPPED))


def _score(log_tail: float) -> float:
    from scipy.special import ndtri_exp

    return -float(ndtri_exp(log_tail))
