"""Whether the p-value of every kind of check is right on its own, far into the tail.

    python tests/studies/calibration.py [--quick] [--only CASE] [--scale 1]

Each case draws the sums that one kind of check receives, directly and under the theory, as often as its line says,
and asks the check for p. Printed, for each level: p at most the level / expected, with the 99.9 % binomial interval.
A check that says it is untestable at a level counts as not flagged there; "-" where it always says so.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from time import perf_counter

import numpy as np
from numpy.typing import NDArray

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from procgen.checks.judge import Finding
from tests.studies.intervals import interval

LEVELS = (1e-2, 1e-3, 1e-4, 1e-5, 1e-6)
_PLAIN = 2.0  # statistics nearer than this many standard errors are not judged: their p is far above 0.01
_CHUNK = 4_000_000
_HALVINGS = 16
QUICK = 1_000_000  # numbers drawn for a case in the quick mode

Findings = Callable[[np.random.Generator, int], Iterator[tuple[Finding, int]]]
Draws = Callable[[np.random.Generator, int], NDArray]


@dataclass(frozen=True)
class Case:
    """One kind of check on one kind of numbers.

    `draws` statistics are drawn in a full run. `of(rng, count)` gives the findings of `count` of them, and how often
    each came; those far from p = 0.01 are left out.
    """

    name: str
    draws: int
    of: Findings
    size: int = 1  # numbers drawn for one statistic


@dataclass
class Counts:
    """Of one case: statistics drawn, and at each level those with so small a p, and those that were testable."""

    drawn: int
    small: NDArray
    testable: NDArray


def run(case: Case, seed: int, scale: float = 1.0) -> Counts:
    """Draw and count, in pieces that fit into memory."""
    rng = np.random.default_rng(seed)
    wanted = max(1, int(case.draws * scale))
    counts = Counts(0, np.zeros(len(LEVELS), int), np.zeros(len(LEVELS), int))
    while counts.drawn < wanted:
        piece = min(wanted - counts.drawn, max(1, _CHUNK // case.size))
        for finding, times in case.of(rng, piece):
            open_ = np.array([finding.doubt(level) is None for level in LEVELS])
            counts.testable += times * open_
            counts.small += times * (open_ & (finding.log_p <= np.log(LEVELS)))
        counts.drawn += piece
    return counts


def quick(case: Case) -> float:
    """The share of a case's draws that takes about a tenth of a second."""
    return min(1.0, max(300, QUICK // case.size) / case.draws)


def too_many(counts: Counts, chance: float) -> list[float]:
    """Levels at which small p are more frequent than a right check shows but for this chance (over all levels)."""
    from scipy.stats import binom

    most = binom.isf(chance / len(LEVELS), counts.drawn, LEVELS)
    return [level for level, count, top in zip(LEVELS, counts.small, most, strict=True) if count > top]


def cells(counts: Counts) -> Iterator[str]:
    for level, count, testable in zip(LEVELS, counts.small.tolist(), counts.testable.tolist(), strict=True):
        if not testable:
            yield "-"
        elif level * counts.drawn < 3:
            yield "·"
        else:
            low, high = (bound / level for bound in interval(count, counts.drawn))
            yield f"{count / counts.drawn / level:.2f} ({low:.2f}–{high:.2f})"


def table(rows: list[tuple[str, Counts]]) -> str:
    """Markdown: observed / expected."""
    lines = ["| check, numbers | statistics | " + " | ".join(f"{level:g}" for level in LEVELS) + " |"]
    lines.append("| --- " * (2 + len(LEVELS)) + "|")
    lines += [f"| {name} | {counts.drawn:,} | " + " | ".join(cells(counts)) + " |" for name, counts in rows]
    return "\n".join(lines)


def far(z: NDArray) -> NDArray[np.intp]:
    """Places of the statistics that have to be judged."""
    return np.flatnonzero(np.abs(z) > _PLAIN)


def of_one_number(draw: Draws, judged: Callable[[float], Finding], centre: float, sd: float) -> Findings:
    """Findings of a check that reads one number only: it is asked for p at the edge of each level, not at each draw."""
    edges: list[list[tuple[float, Finding]]] = []

    def findings(rng: np.random.Generator, count: int) -> Iterator[tuple[Finding, int]]:
        if not edges:
            edges.extend([list(_edges(judged, centre, sign * sd)) for sign in (1, -1)])
        off = draw(rng, count) - centre
        for sign, side in zip((1, -1), edges, strict=True):
            beyond = [int(np.count_nonzero(sign * off >= distance)) for distance, _ in side] + [0]
            for k, (_, finding) in enumerate(side):
                yield finding, beyond[k] - beyond[k + 1]

    return findings


def _edges(judged: Callable[[float], Finding], centre: float, sd: float) -> Iterator[tuple[float, Finding]]:
    """How far from the centre, towards the sign of sd, p falls to each level; where it never does, no more."""
    low = 0.0
    for level in np.log(LEVELS):
        high = low + 1.0
        while judged(centre + high * sd).log_p > level:
            high += 1.0
            if high > 60:
                return
        for _ in range(_HALVINGS):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if judged(centre + middle * sd).log_p > level else (low, middle)
        yield high * abs(sd), judged(centre + high * sd)


def main() -> None:
    from tests.studies.calibration_cases import CASES

    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="as many draws as take seconds")
    parser.add_argument("--only", default="", help="cases whose name contains this")
    parser.add_argument("--scale", type=float, default=1.0, help="draws, as a multiple of those of each case")
    options = parser.parse_args()
    rows = []
    for seed, case in enumerate(CASES):
        if options.only not in case.name:
            continue
        begun = perf_counter()
        rows.append((case.name, run(case, seed, quick(case) if options.quick else options.scale)))
        bad = too_many(rows[-1][1], 1e-3)
        worst = f"  TOO MANY at {bad}" if bad else ""
        print(f"{case.name}: {perf_counter() - begun:.1f} s{worst}", file=sys.stderr, flush=True)
    print(table(rows))


if __name__ == "__main__":
    main()
