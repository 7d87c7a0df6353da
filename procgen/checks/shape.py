"""What a shift and another scale alone do to the shape of shocks: which departures of a law follow from them."""

from __future__ import annotations

from collections.abc import Mapping
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from procgen.spec.records import dataclass

if TYPE_CHECKING:
    from procgen.checks.verdict import Check

_CELLS = 512  # of the uniforms: 8 bins of the scores each
_SHIFTS = np.concatenate([-np.geomspace(10, 0.02, 40), [0.0], np.geomspace(0.02, 10, 40)])
_SCALES = np.geomspace(0.05, 20.0, 81)


@dataclass(frozen=True)
class Moved:
    """How far shocks are from the stated ones, in their stated sd, and what follows from it for their shape.

    Attributes
    ----------
    shift, scale : float
        Shocks are seen as shift + scale z, with z as stated.
    spread_score, shape : float
        The spread score that the shift alone makes, and the shape of the law that both make: as the checks of the same
        names print them.
    """

    shift: float
    scale: float
    spread_score: float
    shape: float


def moved(rows: Mapping[str, Check]) -> Moved:
    """The shift and scale of the shocks behind the checks of one series, by name: by moments, or else by the scores.

    The normal law stands for all: it is what follows from a large shift or scale that is asked, not what from a small.
    """
    mean, variance = _estimate(rows, "shocks: mean"), _estimate(rows, "shocks: variance")
    level, spread = _estimate(rows, "shocks: level score"), _estimate(rows, "shocks: spread score")
    if level is None and spread is None:
        shift, scale = mean or 0.0, max(variance if variance is not None else 1.0, 1e-6) ** 0.5
    else:
        gap = np.zeros((len(_SHIFTS), len(_SCALES)))
        if mean is not None:
            gap += (_SHIFTS[:, None] - mean) ** 2
        if variance is not None:
            gap += np.log(_SCALES[None, :] ** 2 / max(variance, 1e-6)) ** 2
        for k, score in ((0, level), (1, spread)):
            if score is not None:
                gap += (_grid()[..., k] - score) ** 2
        i, j = np.unravel_index(int(np.argmin(gap)), gap.shape)
        shift, scale = float(_SHIFTS[i]), float(_SCALES[j])
    alone, both = components(shift, 1.0), components(shift, scale)
    return Moved(shift, scale, float(alone[1]), float(np.sqrt(both[2:] @ both[2:])))


def _estimate(rows: Mapping[str, Check], what: str) -> float | None:
    row = rows.get(what)
    return None if row is None else row.estimate


def components(shift: float, scale: float) -> NDArray:
    """(8,) means of the score components of normal shocks, shifted and scaled."""
    from scipy.special import ndtr, ndtri

    edges = ndtri(np.arange(_CELLS + 1) / _CELLS)
    return np.asarray(np.diff(ndtr((edges - shift) / scale)) @ _basis())


@lru_cache(maxsize=1)
def _basis() -> NDArray:
    from procgen.chance.laws import Normal
    from procgen.checks.scores import Scores

    whole = Scores(Normal()).components
    return whole.reshape(_CELLS, -1, whole.shape[1]).mean(axis=1)


@lru_cache(maxsize=1)
def _grid() -> NDArray:
    return np.array([[components(shift, scale) for scale in _SCALES] for shift in _SHIFTS])
