"""Linear forms: what a linear series is made of, besides its mean.

A form is a sum of coefficients times *keys*:

    At(base, d)      the base process d steps ago,
    Frozen(base, j)  its value j steps before step 0, for ever,
    Sum(key)         the running sum of a key from step 1 on: 0 at step 0, and followed backwards below it,
    Season(form, s)  the sum T(t) = T(t - s) + form(t) from step 1 on: 0 at the s steps up to step 0, likewise below.

A base is an autoregression of one source, w = e / phi(B); a moving average is a form in delays of its base. Sums
are only kept of a base itself: the sum of a delayed base and a delayed sum are rewritten by

    Sum(w)(t - d) = Sum(w)(t) - w(t) - ... - w(t - d + 1)                        (two-sided start)
    sum of w(k - d), k = 1..t  =  Sum(w)(t) - [w(t) + ... + w(t - d + 1)] + [w(0) + ... + w(1 - d)]

so that the difference of a walk *is* its increment, a difference summed again holds no sum at all, and
what cancels leaves no key behind. A seasonal sum is of a form as it stands, kept at delays below s by

    T(t - s) = T(t) - form(t)

so that its seasonal difference is the form again.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from math import comb
from typing import Any, NamedTuple

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory.sources import Source

FEW = 4096  # so many delays are differenced one by one


@dataclass(frozen=True, eq=False)
class Base:
    """The autoregression w = e / phi(B) of a source; `started` ones are 0 before step 0. One object each."""

    source: Source
    phi: tuple[float, ...] = ()
    started: bool = False


class At(NamedTuple):
    base: Base
    delay: int
    tag: str = "at"


class Frozen(NamedTuple):
    base: Base
    back: int
    tag: str = "frozen"


class Sum(NamedTuple):
    of: Key
    tag: str = "sum"


class Season(NamedTuple):
    of: Linear  # all of one base
    every: int
    delay: int = 0  # below `every`
    tag: str = "season"


Key = At | Frozen | Sum | Season


def below(key: Key) -> Iterator[Key]:
    """A key and all that it is a sum of, inner ones first."""
    if isinstance(key, Sum):
        yield from below(key.of)
    elif isinstance(key, Season):
        for inner in key.of:
            yield from below(inner)
    yield key


def base_of(key: Key) -> Base:
    while isinstance(key, Sum | Season):
        key = key.of if isinstance(key, Sum) else next(iter(key.of))
    return key.base


class Linear(Mapping[Key, float]):
    """A linear form, keys to coefficients; immutable, zero coefficients dropped, equal when they are."""

    __slots__ = ("_coefficients", "_hash", "_sources")

    def __init__(self, coefficients: Mapping[Any, float] | None = None):
        self._coefficients: dict[Key, float] = {key: c for key, c in (coefficients or {}).items() if c != 0.0}
        self._hash: int | None = None
        self._sources: dict[Source, None] | None = None

    def __getitem__(self, key: Key) -> float:
        return self._coefficients[key]

    def __iter__(self) -> Iterator[Key]:
        return iter(self._coefficients)

    def __len__(self) -> int:
        return len(self._coefficients)

    def __hash__(self) -> int:
        if self._hash is None:
            self._hash = hash(frozenset(self._coefficients.items()))
        return self._hash

    def __add__(self, other: Linear) -> Linear:
        total = dict(self._coefficients)
        for key, c in other.items():
            total[key] = total.get(key, 0.0) + c
        return Linear(total)

    def scaled(self, factor: float) -> Linear:
        return self if factor == 1.0 else Linear({key: factor * c for key, c in self.items()})

    def lag(self, by: int) -> Linear:
        if by == 0:
            return self
        total: dict[Key, float] = {}
        for key, c in self.items():
            if isinstance(key, At):
                _add(total, At(key.base, key.delay + by), c)
            elif isinstance(key, Season):
                _add_form(total, _seasons_ago(key, by), c)
            else:
                _add(total, key, c)
                if isinstance(key, Sum):
                    _window(total, key.of, by, 0, -c)
        return Linear(total)

    def difference(self, by: int, order: int) -> Linear:
        """(1 - B^by)^order of the form; sums turn into windows at once, delays are differenced as arrays."""
        if order == 0:
            return self
        total: dict[Key, float] = {}
        delays: dict[Base, dict[int, float]] = {}
        rest: dict[Key, float] = {}
        for key, c in self.items():
            if isinstance(key, At):
                delays.setdefault(key.base, {})[key.delay] = c
            else:
                rest[key] = c
        for base, weights in delays.items():
            for delay, c in _differenced(weights, by, order).items():
                _add(total, At(base, delay), c)
        if rest:
            once = Linear(rest) + Linear(rest).lag(by).scaled(-1.0)
            _add_form(total, once.difference(by, order - 1), 1.0)
        return Linear(total)

    def integrate(self) -> Linear:
        """The running sum from step 1 on, split over the keys."""
        total: dict[Key, float] = {}
        delays: dict[Base, dict[int, float]] = {}
        for key, c in self.items():
            if isinstance(key, At):
                delays.setdefault(key.base, {})[key.delay] = c
            else:
                _add(total, Sum(key), c)
        for base, by_delay in delays.items():
            weights = np.zeros(max(by_delay) + 1)
            weights[list(by_delay)] = list(by_delay.values())
            later = np.cumsum(weights[::-1])[::-1]  # later[j] = sum of the coefficients at delays >= j
            _add(total, Sum(At(base, 0)), float(later[0]))
            for j, c in enumerate(later[1:].tolist()):  # the coefficients at delays above j
                _add(total, At(base, j), -c)
                if j == 0 or not base.started:
                    _add(total, Frozen(base, j), c)
        return Linear(total)

    def integrate_seasons(self, every: int) -> Linear:
        """The sum over steps `every` apart from step 1 on, split over the bases."""
        parts: dict[Base, dict[Key, float]] = {}
        for key, c in self.items():
            parts.setdefault(base_of(key), {})[key] = c
        return Linear({Season(Linear(part), every): 1.0 for part in parts.values()})

    def only(self, sources: Iterable[Source]) -> Linear:
        """The part that is driven by these sources."""
        chosen = set(sources)
        if chosen >= self.sources.keys():
            return self
        return Linear({key: c for key, c in self.items() if base_of(key).source in chosen})

    @property
    def sources(self) -> dict[Source, None]:
        """The sources, in order of first appearance."""
        if self._sources is None:
            self._sources = {base_of(key).source: None for key in self}
        return self._sources

    @property
    def is_plain(self) -> bool:
        """No running sum and nothing that starts at step 0: covariances follow from autocovariances."""
        return not any(isinstance(key, Sum | Season) or base_of(key).started for key in self)


def _add(total: dict[Key, float], key: Key, c: float) -> None:
    total[key] = total.get(key, 0.0) + c


def _add_form(total: dict[Key, float], form: Linear, c: float) -> None:
    for key, weight in form.items():
        _add(total, key, c * weight)


def _differenced(weights: dict[int, float], by: int, order: int) -> dict[int, float]:
    """Weights by delay of (1 - B^by)^order of a sum of delays."""
    if len(weights) * (order + 1) <= FEW:  # perhaps far apart
        total: dict[int, float] = {}
        for turn in range(order + 1):
            for delay, c in weights.items():
                at = delay + turn * by
                total[at] = total.get(at, 0.0) + (-1.0) ** turn * comb(order, turn) * c
        return total
    dense = np.zeros(max(weights) + order * by + 1)
    dense[list(weights)] = list(weights.values())
    for _ in range(order):
        dense[by:] -= dense[:-by].copy()
    (where,) = np.nonzero(dense)
    return dict(zip(where.tolist(), dense[where].tolist(), strict=True))


def _seasons_ago(key: Season, by: int) -> Linear:
    """A seasonal sum `by` steps ago: whole seasons are taken off summand by summand."""
    turns, delay = divmod(key.delay + by, key.every)
    total: dict[Key, float] = {key._replace(delay=delay): 1.0}
    for turn in range(turns):
        _add_form(total, key.of.lag(delay + turn * key.every), -1.0)
    return Linear(total)


def _window(total: dict[Key, float], key: Key, by: int, order: int, scale: float) -> None:
    """Add scale times the sum over j < by of binomial(by - 1 - j, order) times the key delayed by j.

    For a sum the delayed key is Sum(k)(t) - window of k, which raises the order by one:
    sum over i < j < by of binomial(by - 1 - j, m) = binomial(by - 1 - i, m + 1).
    """
    if isinstance(key, At):
        for j in range(by - order):
            _add(total, At(key.base, key.delay + j), scale * comb(by - 1 - j, order))
        return
    if isinstance(key, Season):
        for j in range(by - order):
            _add_form(total, _seasons_ago(key, j), scale * comb(by - 1 - j, order))
        return
    _add(total, key, scale * comb(by, order + 1))
    if isinstance(key, Sum):
        _window(total, key.of, by, order + 1, -scale)
