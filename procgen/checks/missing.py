"""Series with missing values: what is left out, how that itself is judged, and what can be judged of the rest.

What is missing is so whatever the values are, so that a value that is present has the law that it would have with all
the others there (Rubin 1976). Moments at probes are those of the paths in which they are present; shocks are found by a
Kalman filter that passes over gaps, or by undoing what lies between them.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import masks
from procgen.checks.kalman import Kalman
from procgen.checks.probes import _product_sds
from procgen.checks.recover import Cannot, Expected, Route
from procgen.checks.special import EventSums
from procgen.checks.verdict import Check

LARGEST_STATE = 8  # elements of the state up to which a filter is run with gains of its own for each path
_WHY = "values are missing"


def taken_out(graph: Any, spec: Any) -> dict[str, Any]:
    """The terms that leave values out, by series; in the graph, their bodies take their places.

    What shows which values they leave out keeps them.
    """
    from procgen.spec.entries import walk
    from procgen.spec.varying import found_in
    from procgen.terms.combine import Hidden
    from procgen.terms.misfits import gaps_of

    bodies = [(name, one.of) for part in (spec.series, spec.shared) for name, one in part.items()]
    drawn = {
        f"{name}.{entry.label}"
        for name, body in bodies
        for entry, _ in walk(body)
        if entry.kind == "missing" and found_in(entry.values)
    }
    found = {name: node.term for name, root in graph.series.items() if (node := gaps_of(root)) is not None}

    def without(node: Any) -> Any:
        return node.inputs[0] if hasattr(node, "term") and node.term.gaps else node

    for term in found.values():
        term.drawn = term.address in drawn  # type: ignore[attr-defined]
    if found:
        for node in graph.order():
            if not isinstance(getattr(node, "term", None), Hidden):
                node.inputs = tuple([without(part) for part in node.inputs])
        graph.series = {name: without(root) for name, root in graph.series.items()}
    return found


def adapted(plan: Any, gaps: dict[str, Any]) -> Any:
    """A plan whose series have gaps: only what allows for them is judged."""
    for column, series in enumerate(plan.series):
        if series.name not in gaps:
            continue
        plan.precision[column].gaps = True
        if series.gaussian and not series.unknown:
            series.gaussian = False  # judged path by path, where a value is there
            pairs = [*((i, i) for i in range(len(series.steps))), *series.pairs]
            series.product_sd = _product_sds(series, pairs)
        series.pool = None
        plan.routes[series.name] = through(plan.routes[series.name])
        plan.squares.pop(series.name, None)
    for pair in plan.cross:
        pair.gaussian = pair.gaussian and not {plan.series[k].name for k in (pair.first, pair.second)} & set(gaps)
    for names in list(plan.shock_pairs):
        ways = [plan.routes[name] for name in names]
        if any(isinstance(way, Cannot) for way in ways):
            del plan.shock_pairs[names]
        elif any(isinstance(way.kalman, GapKalman) for way in ways) and plan.shock_pairs[names] != Expected():
            unknown = f"{_WHY}: what prediction errors beside them have in common is not computed"
            plan.shock_pairs[names] = Expected(unknown=unknown)
    plan.gaps = gaps
    return replace(plan)  # made anew: what is summed up follows from what has an exact law, of which there is less


def through(way: Route | Cannot) -> Route | Cannot:
    """The way to shocks of a series with gaps, or why there is none."""
    if isinstance(way, Cannot):
        return way
    if way.ranked is not None or way.few is not None:
        return Cannot(f"{_WHY}: the ranks of what comes after a gap, given what came before it, are not computed")
    if way.scores is None:
        return Cannot(f"{_WHY}: prediction errors beside them, of shocks that are not normal, are not judged")
    if way.kalman is None:
        return way
    if len(way.kalman.c) > LARGEST_STATE:
        return Cannot(f"{_WHY}: a filter that passes over them would have a state of {len(way.kalman.c)} elements")
    return replace(way, kalman=GapKalman.of(way.kalman))


class GapKalman(Kalman):
    """A Kalman filter with gains of their own for each path: where a value is missing, it only predicts."""

    @classmethod
    def of(cls, other: Kalman) -> GapKalman:
        """The same filter."""
        made = cls(other.a, other.q, other.c, other.p0, other.rounding)
        made.prepare(256)
        return made

    def start(self, paths: int) -> Any:
        state = np.zeros((len(self.c), paths))
        return state, np.repeat(np.array(self.p0, float)[:, :, None], paths, axis=2)

    def innovations(
        self, y: NDArray, state: Any, step: int, mean: NDArray | None = None, out: NDArray | None = None
    ) -> tuple[NDArray, Any]:
        y = y if mean is None else y - mean[:, None]
        out = np.empty(y.shape) if out is None else out
        s, p = state
        for row, values in enumerate(y):
            pc = _along(p, self.c[None, :, None])
            spread = _along(pc[None], self.c[None, :, None])[0]
            used = np.isfinite(values) & (spread > 1e-14 * self._scale)
            f = np.where(used, spread + self.rounding, 1.0)
            error = np.where(used, np.where(used, values, 0.0) - _along(s[None], self.c[None, :, None])[0], 0.0)
            out[row] = np.where(used, error / np.sqrt(f), np.nan)
            gain = np.where(used, self._moved(pc) / f, 0.0)
            s = self._moved(s) + gain * error
            p = self._moved(self._moved(p).transpose(1, 0, 2)).transpose(1, 0, 2) + self.q[:, :, None]
            p = p - gain[:, None] * gain[None] * f
            p = 0.5 * (p + p.transpose(1, 0, 2))
        return out, (s, p)

    def _moved(self, x: NDArray) -> NDArray:
        """A x for x (d, …, paths)."""
        flat = x.reshape(len(x), -1)
        return _along(np.broadcast_to(flat, (len(x), *flat.shape)), self.a[:, :, None]).reshape(x.shape)


def _along(x: NDArray, weights: NDArray) -> NDArray:
    """Sums over the second axis, term by term: the same for a path whatever stands beside it."""
    total = x[:, 0] * weights[:, 0]
    for k in range(1, x.shape[1]):
        total = total + x[:, k] * weights[:, k]
    return total


class GapSums(EventSums):
    """How often values are missing, given whether the value before was, and for how many steps up to it."""

    def __init__(self, term: Any):
        self.term = term
        # gaps that all have the mean length go on as often as stated, over all steps up to it
        self.limit = 1 if term.drawn or term.gap is None else max(1, int(term.gap) // 2)
        upto = f"up to {self.limit} step{'' if self.limit == 1 else 's'}"
        aged = () if term.drawn else (f"missing after missing, {each}" for each in (upto, "longer"))
        super().__init__((*term.watched, *aged))

    def lane(self, paths: int) -> Any:
        return GapLane(super().lane(paths))

    def count(self, x: NDArray, first_step: int, lane: Any) -> None:
        """Add a tile of values (steps, paths), NaN where missing."""
        gone, steps = np.isnan(x), first_step + np.arange(len(x))
        seen = list(self.term.events(x, (x, x), (), lane.state, steps))
        if not self.term.drawn:
            age = _ages(gone, lane.age)
            enter, stay = self.term.chain.chances
            go_on = np.where(age[:-1] > 0, stay, np.nan)
            seen += [(gone, np.where(old, go_on, np.nan)) for old in (age[:-1] <= self.limit, age[:-1] > self.limit)]
            chance = np.where(age[:-1] > 0, stay, enter)
            if first_step == 0:
                chance[0] = self.term.share
            lane.seen, lane.age = (gone, chance), age[-1]
        self.absorb(seen, first_step, lane.sums)
        lane.state = {"on": gone[-1:].astype(float)}

    def finish(self, lane: Any) -> None:
        super().finish(lane.sums)

    def checks(self, series: str) -> Iterator[Check]:
        if self.term.drawn:
            note = "its share or length is drawn by path: not judged"
            yield Check(series, "share: missing", "all steps", "level", outcome="untestable", note=note)
            return
        for row in super().checks(series):
            row.kind = "level"  # each share stands for itself
            yield row


class GapLane:
    """What is carried for one range of paths."""

    def __init__(self, sums: NDArray):
        self.sums = sums
        self.state: Any = None
        self.age: NDArray = np.zeros(sums.shape[-1], int)  # for how many steps values have been missing
        self.seen: Any = None  # of the newest tile: what is missing, and the chance of it


def _ages(gone: NDArray, age: NDArray) -> NDArray:
    """(1 + steps, paths): for how many steps values have been missing before each step, and after the last."""
    steps = np.arange(1, len(gone) + 1)[:, None]
    there = np.maximum.accumulate(np.where(gone, -age, steps), axis=0)
    return np.concatenate([age[None], steps - there])


def key(series: str) -> str:
    """The name under which the gaps of a series are counted among the events."""
    return f"{series}: gaps"


def sums(gaps: dict[str, Any]) -> dict[str, EventSums]:
    """What is counted of all series with gaps, by its key."""
    return {**{key(name): GapSums(term) for name, term in gaps.items()}, **masks.sums(gaps)}


def join(plan: Any, events: dict[str, Any], first_step: int, lanes: dict[str, Any]) -> None:
    """Compare what is missing in the newest tile of all series."""
    seen = {name: lanes[key(name)].seen for name in plan.gaps}
    masks.join(plan.gaps, events, seen, first_step, lanes)


def checks(gather: Any, series: str) -> Iterator[Check]:
    """How many values are missing, how many in a row, and whether together; what is not judged because of that."""
    if series not in gather.plan.gaps:
        return
    yield from gather.events[key(series)].checks(series)
    yield from masks.checks(gather.plan.gaps, gather.events, series)
    note = f"{_WHY}: not judged, because hardly a path has a value at every step of a window"
    yield Check(series, "averages over steps", "all steps", "memory", outcome="reported", note=note)


def chance_of_none(plan: Any, series: Any) -> float:
    """Probability that two paths have no value at all, or only such as rounding makes equal."""
    term = plan.gaps.get(series.name)
    if term is None:
        return 0.0
    _, stay = term.chain.chances
    none = float(term.share * stay ** (plan.steps - 1)) ** 2
    return min(1.0, none * plan.steps) if series.grain else none
