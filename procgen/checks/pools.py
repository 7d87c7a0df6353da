"""Averages over a window of steps along each path: what is averaged, what theory says of it, and the sums by path.

The deviation itself, its square, and lagged products: the products themselves where their law is exact, else what is
left of them beside the stated slope, x(t) x(t - lag) - slope x(t - lag)^2, whose law is hardly skewed. Where no shocks
can be recovered there are more lags, and: changes over stretches of steps (Lo & MacKinlay 1988), of what is not
stationary or lies at a level of its own in each path; of what is stationary, how far the averages of paths lie apart,
and the shares of steps below quantiles of the law.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import rounding
from procgen.checks.blocks import BLOCK, Window, across, add_products, all_known, compiled, in_one_pass, scratch
from procgen.checks.slow import Slow, SlowLane, plan_slow
from procgen.spec.records import dataclass
from procgen.theory.lumps import atoms_of
from procgen.theory.verdict import STRICT

GAUSSIAN_WINDOW = 96  # steps of a pooled statistic with an exact law (its cost grows with the cube)
WINDOW = 4096  # steps of a pooled statistic without one
SHORT = (1, 2)  # lags, where recovered shocks say the rest
SPREAD = (1, 2, 3, 4, 6, 8, 12, 16, 24, 32, 64, 128, 256)  # lags, up to a quarter of the window
STRETCHES = (8, 32, 128)  # steps of a change
SWAMPED = 0.5  # share of the variance that is between the averages of paths, from which on changes are judged too
_MIRRORED = 1e-14  # of the largest element, to which a matrix and its mirror image are the same
QUANTILES = (0.05, 0.25, 0.75, 0.95)  # below which shares of steps are counted


@dataclass
class Changes:
    """Changes over stretches of `length` steps that follow each other, up to the last step."""

    length: int
    steps: NDArray[np.int64]
    mean: NDArray  # at the steps
    variance: float  # of a change, on average
    exact: NDArray | None  # eigenvalues of the average of the squared changes, where its law is exact


@dataclass
class Level:
    """The average of a path over a window of an even number of steps, and over its halves."""

    first: int
    last: int
    mean: NDArray  # of the window
    variance: float  # of the average
    exact: bool  # whether the average is normal
    sd: float | None  # of its squared deviation, where it is known and the average is not normal
    half: float  # variance of the average of half of the window
    slope: float  # of the average of the later half on that of the earlier one


@dataclass
class Shares:
    """The share of a path's steps with values below each of some points, where the law is the same at all steps."""

    points: NDArray
    chances: NDArray


@dataclass
class Pool:
    """Averages over the steps first .. last - 1, minus their theory."""

    first: int
    last: int
    lags: tuple[int, ...]
    mean: NDArray  # of the window
    covariance: NDArray  # (lags, window): Cov(x(t), x(t - lag)), NaN where t - lag lies before the window
    joint: NDArray | None = None  # (window, window): covariance of the values, where the laws of averages are exact
    slope: NDArray | None = None  # (lags, window): of x(t) on x(t - lag), where there is no exact law
    steady: bool = False  # whether the slopes do not depend on the step
    coarse: str = ""  # why rounding leaves the averages without a theory
    changes: tuple[Changes, ...] = ()
    level: Level | None = None
    shares: Shares | None = None
    slow: Slow | None = None

    @cached_property
    def exact(self) -> NDArray | None:
        """(1 + lags, window): eigenvalues of each average; only the process that judges asks for them."""
        return None if self.joint is None else _eigenvalues(self.joint, self.lags)

    @property
    def size(self) -> int:
        """Numbers of a path: the average, those at lags, of the changes, two of the level, shares, and the slope."""
        shares = 0 if self.shares is None else len(self.shares.points)
        return 1 + len(self.lags) + len(self.changes) + 2 * (self.level is not None) + shares + (self.slow is not None)


