"""What is not known of where the parts of a series stand, when it leaves from its recorded past.

Of a sum, the past tells where each part stands only up to a normal deviation. The parts run from the mean of what is
known; the path of the deviation is a part of its own, c Aᵗ L z, whose standard normals z are drawn once a path.
"""

from __future__ import annotations

import numpy as np

from procgen.chance.laws import Normal
from procgen.terms.base import Ahead, Draw, Term

OPEN = "open_start"
NORMAL = Normal()


class OpenStart(Term):
    """c Aᵗ L z with z drawn at steps −k … −1; not a kind that a spec can name.

    Parameters (in `values`)
    ----------
    row : c, one number an element of the state
    transition : A, as triples (row, column, number) of what is not 0
    loading : L, the state at step 0, a row of k numbers an element
    """

    def __init__(self, values):
        super().__init__(values)
        self.kind = OPEN  # type: ignore[misc]
        self.count = len(self.loading[0]) if self.loading else 0

    no_past = "the parts of a series that leaves from its recorded past begin at step 0; lag less"

    def draws(self):
        return (Draw("open", NORMAL),) if self.count else ()

    def past(self):
        return 0

    def reach(self, head):
        return (self.count,) * self.arity

    def begin(self, before):
        z = before.inputs[0][len(before.inputs[0]) - self.count :] if self.count else np.zeros((0, 1))
        return None, {"z": z, "row": np.array(self.row, np.float64).reshape(-1, 1)}

    def recurse(self, inputs, state, at):
        z, row = state["z"], state["row"][:, 0]
        out = np.zeros((len(at), z.shape[1]))
        for t, weights in enumerate(self._responses(row, len(at))):
            for weight, shock in zip(weights.tolist(), z, strict=True):
                if weight != 0.0:
                    out[t] = out[t] + weight * shock
        return out, {"z": z, "row": self._row[:, None]}

    def _responses(self, row, steps):
        """c Aᵗ L for so many steps from c Aᵗ = `row` on; the row that comes next is left in `_row`."""
        loading = np.array(self.loading, np.float64).reshape(len(row), self.count)
        for _ in range(steps):
            weights = np.zeros(self.count)
            for i in range(len(row)):
                if row[i] != 0.0:
                    weights = weights + row[i] * loading[i]
            yield weights
            following = np.zeros(len(row))
            for i, j, weight in self.transition:
                following[j] = following[j] + row[i] * weight
            row = following
        self._row = row

    def ahead(self, steps, state, *inputs):
        mean, _ = self.recurse(inputs, state, steps)
        return Ahead(mean, np.zeros_like(mean))

    def moments(self, axis, *inputs):
        if not self.count:
            return axis.level(0.0)
        transition = np.zeros((len(self.row), len(self.row)))
        for i, j, weight in self.transition:
            transition[i, j] = weight
        loading = np.array(self.loading, np.float64)
        return axis.left_open(self.address, NORMAL, transition, loading, np.array(self.row, np.float64))

    def equation(self, *inputs):
        if not self.count:
            return "x[t] = 0"
        spread = np.zeros(1)
        for weight in next(self._responses(np.array(self.row, np.float64), 1)):
            spread = spread + weight * weight
        normals = f"{self.count} standard normal{'s' if self.count > 1 else ''}"
        return f"x[t] = what the past leaves open of the other parts, made of {normals} a path; sd at step 0 " + (
            f"{float(np.sqrt(spread)[0]):.6g}"
        )
