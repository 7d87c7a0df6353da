"""The paths that a picture is made from: read, or drawn, within a bounded memory."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.report.pictures.safe import many

LIMIT = 1 << 24  # values of all series together that are held: 134 MB
DRAWN_LIMIT = 1 << 21  # the same for paths that are drawn for a picture only
DRAWN_PATHS = 200
STRIP = 400  # steps of a path's parts that are shown

Blocks = Iterable[tuple[int, int, Mapping[str, NDArray]]]


@dataclass(frozen=True)
class Sample:
    """Values in memory, and of what they are a part.

    Attributes
    ----------
    spec : the spec that the values should follow
    values : series -> (paths, steps), NaN where a value is missing; the first paths, and the first steps, of all
    parts : revealed term or output -> its first STRIP steps on the first path
    first_path : number of the first path
    all_paths, all_steps : how many there are
    drawn : whether they were drawn for the picture
    note : what is to be said besides
    """

    spec: Any
    values: Mapping[str, NDArray]
    all_paths: int
    all_steps: int
    first_path: int = 0
    parts: Mapping[str, NDArray] = field(default_factory=dict)
    drawn: bool = False
    note: str = ""

    @property
    def paths(self) -> int:
        return len(next(iter(self.values.values())))

    @property
    def steps(self) -> int:
        return next(iter(self.values.values())).shape[1]

    @property
    def says(self) -> str:
        """Which paths and steps the pictures show."""
        if self.drawn:
            what = f"{many(self.paths, 'path')} drawn for this picture, of the {self.all_paths:,} of the spec"
        elif self.paths < self.all_paths:
            what = f"the first {many(self.paths, 'path')} of {self.all_paths:,}"
        else:
            what = "the only path" if self.paths == 1 else f"all {self.paths:,} paths"
        some = f", the first {self.steps:,} of {self.all_steps:,} steps" if self.steps < self.all_steps else ""
        return what + some + (f"; {self.note}" if self.note else "")


def of_ensemble(ensemble: Any, limit: int = LIMIT) -> Sample:
    """The first paths of an ensemble; those that cannot be read are left out, and it is said."""
    spec, whole = ensemble.spec, ensemble.whole
    names = list(spec.series)
    paths, steps = _share(whole.paths, whole.steps, limit // len(names))
    first = whole.first_path
    values, note = _filled(_stored(ensemble, first, first + paths, names), names, (first, paths), steps)
    parts = [name for name in ensemble.names if name not in spec.series]
    strips: dict[str, NDArray] = {}
    if parts:
        found, _ = _filled(_stored(ensemble, first, first + 1, parts), parts, (first, 1), min(steps, STRIP))
        strips = {name: rows[0] for name, rows in found.items()}
    return Sample(spec, values, whole.paths, whole.steps, first, strips, note=note)


def of_table(table: Any, limit: int = LIMIT) -> Sample:
    """The first paths of anyone's table that was read for `validate`."""
    names = list(table.spec.series)
    paths, steps = _share(table.paths, table.steps, limit // len(names))
    values, note = _filled(table.blocks(), names, (0, paths), steps)
    return Sample(table.spec, values, table.paths, table.steps, note=note)


def of_spec(spec: Any, limit: int = DRAWN_LIMIT) -> Sample:
    """A few paths of a spec, drawn in memory, and the parts of the first one."""
    from procgen.ensemble import render

    paths, steps = _share(min(spec.paths, DRAWN_PATHS), spec.time.steps, limit // len(spec.series))
    ensemble = render(spec, paths=paths, steps=steps)
    shown = render(spec, paths=1, steps=min(steps, STRIP), reveal="all")
    values = {name: ensemble[name] for name in spec.series}
    parts = {name: shown[name][0] for name in shown.names if name not in spec.series}
    return Sample(spec, values, spec.paths, spec.time.steps, 0, parts, drawn=True)


def of_origin(origin: Any) -> Sample:
    """The sample behind what `validate` has read."""
    ensemble = getattr(origin, "ensemble", None)
    return of_table(origin) if ensemble is None else of_ensemble(ensemble)


def _share(paths: int, steps: int, limit: int) -> tuple[int, int]:
    """How many paths and steps fit the limit: whole paths rather than many."""
    return min(paths, max(1, limit // steps)), min(steps, max(1, limit))


def _stored(ensemble: Any, first: int, end: int, names: Sequence[str]) -> Blocks:
    for block, values in ensemble.stored(first, end, names):
        yield block.first_path, block.first_step, values


def _filled(blocks: Blocks, names: Sequence[str], paths: tuple[int, int], steps: int) -> tuple[dict[str, NDArray], str]:
    """Arrays (paths, steps) from blocks, which may reach beyond, and a note where they end early."""
    first, count = paths
    out = {name: np.full((count, steps), np.nan) for name in names}
    left, note = count * steps, ""
    try:
        for first_path, first_step, values in blocks:
            some = values[names[0]]
            a, b = max(first_path, first), min(first_path + some.shape[0], first + count)
            t = min(first_step + some.shape[1], steps)
            if a >= b or first_step >= t:
                continue
            for name in names:
                rows = values[name][a - first_path : b - first_path, : t - first_step]
                out[name][a - first : b - first, first_step:t] = rows
            left -= (b - a) * (t - first_step)
            if left <= 0:
                break
    except ValueError as error:  # a part is damaged; the verdict says so too
        note = f"the rest cannot be read: {error}"
    if note:
        read = max(1, int(np.isfinite(out[names[0]]).any(axis=1).sum()))
        out = {name: values[:read] for name, values in out.items()}
    return out, note
