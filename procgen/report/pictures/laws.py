"""Pictures of one value: its variance against the step, its density, and its quantiles against the stated ones."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.words import number
from procgen.report.pictures.chart import Axis, Band, Chart, Dots, Line, Mark, bars
from procgen.report.pictures.seen import (
    ENOUGH,
    fewest_inside,
    grain_of,
    histogram,
    ordered,
    rank_chances,
    variance_intervals,
)
from procgen.report.pictures.subject import Subject, share, some, texts
from procgen.report.pictures.ticks import axis, step_axis

CURVE = 160  # points of a density
LOOKED_AT = 48  # steps at which variances are shown


def variance(subject: Subject) -> Chart | None:
    """Variance across paths at some steps, with intervals, against the stated one."""
    line = some(subject.steps, 240)
    stated = subject.stated.variance(line)
    at = some(subject.steps, LOOKED_AT)
    enough = subject.paths > 2
    if not enough and (stated is None or float(np.ptp(stated)) <= 1e-9 * float(stated.max())):
        return None  # a level line alone is not worth a figure
    marks: list[Mark] = [] if stated is None else [Line(line, stated, "stated", "stated")]
    head: list[str] = ["step"]
    columns: list[Any] = [[str(t) for t in at]]
    seen = None
    if enough:
        seen, low, high = variance_intervals(subject.values[:, at], subject.stated.theory.gaussian)
        marks.append(Dots(at, seen, "seen", f"{subject.paths:,} paths, 95 % interval", low, high))
    truth = None if stated is None else subject.stated.variance(at)
    if truth is not None:
        head, columns = [*head, "stated"], [*columns, truth]
    if seen is not None:
        head, columns = [*head, "seen", "from", "to"], [*columns, seen, low, high]
    caption = _variance_caption(subject, seen, truth, (low, high) if seen is not None else None)
    tops = [x[np.isfinite(x)] for x in (stated, seen, high if seen is not None else None) if x is not None]
    y = axis(0.0, 1.04 * max((float(t.max()) for t in tops if len(t)), default=1.0), most=5)
    unit = f", {_squared(subject.unit)}" if subject.unit else ""
    x = step_axis(subject.grid, 0, subject.steps - 1, room=0.012)
    return Chart(f"Variance against the step{unit}", caption, x, y, marks, tuple(head), texts(*columns))


def _squared(unit: str) -> str:
    return f"{unit}²" if unit.isalpha() else f"({unit})²"


def _variance_caption(subject: Subject, seen: Any, truth: Any, ends: Any) -> str:
    if seen is None:
        return f"The stated variance alone: {subject.whose()} cannot show a variance across paths."
    if truth is None:
        return f"Seen variances only: {subject.stated.theory.reason('variance')}."
    known = np.isfinite(ends[0])
    if not known.any():
        return f"{subject.whose()} are too few to say how far these variances are off."
    room = 1e-9 * np.abs(truth) + subject.grain**2
    inside = (ends[0] - room <= truth) & (truth <= ends[1] + room)
    return f"{share(inside[known])} intervals cover the stated variance; about 95 in 100 do by chance alone."


def density(subject: Subject) -> Chart | None:
    """The values, as a histogram over all steps or at one of them, beside the stated density."""
    if subject.stated.still:
        return None
    look = _Look(subject)
    values, grain = look.values, 0.0 if look.shift else grain_of(look.values, subject.grain)
    edges, heights = histogram(values, grain)
    x = np.linspace(edges[0], edges[-1], CURVE + 1)
    curve, name = look.curve(x)
    few = values[np.isfinite(values)].size < 30
    marks: list[Mark] = []
    if curve is not None and name == "stated" and grain:
        # Probabilities of the cells themselves: the law of what is rounded, or whole, has no smooth density.
        x, curve = _staircase(edges, look.cells(edges))
    if not few:
        marks.append(bars(edges, heights, "seen", look.whose))
    if curve is not None:
        marks.append(Line(x, curve, "stated" if name == "stated" else "compare", name))
    top = max([float(heights.max()) if not few else 0.0, float(np.max(curve)) if curve is not None else 0.0])
    if few:
        found = np.sort(values[np.isfinite(values)])
        marks.append(Dots(found, np.zeros(len(found)), "seen", look.whose))
    if not top > 0:
        return None
    cells = look.cells(edges) if name == "stated" else None
    middle = (edges[:-1] + edges[1:]) / 2
    head, columns = ["middle of the cell", "seen"], [middle, heights]
    if cells is not None:
        head, columns = [*head, "stated"], [*columns, cells]
    y = Axis(0.0, 1.05 * top, (), "")
    x_axis = axis(float(edges[0]), float(edges[-1]), look.counted)
    return Chart(f"Density {look.where}", look.caption(name), x_axis, y, marks, tuple(head), texts(*columns))


def quantile_plot(subject: Subject) -> Chart | None:
    """Quantiles of the sample against the stated ones, with 95 % bands where the values are independent."""
    if subject.stated.still:
        return None
    look = _Look(subject, one_step=subject.paths >= ENOUGH)
    ranks, found = ordered(look.values)
    n = int(np.isfinite(look.values).sum())
    if n < 8:
        return None
    law, name = look.law_or_normal()
    if law is None:
        return None
    middle, low, high = (np.asarray(law.ppf(p), float) for p in rank_chances(ranks, n))
    good = np.isfinite(middle)
    ranks, found, middle, low, high = (x[good] for x in (ranks, found, middle, low, high))
    role = "stated" if name == "stated" else "compare"
    ends = np.array([middle[0], middle[-1]])
    marks: list[Mark] = []
    if look.independent:
        marks.append(Band(middle, low, high, "chance", "95 % of chance"))
    marks.append(Line(ends, ends, role, "as stated" if name == "stated" else name))
    marks.append(Dots(middle, found, "seen", look.whose))
    caption = f"Points on the line mean the stated law ({look.where})"
    if name != "stated":
        caption = (
            f"Its own law has no closed form: points off the line show how it differs from a normal one ({look.where})"
        )
    elif look.independent:
        room = subject.grain / 2
        inside = (found >= low - room) & (found <= high + room)
        least = fewest_inside(ranks, n)
        few = "too few: " if inside.sum() < least else ""
        caption = (
            f"{share(inside)} points shown lie within what chance allows each of them ({look.where}); {few}{least} or "
            "more do in 99 of 100 samples, for neighbours move together"
        )
    y = axis(float(min(found.min(), middle.min())), float(max(found.max(), middle.max())), most=5, room=0.03)
    counted = "stated quantile" if name == "stated" else "quantile of a normal law"
    x = axis(float(middle.min()), float(middle.max()), counted + look.unit, room=0.03)
    columns = [[str(k) for k in ranks], middle, low, high, found]
    head = ("rank", "stated", "from", "to", "seen")
    pick = some(len(ranks), 24)
    rows = [row for i, row in enumerate(texts(*columns)) if i in set(pick.tolist())]
    return Chart("Quantiles of the sample against stated ones", caption + ".", x, y, marks, head, rows)


class _Look:
    """The values that are looked at: deviations over all steps where their law is one, else the values at one step."""

    def __init__(self, subject: Subject, one_step: bool = False):
        stated, steps = subject.stated, subject.steps
        self.subject, self.step = subject, steps - 1
        moving = stated.mean(np.arange(min(steps, 4096)))
        self.still_mean = moving is not None and float(np.ptp(moving)) <= 1e-12 * float(np.abs(moving).max(initial=1.0))
        self.shift, self.independent = 0.0, False
        if stated.steady and not one_step and moving is not None:
            self.values, self.where = self._pooled(), "over all steps"
            self.whose = f"all values of {subject.whose()}"
            if not self.still_mean:
                self.where += ", less the mean"
        else:
            self.values = subject.values[:, self.step]
            self.where, self.independent = f"at step {self.step:,}", True
            self.whose = f"{subject.whose()} at that step"
        self.unit = f", {subject.unit}" if subject.unit else ""
        self.counted = (f"less the mean{self.unit}" if self.shift else subject.unit or "").strip(", ")
        self.law = stated.law(self.step)

    def _pooled(self) -> NDArray:
        subject = self.subject
        if self.still_mean:
            return subject.values.ravel()
        mean = subject.stated.mean(np.arange(subject.steps))
        at_last = subject.stated.mean(np.array([self.step]))
        assert mean is not None and at_last is not None
        self.shift = float(at_last[0])
        return (subject.values - mean).ravel()

    def law_or_normal(self) -> tuple[Any, str]:
        """The law of what is looked at and "stated", or the normal law of its mean and sd and its name."""
        from scipy import stats

        if self.law is not None:
            return _Shifted(self.law, self.shift), "stated"
        at = np.array([self.step])
        mean, variance = self.subject.stated.mean(at), self.subject.stated.variance(at)
        if mean is None or variance is None or not variance[0] > 0:
            some_values = self.values[np.isfinite(self.values)]
            if len(some_values) < 3 or not some_values.std() > 0:
                return None, ""
            return stats.norm(some_values.mean(), some_values.std()), "a normal law of the sample's mean and sd"
        sd = float(np.sqrt(variance[0]))
        return stats.norm(float(mean[0]) - self.shift, sd), "a normal law of stated mean and sd"

    def curve(self, x: NDArray) -> tuple[NDArray | None, str]:
        """A density at x, and whose."""
        law, name = self.law_or_normal()
        if law is None:
            return None, ""
        with np.errstate(invalid="ignore"):  # cells too narrow for the digits of their place
            return np.diff(law.cdf(_around(x))) / np.diff(_around(x)), name

    def cells(self, edges: NDArray) -> NDArray:
        """The stated mean density in each cell."""
        law, _ = self.law_or_normal()
        with np.errstate(invalid="ignore"):
            return np.diff(np.asarray(law.cdf(edges), float)) / np.diff(edges)

    def caption(self, name: str) -> str:
        known = self.values[np.isfinite(self.values)]
        if name != "stated":
            reason = self.subject.stated.theory.reason("marginal") or "it is not known"
            beside = f"; the dashed curve is {name}, for comparison" if name else ""
            return f"Its own density has no closed form ({reason}){beside}."
        law, _ = self.law_or_normal()
        low, high = (float(law.ppf(p)) for p in (0.05, 0.95))
        grain, room = self.subject.grain, self.subject.grain / 2
        if grain:  # the places of a law on a grid are computed, and hence beside it by rounding errors
            low, high = (round(x / grain, 6) * grain + 0.0 for x in (low, high))
        inside = 100.0 * float(((known >= low - room) & (known <= high + room)).mean()) if len(known) else 0.0
        ends = f"{number(low)} and {number(high)}"
        chance = f", give or take {196 * np.sqrt(0.09 / len(known)):.1f}" if self.independent and len(known) else ""
        return f"{inside:.1f} % of the values lie between {ends}, where 90 % are stated to be{chance}."


class _Shifted:
    """A law less a number."""

    def __init__(self, law: Any, shift: float):
        self.law, self.shift = law, shift

    def cdf(self, x: Any) -> NDArray:
        return np.asarray(self.law.cdf(np.asarray(x) + self.shift), float)

    def ppf(self, p: Any) -> NDArray:
        return np.asarray(self.law.ppf(p), float) - self.shift


def _around(x: NDArray) -> NDArray:
    """The edges of cells around evenly spread points."""
    half = (x[1] - x[0]) / 2
    return np.concatenate([x - half, [x[-1] + half]])


def _staircase(edges: NDArray, heights: NDArray) -> tuple[NDArray, NDArray]:
    return np.repeat(edges, 2)[1:-1], np.repeat(heights, 2)
