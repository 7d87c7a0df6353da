"""A chart as plain data: axes and marks, without a word on how they are drawn.

Every mark has a role, which says what it shows: "stated" (theory), "seen" (summaries of paths), "path" (a path itself),
"chance" (how far chance alone leads), "compare" (a yardstick that is not claimed to hold).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from procgen.spec.records import dataclass


@dataclass(frozen=True)
class Axis:
    """From `low` to `high`, with ticks as (place, text); `label` says what it counts."""

    low: float
    high: float
    ticks: tuple[tuple[float, str], ...]
    label: str = ""


@dataclass(frozen=True)
class Band:
    """The area between two curves."""

    x: ArrayLike
    low: ArrayLike
    high: ArrayLike
    role: str
    label: str = ""
    core: bool = False  # the inner one of two bands


@dataclass(frozen=True)
class Line:
    """A curve; it is interrupted where a value is not finite."""

    x: ArrayLike
    y: ArrayLike
    role: str
    label: str = ""


@dataclass(frozen=True)
class Dots:
    """Points, with intervals where `low` and `high` are given."""

    x: ArrayLike
    y: ArrayLike
    role: str
    label: str = ""
    low: ArrayLike | None = None
    high: ArrayLike | None = None


@dataclass(frozen=True)
class Stems:
    """Upright strokes from 0, as in a correlogram."""

    x: ArrayLike
    y: ArrayLike
    role: str
    label: str = ""


@dataclass(frozen=True)
class Cells:
    """Rectangles (x0, x1, y0, y1), one a row; `strength` from 0 to 1 is how much ink they get."""

    corners: ArrayLike
    role: str
    label: str = ""
    strength: ArrayLike | None = None


@dataclass(frozen=True)
class Note:
    """Words at a place; `anchor` is "start", "middle" or "end"."""

    x: float
    y: float
    text: str
    anchor: str = "start"


Mark = Band | Line | Dots | Stems | Cells | Note


@dataclass(frozen=True)
class Chart:
    """One figure.

    Attributes
    ----------
    title : what it shows, in a few words
    caption : what there is to see, in a sentence
    marks : drawn in their order
    head, rows : the numbers behind it, as a table
    zero, grid : whether the line y = 0 is drawn, and lines at the ticks of y
    high : its height, 48 being its width
    """

    title: str
    caption: str
    x: Axis
    y: Axis
    marks: Sequence[Mark]
    head: tuple[str, ...] = ()
    rows: Sequence[Sequence[str]] = field(default_factory=tuple)
    zero: bool = False
    grid: bool = True
    high: float = 28.0

    @property
    def key(self) -> list[Mark]:
        """The marks that need a name."""
        return [mark for mark in self.marks if not isinstance(mark, Note) and mark.label]


def bars(edges: NDArray, heights: NDArray, role: str, label: str = "") -> Cells:
    """A histogram as cells from 0 up."""
    full = heights > 0
    zero = np.zeros(int(full.sum()))
    return Cells(np.column_stack([edges[:-1][full], edges[1:][full], zero, heights[full]]), role, label)
