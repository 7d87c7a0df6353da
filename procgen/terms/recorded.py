"""A known input: a recorded series, the same on every path."""

from __future__ import annotations

import numpy as np

from procgen.spec.columns import Column
from procgen.spec.declare import Choice, Parameter
from procgen.terms.base import number
from procgen.terms.level import Known
from procgen.terms.support import finite


class Given(Known):
    kind = "given"
    family = "level and shape"
    purpose = "a known input, such as a measured temperature: numbers from a file or from the spec, one a step"
    source = "common practice, no source"
    example = "given: {values: [3, 5, 4, 6], after: repeat}"
    knows = "mean; no variance"
    short = "values"
    parameters = (
        Parameter(
            "values",
            "v",
            Column(),
            "the numbers from step 0 on, or a column of a file, whose numbers then become a part of the spec",
            unit="series",
        ),
        Parameter(
            "after",
            "",
            Choice("stop", "hold", "repeat"),
            "what follows the last number: nothing, so that no more steps can be asked for; itself; all from step 0 on",
            default="stop",
        ),
    )

    def __init__(self, values):
        super().__init__(values)
        recorded = self.values["values"]
        self.numbers, self.first = np.array(recorded.numbers), recorded.first
        if self.after == "stop":
            self.longest = len(self.numbers) + self.first  # type: ignore[misc]

    no_past = "its numbers begin there; give earlier ones, or lag less"

    def past(self):
        return -self.first

    def at(self, steps):
        place, ahead = steps - self.first, len(self.numbers) + self.first
        if self.after == "repeat":
            place = np.where(steps >= 0, steps % ahead, steps) - self.first
        return self.numbers[np.clip(place, 0, len(self.numbers) - 1)]

    def support(self, *inputs):
        return finite(self.numbers.tolist())

    def equation(self, *inputs):
        ahead = len(self.numbers) + self.first
        then = {"stop": "", "hold": ", then the last", "repeat": ", again and again"}[self.after]
        shown = ", ".join(number(v) for v in self.numbers[-self.first :][:3])
        return f"x[t] = {shown}{', …' if ahead > 3 else ''} ({ahead:,} numbers{then})"
