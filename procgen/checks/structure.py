"""Facts about the values as they stand: finite, of the declared precision, and no path the copy of another."""

from __future__ import annotations

import math
from collections.abc import Container, Iterator, Mapping, Sequence
from dataclasses import field

import numpy as np
from numpy.typing import NDArray

from procgen.chance.kernel import is_compiling
from procgen.checks import copies, extremes, grids, support
from procgen.checks.blocks import in_few, in_one_pass
from procgen.checks.copied import Copied
from procgen.checks.prints import equal, fingerprint, weights
from procgen.checks.verdict import Check
from procgen.checks.words import many, number
from procgen.spec.records import dataclass

_AT_ONCE = 1 << 14  # sampled values that are looked at together
_PATHS, _ENOUGH = 16, 1024  # every so manieth path's, where there are so many left
_SAMPLE = 61  # every so manieth step's bits are looked at for a detour through float32; at least 32 steps
_SPACING = {"float32": 2.0**-24 + 4e-16}  # how far, of its size, a stored decimal number may lie from itself
_UNSEEN = (0, 0, 0, 0)  # values that fit float32, whole ones, all, those that fit float16
_MOST = 0.9  # share of values that must be rounded
_CELLS = 100  # of double precision, over which values spread that are not of some other type by chance
_CERTAIN = 1e-12  # expected number of equal pairs below which one equal pair is no chance
_WHOLE = 2.0**40  # size beyond which a number may have no digits after the point without being rounded
ZEROS = "values that are 0"
_WHOLE_NUMBERS = "values are rounded to whole numbers, where no rounding (`decimals: 0`) is declared"


@dataclass
class Precision:
    """What one series declares: `decimals` or None, its type, and whether chance moves it at all."""

    name: str
    type: str
    decimals: int | None
    random: bool
    discrete: bool = False  # few values: float32 may hold them all, and paths may be equal
    reach: extremes.Reach | None = None  # how far values may lie from their mean
    gaps: bool = False  # whether values may be missing
    repeats: copies.Repeats | None = None  # what chance may repeat of it, where that is known to be little
    possible: support.Possible = field(default_factory=support.Possible)  # what its values may be
    smooth: bool = True  # whether by its terms no value of it lies on a grid, so that one that does tells of rounding
    cell: float = 0.0  # how far apart values are in double precision itself, where that shows


