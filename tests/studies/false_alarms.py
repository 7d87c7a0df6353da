"""How often true ensembles are said to depart, by family of specs, shape and level.

    python tests/studies/false_alarms.py [--quick] [--seeds 2000] [--only FAMILY] [--workers 2]

Every run draws an ensemble exactly as stated and judges it. Printed: the share flagged at each level with its
99.9 % binomial interval, by family and pooled, and the calibration of every kind of check on its own.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter, defaultdict
from collections.abc import Iterator, Mapping
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from tests.studies.departures import draw, spec_of, verdict

LEVELS = (0.05, 0.01, 0.001)
TAILS = (1e-2, 1e-3, 1e-4, 1e-5)
SHAPES = ((1, 20_000), (30, 200), (200, 100), (2000, 500), (20_000, 20))

_T = {"student_t": {"df": 6}}
FAMILIES: Mapping[str, Any] = {
    "white noise": [{"constant": 3}, {"white_noise": {"sd": 2}}],
    "walk": [{"random_walk": {"sd": 0.5, "drift": 0.01, "start": 10}}],
    "ar": [{"ar": {"phi": [0.7, -0.2], "sd": 1}}],
    "arma": [{"arma": {"phi": [0.5, 0.3], "theta": [0.4], "sd": 1}}],
    "ma": [{"ma": {"theta": [0.6, 0.3, 0.1], "sd": 1}}],
    "seasonal": [
        {"trend": {"level": 5, "slope": 0.01}},
        {"seasonal": {"period": 12, "harmonics": [{"amplitude": 3, "peak": 2}, {"amplitude": 1}]}},
        {"ar": {"phi": 0.4, "sd": 1}},
    ],
    "structural": [{"random_walk": {"sd": 0.2}}, {"ar": {"phi": 0.8, "sd": 1}}, {"white_noise": {"sd": 0.5}}],
    "rounded": {"series": {"x": {"decimals": 1, "of": [{"random_walk": {"sd": 0.5}}, {"ar": {"phi": 0.6, "sd": 1}}]}}},
    "student": [{"ar": {"phi": 0.5, "sd": 1, "law": _T}}],
    "laplace": [{"ma": {"theta": 0.4, "sd": 1, "law": "laplace"}}],
    "garch": [{"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.85}}],
    "arma-garch": [
        {"arma": {"phi": 0.5, "theta": 0.3, "shock": {"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8, "law": _T}}}}
    ],
    "lognormal": [{"exp": [{"ar": {"phi": 0.8, "total_sd": 0.3}}]}],
    "integrated": [{"integrate": [{"ar": {"phi": 0.5, "sd": 1}}]}],
    "differenced": [{"difference": {"of": [{"ar": {"phi": 0.5, "sd": 1}}]}}],
    "product": [{"product": [{"ar": {"phi": 0.5, "sd": 1}}, {"exp": [{"ar": {"phi": 0.7, "sd": 0.1}, "as": "size"}]}]}],
    "garch in noise": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}, {"ar": {"phi": 0.6, "sd": 1}}],
    "several": {
        "shared": {"w": [{"ar": {"phi": 0.8, "total_sd": 1}}]},
        "series": {
            "x": [{"use": "w", "times": 2}, {"white_noise": {"sd": 1}}],
            "y": [{"use": "w"}, {"random_walk": {"sd": 0.3}}],
            "z": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}],
        },
        "correlation": [{"between": ["x.white_noise", "z.garch"], "value": 0.5}],
    },
}


@dataclass
class Tally:
    """Runs, runs flagged at each level, checks of each kind and those with small p, first lines of flagged runs."""

    runs: int = 0
    flagged: Counter[float] = field(default_factory=Counter)
    checks: Counter[str] = field(default_factory=Counter)
    small: dict[float, Counter[str]] = field(default_factory=lambda: defaultdict(Counter))
    lines: list[str] = field(default_factory=list)

    def add(self, answer: Any) -> None:
        from procgen.checks.verdict import holm

        judged = [row for row in answer.rows if row.p is not None]
        adjusted = holm([row.p for row in judged])
        least = min(adjusted, default=1.0)
        facts = any(row.outcome == "departs" and row.p is None for row in answer.rows)
        self.runs += 1
        for level in LEVELS:
            self.flagged[level] += bool(facts or least <= level)
        for row in judged:
            self.checks[row.what] += 1
            for tail in TAILS:
                self.small[tail][row.what] += row.p <= tail
        if facts or least <= 1e-3:
            self.lines += answer.headline[:1] or [judged[int(np.argmin(adjusted))].what]

    def merge(self, other: Tally) -> None:
        self.runs += other.runs
        self.flagged.update(other.flagged)
        self.checks.update(other.checks)
        for tail, counts in other.small.items():
            self.small[tail].update(counts)
        self.lines += other.lines


def run(family: str, shape: tuple[int, int], seeds: range) -> Tally:
    """Judge true ensembles of one family and shape."""
    tally = Tally()
    for seed in seeds:
        stated = FAMILIES[family]
        tally.add(verdict(stated, draw(spec_of(stated, *shape, seed)), false_alarm=0.001))
    return tally


def interval(count: int, runs: int, level: float = 0.999) -> tuple[float, float]:
    """Clopper & Pearson (1934) interval of a share."""
    from scipy.stats import beta

    tail = (1 - level) / 2
    low = beta.ppf(tail, count, runs - count + 1) if count else 0.0
    high = beta.isf(tail, count + 1, runs - count) if count < runs else 1.0
    return float(low), float(high)


def jobs(seeds: int, only: str) -> Iterator[tuple[str, tuple[int, int], range]]:
    for family in FAMILIES:
        if only in family:
            for k, shape in enumerate(SHAPES):
                share = seeds // 20 if shape[0] * shape[1] >= 400_000 else seeds
                yield family, shape, range(1000 * k + 1, 1000 * k + 1 + max(1, share // len(SHAPES)))


def report(tallies: Mapping[str, Tally]) -> str:
    lines = [f"{'family':18s} {'runs':>7s}" + "".join(f"{f'at {level:g}':>26s}" for level in LEVELS)]
    total = Tally()
    for tally in tallies.values():
        total.merge(tally)
    for name, tally in [*tallies.items(), ("all", total)]:
        cells = []
        for level in LEVELS:
            low, high = interval(tally.flagged[level], tally.runs)
            cells.append(f"{tally.flagged[level] / tally.runs:.4f} ({low:.4f}–{high:.4f})")
        lines.append(f"{name:18s} {tally.runs:7d}" + "".join(f"{cell:>26s}" for cell in cells))
    lines += [
        "",
        f"{'check':46s} {'n':>9s}"
        + "".join(f"{f'p ≤ {tail:g}, of':>16s}" for tail in TAILS)
        + "  (observed / expected)",
    ]
    for what, count in sorted(total.checks.items()):
        shares = "".join(f"{total.small[tail][what] / (tail * count):16.2f}" for tail in TAILS)
        lines.append(f"{what:46s} {count:9d}{shares}")
    return "\n".join([*lines, "", "flagged at 0.001:", *total.lines])


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=2000, help="runs a family, over all shapes")
    parser.add_argument("--quick", action="store_true", help="20 runs a family")
    parser.add_argument("--only", default="", help="families whose name contains this")
    parser.add_argument("--workers", type=int, default=1)
    options = parser.parse_args()
    seeds = 20 if options.quick else options.seeds
    tallies: dict[str, Tally] = defaultdict(Tally)
    with ProcessPoolExecutor(options.workers) as pool:
        futures = [(job[0], pool.submit(run, *job)) for job in jobs(seeds, options.only)]
        for family, future in futures:
            tallies[family].merge(future.result())
            print(f"\r{family:18s} {tallies[family].runs:6d}", end="", file=sys.stderr)
    print("", file=sys.stderr)
    print(report(tallies))


if __name__ == "__main__":
    main()
