"""What is measured on paths: quantiles, variances, correlations, each with how far chance alone moves it.

Arrays are (paths, steps) float64; NaN counts as missing.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from procgen.spec.records import dataclass

ENOUGH = 20  # paths from which their own spread tells the error of an average over them
NORMAL = 1.959963984540054  # 97.5 % quantile


@dataclass(frozen=True)
class Measured:
    """An estimate at each of some places, its standard error (NaN: not known), and how many paths it is from."""

    at: NDArray
    value: NDArray
    error: NDArray
    paths: int


def quantiles(values: NDArray, levels: Sequence[float]) -> NDArray:
    """Sample quantiles across paths, (levels, steps)."""
    if np.isfinite(values).all():
        return np.quantile(values, levels, axis=0)
    out = np.full((len(levels), values.shape[1]), np.nan)
    some = np.isfinite(values).any(axis=0)
    out[:, some] = np.nanquantile(values[:, some], levels, axis=0)
    return out


def variances(values: NDArray) -> tuple[NDArray, NDArray, NDArray]:
    """Sample variance across paths at each step, its standard error, and the number of paths.

    The error is that of any law with four moments, from the sample's own: Var s² = (μ₄ − σ⁴ (n − 3)/(n − 1)) / n
    (Cramér 1946, 27.4); NaN below ENOUGH paths.
    """
    known = np.isfinite(values)
    n = known.sum(axis=0)
    centre = np.where(known, values, 0.0).sum(axis=0) / np.maximum(n, 1)
    d = np.where(known, values - centre, 0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        s2 = (d * d).sum(axis=0) / (n - 1)
        fourth = (d**4).sum(axis=0) / n
        error = np.sqrt(np.maximum(fourth - s2**2 * (n - 3) / (n - 1), 0.0) / n)
    return np.where(n > 1, s2, np.nan), np.where(n >= ENOUGH, error, np.nan), n


def variance_intervals(values: NDArray, gaussian: bool) -> tuple[NDArray, NDArray, NDArray]:
    """Sample variance at each step with an interval that covers the true one 95 times in 100.

    Exact for normal values, (n − 1) s² / χ²; else s² ± 1.96 standard errors, NaN below ENOUGH paths.
    """
    s2, error, n = variances(values)
    if not gaussian:
        return s2, s2 - NORMAL * error, s2 + NORMAL * error
    from scipy import stats

    freedom = np.maximum(n - 1, 1)
    low, high = (freedom * s2 / stats.chi2.ppf(p, freedom) for p in (0.975, 0.025))
    return s2, low, high


def deviations(values: NDArray, mean: NDArray | None) -> NDArray | None:
    """Values less their mean at each step: that of the paths where they are many, else the stated one.

    The paths' own mean keeps a level that is off from looking like memory. None when no mean can be had.
    """
    known = np.isfinite(values)
    if len(values) >= ENOUGH:
        mean = np.where(known, values, 0.0).sum(axis=0) / np.maximum(known.sum(axis=0), 1)
    return None if mean is None else np.where(known, values - mean, np.nan)


def correlogram(d: NDArray, lags: NDArray) -> Measured:
    """Autocorrelations of deviations `d`, pooled over steps and paths.

    The sum of products over the sum of squares, each an average along the path. The error is that of a ratio of two
    averages over paths (Cochran 1977, 2.11), from the spread between paths.
    """
    known = np.isfinite(d)
    filled = np.where(known, d, 0.0)
    whole = bool(known.all())
    square = _lagged(filled, filled, known, 0, whole)
    value, error = np.ones(len(lags)), np.full(len(lags), np.nan)
    total = square.mean() if len(square) else np.nan
    for i, lag in enumerate(map(int, lags)):
        product = _lagged(filled, filled, known, lag, whole)
        value[i], error[i] = _ratio(product, square, total)
    return Measured(lags, value, error, len(d))


def cross_correlogram(a: NDArray, b: NDArray, lags: NDArray) -> Measured:
    """Correlations of a(t + lag) with b(t), pooled over steps and paths; lags of either sign."""
    known = np.isfinite(a) & np.isfinite(b)
    x, y = np.where(known, a, 0.0), np.where(known, b, 0.0)
    whole = bool(known.all())
    first, second = (_lagged(z, z, known, 0, whole) for z in (x, y))
    sd = float(np.sqrt(first.mean() * second.mean()))
    value, error = np.empty(len(lags)), np.full(len(lags), np.nan)
    for i, lag in enumerate(map(int, lags)):
        product = _lagged(x, y, known, lag, whole) if lag >= 0 else _lagged(y, x, known, -lag, whole)
        value[i] = product.mean() / sd if sd > 0 else np.nan
        if len(a) >= ENOUGH and sd > 0:
            # To first order r moves with the product and with half of each square.
            move = product / sd - value[i] * 0.5 * (first / first.mean() + second / second.mean())
            error[i] = move.std(ddof=1) / np.sqrt(len(a))
    return Measured(lags, value, error, len(a))


def across(early: NDArray, late: NDArray) -> tuple[NDArray, int]:
    """Correlations over paths of values at one step with those at others, (paths, steps); and the paths used."""
    usable = np.isfinite(early) & np.isfinite(late).all(axis=1)
    a, b = early[usable], late[usable]
    if len(a) < 3:
        return np.full(late.shape[1], np.nan), len(a)
    a, b = a - a.mean(), b - b.mean(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        return (a @ b) / np.sqrt((a @ a) * (b * b).sum(axis=0)), len(a)


def ordered(values: NDArray, most: int = 99) -> tuple[NDArray, NDArray]:
    """Some of the order statistics of a sample: their ranks k = 1 … n, and the values.

    All of them where they are few; else the outermost ten of either side and evenly spread ones.
    """
    x = np.sort(values[np.isfinite(values)])
    n = len(x)
    ranks = np.arange(1, n + 1)
    if n > most:
        inner = np.linspace(11, n - 10, most - 20).round().astype(int)
        ranks = np.unique(np.concatenate([np.arange(1, 11), inner, np.arange(n - 9, n + 1)]))
    return ranks, x[ranks - 1]


def rank_chances(ranks: NDArray, n: int) -> tuple[NDArray, NDArray, NDArray]:
    """Where the k-th of n independent uniforms lies, with law Beta(k, n + 1 − k): its median, and the ends of 95 %."""
    from scipy import stats

    law = stats.beta(ranks, n + 1 - ranks)
    return law.ppf(0.5), law.ppf(0.025), law.ppf(0.975)


def fewest_inside(ranks: NDArray, n: int) -> int:
    """How many of these order statistics lie within their own 95 %, at least, in 99 of 100 samples of n.

    Neighbours lie off together, so that no simple law says it: it is counted in samples drawn for it, with a fixed
    seed. Between ranks, uniforms are apart as sums of exponentials are (Rényi 1953).
    """
    rng = np.random.default_rng(n)
    steps = rng.standard_gamma(np.diff(ranks, prepend=0, append=n + 1), (4000, len(ranks) + 1))
    u = np.cumsum(steps, axis=1)
    u = u[:, :-1] / u[:, -1:]
    _, low, high = rank_chances(ranks, n)
    return int(np.quantile(((u >= low) & (u <= high)).sum(axis=1), 0.01, method="lower"))


def histogram(values: NDArray, grain: float = 0.0) -> tuple[NDArray, NDArray]:
    """Edges and densities over the middle 99.8 % of the values; cells hold whole steps of a rounding `grain`.

    The width is that of Freedman & Diaconis (1981), within 12 to 60 cells.
    """
    x = values[np.isfinite(values)]
    if not len(x):
        return np.array([0.0, 1.0]), np.zeros(1)
    low, high = np.quantile(x, [0.001, 0.999]) if len(x) > 2000 else (x.min(), x.max())
    quarter, three = np.quantile(x, [0.25, 0.75])
    width = 2.0 * (three - quarter) / len(x) ** (1 / 3)
    span = float(high - low) or grain or abs(float(low)) * 0.1 or 1.0
    width = min(max(width, span / 60), span / 12)
    if grain > 0 and width < 40 * grain:
        width = max(1.0, np.ceil(width / grain)) * grain
        low = (np.floor(low / grain) - 0.5) * grain
    cells = max(1, int(np.ceil((high - low) / width + 1e-9)))
    edges = low + width * np.arange(cells + 1)
    counts, _ = np.histogram(x, edges)
    return edges, counts / (len(x) * width)


def grain_of(values: NDArray, declared: float) -> float:
    """The distance of neighbouring values: as declared, or 1 where all values that are looked at are whole."""
    if declared:
        return declared
    some = values.ravel()[:5000]
    some = some[np.isfinite(some)]
    return 1.0 if len(some) and bool((some == np.rint(some)).all()) else 0.0


def _lagged(x: NDArray, y: NDArray, known: NDArray, lag: int, whole: bool) -> NDArray:
    """Average along each path of x(t + lag) y(t)."""
    steps = x.shape[1]
    if lag >= steps:
        return np.full(len(x), np.nan)
    sums = np.einsum("pt,pt->p", x[:, lag:], y[:, : steps - lag])
    if whole:
        return sums / (steps - lag)
    return sums / np.maximum((known[:, lag:] & known[:, : steps - lag]).sum(axis=1), 1)


def _ratio(product: NDArray, square: NDArray, total: float) -> tuple[float, float]:
    if not total > 0:
        return np.nan, np.nan
    value = float(product.mean() / total)
    if len(product) < ENOUGH:
        return value, np.nan
    rest = (product - value * square) / total
    return value, float(rest.std(ddof=1) / np.sqrt(len(rest)))
