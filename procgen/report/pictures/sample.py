"""The paths that a picture is made from: read, or drawn, within a bounded memory."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.words import many
from procgen.ensemble.errors import Refused
from procgen.spec.records import dataclass

LIMIT = 1 << 24  # values of all series together that are held: 134 MB
DRAWN_LIMIT = 1 << 21  # the same for paths that are drawn for a picture only
DRAWN_PATHS = 200
STRIP = 400  # steps of a path's parts that are shown
SERIES = 24  # that are shown
STRETCHES = 8  # of neighbouring paths, spread over an ensemble that is too large to be held

Stretch = tuple[int, int]  # first path, number of paths
Blocks = Iterable[tuple[int, int, Mapping[str, NDArray]]]


@dataclass(frozen=True)
class Sample:
    """Values in memory, and of what they are a part.

    Attributes
    ----------
    spec : the spec that the values should follow
    values : series (SERIES at most) -> (paths, steps), NaN where a value is missing; some of all paths, the first steps
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
            what = f"{self.paths:,} of {self.all_paths:,} paths, from stretches that are spread over all of them"
        else:
            what = "the only path" if self.paths == 1 else f"all {self.paths:,} paths"
        some = f", the first {self.steps:,} of {self.all_steps:,} steps" if self.steps < self.all_steps else ""
        count = len(self.spec.series)
        some += f"; {len(self.values)} of {count} series" if len(self.values) < count else ""
        return what + some + (f"; {self.note}" if self.note else "")


def of_ensemble(ensemble: Any, limit: int = LIMIT, spec: Any = None, first: Sequence[str] = ()) -> Sample:
    """Some paths of an ensemble, to be held against its own spec or another one.

    Paths that cannot be read are left out, and it is said. Of very many series, those in `first` are taken, and then
    the first ones.
    """
    spec, whole = spec or ensemble.spec, ensemble.whole
    names = _shown(spec, first)
    paths, steps = _share(whole.paths, whole.steps, limit // len(names))
    begin = whole.first_path
    chosen = _stretches(begin, whole.paths, paths)
    values, note = _filled(_stored(ensemble, chosen, names), names, chosen, steps)
    parts = [name for name in ensemble.names if name not in spec.series]
    strips: dict[str, NDArray] = {}
    if parts:
        found, _ = _filled(_stored(ensemble, [(begin, 1)], parts), parts, [(begin, 1)], min(steps, STRIP))
        strips = {name: rows[0] for name, rows in found.items()}
    return Sample(spec, values, whole.paths, whole.steps, begin, strips, note=note)


def of_table(table: Any, limit: int = LIMIT, first: Sequence[str] = ()) -> Sample:
    """Some paths of anyone's table that was read for `validate`."""
    names = _shown(table.spec, first)
    paths, steps = _share(table.paths, table.steps, limit // len(names))
    values, note = _filled(table.blocks(), names, _stretches(0, table.paths, paths), steps)
    return Sample(table.spec, values, table.paths, table.steps, note=note)


def of_spec(spec: Any) -> Sample:
    """A few paths of a spec, drawn in memory, and the parts of the first one."""
    from procgen.ensemble import render

    paths, steps = _share(min(spec.paths, DRAWN_PATHS), spec.time.steps, DRAWN_LIMIT // len(spec.series))
    ensemble = render(spec, paths=paths, steps=steps)
    shown = render(spec, paths=1, steps=min(steps, STRIP), reveal="all")
    values = {name: ensemble[name] for name in _shown(spec, ())}
    parts = {name: shown[name][0] for name in shown.names if name not in spec.series}
    return Sample(spec, values, spec.paths, spec.time.steps, 0, parts, drawn=True)


def of_origin(origin: Any, first: Sequence[str] = ()) -> Sample:
    """The sample behind what `validate` has read; `first` are series that must not be left out."""
    ensemble = getattr(origin, "ensemble", None)
    if ensemble is None:
        return of_table(origin, first=first)
    return of_ensemble(ensemble, spec=_asked(origin), first=first)


def _shown(spec: Any, first: Sequence[str]) -> list[str]:
    """The series that are shown, in the order of the spec: all, or those in `first` and then the first ones."""
    ranked = sorted(spec.series, key=lambda name: name not in first)[:SERIES]
    return [name for name in spec.series if name in ranked]


def _asked(origin: Any) -> Any:
    """The spec that an ensemble was held against, without the series that stand for revealed terms."""
    from procgen.ensemble.source import read_spec

    own = [name for name, column in origin.columns.items() if name == column]
    if len(own) == len(origin.spec.series):
        return origin.spec
    return read_spec({**origin.spec.raw, "series": {name: origin.spec.raw["series"][name] for name in own}})


def _share(paths: int, steps: int, limit: int) -> tuple[int, int]:
    """How many paths and steps fit the limit: whole paths rather than many."""
    return min(paths, max(1, limit // steps)), min(steps, max(1, limit))


def _stretches(first: int, paths: int, wanted: int) -> list[Stretch]:
    """Which paths are taken: all, or as many as are wanted in stretches from the first path to the last."""
    if wanted >= paths:
        return [(first, paths)]
    count = min(STRETCHES, wanted)
    sizes = [wanted * (k + 1) // count - wanted * k // count for k in range(count)]
    room = paths - wanted
    begins = [first + sum(sizes[:k]) + (room * k // (count - 1) if count > 1 else 0) for k in range(count)]
    return list(zip(begins, sizes, strict=True))


def _stored(ensemble: Any, stretches: Sequence[Stretch], names: Sequence[str]) -> Blocks:
    for first, count in stretches:
        for block, values in ensemble.stored(first, first + count, names):
            yield block.first_path, block.first_step, values


def _filled(
    blocks: Blocks, names: Sequence[str], stretches: Sequence[Stretch], steps: int
) -> tuple[dict[str, NDArray], str]:
    """Arrays (paths, steps) of the stretches, one behind the other, and a note where blocks end early.

    Blocks may reach beyond, and come again for another stretch.
    """
    count = sum(size for _, size in stretches)
    out = {name: np.full((count, steps), np.nan) for name in names}
    filled, note = np.zeros(count, np.int64), ""
    try:
        for first_path, first_step, values in blocks:
            end_path, end_step = first_path + len(values[names[0]]), first_step + values[names[0]].shape[1]
            t, row = min(end_step, steps), 0
            for first, size in stretches:
                a, b = max(first_path, first), min(end_path, first + size)
                if a < b and first_step < t:
                    to = slice(row + a - first, row + b - first)
                    for name in names:
                        out[name][to, first_step:t] = values[name][a - first_path : b - first_path, : t - first_step]
                    filled[to] = np.maximum(filled[to], t)
                row += size
            if (filled == steps).all():
                break
    except Refused:
        raise
    except ValueError as error:  # a part is damaged; the verdict says so too
        note = f"the rest cannot be read: {error}"
        kept = filled > 0 if filled.any() else np.arange(count) == 0
        out = {name: values[kept] for name, values in out.items()}
    return out, note
