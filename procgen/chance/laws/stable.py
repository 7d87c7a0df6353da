"""Stable laws, which have no variance: their unit is a spread."""

from __future__ import annotations

from functools import cached_property, lru_cache
from typing import Any, ClassVar

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch
from procgen.chance.elementary import cos_turns, exp, log, sin_turns
from procgen.chance.inversion import Inverse
from procgen.chance.laws.base import Law
from procgen.chance.tabulated import Tabulated, folded
from procgen.spec.declare import Parameter, Real
from procgen.spec.records import dataclass

_NEAR_ONE = 0.05  # nearer to 1 the tables take tens of thousands of panels
_FAR = 90.0  # exp(-90) is 1e-39
_STEP = 0.28  # of the trapezoid rule, over the steepest slope: its error is exp(-pi^2 / 0.28)
_NO_MORE = 7.0  # exp(-exp(7)) underflows
_HALF_PI = 1.5707963267948966
_PEAK = 40  # panels about the mode that Gauss's rule is told of


@dataclass(frozen=True)
class Stable(Law):
    """A stable law with the characteristic function exp(-abs(t)^alpha (1 - i beta tan(pi alpha / 2) sign t)).

    That is Nolan's S(alpha, beta; 1) with scale 1 and location 0 (Samoradnitsky & Taqqu's): its mean is 0 where it has
    one, alpha > 1. At alpha = 1 it is Cauchy's; near 2 nearly a normal with variance 2.
    """

    alpha: float
    beta: float = 0.0

    name: ClassVar[str] = "stable"
    scaled_by: ClassVar[str] = "spread"
    source: ClassVar[str] = (
        "Zolotarev (1986), Nolan (1997); by the integral of Chambers, Mallows & Stuck (1976) over the angle; "
        "quantile by numerical inversion, Derflinger et al. (2010)"
    )
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter(
            "alpha",
            "α",
            Real(at_least=0.2, below=2),
            f"index of the tails; moments below this order exist; 1, or at least {_NEAR_ONE} away from it",
        ),
        Parameter(
            "beta",
            "β",
            Real(at_least=-1, at_most=1),
            "above 0: the upper tail is the heavier one; 0 where α is 1",
            default=0.0,
        ),
    )

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.alpha == 1.0 and self.beta != 0.0:
            raise ValueError(f"stable: expected beta to be 0 where alpha is 1, got {self.beta:g}; change one")
        if 0.0 < abs(self.alpha - 1.0) < _NEAR_ONE:
            raise ValueError(f"stable: expected alpha to be 1 or at least {_NEAR_ONE} away from 1, got {self.alpha!r}")

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        if self.alpha == 1.0:
            turns = np.multiply(p, 0.5)
            np.copysign(cos_turns(turns) / sin_turns(turns), side, out=out)
            return
        # Each side of 0 is a law of its own: of the logarithm of the size, smooth on the whole line.
        share = self.upper
        above = np.where(side < 0, 1 - p, p)
        positive = above <= share if share > 0 else np.zeros(len(p), np.bool_)
        for chosen, half, sign in ((positive, self.halves[0], 1.0), (~positive, self.halves[1], -1.0)):
            at = np.flatnonzero(chosen)
            if not len(at) or half is None:
                continue
            same = (side[at] < 0) == (sign < 0)
            mass = share if sign > 0 else 1 - share
            beyond = np.minimum(np.where(same, p[at], 1 - p[at]) / mass, 1.0)  # of the half, farther out
            size = np.empty(len(at))
            half.inverse.quantile(np.minimum(beyond, 1 - beyond), 0.5 - beyond, size, Scratch(len(at)))
            out[at] = sign * exp(size)

    @property
    def turn(self) -> float:
        """alpha theta_0 / (2 pi), theta_0 the skewed angle of Zolotarev."""
        if abs(self.beta) == 1.0:
            return self.beta * (self.alpha / 4 if self.alpha < 1 else self.alpha / 4 - 0.5)
        tangent = sin_turns(self.alpha / 4) / cos_turns(self.alpha / 4)
        return float(_arctan(self.beta * float(tangent))) / (4 * _HALF_PI)

    @property
    def upper(self) -> float:
        """P(z > 0)."""
        return min(max(0.5 + 2 * self.turn / self.alpha, 0.0), 1.0)

    @property
    def halves(self) -> tuple[Half | None, Half | None]:
        """The laws of the sizes above and below 0; None for a side without a chance."""
        return _halves(self)

    @property
    def balanced(self) -> bool:
        return self.beta == 0.0

    @property
    def highest_moment(self) -> float:
        return self.alpha

    def moment(self, k: int) -> float | None:
        return 1.0 if k == 0 else 0.0 if k == 1 and self.alpha > 1.0 else None

    def distribution(self) -> Any:
        if self.alpha == 1.0:
            from scipy.stats import cauchy

            return cauchy()
        return TwoHalves(self)


