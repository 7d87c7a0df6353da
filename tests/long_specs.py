"""Specs that reach what 60 steps of the gallery do not: `python -m tests.long_specs` prints their digests as JSON.

Recursions of 168 and more coefficients, which are compiled apart, with the products of matrices as large that they
begin from, and a burn-in of 27,492 steps (`chance/filters.py`, `matrices.py`); a path that is run in pieces beside each
other (`terms/pieces.py`). Without compiling, as here, one step is made after another. With --write the digests are
written to tests/golden/long.json, of which the same holds as of `golden_specs`.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from typing import Any

import procgen as pg
from procgen.chance.kernel import compiling
from tests.bench.bench_theory import SEASON, coefficients
from tests.golden_specs import ROOT

FILE = ROOT / "tests" / "golden" / "long.json"
STILL = {"phi": 0.6, "d": 0, "theta": 0.2, "seasonal": {"period": SEASON, "phi": 0.7, "theta": -0.2}, "sd": 1}
GROWN = {"d": 1, "theta": -0.4, "seasonal": {"period": SEASON, "d": 1, "theta": -0.3}, "sd": 1}
SERIES: dict[str, dict[str, list[dict[str, Any]]]] = {
    "long week": {
        "exact": [{"ar": {"phi": coefficients(), "sd": 1}}],
        "burnt": [{"ar": {"phi": coefficients(), "sd": 1, "law": {"student_t": {"df": 6}}}}],
    },
    "long season": {
        "still": [{"arima": STILL}],
        "grown": [{"arima": GROWN}],
    },
    "long path": {
        "symmetric": [{"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.6}}],
        "skewed": [{"gjr_garch": {"omega": 0.1, "alpha": 0.05, "gamma": 0.1, "beta": 0.5}}],
        "logarithmic": [{"egarch": {"scale": 1, "alpha": 0.2, "gamma": -0.1, "beta": 0.7}}],
    },
}


def long(paths: int = 40) -> Iterator[tuple[str, Any]]:
    """All of them by name: 300 steps of so many paths, and 8,000 of one path."""
    for name, series in SERIES.items():
        count, steps = (1, 8000) if name == "long path" else (paths, 300)
        yield name, pg.load({"procgen": 1, "seed": 1, "paths": count, "time": {"steps": steps}, "series": series})


def digests(compiled: bool = False) -> dict[str, str]:
    """Their ensemble digests by name."""
    with compiling(compiled):
        return {name: pg.render(spec).digest for name, spec in long()}


if __name__ == "__main__":
    text = json.dumps(digests(), indent=1) + "\n"
    if "--write" in sys.argv:
        FILE.write_text(text)
    else:
        print(text)
