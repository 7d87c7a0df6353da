"""Pictures of a season: the mean, and the spread, of each of its phases over all its rounds, stated and seen."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.words import number
from procgen.report.pictures.chart import Axis, Band, Chart, Dots, Line, Mark
from procgen.report.pictures.seen import ENOUGH, NORMAL
from procgen.report.pictures.subject import Subject, share, texts
from procgen.report.pictures.ticks import axis, step_axis
from procgen.spec.records import dataclass

MOST = 48  # points of a season; of a longer one, neighbouring phases are taken together
LEVEL = 0.2  # share of a standard deviation that its axis spans at least: what is level is to look so
LEAST = 3  # steps of a season that is worth a figure: of two phases, the numbers say it all


def seasons(subject: Subject) -> Iterator[Chart]:
    """The mean of each phase, and its standard deviation where there are paths enough; nothing without a season.

    The season is the longest one that comes round twice at least.
    """
    period = max((p for p in subject.seasons if LEAST <= p <= subject.steps // 2), default=None)
    if period is None or subject.stated.still or not np.isfinite(subject.values).any():
        return
    phases = _Phases(subject, period)
    yield phases.mean()
    if subject.paths >= ENOUGH:
        yield phases.spread()


@dataclass
class _Points:
    """A number of each phase, as stated and as seen; `reach` is how far chance moves a seen one 95 times in 100."""

    stated: NDArray | None
    seen: NDArray
    reach: NDArray | None = None
    how: str = ""
    reason: str = ""


class _Phases:
    """The steps of a series by their phase, neighbouring ones together where a season is long."""

    def __init__(self, subject: Subject, period: int):
        self.subject, self.period = subject, period
        self.width = -(-period // MOST)
        self.of_step = (np.arange(subject.steps) % period) // self.width
        self.count = int(self.of_step[:period].max()) + 1
        self.steps = [np.flatnonzero(self.of_step == k) for k in range(self.count)]
        ends = [min((k + 1) * self.width, period) - 1 for k in range(self.count)]
        self.at = np.array([(k * self.width + end) / 2 for k, end in enumerate(ends)])

    def mean(self) -> Chart:
        """Means of values: they move with the stated mean, so that a trend is in both."""
        subject = self.subject
        every = np.arange(subject.steps)
        stated = subject.stated.mean(every)
        level = np.zeros(subject.steps) if stated is None else stated
        base = self._over_steps(level)
        of_paths = self._by_path(subject.values - level)
        points = _Points(None if stated is None else base, base + _mean(of_paths))
        points.reason = str(subject.stated.theory.reason("mean") or "no closed form")
        error, points.how = self._error(of_paths)
        points.reach = None if error is None else NORMAL * error
        return self._chart("Mean by phase of the season", subject.unit, points)

    def spread(self) -> Chart:
        """Standard deviations about the mean of each step."""
        subject = self.subject
        variance = subject.stated.variance(np.arange(subject.steps))
        stated = None if variance is None else np.sqrt(self._over_steps(variance))
        d = subject.deviations
        assert d is not None  # there are paths enough for a mean of their own
        n = np.isfinite(d).sum(axis=0)
        with np.errstate(divide="ignore", invalid="ignore"):
            squares = self._by_path(np.square(d) * np.where(n > 1, n / (n - 1), np.nan))
        seen = np.sqrt(_mean(squares))
        error, how = self._error(squares)
        centre = seen if stated is None else stated
        with np.errstate(divide="ignore", invalid="ignore"):
            # In shares of what is seen: samples that spread little have small errors, too.
            reach = None if error is None else np.where(seen > 0, NORMAL * error / (2 * seen**2) * centre, np.nan)
        points = _Points(stated, seen, reach, how, str(subject.stated.theory.reason("variance") or "no closed form"))
        return self._chart("Standard deviation by phase of the season", subject.unit, points, least=LEVEL)

    def _over_steps(self, numbers: NDArray) -> NDArray:
        return np.array([numbers[steps].mean() for steps in self.steps])

    def _by_path(self, numbers: NDArray) -> NDArray:
        """Means over the steps of each phase, (paths, phases); NaN where a path has none there."""
        out = np.empty((len(numbers), self.count))
        for k, steps in enumerate(self.steps):
            part = numbers[:, steps]
            known = np.isfinite(part)
            counts = known.sum(axis=1)
            out[:, k] = np.where(counts > 0, np.where(known, part, 0.0).sum(axis=1) / np.maximum(counts, 1), np.nan)
        return out

    def _error(self, of_paths: NDArray) -> tuple[NDArray | None, str]:
        """Standard errors of the means over paths, and where they are from; None where neither tells."""
        n = np.isfinite(of_paths).sum(axis=0)
        if self.subject.paths >= ENOUGH:
            with np.errstate(divide="ignore", invalid="ignore"):
                error = np.sqrt(_mean(np.square(of_paths - _mean(of_paths))) / (n - 1))
            return np.where(n >= ENOUGH, error, np.nan), "from the spread between paths"
        known = self._variances() if np.isfinite(self.subject.values).all() else None
        return (None, "") if known is None else (np.sqrt(known / self.subject.paths), "by the stated autocovariances")

    def _variances(self) -> NDArray | None:
        """Of the mean of a path at each phase: σ²/c (1 + 2 Σ (1 − k/c) ρ(k P)) of c rounds; None where not known."""
        stated, rounds = self.subject.stated, np.array([len(steps) for steps in self.steps])
        variance = stated.variance(np.zeros(1, dtype=int)) if stated.pooled and self.width == 1 else None
        lags = self.period * np.arange(1, int(rounds.max()))
        rho = None if variance is None else stated.correlation(lags, 0)
        if variance is None or rho is None:
            return None
        weights = np.maximum(1.0 - np.arange(1, len(lags) + 1) / rounds[:, None], 0.0)
        return float(variance[0]) / rounds * (1.0 + 2.0 * weights @ rho)

    def _chart(self, title: str, unit: str | None, points: _Points, least: float = 0.0) -> Chart:
        marks: list[Mark] = []
        head: list[str] = ["phase"]
        columns: list[Any] = [list(self._names())]
        centre, reach = points.seen if points.stated is None else points.stated, points.reach
        if reach is not None and points.stated is not None:
            marks.append(Band(self.at, centre - reach, centre + reach, "chance", "95 % of chance"))
        if points.stated is not None:
            marks.append(Line(self.at, points.stated, "stated", "stated"))
            head, columns = [*head, "stated"], [*columns, points.stated]
        marks.append(Dots(self.at, points.seen, "seen", self.subject.whose()))
        head, columns = [*head, "seen"], [*columns, points.seen]
        if reach is not None and points.stated is not None:
            head, columns = [*head, "from", "to"], [*columns, centre - reach, centre + reach]
        drawn = [points.seen, centre] + ([] if reach is None else [centre - reach, centre + reach])
        ends = np.concatenate([x[np.isfinite(x)] for x in drawn])
        low, high = float(ends.min()), float(ends.max())
        y = axis(min(low, (1 - least) * high), max(high, (1 + least) * low), most=5, room=0.06)
        called = f"{title}, {unit}" if unit else title
        return Chart(called, self._caption(points), self._across(), y, marks, tuple(head), texts(*columns))

    def _names(self) -> Iterator[str]:
        for k in range(self.count):
            first, last = k * self.width, min((k + 1) * self.width, self.period) - 1
            yield str(first) if first == last else f"{first}–{last}"

    def _across(self) -> Axis:
        found = step_axis(self.subject.grid, 0, self.period - 1, room=0.02)
        label = "step of the season" if self.subject.grid.start is None else f"first season: {found.label}"
        return replace(found, label=label)

    def _caption(self, points: _Points) -> str:
        rounds = number(self.subject.steps / self.period, 3)
        each = f", {self.width} neighbouring ones a point" if self.width > 1 else ""
        what = f"Phases of {self.period:,} steps over {rounds} rounds{each}"
        if points.stated is None:
            return f"{what}. Seen ones only; what they should be is not known: {points.reason}."
        if points.reach is None:
            far = float(np.nanmax(np.abs(points.seen - points.stated)))
            return f"{what}: no point is further than {far:.2g} from the line; paths are too few for a band of chance."
        asked = np.isfinite(points.reach) & np.isfinite(points.seen)
        inside = (np.abs(points.seen - points.stated) <= points.reach + self.subject.grain / 2)[asked]
        return (
            f"{what}: {share(inside)} points lie within what chance allows each of them ({points.how}); neighbouring "
            "ones err together."
        )


def _mean(of_paths: NDArray) -> NDArray:
    """Over paths, of those that are known; NaN where none is."""
    known = np.isfinite(of_paths)
    with np.errstate(invalid="ignore"):
        return np.where(known, of_paths, 0.0).sum(axis=0) / known.sum(axis=0)
