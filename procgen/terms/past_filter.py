"""Where the parts of a Gaussian sum stand, given all its values before step 0: the Kalman filter with an open start.

A part that is stationary begins in its stationary law; one with unit roots begins anywhere, with no knowledge at all,
which is carried as columns of its own (the augmented filter: de Jong 1991, Ann. Statist. 19, 1073-1083; Durbin &
Koopman 2012, sec. 5.7). The filter's last state is the smoother's.

Everything here makes values: only portable operations (see `procgen.chance.portable`).
"""

from __future__ import annotations

import numpy as np

from procgen.spec.records import dataclass
from procgen.terms.base import Array

EXACT = 2.0**-40  # of the largest variance of an element: what is left below it is rounding
APART = 2.0**-36  # of a squared size: columns that lie nearer to the others tell nothing of their own
SETTLED = 2.0**-50


@dataclass(frozen=True)
class StateSpace:
    """s[t] = A s[t−1] + noise of covariance `added`, y[t] = row·s[t] + noise of variance `measured`.

    `initial` is the stationary covariance of what has one, and the columns of `free` are what may stand anywhere.
    """

    transition: Array
    added: Array
    row: Array
    measured: float
    initial: Array
    free: Array


@dataclass(frozen=True)
class Known:
    """What is known of a state: its mean and covariance, and how many free directions the values do not tell."""

    mean: Array
    covariance: Array
    untold: int


def filtered(space: StateSpace, values: Array) -> Known | None:
    """What the values (n,), oldest first, tell of the state at the last of them; None where a value has no chance."""
    through = Through(space.transition)
    p, free = space.initial.copy(), space.free.shape[1]
    z = np.concatenate([np.zeros((len(p), 1)), space.free], axis=1)
    for _ in range(free):  # what may stand anywhere may do so earlier: then every value has a shock of its own
        z, p = through(z), through.around(p) + space.added
    largest, gathered = _diagonal(p), np.zeros((free + 1, free + 1))
    seen = [(j, float(w)) for j, w in enumerate(space.row.tolist()) if w != 0.0]
    least = EXACT * float(np.max(np.append(_diagonal(space.added), space.measured)))
    gain, spread, quiet = np.zeros(len(p)), 0.0, 0
    updated = p
    for t, value in enumerate(values.tolist()):
        if t:
            z = through(z)
        if quiet <= len(p):
            if t:
                p = through.around(updated) + space.added
            largest = np.maximum(largest, _diagonal(p))
            pc = _weighed(seen, p.T)
            spread = float(_weighed(seen, pc)) + space.measured
            if not spread > least:
                return None
            gain = pc / spread
            following = p - gain[:, None] * pc[None, :]
            following = (following + following.T) * 0.5
            same = t and np.max(np.abs(following - updated)) <= SETTLED * np.max(np.abs(following))
            quiet, updated = quiet + 1 if same else 0, following
        error = -_weighed(seen, z)
        error[0] = value + error[0]
        gathered = gathered + error[:, None] * (error[None, :] / spread)
        z = z + gain[:, None] * error[None, :]
    mean, covariance, untold = z[:, 0], updated, 0
    if free:
        inverse, untold = inverted(gathered[1:, 1:])
        for j in range(free):
            for k in range(free):
                if inverse[j, k] != 0.0:
                    mean = mean - z[:, 1 + j] * (inverse[j, k] * gathered[0, 1 + k])
                    covariance = covariance + z[:, 1 + j, None] * (inverse[j, k] * z[None, :, 1 + k])
    gone = _diagonal(covariance) <= EXACT * largest
    covariance = covariance.copy()
    covariance[gone, :] = 0.0
    covariance[:, gone] = 0.0
    return Known(mean, covariance, untold)


class Through:
    """A transition applied to rows, over what is not 0 in it."""

    def __init__(self, transition: Array):
        self.rows = [[(int(j), float(row[j])) for j in np.flatnonzero(row)] for row in transition]

    def __call__(self, x: Array) -> Array:
        """A x."""
        out = np.zeros_like(x)
        for i, row in enumerate(self.rows):
            for j, weight in row:
                out[i] = out[i] + weight * x[j]
        return out

    def around(self, p: Array) -> Array:
        """A p A′, symmetric."""
        whole = self(self(p).T)
        return (whole + whole.T) * 0.5


def factor(covariance: Array, scale: Array) -> Array:
    """Columns L with L L′ = covariance; pivots that are rounding beside `scale` (variances) count as 0."""
    rest, columns = covariance.copy(), []
    for j in range(len(rest)):
        if rest[j, j] <= EXACT * scale[j]:
            continue
        column = rest[:, j] / np.sqrt(rest[j, j])
        column[:j] = 0.0
        rest = rest - column[:, None] * column[None, :]
        columns.append(column)
    return np.array(columns).T if columns else np.zeros((len(rest), 0))


def inverted(s: Array) -> tuple[Array, int]:
    """The inverse of a symmetric semidefinite matrix, with zeros for what is determined by the rest; how many."""
    size = np.sqrt(np.maximum(_diagonal(s), 0.0))
    size = np.where(size > 0.0, size, 1.0)
    rest, out = s / size[:, None] / size[None, :], np.zeros_like(s)
    pivots: list[int] = []
    work = np.concatenate([rest, np.eye(len(s))], axis=1)  # Gauss–Jordan, on pivots of the diagonal, largest first
    left = list(range(len(s)))
    while left:
        best = max(left, key=lambda j: work[j, j])
        if not work[best, best] > APART:
            break
        left.remove(best)
        pivots.append(best)
        work[best] = work[best] / work[best, best]
        for i in range(len(s)):
            if i != best and work[i, best] != 0.0:
                work[i] = work[i] - work[i, best] * work[best]
    for i in pivots:
        for j in pivots:
            out[i, j] = work[i, len(s) + j] / size[i] / size[j]
    return (out + out.T) * 0.5, len(left)


def _diagonal(p: Array) -> Array:
    return np.diagonal(p).copy()


def _weighed(weights: list[tuple[int, float]], rows: Array) -> Array:
    """Σ w·rows[j]."""
    total = np.zeros_like(rows[0])
    for j, weight in weights:
        total = total + weight * rows[j]
    return total