def plan_pool(plan: Any, steps: int, blind: bool) -> Pool | None:
    """The averages of one series (its plan), where theory knows enough; `blind` when no shocks can be recovered."""
    width = min(steps, GAUSSIAN_WINDOW if plan.gaussian else WINDOW)
    if width < 8:
        return None
    first = steps - width
    window = np.arange(first, steps, dtype=np.int64)
    lags = _lags(plan.period, width, blind)
    mean, rows = plan.theory.mean(window), _covariances(plan.theory, window, lags)
    if rows is None or not np.isfinite(rows[0]).all() or not rows[0].max() > 0:
        return None
    sds = np.sqrt(rows[0][rows[0] > 0])
    rows[0] += noise(plan.grain)
    pool = Pool(first, steps, lags, mean, rows)
    pool.coarse = _coarse_window(plan, first, float(sds.min()))
    pool.joint = _joint(plan, window) if plan.gaussian else None
    if pool.joint is None:
        pool.slope = np.zeros(rows.shape)
        for slope, row, lag in zip(pool.slope, rows, lags, strict=True):
            earlier = rows[0, : width - lag]
            np.divide(row[lag:], earlier, out=slope[lag:], where=earlier > 0)
        pool.steady = plan.theory.stationarity.covariance_stationary
    if not pool.coarse:
        pool.slow = plan_slow(plan.theory, steps, noise(plan.grain))
    if blind and not pool.coarse:
        if plan.theory.stationarity.covariance_stationary:
            pool.level, pool.shares = _level(plan, steps), _shares(plan, first)
        if not plan.theory.stationarity.covariance_stationary or _swamped(pool):
            lengths = (1, *STRETCHES) if pool.level else STRETCHES
            pool.changes = tuple(filter(None, (_changes(plan, steps, length) for length in lengths)))
    return pool


def _swamped(pool: Pool) -> bool:
    """Whether the levels of paths, such as drawn ones, hide in products what moves about them; changes have none."""
    return pool.level is not None and pool.level.variance > SWAMPED * float(pool.covariance[0].mean())


def noise(grain: float) -> float:
    """Variance that rounding adds."""
    return grain * grain / 12


