"""The time that passes from step to step, in steps of the mean length: for processes in continuous time."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from procgen.spec.calendar import Grid
from procgen.spec.domains import INVALID, Choice, Reading
from procgen.spec.records import dataclass
from procgen.spec.tree import Tree


@dataclass(frozen=True)
class Elapsed:
    """Lengths of the steps of a grid whose steps differ in length. Before step 0 all have the mean length."""

    grid: Grid

    @property
    def every(self) -> str:
        """The mean length of a step in words, such as "1 business day"."""
        return self.grid.length

    def lengths(self, steps: np.ndarray) -> np.ndarray:
        """The time from the step before to each step, in steps of the mean length: float64, at least 0."""
        later = np.maximum(np.asarray(steps, np.int64), 1)
        gone = (self.grid.moments(later) - self.grid.moments(later - 1)).astype(np.float64)
        return np.where(np.asarray(steps) > 0, gone / self._mean, 1.0)

    def times(self, steps: np.ndarray) -> np.ndarray:
        """The time from step 0 to each step, in steps of the mean length: float64."""
        steps = np.asarray(steps, np.int64)
        distinct, which = np.unique(np.maximum(steps, 0), return_inverse=True)
        gone = (self.grid.moments(distinct) - self.grid.moments(np.zeros(1, np.int64))).astype(np.float64)
        return np.where(steps >= 0, (gone / self._mean)[which].reshape(steps.shape), steps.astype(np.float64))

    @property
    def _mean(self) -> float:
        return float(self.grid.mean_length)


class Clock(Choice):
    """Whether all steps count alike (`steps`) or by their length (`time`); read as `steps`, or an Elapsed.

    Where all steps have one length, both are the same, and are read alike. Where times are listed, `time` is the
    default: who lists times means them.
    """

    def __init__(self) -> None:
        super().__init__("steps", "time")

    def read(self, tree: Tree, reader: Reading) -> Any:
        word = super().read(tree, reader)
        return self._of(tree, reader) if word == "time" else word

    def default(self, value: Any, reader: Reading) -> Any:
        grid = reader.grid
        return _elapsed(grid) if grid is not None and grid.at else value

    def _of(self, tree: Tree, reader: Reading) -> Any:
        grid = reader.grid
        if grid is None:  # the fault of `time` is already reported
            return INVALID
        if grid.even:
            return "steps"
        if grid.start is None:
            need = "needs time: {start: …, every: …}; give them, or leave clock out"
            reader.fault(tree, f"the time between steps {need}")
            return INVALID
        return _elapsed(grid)


def _elapsed(grid: Grid) -> Elapsed:
    # How many steps there are is no part of how long one is: with it, a longer spec would be another one.
    return Elapsed(replace(grid, steps=1))
