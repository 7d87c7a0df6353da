"""The gamma function's logarithm, and the ratio of two of its values, with the same bits on every processor."""

from __future__ import annotations

import numpy as np

from procgen.chance.elementary import log

_LARGE = 16.0  # from here on the asymptotic series hold to a rounding
_HALF_LOG_2_PI = 0.9189385332046728
STIRLING = (  # B(2n) / (2n (2n - 1)), n from 8 to 1
    -0.029550653594771242,
    0.006410256410256410,
    -0.0019175269175269176,
    0.0008417508417508418,
    -0.0005952380952380953,
    0.0007936507936507937,
    -0.002777777777777778,
    0.08333333333333333,
)
_HALF_STEP = (  # Gamma(x + 1/2) / (Gamma(x) sqrt(x)) in powers of 1/x, from 9 to 0
    -28717403.0 / 17179869184.0,
    -334477.0 / 2147483648.0,
    39325.0 / 33554432.0,
    869.0 / 4194304.0,
    -399.0 / 262144.0,
    -21.0 / 32768.0,
    5.0 / 1024.0,
    1.0 / 128.0,
    -1.0 / 8.0,
    1.0,
)


def log_gamma(x: float) -> float:
    """log Gamma(x) for x > 0, to about 1e-14 (1 + its size): Stirling's series (Abramowitz & Stegun 1964, 6.1.41)."""
    below = 1.0
    while x < _LARGE:
        below = below * x
        x = x + 1.0
    series, square = 0.0, 1.0 / (x * x)
    for coefficient in STIRLING:
        series = series * square + coefficient
    return float((x - 0.5) * log(x) - x + _HALF_LOG_2_PI + series / x - log(below))


def half_step(x: float) -> float:
    """Gamma(x + 1/2) / Gamma(x) for x > 0, to about 1e-15 of it (Tricomi & Erdelyi 1951, Pacific J. Math. 1)."""
    factor = 1.0
    while x < _LARGE:
        factor = factor * (x / (x + 0.5))
        x = x + 1.0
    series = 0.0
    for coefficient in _HALF_STEP:
        series = series / x + coefficient
    return factor * series * float(np.sqrt(x))
