"""What theory says of a series, in the form in which pictures want it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.report.pictures.ends import FREE, Ends
from procgen.report.pictures.seen import ENOUGH, NORMAL
from procgen.spec.records import dataclass
from procgen.theory.mixedseries import MixedSeries
from procgen.theory.sources import IID
from procgen.theory.verdict import STRICT

FAR = 4096  # lags after which Bartlett's sum is taken to have ended
MOST_LAWS = 400  # of a figure, where every step has a law of its own
TWO_SD = "2 sd"
FEW_LAWS = 12  # the same where a law is an average over drawn parameters, which takes a fifth of a second


@dataclass(frozen=True)
class Stated:
    """One series of a theory, over `steps` steps."""

    theory: Any
    steps: int
    ends: Ends = FREE  # of its values

    @property
    def still(self) -> bool:
        """Whether nothing in it is left to chance."""
        return not self.theory.random

    @property
    def pooled(self) -> bool:
        """Whether deviations from the mean have the same covariances at all steps."""
        return bool(self.theory.stationarity.covariance_stationary)

    @property
    def steady(self) -> bool:
        """Whether deviations from the mean have the same law at all steps."""
        return self.theory.stationarity.verdict == STRICT or (self.pooled and self.theory.gaussian)

    @property
    def volatile(self) -> bool:
        """Whether squares may remember what the values themselves have forgotten."""
        return any(source.kind != IID for source in self.theory.expression.sources)

    @property
    def period(self) -> int | None:
        """The longest whole period of its mean."""
        found = [int(p) for p in self.theory.expression.mean_path.periods or () if p > 1 and float(p).is_integer()]
        return max(found, default=None)

    @property
    def periods(self) -> frozenset[float]:
        """The periods of all that repeats in its mean, whatever else moves it."""
        pieces = self.theory.expression.mean_path.pieces
        return frozenset().union(*(piece.periods for piece in pieces if piece.periods))

    def mean(self, at: NDArray) -> NDArray | None:
        return self.theory.mean(at)

    def variance(self, at: NDArray) -> NDArray | None:
        return self.theory.variance(at)

    def law(self, step: int) -> Any | None:
        """The law at a step, where it has a closed form."""
        return None if self.still else self.theory.marginal(step)

    def quantiles(self, at: NDArray, levels: Sequence[float]) -> tuple[NDArray | None, str]:
        """Quantiles (levels, steps) at steps, and "exact"; or mean ± 2 sd in place of the outer ones, and "2 sd".

        Levels ascend, and are symmetric. "exact at N steps" are those of which the standardised ones between are
        interpolated. None and the reason where not even mean and variance are known.
        """
        mean, variance = self.mean(at), self.variance(at)
        if mean is None or variance is None:
            which = "mean" if mean is None else "variance"
            return None, str(self.theory.reason(which) or f"the {which} is not known")
        if self.theory.gaussian:
            from scipy.special import ndtri

            return mean + np.sqrt(variance) * ndtri(np.asarray(levels))[:, None], "exact"
        exact = self._by_laws(at, mean, np.sqrt(variance), levels)
        if exact is not None:
            return exact
        sd, drawn = np.sqrt(variance), np.full((len(levels), len(at)), np.nan)
        drawn[0], drawn[-1] = np.clip([mean - 2.0 * sd, mean + 2.0 * sd], *self.ends)
        if len(levels) > 2:
            drawn[len(levels) // 2] = mean
        return drawn, TWO_SD

    def _by_laws(self, at: NDArray, mean: NDArray, sd: NDArray, levels: Sequence[float]) -> tuple[NDArray, str] | None:
        if self.steady:
            law = self.law(int(at[0]))
            return None if law is None else (law.ppf(np.asarray(levels))[:, None] + _moved(mean), "exact")
        most = FEW_LAWS if isinstance(self.theory, MixedSeries) else MOST_LAWS
        places = np.unique(np.linspace(0, len(at) - 1, min(len(at), most)).astype(int))
        found = np.empty((len(levels), len(places)))
        for column, i in enumerate(places):
            law = self.law(int(at[i])) if sd[i] > 0 else None
            if law is None and sd[i] > 0:
                return None
            found[:, column] = mean[i] if law is None else law.ppf(np.asarray(levels))
        if len(places) == len(at):
            return found, "exact"
        with np.errstate(divide="ignore", invalid="ignore"):
            scores = np.where(sd[places] > 0, (found - mean[places]) / sd[places], 0.0)
        between = np.array([np.interp(np.arange(len(at)), places, row) for row in scores])
        return mean + sd * between, f"exact at {len(places)} steps"

    def correlation(self, lags: NDArray, from_step: int) -> NDArray | None:
        return self.theory.autocorrelation(lags, from_step)

    def squares(self, lags: NDArray, from_step: int) -> NDArray | None:
        """Autocorrelation of squared deviations at lags that begin with 0."""
        found = self.theory.autocovariance_of_squares(lags, from_step)
        return None if found is None or not found[0] > 0 else found / found[0]

    def bartlett(self, lags: NDArray, paths: int) -> NDArray | None:
        """Standard errors of autocorrelations averaged over `paths` Gaussian paths (Bartlett 1946).

        n Var r(k) = Σ ρ(v)² + ρ(v+k)ρ(v−k) + 2ρ(k)²ρ(v)² − 4ρ(k)ρ(v)ρ(v+k) over all v. None where the series is not
        Gaussian, or has a memory too long for the sum.
        """
        if not (self.theory.gaussian and self.pooled):
            return None
        reach = int(min(FAR, self.steps - 1))
        rho = self.correlation(np.arange(reach + int(lags.max()) + 1), 0)
        if rho is None or (reach == FAR and abs(rho[FAR]) > 0.01):
            return None
        v = np.arange(-reach, reach + 1)
        r = rho[np.abs(v)]
        out = []
        for k in map(int, lags):
            later, earlier = rho[np.abs(v + k)], rho[np.abs(v - k)]
            total = (r**2 + later * earlier + 2 * rho[k] ** 2 * r**2 - 4 * rho[k] * r * later).sum()
            out.append(max(total, 0.0) / (paths * max(self.steps - k, 1)))
        return np.sqrt(np.array(out))

    def chance(self, lags: NDArray, error: NDArray, paths: int) -> tuple[NDArray | None, str]:
        """How far chance moves pooled correlations 95 times in 100: from the spread of paths, or from theory."""
        if paths >= ENOUGH:
            return NORMAL * error, "from the spread between paths"
        exact = self.bartlett(lags, paths)
        return (None, "") if exact is None else (NORMAL * exact, "by Bartlett's formula")


def _moved(mean: NDArray) -> NDArray:
    """How far the mean is from that of the first step; nothing but rounding is nothing."""
    moved = mean - mean[0]
    return np.where(np.abs(moved) <= 1e-12 * np.abs(mean[0]), 0.0, moved)


def fisher(rho: NDArray, paths: int) -> tuple[NDArray, NDArray]:
    """Where a correlation over independent pairs lies 95 times in 100 (Fisher 1921)."""
    with np.errstate(divide="ignore"):
        z = np.arctanh(np.clip(rho, -1.0, 1.0))
    reach = NORMAL / np.sqrt(max(paths - 3, 1))
    return np.tanh(z - reach), np.tanh(z + reach)
