"""Effects of the local calendar: of the hour, weekday or month, of the turn of the year, and of holidays."""

from __future__ import annotations

import numpy as np

from procgen.chance.portable import cos_turns
from procgen.spec.declare import Parameter, Real, Reals, Records, Whole
from procgen.spec.local import CalendarDays, CalendarPart, EveryYear
from procgen.terms.base import Array, number, signed
from procgen.terms.level import Known

LOOKED_AT = 1_000_000  # steps that are looked at for a listed day


class Calendar(Known):
    kind = "calendar"
    family = "level and shape"
    purpose = "one value for each hour of the local day, weekday, month, or day of the year"
    source = "common practice, no source"
    example = "calendar: {by: weekday, values: [0, 0, 0, 0, -5, -20, -25]}"
    knows = "mean; no variance"
    parameters = (
        Parameter(
            "by",
            "",
            CalendarPart(),
            "24 hours of the day, 7 weekdays or 168 hours from Monday on, 12 months, 31 days of the month, or 366 days "
            "of the year (29 February has its own), by the local clock where a step begins",
        ),
        Parameter("values", "v", Reals(), "its values in order", unit="series"),
    )

    @classmethod
    def check(cls, values):
        size, given = values["by"].size, len(values["values"])
        if given != size:
            yield "values", f"expected {size} values for by: {values['by'].unit}, got {given}; give one for each"

    def at(self, steps: Array) -> Array:
        return np.array(self.values["values"], np.float64)[self.by.places(steps)]

    def equation(self, *inputs):
        return f"x[t] = v[{self.by.unit} of t],  {self.by.size} values"


class Annual(Known):
    kind = "annual"
    family = "level and shape"
    purpose = "waves through the local calendar year, each year as long as it is: no leap day moves them"
    source = "common practice, no source"
    example = "annual: {harmonics: [{amplitude: 8, peak: 07-20}]}"
    knows = "mean; no variance"
    parameters = (
        Parameter(
            "harmonics",
            "",
            Records(
                Parameter("amplitude", "A", Real(), "half the height from trough to peak", unit="series"),
                Parameter("peak", "τ", EveryYear(), "the day at whose beginning it is highest"),
                Parameter("order", "k", Whole(at_least=1), "cycles a year; its place in the list when absent", None),
            ),
            "harmonic k adds A·cos(2πk(days since τ)/(days of the year))",
        ),
    )

    def at(self, steps: Array) -> Array:
        x = np.zeros(steps.shape)
        for place, wave in enumerate(self.harmonics, start=1):
            turns = float(wave["order"] or place) * wave["peak"].turns(steps)
            x = x + wave["amplitude"] * cos_turns(turns)
        return x

    def equation(self, *inputs):
        waves = []
        for place, wave in enumerate(self.harmonics, start=1):
            order, peak = wave["order"] or place, wave["peak"]
            day = f"(days since {peak.month:02}-{peak.day:02})/(days of the year)"
            waves.append(signed(wave["amplitude"], f"cos(2π{'' if order == 1 else order}{day})"))
        return "x[t] = " + " ".join(waves).removeprefix("+ ")


class Holidays(Known):
    kind = "holidays"
    family = "level and shape"
    purpose = "a shift on listed days of the local calendar; if wanted, on the days beside them too"
    source = "common practice, no source"
    example = "holidays: {days: [2027-01-05, 12-25], size: -30, day_before: -8}"
    knows = "mean; no variance"
    parameters = (
        Parameter("days", "", CalendarDays(), "the days; 12-25 is that day of every year"),
        Parameter("size", "ω", Real(), "the shift on these days", unit="series"),
        Parameter("day_before", "ω₋", Real(), "the shift on the day before one", default=0.0, unit="series"),
        Parameter("day_after", "ω₊", Real(), "the shift on the day after one", default=0.0, unit="series"),
    )

    def at(self, steps: Array) -> Array:
        today, after = self.days.hit(steps), self.days.hit(steps, -1)
        x = np.where(today, self.size, 0.0)
        # A day between two holidays is before one and after the other; a holiday itself is neither.
        for size, hit in ((self.day_before, self.days.hit(steps, 1)), (self.day_after, after)):
            x = x + np.where(hit & ~today, size, 0.0)
        return x

    def unfelt(self, steps):
        if steps <= LOOKED_AT and not any(self.days.hit(np.arange(steps), d).any() for d in (-1, 0, 1)):
            yield "has none of its days, nor one beside them, within the steps: no value shows it"

    def equation(self, *inputs):
        count = len(self.days.single) + len(self.days.yearly)
        days = "day" if count == 1 else "days"
        beside = [(self.day_before, "the day before"), (self.day_after, "the day after")]
        text = "".join(f", {number(size)} on {when}" for size, when in beside if size)
        return f"x[t] = {number(self.size)} on {count} listed {days}{text}, else 0"
