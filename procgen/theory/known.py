"""Deterministic functions of the step: a straight line plus pieces, so that what cancels leaves nothing behind.

The line is kept as two numbers and pieces as named functions with coefficients: the difference of a trend is its slope,
a pattern minus itself one period ago is nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import field, replace
from math import lcm

import numpy as np

from procgen.spec.records import dataclass
from procgen.terms.base import number
from procgen.theory.unknown import Unknown

Steps = np.ndarray
Function = Callable[[Steps], np.ndarray]
LONGEST_SUM = 20_000_000  # a running sum without a closed form is added up to this step
LONGEST_CYCLE = 1 << 20
EARLIEST = 200_000  # steps before step 0 that a lag may read
ROUNDING = 1e-12  # what is flat or straight to this share of its parts counts as such


@dataclass(frozen=True)
class Piece:
    """A function of the step that is no straight line; `periods` (in steps) when it repeats, `note` says what it is."""

    key: tuple
    at: Function = field(compare=False, repr=False)
    periods: frozenset[float] | None = field(default=None, compare=False)
    note: str = field(default="", compare=False)
    settles: bool = field(default=False, compare=False)  # whether it comes to rest, away from a given start

    @property
    def cycle(self) -> int | None:
        """The whole number of steps after which it repeats, if there is one that is short enough."""
        if not self.periods or not all(float(p).is_integer() for p in self.periods):
            return None
        cycle = lcm(*(int(p) for p in self.periods))
        return cycle if cycle <= LONGEST_CYCLE else None

    def lag(self, by: int) -> Piece:
        if self.key[0] == "lag":
            return self.key[3].lag(by + self.key[1])
        by = by % self.cycle if self.cycle else by
        key = ("lag", by, self.key, self)
        return Piece(key, lambda steps: self.at(steps - by), self.periods, self.note, self.settles) if by else self


@dataclass(frozen=True)
class Known:
    """level + slope t + sum of coefficients times pieces."""

    level: float = 0.0
    slope: float = 0.0
    pieces: Mapping[Piece, float] = field(default_factory=dict)
    names: tuple[str, ...] = field(default=(), compare=False)  # of the terms behind the slope
    drawn: Function | None = field(default=None, compare=False, repr=False)  # by the arithmetic of the values, if other

    @property
    def key(self) -> tuple:
        """Equal for functions built alike."""
        return (self.level, self.slope, *sorted(((p.key, c) for p, c in self.pieces.items()), key=repr))

    def __hash__(self) -> int:
        return hash((self.level, self.slope, frozenset(self.pieces.items())))

    @property
    def value(self) -> float | None:
        """The number that it is, when constant."""
        return None if self.slope or self.pieces else self.level

    @property
    def periods(self) -> frozenset[float] | None:
        """Empty for a constant, the periods of what repeats, None for anything else."""
        whole: frozenset[float] = frozenset()
        for piece in self.pieces:
            if piece.periods is None:
                return None
            whole |= piece.periods
        return None if self.slope else whole

    @property
    def settles(self) -> bool:
        """Whether it moves only because of a given start, which it leaves."""
        return not self.slope and all(piece.settles for piece in self.pieces)

    @property
    def notes(self) -> tuple[str, ...]:
        """What makes it move, in words."""
        where = ", ".join(self.names) or "its mean"
        line = (f"trend slope {number(self.slope)} a step in {where}",) if self.slope else ()
        return (*line, *dict.fromkeys(p.note for p in self.pieces))

    def __call__(self, steps: Steps) -> np.ndarray:
        """Values at integer steps of any shape; Unknown where it is not defined."""
        values = self.at(np.asarray(steps, np.int64))
        if np.isnan(values).any():
            raise Unknown("it is read further back than the given past reaches")
        return values

    def at(self, steps: Steps) -> np.ndarray:
        total = np.full(np.shape(steps), self.level)
        if self.slope:
            total = total + self.slope * steps
        for piece, c in self.pieces.items():
            total = total + c * piece.at(steps)
        return total

    def as_drawn(self, steps: Steps) -> np.ndarray:
        """Values to the last bit as they are drawn, which rounding to a grid may hang on."""
        return self.at(steps) if self.drawn is None else self.drawn(steps)

    def __add__(self, other: Known) -> Known:
        pieces = dict(self.pieces)
        for piece, c in other.pieces.items():
            pieces[piece] = pieces.get(piece, 0.0) + c
        return Known(
            self.level + other.level,
            self.slope + other.slope,
            {piece: c for piece, c in pieces.items() if c},
            tuple(dict.fromkeys(self.names + other.names)),
            lambda steps: self.as_drawn(steps) + other.as_drawn(steps),
        )

    def scaled(self, factor: float) -> Known:
        if not factor:
            return Known()
        pieces = {piece: factor * c for piece, c in self.pieces.items()}
        drawn = None if self.drawn is None else lambda steps: factor * self.as_drawn(steps)
        return Known(factor * self.level, factor * self.slope, pieces, self.names, drawn)

    def __mul__(self, other: Known) -> Known:
        for one, rest in ((self, other), (other, self)):
            if one.value is not None:
                return rest.scaled(one.value)
        mine, others = self.periods, other.periods
        periods = None if mine is None or others is None else mine | others
        keys = sorted((self.key, other.key), key=repr)
        note = said(self.notes + other.notes)
        settles = self.settles and other.settles
        drawn = None if self.drawn is None and other.drawn is None else lambda t: self.as_drawn(t) * other.as_drawn(t)
        return replace(whole(("*", *keys), lambda t: self.at(t) * other.at(t), periods, note, settles), drawn=drawn)

    def exp(self) -> Known:
        if self.value is not None:
            return constant(float(_exp(self.value)))
        note = said(self.notes)
        return whole(("exp", self.key), lambda t: _exp(self.at(t)), self.periods, note, self.settles)

    def lag(self, by: int) -> Known:
        pieces: dict[Piece, float] = {}
        for piece, c in self.pieces.items():
            back = piece.lag(by)
            pieces[back] = pieces.get(back, 0.0) + c
        drawn = None if self.drawn is None else lambda steps: self.as_drawn(steps - by)
        return Known(self.level - self.slope * by, self.slope, pieces, self.names, drawn)

    def integrate(self, start: float, name: str) -> Known:
        """y(0) = start, y(t) = y(t-1) + f(t), followed backwards below 0; `name` is whose sum it is."""
        total = Known(start, self.level, names=(name,))
        if self.slope:
            curve = Piece(("triangle",), lambda t: t * (t + 1.0) / 2.0, note=f"a trend is summed in {name}")
            total = total + Known(pieces={curve: self.slope})
        for piece, c in self.pieces.items():
            total = total + _integrated(piece, name).scaled(c)
        return total

    def movement(self, horizon: int) -> Known:
        """The same function over the steps before `horizon`, with pieces that make up a line seen as a line."""
        if not self.pieces:
            return self
        steps = _looked_at(horizon)
        values = self.at(steps)
        size = abs(self.level) + sum(np.abs(c * piece.at(steps)).max() for piece, c in self.pieces.items())
        line = _line(steps, values, ROUNDING * float(size))
        return self if line is None else Known(*line, names=(*self.names, *(p.note for p in self.pieces)))


def said(notes: Iterable[str]) -> str:
    """Notes in one, each once, also where some are several in one."""
    return "; ".join(dict.fromkeys(note for several in notes for note in several.split("; ")))


def constant(value: float) -> Known:
    return Known(float(value))


def whole(
    key: tuple,
    at: Function,
    periods: frozenset[float] | None = None,
    note: str = "a known path",
    settles: bool = False,
) -> Known:
    """A function of one piece."""
    return Known(pieces={Piece(key, at, periods, note, settles): 1.0})


def observed(
    key: tuple,
    at: Function,
    horizon: int,
    name: str,
    period: float | None = None,
    settles: bool = False,
    note: str = "",
) -> Known:
    """A function given as such; a constant or a straight line is recognised, up to `horizon` and before step 0."""
    steps = np.concatenate([-_looked_at(EARLIEST)[:0:-1], _looked_at(horizon)])
    values = np.asarray(at(steps), float)
    if not np.isnan(values).any():
        line = _line(steps, values, ROUNDING * float(np.abs(values).max()))
        if line is not None:
            return Known(*line, names=(name,), drawn=at)
    note = note or (f"period of {period:g} steps in {name}" if period else f"known path of {name}")
    return whole(key, at, frozenset([float(period)]) if period else None, note, settles)


def _looked_at(horizon: int) -> Steps:
    steps = np.arange(min(max(horizon, 3), 1 << 14))
    if horizon > len(steps):
        steps = np.concatenate([steps, np.linspace(len(steps), horizon, 1024).astype(np.int64)])
    return steps


def _line(steps: Steps, values: np.ndarray, tolerance: float) -> tuple[float, float] | None:
    """Level and slope of values that are a straight line."""
    if np.ptp(values) <= tolerance:
        return float(values[0]), 0.0
    slope = (values[-1] - values[0]) / (steps[-1] - steps[0])
    level = values[0] - slope * steps[0]
    straight = np.abs(values - (level + slope * steps)).max() <= tolerance
    return (float(level), float(slope)) if straight else None


def _integrated(piece: Piece, name: str) -> Known:
    """The running sum of a piece, 0 at step 0."""
    cycle = piece.cycle
    if cycle is None:
        return whole(
            ("sum", piece.key), lambda steps: _running(piece.at, steps), note=f"{piece.note}, summed in {name}"
        )
    once = piece.at(np.arange(1, cycle + 1))
    mean = float(once.mean())
    if abs(mean) <= ROUNDING * float(np.abs(once).max()):
        mean = 0.0
    within = np.concatenate([[0.0], np.cumsum(once - mean)[:-1]])
    pattern = whole(("sum", piece.key), lambda steps: within[steps % cycle], piece.periods, piece.note)
    return pattern + Known(slope=mean, names=(name,))


def _running(at: Function, steps: Steps) -> np.ndarray:
    """Sum of f(1) .. f(t), and minus the sum of f(t+1) .. f(0) below 0."""
    low, high = min(int(np.min(steps, initial=0)), 0), max(int(np.max(steps, initial=0)), 0)
    if high - low > LONGEST_SUM:
        raise Unknown(f"the running sum of a known path is added up to step {LONGEST_SUM} only")
    total = np.concatenate([[0.0], np.cumsum(at(np.arange(low + 1, high + 1)))])
    return (total - total[-low])[np.asarray(steps) - low]


def _exp(x: np.ndarray | float) -> np.ndarray:
    """Infinite, quietly, where it is too large for double precision."""
    with np.errstate(over="ignore", under="ignore"):
        return np.exp(x)
