"""What a recorded past leaves open of where the parts of a series stand: a normal path drawn once, c A^t L z."""

from __future__ import annotations

from typing import Any

import numpy as np

from procgen.chance.laws.distributions import Gaussian
from procgen.theory.processes import Process, Steps
from procgen.theory.system import System
from procgen.theory.verdict import GROWS, SETTLES, UNIT_ROOT, VARIES


class LeftOpen(Process):
    """c A^t L z with standard normals z: Cov = c A^t L L' A'^s c', from step 0 on."""

    gaussian = True
    row = 0

    def __init__(self, name: str, ingredients: tuple[Any, ...], transition, loading, row, horizon: int):
        n = len(row)
        initial = np.asarray(loading) @ np.asarray(loading).T
        nothing = np.zeros((0, 0))
        self.system = System(transition, np.zeros((n, 0)), np.asarray(row)[None, :], initial, nothing, ())
        super().__init__(name, ingredients, (self._verdict(name, horizon),))

    def _verdict(self, name: str, horizon: int) -> tuple[str, str]:
        series = name.partition(".")[0]
        if max(np.abs(np.linalg.eigvals(self.system.transition))) < 1.0 - UNIT_ROOT:
            return SETTLES, f"{series} leaves from its recorded past and forgets it"
        first, last = self.covariance(*[np.array([0, max(horizon - 1, 1)])] * 2)
        verdict = GROWS if last > first * (1.0 + UNIT_ROOT) else VARIES
        return verdict, f"{series} leaves from its recorded past, which does not tell all of where it stands"

    def covariance(self, t: Steps, s: Steps) -> np.ndarray:
        shape = np.broadcast_shapes(np.shape(t), np.shape(s))
        t, s = (np.broadcast_to(x, shape).astype(np.int64).ravel() for x in (t, s))
        out, after = np.zeros(len(t)), (t >= 0) & (s >= 0)
        if after.any():
            out[after] = self.system.covariance(0, 0, t[after], s[after])
        return out.reshape(shape)

    def marginal(self, step: int) -> Any:
        at = np.array([step], np.int64)
        return Gaussian(0.0, float(np.sqrt(self.covariance(at, at)[0])))
