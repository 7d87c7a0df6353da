"""What rounding does to moments: nothing to speak of where cells are fine, and exactly what where they are not.

Where cells are small against the spread of a smooth law, rounding adds grain²/12 to the variance and leaves all else
alone (Sheppard 1898). Where they are not, mean and variance are sums over the cells of the law that is rounded.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

CELLS = 20_000  # most cells over which a law is summed
GAUSSIAN_COARSE = 1.0  # grain over sd; there the mean of rounded normals is off by 1e-9 of a cell at most
UNKNOWN_COARSE = 0.5  # the same for values whose law is neither normal nor known
_CLOSE = 1e-4  # departure from Sheppard's moments, in units of the spread, that counts as none
_TAIL = 1e-16
FINE = 0.02  # grain over sd; below it even a law with jumps in its density is rounded without trace


def coarse(
    grain: float, mean: NDArray, variance: NDArray, gaussian: bool, rounded: dict[int, tuple[float, float]]
) -> NDArray[np.bool_]:
    """At which probes the grain is too coarse for Sheppard's correction, (probes,).

    `rounded` holds the exact mean and variance of the rounded value at those probes whose law is known.
    """
    with np.errstate(invalid="ignore"):
        sd = np.sqrt(np.maximum(variance, 0.0))
        out = (grain > (GAUSSIAN_COARSE if gaussian else UNKNOWN_COARSE) * sd) & (variance > 0)
    if gaussian:
        return out
    for i, (level, spread) in rounded.items():
        stored = variance[i] + grain * grain / 12
        out[i] = abs(level - mean[i]) > _CLOSE * sd[i] or abs(spread - stored) > _CLOSE * stored
    return out


def rounded_moments(law: Any, grain: float) -> tuple[float, float] | None:
    """Mean and variance of values of `law` rounded to multiples of `grain`; None where there are too many cells.

    `law` has `cdf`, `sf` and `ppf` of unrounded values. What lies beyond 1e-16 of either tail is left out.
    """
    low, high = (float(law.ppf(p)) for p in (_TAIL, 1 - _TAIL))
    first, last = np.floor(low / grain) - 2, np.ceil(high / grain) + 2
    if not np.isfinite([first, last]).all() or last - first > CELLS:
        return None
    at = np.arange(first, last + 1)
    edges = grain * (at[:-1] + 0.5)
    below, above = law.cdf(edges), law.sf(edges)
    lower = np.diff(below, prepend=0.0, append=1.0)
    upper = -np.diff(above, prepend=1.0, append=0.0)
    share = np.where(np.append(below, 1.0) < 0.5, lower, upper)  # differences of the small tail keep their digits
    values = grain * at
    centre = float(share @ values) / float(share.sum())
    return centre, float(share @ (values - centre) ** 2) / float(share.sum())
