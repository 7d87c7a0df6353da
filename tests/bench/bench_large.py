"""A thousand million values: time and memory of rendering and validating them on one machine.

    python -m tests.bench.bench_large [--quick] [--only NAME ...] [--workers 2] [--dir build/bench]

`wide` is 100,000 paths × 10,000 steps of a random walk, `long` one path of 1e9 steps of an AR(2), stored as float32.
Every case is a whole process each way; memory is the peak resident size of the largest process, and processor time that
of all of them. 8 GB of disk are needed, and are free again afterwards. Printed in Markdown.
"""

from __future__ import annotations

import argparse
import os
import platform
import shutil
from pathlib import Path

from tests.bench.whole import PROCGEN, run

HEAD = "procgen: 1\nseed: 1\npaths: {paths}\ntime: {{steps: {steps}}}\nseries:\n"
CASES = {
    "wide": (100_000, 10_000, HEAD + "  x: [{{random_walk: {{sd: 1}}}}]\n"),
    "long": (1, 1_000_000_000, HEAD + "  x: {{type: float32, of: [{{ar: {{phi: [0.75, -0.5], sd: 1}}}}]}}\n"),
}
SMALLER = 1_000  # times, with --quick


def main() -> None:
    args = arguments()
    args.dir.mkdir(parents=True, exist_ok=True)
    print(f"{args.workers} workers, {os.cpu_count()} processors, Python {platform.python_version()}\n")
    print("| case | values | files MB | command | seconds | million values a second | processor s | peak MB |")
    print("| --- | ---: | ---: | --- | ---: | ---: | ---: | ---: |")
    for name, (paths, steps, spec) in CASES.items():
        if name in (args.only or CASES):
            if args.quick:
                paths, steps = (paths // SMALLER, steps) if paths > 1 else (paths, steps // SMALLER)
            report(name, paths, steps, spec, args)


def arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="a thousandth of the values: does it run?")
    parser.add_argument("--only", nargs="*", choices=sorted(CASES), help="cases, both when absent")
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--dir", type=Path, default=Path("build/bench"))
    return parser.parse_args()


def report(name: str, paths: int, steps: int, spec: str, args: argparse.Namespace) -> None:
    """Render and validate one case, and print a row for each."""
    file, out = args.dir / f"large-{name}.yaml", args.dir / f"large-{name}"
    file.write_text(spec.format(paths=paths, steps=steps))
    shutil.rmtree(out, ignore_errors=True)
    workers = ["--workers", str(args.workers)]
    try:
        for command in (["render", str(file), "-o", str(out)], ["validate", str(out)]):
            found = run([*PROCGEN, *command, *workers])
            size = sum(part.stat().st_size for part in out.glob("*.parquet")) / 1e6
            rate = paths * steps / found.seconds / 1e6
            print(
                f"| {name} | {paths:,} × {steps:,} | {size:,.0f} | {command[0]} | {found.seconds:.1f} | {rate:.1f} "
                f"| {found.processor:.1f} | {found.peak:.0f} |",
                flush=True,
            )
    finally:
        shutil.rmtree(out, ignore_errors=True)


if __name__ == "__main__":
    main()
