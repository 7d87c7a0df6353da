"""A pattern that repeats: harmonics of a period, or a profile of values."""

from __future__ import annotations

import numpy as np

from procgen.chance.portable import cos_turns
from procgen.spec.declare import Choice, Moment, Parameter, Real, Reals, Records, Span, Whole
from procgen.terms.base import number, signed, steps_since
from procgen.terms.level import Known
from procgen.terms.rows import alike


class Seasonal(Known):
    kind = "seasonal"
    family = "level and shape"
    purpose = "a pattern that repeats with a period: a sum of harmonics, or a profile of values"
    source = "common practice, no source"
    example = "seasonal: {period: 24, harmonics: [{amplitude: 42, peak: 18}, {amplitude: 9}]}"
    knows = "mean; no variance"
    by_rows = ("harmonics", "profile")
    begins_by_rows = True
    parameters = (
        Parameter("period", "P", Span(), "length of one cycle", unit="steps"),
        Parameter(
            "harmonics",
            "",
            Records(
                Parameter("amplitude", "A", Real(), "half the height from trough to peak", unit="series"),
                Parameter("peak", "τ", Moment(), "where it is highest", default=0.0, unit="steps"),
                Parameter(
                    "order",
                    "k",
                    Whole(at_least=1),
                    "cycles a period; its place in the list when absent",
                    default=None,
                ),
            ),
            "harmonic k adds A·cos(2πk(t − τ)/P)",
            default=(),
        ),
        Parameter(
            "profile",
            "",
            Reals(),
            "the values of one cycle, of equal length each",
            default=None,
            unit="series",
        ),
        Parameter("first", "τ", Moment(), "where the profile begins", default=0.0, unit="steps"),
        Parameter(
            "centre",
            "",
            Choice("sum", "mean", "none"),
            "profile shifted to sum to 0 (`sum`), scaled to average 1 (`mean`), or as it stands (`none`)",
            default="sum",
        ),
    )

    @classmethod
    def check(cls, values):
        if bool(values["harmonics"]) == (values["profile"] is not None):
            yield "harmonics", "expected `harmonics` or a `profile`, exactly one of them; give one"
        if not values["period"] > 0:
            yield "period", f"expected a period above 0, got {number(values['period'])} steps"
        elif values["period"] < 2:
            yield (
                "period",
                f"expected a period of at least 2 steps, below which nothing of it is seen, got "
                f"{number(values['period'])}; take a longer period, or a shorter step (time.every)",
            )
        profile = values["profile"]
        if profile is not None and values["centre"] == "mean" and _total(profile) == 0:
            yield "profile", "expected a profile that does not sum to 0 for `centre: mean`; use `centre: sum`"

    def at(self, steps):
        return self._cycle(steps) if self.profile is None else self._profile(steps)

    def _cycle(self, steps):
        if not float(self.period).is_integer():
            return self._waves(steps)
        # An integer period is reduced in integers, so that a far step keeps its full precision; and each step of a
        # cycle is worked out once.
        cycle, place = int(self.period), steps % int(self.period)
        if steps.ndim == 0 or cycle >= len(steps) or steps.size > len(steps):
            return self._waves(place)
        return self._waves(np.arange(cycle).reshape(-1, *steps.shape[1:]))[place.ravel()]

    def _waves(self, steps):
        t = steps.astype(np.float64)
        x = np.zeros(steps.shape)
        for place, wave in enumerate(self.harmonics, start=1):
            turns = float(wave["order"] or place) * (t - wave["peak"]) / self.period
            x = x + wave["amplitude"] * cos_turns(turns)
        return x

    def _profile(self, steps):
        centred, total = np.array(alike(self.profile), dtype=np.float64), _total(self.profile)
        if self.centre == "sum":
            centred = centred - total / len(self.profile)
        elif self.centre == "mean":
            centred = centred * (len(self.profile) / total)
        place = np.floor((steps - self.first) * len(self.profile) / self.period).astype(np.int64)
        return centred[(place if centred.ndim == 1 else place[:, 0]) % len(self.profile)]

    def equation(self, *inputs):
        if self.profile is not None:
            return f"x[t] = profile of {len(self.profile)} values over {number(self.period)} steps"
        waves = []
        for place, wave in enumerate(self.harmonics, start=1):
            order = wave["order"] or place
            turns = f"cos(2π{'' if order == 1 else f'·{order}'}{steps_since(wave['peak'])}/{number(self.period)})"
            waves.append(signed(wave["amplitude"], turns))
        return "x[t] = " + " ".join(waves).removeprefix("+ ")


def _total(values):
    total = 0.0
    for value in values:
        total += value
    return total
