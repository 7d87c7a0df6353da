"""A body through a recursive filter, y(t) = sum phi_i y(t-i) + x(t): its moments from any that the body has."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cached_property
from typing import Any

import numpy as np

from procgen.chance.laws.distributions import Gaussian
from procgen.theory import known
from procgen.theory.arma import PowerSeries
from procgen.theory.known import Known
from procgen.theory.processes import Held, Process, Steps, alone, at_any, mean_at
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import judge

BLOCK = 256  # steps whose covariances are added up together
MOST_CELLS = 1 << 25  # covariances of the body that are added up for one question


class Distributed(Process):
    """The filter of a body, less its mean: sums of the body's covariances over `memory` steps."""

    filters = True

    def __init__(self, name: str, body: Any, phi: Sequence[float], memory: int):
        from procgen.theory.expression import Expression

        # How its mean moves is said by the mean of the filter.
        moving = Expression(body.space, known.constant(0.0), body.linear, body.terms)
        super().__init__(name, (moving,))
        self.body, self.phi, self.memory, self.lumpy = body, phi, memory, body.lumpy

    @property
    def gaussian(self) -> bool:  # type: ignore[override]
        from procgen.theory.laws import is_gaussian

        return is_gaussian(self.body)

    @cached_property
    def _steady(self) -> bool:
        return judge(self.body).covariance_stationary

    def filtered(self, values: np.ndarray, axis: int = 0) -> np.ndarray:
        """The filter along an axis whose first `memory` places only lead up to the others."""
        from scipy.signal import lfilter

        whole = lfilter([1.0], [1.0, *(-c for c in self.phi)], values, axis=axis)
        return np.take(whole, range(self.memory, values.shape[axis]), axis=axis)

    def covariance(self, t, s):
        if not self._steady:
            return _crossed(self, self, self.body, self.body, t, s)
        far = int(np.max(np.abs(t - s), initial=0))
        lags = np.arange(far + 2 * self.memory + 1)
        if 2 * len(lags) > MOST_CELLS:
            raise Unknown(f"{self.name} remembers too many steps to add up their covariances")
        gamma = at_any(self.body, self.body, lags, np.zeros_like(lags))
        once = self.filtered(np.concatenate([gamma[:0:-1], gamma]))  # with y(t): lags from -(far + memory) on
        return self.filtered(once[::-1])[far + self.memory - np.abs(t - s)]

    def with_expression(self, other, t, s):
        return _crossed(self, None, self.body, other, t, s)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, Held):
            return other.detail.with_expression(alone(self.body.space, own), s, t)
        if isinstance(other.detail, Distributed):
            return _crossed(self, other.detail, self.body, other.detail.body, t, s)
        return self.with_expression(alone(self.body.space, other), t, s)

    def marginal(self, step: int) -> Any:
        if not self.gaussian:
            return super().marginal(step)
        at = np.array([step], np.int64)
        return Gaussian(0.0, float(np.sqrt(self.covariance(at, at)[0])))


def _crossed(a: Distributed | None, b: Distributed | None, x: Any, y: Any, t: Steps, s: Steps) -> np.ndarray:
    """Cov of x at t and y at s through their filters (None: as it is), in blocks of steps near each other."""
    t, s = np.broadcast_arrays(np.asarray(t, np.int64), np.asarray(s, np.int64))
    late, early, out = t.ravel(), s.ravel(), np.empty(t.size)
    before = [0 if each is None else each.memory for each in (a, b)]
    blocks, which = np.unique(np.stack([late // BLOCK, early // BLOCK]), axis=1, return_inverse=True)
    members = [np.flatnonzero(which.ravel() == k) for k in range(blocks.shape[1])]
    spans = [[(int(np.min(f[m])) - n, int(np.max(f[m]))) for f, n in zip((late, early), before, strict=True)]
             for m in members]  # fmt: skip
    if sum((u1 - u0 + 1) * (v1 - v0 + 1) for (u0, u1), (v0, v1) in spans) > MOST_CELLS:
        name = (a or b).name  # type: ignore[union-attr]
        raise Unknown(f"{name} remembers too many steps to add up their covariances at all that are asked for")
    for m, ((u0, u1), (v0, v1)) in zip(members, spans, strict=True):
        table = at_any(x, y, *np.meshgrid(np.arange(u0, u1 + 1), np.arange(v0, v1 + 1), indexing="ij"))
        for axis, each in enumerate((a, b)):
            table = table if each is None else each.filtered(table, axis)
        out[m] = table[late[m] - u0 - before[0], early[m] - v0 - before[1]]
    return out.reshape(t.shape)


def distributed_mean(name: str, x: Any, phi: Sequence[float], memory: int) -> Known:
    """The mean of the filter of x at each step, negative ones too."""
    centred = all(source.centred for source in x.sources)
    if centred and x.mean_path.value is not None and (not x.terms or judge(x).stationary):
        return known.constant(float(mean_at(x, np.zeros(1, np.int64))[0]) / (1.0 - sum(phi)))
    # A mean that is known as such may lack a past: it is read as far back as the filter reads, and no further.
    read = mean_at if x.terms or not centred else lambda _, steps: x.mean_path.at(steps)
    weights = PowerSeries(np.ones(1), tuple(phi)).at(np.arange(memory))

    def at(steps: np.ndarray) -> np.ndarray:
        needed, which = np.unique(np.asarray(steps, np.int64), return_inverse=True)
        if not len(needed):
            return np.zeros(np.shape(steps))
        if needed[-1] - needed[0] < len(needed) * memory:
            every = np.convolve(read(x, np.arange(needed[0] - memory + 1, needed[-1] + 1)), weights)
            found = every[memory - 1 + needed - needed[0]]
        else:  # few steps, far apart
            found = np.array([read(x, step - np.arange(memory)) @ weights for step in needed])
        return found[which].reshape(np.shape(steps))

    key, path = ("distributed", name), x.mean_path
    note = known.said(path.notes) or f"the mean moves in {name}"
    if centred and not x.terms and path.periods is None:
        return known.observed(key, at, x.space.horizon, name, settles=path.settles, note=note)
    return known.whole(key, at, path.periods if not x.terms else None, note, path.settles)
