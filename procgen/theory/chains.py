"""Markov chains of a few states: covariances of functions of the state, exactly, and noise whose spread they set.

With transitions P and shares q, P^h - 1 q' is D^h for D = P - 1 q' and h >= 1, and I - 1 q' for h = 0. Covariances are
sums of its entries, so that what is left of them after a long time keeps its digits (Kemeny & Snell 1960, ch. 4).
"""

from __future__ import annotations

from typing import Any

import numpy as np

from procgen.theory.unknown import Unknown

Steps = np.ndarray
AT_ONCE = 1 << 14
KEPT = 1 << 21  # numbers of the table of powers that a chain keeps
DENSE = 8  # times as many steps as are asked for may be worked out for it
FORGETS = 1.0 - 1e-9  # a chain whose second eigenvalue is nearer to 1 in modulus never forgets its start


class States:
    """A chain of states 0 .. K-1, stationary or from a given state at step 0."""

    def __init__(self, transitions: np.ndarray, shares: np.ndarray | None, start: int | None):
        self.p, self.start = np.asarray(transitions, float), start
        self.shares = np.zeros(len(self.p)) if shares is None else np.asarray(shares, float)
        self.decay = self.p - self.shares
        self._powers = np.zeros((0, *self.p.shape))  # of the first gaps

    @property
    def forgets(self) -> bool:
        return bool(self.shares.any()) and float(np.abs(np.linalg.eigvals(self.decay)).max()) < FORGETS

    def chances(self, steps: Steps) -> np.ndarray:
        """Chances of each state at steps, (*steps, K)."""
        if self.start is None:
            return np.broadcast_to(self.shares, (*np.shape(steps), len(self.p)))
        return self.shares + self.left(steps)[..., self.start, :]

    def left(self, gaps: Steps) -> np.ndarray:
        """P^h - 1 q' at gaps h >= 0, (*gaps, K, K)."""
        gaps = np.asarray(gaps, np.int64)
        if gaps.min(initial=0) < 0:
            raise Unknown("a chain that leaves from a given state has no past")
        count = 1 << int(gaps.max(initial=0)).bit_length()  # the same are asked for again and again
        if len(self._powers) < count <= min(DENSE * gaps.size, KEPT // self.p.size):
            self._powers = self._left(np.arange(count))
        return self._powers[gaps] if count <= len(self._powers) else self._left(gaps)

    def _left(self, gaps: Steps) -> np.ndarray:
        """By repeated squaring."""
        power, out = self.decay, np.broadcast_to(np.eye(len(self.p)), (*gaps.shape, len(self.p), len(self.p)))
        for bit in range(int(gaps.max(initial=0)).bit_length()):
            out = np.where((gaps >> bit & 1)[..., None, None], out @ power, out)
            power = power @ power
        return np.where((gaps == 0)[..., None, None], np.eye(len(self.p)) - self.shares, out)

    def covariance(self, f: np.ndarray, g: np.ndarray, t: Steps, s: Steps) -> np.ndarray:
        """Cov(f(S(t)), g(S(s))) for functions of the state given as arrays, (*steps, K) or (K,)."""
        shape = (*t.shape, len(self.p))
        f, g = (np.broadcast_to(x, shape).reshape(-1, len(self.p)) for x in (f, g))
        out, t, s = np.empty(t.size), t.ravel(), s.ravel()
        for first in range(0, len(out), AT_ONCE):
            part = slice(first, first + AT_ONCE)
            out[part] = self._covariance(f[part], g[part], t[part], s[part])
        return out.reshape(shape[:-1])

    def _covariance(self, f, g, t, s):
        ahead = (t >= s)[:, None]
        late, early = np.where(ahead, f, g), np.where(ahead, g, f)
        gaps, which = np.unique(np.abs(t - s), return_inverse=True)
        rest = np.einsum("nij,nj->ni", self.left(gaps)[which.ravel()], late)
        chances = self.chances(np.minimum(t, s))
        rest = rest - (chances * rest).sum(axis=1, keepdims=True)
        return (chances * early * rest).sum(axis=1)


class Switching:
    """Shocks s(S(t)) z(t) with a spread s for each state of a stationary chain, as one white source.

    Given the chain they are independent with mean 0, so that only squares remember it.
    """

    started = False

    def __init__(self, law: Any, spreads: np.ndarray, chain: States):
        self.law, self.chain, self.squares = law, chain, np.asarray(spreads, float) ** 2
        self.variance = float(chain.shares @ self.squares)
        self.mean_spread = float(chain.shares @ np.asarray(spreads, float))
        self.highest_moment = float(law.highest_moment)
        self.power_tailed = bool(np.isfinite(self.highest_moment))
        self.strictly_stationary = (True, "its chain is stationary")

    def square_covariance(self, lags: Steps) -> np.ndarray:
        """Cov(e(t + lag)^2, e(t)^2) (Timmermann 2000)."""
        excess = self.law.excess_kurtosis
        if excess is None:
            raise Unknown("infinite fourth moment of a switching noise")
        own = (excess + 2.0) * float(self.chain.shares @ self.squares**2)
        return self.chain.covariance(self.squares, self.squares, lags, np.zeros_like(lags)) + own * (lags == 0)
