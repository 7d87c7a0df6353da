"""One pass over the data: blocks of values in, sums out. Memory follows the widest block, not the ensemble.

Blocks come as (first_path, first_step, {series: (paths, steps)}); the blocks of one range of paths come in the order
of their steps. A lane carries everything that a range of paths needs from one block to the next. Which paths share a
lane, and where its tiles begin, does not show in the sums.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from contextlib import nullcontext
from itertools import chain

import numpy as np
from numpy.typing import NDArray

from procgen.chance import kernel
from procgen.checks import extremes, farthest, missing
from procgen.checks.blocks import BLOCK, WIDE, keep_memory
from procgen.checks.gather import Gather, Plan
from procgen.checks.pairs import Pairs
from procgen.checks.pools import PoolLane
from procgen.checks.probes import SeriesPlan
from procgen.checks.rectangles import Blocks, Values, first_values
from procgen.checks.relations import RelationLane
from procgen.checks.start import Early
from procgen.checks.tree import Tree, ranges
from procgen.ensemble.plan import STEPS, Block

TILE = 1 << 18  # values of one series in a tile: with fewer, calls cost more than what passes through the caches
STRIP = 64  # paths that are turned together
COMPILING_REPAYS = 40_000_000  # values of one process, 15 to 25 ns each: to compile, which pays next time
LOADING_REPAYS = 4_000_000  # the same where there is machine code, which is loaded in 0.06 s

Tick = Callable[[int], None]  # rows just summed; may raise to stop the work
Progress = Callable[[int, int], None]  # rows done, rows in all


def repays(values: int) -> bool:
    """Whether compiled passes repay for so many values of one process."""
    if values <= LOADING_REPAYS or not kernel.available():
        return False
    return values >= COMPILING_REPAYS or are_kept()


def are_kept() -> bool:
    """Whether the pass that nearly all data need is kept as machine code here, be it for many paths or for one."""
    tile, bits, places = np.empty((0, 0)), np.empty(0, dtype=np.uint64), np.empty(0, dtype=np.int64)
    many, one = (kernel.machine(module, "looked", __package__) for module in ("fused", "fused_few"))
    return many.is_kept(tile, bits, bits, places, places, places) or one.is_kept(tile[0:0].ravel(), 0, bits, places)


def get_ready(plan: Plan, compile: bool) -> None:
    """Load what every tile needs, such as machine code and tables of laws: sums over zeros are made and thrown away.

    What the theory says of all steps is asked for once, too, rather than by each process.
    """
    with kernel.compiling(compile and kernel.available()):
        sums, tile = Gather(plan), np.zeros((BLOCK, WIDE))
        sums.structure.absorb(0, tile, 0, 0, np.zeros(WIDE, np.uint64))
        for watch in sums.structure.watches(0, WIDE).values():
            watch.absorb(tile)
        for shocks in sums.shocks.values():
            shocks.absorb(tile, 0, shocks.lane(WIDE))
    for precision in plan.precision:
        if precision.reach is not None:
            precision.reach.prepare()
    for route in sums.routes.values():
        if route.kalman is not None:
            route.kalman.prepare(plan.steps)


class Lane:
    """What is carried for one range of paths until its last step."""

    def __init__(self, plan: Plan, first_path: int, paths: int):
        self.plan, self.first_path, self.paths, self.step = plan, first_path, paths, 0
        self.sums = Gather(plan)
        # Parts are cut at multiples of STEPS: so tiles end at the same steps wherever that is.
        self.height = min(1 << (max(TILE // paths, BLOCK).bit_length() - 1), STEPS)
        self.rest: dict[str, NDArray] = {}  # steps behind the last multiple of 64
        self.probes = np.full((paths, plan.offset[-1]), np.nan)
        self.pools = [PoolLane(p.pool, paths) if p.pool else None for p in plan.series]
        self.early = {column: Early(plan.series[column], plan.steps, paths) for column in plan.scattered}
        self.relations = [RelationLane(relation, paths) for relation in plan.relations]
        self.due: dict[str, list[RelationLane]] = {}  # series -> the relations of which it is the last
        self.related: dict[str, int] = {}  # series -> the column until which its tiles are wanted
        for relation, each in zip(plan.relations, self.relations, strict=True):
            last = max(map(plan.names.index, relation.weights))
            self.due.setdefault(plan.names[last], []).append(each)
            self.related |= {name: max(last, self.related.get(name, 0)) for name in relation.weights}
        self.prints = np.zeros((len(plan.series), paths), dtype=np.uint64)
        self.watches = self.sums.structure.watches(first_path, paths)
        self.held: dict[int, NDArray] = {}  # column -> the last row of what must not move at every step
        self.carriers = {name: way.start(first_path, paths) for name, way in self.sums.routes.items()}
        paired = {name for pair in self.sums.cross for name in pair}
        self.shocks = {name: sums.lane(paths, first_path, name in paired) for name, sums in self.sums.shocks.items()}
        self.errors = {name: sums.lane(paths) for name, sums in self.sums.errors.items()}
        self.events = {name: sums.lane(paths) for name, sums in self.sums.events.items()}
        self.squares = {name: sums.lane(paths) for name, sums in self.sums.squares.items()}
        self.led = {name: sums.lane(paths, first_path) for name, sums in self.sums.led.items()}
        self.pairs = Pairs(self.sums.cross, paths)
        self.cross = self.pairs.totals

    def absorb(self, values: Mapping[str, NDArray], tick: Tick) -> None:
        """Add the next steps of all series, (paths, steps)."""
        held = len(next(iter(self.rest.values()))) if self.rest else 0
        steps = values[self.plan.names[0]].shape[1]
        whole = held + steps
        if self.step + whole < self.plan.steps:
            whole -= whole % BLOCK
        at, rest, self.rest = -held, self.rest, {}
        while at < whole - held:
            count = min(self.height, whole - held - at)
            related: dict[str, NDArray] = {}
            for column, name in enumerate(self.plan.names):
                x = _tile(rest.get(name), values[name], at, count)
                x = self._series(column, x)
                if name in self.related:
                    related[name] = x
                for relation in self.due.get(name, ()):  # while its tiles are still in the processor's cache
                    relation.absorb(related, self.step)
                related = {kept: tile for kept, tile in related.items() if column < self.related[kept]}
            missing.join(self.plan, self.sums.events, self.step, self.events)
            ready = {pair: stated.ready - self.step for pair, stated in self.plan.shock_pairs.items()}
            self.pairs.absorb(self.shocks, count, ready)
            self.step += count
            at += count
            tick(count * self.paths)
        if at < steps:
            self.rest = {name: _tile(rest.get(name), values[name], at, steps - at).copy() for name in self.plan.names}

    def _series(self, column: int, x: NDArray) -> NDArray:
        """Add a tile of one series; the tile as it goes into sums."""
        plan, sums = self.plan.series[column], self.sums
        ends = sums.structure.absorb(column, x, self.first_path, self.step, self.prints[column])
        if ends is None:
            x = np.where(np.isfinite(x), x, np.nan)  # named there; from here on the path is left out
        if column in self.watches:
            self.watches[column].absorb(x)
        if self.plan.precision[column].possible.every > 1:
            sums.structure.hold(column, x, self.held.get(column), self.first_path, self.step)
            self.held[column] = x[-1:].copy()
        if not self.plan.precision[column].random:
            self._compare(plan, x)
        if ends is None or ends[0].min() < -plan.limit or ends[1].max() > plan.limit:
            x = np.clip(x, -plan.limit, plan.limit)
        for i in np.flatnonzero((plan.steps >= self.step) & (plan.steps < self.step + len(x))):
            self.probes[:, self.plan.offset[column] + i] = x[plan.steps[i] - self.step]
        if plan.name in self.plan.gaps:
            counted = sums.events[missing.key(plan.name)]
            assert isinstance(counted, missing.GapSums)
            counted.count(x, self.step, self.events[missing.key(plan.name)])
        pool = self.pools[column]
        if pool is not None:
            pool.absorb(x, self.step)
        if column in self.early:
            self.early[column].absorb(x, self.step)
        if plan.name in sums.squares:
            sums.squares[plan.name].absorb(x, self.step, self.squares[plan.name])  # type: ignore[arg-type]
        route = sums.routes.get(plan.name)
        if route is not None:
            out = self.shocks[plan.name].scores.next(len(x)) if route.kalman and plan.name in self.shocks else None
            z, self.carriers[plan.name] = route.tile(x, self.carriers[plan.name], self.first_path, self.step, out)
            if route.stopped:
                sums.stopped[plan.name] = route.stopped
            if plan.name in sums.events and self.carriers[plan.name] is not None:
                sums.events[plan.name].absorb(self.carriers[plan.name].seen, self.step, self.events[plan.name])
            if plan.name in sums.shocks:
                sums.shocks[plan.name].absorb(z, self.step, self.shocks[plan.name], x)
                if plan.name in sums.led:
                    view = self.shocks[plan.name].view
                    sums.led[plan.name].absorb(x, view[max(len(view) - len(x), 0) :], self.step, self.led[plan.name])
            else:
                sums.errors[plan.name].absorb(z, self.errors[plan.name])
        return x

    def _compare(self, plan: SeriesPlan, x: NDArray) -> None:
        """A series without chance is its mean, exactly (but for rounding)."""
        mean = plan.theory.mean(np.arange(self.step, self.step + len(x)))
        if mean is not None:
            with np.errstate(invalid="ignore"):
                gap = np.nan_to_num(np.abs(x - mean[:, None]), nan=-1.0, posinf=np.inf)
            row, path = np.unravel_index(int(np.argmax(gap)), gap.shape)
            place = -self.step - int(row), -self.first_path - int(path)
            found = (float(gap[row, path]), *place, float(x[row, path]), float(mean[row]))
            self.sums.gaps[plan.name] = max(self.sums.gaps.get(plan.name, found), found)

    def finish(self) -> Gather:
        """The sums, after the last step."""
        pools = [np.zeros((0, 0)) if pool is None else pool.averages() for pool in self.pools]
        related = [relation.pool.averages() for relation in self.relations]
        self.sums.structure.watched(self.watches)
        with np.errstate(over="ignore", invalid="ignore"):  # of wide laws products overflow: they are not judged
            early = [each.differences() for each in self.early.values()]
            scatter = np.array(early).reshape(len(early), self.paths).T
            self.sums.finish_lane(self.first_path, self.probes, pools, self.prints.T.copy(), related, scatter)
        for kind in ("shocks", "errors", "events", "squares", "led", "cross"):
            for key, sums in getattr(self.sums, kind).items():
                sums.finish(getattr(self, kind)[key])
        return self.sums


def _tile(rest: NDArray | None, values: NDArray, at: int, count: int) -> NDArray:
    """(steps, paths) from step `at` of `values` (paths, steps) on; the steps before step 0 are the rest."""
    tile = np.empty((count, values.shape[0]))
    old = max(-at, 0)
    if old and rest is not None:
        tile[: min(old, count)] = rest[len(rest) - old :][:count]
    new = values[:, max(at, 0) : at + count]
    for first in range(0, len(new), STRIP):  # so many rows at once stay in the nearest cache
        tile[old:, first : first + STRIP] = new[first : first + STRIP].T
    return tile


class Outmost:
    """The values and shocks farthest out of the paths summed so far: of other paths only what is farther matters."""

    def __init__(self) -> None:
        self.values: dict[str, list[extremes.Far]] = {}
        self.shocks: dict[str, list[farthest.Far]] = {}

    def take(self, sums: Gather) -> None:
        """Know those of the sums of a range of paths."""
        for name, values in sums.structure.far.items():
            self.values[name] = extremes.merged([*self.values.get(name, ()), *values])
        for name, each in sums.shocks.items():
            self.shocks[name] = farthest.merged([*self.shocks.get(name, ()), *each.far])

    def tell(self, sums: Gather) -> None:
        """Let sums that begin know what they may leave out; what is just as far may be of an earlier step."""
        full = {name: far[-1][0] for name, far in self.values.items() if len(far) == extremes.KEPT}
        sums.structure.least = full
        for name, far in self.shocks.items():
            if len(far) == farthest.KEPT:
                sums.shocks[name].least = float(np.nextafter(far[-1][0], 0.0))


class Pass:
    """One pass: `absorb` blocks, then ask for the `tree` of sums; paths that never reach the last step are left out."""

    def __init__(
        self,
        plan: Plan,
        tick: Tick = lambda rows: None,
        compile: bool = False,
        outmost: Outmost | None = None,
    ):
        """`outmost`: what other passes over the same data have seen, whose sums are added to those of this one."""
        keep_memory()
        self.plan, self.tick = plan, tick
        self.compile = compile and kernel.available()
        self.lanes: dict[int, Lane] = {}
        self.tree: Tree[Gather] = Tree()
        self.outmost = Outmost() if outmost is None else outmost

    def absorb(self, first_path: int, first_step: int, values: Mapping[str, NDArray]) -> None:
        """Add a block. Raises ValueError when it does not follow the last one of its paths."""
        with nullcontext() if self.compile == kernel.is_compiling() else kernel.compiling():
            for first, end in ranges(first_path, first_path + len(values[self.plan.names[0]])):
                lane = self._lane(first, end - first, first_step)
                lane.absorb({n: values[n][first - first_path : end - first_path] for n in self.plan.names}, self.tick)
                if lane.step >= self.plan.steps:
                    sums = self.lanes.pop(first).finish()
                    self.outmost.take(sums)
                    self.tree.add(first, end, sums)

    def _lane(self, first_path: int, paths: int, first_step: int) -> Lane:
        lane = self.lanes.get(first_path)
        if lane is None and first_step == 0:
            lane = self.lanes[first_path] = Lane(self.plan, first_path, paths)
            self.outmost.tell(lane.sums)
        held = len(next(iter(lane.rest.values()))) if lane and lane.rest else 0
        if lane is None or lane.step + held != first_step or lane.paths != paths:
            raise ValueError(
                f"expected the blocks of a range of paths in the order of their steps, got step {first_step} of "
                f"paths {first_path}–{first_path + paths - 1} out of turn"
            )
        return lane

    def total(self) -> Gather:
        return self.tree.total(Gather(self.plan))


def in_one_process(plan: Plan, blocks: Blocks, whole: Block, progress: Progress | None = None) -> Gather:
    """The sums of one pass in this process; `whole` is the range that the blocks fill."""
    done = 0

    def tick(rows: int) -> None:
        nonlocal done
        done += rows
        if progress is not None:
            progress(done, whole.rows)

    one, seen = Pass(plan, tick, repays(whole.rows * len(plan.names))), iter(blocks)
    first: list[tuple[int, int, Values]] = []
    plan.look(first_values(_noted(seen, first), whole), whole.first_path)
    for first_path, first_step, values in chain(first, seen):
        one.absorb(first_path, first_step, values)
    return one.total()


def _noted(blocks: Iterator[tuple[int, int, Values]], book: list[tuple[int, int, Values]]) -> Blocks:
    for block in blocks:
        book.append(block)
        yield block
