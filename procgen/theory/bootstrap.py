"""Blocks of given numbers set end to end: what a step has of them, given the numbers (Künsch 1989)."""

from __future__ import annotations

import numpy as np

from procgen.theory.lumps import Few

Steps = np.ndarray
AT_ONCE = 1 << 22


class Blocks:
    """Numbers v[S + t mod size] with S uniform on all starts, new every `size` steps from step 0 on."""

    def __init__(self, numbers: np.ndarray, size: int, circular: bool):
        self.size, self.starts = size, len(numbers) if circular else len(numbers) - size + 1
        whole = np.concatenate([numbers, numbers[: size - 1]]) if circular else numbers
        self.level = float(numbers.mean())
        self.rest = whole - self.level  # sums of what is near 0 keep their digits
        self.means = self._averages(self.rest)

    def _averages(self, values: np.ndarray) -> np.ndarray:
        """The average over all starts of the values at each place, (places,)."""
        total = np.concatenate([[0.0], np.cumsum(values)])
        return (total[self.starts :] - total[: -self.starts]) / self.starts

    def mean(self, steps: Steps) -> np.ndarray:
        """E x at steps."""
        return self.level + self.means[np.asarray(steps, np.int64) % self.size]

    def law(self, step: int) -> Few:
        """The law at a step: the numbers that a block can have there, each as often as it begins so."""
        place = step % self.size
        values, counts = np.unique(self.rest[place : place + self.starts] + self.level, return_counts=True)
        return Few(values.tolist(), (counts / self.starts).tolist())

    def covariance(self, t: Steps, s: Steps) -> np.ndarray:
        """Cov(x(t), x(s)): 0 between blocks."""
        out = np.zeros(t.shape)
        i, j = t % self.size, s % self.size
        same = t // self.size == s // self.size
        for lag in np.unique(np.abs(i - j)[same]).tolist():
            found = self._averages(self.rest[: len(self.rest) - lag] * self.rest[lag:])
            here = same & (np.abs(i - j) == lag)
            a, b = i[here], j[here]
            out[here] = found[np.minimum(a, b)] - self.means[a] * self.means[b]
        return out

    def moment(self, t: Steps, a: int, s: Steps, b: int) -> np.ndarray:
        """E (x(t) - E x(t))^a (x(s) - E x(s))^b."""
        i, j = t % self.size, s % self.size
        same = t // self.size == s // self.size
        keys, which = np.unique(np.stack([i.ravel(), j.ravel(), same.ravel()], axis=1), axis=0, return_inverse=True)
        found = np.empty(len(keys))
        every = np.arange(self.starts)
        for first in range(0, len(keys), max(AT_ONCE // self.starts, 1)):
            part = keys[first : first + max(AT_ONCE // self.starts, 1)]
            x = (self.rest[part[:, :1] + every] - self.means[part[:, :1]]) ** a
            y = (self.rest[part[:, 1:2] + every] - self.means[part[:, 1:2]]) ** b
            apart = x.mean(axis=1) * y.mean(axis=1)
            found[first : first + len(part)] = np.where(part[:, 2] == 1, (x * y).mean(axis=1), apart)
        return found[which.ravel()].reshape(t.shape)
