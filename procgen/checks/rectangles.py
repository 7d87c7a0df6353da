"""Blocks of values cut anew: (first_path, first_step, {series: (paths, steps)}), in row order or in that of steps."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import GROUP
from procgen.ensemble.plan import Block

LOOK_PATHS, LOOK, LOOK_ROWS = 64, 1 << 14, 1 << 20

Values = Mapping[str, NDArray]
Blocks = Iterable[tuple[int, int, Values]]


def grouped(blocks: Blocks, whole: Block) -> Iterator[tuple[int, int, Values]]:
    """Blocks in row order as blocks of whole lane groups with all steps of `whole`."""
    held: dict[str, NDArray] = {}
    for first_path, first_step, values in blocks:
        paths, steps = next(iter(values.values())).shape
        path, end = first_path, first_path + paths
        if not held and steps == whole.steps and (path % GROUP == 0 or path == whole.first_path):
            path = end if end == whole.end_path else max(end - end % GROUP, path)
            if path > first_path:
                yield first_path, first_step, {name: rows[: path - first_path] for name, rows in values.items()}
        while path < end:
            begin, stop = max(path - path % GROUP, whole.first_path), min(path - path % GROUP + GROUP, whole.end_path)
            until = min(stop, end)
            step = first_step - whole.first_step
            for name, rows in values.items():
                out = held.setdefault(name, np.empty((stop - begin, whole.steps)))
                out[path - begin : until - begin, step : step + steps] = rows[path - first_path : until - first_path]
            if until == stop and step + steps == whole.steps:
                yield begin, whole.first_step, held
                held = {}
            path = until


def first_values(blocks: Blocks, whole: Block) -> Values:
    """The first values (paths, steps) of each series, from blocks in row order: as many whatever the blocks are."""
    count = max(1, min(LOOK_PATHS, LOOK_ROWS // whole.steps, whole.paths))
    steps = min(LOOK // count, whole.steps)
    out: dict[str, NDArray] = {}
    for first_path, first_step, values in blocks:
        path, step = first_path - whole.first_path, first_step - whole.first_step
        if path >= count or (path == count - 1 and step >= steps):
            break
        for name, rows in values.items():
            some = rows[: count - path, : max(steps - step, 0)]
            kept = out.setdefault(name, np.full((count, steps), np.nan))
            kept[path : path + len(some), step : step + some.shape[1]] = some
    return out


def named(blocks: Blocks, columns: Mapping[str, str]) -> Iterator[tuple[int, int, Values]]:
    """Blocks of columns as blocks of the series that stand there."""
    for first_path, first_step, values in blocks:
        yield first_path, first_step, {name: values[column] for name, column in columns.items()}
