"""Pictures along the steps: a fan of paths, and the parts that a path is made of."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.words import number
from procgen.report.pictures.chart import Axis, Band, Cells, Chart, Line, Mark, Note
from procgen.report.pictures.safe import short
from procgen.report.pictures.sample import Sample
from procgen.report.pictures.seen import quantiles
from procgen.report.pictures.stated import TWO_SD
from procgen.report.pictures.subject import LEVELS, Subject, some, texts
from procgen.report.pictures.ticks import axis, step_axis

FULL = 370  # steps up to which a whole range is shown one by one: a year of days
BEGINNING = 240  # the same of the beginning of a longer one
BUCKETS = 160  # points of a longer range
LOOKS = 8  # steps of a bucket at which its bands are taken
PATHS, FEW = 4, 12  # paths that are drawn beside curves of the sample, and without them
CURVES = 50  # paths from which their quantiles make a curve
PARTS = "Parts of one path"
MOST_PARTS = 8


def fans(subject: Subject) -> Iterator[Chart]:
    """The whole range, and its beginning step by step where the whole is too long for that."""
    if subject.steps <= FULL:
        yield fan(subject, subject.steps, f"Paths of {subject.called}")
        return
    yield overview(subject)
    window = min(BEGINNING, max(96, 3 * (subject.stated.period or 64)))
    yield fan(subject, window, f"The first {window} steps, one by one")


def fan(subject: Subject, steps: int, title: str) -> Chart:
    """The first `steps` steps: stated quantiles as bands, those of the sample as curves, and a few paths."""
    at = np.arange(steps)
    stated, kind = subject.stated.quantiles(at, LEVELS)
    marks: list[Mark] = []
    if stated is not None:
        marks += _bands(at, stated, kind)
    values = subject.values[:, :steps]
    seen = quantiles(values, LEVELS) if subject.paths >= CURVES else None
    shown = values[: PATHS if seen is not None else FEW]
    marks += [Line(at, row, "path", _paths(len(shown)) if i == 0 else "") for i, row in enumerate(shown)]
    if seen is not None:
        for level, row in zip((0, 2, 4), seen[[0, 2, 4]], strict=True):
            marks.append(Line(at, row, "seen", "seen 5, 50, 95 %" if level == 0 else ""))
    past = subject.past[-max(1, steps // 2) :]
    if len(past):
        marks.append(Line(np.arange(-len(past), 0), past, "seen", "recorded before step 0"))
    y = _range(stated, seen, shown, past)
    caption = _caption(subject, stated, kind, values) + _beyond(y, shown)
    x = step_axis(subject.grid, -len(past), steps - 1)
    return Chart(title, caption, x, y, marks, *_numbers(at, stated, seen, shown))


def overview(subject: Subject) -> Chart:
    """All steps in BUCKETS columns: bands at their widest, paths from their lowest to their highest value."""
    edges = np.linspace(0, subject.steps, BUCKETS + 1).astype(np.int64)
    width = int(np.diff(edges).min())
    looks = min(LOOKS, width) if subject.stated.theory.gaussian or subject.stated.steady else min(2, width)
    offsets = (np.arange(looks) * width) // looks
    at = edges[:-1, None] + offsets  # (buckets, looks)
    middle = (edges[:-1] + edges[1:] - 1) / 2
    outer = (LEVELS[0], LEVELS[-1])
    stated, kind = subject.stated.quantiles(at.ravel(), outer)
    marks: list[Mark] = []
    if stated is not None:
        stated = _widest(stated, at.shape)
        marks.append(Band(middle, stated[0], stated[1], "stated", _band_name(kind)))
    seen = None
    if subject.paths >= CURVES:
        seen = _widest(quantiles(subject.values[:, at.ravel()], outer), at.shape)
    shown = subject.values[:2]
    for i, row in enumerate(shown):
        marks.append(Line(*_swing(row, edges), "path", _paths(len(shown)) if i == 0 else ""))
    if seen is not None:
        marks += [Line(middle, row, "seen", "seen 5 and 95 %" if i == 0 else "") for i, row in enumerate(seen)]
    each = int(np.ceil(subject.steps / BUCKETS))
    caption = (
        f"All {subject.steps:,} steps, {each} side by side drawn as one: a band as at the widest of them, a path from "
        "its lowest to its highest value there."
    )
    y = _range(stated, seen, shown)
    pick = some(BUCKETS, 12)
    head, rows = _numbers(
        edges[:-1][pick], None if stated is None else stated[:, pick], None if seen is None else seen[:, pick], None
    )
    x = step_axis(subject.grid, 0, subject.steps - 1)
    return Chart(f"Paths of {subject.called}", caption + _beyond(y, shown), x, y, marks, head, rows)


def strips(sample: Sample) -> Chart | None:
    """What one path is made of: each revealed term or output in a lane of its own, states as blocks.

    None where nothing was revealed that moves.
    """
    moving = {name: row for name, row in sample.parts.items() if len(np.unique(row[np.isfinite(row)])) > 1}
    names = list(moving)[:MOST_PARTS]
    if not names:
        return None
    steps = min(BEGINNING, *(len(moving[name]) for name in names))
    at, states = np.arange(steps), _states(sample.spec, names)
    marks: list[Mark] = []
    rows = []
    for lane, name in enumerate(reversed(names)):
        values = np.asarray(moving[name], float)[:steps]
        low, high = float(np.nanmin(values)), float(np.nanmax(values))
        if name in states:
            marks.append(Cells(_blocks(values, len(states[name]), lane), "seen"))
            says = "from below " + ", ".join(states[name])
        else:
            marks.append(Line(at, lane + 0.04 + 0.6 * (values - low) / (high - low or 1.0), "seen"))
            says = f"{number(low, 4)} to {number(high, 4)}"
        marks.append(Note(0.0, lane + 0.76, short(f"{name}: {says}", 60)))
        rows.append((name, number(low), number(float(np.nanmean(values))), number(high)))
    left = len(moving) - len(names)
    caption = (
        f"What path {sample.first_path} is made of over its first {steps} steps, each part on a scale of its own; "
        "parts that never move are left out" + (f", and {left} more." if left else ".")
    )
    x, y = step_axis(sample.spec.time, 0, steps - 1), Axis(0.0, float(len(names)), ())
    head = ("part", "lowest", "mean", "highest")
    return Chart(PARTS, caption, x, y, marks, head, rows[::-1], high=6.0 + 5.0 * len(names))


def _states(spec: Any, names: Sequence[str]) -> dict[str, tuple[str, ...]]:
    """The names of the states of each part that gives the number of one."""
    from procgen.terms.graph import build
    from procgen.terms.regimes import states_of

    graph = build(spec)
    found = {name: states_of(graph.resolve(name)) for name in names}
    return {name: states for name, states in found.items() if states}


def _blocks(values: NDArray, states: int, lane: int) -> NDArray:
    """Runs of one state as cells, a row of the lane for each state."""
    edges = np.flatnonzero(np.diff(values) != 0) + 1
    begin, end = np.concatenate([[0], edges]), np.concatenate([edges, [len(values)]])
    height = 0.62 / states
    low = lane + 0.04 + values[begin] * height
    return np.column_stack([begin - 0.5, end - 0.5, low, low + 0.9 * height])


def _bands(at: NDArray, stated: NDArray, kind: str) -> list[Mark]:
    marks: list[Mark] = [Band(at, stated[0], stated[-1], "stated", _band_name(kind))]
    if kind != TWO_SD:
        marks.append(Band(at, stated[1], stated[3], "stated", "and 50 %", core=True))
    marks.append(Line(at, stated[2], "stated", "stated mean" if kind == TWO_SD else "stated median"))
    return marks


def _band_name(kind: str) -> str:
    return "stated mean ± 2 sd" if kind == TWO_SD else "stated 90 %"


def _paths(count: int) -> str:
    return "a path" if count == 1 else f"{count} paths"


def _caption(subject: Subject, stated: NDArray | None, kind: str, values: NDArray) -> str:
    if stated is None:
        return f"Paths only: no stated band, because {kind}."
    known = np.isfinite(values)
    room = 1e-9 * float(np.nanmax(np.abs(stated))) + subject.grain / 2
    inside = (values >= stated[0] - room) & (values <= stated[-1] + room)
    percent = 100.0 * inside.sum() / max(int(known.sum()), 1)
    if subject.stated.still:
        return f"Nothing is left to chance: {percent:.4g} % of the values of {subject.whose()} are the stated ones."
    band = "the stated 90 % band"
    if kind == TWO_SD:
        band = "mean ± 2 sd (its quantiles have no closed form)"
    elif kind != "exact":
        band += f" (which is {kind}, and standardised values of it are joined between)"
    return f"{percent:.1f} % of the values of {subject.whose()} at these steps lie within {band}."


def _numbers(
    at: NDArray, stated: NDArray | None, seen: NDArray | None, shown: NDArray | None
) -> tuple[tuple[str, ...], list[tuple[str, ...]]]:
    """Head and rows: the steps, stated and seen quantiles at them, and the first path."""
    pick = some(len(at), 16)
    head, columns = ["step"], [[str(t) for t in at[pick]]]
    for name, rows in (("stated", stated), ("seen", seen)):
        if rows is not None:
            levels = ("low", "middle", "high") if len(rows) > 2 else ("low", "high")
            chosen = rows[[0, len(rows) // 2, -1]] if len(rows) > 2 else rows
            head += [f"{name}, {level}" for level in levels]
            columns += [row[pick] for row in chosen]
    if shown is not None and len(shown):
        head.append("first path")
        columns.append(shown[0][pick])
    return tuple(head), texts(*columns)


def _range(stated: NDArray | None, seen: NDArray | None, shown: NDArray, past: NDArray | None = None) -> Axis:
    """Up and down to all bands and to what was recorded, and to the paths as far as these do not dwarf the bands."""
    bands = [x[np.isfinite(x)] for x in (stated, seen, past) if x is not None]
    paths = shown[np.isfinite(shown)]
    if not len(paths):
        paths = np.zeros(1)
    low, high = float(paths.min()), float(paths.max())
    if bands and sum(map(len, bands)):
        b = np.concatenate(bands)
        size = float(b.max() - b.min())
        low = min(float(b.min()), max(low, float(b.min()) - size))
        high = max(float(b.max()), min(high, float(b.max()) + size))
    return axis(low, high, most=5, room=0.03)


def _beyond(y: Axis, shown: NDArray) -> str:
    """A sentence where a path that is drawn leaves the frame."""
    paths = shown[np.isfinite(shown)]
    return " Paths leave the frame." if len(paths) and (paths.min() < y.low or paths.max() > y.high) else ""


def _widest(rows: NDArray, shape: tuple[int, ...]) -> NDArray:
    low, high = rows[0].reshape(shape), rows[-1].reshape(shape)
    return np.array([np.fmin.reduce(low, axis=1), np.fmax.reduce(high, axis=1)])


def _swing(row: NDArray, edges: NDArray) -> tuple[NDArray, NDArray]:
    """Lowest and highest value of each bucket, in the order in which they come."""
    places = []
    for a, b in pairwise(edges.tolist()):
        part = row[a:b]
        if np.isfinite(part).any():
            places += sorted({a + int(np.nanargmin(part)), a + int(np.nanargmax(part))})
        else:
            places.append(a)
    at = np.array(places)
    return at, row[at]
