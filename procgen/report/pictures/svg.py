"""A chart as SVG, set by hand: crisp at any size, without a script, in the colours of whoever looks at it."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from textwrap import wrap
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from procgen.report.pictures.chart import Band, Cells, Chart, Dots, Line, Mark, Note, Stems
from procgen.report.pictures.safe import escaped, short, visible
from procgen.report.pictures.style import FIGURE, variables
from procgen.report.pictures.write import MARKS

WIDE = 4800  # tenths of a unit
LEFT, RIGHT, BELOW = 620, 4700, 380
LETTER = 84  # mean width of a letter of the key, where it is set largest
KEY, ROW = 60, 190  # where a row of the key begins, and its height
FAR = 20_000  # how far beyond the frame a coordinate may lie: farther changes nothing that is seen


def figure(chart: Chart, name: str) -> str:
    """The chart as an svg element for a page; `name` must be unique there, and safe."""
    return "".join(
        [
            f'<svg class="fig" viewBox="0 0 {WIDE} {_high(chart)}" role="img" aria-labelledby="{name}-t {name}-d">',
            f'<title id="{name}-t">{escaped(chart.title)}</title><desc id="{name}-d">{escaped(chart.caption)}</desc>',
            *_drawn(chart, name),
            "</svg>",
        ]
    )


def poster(title: str, lines: Sequence[str], groups: Sequence[tuple[str, Sequence[Chart]]]) -> str:
    """One standalone SVG: a title, lines of text, and groups of charts in two columns, each with its caption."""
    out: list[str] = []
    y = 520
    out.append(f'<text class="head" x="300" y="{y}">{escaped(short(visible(title), 60))}</text>')
    for line in lines:
        for part in wrap(visible(line), 130):
            y += 180
            out.append(f'<text class="say" x="300" y="{y}">{escaped(part)}</text>')
    for g, (heading, charts) in enumerate(groups):
        y += 480
        out.append(f'<text class="group" x="300" y="{y}">{escaped(short(visible(heading), 70))}</text>')
        for first in range(0, len(charts), 2):
            row = charts[first : first + 2]
            y += 280
            for column, chart in enumerate(row):
                out += _placed(chart, f"p{g}-{first + column}", 300 + column * (WIDE + 400), y)
            y += max(_high(chart) + 160 * len(_caption(chart)) for chart in row) + 80
    width, height = 2 * WIDE + 1000, y + 300
    return "\n".join(
        [
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width} {height}" width="{width // 10}" '
            f'height="{height // 10}" role="img" aria-labelledby="poster-t poster-d">',
            f'<title id="poster-t">{escaped(title)}</title><desc id="poster-d">{escaped(" ".join(lines))}</desc>',
            MARKS["svg"],
            f"<style>{variables('svg')}{FIGURE}{_POSTER}</style>",
            f'<rect class="back" width="{width}" height="{height}"/>',
            *out,
            "</svg>",
            "",
        ]
    )


_POSTER = """
.back { fill: var(--card); }
text { font: 130px sans-serif; fill: var(--soft); }
.fig .title { font-weight: 600; fill: var(--ink); }
.say { font: 125px system-ui, sans-serif; } .group { font: 600 190px system-ui, sans-serif; fill: var(--ink); }
.head { font: 600 300px system-ui, sans-serif; fill: var(--ink); }
"""


def _placed(chart: Chart, name: str, x: int, y: int) -> Iterator[str]:
    yield f'<g class="fig" transform="translate({x} {y})"><g role="img" aria-labelledby="{name}-t">'
    yield f'<title id="{name}-t">{escaped(chart.title)}</title><desc>{escaped(chart.caption)}</desc>'
    yield f'<text class="title" x="0" y="0">{escaped(short(visible(chart.title), 64))}</text>'
    yield '<g transform="translate(0 60)">'
    yield from _drawn(chart, name)
    yield "</g></g>"
    for i, line in enumerate(_caption(chart)):
        yield f'<text x="0" y="{_high(chart) + 190 + 160 * i}">{escaped(line)}</text>'
    yield "</g>"


def _high(chart: Chart) -> int:
    return round(100 * chart.high)


def _caption(chart: Chart) -> list[str]:
    return wrap(visible(chart.caption), 78)[:5]


class _Frame:
    """From data to tenths of a unit."""

    def __init__(self, chart: Chart):
        self.chart = chart
        self.key = list(_key_places(chart.key))
        self.top = 120 + ROW * (1 + max((row for _, _, row in self.key), default=-1))
        self.bottom = _high(chart) - BELOW
        self.across = (RIGHT - LEFT) / (chart.x.high - chart.x.low)
        self.up = (self.bottom - self.top) / (chart.y.high - chart.y.low)

    def x(self, values: ArrayLike) -> NDArray[np.float64]:
        return _bounded(LEFT + (np.asarray(values, float) - self.chart.x.low) * self.across)

    def y(self, values: ArrayLike) -> NDArray[np.float64]:
        return _bounded(self.bottom - (np.asarray(values, float) - self.chart.y.low) * self.up)


def _bounded(values: NDArray) -> NDArray[np.float64]:
    return np.round(np.clip(values, -FAR, FAR))


def _drawn(chart: Chart, name: str) -> Iterator[str]:
    frame = _Frame(chart)
    yield from _key(frame)
    yield from _axes(chart, frame)
    size = f'width="{RIGHT - LEFT}" height="{frame.bottom - frame.top}"'
    yield f'<clipPath id="{name}-c"><rect x="{LEFT}" y="{frame.top}" {size}/>'
    yield f'</clipPath><g clip-path="url(#{name}-c)">'
    for mark in chart.marks:
        if not isinstance(mark, Note):
            yield from _mark(mark, frame)
    yield "</g>"
    for mark in chart.marks:
        if isinstance(mark, Note):
            place = f'x="{frame.x(mark.x):.0f}" y="{frame.y(mark.y) + 42:.0f}" text-anchor="{mark.anchor}"'
            yield f'<text class="note" {place}>{escaped(mark.text)}</text>'


def _axes(chart: Chart, frame: _Frame) -> Iterator[str]:
    lines = [f"M{LEFT} {y:.0f}H{RIGHT}" for y in frame.y([v for v, text in chart.y.ticks if text])]
    if lines and chart.grid:
        yield f'<path class="grid" d="{"".join(lines)}"/>'
    for value, text in chart.y.ticks:
        yield f'<text x="{LEFT - 60}" y="{frame.y(value) + 42:.0f}" text-anchor="end">{escaped(text)}</text>'
    marks = [f"M{x:.0f} {frame.bottom}v45" for x in frame.x([v for v, _ in chart.x.ticks])]
    zero = f"M{LEFT} {frame.y(0.0):.0f}H{RIGHT}" if chart.zero else ""
    yield f'<path class="frame" d="M{LEFT} {frame.bottom}H{RIGHT}{"".join(marks)}{zero}"/>'
    for value, text in chart.x.ticks:
        x = float(frame.x(value))
        anchor = "end" if x > RIGHT - 150 else "middle"
        x = min(x, RIGHT + 90) if anchor == "end" else x
        yield f'<text x="{x:.0f}" y="{frame.bottom + 175}" text-anchor="{anchor}">{escaped(text)}</text>'
    if chart.x.label:
        yield f'<text x="{RIGHT}" y="{frame.bottom + 345}" text-anchor="end">{escaped(chart.x.label)}</text>'


def _key_places(marks: Sequence[Mark]) -> Iterator[tuple[Mark, int, int]]:
    """Where each entry of the key stands: its x and its row."""
    x, row = KEY, 0
    for mark in marks:
        width = 250 + LETTER * len(visible(getattr(mark, "label", "")))
        if x > KEY and x + width > WIDE:
            x, row = KEY, row + 1
        yield mark, x, row
        x += width + 110


def _key(frame: _Frame) -> Iterator[str]:
    """Rows of swatches with their names above the frame."""
    for mark, x, row in frame.key:
        yield f'<g transform="translate({x} {ROW * row})">{_swatch(mark)}'
        yield f'<text class="key" x="250" y="180">{escaped(getattr(mark, "label", ""))}</text></g>'


def _swatch(mark: Mark) -> str:
    role = getattr(mark, "role", "")
    if isinstance(mark, Band):
        core = " core" if mark.core else ""
        return f'<path class="area {role}{core}" d="M0 85h190v110h-190z"/>'
    if isinstance(mark, Cells):
        return f'<path class="cell {role}" d="M0 85h190v110h-190z"/>'
    if isinstance(mark, Stems):
        return '<path class="stem" d="M95 75V195"/>'
    if isinstance(mark, Dots):
        bar = '<path class="whisker" d="M95 75V205"/>' if mark.low is not None else ""
        return bar + f'<circle class="dot {role}" cx="95" cy="140" r="38"/>'
    return f'<path class="line {role}" d="M0 140h190"/>'


def _mark(mark: Any, frame: _Frame) -> Iterator[str]:
    if isinstance(mark, Band):
        x, low, high = frame.x(mark.x), frame.y(mark.low), frame.y(mark.high)
        core = " core" if mark.core else ""
        for run in _runs(np.isfinite(low) & np.isfinite(high)):
            there = _path(x[run], low[run])
            back = _path(x[run][::-1], high[run][::-1]).replace("M", "L", 1)
            yield f'<path class="area {mark.role}{core}" d="{there}{back}z"/>'
            if mark.role == "stated" and not mark.core:
                yield f'<path class="edge stated" d="{there}{_path(x[run], high[run])}"/>'
    elif isinstance(mark, Line):
        x, y = frame.x(mark.x), frame.y(mark.y)
        d = "".join(_path(x[run], y[run]) for run in _runs(np.isfinite(y)))
        yield f'<path class="line {mark.role}" d="{d}"/>'
    elif isinstance(mark, Stems):
        x, y, base = frame.x(mark.x), frame.y(mark.y), frame.y(0.0)
        d = "".join(f"M{a:.0f} {base:.0f}V{b:.0f}" for a, b in zip(x, y, strict=True) if np.isfinite(b))
        yield f'<path class="stem" d="{d}"/>'
    elif isinstance(mark, Dots):
        yield from _dots(mark, frame)
    elif isinstance(mark, Cells):
        yield from _cells(mark, frame)


def _dots(mark: Dots, frame: _Frame) -> Iterator[str]:
    x, y = frame.x(mark.x), frame.y(mark.y)
    if mark.low is not None and mark.high is not None:
        ends = zip(x, frame.y(mark.low), frame.y(mark.high), strict=True)
        d = "".join(f"M{a:.0f} {low:.0f}V{high:.0f}" for a, low, high in ends if np.isfinite(low + high))
        yield f'<path class="whisker" d="{d}"/>'
    # One path of small circles: an element each would be most of a page's bytes.
    d = "".join(
        f"M{a - 33:.0f} {b:.0f}a33 33 0 1 0 66 0a33 33 0 1 0-66 0" for a, b in zip(x, y, strict=True) if np.isfinite(b)
    )
    yield f'<path class="dot {mark.role}" d="{d}"/>'


def _cells(mark: Cells, frame: _Frame) -> Iterator[str]:
    corners = np.asarray(mark.corners, float).reshape(-1, 4)
    known = np.isfinite(corners).all(axis=1)
    corners = corners[known]
    x0, x1, y0, y1 = frame.x(corners[:, 0]), frame.x(corners[:, 1]), frame.y(corners[:, 2]), frame.y(corners[:, 3])
    shapes = [f"M{a:.0f} {low:.0f}H{b:.0f}V{high:.0f}H{a:.0f}z" for a, b, low, high in zip(x0, x1, y0, y1, strict=True)]
    if mark.strength is None:
        yield f'<path class="cell {mark.role}" d="{"".join(shapes)}"/>'
        return
    for shape, ink in zip(shapes, np.asarray(mark.strength, float)[known], strict=True):
        yield f'<path class="cell {mark.role}" style="fill-opacity:{0.04 + 0.66 * min(ink, 1.0):.2f}" d="{shape}"/>'


def _runs(known: NDArray[np.bool_]) -> Iterator[slice]:
    """Stretches of places that are known."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], known, [False]]).astype(int)))
    yield from (slice(a, b) for a, b in zip(edges[::2], edges[1::2], strict=True))


def _path(x: NDArray, y: NDArray) -> str:
    """A polyline in whole numbers, each point told from the one before."""
    points = np.column_stack([x, y]).astype(np.int64)
    moves = np.diff(points, axis=0)
    moves = moves[np.any(moves != 0, axis=1)]
    steps = "".join(f"{dx}{'' if dy < 0 else ' '}{dy}{'' if i == len(moves) - 1 else ' '}"
                    for i, (dx, dy) in enumerate(moves.tolist()))  # fmt: skip
    return f"M{points[0, 0]} {points[0, 1]}" + (f"l{steps}" if steps else "h0")