@dataclass
class Structure:
    """Facts gathered along the pass, for all series together."""

    series: Sequence[Precision]
    steps: int = 1  # of the whole ensemble
    not_finite: dict[str, list[int]] = field(default_factory=dict)  # series -> [count, path, step of the first]
    off_grid: dict[str, list[int]] = field(default_factory=dict)
    narrow: dict[str, list[int]] = field(default_factory=dict)  # series -> counts of values, as _UNSEEN has them
    grids: dict[str, dict[str, int]] = field(default_factory=dict)  # series -> values on a grid, by its spacing
    far: dict[str, list[extremes.Far]] = field(default_factory=dict)  # series -> its values farthest from their mean
    beyond: dict[str, list[int]] = field(default_factory=dict)  # series -> numbers of values outside, and absurd ones
    outside: dict[str, support.Found] = field(default_factory=dict)  # series -> values that it cannot give
    moved: dict[str, support.Found] = field(default_factory=dict)  # series -> values that should have been held
    zeros: dict[str, list[int]] = field(default_factory=dict)  # series -> [count, path, step] of zeros
    ends: dict[str, list[float]] = field(default_factory=dict)  # series -> the least and the largest value of a sample
    runs: dict[str, copies.Run] = field(default_factory=dict)  # series -> its longest run of one value
    stayed: dict[str, int] = field(default_factory=dict)  # series -> values that equal the one before
    marks: dict[str, copies.Marks] = field(default_factory=dict)  # series -> stretches that would show in a copy
    prints: list[tuple[int, NDArray[np.uint64]]] = field(default_factory=list)  # (first path, (paths, series))
    least: dict[str, float] = field(default_factory=dict)  # series -> below it no value is one of the farthest of all
    _samples: dict[str, list[NDArray]] = field(default_factory=dict, repr=False)  # not looked at so far

    def absorb(
        self, column: int, x: NDArray, first_path: int, first_step: int, prints: NDArray[np.uint64]
    ) -> tuple[NDArray, NDArray] | None:
        """Look at a tile (steps, paths) of one series; `prints` (paths,) is updated.

        The least and the largest value of each step, None where not all is finite.
        """
        what = self.series[column]
        ends, zeros = _looked(x, first_step, prints)
        begun = max(copies.BEGUN - first_step, 0)
        if what.repeats is not None and zeros is not None and zeros[begun:].any():
            here = x == 0.0
            here[:begun] = False
            _note(self.zeros, what.name, here, first_path, first_step)
        wrong = None if ends is not None else np.isinf(x) if what.gaps else ~np.isfinite(x)
        if wrong is not None and wrong.any():
            _note(self.not_finite, what.name, wrong, first_path, first_step)
        if what.decimals is not None and abs(what.decimals) <= 15:
            with np.errstate(over="ignore", invalid="ignore"):
                scaled = x * 10.0**what.decimals
                off = np.abs(scaled - np.rint(scaled)) > 1e-9 + _SPACING.get(what.type, 4e-16) * np.abs(scaled)
            if off.any():
                _note(self.off_grid, what.name, off, first_path, first_step)
        elif what.type != "int64" and what.random and not what.discrete:
            stride = max(1, min(_SAMPLE, self.steps // 32))
            apart = 1 if what.reach is None else max(1, min(_PATHS, what.reach.n // (self.steps * _ENOUGH)))
            sample = x[-first_step % stride :: stride, -first_path % apart :: apart]
            self._samples.setdefault(what.name, []).append(sample[~np.isnan(sample)] if what.gaps else sample.flatten())
            if sum(part.size for part in self._samples[what.name]) >= _AT_ONCE:
                self._look_closer(what.name)
        if what.reach is not None:
            known, least = self.far.get(what.name, []), self.least.get(what.name, 0.0)
            self.far[what.name], more = what.reach.look(x, first_path, first_step, known, ends, least)
            self.beyond[what.name] = [a + b for a, b in zip(self.beyond.get(what.name, (0, 0)), more, strict=True)]
        outside = what.possible.outside(x)
        if outside is not None:
            support.note(self.outside, what.name, outside, x, first_path, first_step)
        return ends

    def _look_closer(self, name: str) -> None:
        """Count what the sampled values of a series that wait for it might be rounded to."""
        sample = np.concatenate(self._samples.pop(name))
        with np.errstate(over="ignore", invalid="ignore"):
            fits = int(np.count_nonzero(sample.astype(np.float32) == sample))
            small = np.abs(sample) < _WHOLE
            whole = int(np.count_nonzero((np.rint(sample) == sample) & small))
            half = int(np.count_nonzero(sample.astype(np.float16) == sample)) if fits else 0
        seen = self.narrow.setdefault(name, [0] * len(_UNSEEN))
        for k, count in enumerate((fits, whole, sample.size, half)):
            seen[k] += count
        grid, count = grids.spacing(sample)
        if grid:
            mine = self.grids.setdefault(name, {})
            mine[grid] = mine.get(grid, 0) + count
        if sample.size:
            ends = [float(np.fmin.reduce(sample)), float(np.fmax.reduce(sample))]
            self.ends[name] = _wider(self.ends.get(name), ends)

    def hold(self, column: int, x: NDArray, before: NDArray | None, first_path: int, first_step: int) -> None:
        """Look whether a tile (steps, paths) is held as stated; `before` is the row (1, paths) before it."""
        moved = self.series[column].possible.moved(x, before, first_step)
        if moved is not None:
            support.note(self.moved, self.series[column].name, moved, x, first_path, first_step)

    def watches(self, first_path: int, paths: int) -> dict[int, copies.Watch]:
        """Of each column whose values chance does not repeat, what is carried for a range of paths."""
        known = {column: what.repeats for column, what in enumerate(self.series)}
        return {column: copies.Watch(one, first_path, paths) for column, one in known.items() if one is not None}

    def watched(self, watches: Mapping[int, copies.Watch]) -> None:
        """Take what was seen of a range of paths."""
        for column, watch in watches.items():
            name = self.series[column].name
            self.runs[name], self.marks[name] = watch.finish()
            self.stayed[name] = watch.stayed

    def close(self, first_path: int, prints: NDArray[np.uint64]) -> None:
        for name in [*self._samples]:
            self._look_closer(name)
        self.prints.append((first_path, prints))

    def printed(self) -> dict[str, NDArray]:
        """The fingerprints as named arrays."""
        first = np.array([path for path, _ in self.prints], dtype=np.int64)
        sizes = np.array([len(rows) for _, rows in self.prints], dtype=np.int64)
        none = np.zeros((0, len(self.series)), dtype=np.uint64)
        prints = {"first": first, "sizes": sizes, "prints": np.concatenate([none, *(rows for _, rows in self.prints)])}
        marks = {f"{k} of marks, {name}": x for name, each in self.marks.items() for k, x in enumerate(each.arrays)}
        return prints | marks

    def take_prints(self, arrays: Mapping[str, NDArray]) -> None:
        """Take over what `printed` gave."""
        for name in self.runs:
            self.marks[name] = copies.Marks(*(arrays[f"{k} of marks, {name}"] for k in range(4)))
        rows = np.split(arrays["prints"], np.cumsum(arrays["sizes"])[:-1])
        self.prints = list(zip(arrays["first"].tolist(), rows, strict=True)) if len(arrays["first"]) else []

    def fingerprints(self) -> tuple[NDArray, NDArray[np.uint64]]:
        """Path numbers and their fingerprints (paths, series)."""
        paths = np.concatenate([first + np.arange(len(rows)) for first, rows in self.prints])
        return paths, np.concatenate([rows for _, rows in self.prints])

    def merge(self, other: Structure) -> None:
        books = (self.not_finite, other.not_finite), (self.off_grid, other.off_grid), (self.zeros, other.zeros)
        for mine, theirs in books:
            for name, (count, path, step) in theirs.items():
                old = mine.setdefault(name, [0, path, step])
                mine[name] = [old[0] + count, *min((old[1], old[2]), (path, step))]
        for name, counts in other.narrow.items():
            self.narrow[name] = [a + b for a, b in zip(self.narrow.get(name, _UNSEEN), counts, strict=True)]
        for name, found in other.grids.items():
            known = self.grids.setdefault(name, {})
            known.update({grid: known.get(grid, 0) + n for grid, n in found.items()})
        for name, ends in other.ends.items():
            self.ends[name] = _wider(self.ends.get(name), ends)
        for name, values in other.far.items():
            self.far[name] = extremes.merged([*self.far.get(name, ()), *values])
        for name, counts in other.beyond.items():
            self.beyond[name] = [a + b for a, b in zip(self.beyond.get(name, (0, 0)), counts, strict=True)]
        support.merge(self.outside, other.outside)
        support.merge(self.moved, other.moved)
        for name, run in other.runs.items():
            self.runs[name] = max(self.runs.get(name, run), run)
            self.stayed[name] = self.stayed.get(name, 0) + other.stayed[name]
            self.marks[name] = self.marks.get(name, copies.Marks.none()).joined(other.marks[name])
        self.prints += other.prints

    def checks(self, chance_of_equal: dict[str, float]) -> Iterator[Check]:
        """The facts as checks; `chance_of_equal` gives the probability that two paths of a series are equal."""
        marked = set()
        for what in self.series:
            yield self._finite(what)
            yield self._precision(what)
            yield from self._zeros(what)
            yield from support.checks(what.name, what.possible, self.outside.get(what.name), self.moved.get(what.name))
            if what.reach is not None:
                n = self.steps * sum(len(rows) for _, rows in self.prints)
                beyond = self.beyond.get(what.name, (0, 0))
                for check in extremes.checks(what.name, what.reach, self.far.get(what.name, ()), n, beyond):
                    if check.note.endswith(extremes.MARK):
                        marked.add(what.name)
                    yield check
        if self.prints:
            yield from self._copies(chance_of_equal)
            yield from self._repeats(marked)

    def _finite(self, what: Precision) -> Check:
        fault, name = "", what.name
        if name in self.not_finite:
            count, path, step = self.not_finite[name]
            are = "s are" if count > 1 else " is"
            fault = f"{count:,} value{are} not finite, the first at path {path}, step {step}"
        every = "every value that is there" if what.gaps else "every value"
        return Check.fact(name, "finite values", "all steps", fault, f"{every} is a finite number")

    def _zeros(self, what: Precision) -> Iterator[Check]:
        n = self.steps * sum(len(rows) for _, rows in self.prints)
        if what.repeats is None or n * what.repeats.chance > copies.RARITY:
            return
        count, path, step = self.zeros.get(what.name, (0, -1, -1))
        low, high = self.ends.get(what.name, (-1.0, 1.0))
        fault = (
            f"{count:,} values are exactly 0, the first at path {path}, step {step}, as if it stood for what is missing"
        )
        fits, _, seen, _ = self.narrow.get(what.name, _UNSEEN)
        grid = self._grid(what)
        coarser = what.repeats if grid is None else what.repeats.on(grid)
        by_chance = coarser is None or not _unlikely(count, n * coarser.chance)
        if count and (fits > _MOST * seen or (grid is not None and by_chance)):
            note = "values are rounded, so that 0 may be one of them"
            yield Check(what.name, ZEROS, "all steps", "structure", outcome="untestable", note=note)
            return
        fault = fault if count >= copies.FEW and low < high else ""
        yield Check.fact(what.name, ZEROS, "all steps", fault, "as good as no value is exactly 0")

    def _precision(self, what: Precision) -> Check:
        declared = what.type if what.decimals is None else f"{what.type}, {what.decimals} decimals"
        fault = ""
        if what.decimals is not None and what.name in self.off_grid:
            count, path, step = self.off_grid[what.name]
            fault = (
                f"{count:,} value{'s have' if count > 1 else ' has'} more than the {many(what.decimals, 'decimal')} "
                f"declared, the first at path {path}, step {step}"
            )
        fits, whole, seen, half = self.narrow.get(what.name, _UNSEEN)
        low, high = self.ends.get(what.name, (math.nan, math.nan))
        apart = not what.cell or high - low > _CELLS * what.cell  # else double precision itself makes them few
        told, grid = what.smooth and what.type == "float64" and seen >= 32 and apart, self._grid(what)
        by_itself = bool(what.cell and self.grids.get(what.name)) and grid is None  # the grid of double precision
        narrow = told and max(fits, whole) > _MOST * seen and not by_itself
        if narrow and grid is None:
            type = "float16" if half > _MOST * seen else "float32"
            mend = "" if type == "float16" else "; write `type: float32` if that is meant"
            fault = f"values went through {type} (all fit in it), where float64 is declared{mend}"
        elif grid is not None and (narrow or self._makes_repeats(what, grid)):
            fault = _WHOLE_NUMBERS if grid == 1.0 else grids.said(grid)
        if what.type == "float32" and fits < seen:
            fault = "values are finer than float32, which is declared"
        if what.smooth and low == high and seen >= 32 and apart:
            fault = f"all values are {number(low, 6)}"
        return Check.fact(what.name, "precision", "all steps", fault, f"as declared: {declared}")

    def _grid(self, what: Precision) -> float | None:
        """The spacing of the grid that values are seen to lie on though none is declared; None where they do not."""
        _, whole, seen, _ = self.narrow.get(what.name, _UNSEEN)
        if what.decimals is not None or seen < 32 or not what.smooth:
            return None
        found = max(self.grids.get(what.name, {}).items(), key=lambda item: item[1], default=("", 0))
        grid = float(found[0]) if found[1] > _MOST * seen else 1.0 if whole > _MOST * seen else 0.0
        return grid if grid > 1.5 * what.cell else None

    def _makes_repeats(self, what: Precision, grid: float) -> bool:
        """Whether values repeat as those of the declared precision do not, and those on a grid do."""
        coarser = what.repeats.on(grid) if what.repeats is not None else None
        declared = [row for row in self._repeated(what, what.repeats) if row.outcome == "departs"]
        still = {row.what for row in self._repeated(what, coarser) if row.outcome == "departs"}
        return any(row.what not in still for row in declared)

    def _repeated(self, what: Precision, repeats: copies.Repeats | None) -> list[Check]:
        """The checks of values that repeat, with the chance of that which is given."""
        if repeats is None or what.name not in self.runs or not self.prints:
            return []
        column = list(self.series).index(what)
        paths, prints = self.fingerprints()
        run, marks = self.runs[what.name], self.marks[what.name]
        stayed = self.stayed[what.name]
        return list(copies.checks(what.name, repeats, run, marks, paths, prints[:, column], stayed))

    def _copies(self, chance_of_equal: dict[str, float]) -> Iterator[Check]:
        prints = np.concatenate([rows for _, rows in sorted(self.prints, key=lambda item: item[0])])
        paths = np.concatenate(
            [first + np.arange(len(rows)) for first, rows in sorted(self.prints, key=lambda item: item[0])]
        )
        if len(paths) < 2:
            return
        for column, what in enumerate(self.series):
            if not what.random:
                continue
            copies, first, second = equal(prints[:, column], paths)
            expected = chance_of_equal.get(what.name, 0.0) * math.comb(len(paths), 2)
            if copies and expected > _CERTAIN:
                note = f"{copies} equal paths, but pairs may be equal by chance: values are rounded or can be held"
                yield Check(what.name, "copied paths", "all pairs", "structure", outcome="untestable", note=note)
                continue
            fault = ""
            if copies:
                many = f"{copies} paths repeat another one" if copies > 1 else "one path repeats another one"
                fault = f"{many} bit for bit, such as paths {first} and {second}"
            check = Check.fact(what.name, "copied paths", "all pairs", fault, "no two paths are the same")
            check.copied = Copied.of(prints[:, column]) if copies else None
            yield check

    def _repeats(self, marked: Container[str]) -> Iterator[Check]:
        """Whether values repeat; in `marked` series one value stands for what is missing, which is told already.

        Where values are seen to be rounded, more may repeat by chance than where they are as declared.
        """
        for what in self.series:
            rows, grid = self._repeated(what, what.repeats), self._grid(what)
            doubts = {copies.STUCK: "one value marks what is missing"} if what.name in marked else {}
            if what.repeats is not None and grid is not None:
                coarser = what.repeats.on(grid)
                rows = rows if coarser is None else self._repeated(what, coarser)
                if coarser is None or coarser.length > what.repeats.length:
                    doubts[copies.COPIED] = "values are rounded, so that so few may be there twice by chance"
                if coarser is None:
                    doubts[copies.STUCK] = "values are rounded, so that they may stay by chance"
            for row in rows:
                if row.outcome == "departs" and row.what in doubts:
                    row.outcome, row.note = "untestable", doubts[row.what]
                yield row


def _unlikely(count: int, expected: float) -> bool:
    """Whether so many rarities are no chance: at least n of them have a chance of at most expected^n / n!."""
    return count * math.log(max(expected, 1e-300)) - math.lgamma(count + 1) < math.log(_CERTAIN)


def _note(book: dict[str, list[int]], name: str, where: NDArray, first_path: int, first_step: int) -> None:
    path, step = (int(k) for k in np.argwhere(where.T)[0])
    place = (first_path + path, first_step + step)
    old = book.setdefault(name, [0, *place])
    book[name] = [old[0] + int(np.count_nonzero(where)), *min((old[1], old[2]), place)]


def _wider(a: Sequence[float] | None, b: Sequence[float]) -> list[float]:
    return list(b) if a is None else [float(np.fmin(a[0], b[0])), float(np.fmax(a[1], b[1]))]


def _looked(
    x: NDArray, first_step: int, prints: NDArray[np.uint64]
) -> tuple[tuple[NDArray, NDArray] | None, NDArray | None]:
    """The extremes of each step, None where not all is finite; its zeros, or None; `prints` takes fingerprints."""
    if is_compiling() and x.shape[1] == 1:
        values, found = np.ascontiguousarray(x)[:, 0], np.empty(2, np.int64)
        in_few("looked", values, first_step, prints, found)
        return None if found[1] else (values, values), (values == 0.0).astype(np.int64) if found[0] else None
    if is_compiling():
        low, high, zeros = found = np.empty((3, len(x)), dtype=np.int64)
        in_one_pass("looked", np.ascontiguousarray(x), weights(first_step, len(x)), prints, low, high, zeros)
        low, high = found[:2].view(float)
    else:
        prints += fingerprint(x, first_step)
        low, high, zeros = x.min(axis=1), x.max(axis=1), np.count_nonzero(x == 0.0, axis=1)
    finite = np.isfinite(low).all() and np.isfinite(high).all()
    return (low, high) if finite else None, zeros