def _lags(period: int | None, width: int, blind: bool) -> tuple[int, ...]:
    lags = {0, *SHORT, *(lag for lag in SPREAD if blind and lag <= width // 4)}
    if period:
        seasons = (period, 2 * period) if blind else (period,)
        lags |= {lag for lag in seasons if lag > 2 and lag < width // 2}
    return tuple(sorted(lags))


def _covariances(theory: Any, window: NDArray, lags: tuple[int, ...]) -> NDArray | None:
    """(lags, window), NaN where a lag reaches back before the window."""
    rows = np.full((len(lags), len(window)), np.nan)
    if theory.stationarity.covariance_stationary:
        values = theory.autocovariance(np.array(lags), int(window[0]))
        if values is None:
            return None
        for row, lag, value in zip(rows, lags, values, strict=True):
            row[lag:] = value
        return rows
    for row, lag in zip(rows, lags, strict=True):
        values = theory.covariance(window[lag:], window[: len(window) - lag])
        if values is None:
            return None
        row[lag:] = values
    return rows


def _coarse_window(plan: Any, first: int, smallest: float) -> str:
    """Why rounding hides the averages over a window from `first` on, or nothing."""
    inside = plan.coarse & (plan.steps >= first)
    hidden = plan.gaussian and plan.grain > rounding.GAUSSIAN_COARSE * smallest
    return plan.too_coarse(smallest) if hidden or inside.any() else ""


def _joint(plan: Any, window: NDArray) -> NDArray | None:
    """Covariance of the stored values of a window."""
    gamma = plan.theory.covariance(window[:, None], window[None, :])
    return None if gamma is None else 0.5 * (gamma + gamma.T) + noise(plan.grain) * np.eye(len(window))


def _eigenvalues(gamma: NDArray, lags: tuple[int, ...]) -> NDArray:
    """Eigenvalues of each average as a quadratic form in independent normals."""
    width = len(gamma)
    apart = width % 2 == 0 and np.abs(gamma - gamma[::-1, ::-1]).max() <= _MIRRORED * np.abs(gamma).max()
    values, vectors = np.linalg.eigh(_parts(gamma) if apart else gamma[None])
    roots = vectors * np.sqrt(np.maximum(values, 0.0))[:, None, :]
    rows = [np.zeros(width)]
    rows[0][0] = float(gamma.sum()) / width**2  # the variance of the mean over steps
    for lag in lags:
        form = np.zeros((width, width))
        at = np.arange(lag, width)
        form[at, at - lag] += 0.5
        form[at - lag, at] += 0.5
        form /= width - lag
        forms = _parts(form) if apart else form[None]
        own = np.linalg.eigvalsh(roots.transpose(0, 2, 1) @ forms @ roots) if lag else values / width
        rows.append(own.ravel())
    return np.array(rows)


def _parts(a: NDArray) -> NDArray:
    """Two matrices that have the eigenvalues of one between them, which is the same when both its axes are turned.

    That of a steady series is (Cantoni & Butler 1976, Eigenvalues and eigenvectors of symmetric centrosymmetric
    matrices). Half of the size costs an eighth.
    """
    middle = len(a) // 2
    turned = a[:middle, : middle - 1 : -1]
    return np.array([a[:middle, :middle] + turned, a[:middle, :middle] - turned])


def _changes(plan: Any, steps: int, length: int) -> Changes | None:
    count = min(GAUSSIAN_WINDOW, (steps - 1) // length)
    if count < 2:
        return None
    at = steps - 1 - length * np.arange(count, -1, -1)
    mean, theory = plan.theory.mean(at), plan.theory
    if plan.gaussian:
        gamma = theory.covariance(at[:, None], at[None, :])
        if gamma is None:
            return None
        apart = np.diff(np.eye(count + 1), axis=0)
        own = apart @ (0.5 * (gamma + gamma.T) + noise(plan.grain) * np.eye(count + 1)) @ apart.T
        eigenvalues = np.linalg.eigvalsh(own) / count
        return Changes(length, at, mean, float(eigenvalues.sum()), eigenvalues) if eigenvalues.sum() > 0 else None
    spread, joint = theory.covariance(at, at), theory.covariance(at[1:], at[:-1])
    if spread is None or joint is None:
        return None
    variance = float(np.mean(spread[1:] + spread[:-1] - 2 * joint)) + 2 * noise(plan.grain)
    return Changes(length, at, mean, variance, None) if variance > 0 else None


def _level(plan: Any, steps: int) -> Level | None:
    width = min(steps, WINDOW) // 2 * 2
    found = plan.theory.variance_of_mean(np.array([width // 2, width]))
    if found is None or not np.isfinite(found).all() or not found[0] > 0:
        return None
    half, whole = (float(v) + noise(plan.grain) / n for v, n in zip(found, (width // 2, width), strict=True))
    fourth = None if plan.gaussian else plan.theory.fourth_moment_of_mean(width)
    sd = None if fourth is None else float(np.sqrt(max(fourth - whole**2, 0.0)))
    mean = plan.theory.mean(np.arange(steps - width, steps))
    return Level(steps - width, steps, mean, whole, plan.gaussian, sd, half, (2 * whole - half) / half)


def _shares(plan: Any, step: int) -> Shares | None:
    """Points between the cells of rounding, of a law without lumps."""
    theory = plan.theory
    lumps = theory.discrete or getattr(theory, "lumpy", False)
    if plan.gaussian or lumps or theory.stationarity.verdict != STRICT or (law := theory.marginal(step)) is None:
        return None
    if atoms_of(law):
        return None
    points = np.asarray(law.ppf(np.array(QUANTILES)), float)
    if plan.grain and plan.grain <= np.spacing(np.abs(points).max()):  # no number lies between two of its own
        return None
    if plan.grain:
        points = (np.floor(points / plan.grain) + 0.5) * plan.grain
    chances = np.asarray(law.cdf(points), float)
    return Shares(points, chances) if np.isfinite(points).all() and ((chances > 0) & (chances < 1)).all() else None


class PoolLane:
    """The sums of one range of paths."""

    def __init__(self, pool: Pool, paths: int):
        self.pool = pool
        self.window = Window(max(pool.lags), paths)
        self.sums = np.zeros((1 + len(pool.lags), paths))
        self.unknown = np.zeros(paths, dtype=bool)
        self.changes = [np.full((len(each.steps), paths), np.nan) for each in pool.changes]
        self.halves = np.zeros((2, paths))
        self.below = np.zeros((0 if pool.shares is None else len(pool.shares.points), paths))
        self.slow = SlowLane(pool.slow, paths) if pool.slow else None

    def absorb(self, x: NDArray, step: int) -> None:
        """Add a tile (steps, paths)."""
        self.window_of(x, step)
        if self.slow is not None:
            self.slow.absorb(x, step)
        for each, kept in zip(self.pool.changes, self.changes, strict=True):
            for i in np.flatnonzero((each.steps >= step) & (each.steps < step + len(x))):
                kept[i] = x[each.steps[i] - step]
        for total, start, end, mean in self._halves(step, len(x)):
            rows = np.subtract(x[start:end], mean[:, None], out=scratch(end - start, x.shape[1], 1))
            self._look(rows)
            add_products(total, rows, None, start)

    def _look(self, rows: NDArray) -> None:
        """Note the paths of rows in which not all is known."""
        if not all_known(rows):
            self.unknown |= ~np.isfinite(rows).all(axis=0)

    def absorb_sum(self, x: NDArray, y: NDArray, weights: Sequence[float], step: int) -> bool:
        """Add the averages of a tile of weights[0] · x + weights[1] · y; whether that is all but for the window.

        The sums of each half are made without a tile of its own for the combination, with the same bits.
        """
        if self.changes or self.slow is not None or not compiled(x.shape[1]):
            return False
        halves = self.halves.copy()
        room = np.empty(x.shape[1])
        for total, start, end, mean in self._halves(step, len(x)):
            in_one_pass("combined", x, y, *weights, np.ascontiguousarray(mean), start, end, total, room)
        if not np.isfinite(self.halves).all():
            self.halves = halves  # what is not finite is left out by the plain form
            return False
        return True

    def _halves(self, step: int, count: int) -> Iterator[tuple[NDArray, int, int, NDArray]]:
        """Of each half of the level's window that a tile of so many steps reaches: total, first step, end, means."""
        level = self.pool.level
        if level is not None:
            middle = (level.first + level.last) // 2
            for total, a, b in zip(self.halves, (level.first, middle), (middle, level.last), strict=True):
                start, end = max(a - step, 0), min(b - step, count)
                if start < end:
                    yield total, start, end, level.mean[step + start - level.first : step + end - level.first]

    def window_of(self, x: NDArray, step: int) -> None:
        """Add what is averaged over the window; a tile that begins at a multiple of 64 steps."""
        pool = self.pool
        start, end = max(pool.first - step, 0), min(pool.last - step, len(x))
        if start >= end:
            return
        if pool.shares is not None:
            for below, point in zip(self.below, pool.shares.points, strict=True):
                below += np.count_nonzero(x[start:end] < point, axis=0)
        at = step + start - pool.first  # place of the first new row in the window
        mean = pool.mean[at : at + end - start, None]
        rows = np.subtract(x[start:end], mean, out=scratch(end - start, x.shape[1], 1))
        self._look(rows)
        add_products(self.sums[0], rows, None, start)
        both = self.window.push(rows)
        if compiled(x.shape[1]) and (pool.slope is None or pool.steady) and self._at_once(both, end - start, start):
            return
        for k, lag in enumerate(pool.lags):
            count = min(end - start, len(both) - lag)
            if count <= 0:
                continue
            new, earlier = both[len(both) - count :], both[len(both) - lag - count : len(both) - lag]
            if pool.slope is not None and lag and not pool.steady:
                slope = pool.slope[k, at + end - start - count : at + end - start, None]
                new = np.subtract(new, slope * earlier, out=scratch(count, x.shape[1], 1))
            add_products(self.sums[1 + k], new, earlier, end - count)

    def _at_once(self, both: NDArray, steps: int, first: int) -> bool:
        """Add the products at all lags of the last steps, of which the first is that many after a multiple of 64.

        Whether all are known: if not, nothing is added.
        """
        counts = [max(min(steps, len(both) - lag), 0) for lag in self.pool.lags]
        sums, lags = self.sums[1:].copy(), np.array(self.pool.lags)
        room = np.empty(sums.shape[1])
        in_one_pass("lagged", both, both, steps + first % BLOCK, lags, np.array(counts), sums, room)
        if not np.isfinite(sums).all():
            return False
        self.sums[1:] = sums
        return True

    def averages(self) -> NDArray:
        """(paths, size): what is averaged along each path, minus its theory."""
        pool = self.pool
        width = pool.last - pool.first
        sums = np.where(self.unknown, np.nan, self.sums)
        if pool.steady:
            self._beside_slopes(sums)
        for k, lag in enumerate(pool.lags):
            if pool.slope is None or not lag:
                sums[1 + k] -= pool.covariance[k, lag:].sum()
        rows = [*(sums / np.array([width] + [width - lag for lag in pool.lags])[:, None])]
        for each, kept in zip(pool.changes, self.changes, strict=True):
            change = np.diff(kept - each.mean[:, None], axis=0)
            rows.append(across((change * change).T) / len(change) - each.variance)
        if pool.level is not None:
            rows += self._level(pool.level)
        if pool.shares is not None:
            rows += [*(np.where(self.unknown, np.nan, self.below / width) - pool.shares.chances[:, None])]
        if self.slow is not None:
            rows.append(np.where(self.unknown, np.nan, self.slow.averages()))
        self.window.close()
        return np.array(rows).T

    def _beside_slopes(self, sums: NDArray) -> None:
        """Take slope · Σ x(t − lag)² away: all squares but the last ones."""
        assert self.pool.slope is not None
        last = self.window.push(np.empty((0, sums.shape[1])))[::-1]
        newest = np.add.accumulate(last * last, axis=0)
        for k, lag in enumerate(self.pool.lags):
            if lag:
                sums[1 + k] -= self.pool.slope[k, lag] * (sums[1] - newest[lag - 1])

    def _level(self, level: Level) -> list[NDArray]:
        earlier, later = np.where(self.unknown, np.nan, self.halves) / ((level.last - level.first) // 2)
        whole = 0.5 * (earlier + later)
        return [whole * whole - level.variance, earlier * (later - level.slope * earlier) / level.half]
