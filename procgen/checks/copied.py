"""What copies of paths make of all else that is looked at.

Where m paths are the same, they count m times in every sum over paths: the variance of a mean is larger by the factor
f = Σm²/Σm (Kish 1965, Survey sampling, section 8.2, of cases with weights), and only n/f paths tell of anything. So
the tail that a sum lies in is that of a p about its f-th root, and sums of squares by step, each of which is a sum over
paths, are larger by f themselves.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from procgen.checks import tails
from procgen.checks.words import BY_PHASE, CUT, FARTHEST, FARTHEST_SHOCK
from procgen.spec.records import dataclass

if TYPE_CHECKING:
    from procgen.checks.verdict import Check

_LIKE = 2.0  # times what copies make on average is still laid to them
_FEW = 8.0  # different paths, in effect, of which one cannot say what is behind all that is off about them
_STEPS = 11.5  # log of the number of steps, of which the worst is told, at most


@dataclass(frozen=True)
class Copied:
    """How many paths there are, the factor f, and the share of paths that equal the one before."""

    paths: int
    factor: float
    beside: float

    @classmethod
    def of(cls, prints: NDArray) -> Copied:
        """From the fingerprints of the paths, in their order."""
        counts = np.unique(prints, return_counts=True)[1].astype(float)
        beside = float(np.mean(prints[1:] == prints[:-1])) if len(prints) > 1 else 0.0
        return cls(len(prints), float(np.sum(counts**2) / np.sum(counts)), beside)

    def explains(self, row: Check, needed: float) -> bool:
        """Whether a departure is no more than copies make; `needed` is the −log p from which on something departs."""
        few = self.paths < _FEW * self.factor
        if row.what in (FARTHEST, FARTHEST_SHOCK):
            return row.note.startswith(CUT) and (few or -(row.log_p or 0.0) <= self.factor * needed)
        lone = row.probe.startswith("worst: path")
        if row.log_p is None or row.kind == "structure" or lone or row.estimate is None:
            return False
        if row.what.endswith("neighbouring paths"):
            return abs(row.estimate - (row.theory or 0.0)) <= _LIKE * self.beside
        if few:
            return True
        if row.probe.startswith("worst"):
            return row.estimate**2 / (2.0 * self.factor) <= needed + _STEPS
        if row.standard_error and row.what.endswith((" by step", BY_PHASE)):
            sized = self.paths * row.standard_error**2
            steps = float(row.probe.split()[-1]) - 1.0 if row.what == BY_PHASE else 2.0 / sized**2
            squares = steps + (row.estimate / row.standard_error) ** 2 * math.sqrt(2.0 * steps)
            return -tails.chi_square(squares / self.factor, steps)[0] <= needed
        return -row.log_p <= self.factor * needed