class Half:
    """The law of log z given z > 0, for z of a stable law with alpha not 1 that has a chance above 0.

    z^(alpha / (alpha - 1)) = E / V(theta) of an exponential E and an angle theta, uniform between -theta_0 and pi / 2
    (Chambers, Mallows & Stuck 1976): here theta = -theta_0 + b u, b = pi / 2 + theta_0, u uniform in (0, 1).
    """

    def __init__(self, alpha: float, turn: float) -> None:
        self.alpha, self.turn = alpha, turn
        self.scale = (alpha - 1) / alpha  # log z = scale (log E - log V)
        slope = float(np.abs(np.diff(self._log_v(np.arange(-400, 401) * 0.2))).max()) * 5 + 0.1
        step = _STEP / max(slope, 1.0)
        count = int(np.floor(_FAR / step)) + 1
        tau = np.arange(-count, count + 1) * step
        v, small = self._log_v(tau), exp(-np.abs(tau))
        weight = small / ((1 + small) * (1 + small)) * step
        order = np.argsort(v, kind="stable")
        self._v, self._weight = v[order], weight[order]
        width = abs(self.scale)
        self.density = Tabulated(self._of_log, -_FAR - 10, (_FAR + 10) / alpha + 10, width)
        reach = max(-self.density.low, self.density.high)
        middle = self.density.low + width * (np.arange(self.density.count) + 0.5)
        peak = float(middle[np.argmax(self.density(middle))])
        marks = [peak + width * i for i in range(-_PEAK, _PEAK + 1)]
        self.above = Areas(self.density, reach, marks)
        self.below = Areas(lambda x: self.density(-x), reach, [-mark for mark in marks])

    @cached_property
    def inverse(self) -> Inverse:
        return Inverse(self.above, self.below)

    def _of_log(self, y: np.ndarray) -> np.ndarray:
        """The density of log z at a few neighbouring points, by the trapezoid rule over the logit of u."""
        at = y / self.scale
        end = int(np.searchsorted(self._v, _NO_MORE - float(at.min())))
        start = int(np.searchsorted(self._v, -2 * _FAR - float(at.max()))) if len(self._v) > 2000 else 0
        if end <= start:
            return np.zeros_like(y)
        x = np.minimum(at + self._v[start:end, None], _NO_MORE)
        return folded(exp(x - exp(x)) * self._weight[start:end, None]) / abs(self.scale)

    def _log_v(self, tau: np.ndarray) -> np.ndarray:
        """log V at u = 1 / (1 + exp(-tau)); sines by the nearer end, so that they keep their digits."""
        small = exp(-np.abs(tau))
        near, far = small / (1 + small), 1 / (1 + small)
        u, w = np.where(tau < 0, near, far), np.where(tau < 0, far, near)  # w = 1 - u
        a, b = self.alpha, 0.25 + self.turn / self.alpha
        c = a / 4 + self.turn
        first = _log_sine(b * w, (0.5 - b) * w + 0.5 * u)
        second = _log_sine(c * u, (0.5 - c) * u + 0.5 * w)
        third = _log_sine(b * (a * u + w), (0.5 - b) * w + (0.5 - c) * u)
        constant = float(log(cos_turns(self.turn))) / (a - 1)
        return constant + (a / (a - 1)) * (first - second) + (third - first)


