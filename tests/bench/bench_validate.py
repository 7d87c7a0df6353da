"""Time and memory of validation against those of rendering: 65,536 paths × 1,000 steps, two processes each.

    python -m tests.bench.bench_validate [--quick] [--paths 65536] [--steps 1000] [--rounds 3] [--workers 2]
        [--only CASE ...] [--dir build/bench]

Every case is rendered and validated as whole processes, one after the other in each round, so that a slow minute of
the machine meets both; the table gives medians, and the median of the ratios round by round. Memory is the peak
resident size of the largest process, and processor time that of all of them. A case of 20 series has a sixteenth of
the paths. `long` is one path of 40 million steps as float32, `week` the five series of `bench_theory`, which remember
a week of hours, 200 paths of 100,000 steps.
"""

from __future__ import annotations

import argparse
import os
import shutil
import statistics
from itertools import pairwise
from pathlib import Path

from tests.bench import bench_theory
from tests.bench.whole import PROCGEN, Run, ratio, run

SPEC = """\
procgen: 1
seed: 1
paths: {paths}
time: {{steps: {steps}}}
series:
  x: [{{{term}}}]
"""
TERMS = {
    "noise": "white_noise: {sd: 1}",
    "walk": "random_walk: {sd: 1}",
    "ar2": "ar: {phi: [0.75, -0.5], sd: 1}",
    "garch": "garch: {omega: 0.05, alpha: 0.1, beta: 0.85}",
}
SUM = """\
    - trend: {level: 10, slope: 0.01}
    - random_walk: {sd: 0.1}
    - ar: {phi: 0.9, sd: 1}
    - {ar: {phi: [0.5, -0.3], sd: 0.5}, as: fast}
    - white_noise: {sd: 0.7}
"""


def main() -> None:
    args = arguments()
    paths, steps = (2048, 200) if args.quick else (args.paths, args.steps)
    args.dir.mkdir(parents=True, exist_ok=True)
    cases = specs(paths, steps, 200_000 if args.quick else 40_000_000, 8 if args.quick else 200)
    seen: dict[str, tuple[list[Run], list[Run]]] = {name: ([], []) for name in cases if name in (args.only or cases)}
    for _ in range(1 if args.quick else args.rounds):
        for name, (renders, validations) in seen.items():
            file, out = args.dir / f"{name}.yaml", args.dir / "out"
            file.write_text(cases[name])
            shutil.rmtree(out, ignore_errors=True)
            workers = ["--workers", str(args.workers)]
            renders.append(run([*PROCGEN, "render", str(file), "-o", str(out), *workers]))
            validations.append(run([*PROCGEN, "validate", str(out), *workers]))
            shutil.rmtree(out)
    report(seen, paths, steps, args.workers)


def arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="2,048 × 200, once: does it run?")
    parser.add_argument("--paths", type=int, default=65_536)
    parser.add_argument("--steps", type=int, default=1_000)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--only", nargs="*", help="cases, all when absent")
    parser.add_argument("--dir", type=Path, default=Path("build/bench"))
    return parser.parse_args()


def specs(paths: int, steps: int, longest: int, remembering: int) -> dict[str, str]:
    """The spec of every case."""
    found = {name: SPEC.format(paths=paths, steps=steps, term=term) for name, term in TERMS.items()}
    head = f"procgen: 1\nseed: 1\npaths: {paths}\ntime: {{steps: {steps}}}\nseries:\n"
    found["sum of 5"] = f"{head}  x:\n{SUM}"
    names = [f"s{k:02d}" for k in range(20)]
    series = [f"  {name}: [{{ar: {{phi: {0.3 + 0.03 * k:.2f}, sd: 1}}}}]" for k, name in enumerate(names)]
    pairs = [f"  - {{between: [{a}.ar, {b}.ar], value: 0.3}}" for a, b in pairwise(names)]
    twenty = head.replace(f"paths: {paths}", f"paths: {paths // 16}")
    found["20 series"] = "\n".join([twenty + series[0], *series[1:], "correlation:", *pairs, ""])
    one = SPEC.format(paths=1, steps=longest, term=TERMS["ar2"])
    found["long"] = one.replace("x: [{", "x: {type: float32, of: [{").replace("}]\n", "}]}\n")
    week = bench_theory.SPEC.format(s=bench_theory.SEASON, phi=bench_theory.coefficients())
    found["week"] = week.replace("paths: 1000\n", f"paths: {remembering}\n")
    return found


def report(seen: dict[str, tuple[list[Run], list[Run]]], paths: int, steps: int, workers: int) -> None:
    rounds = len(next(iter(seen.values()))[0])
    print(f"{paths:,} × {steps:,}, {workers} workers, median of {rounds}, {os.cpu_count()} processors")
    print(f"\n{'case':10}{'render s':>9}{'validate s':>11}{'ratio':>7}{'processor s':>16}{'ratio':>7}{'peak MB':>12}")
    for name, (renders, validations) in seen.items():
        middle = [[statistics.median(each) for each in zip(*runs, strict=True)] for runs in (renders, validations)]
        (r, rc, rm), (v, vc, vm) = middle
        spent = statistics.median(b.processor / a.processor for a, b in zip(renders, validations, strict=True))
        print(
            f"{name:10}{r:9.2f}{v:11.2f}{ratio(validations, renders):7.2f}{f'{rc:.1f}, {vc:.1f}':>16}{spent:7.2f}"
            f"{f'{rm:.0f}, {vm:.0f}':>12}"
        )


if __name__ == "__main__":
    main()
