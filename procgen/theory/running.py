"""Covariances of forms with processes among their sources, and of running sums of processes.

The covariance of a running sum is that of its summands, added up: over lags where these are stationary together, else
over all pairs of steps. Sums are two-sided, as in `linear`: 0 at step 0, and followed backwards below it.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import NamedTuple

import numpy as np

from procgen.theory.linear import At, Base, Frozen, Key, Linear, Sum, base_of
from procgen.theory.processes import Steps
from procgen.theory.sources import PROCESS, Source, Space
from procgen.theory.unknown import Unknown

Plain = Callable[[Space, Linear, Linear, Steps, Steps], np.ndarray]
Of = Callable[[Steps, Steps], np.ndarray]
LONGEST = 1 << 20  # lags over which a running sum of something stationary is added up
LARGEST = 1 << 22  # pairs of steps over which another one is
AT_ONCE = 1 << 16  # pairs of steps that are asked for in one go
KEPT = 16  # tables of such pairs that are kept for the next question


class Reading(NamedTuple):
    """A process as a form has it: some steps ago, as it was at a step for ever, or its running sum."""

    source: Source
    key: Key

    @property
    def summed(self) -> bool:
        return isinstance(self.key, Sum)

    def at(self, steps: Steps) -> Steps:
        if isinstance(self.key, Frozen):
            return np.full_like(steps, -self.key.back)
        return steps - self.key.delay if isinstance(self.key, At) else steps


def mixed(space: Space, x: Linear, y: Linear, t: Steps, s: Steps, plain: Plain) -> np.ndarray:
    """Cov(x(t), y(s)) of forms with processes among their sources."""
    (rest_x, own_x), (rest_y, own_y) = _split(x), _split(y)
    total = plain(space, rest_x, rest_y, t, s) if rest_x and rest_y else np.zeros(t.shape)
    for (p, _), ones in _by_source(own_x).items():
        for (q, _), others in _by_source(own_y).items():
            if p is q or space.dependent(p, q):
                total = total + _pairs(space, ones, others, t, s)
    for one, c in own_x.items():
        total = total + c * _against(space, one, rest_y, t, s)
    for other, k in own_y.items():
        total = total + k * _against(space, other, rest_x, s, t)
    return total


def _by_source(own: Mapping[Reading, float]) -> dict[tuple[Source, bool], dict[Reading, float]]:
    found: dict[tuple[Source, bool], dict[Reading, float]] = {}
    for one, c in own.items():
        found.setdefault((one.source, one.summed), {})[one] = c
    return found


def steady(space: Space, form: Linear) -> bool:
    """Whether what is in a form is stationary together, so that covariances depend on the lag alone."""
    from procgen.theory.expression import Expression
    from procgen.theory.known import constant
    from procgen.theory.verdict import judge

    return form.is_plain and judge(Expression(space, constant(0.0), form)).covariance_stationary


def _split(form: Linear) -> tuple[Linear, dict[Reading, float]]:
    rest: dict[Key, float] = {}
    own: dict[Reading, float] = {}
    for key, c in form.items():
        source = base_of(key).source
        if source.kind != PROCESS:
            rest[key] = c
            continue
        inner = key.of if isinstance(key, Sum) and isinstance(key.of, At) else key
        if not isinstance(inner, At | Frozen) or inner.base.phi:
            raise Unknown(f"a sum of sums or a filter of {source.detail.name} has no closed covariance")
        own[Reading(source, key)] = c
    return Linear(rest), own


def _pairs(
    space: Space, ones: Mapping[Reading, float], others: Mapping[Reading, float], t: Steps, s: Steps
) -> np.ndarray:
    """Cov of two processes, or of one with itself, each as it is read several times: each pair of steps once."""
    one, other = next(iter(ones)), next(iter(others))
    p, q = one.source, other.source

    def of(t: Steps, s: Steps) -> np.ndarray:
        if p is q:
            return p.detail.covariance(t, s)
        if q.detail.filters and not p.detail.filters and not any(q in x.sources for x in p.detail.ingredients):
            return q.detail.with_process(q, p, s, t)
        return p.detail.with_process(p, q, t, s)

    sums = one.summed, other.summed
    if any(sums):
        both = Linear({At(Base(source), 0): 1.0 for source in (p, q)})

        def at(t: Steps, s: Steps) -> np.ndarray:
            return _added(space, of, sums, t, s, both, (p, q))
    else:
        at = of
    late, c = np.array([each.at(t) for each in ones]), np.array(list(ones.values()))
    early, k = np.array([each.at(s) for each in others]), np.array(list(others.values()))
    total, few = np.zeros(t.shape), 1 if p.detail.filters or q.detail.filters else max(1, AT_ONCE // max(early.size, 1))
    for first in range(0, len(c), few):
        part = slice(first, first + few)
        table = _once(at, *np.broadcast_arrays(late[part, None], early[None]))
        total += np.tensordot(c[part], np.tensordot(k, table, (0, 1)), 1)
    return total


def _once(of: Of, t: Steps, s: Steps) -> np.ndarray:
    """A covariance at pairs of steps of which many are the same."""
    if t.shape[:2] == (1, 1):
        return of(t[0, 0], s[0, 0])[None, None]
    pairs, which = np.unique(np.stack([t.ravel(), s.ravel()]), axis=1, return_inverse=True)
    return of(pairs[0], pairs[1])[which.ravel()].reshape(t.shape)


def _against(space: Space, one: Reading, form: Linear, t: Steps, s: Steps) -> np.ndarray:
    """Cov of a process as it is read at t and a form without processes at s."""
    from procgen.theory.processes import _expression

    p = one.source
    form = form.only(source for source in form.sources if space.dependent(p, source))
    if not form:
        return np.zeros(t.shape)

    def of(t: Steps, s: Steps) -> np.ndarray:
        return p.detail.with_expression(_expression(space, form), t, s)

    if not one.summed:
        return of(one.at(t), s)
    both = form + Linear({At(Base(p), 0): 1.0})
    return _added(space, of, (True, False), t, s, both, (p, form))


def _added(
    space: Space, of: Of, sums: tuple[bool, bool], t: Steps, s: Steps, both: Linear, what: tuple[Source, object]
) -> np.ndarray:
    """Cov at t and s where the marked sides are running sums of what has the covariance `of`."""
    if not t.size:
        return np.zeros(t.shape)
    if steady(space, both):
        return _over_lags(of, sums, t, s)
    rows, columns = (_steps_of(steps, summed) for steps, summed in zip((t, s), sums, strict=True))
    if len(rows) * len(columns) > LARGEST:
        name = what[0].detail.name
        raise Unknown(f"a running sum of {name} is added up over at most {LARGEST:,} pairs of steps")
    key = (*what, sums, rows.tobytes(), columns.tobytes())
    if key not in space.sums:
        if len(space.sums) >= KEPT:
            space.sums.clear()
        space.sums[key] = _table(of, sums, rows, columns)
    table = space.sums[key]
    return table[np.searchsorted(rows, t), np.searchsorted(columns, s)]


def _steps_of(steps: Steps, summed: bool) -> Steps:
    """The steps that are asked for, ascending; of a sum, all from step 0 to the farthest, and some more."""
    if not summed:
        return np.unique(steps)
    low, high = int(steps.min(initial=0)), int(steps.max(initial=0))
    return np.arange(-(1 << (-low).bit_length()) if low else 0, 1 << max(high, 1).bit_length())


def _table(of: Of, sums: tuple[bool, bool], rows: Steps, columns: Steps) -> np.ndarray:
    table = of(*np.meshgrid(rows, columns, indexing="ij"))
    for axis, steps in enumerate((rows, columns)):
        if sums[axis]:
            added = np.cumsum(table, axis=axis)
            table = added - np.take(added, np.searchsorted(steps, [0]), axis=axis)
    return table


def _over_lags(of: Of, sums: tuple[bool, bool], t: Steps, s: Steps) -> np.ndarray:
    """With g(h) the covariance at lag h, G its sums and H theirs: of a sum to t and y(s), G(t - s) - G(-s);
    of x(t) and a sum to s, G(t - 1) - G(t - s - 1); of both, H(t - 1) - H(-1) - H(t - s - 1) + H(-s - 1)."""
    ends: list[tuple[Steps, float]] = [(t - 1, 1.0), (t - s - 1, -1.0)]
    if all(sums):
        ends += [(np.full_like(t, -1), -1.0), (-s - 1, 1.0)]
    elif sums[0]:
        ends = [(t - s, 1.0), (-s, -1.0)]
    low, high = min(int(e.min()) for e, _ in ends), max(int(e.max()) for e, _ in ends)
    if high - low >= LONGEST:
        raise Unknown(f"a running sum of it is added up over at most {LONGEST:,} lags")
    lags = np.arange(low, high + 1)
    added = np.cumsum(of(np.maximum(lags, 0), np.maximum(-lags, 0)))
    if all(sums):
        added = np.cumsum(added)
    total = np.zeros(t.shape)
    for end, sign in ends:
        total += sign * added[end - low]
    return total
