"""What is special to whole numbers and to values with a chance of their own: ranks given the past, and shares."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.verdict import Check
from procgen.terms.base import Unknown
from procgen.terms.ranks import Ranking, ranking

_SHARES = (0.02, 0.98)  # chances of the least value between which its share is worth a check


def lumpy(theory: Any) -> bool:
    """Whether some values of a series have a chance of their own."""
    return bool(theory.discrete or getattr(theory, "lumpy", False))


def ranked(graph: Any, series: str, theory: Any, grain: float) -> Ranking | Unknown | None:
    """A way to the ranks of a series given its past; why there is none, or None where no term has ranks."""
    if getattr(theory, "mixture", None) is not None:
        return None
    way = ranking(graph, series, theory.discrete, grain)
    if isinstance(way, Ranking) and grain and not way.plain:
        return Unknown(f"values of {series} are rounded after they were changed: what lies behind them is not known")
    return way


def whole_numbers(series: str, probe: str, law: Any, x: NDArray, seed: int) -> Iterator[Check]:
    """A law of whole numbers (or multiples of something) at a probe: ranks spread over their steps, and the least.

    law: of the values x, with `spacing`, `cdf` and `ppf`.
    """
    below, upto = law.cdf(x - law.spacing / 2.0), law.cdf(x + law.spacing / 2.0)
    v = np.random.default_rng(seed).random(len(x))
    note = f"Anderson–Darling, {len(x)} paths, ranks spread over the chance of each value"
    yield Check.of(series, "law", probe, "law", judge.anderson_darling(below + v * (upto - below)), note)
    least = float(law.ppf(1e-12))
    chance = float(law.cdf(least + law.spacing / 2.0))
    if _SHARES[0] < chance < _SHARES[1]:
        count = int(np.count_nonzero(x < least + law.spacing / 2.0))
        yield Check.of(series, f"share of {least:.6g}", probe, "law", judge.share(count, len(x), chance))