class TwoHalves:
    """A stable law with the calls of a frozen SciPy distribution."""

    def __init__(self, law: Stable) -> None:
        self.law, self.share = law, law.upper
        self._upper, self._lower = law.halves

    def cdf(self, x):
        x = np.asarray(x, float)
        return np.where(x < 0, self._beyond(-x, False), 1.0 - self._beyond(x, True))

    def sf(self, x):
        x = np.asarray(x, float)
        return np.where(x < 0, 1.0 - self._beyond(-x, False), self._beyond(x, True))

    def pdf(self, x):
        x = np.asarray(x, float)
        size = np.maximum(np.abs(x), 1e-30)
        total = np.zeros(x.shape)
        for half, mass, side in ((self._upper, self.share, x >= 0), (self._lower, 1 - self.share, x < 0)):
            if half is not None:
                total = np.where(side, mass * half.density(log(size)) / size, total)
        return total

    def ppf(self, p):
        p = np.asarray(p, float)
        return np.where(p < 1 - self.share, -self._size(p, False), self._size(1 - p, True))

    def isf(self, p):
        p = np.asarray(p, float)
        return np.where(p <= self.share, self._size(p, True), -self._size(1 - p, False))

    def support(self) -> tuple[float, float]:
        return (-np.inf if self._lower is not None else 0.0), (np.inf if self._upper is not None else 0.0)

    def mean(self) -> float:
        return 0.0 if self.law.alpha > 1.0 else float("nan")

    def var(self) -> float:
        return float("inf")

    def std(self) -> float:
        return float("inf")

    def _beyond(self, size: np.ndarray, upper: bool) -> np.ndarray:
        """The area farther out than a size on one side; sizes below 0 count as 0."""
        half, mass = (self._upper, self.share) if upper else (self._lower, 1 - self.share)
        if half is None:
            return np.zeros(size.shape)
        with np.errstate(divide="ignore"):
            y = log(np.maximum(size, 0.0))
        y = np.minimum(np.maximum(np.atleast_1d(y), half.density.low), half.density.high)
        return mass * half.above.beyond(y).reshape(size.shape)

    def _size(self, area: np.ndarray, upper: bool) -> np.ndarray:
        """The size beyond which an area lies on one side."""
        half, mass = (self._upper, self.share) if upper else (self._lower, 1 - self.share)
        if half is None:
            return np.zeros(area.shape)
        share = np.atleast_1d(area) / mass
        y = np.full(share.shape, np.inf)
        inside = (share > 1e-35) & (share < 1.0)
        near = inside & (share > 0.5)
        y[inside & ~near] = half.above.point(share[inside & ~near])
        y[near] = -half.below.point(1 - share[near])
        y[share >= 1.0] = -np.inf
        return exp(y).reshape(area.shape)


@lru_cache(maxsize=32)
def _halves(law: Stable) -> tuple[Half | None, Half | None]:
    upper = Half(law.alpha, law.turn) if law.upper > 0 else None
    if law.beta == 0.0:
        return upper, upper
    return upper, Half(law.alpha, -law.turn) if law.upper < 1 else None


def _log_sine(x: np.ndarray, rest: np.ndarray) -> np.ndarray:
    """log sin(2 pi x), 0 < x < 1/2, with rest = 1/2 - x."""
    near = np.minimum(x, rest)
    tiny = near < 1e-9
    return np.where(tiny, log(np.maximum(near, 1e-300)) + log(4 * _HALF_PI), log(sin_turns(np.maximum(near, 1e-10))))


def _arctan(x: float) -> float:
    """By a Newton-like iteration on sines and cosines that gains digits threefold a step."""
    angle = x / (1 + abs(x) / _HALF_PI)
    for _ in range(12):
        turns = angle / (4 * _HALF_PI)
        sine, cosine = float(sin_turns(turns)), float(cos_turns(turns))
        angle = angle - (sine - x * cosine) / (cosine + x * sine)
    return angle
