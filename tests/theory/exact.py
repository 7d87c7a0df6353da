"""Autocovariances in many digits by partial autocorrelations, which no part of the theory room uses.

An autoregression is stepped down to its partial autocorrelations (Durbin 1960; Barndorff-Nielsen & Schou 1973), the
variance is 1 over the product of 1 - r^2, and the covariances come from the predictors of each order on the way up. Far
lags are powers of x modulo the characteristic polynomial.
"""

from __future__ import annotations

from collections.abc import Sequence

import mpmath as mp

DIGITS = 120


class NotStationary(ValueError):
    pass


def partial_autocorrelations(phi: Sequence[float]) -> list[mp.mpf]:
    """Those of a stationary autoregression; NotStationary where one is not below 1."""
    a, found = [mp.mpf(c) for c in phi], []
    while a:
        r = a[-1]
        if abs(r) >= 1:
            raise NotStationary
        found.append(r)
        a = [(a[i] + r * a[len(a) - 2 - i]) / (1 - r * r) for i in range(len(a) - 1)]
    return found[::-1]


class Autoregression:
    """w(t) = sum phi_i w(t - i) + e(t) with unit shocks; `gamma(h)` at any lag, in DIGITS digits."""

    def __init__(self, phi: Sequence[float]):
        with mp.workdps(DIGITS):
            self.phi = [mp.mpf(c) for c in phi]
            partials = partial_autocorrelations(phi)
            variance = 1 / mp.fprod(1 - r * r for r in partials)
            self.known, a = [variance], []
            for r in partials:
                ahead = [a[i] - r * a[len(a) - 1 - i] for i in range(len(a))] + [r]
                self.known.append(sum(c * g for c, g in zip(ahead, self.known[::-1], strict=True)))
                a = ahead

    def gamma(self, first: int, count: int) -> list[mp.mpf]:
        """Autocovariances at the lags first .. first + count - 1, first >= 0."""
        with mp.workdps(DIGITS):
            p = len(self.phi)
            if not p:
                return [mp.mpf(first + k == 0) for k in range(count)]
            weights, out = self._power(first), []
            for _ in range(count):
                out.append(sum(c * g for c, g in zip(weights, self.known, strict=False)))
                weights = self._times_x(weights)
            return out

    def _times_x(self, weights: list) -> list:
        """x times a polynomial of degree below p, modulo x^p - phi_1 x^(p-1) - .. - phi_p."""
        p, top = len(self.phi), weights[-1]
        return [(weights[i - 1] if i else 0) + top * self.phi[p - 1 - i] for i in range(p)]

    def _power(self, n: int) -> list:
        p = len(self.phi)
        out = [mp.mpf(i == 0) for i in range(p)]
        for bit in bin(n)[2:]:
            whole = [mp.mpf(0)] * (2 * p - 1)
            for i, a in enumerate(out):
                for j, b in enumerate(out):
                    whole[i + j] += a * b
            for k in range(2 * p - 2, p - 1, -1):
                top = whole.pop()
                for i, c in enumerate(self.phi, start=1):
                    whole[k - i] += top * c
            out = self._times_x(whole) if bit == "1" else whole
        return out


def arma_autocovariances(phi: Sequence[float], theta: Sequence[float], first: int, count: int) -> list[mp.mpf]:
    """Of x = (1 + theta(B)) w with unit shocks, at the lags first .. first + count - 1."""
    w, q = Autoregression(phi), len(theta)
    low = max(0, first - q)
    gamma = w.gamma(low, first + count + q - low)
    near = w.gamma(0, q + 1) if first < q else []
    with mp.workdps(DIGITS):
        b = [mp.mpf(1), *map(mp.mpf, theta)]
        shifts = [sum(b[i] * b[i + k] for i in range(q + 1 - k)) for k in range(q + 1)]  # of delays k apart

        def at(lag: int):
            return near[-lag] if lag < 0 else gamma[lag - low]

        return [
            shifts[0] * at(h) + sum(shifts[k] * (at(h - k) + at(h + k)) for k in range(1, q + 1))
            for h in range(first, first + count)
        ]


def running_sum_variance(gamma: Sequence, steps: int):
    """Var of x(1) + .. + x(steps) from the autocovariances at lags 0 .. steps - 1."""
    with mp.workdps(DIGITS):
        return steps * gamma[0] + 2 * sum((steps - k) * gamma[k] for k in range(1, steps))
