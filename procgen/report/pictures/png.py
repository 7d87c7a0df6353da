"""Charts as a PNG, drawn by matplotlib: the same marks in the same colours, on white."""

from __future__ import annotations

from collections.abc import Sequence
from io import BytesIO
from textwrap import fill
from typing import Any

import numpy as np

from procgen.report.pictures.chart import Band, Cells, Chart, Dots, Line, Mark, Note, Stems
from procgen.report.pictures.safe import visible
from procgen.report.pictures.style import LIGHT
from procgen.report.pictures.write import MARKS, PictureError

MOST = 60  # charts of one file: more would be too tall to open
WIDE, HIGH, DPI = 5.6, 3.9, 110
_INK = {"stated": LIGHT["stated"], "seen": LIGHT["ink"], "path": LIGHT["path"], "chance": LIGHT["ink"]}
_INK["compare"] = _INK["stated"]
_SIDES = {"start": "left", "middle": "center", "end": "right"}
_LINE, _LETTERS = 10.5, 112  # of a line of the key: points high, letters wide
_WIDTH = {"stated": 1.6, "seen": 1.2, "path": 0.7, "compare": 1.2}


def png(title: str, lines: Sequence[str], groups: Sequence[tuple[str, Sequence[Chart]]]) -> bytes:
    """All charts in two columns under a title; PictureError when matplotlib is missing or there are too many."""
    try:
        from matplotlib.backends.backend_agg import FigureCanvasAgg
        from matplotlib.figure import Figure
    except ImportError:
        raise PictureError(
            "a PNG is drawn by matplotlib, which is not installed: pip install '.[plots]' in the checkout, or "
            "write .svg or .html, which need nothing"
        ) from None
    charts = [(heading, chart) for heading, group in groups for chart in group]
    if len(charts) > MOST:
        raise PictureError(
            f"{len(charts)} figures are too many for one PNG (at most {MOST}); write .html or .svg instead"
        )
    rows = -(-len(charts) // 2)
    sheet = Figure(figsize=(2 * WIDE, rows * HIGH + 1.2), dpi=DPI, layout="constrained", facecolor="white")
    FigureCanvasAgg(sheet)
    sheet.suptitle(_plain(fill(visible(title), 80)) + "\n" + _plain(fill(" ".join(lines), 130)), fontsize=11)
    for place, (heading, chart) in enumerate(charts):
        _drawn(sheet.add_subplot(rows, 2, place + 1), heading, chart)
    out = BytesIO()
    sheet.savefig(out, format="png", metadata={"Software": MARKS["png"]})
    return out.getvalue()


def _plain(text: str) -> str:
    """Text that matplotlib does not take for a formula."""
    return visible(text).replace("$", r"\$")


def _drawn(axes: Any, heading: str, chart: Chart) -> None:
    for mark in chart.marks:
        _mark(axes, mark)
    axes.set_xlim(chart.x.low, chart.x.high)
    axes.set_ylim(chart.y.low, chart.y.high)
    axes.set_xticks([v for v, _ in chart.x.ticks], [_plain(t) for _, t in chart.x.ticks], fontsize=8)
    axes.set_yticks([v for v, _ in chart.y.ticks], [_plain(t) for _, t in chart.y.ticks], fontsize=8)
    if chart.zero:
        axes.axhline(0.0, color=LIGHT["soft"], linewidth=0.8)
    for side in ("top", "right", "left"):
        axes.spines[side].set_visible(False)
    if chart.grid:
        axes.grid(axis="y", color=LIGHT["grid"], linewidth=0.7)
    axes.set_axisbelow(True)
    above = _key(axes) if chart.key else 0
    title = _plain(f"{heading}: {chart.title}")
    axes.set_title(title, fontsize=9, fontweight="bold", loc="left", pad=6.0 + _LINE * above)
    label = f"{chart.x.label}\n" if chart.x.label else ""
    axes.set_xlabel(_plain(label + fill(chart.caption, 92)), fontsize=7.5, loc="left", color=LIGHT["soft"])


def _key(axes: Any) -> int:
    """What the marks are, above them, where it covers none; how many lines it takes."""
    handles, labels = axes.get_legend_handles_labels()
    if not labels:
        return 0
    beside = max(1, min(len(labels), _LETTERS // (max(map(len, labels)) + 6)))
    axes.legend(
        handles, labels, fontsize=7, frameon=False, loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=beside,
        borderpad=0.2, borderaxespad=0.1, labelspacing=0.3,
    )  # fmt: skip
    return -(-len(labels) // beside)


def _mark(axes: Any, mark: Mark) -> None:
    if isinstance(mark, Note):
        axes.text(mark.x, mark.y, _plain(mark.text), fontsize=7, ha=_SIDES[mark.anchor])
        return
    ink, label = _INK[mark.role], _plain(mark.label) or None
    if isinstance(mark, Band):
        x, low, high = (np.asarray(v, float) for v in (mark.x, mark.low, mark.high))
        alpha = 0.13 if mark.role == "chance" else 0.2 if mark.core else 0.16
        axes.fill_between(x, low, high, color=ink, alpha=alpha, linewidth=0, label=label)
    elif isinstance(mark, Line):
        style = "--" if mark.role == "compare" else "-"
        axes.plot(mark.x, mark.y, style, color=ink, linewidth=_WIDTH[mark.role], label=label)
    elif isinstance(mark, Stems):
        axes.vlines(mark.x, 0.0, mark.y, color=ink, linewidth=2.0, label=label)
    elif isinstance(mark, Dots):
        axes.plot(mark.x, mark.y, "o", color=ink, markersize=3.2, label=label, zorder=3)
        if mark.low is not None and mark.high is not None:
            axes.vlines(mark.x, mark.low, mark.high, color=ink, linewidth=0.9)
    else:
        _cells(axes, mark, ink, label)


def _cells(axes: Any, mark: Cells, ink: str, label: str | None) -> None:
    from matplotlib.colors import to_rgba
    from matplotlib.patches import Rectangle

    corners = np.asarray(mark.corners, float).reshape(-1, 4)
    strength = np.full(len(corners), 0.45) if mark.strength is None else np.asarray(mark.strength, float)
    for i, (x0, x1, y0, y1) in enumerate(corners):
        color = to_rgba(ink, 0.04 + 0.66 * min(float(strength[i]), 1.0))
        axes.add_patch(Rectangle((x0, y0), x1 - x0, y1 - y0, facecolor=color, label=label if i == 0 else None))
