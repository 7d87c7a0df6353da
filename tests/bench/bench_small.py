"""Small jobs: what a command costs that does little, as in continuous integration on a laptop.

    python -m tests.bench.bench_small [--quick] [--rounds 7]

Whole processes, seconds by the clock and of the processor, the least of the rounds: other work only adds to it.
The first run of each, which compiles Python's modules, is not counted. Below it stands what importing costs most.
"""

from __future__ import annotations

import argparse
import subprocess
import sys
import tempfile
from pathlib import Path

from tests.bench.whole import PROCGEN, into

SPEC = """\
procgen: 1
seed: 1
paths: 100
time: {steps: 500}
series:
  orders: [{ar: {phi: 0.8, sd: 3}}, {seasonal: {period: 24, harmonics: [{amplitude: 12, peak: 18}]}}]
"""
GOALS = {"render, 100 × 500": 1.0, "theory": 0.8, "-h": 0.3}


def main() -> None:
    args = arguments()
    with tempfile.TemporaryDirectory() as folder:
        spec, out = Path(folder) / "spec.yaml", Path(folder) / "out"
        spec.write_text(SPEC)
        commands = {
            "render, 100 × 500": ["render", str(spec), "-o", str(out)],
            "theory": ["theory", str(spec)],
            "-h": ["-h"],
        }
        print("| command | seconds | processor s | goal | peak MB |\n| --- | --- | --- | --- | --- |")
        for name, words in commands.items():
            into([*PROCGEN, *words], out)
            runs = [into([*PROCGEN, *words], out) for _ in range(args.rounds)]
            seconds, processor = min(run.seconds for run in runs), min(run.processor for run in runs)
            peak = max(run.peak for run in runs)
            print(f"| {name} | {seconds:.2f} | {processor:.2f} | {GOALS[name]} | {peak:.0f} |", flush=True)
        if not args.quick:
            out.mkdir()
            print("\n" + "\n".join(imports(commands["render, 100 × 500"])))


def arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="each command once, without the imports")
    parser.add_argument("--rounds", type=int, default=7)
    args = parser.parse_args()
    if args.quick:
        args.rounds = 1
    return args


def imports(words: list[str], most: int = 12) -> list[str]:
    """The dearest imports of a command, milliseconds of each with all that it imports."""
    command = [sys.executable, "-X", "importtime", "-m", "procgen", *words]
    told = subprocess.run(command, capture_output=True, text=True, check=True).stderr
    rows = [
        line.split("|") for line in told.splitlines() if line.startswith("import time:") and "cumulative" not in line
    ]
    dearest = sorted(rows, key=lambda row: -int(row[1]))[:most]
    return [f"{int(row[1]) / 1000:7.0f} ms  {row[2].strip()}" for row in dearest]


if __name__ == "__main__":
    main()
