"""Values that repeat where chance repeats none: a value that stays, and a stretch of steps that is there twice.

Runs of one value are followed along each path. Of stretches, those that end in values whose bits say so (one in 16,
or fewer where there are many values) are marked by a hash over their values: wherever a stretch is copied to, the same
ends are marked (Manber 1994, Finding similar files in a large file system). Of too many marks the smallest hashes are
kept, which again are the same in a copy (Broder 1997, On the resemblance and containment of documents).
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.chance.kernel import is_compiling
from procgen.checks.blocks import BLOCK, in_few, in_one_pass, scratch
from procgen.checks.verdict import Check
from procgen.spec.records import dataclass

STUCK, COPIED = "values that stay", "copied stretches"
KEPT = 1 << 17  # marks of a series
SHORTEST, LONGEST = 4, 32  # values in a marked stretch
_OFTEN = 4  # one stretch in 2 ** 4 is marked, at most
_VALUES = 1e10  # as many values as an ensemble may be thought to have
_CERTAIN = 1e-12  # expected number of repeats by chance below which one is no chance
FEW = 4  # so many rarities are no chance
RARITY = _CERTAIN ** (1 / FEW)  # expected at most, of what is a rarity
BEGUN = 16  # before this step values may say that a path begins late, or where it begins: that is another fault
_LIKELY = 0.5  # chance of one more equal value, from which on nothing is said
_MIX = (np.uint64(0x9E3779B97F4A7C15), np.uint64(0xBF58476D1CE4E5B9))
# Terms that add or follow shocks, and those that move without chance: no value of them is held or drawn again.
_MOVING = frozenset({
    "annual", "ar", "arch", "arfima", "arima", "arma", "calendar", "constant", "damped_trend", "egarch", "exp",
    "exponential_trend", "fractional_gaussian_noise", "garch", "geometric_brownian_motion", "gjr_garch", "holidays",
    "integrate", "local_level", "local_linear_trend", "logistic_trend", "ma", "merton", "ornstein_uhlenbeck",
    "random_walk", "seasonal", "seasonal_random_walk", "stochastic_cycle", "stochastic_volatility", "sum", "trend",
    "use", "vector_arma", "vector_error_correction", "white_noise",
})  # fmt: skip

Run = list[int]  # length, minus path, minus first step: a list, as JSON has it


@dataclass(frozen=True)
class Repeats:
    """How likely a value is, at most, to fall into one given cell of its rounding, whatever came before it.

    `values` is about how many there are in all paths: it decides how many stretches are marked.
    """

    chance: float
    values: int = 0
    cell: float = 0.0

    def on(self, cell: float) -> Repeats | None:
        """The same for values that are seen to be rounded to coarser cells; None where these may repeat much."""
        chance = self.chance * cell / self.cell if self.cell else 1.0
        return Repeats(chance, self.values, cell) if chance < _LIKELY else None

    @property
    def ends(self) -> np.uint64:
        """A stretch is marked where the hash of its last values is below this one."""
        bits = max(_OFTEN, math.ceil(math.log2(max(2 * self.values / KEPT, 1))))
        return np.uint64(2 ** (64 - bits) - 1)

    @property
    def length(self) -> int:
        """Values in a stretch that no two places share by chance."""
        return max(SHORTEST, math.ceil(math.log(_CERTAIN / _VALUES**2) / math.log(self.chance)))

    @property
    def stays(self) -> int:
        """Equal values in a row that chance does not make."""
        return max(SHORTEST, 1 + math.ceil(math.log(_CERTAIN / _VALUES) / math.log(self.chance)))


def repeats_of(plan: Any, way: Any, graph: Any, lumpy: bool, values: int) -> Repeats | None:
    """What chance may repeat of a series; None where that is not known, or where it may repeat much.

    `plan`, `way`: its SeriesPlan and its way to its shocks, a Route or the reason why there is none; `values`: about
    how many there are in all paths.
    """
    kinds = {node.term.kind for node in graph.order([graph.series[plan.name]]) if getattr(node, "term", None)}
    drawn = plan.drawn[plan.steps > 0]
    parameters = graph.varied is not None and graph.varied.parameters
    points = any(getattr(source.law, "points", None) is not None for source in _with_laws(plan.theory))
    if not kinds <= _MOVING or lumpy or plan.may_stay or parameters or points:
        return None
    if not drawn.size or not np.isfinite(drawn).all() or not (drawn > 0.0).all() or not np.isfinite(plan.mean).all():
        return None
    far = float(np.max(np.abs(plan.mean))) + 4.0 * math.sqrt(float(drawn.max()))
    cell = max(plan.grain, float(np.spacing(far)))
    kalman = getattr(way, "kalman", None)
    if kalman is not None and way.scores is not None:
        chance = cell / (math.sqrt(2.0 * math.pi) * kalman.roots[-1])  # a normal density at its peak
    else:  # shocks may be much smaller than values, and densities much higher than a normal one
        chance = 1e3 * cell / math.sqrt(float(drawn.min()))
    repeats = Repeats(chance, values, cell)
    return repeats if 0.0 < chance < _LIKELY and repeats.length <= LONGEST else None


def _with_laws(theory: Any) -> Iterator[Any]:
    return (source for source in theory.expression.sources if getattr(source, "law", None) is not None)


@dataclass
class Marks:
    """Marked stretches of a series: hash, last value, path and last step of each; mergeable."""

    hashes: NDArray[np.uint64]
    values: NDArray[np.float64]
    paths: NDArray[np.int64]
    steps: NDArray[np.int64]

    @classmethod
    def none(cls) -> Marks:
        return cls(np.zeros(0, np.uint64), np.zeros(0), np.zeros(0, np.int64), np.zeros(0, np.int64))

    @property
    def arrays(self) -> tuple[NDArray, NDArray, NDArray, NDArray]:
        return self.hashes, self.values, self.paths, self.steps

    def joined(self, *others: Marks) -> Marks:
        """These and others, the KEPT smallest hashes of them, in any order."""
        parts = zip(*(each.arrays for each in (self, *others)), strict=True)
        marks = Marks(*map(np.concatenate, parts))
        if len(marks.hashes) <= KEPT:
            return marks
        last = np.partition(marks.hashes, KEPT - 1)[KEPT - 1]
        marks = marks.at(marks.hashes <= last)
        return marks if len(marks.hashes) == KEPT else marks.ordered().at(slice(KEPT))

    def repeated(self) -> Marks:
        """Those whose hash is there more than once."""
        halves = (self.hashes >> np.uint64(24)).astype(np.uint32)  # half of the bits are sorted in half the time
        some = self.at(np.isin(halves, _twice(halves)))
        return some.at(np.isin(some.hashes, _twice(some.hashes)))

    def ordered(self) -> Marks:
        return self.at(np.lexsort((self.steps, self.paths, self.values, self.hashes)))

    def at(self, which: Any) -> Marks:
        return Marks(*(values[which] for values in self.arrays))


def _twice(values: NDArray) -> NDArray:
    """Those that are there more than once."""
    ordered = np.sort(values)
    return np.unique(ordered[1:][ordered[1:] == ordered[:-1]])


class Watch:
    """What is carried for a range of paths of one series."""

    def __init__(self, repeats: Repeats, first_path: int, paths: int):
        self.length, self.ends, self.first_path, self.step = repeats.length, repeats.ends, first_path, 0
        self.before = np.full((self.length - 1, paths), np.nan)
        self.run = np.ones(paths, dtype=np.int64)
        self.longest: Run = [1, -first_path, 0]
        self.stayed = 0  # values that equal the one before
        self.marks, self.waiting, self.many = Marks.none(), [Marks.none()], 0

    def absorb(self, x: NDArray) -> None:
        """Look at the next tile (steps, paths)."""
        if is_compiling():
            run = self._compiled if x.shape[1] > 1 else self._alone
            run(np.ascontiguousarray(x))
        else:
            rows = np.concatenate([self.before, x])
            same = rows[self.length - 1 :] == rows[self.length - 2 : -1]
            self._follow(x, np.count_nonzero(same, axis=1))
            self._mark(rows)
        self.before = (x if len(x) >= self.length - 1 else np.concatenate([self.before, x]))[1 - self.length :].copy()
        self.step += len(x)

    def _compiled(self, x: NDArray) -> None:
        some, paths = np.empty(len(x), dtype=np.int64), x.shape[1]
        room = Marks(*(scratch(1, x.size, 5 + k)[0].view(each.dtype) for k, each in enumerate(self.marks.arrays)))
        mixed, where, counted = np.empty((4, paths), np.uint64), np.empty(paths, np.int64), np.empty(1, np.int64)
        in_one_pass("marked", self.before, x, self.ends, _MIX, some, *room.arrays, mixed, where, counted)
        self._follow(x, some)
        count = int(counted[0])
        path, step = self.first_path + room.paths[:count], self.step + room.steps[:count]
        self._keep(Marks(room.hashes[:count].copy(), room.values[:count].copy(), path, step))

    def _alone(self, x: NDArray) -> None:
        """The same for one path."""
        room = [scratch(1, x.size, 5 + k)[0].view(kind) for k, kind in enumerate((np.uint64, np.float64, np.int64))]
        mixed, found = scratch(1, 2 * BLOCK, 8)[0].view(np.uint64), np.empty(2, np.int64)
        in_few("marked", self.before[:, 0].copy(), x[:, 0], self.ends, _MIX, *room, mixed, found)
        count = int(found[0])
        hashes, values, steps = (each[:count].copy() for each in room)
        self._keep(Marks(hashes, values, np.full(count, self.first_path), self.step + steps))
        if found[1]:
            self._follow(x, (x[:, 0] == np.concatenate([self.before[-1], x[:-1, 0]])).astype(np.int64))
        else:
            self.run[:] = 1

    def _follow(self, x: NDArray, some: NDArray[np.int64]) -> None:
        """Go on with runs over the steps of a tile; `some`: how many paths have the value of the step before."""
        self.stayed += int(some[max(BEGUN - self.step, 0) :].sum())
        for row in np.flatnonzero(some):
            if row and not some[row - 1]:
                self.run[:] = 1
            last = x[row - 1] if row else self.before[-1]
            self.run = np.where(x[row] == last, self.run + 1, 1)
            path = int(np.argmax(self.run))
            length = int(self.run[path])
            self.longest = max(self.longest, [length, -self.first_path - path, length - 1 - self.step - int(row)])
        if not some[-1]:
            self.run[:] = 1

    def _mark(self, rows: NDArray) -> None:
        mixed = rows[self.length - 3 :].view(np.uint64) * _MIX[0]
        # of the last three values: where they are rounded, single ones are too few to choose among
        end = mixed[1:-1] >> np.uint64(1)
        end ^= mixed[2:]
        mixed >>= np.uint64(2)
        end ^= mixed[:-2]
        step, path = np.divmod(np.flatnonzero(end <= self.ends), rows.shape[1])
        grams = rows[step[:, None] + np.arange(self.length), path[:, None]]
        moving = np.isfinite(grams).all(axis=1) & (grams[:, 0] != grams[:, -1])  # a value that stays is told as one
        step, path, grams = step[moving], path[moving], grams[moving]
        total = np.zeros(len(grams), dtype=np.uint64)
        for column in np.ascontiguousarray(grams.T).view(np.uint64):
            total = (total ^ column ^ (column >> np.uint64(32))) * _MIX[1]
            total ^= total >> np.uint64(29)
        self._keep(Marks(total, grams[:, -1].copy(), self.first_path + path, self.step + step))

    def _keep(self, marks: Marks) -> None:
        self.waiting.append(marks)
        self.many += len(marks.hashes)
        if self.many > KEPT:
            self._settle()

    def _settle(self) -> None:
        self.marks, self.waiting, self.many = self.marks.joined(*self.waiting), [], 0

    def finish(self) -> tuple[Run, Marks]:
        """The longest run of equal values, and the marks."""
        self._settle()
        return self.longest, self.marks


def checks(
    series: str, repeats: Repeats, run: Run, marks: Marks, paths: NDArray, prints: NDArray, stayed: int = 0
) -> Iterator[Check]:
    """Whether some values of a series stay, or are there twice.

    `paths`, `prints`: the fingerprints of whole paths; those that are equal from end to end are told elsewhere.
    `stayed`: how many values equal the one before.
    """
    length, path, step = run[0], -run[1], -run[2]
    fault = ""
    if length >= repeats.stays:
        fault = f"{length:,} equal values in a row at path {path}, steps {step}–{step + length - 1}, as if stuck"
    elif stayed >= FEW and repeats.values * repeats.chance < RARITY:
        fault = (
            f"{stayed:,} values equal the one before bit for bit, such as that of path {path}, step "
            f"{step + length - 1}, as if carried forward"
        )
    yield Check.fact(series, STUCK, "all steps", fault, "no value stays where chance moves it")
    fault = _copied(marks, repeats.length, paths, prints)
    yield Check.fact(series, COPIED, "all pairs", fault, "no stretch of steps was found twice")


def _copied(marks: Marks, length: int, paths: NDArray, prints: NDArray) -> str:
    """The stretch that is there twice with the most marks, in words; nothing where there is none."""
    marks = marks.repeated().ordered()
    same = (marks.hashes[1:] == marks.hashes[:-1]) & (marks.values[1:] == marks.values[:-1])
    order = np.argsort(paths, kind="stable")
    whole = prints[order[np.searchsorted(paths, marks.paths, sorter=order)]]
    found: dict[tuple[int, int, int], list[int]] = {}
    for k in np.flatnonzero(same).tolist():
        one, other, step, later = (int(x) for x in (*marks.paths[k : k + 2], *marks.steps[k : k + 2]))
        if one == other or whole[k] != whole[k + 1]:
            found.setdefault((one, other, later - step), []).append(step)
    if not found:
        return ""
    (one, other, shift), steps = min(found.items(), key=lambda item: (-len(item[1]), item[0]))
    first, last = min(steps) - length + 1, max(steps)
    again = f"at steps {first + shift}–{last + shift}"
    if one != other:
        again = f"in path {other}, steps {first + shift}–{last + shift}"
    more = "" if len(found) == 1 else f"; {len(found):,} such pairs of stretches were found"
    return f"steps {first}–{last} at least of path {one} are there again bit for bit {again}{more}"
