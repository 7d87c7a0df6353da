"""Processes with a memory that is no filter: their covariance at two steps is known, as a function.

A process is the `detail` of a PROCESS source and has mean 0. Covariances between a process and what it depends on go
through `with_expression`, between two processes through `with_process`; what is not overridden is unknown.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np

from procgen.chance.laws.distributions import Gaussian
from procgen.theory.known import constant
from procgen.theory.linear import At, Base, Linear, base_of
from procgen.theory.sources import Source, Space
from procgen.theory.unknown import Unknown

Steps = np.ndarray
NODES = 96
TERMS = 200
SERIES_ERROR = 1e-10
AT_ONCE = 1 << 14


class Process:
    """One process: what it is made of (`ingredients`, expressions), its moments, and what verdicts it adds."""

    discrete = False  # whether it takes few values, or whole numbers
    lumpy = False  # whether some of its values have a chance of their own
    gaussian = False  # whether its values at any steps are jointly Gaussian
    filters = False  # whether it is a filter, which asks for covariances of what it filters

    def __init__(self, name: str, ingredients: tuple[Any, ...], says: tuple[tuple[str, str], ...] = ()):
        self.name, self.ingredients, self.says = name, ingredients, says
        self.highest_moment = np.inf

    def goes_with(self, source: Source) -> bool:
        """Whether what is said of a combination is said of this process and that source together."""
        return source.detail is self

    def verdicts(self, form: Linear) -> tuple[tuple[str, str], ...]:
        """What it adds to the verdict on a combination of it and of what goes with it."""
        return self.says

    def covariance(self, t: Steps, s: Steps) -> np.ndarray:
        """Cov(x(t), x(s)) at steps of one shape, negative ones too."""
        raise Unknown(f"{self.name} has no closed covariance")

    def with_expression(self, other: Any, t: Steps, s: Steps) -> np.ndarray:
        """Cov(x(t), other(s)) for an expression that depends on what x is made of."""
        raise Unknown(f"the covariance of {self.name} with what it depends on is not known in closed form")

    def with_process(self, own: Source, other: Source, t: Steps, s: Steps) -> np.ndarray:
        """Cov(x(t), y(s)) for another process y; where one is made of the other, that with an expression."""
        for x in self.ingredients:
            if other in x.sources:
                return self.with_expression(alone(x.space, other), t, s)
        for x in other.detail.ingredients:
            if own in x.sources:
                return other.detail.with_expression(alone(x.space, own), s, t)
        raise Unknown(f"the covariance of {self.name} and {other.detail.name} is not known in closed form")

    def product(self, factors: list[tuple[Linear, int]], t: Steps, s: Steps) -> tuple[np.ndarray, np.ndarray]:
        """E M E N and Cov(M, N) for products M of the forms of side 0 at t, and N of side 1 at s."""
        raise Unknown(f"moments of order {len(factors)} of {self.name} are not known in closed form")

    def marginal(self, step: int) -> Any:
        """The law at a step, as a frozen SciPy distribution with mean 0."""
        raise Unknown(f"{self.name} has no law with a density")


class Chain(Process):
    """A stationary chain of two states, 1 with probability p: Cov = p (1 - p) r^|t - s| (Feller 1968, XV.1)."""

    discrete = True

    def __init__(self, name: str, ingredients: tuple[Any, ...], p: float, r: float):
        super().__init__(name, ingredients)
        self.p, self.r = p, r

    def covariance(self, t, s):
        return self.p * (1.0 - self.p) * self.r ** np.abs(t - s).astype(float)

    def marginal(self, step):
        from procgen.theory.lumps import Few

        return Few((-self.p, 1.0 - self.p), (1.0 - self.p, self.p))

    def product(self, factors, t, s):
        # A product of values at one step takes two values, as the chain does: it is a line in it.
        (m_off, m_on, m_by), (n_off, n_on, n_by) = (self._line([f for f, side in factors if side == i]) for i in (0, 1))
        apart = (m_off + self.p * (m_on - m_off)) * (n_off + self.p * (n_on - n_off))
        return np.full(t.shape, apart), (m_on - m_off) * (n_on - n_off) * self.covariance(t - m_by, s - n_by)

    def _line(self, forms: list[Linear]) -> tuple[float, float, int]:
        """A product of forms where the chain is 0 and where it is 1, and how many steps ago that is."""
        keys = [(key, c) for form in forms for key, c in form.items()]
        delays = {key.delay for key, _ in keys if isinstance(key, At) and base_of(key).source.detail is self}
        if len(keys) > len(forms) or len(delays) > 1 or any(base_of(key).source.detail is not self for key, _ in keys):
            raise Unknown(f"moments of {self.name} at three steps or more are not known in closed form")
        scale = float(np.prod([c for _, c in keys]))
        return scale * (-self.p) ** len(keys), scale * (1.0 - self.p) ** len(keys), min(delays, default=0)


class Held(Process):
    """An expression read at other steps: x(t) = y(step_of(t)), less its mean; jointly Gaussian where it is."""

    def __init__(self, name: str, body: Any, step_of: Callable[[Steps], Steps], says: tuple[tuple[str, str], ...]):
        super().__init__(name, (body,), says)
        self.body, self.step_of, self.lumpy = body, step_of, body.lumpy

    @property
    def gaussian(self) -> bool:  # type: ignore[override]
        from procgen.theory.laws import is_gaussian

        return is_gaussian(self.body)

    def covariance(self, t, s):
        return at_any(self.body, self.body, self.step_of(t), self.step_of(s))

    def with_expression(self, other, t, s):
        return at_any(self.body, other, self.step_of(t), s)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, Held):
            return at_any(self.body, other.detail.body, self.step_of(t), other.detail.step_of(s))
        return self.with_expression(alone(self.body.space, other), t, s)

    def marginal(self, step):
        from procgen.theory.laws import Affine

        law = law_at(self.body, int(self.step_of(np.array([step], np.int64))[0]))
        return Affine(law, -float(law.mean()), 1.0)


def law_at(x: Any, step: int) -> Any:
    """The law of an expression at a step, which may be one before step 0."""
    from procgen.theory.laws import marginal

    return marginal(x.lag(max(0, -step)), max(step, 0))


class Seen(Held):
    """An expression on finer steps, read at some of them."""

    def __init__(self, name: str, body: Any, step_of: Callable[[Steps], Steps]):
        super().__init__(name, body, step_of, ())
        if not body.terms:  # how its mean moves is no part of how it varies
            self.ingredients = (_expression(body.space, body.linear),)


class Hinged(Process):
    """max(x, 0) of a Gaussian x, less its mean.

    For standard normals with correlation r, the derivative in r of Cov((X - a)+, (Y - b)+) is P(X > a, Y > b)
    (Price 1958), and of that the bivariate density (Plackett 1954): the covariance is one smooth integral.
    """

    def __init__(self, name: str, body: Any):
        super().__init__(name, (body,))
        self.body = body

    def spread(self, steps: Steps) -> tuple[np.ndarray, np.ndarray]:
        """Standard deviation of x, and the distance from its mean up to 0 in standard deviations."""
        sd = np.sqrt(np.maximum(at_any(self.body, self.body, steps, steps), 0.0))
        mean = mean_at(self.body, steps)
        with np.errstate(divide="ignore", invalid="ignore"):
            return sd, np.where(sd > 0.0, -mean / sd, np.where(mean > 0.0, -np.inf, np.inf))

    def mean(self, steps: Steps) -> np.ndarray:
        """E max(x, 0)."""
        norm, steps = Gaussian(), np.asarray(steps, np.int64)
        sd, a = self.spread(steps)
        level = mean_at(self.body, steps)
        return np.where(sd > 0.0, sd * norm.pdf(a) + level * norm.sf(a), np.maximum(level, 0.0))

    def covariance(self, t, s):
        return self.crossed(self, t, s)

    def crossed(self, other: Hinged, t: Steps, s: Steps) -> np.ndarray:
        (u, a), (v, b) = self.spread(t), other.spread(s)
        both = u * v
        with np.errstate(divide="ignore", invalid="ignore"):
            r = np.where(both > 0.0, at_any(self.body, other.body, t, s) / both, 0.0)
        still = both <= 0.0
        return both * hinge_covariance(np.where(still, 0.0, a), np.where(still, 0.0, b), np.clip(r, -1.0, 1.0))

    def with_expression(self, other, t, s):
        from procgen.theory.laws import jointly_gaussian

        if not jointly_gaussian(self.body, other):
            return super().with_expression(other, t, s)
        return at_any(self.body, other, t, s) * Gaussian().sf(self.spread(t)[1])  # Stein (1981)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, Hinged) and self.body.space.gaussian(self.body.sources | other.detail.body.sources):
            return self.crossed(other.detail, t, s)
        if isinstance(other.detail, Held):
            return other.detail.with_expression(alone(self.body.space, own), s, t)
        return super().with_process(own, other, t, s)


class Curved(Process):
    """f(x) of a Gaussian x, less its mean, by the normalised Hermite coefficients of f at each step.

    With E f(x(t)) h_n = a_n, Cov(f(x), f(y)) = sum over n >= 1 of a_n b_n r^n (Mehler 1866). What the series leaves out
    is bounded by the rest of the variance, and refused above SERIES_ERROR of it.
    """

    def __init__(self, name: str, body: Any, f: Callable[[np.ndarray], np.ndarray]):
        super().__init__(name, (body,))
        self.body, self.f = body, f

    def mean(self, steps: Steps) -> np.ndarray:
        """E f(x)."""
        steps = np.asarray(steps, np.int64)
        levels, sds, which = self._shapes(steps)
        return (self._at_nodes(levels, sds) @ _weights())[which].reshape(steps.shape)

    def covariance(self, t, s):
        return self.crossed(self, t, s)

    def with_process(self, own, other, t, s):
        bodies = self.body.sources | other.detail.body.sources if isinstance(other.detail, Curved) else {}
        if bodies and self.body.space.gaussian(bodies):
            return self.crossed(other.detail, t, s)
        return super().with_process(own, other, t, s)

    def crossed(self, other: Curved, t: Steps, s: Steps) -> np.ndarray:
        a, b = self._coefficients(t), other._coefficients(s)
        u, v = self._sd(t), other._sd(s)
        with np.errstate(divide="ignore", invalid="ignore"):
            r = np.clip(np.where(u * v > 0.0, at_any(self.body, other.body, t, s) / (u * v), 0.0), -1.0, 1.0)
        total = np.zeros(t.shape)
        for n in range(TERMS - 1, 0, -1):
            total = (total + a[n] * b[n]) * r
        return total

    def with_expression(self, other, t, s):
        from procgen.theory.laws import jointly_gaussian

        if not jointly_gaussian(self.body, other):
            return super().with_expression(other, t, s)
        u = self._sd(t)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(u > 0.0, at_any(self.body, other, t, s) * self._coefficients(t)[1] / u, 0.0)

    def _sd(self, steps: Steps) -> np.ndarray:
        return np.sqrt(np.maximum(at_any(self.body, self.body, steps, steps), 0.0))

    def _shapes(self, steps: Steps) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """The distinct pairs of mean and standard deviation, and which of them each step has."""
        flat = np.ravel(steps)
        pairs = np.stack([mean_at(self.body, flat), self._sd(flat)], axis=1)
        distinct, which = np.unique(pairs, axis=0, return_inverse=True)
        return distinct[:, 0], distinct[:, 1], which.ravel()

    def _at_nodes(self, levels: np.ndarray, sds: np.ndarray) -> np.ndarray:
        return np.asarray(self.f(levels[:, None] + sds[:, None] * _grid()), float)

    def _coefficients(self, steps: Steps) -> np.ndarray:
        """Hermite coefficients by order, (TERMS, *steps.shape)."""
        levels, sds, which = self._shapes(steps)
        values = self._at_nodes(levels, sds)
        a = _hermite() @ values.T
        variance = (values - a[0][:, None]) ** 2 @ _weights()
        left = variance - (a[1:] ** 2).sum(axis=0)
        if np.any(left > SERIES_ERROR * variance):
            raise Unknown(f"{self.name} bends too sharply for the spread of its body: its series does not settle")
        return a[:, which].reshape(TERMS, *steps.shape)


@cache
def _grid() -> np.ndarray:
    return np.linspace(-13.0, 13.0, 2601)


@cache
def _weights() -> np.ndarray:
    """The trapezoidal rule under the normal density, exact to rounding for what is analytic near the line."""
    z = _grid()
    return np.exp(-z * z / 2.0) / np.sqrt(2.0 * np.pi) * (z[1] - z[0])


@cache
def _hermite() -> np.ndarray:
    """Weights of the normalised Hermite coefficients, (TERMS, nodes), by their three-term recursion."""
    z, root = _grid(), np.sqrt(_weights())
    rows = [root, z * root]
    for n in range(1, TERMS - 1):
        rows.append((z * rows[n] - np.sqrt(n) * rows[n - 1]) / np.sqrt(n + 1.0))
    return np.array(rows) * root


def hinge_covariance(a: np.ndarray, b: np.ndarray, r: np.ndarray) -> np.ndarray:
    """Cov((X - a)+, (Y - b)+) of standard normals with correlation r, to about 1e-12.

    It is r Q(a) Q(b) + the integral over u from 0 to r of (r - u) phi(a, b; u), with u = sin(angle).
    """
    flat = [np.ravel(x).astype(float) for x in np.broadcast_arrays(a, b, r)]
    out = flat[2] * Gaussian().sf(flat[0]) * Gaussian().sf(flat[1])
    for first in range(0, len(out), AT_ONCE):
        part = slice(first, first + AT_ONCE)
        out[part] += _tilted(*(x[part, None] for x in flat))
    return out.reshape(np.broadcast_shapes(np.shape(a), np.shape(b), np.shape(r)))


def _tilted(a: np.ndarray, b: np.ndarray, r: np.ndarray) -> np.ndarray:
    nodes, weights = _legendre()
    end = np.arcsin(r)
    angle = end * (nodes + 1.0) / 2.0
    sine, cosine = np.sin(angle), np.cos(angle)
    # (a^2 + b^2 - 2 a b sin) / (2 cos^2), arranged so that nothing cancels where the cosine is small.
    square = (a - b) ** 2 / (2.0 * cosine**2) + a * b / (1.0 + sine)
    negative = (a + b) ** 2 / (2.0 * cosine**2) - a * b / (1.0 - sine)
    exponent = np.where(r >= 0.0, square, negative)
    return ((end / 2.0) * weights * (r - sine) * np.exp(-exponent)).sum(axis=1) / (2.0 * np.pi)


@cache
def _legendre() -> tuple[np.ndarray, np.ndarray]:
    return np.polynomial.legendre.leggauss(NODES)


def at_any(x: Any, y: Any, t: Steps, s: Steps) -> np.ndarray:
    """Cov(x(t), y(s)) of expressions at steps before step 0 too: both are delayed until no step is negative."""
    x, t = _delayed(x, t)
    y, s = _delayed(y, s)
    return x.covariance(y, t, s)


def mean_at(x: Any, steps: Steps) -> np.ndarray:
    """E x at steps before step 0 too."""
    x, steps = _delayed(x, steps)
    return x.mean(steps)


def _delayed(x: Any, steps: Steps) -> tuple[Any, Steps]:
    by = max(0, -int(np.min(steps, initial=0)))
    return (x.lag(by), steps + by) if by else (x, steps)


def alone(space: Space, source: Source) -> Any:
    """A process as an expression, without its mean."""
    return _expression(space, Linear({At(Base(source), 0): 1.0}))


def _expression(space: Space, form: Linear) -> Any:
    from procgen.theory.expression import Expression

    return Expression(space, constant(0.0), form)
