"""How often true ensembles are said to depart, by family of specs, shape and level.

    python tests/studies/false_alarms.py [--quick] [--seeds 2000] [--only FAMILY] [--workers 2] [--out FILE [--resume|--so-far]]

Every run draws an ensemble exactly as stated and judges it. Printed in Markdown: the share flagged at each level with
its 99.9 % binomial interval, by family and pooled, and how often each kind of check had a small p. With --out, each
finished job (a family, a shape, some seeds) is a line of JSON in FILE; --resume leaves out what is there, and --so-far
only reports it.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
from collections import Counter, defaultdict
from collections.abc import Iterator, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # before NumPy is imported, as the command does
import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from tests.studies.departures import draw, spec_of, verdict
from tests.studies.families import FAMILIES, LONGEST, OFTEN, stated
from tests.studies.intervals import interval

LEVELS = (0.05, 0.01, 0.001)
TAILS = (1e-2, 1e-3, 1e-4, 1e-5)
SHAPES = ((1, 20_000), (30, 200), (200, 100), (2000, 500), (20_000, 20))
LARGE = 400_000  # values of a series from which on a shape gets fewer runs
FEWER = 10
PIECE = 50  # seeds of one job


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
        facts = [row for row in answer.rows if row.outcome == "departs" and row.p is None]
        self.runs += 1
        for level in LEVELS:
            self.flagged[level] += bool(facts or least <= level)
        for row in judged:
            self.checks[row.what] += 1
            for tail in TAILS:
                self.small[tail][row.what] += row.p <= tail
        if facts or least <= 1e-3:
            worst = facts[0] if facts else judged[int(np.argmin(adjusted))]
            p = "a fact" if worst.p is None else f"p {worst.p:.2g} of {len(judged)}"
            self.lines.append(f"{worst.series}, {worst.what}, {worst.probe}: {p}; {worst.note}")

    def merge(self, other: Tally) -> None:
        self.runs += other.runs
        self.flagged.update(other.flagged)
        self.checks.update(other.checks)
        for tail, counts in other.small.items():
            self.small[tail].update(counts)
        self.lines += other.lines

    def to_dict(self) -> dict[str, Any]:
        flat = {f"{tail:g}": dict(counts) for tail, counts in self.small.items()}
        flagged = {f"{level:g}": int(count) for level, count in self.flagged.items()}
        return {
            "runs": self.runs, "flagged": flagged, "checks": dict(self.checks), "small": flat, "lines": self.lines,
        }  # fmt: skip

    @classmethod
    def from_dict(cls, plain: Mapping[str, Any]) -> Tally:
        tally = cls(plain["runs"], Counter(), Counter(plain["checks"]), lines=list(plain["lines"]))
        tally.flagged.update({float(level): count for level, count in plain["flagged"].items()})
        for tail, counts in plain["small"].items():
            tally.small[float(tail)].update(counts)
        return tally


def run(family: str, shape: tuple[int, int], seeds: range) -> Tally:
    """Judge true ensembles of one family and shape. Its theory is computed once for all seeds."""
    tally = Tally()
    paths, steps = shape[0], min(shape[1], LONGEST.get(family, shape[1]))
    body = stated(family, steps)
    for seed in seeds:
        tally.add(verdict(body, draw(spec_of(body, paths, steps, seed)), false_alarm=0.001))
    tally.lines = [f"{family} {paths}×{steps}: {line}" for line in tally.lines]
    return tally


def jobs(seeds: int, only: str) -> Iterator[tuple[str, tuple[int, int], range]]:
    """Pieces of work: a tenth of the runs for every family, then the rest for those of OFTEN.

    Large shapes get fewer seeds, and the small ones what is left of the family's runs.
    """
    large = [shape[0] * shape[1] >= LARGE for shape in SHAPES]
    share = -(-seeds // (large.count(False) * FEWER + large.count(True)))
    tenth = -(-share // 10)
    for families, begin, end in ((FAMILIES, 0, tenth), (OFTEN, tenth, share)):
        for family in families:
            for k, shape in enumerate(SHAPES if only in family else ()):
                times = 1 if large[k] else FEWER
                for first in range(begin * times, end * times, PIECE):
                    # draws go by seed and names, which families share: each has seeds of its own
                    start = 1_000_000 * (1 + list(FAMILIES).index(family)) + 1000 * k + 1
                    yield family, shape, range(start + first, start + min(first + PIECE, end * times))


def report(tallies: Mapping[str, Tally]) -> str:
    """The tables in Markdown, and a line for each run flagged at 0.001."""
    total = Tally()
    for tally in tallies.values():
        total.merge(tally)
    lines = ["| family | runs | " + " | ".join(f"at {level:g}" for level in LEVELS) + " |"]
    lines.append("| --- " * (2 + len(LEVELS)) + "|")
    for name, tally in [*tallies.items(), ("all", total)]:
        cells = []
        for level in LEVELS:
            low, high = interval(tally.flagged[level], tally.runs)
            cells.append(f"{tally.flagged[level] / tally.runs:.4f} ({low:.4f}–{high:.4f})")
        lines.append(f"| {name} | {tally.runs:,} | " + " | ".join(cells) + " |")
    lines += ["", "| check: observed / expected | n | " + " | ".join(f"p ≤ {tail:g}" for tail in TAILS) + " |"]
    lines.append("| --- " * (2 + len(TAILS)) + "|")
    for what, count in sorted(total.checks.items()):
        shares = " | ".join(f"{total.small[tail][what] / (tail * count):.2f}" for tail in TAILS)
        lines.append(f"| {what} | {count:,} | {shares} |")
    return "\n".join([*lines, "", "flagged at 0.001:", "", *(f"- {line}" for line in total.lines)])


def _key(family: str, shape: tuple[int, int], seeds: range) -> str:
    return f"{family}|{shape[0]}x{shape[1]}|{seeds.start}-{seeds.stop - 1}"


def done(out: Path) -> dict[str, tuple[str, Tally]]:
    """What a file of tallies holds: job -> its family and tally; a last line that was cut off is left out."""
    found = {}
    for line in out.read_text().splitlines() if out.exists() else []:
        try:
            plain = json.loads(line)
        except json.JSONDecodeError:
            continue
        found[plain["job"]] = plain["family"], Tally.from_dict(plain)
    return found


def answered(work: Sequence[tuple[str, tuple[int, int], range]], workers: int) -> Iterator[Tally]:
    """The tallies of some jobs, in their order."""
    if workers == 1:
        yield from (run(*job) for job in work)
    else:
        with ProcessPoolExecutor(workers) as pool:
            yield from (each.result() for each in [pool.submit(run, *job) for job in work])


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=2000, help="runs of a family of OFTEN, over all shapes")
    parser.add_argument("--quick", action="store_true", help="about 50 runs a family")
    parser.add_argument("--only", default="", help="families whose name contains this")
    parser.add_argument("--workers", type=int, default=1, help="processes")
    parser.add_argument("--out", type=Path, help="a file that gets a line for each finished job")
    parser.add_argument("--resume", action="store_true", help="leave out the jobs that --out already has")
    parser.add_argument("--so-far", action="store_true", help="report what --out has, and draw nothing")
    options = parser.parse_args()
    if options.out and options.so_far:
        tallies: dict[str, Tally] = defaultdict(Tally)
        for family, tally in done(options.out).values():
            tallies[family].merge(tally)
        print(report(tallies))
        return
    known = done(options.out) if options.out and options.resume else {}
    if options.out and not options.resume:
        options.out.write_text("")
    work = list(jobs(50 if options.quick else options.seeds, options.only))
    fresh = answered([job for job in work if _key(*job) not in known], options.workers)
    tallies = defaultdict(Tally)
    for job in work:
        key = _key(*job)
        tally = known[key][1] if key in known else next(fresh)
        if options.out and key not in known:
            with options.out.open("a") as file:
                file.write("\n" + json.dumps({"job": key, "family": job[0], **tally.to_dict()}))
        tallies[job[0]].merge(tally)
        print(f"\r{job[0]:24s} {tallies[job[0]].runs:6d}", end="", file=sys.stderr)
    print("", file=sys.stderr)
    print(report(tallies))


if __name__ == "__main__":
    main()
