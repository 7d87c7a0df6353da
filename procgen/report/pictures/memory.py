"""Pictures of memory: correlograms of values and of their squares, stated and seen."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.report.pictures.chart import Axis, Band, Chart, Dots, Mark, Stems
from procgen.report.pictures.seen import ENOUGH, across, correlogram
from procgen.report.pictures.stated import fisher
from procgen.report.pictures.subject import Subject, share, texts
from procgen.report.pictures.ticks import axis
from procgen.spec.records import dataclass

LAGS, MOST_LAGS = 40, 120


@dataclass
class Comparison:
    """Correlations at lags, as stated and as seen; None is what is not known.

    Attributes
    ----------
    low, high : where chance leaves a seen one 95 times in 100
    how : where these ends are from
    reason : why there is nothing stated
    whose : whose values were looked at
    own : of a series with itself, so that the one at lag 0 is 1 whatever happens
    """

    lags: NDArray
    stated: NDArray | None
    seen: NDArray | None
    low: NDArray | None = None
    high: NDArray | None = None
    how: str = ""
    reason: str | None = None
    whose: str = ""
    own: bool = True

    def around(self, reach: NDArray | None, how: str) -> Comparison:
        """The same with a band of chance that reaches so far from what is stated, or from 0."""
        if reach is not None:
            centre = self.stated if self.stated is not None else np.zeros(len(self.lags))
            self.low, self.high, self.how = centre - reach, centre + reach, how
        return self

    def chart(self, title: str) -> Chart:
        """Seen correlations as stems, stated ones as dots on them, and what chance allows as a band."""
        if self.own and self.low is not None and self.high is not None:
            self.low, self.high = (np.where(self.lags == 0, np.nan, x) for x in (self.low, self.high))
        marks: list[Mark] = []
        if self.low is not None and self.high is not None:
            about = "95 % of chance" if self.stated is not None else "95 % of chance around 0"
            marks.append(Band(self.lags, self.low, self.high, "chance", about))
        if self.seen is not None:
            marks.append(Stems(self.lags, self.seen, "seen", self.whose))
        if self.stated is not None:
            marks.append(Dots(self.lags, self.stated, "stated", "stated"))
        head: list[str] = ["lag"]
        columns: list[Any] = [[str(k).replace("-", "−") for k in self.lags]]
        for name, column in (("stated", self.stated), ("seen", self.seen), ("from", self.low), ("to", self.high)):
            if column is not None:
                head, columns = [*head, name], [*columns, column]
        rows = texts(*columns)
        return Chart(title, self.caption(), self._across(), self._up(), marks, tuple(head), rows, zero=True)

    def caption(self) -> str:
        if self.stated is None:
            return f"Seen correlations only; what they should be is not known: {self.reason or 'no closed form'}."
        if self.seen is None:
            return "The stated correlations alone: there are too few paths to show them across paths."
        if not np.isfinite(self.seen).any():
            return "The stated correlations alone: there are too few steps to show any."
        if self.low is None or self.high is None:
            far = float(np.nanmax(np.abs(self.seen - self.stated)))
            return f"No seen one is further than {far:.2g} from the stated one; paths are too few for a band of chance."
        asked = np.isfinite(self.low)
        inside = ((self.low <= self.seen) & (self.seen <= self.high))[asked]
        return (
            f"{share(inside)} lags lie within what chance allows each of them ({self.how}); "
            "neighbouring lags err together."
        )

    def _up(self) -> Axis:
        shown = [x[np.isfinite(x)] for x in (self.stated, self.seen, self.low, self.high) if x is not None]
        known = np.concatenate([np.zeros(1), *shown])
        low, high = float(known.min()), float(known.max())
        if self.own:
            high = max(high, 1.0)
        elif high - low < 0.2:
            low, high = min(low, -0.1), max(high, 0.1)
        return axis(low, high, most=5, room=0.04)

    def _across(self) -> Axis:
        found = axis(float(self.lags[0]), float(self.lags[-1]), "lag in steps")
        pad = 0.02 * (found.high - found.low)
        whole = tuple((v, t) for v, t in found.ticks if v == round(v))
        return Axis(found.low - pad, found.high + pad, whole, found.label)


def autocorrelations(subject: Subject) -> Chart | None:
    """The correlogram of the values: pooled over steps where that is allowed, else across paths from one step."""
    if subject.stated.still or subject.steps < 3:
        return None
    return _pooled(subject) if subject.stated.pooled else _from_one_step(subject)


def squares(subject: Subject) -> Chart | None:
    """The correlogram of squared deviations, for series whose sizes may remember."""
    stated, d = subject.stated, subject.deviations
    if stated.theory.gaussian or not stated.volatile or not stated.pooled or subject.steps < 3 or d is None:
        return None
    lags, size = _lags(subject), d * d
    found = correlogram(size - np.nanmean(size), lags)
    truth = stated.squares(lags, 0)
    reason = stated.theory.reason("autocovariance_of_squares")
    compared = Comparison(lags, truth, found.value, reason=reason, whose=f"{subject.whose()}, all steps")
    if subject.paths >= ENOUGH:
        compared.around(*stated.chance(lags, found.error, subject.paths))
    return compared.chart("Autocorrelation of squared deviations")


def _lags(subject: Subject) -> NDArray:
    most = min(MOST_LAGS, max(LAGS, int(1.5 * (subject.stated.period or 0))))
    return np.arange(0, min(most, (subject.steps - 1) // 2 or 1) + 1)


def _pooled(subject: Subject) -> Chart | None:
    d, lags = subject.deviations, _lags(subject)
    if d is None:
        return None
    found = correlogram(d, lags)
    stated = subject.stated.correlation(lags, 0)
    reason = subject.stated.theory.reason("autocorrelation")
    compared = Comparison(lags, stated, found.value, reason=reason, whose=f"{subject.whose()}, all steps")
    return compared.around(*subject.stated.chance(lags, found.error, subject.paths)).chart("Autocorrelation")


def _from_one_step(subject: Subject) -> Chart | None:
    """Correlations of the value at a middle step with later ones."""
    first = subject.steps // 2
    lags = np.arange(0, min(LAGS, subject.steps - 1 - first) + 1)
    stated = subject.stated.correlation(lags, first)
    seen, used = across(subject.values[:, first], subject.values[:, first : first + len(lags)])
    if stated is None and used < 3:
        return None
    compared = Comparison(lags, stated, seen if used >= 3 else None, whose=f"{used:,} paths")
    compared.reason = subject.stated.theory.reason("autocorrelation")
    if stated is not None and used >= 10:
        compared.low, compared.high = fisher(stated, used)
        compared.how = "by Fisher's formula"
    return compared.chart(f"Autocorrelation from step {first:,} on")
