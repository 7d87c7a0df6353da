"""One pass over the data: tiles in, sums out. Sums of different paths merge; memory follows the widest part.

Blocks come as (first_path, first_step, {series: (paths, steps)}); the blocks of one range of paths come in the order
of their steps. A lane carries everything that a range of paths needs from one block to the next.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.errors import ErrorLane, ErrorSums
from procgen.checks.probes import CrossPlan, SeriesPlan
from procgen.checks.recover import Cannot, Expected, Route
from procgen.checks.shocks import MEMORY_LAGS, CrossSums, ShockLane, ShockSums
from procgen.checks.squares import SquareLane, Squares, SquareSums
from procgen.checks.structure import Precision, Structure
from procgen.checks.sums import Kept, Moments, Powers

LANE = 1024  # paths in one lane
TILE = 1 << 18  # values of one series in a tile


@dataclass
class Plan:
    """All that the pass needs to know: series, probes, ways to the shocks, and their pairs."""

    steps: int
    series: Sequence[SeriesPlan]
    precision: Sequence[Precision]
    cross: Sequence[CrossPlan]
    routes: Mapping[str, Route | Cannot]
    shock_pairs: Mapping[tuple[str, str], Expected]
    squares: Mapping[str, Squares] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.names = [plan.name for plan in self.series]
        sizes = [len(plan.steps) for plan in self.series]
        self.offset = np.concatenate([[0], np.cumsum(sizes)]).astype(int)
        self.products = [
            (column, i, j) for column, plan in enumerate(self.series) for i, j in [*_diagonal(plan), *plan.pairs]
        ]
        self.kept = [(column, i) for column, plan in enumerate(self.series) for i in sorted(plan.scores)]


def _diagonal(plan: SeriesPlan) -> list[tuple[int, int]]:
    return [(i, i) for i in range(len(plan.steps))]


class Lane:
    """What is carried for one range of paths until its last step."""

    def __init__(self, plan: Plan, first_path: int, paths: int):
        self.first_path, self.paths, self.step = first_path, paths, 0
        self.probes = np.full((paths, plan.offset[-1]), np.nan)
        self.pools = [np.zeros((paths, 1 + len(p.pool.lags) if p.pool else 0)) for p in plan.series]
        self.tails: list[NDArray | None] = [None] * len(plan.series)
        self.prints = np.zeros((len(plan.series), paths), dtype=np.uint64)
        self.carriers: dict[str, Any] = {}
        self.shocks: dict[str, ShockLane] = {}
        self.errors: dict[str, ErrorLane] = {}
        self.squares = {name: SquareLane.start(paths) for name in plan.squares}
        self.carry: dict[tuple[str, str], Any] = {}


@dataclass
class Gather:
    """The sums of one pass. `absorb` blocks, `merge` others, then hand it to the judge."""

    plan: Plan
    paths: int = 0
    unfinished: int = 0
    lanes: dict[int, Lane] = field(default_factory=dict)

    def __post_init__(self) -> None:
        plan = self.plan
        self.structure = Structure(plan.precision)
        self.moments = Moments(int(plan.offset[-1]))
        self.deviations = Powers(int(plan.offset[-1]))
        self.products = Powers(len(plan.products))
        self.crossed = Powers(sum(len(pair.places) for pair in plan.cross))
        self.pooled = [Powers(1 + len(p.pool.lags)) if p.pool else None for p in plan.series]
        self.kept = Kept(len(plan.kept))
        self.gaps: dict[str, tuple[float, float, float]] = {}  # series without chance -> largest gap, value, theory
        self.noise: dict[str, float] = {}  # series -> variance that rounding adds to a recovered shock
        self.routes = {name: way for name, way in plan.routes.items() if isinstance(way, Route)}
        scores = {name: way.scores for name, way in self.routes.items() if way.scores is not None}
        self.shocks = {
            s.name: ShockSums(scores[s.name], plan.steps, _lags(s), s.period) for s in plan.series if s.name in scores
        }
        self.errors = {name: ErrorSums() for name in self.routes if name not in scores}
        self.squares = {name: SquareSums(each) for name, each in plan.squares.items()}
        self.cross = {pair: CrossSums() for pair in plan.shock_pairs}

    # blocks

    def absorb(self, first_path: int, first_step: int, values: Mapping[str, NDArray]) -> None:
        """Add a block. Raises ValueError when it does not follow the last one of its paths."""
        some = values[self.plan.names[0]]
        for start in range(0, some.shape[0], LANE):
            rows = slice(start, min(start + LANE, some.shape[0]))
            lane = self._lane(first_path + start, rows.stop - start, first_step)
            height = max(64, TILE // lane.paths)
            for t in range(0, some.shape[1], height):
                tiles = [
                    np.ascontiguousarray(values[name][rows, t : t + height].T, dtype=float) for name in self.plan.names
                ]
                self._tile(lane, tiles)
            if lane.step >= self.plan.steps:
                self._finish(self.lanes.pop(lane.first_path))

    def _lane(self, first_path: int, paths: int, first_step: int) -> Lane:
        lane = self.lanes.get(first_path)
        if lane is None and first_step == 0:
            lane = self.lanes[first_path] = Lane(self.plan, first_path, paths)
        if lane is None or lane.step != first_step or lane.paths != paths:
            raise ValueError(
                f"expected the blocks of a range of paths in the order of their steps, got step {first_step} of "
                f"paths {first_path}–{first_path + paths - 1} out of turn"
            )
        return lane

    def _tile(self, lane: Lane, tiles: Sequence[NDArray]) -> None:
        scores: dict[str, NDArray] = {}
        for column, (plan, x) in enumerate(zip(self.plan.series, tiles, strict=True)):
            if not self.structure.absorb(column, x, lane.first_path, lane.step, lane.prints[column]):
                x = np.where(np.isfinite(x), x, np.nan)  # named there; from here on the path is left out
            self._probe(lane, column, x)
            self._pool(lane, column, x)
            if plan.name in self.squares:
                self.squares[plan.name].absorb(x, lane.step, lane.squares[plan.name])
            if not self.plan.precision[column].random:
                self._compare(plan, x, lane.step)
            if plan.name in self.shocks:
                scores[plan.name] = self._recover(lane, plan.name, x)
            elif plan.name in self.errors:
                self._predict(lane, plan.name, x)
        self._cross(lane, scores)
        lane.step += len(tiles[0])

    def _probe(self, lane: Lane, column: int, x: NDArray) -> None:
        plan = self.plan.series[column]
        for i, step in enumerate(plan.steps):
            if lane.step <= step < lane.step + len(x):
                lane.probes[:, self.plan.offset[column] + i] = x[step - lane.step]

    def _pool(self, lane: Lane, column: int, x: NDArray) -> None:
        pool = self.plan.series[column].pool
        if pool is None or lane.step + len(x) <= pool.first:
            return
        start = max(pool.first - lane.step, 0)
        at = lane.step + start - pool.first  # place of the first new row in the window
        rows = x[start : start + pool.last - pool.first - at] - pool.mean[at : at + len(x) - start, None]
        past = lane.tails[column]
        sums = lane.pools[column]
        sums[:, 0] += rows.sum(axis=0)
        both = rows if past is None else np.concatenate([past, rows])
        before = len(both) - len(rows)
        for k, lag in enumerate(pool.lags):
            first = max(before, lag)
            if first < len(both):
                places = slice(at + first - before, at + len(rows))
                earlier = both[first - lag : len(both) - lag]
                product = np.einsum("tp,tp->p", both[first:], earlier)
                if pool.slope is not None and lag:
                    sums[:, 1 + k] += product - np.einsum("t,tp,tp->p", pool.slope[k, places], earlier, earlier)
                else:
                    sums[:, 1 + k] += product - pool.covariance[k, places].sum()
        lane.tails[column] = both[max(0, len(both) - max(pool.lags)) :].copy()

    def _compare(self, plan: SeriesPlan, x: NDArray, step: int) -> None:
        """A series without chance is its mean, exactly (but for rounding)."""
        mean = plan.theory.mean(np.arange(step, step + len(x)))
        if mean is not None:
            with np.errstate(invalid="ignore"):
                gap = np.nan_to_num(np.abs(x - mean[:, None]), nan=-1.0, posinf=np.inf)
            row, path = np.unravel_index(int(np.argmax(gap)), gap.shape)
            found = (float(gap[row, path]), float(x[row, path]), float(mean[row]))
            self.gaps[plan.name] = max(self.gaps.get(plan.name, found), found)

    def _recover(self, lane: Lane, name: str, x: NDArray) -> NDArray:
        route = self.routes[name]
        if name not in lane.shocks:
            lane.carriers[name] = route.start(lane.first_path, lane.paths)
            lane.shocks[name] = ShockLane.start(lane.paths)
            if route.grain and route.kalman is None and name not in self.noise:
                self.noise[name] = _rounding_noise(route, x[:, : min(64, lane.paths)], lane.first_path)
                route.allow(self.noise[name])
        z, lane.carriers[name] = route.tile(x, lane.carriers[name], lane.first_path, lane.step)
        return self.shocks[name].absorb(z, lane.step, lane.shocks[name])

    def _predict(self, lane: Lane, name: str, x: NDArray) -> None:
        route = self.routes[name]
        if name not in lane.errors:
            lane.carriers[name] = route.start(lane.first_path, lane.paths)
            lane.errors[name] = ErrorLane.start(lane.paths)
        z, lane.carriers[name] = route.tile(x, lane.carriers[name], lane.first_path, lane.step)
        self.errors[name].absorb(z, lane.errors[name])

    def _cross(self, lane: Lane, scores: Mapping[str, NDArray]) -> None:
        for pair, sums in self.cross.items():
            wait = self.plan.shock_pairs[pair].ready - lane.step
            a, b = (scores[name][max(0, wait) :] for name in pair)
            if len(a):
                lane.carry[pair] = sums.absorb(a, b, lane.carry.get(pair))

    # the end of a range of paths

    def _finish(self, lane: Lane) -> None:
        plan = self.plan
        self.paths += lane.paths
        self.structure.close(lane.first_path, lane.prints.T.copy())
        usable = np.isfinite(lane.probes).all(axis=1)
        rows = lane.probes - _means(plan)
        self.moments.absorb(rows[usable])
        self.deviations.absorb(rows)
        self.products.absorb(_products(plan, rows))
        self.crossed.absorb(_cross_products(plan, rows))
        if plan.kept:
            places = [plan.offset[column] + i for column, i in plan.kept]
            self.kept.absorb(lane.first_path, lane.probes[:, places])
        for powers, sums, series in zip(self.pooled, lane.pools, plan.series, strict=True):
            if powers is not None and series.pool is not None:
                width = series.pool.last - series.pool.first
                powers.absorb(sums / np.array([width] + [width - lag for lag in series.pool.lags]))
        for name, shock_lane in lane.shocks.items():
            self.shocks[name].finish(shock_lane)
        for name, error_lane in lane.errors.items():
            self.errors[name].finish(error_lane)
        for name, square_lane in lane.squares.items():
            self.squares[name].finish(square_lane)

    def finish(self) -> None:
        """To be called after the last block; counts paths that never reached the last step."""
        self.unfinished += sum(lane.paths for lane in self.lanes.values())
        self.lanes.clear()

    def merge(self, other: Gather) -> None:
        """Add the sums of other paths."""
        self.paths += other.paths
        self.unfinished += other.unfinished
        for name in ("structure", "moments", "deviations", "products", "crossed", "kept"):
            getattr(self, name).merge(getattr(other, name))
        for ours, theirs in zip(self.pooled, other.pooled, strict=True):
            if ours is not None and theirs is not None:
                ours.merge(theirs)
        for name, gap in other.gaps.items():
            self.gaps[name] = max(self.gaps.get(name, gap), gap)
        for name, noise in other.noise.items():
            self.noise[name] = max(self.noise.get(name, noise), noise)
        for name, shocks in self.shocks.items():
            shocks.merge(other.shocks[name])
        for name, errors in self.errors.items():
            errors.merge(other.errors[name])
        for name, squares in self.squares.items():
            squares.merge(other.squares[name])
        for pair, products in self.cross.items():
            products.merge(other.cross[pair])


def _lags(plan: SeriesPlan) -> tuple[int, ...]:
    season = (plan.period,) if plan.period and plan.period not in MEMORY_LAGS and plan.period <= 1024 else ()
    return MEMORY_LAGS + season


def _means(plan: Plan) -> NDArray:
    return np.concatenate([np.nan_to_num(p.mean) for p in plan.series])


def _products(plan: Plan, rows: NDArray) -> NDArray:
    """Products minus their theory, or minus the stated slope times the earlier square where their sd is not known."""
    out = np.full((len(rows), len(plan.products)), np.nan)
    for k, (column, i, j) in enumerate(plan.products):
        series, at = plan.series[column], plan.offset[column]
        known = series.covariance.get((i, j)) if i != j else float(series.variance[i])
        if not series.unknown and known is not None and np.isfinite(known):
            if i == j or series.product_sd.get((i, j)) is not None:
                out[:, k] = rows[:, at + i] * rows[:, at + j] - known
            elif not series.constant[i]:
                out[:, k] = rows[:, at + i] * (rows[:, at + j] - known / series.variance[i] * rows[:, at + i])
    return out


def _cross_products(plan: Plan, rows: NDArray) -> NDArray:
    """Products of two series beside the stated slope of the first on the second."""
    columns = []
    for pair in plan.cross:
        variance = plan.series[pair.second].variance
        for (i, j), known in zip(pair.places, pair.covariance, strict=True):
            a, b = rows[:, plan.offset[pair.first] + i], rows[:, plan.offset[pair.second] + j]
            usable = known is not None and variance[j] > 0
            columns.append(b * (a - known / variance[j] * b) if usable else np.full(len(rows), np.nan))
    return np.array(columns).T if columns else np.zeros((len(rows), 0))


def _rounding_noise(route: Route, x: NDArray, first_path: int) -> float:
    """Variance that rounding adds to a recovered shock: what a shift within the cells does to it, squared."""
    plain, moved = (route.start(first_path, x.shape[1]) for _ in range(2))
    shift = route.grain * dither_of(first_path, x)
    with np.errstate(all="ignore"):
        a, b = plain.tile(x), moved.tile(x + shift)
        if not isinstance(a, np.ndarray) or not isinstance(b, np.ndarray):
            return np.inf
        change = (b - a) ** 2
    known = np.isfinite(change)
    return 2 * float(change[known].mean()) if known.any() else 0.0


def dither_of(first_path: int, x: NDArray) -> NDArray:
    from procgen.checks.recover import dither

    return dither(first_path, x.shape[1], 0, x.shape[0])
