"""What one pass over the data needs to know, and the sums that it leaves: mergeable, and plain numbers to be sent.

The sums of a range of paths are made by a `lane`, and those of all paths by a `tree` of these.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import missing, waves
from procgen.checks.errors import ErrorSums
from procgen.checks.led import LedSums, led
from procgen.checks.neighbours import Neighbours
from procgen.checks.probes import CrossPlan, SeriesPlan
from procgen.checks.recover import Cannot, Expected, Route, dither
from procgen.checks.relations import Relation
from procgen.checks.shocks import MEMORY_LAGS, SHOCK_ARRAYS, ShockSums
from procgen.checks.special import EventSums
from procgen.checks.squares import Squares
from procgen.checks.start import comparable, differences, told_apart
from procgen.checks.structure import Precision, Structure
from procgen.checks.sums import Kept, Moments, Powers
from procgen.checks.tied import TiedSums
from procgen.checks.together import FAR, NEAR, CrossSums
from procgen.checks.untied import UntiedSums
from procgen.spec.records import dataclass


@dataclass
class Plan:
    """All that the pass needs to know: series, probes, ways to the shocks, and their pairs."""

    steps: int
    series: Sequence[SeriesPlan]
    precision: Sequence[Precision]
    cross: Sequence[CrossPlan]
    routes: Mapping[str, Route | Cannot]
    shock_pairs: Mapping[tuple[str, str], Expected]
    squares: dict[str, Squares | Neighbours] = field(default_factory=dict)
    gaps: dict[str, Any] = field(default_factory=dict)  # series -> the term that leaves values out
    noise: dict[str, float] = field(default_factory=dict)  # series -> variance that rounding adds to a shock
    relations: Sequence[Relation] = ()
    strangers: Sequence[tuple[str, str, bool]] = ()  # pairs of series that are not one, and whether shocks correlate

    def __post_init__(self) -> None:
        self.names = [plan.name for plan in self.series]
        sizes = [len(plan.steps) for plan in self.series]
        self.offset = np.concatenate([[0], np.cumsum(sizes)]).astype(int)
        summed = [column for column, plan in enumerate(self.series) if not plan.gaussian or plan.coarse.any()]
        self.deviations = [int(self.offset[column]) + i for column in summed for i in range(sizes[column])]
        self.products = [
            (column, i, j)
            for column in summed
            for i, j in [*_diagonal(self.series[column]), *self.series[column].pairs]
        ]
        self.crossed = [(pair, k) for pair in self.cross if not pair.gaussian for k in range(len(pair.places))]
        self.moment_pairs = [
            (int(at) + i, int(at) + j)
            for at, size in zip(self.offset, sizes, strict=False)
            for i in range(size)
            for j in range(i, size)
        ]
        between = {
            (int(self.offset[pair.first]) + i, int(self.offset[pair.second]) + j): None
            for pair in self.cross
            for i, j in pair.places
        }
        self.moment_pairs += list(between)
        self.gappy = np.repeat([plan.name in self.gaps for plan in self.series], sizes)
        whole = [column for column, plan in enumerate(self.series) if plan.name not in self.gaps]
        self.starts = [column for column in whole if comparable(self.series[column], self.steps)]
        self.scattered = [column for column in whole if told_apart(self.series[column], self.steps)]
        ways = {column: self.routes.get(self.series[column].name) for column in whole}
        self.waved = [column for column, way in ways.items() if waves.waved(self.series[column], way)]
        self.kept = [(column, i) for column, plan in enumerate(self.series) for i in sorted(plan.scores)]

    def seen_with(self, place: int) -> list[int]:
        """The kept values without which that one is left out: those of all series but for those with gaps."""
        gappy = [self.series[column].name in self.gaps for column, _ in self.kept]
        return [place] if gappy[place] else [k for k, gap in enumerate(gappy) if not gap]

    def look(self, values: Mapping[str, NDArray], first_path: int) -> None:
        """See from the first values, (paths, steps) of all series, what rounding does to the shocks."""
        for name, way in self.rounded.items():
            self.allow({name: _rounding_noise(way, values[name].T, first_path)})

    @property
    def rounded(self) -> dict[str, Route]:
        """The ways on which rounding adds a noise to the shocks that only values tell."""
        ways = {name: way for name, way in self.routes.items() if isinstance(way, Route)}
        return {name: way for name, way in ways.items() if way.grain and way.kalman is None}

    def allow(self, noise: Mapping[str, float]) -> None:
        """Take the variance that rounding adds to the shocks of some series as known."""
        for name, variance in noise.items():
            self.noise[name] = variance
            self.routes[name].allow(variance)  # type: ignore[union-attr]


FEW_PAIRS = 6  # up to so many, longer lags are looked at, too
_FELT = 1e-9  # a correlation of shocks that is more than rounding


def sums_of(stated: Expected, few: bool) -> CrossSums:
    """The sums that a pair of series is judged by; `few`: there are not many pairs."""
    if stated.tie is not None:
        return TiedSums(stated.same_sides, hasattr(stated.tie, "states"))
    if not stated.at and not stated.unknown:
        return UntiedSums(few)
    spread = any(abs(c) > _FELT for lag, c in stated.at.items() if lag)  # components of a system, as a rule
    return CrossSums(FAR if spread else NEAR)


def _joined(arrays: Sequence[NDArray]) -> NDArray:
    return np.concatenate([values.ravel() for values in arrays])


Gap = tuple[float, int, int, float, float]  # size, minus step, minus path, value, theory: the first of the largest


@dataclass
class Gather:
    """The sums of some paths, neighbours of each other. `merge` those of the paths that follow, then judge."""

    plan: Plan
    paths: int = 0
    gaps: dict[str, Gap] = field(default_factory=dict)  # series without chance -> its largest departure
    stopped: dict[str, str] = field(default_factory=dict)  # series -> why its shocks could not be recovered

    def __post_init__(self) -> None:
        plan = self.plan
        self.structure = Structure(plan.precision, plan.steps)
        self.moments = Moments(int(plan.offset[-1]), plan.moment_pairs)
        self.deviations = Powers(len(plan.deviations))  # of what is not judged by the moments alone, as those below
        self.products = Powers(len(plan.products))
        self.crossed = Powers(len(plan.crossed))
        self.pooled = [Powers(p.pool.size) if p.pool else None for p in plan.series]
        self.related = [Powers(relation.pool.size) for relation in plan.relations]
        self.starts, self.scatter = Powers(len(plan.starts)), Powers(len(plan.scattered))
        self.waves = Powers(waves.SIZE * len(plan.waved))
        self.kept = Kept(len(plan.kept))
        self.routes = {name: way for name, way in plan.routes.items() if isinstance(way, Route)}
        scores = {name: way.scores for name, way in self.routes.items() if way.scores is not None}
        self.shocks = {
            s.name: ShockSums(scores[s.name], plan.steps, _lags(s), s.period) for s in plan.series if s.name in scores
        }
        self.errors = {name: ErrorSums() for name in self.routes if name not in scores}
        self.events = {name: EventSums(way.watched) for name, way in self.routes.items() if way.watched}
        self.events |= missing.sums(plan.gaps)
        self.squares = {name: each.sums() for name, each in plan.squares.items()}
        ways = [(s, self.routes[s.name]) for s in plan.series if s.name in self.routes]
        self.led = {s.name: LedSums(s.theory, plan.steps, f"{s.name}{way.salt} led") for s, way in ways if led(s, way)}
        few = len(plan.shock_pairs) <= FEW_PAIRS
        self.cross = {pair: sums_of(stated, few) for pair, stated in plan.shock_pairs.items()}

    def finish_lane(
        self, first_path: int, probes: NDArray, pools: Sequence[NDArray], prints: NDArray, related: Sequence[NDArray],
        scatter: NDArray,
    ) -> None:  # fmt: skip
        """Take what a lane has kept by path: values at probes, averages over steps, fingerprints (paths, series).

        `scatter` (paths, series): how far mean squares are apart at the start, less how far they are later.
        """
        plan = self.plan
        self.paths += len(probes)
        self.structure.close(first_path, prints)
        rows = probes - _means(plan)
        self.moments.absorb(np.where(plan.gappy, 0.0, rows))  # gaps of one series must not cost the others their paths
        self.deviations.absorb(rows[:, plan.deviations])
        self.products.absorb(_products(plan, rows))
        self.starts.absorb(_starts(plan, rows))
        self.scatter.absorb(scatter)
        self.waves.absorb(_waves(plan, rows))
        self.crossed.absorb(_cross_products(plan, rows))
        self.kept.absorb(probes[:, [plan.offset[column] + i for column, i in plan.kept]])
        for powers, averages in zip(self.pooled, pools, strict=True):
            if powers is not None:
                powers.absorb(averages)
        for powers, averages in zip(self.related, related, strict=True):
            powers.absorb(averages)

    def merge(self, other: Gather) -> None:
        """Add the sums of the paths that follow."""
        self.paths += other.paths
        for name in ("structure", "moments", "deviations", "products", "crossed", "starts", "scatter", "waves", "kept"):
            getattr(self, name).merge(getattr(other, name))
        for ours, theirs in zip(self.pooled, other.pooled, strict=True):
            if ours is not None and theirs is not None:
                ours.merge(theirs)
        for own, others in zip(self.related, other.related, strict=True):
            own.merge(others)
        for name, gap in other.gaps.items():
            self.gaps[name] = max(self.gaps.get(name, gap), gap)
        self.stopped |= other.stopped
        for kind in ("shocks", "errors", "events", "squares", "led", "cross"):
            for key, sums in getattr(self, kind).items():
                sums.merge(getattr(other, kind)[key])

    # as plain numbers

    def state(self) -> tuple[dict[str, Any], dict[str, NDArray]]:
        """Everything as data for JSON, and named arrays: another process makes the same sums of them."""
        facts: dict[str, Any] = {"paths": self.paths, "stopped": self.stopped, "gaps": self.gaps}
        facts |= {name: getattr(self.structure, name) for name in _FACTS}
        facts["moments"] = self.moments.n
        facts["powers"] = [powers.paths for powers in self._powers()]
        facts["shocks"] = [
            [s.n, s.neighbours, s.outside, s.far, s.ends, list(s.chains.items()), list(s.rows.items())]
            for s in self.shocks.values()
        ]
        kept = {"kept": self.kept.rows, "numbers": _joined(self._arrays(float)), "counts": _joined(self._arrays(int))}
        return facts, kept | self.structure.printed()

    def restore(self, facts: Mapping[str, Any], arrays: Mapping[str, NDArray]) -> Gather:
        """Take over what `state` gave; itself."""
        self.paths, self.stopped = facts["paths"], facts["stopped"]
        self.gaps = {name: tuple(gap) for name, gap in facts["gaps"].items()}
        for name in _FACTS:
            setattr(self.structure, name, facts[name])
        self.structure.take_prints(arrays)
        self.moments.n = facts["moments"]
        for powers, paths in zip(self._powers(), facts["powers"], strict=True):
            powers.paths = paths
        for s, known in zip(self.shocks.values(), facts["shocks"], strict=True):
            s.n, s.neighbours, s.outside, s.far, s.ends, chains, rows = known
            s.chains, s.rows = Counter(dict(chains)), Counter(dict(rows))
        self.kept.rows = arrays["kept"]
        for kind, name in ((float, "numbers"), (int, "counts")):
            at = 0
            for values in self._arrays(kind):
                values[...] = arrays[name][at : at + values.size].reshape(values.shape)
                at += values.size
        return self

    def _powers(self) -> list[Powers]:
        found = [self.deviations, self.products, self.crossed, self.starts, self.scatter, self.waves, *self.related]
        found += [powers for powers in self.pooled if powers is not None]
        found += [powers for e in self.errors.values() for powers in (e.powers, e.beside)]
        return found + [powers for each in self.squares.values() for powers in each.all_powers()]

    def _arrays(self, kind: type) -> list[NDArray]:
        found: list[NDArray] = [self.moments.mean, self.moments.products]
        found += [getattr(powers, name) for powers in self._powers() for name in ("n", "sums", "pairs", "ends")]
        found += [getattr(s, name) for s in self.shocks.values() for name in SHOCK_ARRAYS]
        found += [each.sums for each in self.events.values()]
        found += [each.sums for each in self.led.values()]
        found += [sums for c in self.cross.values() for sums in c.sums.values()]
        return [values for values in found if values.dtype == kind]


_FACTS = (
    "not_finite", "off_grid", "narrow", "grids", "far", "beyond", "outside", "moved", "zeros", "ends", "runs", "stayed",
)  # fmt: skip


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
            elif not series.constant[i] and not series.coarse[i]:  # coarse rounding may leave a variance of 0
                out[:, k] = rows[:, at + i] * (rows[:, at + j] - known / series.variance[i] * rows[:, at + i])
    return out


def _starts(plan: Plan, rows: NDArray) -> NDArray:
    """How much larger each series to be judged so is at its start than at its end, by path."""
    columns = []
    for column in plan.starts:
        mine = rows[:, plan.offset[column] : plan.offset[column + 1]]
        columns.append(differences(mine, float(plan.series[column].variance[0])))
    return np.array(columns).T if columns else np.zeros((len(rows), 0))


def _waves(plan: Plan, rows: NDArray) -> NDArray:
    """Cosines and sines of each series to be judged so, by path."""
    mine = [(plan.series[column], plan.offset[column], plan.offset[column + 1]) for column in plan.waved]
    columns = [waves.statistics(series, rows[:, first:end]) for series, first, end in mine]
    return np.concatenate([np.zeros((len(rows), 0)), *columns], axis=1)


def _cross_products(plan: Plan, rows: NDArray) -> NDArray:
    """Products of two series beside the stated slope of the first on the second."""
    out = np.full((len(rows), len(plan.crossed)), np.nan)
    for column, (pair, k) in enumerate(plan.crossed):
        (i, j), known = pair.places[k], pair.covariance[k]
        first, second = plan.series[pair.first], plan.series[pair.second]
        if known is not None and second.variance[j] > 0 and not (first.coarse[i] or second.coarse[j]):
            a, b = rows[:, plan.offset[pair.first] + i], rows[:, plan.offset[pair.second] + j]
            out[:, column] = b * (a - known / second.variance[j] * b)
    return out


def _diagonal(plan: SeriesPlan) -> list[tuple[int, int]]:
    return [(i, i) for i in range(len(plan.steps))]


def _rounding_noise(route: Route, x: NDArray, first_path: int) -> float:
    """Variance that rounding adds to a recovered shock: what a shift within the cells does to it, squared.

    `x` (steps, paths) are the first values of some paths.
    """
    plain, moved = (route.start(first_path, x.shape[1]) for _ in range(2))
    shift = route.grain * dither(first_path, x.shape[1], 0, x.shape[0])
    with np.errstate(all="ignore"):
        a, b = plain.tile(x), moved.tile(x + shift)
        if not isinstance(a, np.ndarray) or not isinstance(b, np.ndarray):
            return np.inf
        change = (b - a) ** 2
    known = np.isfinite(change)
    noise = 2 * float(change[known].mean()) if known.any() else 0.0
    return np.inf if route.few is not None and route.few.hidden(noise) else noise
