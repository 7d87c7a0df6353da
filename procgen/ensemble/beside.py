"""Two ensembles side by side in bounded memory, and the first value of each series that differs.

The paths that both have are taken in ranges that begin at multiples of 16, whatever parts the files are cut into;
a path that is too long for that is read in runs of steps.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from typing import Any

import numpy as np

from procgen.ensemble.columns import as_float, store
from procgen.ensemble.draw import Drawer, empty
from procgen.ensemble.ensemble import Blocks, Ensemble
from procgen.ensemble.part import row_bytes
from procgen.ensemble.plan import LANES, Block, batches
from procgen.ensemble.source import remember
from procgen.spec.records import dataclass

VALUES = 1 << 22  # of one side in memory: 32 MB
Tick = Callable[[int, int], None]
Pair = tuple[np.ndarray, np.ndarray]
Pairs = Iterator[tuple[Block, dict[str, Pair]]]


@dataclass(frozen=True)
class First:
    """The first value of a series that differs, by path and then by step."""

    series: str
    path: int
    step: int
    a: float
    b: float

    def __str__(self) -> str:
        return f"path {self.path}, step {self.step}: {_shown(self.a)} → {_shown(self.b)}"

    def to_dict(self) -> dict[str, Any]:
        """The difference as plain data, None for a value that is missing."""
        return {**vars(self), "a": _or_none(self.a), "b": _or_none(self.b)}


def _or_none(value: float) -> float | None:
    return None if math.isnan(value) else value


def _shown(value: float) -> str:
    return "missing" if math.isnan(value) else repr(value)


def common(a: Block, b: Block) -> Block | None:
    """The paths and steps that two ensembles both have, or None."""
    first, end = max(a.first_path, b.first_path), min(a.end_path, b.end_path)
    steps = min(a.end_step, b.end_step)
    return Block(first, end - first, 0, steps) if first < end else None


def side_by_side(a: Ensemble, b: Ensemble, whole: Block, names: Sequence[str]) -> Pairs:
    """Blocks of `whole` in row order with the float64 values (paths, steps) of both, by name."""
    width = VALUES // (whole.steps * max(len(names), 1))
    width = width // LANES * LANES if width >= LANES else width
    first = whole.first_path
    while first < whole.end_path:
        end = min((first // width + 1) * width if width else first + 1, whole.end_path)
        here = Block(first, end - first, 0, whole.steps)
        if width:
            left, right = (_values(one, here, names) for one in (a, b))
            yield here, {name: (left[name], right[name]) for name in names}
        else:
            yield from _runs(a, b, here, names)
        first = end


def firsts(
    a: Ensemble, b: Ensemble, whole: Block, names: Sequence[str], progress: Tick | None = None
) -> dict[str, First]:
    """The first difference of each series that has one, read until every one of them has shown it."""
    found: dict[str, First] = {}
    done = 0
    for block, values in side_by_side(a, b, whole, names):
        note(found, block, values)
        done += block.rows
        if progress is not None:
            progress(done, whole.rows)
        if len(found) == len(names):
            break
    return found


def note(found: dict[str, First], block: Block, values: dict[str, Pair]) -> None:
    """Add the first differences of a block to those that are known already."""
    for name, (x, y) in values.items():
        if name not in found:
            places = np.argwhere(_bits(x) != _bits(y))[:1]
            for i, j in places.tolist():
                place = block.first_path + i, block.first_step + j
                found[name] = First(name, *place, float(x[i, j]), float(y[i, j]))


def earliest(found: dict[str, First]) -> First | None:
    """The first of the differences of several series, by path and step, then in the order of the series."""
    return min(found.values(), key=lambda first: (first.path, first.step), default=None)


class Redrawn(Ensemble):
    """The ensemble of a spec whose values are drawn when they are read, and kept nowhere."""

    def __init__(self, spec: Any, whole: Block):
        source = remember(spec, ())
        super().__init__(source.columns, whole, source.stamps)
        self._spec, self._source = spec, source

    @property
    def spec(self) -> Any:
        return self._spec

    def stored(
        self,
        first_path: int | None = None,
        end_path: int | None = None,
        names: Sequence[str] | None = None,
        steps: range | None = None,
    ) -> Blocks:
        first, end = self._range(first_path, end_path)
        drawer = Drawer(self._source)
        for batch in batches(Block(first, end - first, 0, self.whole.steps), row_bytes(self._source.columns)):
            values = empty(batch, self._source.columns)
            drawer.fill(batch, values)
            if batch.end_step == self.whole.end_step:
                drawer.forget(batch)
            yield batch, {column.name: store(values[column.name], column) for column in self.columns}


def _values(ensemble: Ensemble, here: Block, names: Sequence[str]) -> dict[str, np.ndarray]:
    out = {name: np.empty((here.paths, here.steps)) for name in names}
    for block, values in ensemble.stored(here.first_path, here.end_path, names):
        a, b = max(block.first_path, here.first_path), min(block.end_path, here.end_path)
        start, end = block.first_step, min(block.end_step, here.end_step)
        if a < b and start < end:
            for name, kept in out.items():
                rows = values[name][a - block.first_path : b - block.first_path, : end - start]
                kept[a - here.first_path : b - here.first_path, start:end] = rows
    return out


def _runs(a: Ensemble, b: Ensemble, path: Block, names: Sequence[str]) -> Pairs:
    """One path of both in runs of steps, cut where either has a cut."""
    left, right = (_steps(one, path, names) for one in (a, b))
    x, y = next(left), next(right)
    step = 0
    while step < path.steps:
        size = min(_left(x), _left(y))
        yield Block(path.first_path, 1, step, size), {n: (x[n][None, :size], y[n][None, :size]) for n in names}
        step += size
        x, y = ({n: values[size:] for n, values in run.items()} for run in (x, y))
        if step < path.steps:
            x, y = x if _left(x) else next(left), y if _left(y) else next(right)


def _steps(ensemble: Ensemble, path: Block, names: Sequence[str]) -> Iterator[dict[str, np.ndarray]]:
    """The values of one path in order, a run of steps at a time."""
    for block, values in ensemble.stored(path.first_path, path.end_path, names):
        row, size = path.first_path - block.first_path, min(block.end_step, path.end_step) - block.first_step
        if 0 <= row < block.paths and size > 0:
            yield {name: as_float(values[name][row, :size]) for name in names}


def _left(run: dict[str, np.ndarray]) -> int:
    return len(next(iter(run.values())))


def _bits(values: np.ndarray) -> np.ndarray:
    return np.ascontiguousarray(as_float(values)).view(np.uint64)
