"""The theory of small specs written as mappings."""

from __future__ import annotations

from typing import Any

import procgen as pg
from procgen.theory import SeriesTheory, Theory


def theory_of(series: dict[str, Any], **rest: Any) -> Theory:
    spec = {"procgen": 1, "seed": 1, "paths": 4, "time": {"steps": 100}, "series": series, **rest}
    return pg.theory(pg.load(spec))


def series_of(*body: Any, **rest: Any) -> SeriesTheory:
    """The theory of one series with this body."""
    return theory_of({"x": list(body)}, **rest)["x"]


def tolerance(condition: float) -> float:
    """The relative accuracy that theory promises where a problem has this condition number."""
    return max(1e-9, 100 * 2.3e-16 * condition)
