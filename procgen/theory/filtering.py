"""Forecast errors of a linear state space s(t) = A s(t-1) + B e(t), x(t) = C s(t), long after its start.

Given the state, the error h steps ahead is made by the shocks between; given the past values of x alone, the state has
a variance P of its own, the fixed point of the Kalman filter. That solves

    P = A P A' + Q - (A P H' + S) (H P H' + R)^-1 (A P H' + S)',   H = C A,  Q = Var B e,  S = Q C',  R = C Q C',

which the doubling of Chu, Fan, Lin & Wang (2004), Int. J. Control 77, 767-788, reaches after n turns as 2^n steps of
the filter would. Only the part of the state that shows in x counts: what never does may grow without an end.
"""

from __future__ import annotations

import numpy as np

from procgen.theory.system import System
from procgen.theory.unknown import Unknown

SHOWS = 1e-10  # share of a direction that is new, from which on it counts as one that x shows
SETTLED = 1e-14
MOST_TURNS = 60


def error_variance(system: System, horizons: np.ndarray, given: str) -> np.ndarray:
    """Variance of the forecast error of its first row at horizons >= 1; `given` the past "values", or all "parts"."""
    a, q, c = _shown(system)
    last = int(np.max(horizons, initial=1))
    rows = np.empty((last + 1, len(a)))
    rows[0] = c
    for h in range(last):
        rows[h + 1] = rows[h] @ a
    made = np.cumsum(np.einsum("hi,ij,hj->h", rows[:-1], q, rows[:-1]))
    if given == "parts":
        return made[horizons - 1]
    left = np.einsum("hi,ij,hj->h", rows[1:], _settled(a, q, c), rows[1:])
    return (made + left)[horizons - 1]


def _shown(system: System) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Transition, variance of what is added and observation, of the part of the state that the first row ever shows."""
    a, row = system.transition, system.observation[0]
    basis: list[np.ndarray] = []
    direction, size = row, float(np.linalg.norm(row))
    while len(basis) < len(a):
        for _ in range(2):  # twice is enough (Kahan)
            for known in basis:
                direction = direction - (direction @ known) * known
        left = float(np.linalg.norm(direction))
        if left <= SHOWS * size:
            break
        basis.append(direction / left)
        direction = basis[-1] @ a
        size = float(np.linalg.norm(direction))
    v = np.array(basis)
    added = system.loading @ system.noise @ system.loading.T
    return v @ a @ v.T, v @ added @ v.T, v @ row


def _settled(a: np.ndarray, q: np.ndarray, c: np.ndarray) -> np.ndarray:
    """Variance of the state given all values up to now."""
    h, s, r = c @ a, q @ c, float(c @ q @ c)
    if not r > 0.0:
        raise Unknown("its newest shocks show only later: their variance given its past is not computed")
    step, gain, p = a - np.outer(s, h) / r, np.outer(h, h) / r, q - np.outer(s, s) / r
    step = step.T
    for _ in range(MOST_TURNS):
        inverse = np.linalg.inv(np.eye(len(a)) + gain @ p)
        more = step.T @ p @ inverse @ step
        gain, step = gain + step @ inverse @ gain @ step.T, step @ inverse @ step
        p = p + 0.5 * (more + more.T)
        if np.abs(more).max() <= SETTLED * max(np.abs(p).max(), r):
            return p
    raise Unknown("what its past tells of its parts settles too slowly to be computed")
