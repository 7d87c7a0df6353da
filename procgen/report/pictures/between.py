"""Pictures of what series share: a matrix of correlations, and cross-correlograms of pairs."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.report.pictures.chart import Axis, Cells, Chart, Mark, Note
from procgen.report.pictures.memory import Comparison
from procgen.report.pictures.safe import short
from procgen.report.pictures.seen import NORMAL, across, cross_correlogram
from procgen.report.pictures.subject import Subject, texts

CROSS_LAGS = 12
MOST_PAIRS = 6
MATRIX = 24  # series of a matrix
WRITTEN = 8  # series up to which its cells have numbers, and its caption names


def between(subjects: Sequence[Subject], theory: Any, suspects: Sequence[tuple[str, str]] = ()) -> Iterator[Chart]:
    """A matrix of correlations at the same step, and cross-correlograms of the pairs that are stated to hang together.

    `suspects` are pairs that are to be shown before others.
    """
    moving = [s for s in subjects if not s.stated.still and s.deviations is not None]
    pairs = [_Pair(a, b, theory) for a, b in combinations(moving[:MATRIX], 2)]
    if not pairs:
        return
    if len(pairs) > 1:
        yield _matrix(moving[:MATRIX], pairs)
    named = {frozenset(pair) for pair in suspects}
    wanted = sorted((p for p in pairs if p.dependent or p.names in named), key=lambda p: p.names not in named)
    for pair in (wanted or pairs)[: MOST_PAIRS if wanted else 1]:
        chart = pair.chart()
        if chart is not None:
            yield chart


class _Pair:
    """Two series."""

    def __init__(self, a: Subject, b: Subject, theory: Any):
        self.a, self.b = a, b
        self.names = frozenset((a.name, b.name))
        self.cross = theory.cross(a.name, b.name)
        space = theory.axis.space
        left, right = (s.stated.theory.expression.sources for s in (a, b))
        self.dependent = any(space.dependent(x, y) for x in left for y in right)
        self.pooled = a.stated.pooled and b.stated.pooled and self._steady()

    def _steady(self) -> bool:
        """Whether the covariance between them is the same at a few steps."""
        at = np.unique(np.linspace(0, self.a.steps - 1, 7).astype(np.int64))
        known = self.cross.covariance(at, at)
        return known is None or float(np.ptp(known)) <= 1e-9 * float(np.abs(known).max(initial=1e-300))

    @property
    def step(self) -> int:
        return self.a.steps // 2

    def stated(self, lags: NDArray) -> NDArray | None:
        """Correlation of the first at a middle step + lag with the second at that step."""
        return self.cross.correlation(self.step + lags, np.full(len(lags), self.step))

    def seen(self, lags: NDArray) -> tuple[NDArray, NDArray]:
        """The same of the sample, and standard errors."""
        a, b = self.a.deviations, self.b.deviations
        assert a is not None and b is not None
        if self.pooled:
            found = cross_correlogram(a, b, lags)
            return found.value, found.error
        late = self.a.values[:, self.step + lags]
        value, used = across(self.b.values[:, self.step], late)
        return value, np.full(len(lags), np.nan if used < 10 else 1.0 / np.sqrt(max(used - 3, 1)))

    def chart(self) -> Chart | None:
        """Correlations at lags of both signs."""
        reach = min(CROSS_LAGS, (self.a.steps - 1) // 2)
        if reach < 1:
            return None
        lags = np.arange(-reach, reach + 1)
        value, error = self.seen(lags)
        if not np.isfinite(value).all():
            return None
        where = "all steps" if self.pooled else f"from step {self.step:,}"
        compared = Comparison(lags, self.stated(lags), value, whose=f"{self.a.whose()}, {where}", own=False)
        compared.reason = self.cross.reason()
        if np.isfinite(error).all():
            how = "from the spread between paths" if self.pooled else "as for independent pairs"
            compared.around(NORMAL * error, how)
        return compared.chart(f"{short(self.a.name, 20)} at t + lag with {short(self.b.name, 20)} at t")


def _matrix(subjects: Sequence[Subject], pairs: Sequence[_Pair]) -> Chart:
    """Stated correlations above the diagonal, seen ones below, in ink by their size."""
    place = {s.name: i for i, s in enumerate(subjects)}
    n, zero = len(subjects), np.zeros(1, np.int64)
    corners: dict[str, list[tuple[float, ...]]] = {"stated": [], "seen": []}
    strength: dict[str, list[float]] = {"stated": [], "seen": []}
    notes: list[Mark] = []
    rows = []
    gaps = []
    for pair in pairs:
        i, j = sorted((place[pair.a.name], place[pair.b.name]))
        known, found = pair.stated(zero), pair.seen(zero)[0]
        both = (None if known is None else float(known[0]), float(found[0]))
        for name, value, (row, column) in zip(("stated", "seen"), both, ((i, j), (j, i)), strict=True):
            if value is not None and np.isfinite(value):
                corners[name].append((column + 0.04, column + 0.96, n - 1 - row + 0.04, n - 1 - row + 0.96))
                strength[name].append(abs(value))
                if n <= WRITTEN:
                    text = f"{round(value, 2) + 0.0:.2f}".replace("-", "−")
                    notes.append(Note(column + 0.5, n - 1 - row + 0.5, text, "middle"))
        if both[0] is not None and np.isfinite(both[1]):
            gaps.append(abs(both[0] - both[1]))
        rows.append((pair.a.name, pair.b.name, *(row[0] for row in texts([np.nan if both[0] is None else both[0]])),
                     *(row[0] for row in texts([both[1]]))))  # fmt: skip
    cells = [
        Cells(np.array(corners[name]), name, label, np.array(strength[name]))
        for name, label in (("stated", "stated, above the diagonal"), ("seen", "seen, below it"))
        if corners[name]
    ]
    numbers = range(1, n + 1, 1 if n <= WRITTEN else 2)
    x = Axis(0.0, float(n), tuple((k - 0.5, str(k)) for k in numbers))
    y = Axis(0.0, float(n), tuple((n + 0.5 - k, str(k)) for k in numbers))
    says = f"the furthest seen from stated is off by {max(gaps):.2g}" if gaps else "what they should be is not known"
    named = ", ".join(f"{k} {s.name}" for k, s in enumerate(subjects, start=1)) if n <= WRITTEN else "as in the spec"
    caption = f"Correlations at the same step; {says}. Series by number: {named}."
    head, high = ("first", "second", "stated", "seen"), max(28.0, 8.0 + 2.0 * n)
    title = "Correlations between series"
    return Chart(title, caption, x, y, [*cells, *notes], head, rows, grid=False, high=high)
