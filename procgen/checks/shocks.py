"""Sums over the recovered shocks of one series: one pass, mergeable, memory free of the number of steps and paths.

Tiles are (steps, paths), and begin at multiples of 64 steps where sums are to have the same bits for every way of
cutting. A :class:`ShockLane` carries what the next tile of the same paths needs.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import field

import numpy as np
from numpy.typing import NDArray

from procgen.chance.kernel import is_compiling
from procgen.checks import apart, farthest
from procgen.checks.blocks import (
    BLOCK,
    GROUP,
    Window,
    across,
    add_lagged,
    add_products,
    all_known,
    compiled,
    in_few,
    in_one_pass,
    room,
    scratch,
)
from procgen.checks.scores import BINS, Scores, cluster_scores
from procgen.checks.stretches import StretchLane, StretchSums
from procgen.checks.uniforms import CELLS_OF_SD, bin_counts, pieces, uniforms
from procgen.spec.records import dataclass

MEMORY_LAGS = (1, 2, 3, 4, 5, 6, 8, 12)
CLUSTER_LAGS = (1, 2, 3, 5)  # `strips` has both written out
STRIP = 32  # paths, and
ROOM = (3040, 2760, 640, 1280, 640, 320)  # numbers to work in, as in `strips`
PROFILE = 65_536  # longest profile over steps; longer series share its entries
FIRST_LAG = 6  # before it are the sums by path that have no lag: of g, g², z, z², asymmetry, neighbours


class ShockLane:
    """What is carried from tile to tile for one range of paths.

    `scores` and `clusters` hold the last rows; `view` and `sizes` are those of both, the newest tile at their end.
    Only where the series is compared with others (`paired`) is all of `sizes` sure to be there.
    """

    def __init__(self, paths: int, lags: Sequence[int] = MEMORY_LAGS, first_path: int = 0, paired: bool = True):
        self.first_path, self.paired = first_path, paired
        self.scores, self.clusters = Window(max(lags), paths), Window(max(CLUSTER_LAGS), paths)
        self.totals = np.zeros((FIRST_LAG + len(lags) + len(CLUSTER_LAGS), paths))
        memory, cluster = (len(each) for each in (MEMORY_LAGS, CLUSTER_LAGS))
        after = FIRST_LAG + len(lags)  # the rows of the sums that `strips` makes; neighbours are not among them
        self.places = np.array([0, 1, 0, 4, *range(FIRST_LAG, FIRST_LAG + memory), *range(after, after + cluster)])
        self.beside = np.zeros(max(paths - 1, 0))  # products with the left neighbour
        self.length = np.zeros(paths, dtype=np.int64)
        self.view = self.sizes = np.empty((0, paths))
        self._earlier: NDArray | None = None
        self.stretches = StretchLane(paths)
        self.clean = 0  # steps without a gap, up to the last one

    def earlier(self) -> NDArray:
        """At each step of the view from its 13th on, the sum of the scores 3 to 12 steps before."""
        if self._earlier is None:
            two = self.view[1:] + self.view[:-1]
            four = two[2:] + two[:-2]
            self._earlier = four[6:-3] + four[2:-7]
            self._earlier += two[:-11]
        return self._earlier

    def close(self) -> None:
        """Give memory back: nothing looks at the scores any more."""
        self.view = self.sizes = self.view[:0]
        self.scores.close()
        self.clusters.close()

    def sound(self) -> bool:
        """Whether all that is held is known."""
        return self.clean >= self.scores.held


@dataclass
class ShockSums:
    """Everything that the tests of recovered shocks read.

    Parameters
    ----------
    scores : Scores
        Of the law of the shocks.
    steps : int
        Steps of the whole series, for the profile along steps.
    lags : sequence of int
        Lags at which the memory of the scores is summed.
    period : int, optional
        Steps after which the series' season repeats.
    """

    scores: Scores
    steps: int
    lags: tuple[int, ...] = MEMORY_LAGS
    period: int | None = None
    n: int = 0
    sums: NDArray = field(default_factory=lambda: np.zeros(2))  # sums of z and z²
    counts: NDArray = field(default_factory=lambda: np.zeros(BINS, dtype=np.int64))
    chains: Counter[int] = field(default_factory=Counter)  # shocks of a path -> paths
    rows: Counter[int] = field(default_factory=Counter)  # known paths side by side in a lane group -> steps
    neighbours: float = 0.0
    paths: NDArray = field(default_factory=lambda: np.zeros(5))  # number, sums of level², spread², level, spread
    outside: int = 0  # shocks where the law has none
    far: list[farthest.Far] = field(default_factory=list)  # the shocks farthest out
    least: float = farthest.LEAST  # no score up to this size is one of the farthest of all
    ends: apart.Ends = field(default_factory=dict)  # the paths farthest from the others

    def __post_init__(self) -> None:
        self.width = -(-self.steps // PROFILE)
        bins = -(-self.steps // self.width)
        self.profile = np.zeros((3, bins))  # count, sum, sum of squares of the scores by step
        self.phases = np.zeros((2, self.period or 0 if self.width > 1 else 0))  # count, sum, where no profile tells
        self.memory = np.zeros((2, len(self.lags)))  # pairs, sum of products
        self.cluster = np.zeros((2, len(CLUSTER_LAGS)))
        self.asymmetry = np.zeros(2)

        self.square = np.zeros(1)  # of the scores
        self.stretches = StretchSums()

    @property
    def stretched(self) -> NDArray:
        return self.stretches.sums

    def lane(self, paths: int, first_path: int = 0, paired: bool = True) -> ShockLane:
        return ShockLane(paths, self.lags, first_path, paired)

    def absorb(self, z: NDArray, first_step: int, lane: ShockLane, x: NDArray | None = None) -> None:
        """Add the shocks of a tile, NaN where there is none, of the values x.

        Where the first of a path are unknown, as those of a variance that begins anywhere, the rest goes at once.
        """
        whole = all_known(z)
        cut = 0 if whole or not is_compiling() else _known_from(z)
        if not 0 < cut < len(z):
            self._absorb(z, first_step, lane, x, whole)
            return
        z, x = z.copy(), z if x is None else x  # it may be of the window, where the first shocks of all are moved up
        windows = lane.scores, lane.clusters
        for window in windows:
            window.next(len(z))  # so that both parts will lie one behind the other
        self._absorb(z[:cut], first_step, lane, x[:cut], False)
        seen = len(lane.view), len(lane.sizes)
        self._absorb(z[cut:], first_step + cut, lane, x[cut:], True)
        lane.view, lane.sizes = (window.newest(n + len(z) - cut) for window, n in zip(windows, seen, strict=True))

    def _absorb(self, z: NDArray, first_step: int, lane: ShockLane, x: NDArray | None, whole: bool) -> None:
        """The same of what is taken in one go; `whole`: whether all shocks are known."""
        lane._earlier, offset = None, 0
        known = z if whole else np.isfinite(z)
        if not whole and not lane.scores.held:  # nothing is carried so far: it begins with the first shock
            offset = int(np.argmax(known.any(axis=1)))
            z, known, x = z[offset:].copy(), known[offset:], None if x is None else x[offset:]  # z may be of the window
            whole = bool(known.all())
            if not known[0].any():
                return
        self.n += z.size if whole else int(np.count_nonzero(known))
        lane.length += len(z) if whole else known.sum(axis=0)
        self.outside += self.scores.outside(z)
        g = self.scores.normal_scores(z)
        at_once = whole and not offset and is_compiling() and lane.sound()
        lane.clean = lane.clean + len(z) if whole else 0
        if at_once:
            run = self._compiled if compiled(z.shape[1]) else self._few
            run(z, g, first_step, lane, z if x is None else x)
            return
        clusters, worst = self._scored(g, known, whole)
        values, first = z if x is None else x, first_step + offset
        self.far = farthest.farthest(g, z, values, lane.first_path, first, self.far, worst, self.least)
        self._single(z, g, lane, offset)
        self._along(g, clusters, lane, offset)
        self._across(g, known, whole, first_step + offset, lane, offset)
        self.stretches.absorb(g, first_step + offset, lane.stretches)

    def _scored(self, g: NDArray, known: NDArray, whole: bool) -> tuple[NDArray, NDArray | None]:
        """Count the uniforms of scores; their cluster scores, and bounds on the sizes of runs of steps, or None."""
        if not (whole and is_compiling() and g.flags.c_contiguous):
            u = uniforms(g)
            self.counts += bin_counts(u if whole else u[known])
            return cluster_scores(u), None
        height = BLOCK if len(g) % BLOCK == 0 else len(g)  # steps that go as one row: of few paths one is short
        rows, clusters = g.reshape(len(g) // height, -1), np.empty(g.shape)
        worst = np.empty(len(rows), np.int64)
        in_one_pass("scored", rows, pieces(), CELLS_OF_SD, self.counts, clusters.reshape(rows.shape), worst)
        return clusters, worst.view(float)

    def _compiled(self, z: NDArray, g: NDArray, first_step: int, lane: ShockLane, x: NDArray) -> None:
        """The same as the rest of `absorb`, where all shocks are known, in one pass."""
        steps, paths = g.shape
        lane.view, lane.sizes = lane.scores.push(g), lane.clusters.room(steps)
        g = lane.view[len(lane.view) - steps :]
        worst, profile, blocks = np.empty(steps, np.int64), np.empty((2, steps)), np.empty((steps // BLOCK, paths))
        squares = self.stretches.takes(first_step, lane.stretches)
        kept = BLOCK if lane.paired else max(CLUSTER_LAGS)
        in_one_pass(
            "strips", lane.view, lane.sizes, steps, kept, pieces(), CELLS_OF_SD, self.counts, worst, lane.totals,
            lane.places, lane.beside, profile, scratch(2 * BLOCK, -(-paths // STRIP), 1).reshape(2, BLOCK, -1),
            np.empty((2, paths)) if squares is None else squares, blocks, room(ROOM), module="strips",
        )  # fmt: skip
        for i, lag in enumerate(self.lags[len(MEMORY_LAGS) :], FIRST_LAG + len(MEMORY_LAGS)):
            add_lagged(lane.totals[i], lane.view, lane.view, lag, steps)
        if not self.scores.gaussian:
            in_one_pass("plain_sums", np.ascontiguousarray(z), lane.totals, scratch(1, paths, 1)[0])
        self._rest(z, g, x, first_step, lane, profile, worst.view(float), None if squares is None else blocks)

    def _few(self, z: NDArray, g: NDArray, first_step: int, lane: ShockLane, x: NDArray) -> None:
        """The same for few paths."""
        steps, paths = g.shape
        clusters, worst = self._scored(g, g, True)
        lane.view, lane.sizes = lane.scores.push(g), lane.clusters.push(clusters)
        profile, blocks = np.empty((2, steps)), np.empty((steps // BLOCK, paths))
        squares = self.stretches.takes(first_step, lane.stretches)
        in_few(
            "summed", lane.view.reshape(-1), lane.sizes.reshape(-1), paths, steps, np.array(self.lags),
            np.array(CLUSTER_LAGS), lane.totals, lane.beside, profile,
            np.empty((2, paths)) if squares is None else squares, blocks, scratch(1, 3 * paths + 4)[0],
        )  # fmt: skip
        if not self.scores.gaussian:
            add_products(lane.totals[2], z, None)
            add_products(lane.totals[3], z, z)
        self._rest(z, g, x, first_step, lane, profile, worst, None if squares is None else blocks)

    def _rest(
        self, z: NDArray, g: NDArray, x: NDArray, first_step: int, lane: ShockLane, profile: NDArray,
        worst: NDArray | None, blocks: NDArray | None,
    ) -> None:  # fmt: skip
        """What is left of a tile of known shocks after its compiled pass; `blocks`, where that took the stretches."""
        steps, paths = g.shape
        self.memory[0] += _pairs(lane.view, self.lags, steps)
        self.cluster[0] += _pairs(lane.sizes, CLUSTER_LAGS, steps)
        self.asymmetry[0] += paths * min(steps, len(lane.view) - 1)
        self._add_profile(np.full(steps, float(paths)), profile, first_step)
        if paths > 1:
            self.rows.update(_all_runs(steps, paths))
        self.far = farthest.farthest(g, z, x, lane.first_path, first_step, self.far, worst, self.least)
        if blocks is None:
            self.stretches.absorb(g, first_step, lane.stretches)
        else:
            self.stretches.add(g, blocks, lane.stretches)

    def _single(self, z: NDArray, g: NDArray, lane: ShockLane, offset: int) -> None:
        add_products(lane.totals[0], g, None, offset)
        add_products(lane.totals[1], g, g, offset)
        if not self.scores.gaussian:
            add_products(lane.totals[2], z, None, offset)
            add_products(lane.totals[3], z, z, offset)

    def _along(self, g: NDArray, clusters: NDArray, lane: ShockLane, offset: int) -> None:
        """Products with earlier steps of the same path."""
        lane.view, squares = lane.scores.push(g), lane.clusters.push(clusters)
        lane.sizes = squares
        rows = lane.totals[FIRST_LAG:]
        for i, lag in enumerate(self.lags):
            self.memory[0, i] += add_lagged(rows[i], lane.view, lane.view, lag, len(g), offset)
        for i, lag in enumerate(CLUSTER_LAGS):
            total = rows[len(self.lags) + i]
            self.cluster[0, i] += add_lagged(total, squares, squares, lag, len(g), offset)
        self.asymmetry[0] += add_lagged(lane.totals[4], squares, lane.view, 1, len(g), offset)

    def _across(self, g: NDArray, known: NDArray, whole: bool, first_step: int, lane: ShockLane, offset: int) -> None:
        """Profile by step, and products with the neighbouring path of the same lane group."""
        paths = g.shape[1]
        counts = np.full(len(g), float(paths)) if whole else known.sum(axis=1).astype(float)
        g = g if whole else np.where(known, g, 0.0)
        square = np.multiply(g, g, out=scratch(*g.shape))
        self._add_profile(counts, (across(g), across(square)), first_step)
        if paths > 1:
            add_products(lane.beside, g[:, 1:], g[:, :-1], offset)
            self.rows.update(_all_runs(len(g), paths) if whole else _runs(known))

    def _add_profile(self, counts: NDArray, sums: Sequence[NDArray] | NDArray, first_step: int) -> None:
        """Add what is known of each step of a tile, one step after another."""
        for row, values in zip(self.profile, (counts, *sums), strict=True):
            if self.width == 1:
                row[first_step : first_step + len(counts)] += values
            else:
                _add_in_turn(row, values, first_step, self.width)
        if self.phases.size:
            for row, values in zip(self.phases, (counts, sums[0]), strict=True):
                _add_by_phase(row, values, first_step)

    def by_phase(self) -> NDArray:
        """Number and sum of the scores at each phase of the period, (2, period)."""
        if self.phases.size or not self.period:
            return self.phases
        phase = np.arange(self.profile.shape[1]) % self.period
        return np.array([np.bincount(phase, weights=row, minlength=self.period) for row in self.profile[:2]])

    def finish(self, lane: ShockLane) -> None:
        """Close a range of paths whose last step has been absorbed."""
        lane.totals[5, 1:] = lane.beside
        lane.totals[5, ::GROUP] = 0.0  # whose left neighbour is of another lane group
        totals = across(lane.totals)
        self.sums += totals[:2] if self.scores.gaussian else totals[2:4]
        self.square += totals[1]
        self.stretches.finish(lane.stretches)
        self.asymmetry[1] += totals[4]
        self.neighbours += float(totals[5])
        self.memory[1] += totals[FIRST_LAG : FIRST_LAG + len(self.lags)]
        self.cluster[1] += totals[FIRST_LAG + len(self.lags) :]
        some = lane.length > 0
        n = np.maximum(lane.length, 1)
        level = np.where(some, lane.totals[0] / np.sqrt(n), 0.0)
        spread = np.where(some, apart.spreads(lane.totals[1], n), 0.0)
        self.paths += across(np.array([some.astype(float), level * level, spread * spread, level, spread]))
        moved = lane.totals[1] > 0.0
        slope = np.where(moved, lane.totals[FIRST_LAG] / np.where(moved, lane.totals[1], 1.0), 0.0) * np.sqrt(n + 2.0)
        self.ends = apart.merged(self.ends, apart.ends_of(level, spread, slope, lane.length, lane.first_path))
        lengths, paths = np.unique(lane.length[some], return_counts=True)
        self.chains.update(dict(zip(lengths.tolist(), paths.tolist(), strict=True)))
        lane.close()

    def merge(self, other: ShockSums) -> None:
        """Add the sums of other paths."""
        self.n += other.n
        self.neighbours += other.neighbours
        self.outside += other.outside
        self.far = farthest.merged([*self.far, *other.far])
        self.ends = apart.merged(self.ends, other.ends)
        self.chains.update(other.chains)
        self.rows.update(other.rows)
        for name in SHOCK_ARRAYS:
            getattr(self, name)[...] += getattr(other, name)


SHOCK_ARRAYS = ("sums", "counts", "paths", "profile", "memory", "cluster", "asymmetry", "square", "stretched", "phases")


def _known_from(z: NDArray) -> int:
    """The first row of a block from which on all of a tile is known."""
    unknown = np.flatnonzero(~np.isfinite(z).all(axis=1))
    return -(-(int(unknown[-1]) + 1) // BLOCK) * BLOCK if unknown.size else 0


def _pairs(view: NDArray, lags: Sequence[int], steps: int) -> NDArray | int:
    """How many pairs of known scores each path has at these lags in the last `steps` of a view."""
    if len(view) - steps >= max(lags):
        return steps * view.shape[1]
    return np.array([max(min(steps, len(view) - lag), 0) for lag in lags]) * view.shape[1]


def _add_in_turn(row: NDArray, values: NDArray, first: int, width: int) -> None:
    """Add values that begin at place `first` to the entries of a row that `width` of them share, in their order."""
    if is_compiling():
        in_few("in_turn", row, np.ascontiguousarray(values), first, width)
        return
    head = min(-first % width, len(values))
    whole = head + (len(values) - head) // width * width
    for start, end in ((0, head), (head, whole), (whole, len(values))):
        if start < end:
            some = values[start:end].reshape(-1, min(width, end - start))
            entries = slice((first + start) // width, (first + start) // width + len(some))
            row[entries] = np.add.accumulate(np.column_stack([row[entries], some]), axis=1)[:, -1]


def _add_by_phase(row: NDArray, values: NDArray, first: int) -> None:
    """Add values that begin at step `first` to the entries of their phases, in their order: one round after another."""
    period, begin = len(row), first % len(row)
    rounds = np.zeros((-(-(begin + len(values)) // period) + 1, period))
    rounds[0], rounds[1:].reshape(-1)[begin : begin + len(values)] = row, values
    row[:] = np.add.accumulate(rounds, axis=0)[-1]


def _runs(known: NDArray) -> dict[int, int]:
    """Lengths of the runs of known paths (steps, paths) within lane groups, and how often each occurs."""
    steps, paths = known.shape
    groups = -(-paths // GROUP)
    padded = np.zeros((steps, groups, GROUP + 1), dtype=np.int8)
    wide = np.zeros((steps, groups * GROUP), dtype=np.int8)
    wide[:, :paths] = known
    padded[:, :, :GROUP] = wide.reshape(steps, groups, GROUP)
    edges = np.flatnonzero(np.diff(padded.ravel(), prepend=0))
    lengths, counts = np.unique(edges[1::2] - edges[::2], return_counts=True)
    return dict(zip(lengths.tolist(), counts.tolist(), strict=True))


def _all_runs(steps: int, paths: int) -> dict[int, int]:
    """The same where all of so many paths are known: whole lane groups, and what is left of one."""
    return {length: steps * times for length, times in ((GROUP, paths // GROUP), (paths % GROUP, 1)) if length * times}
