"""Time and memory of a random walk, 65,536 paths × 1,000 steps, against the script one would write by hand.

    python tests/bench/bench_walk.py [--quick] [--rounds 3] [--dir build/bench]

Every case is a whole process, from its start until its files are complete. Rounds are interleaved, so that a
slow minute of the machine meets every case; the table gives medians. Memory is the peak resident size of the
largest process of a case, and processor time that of all of them (wait4 counts a process together with the
children it has waited for).

Cases: `walk`, `ar2`, `garch` are `procgen render` with two workers. `by hand` draws with NumPy, sums, builds a
pandas frame with path and step and writes it with to_parquet. `floor` is what cannot be beaten without
drawing less: NumPy's fastest standard_normal and a bare non-null Parquet file of the values, by two processes.
"""

from __future__ import annotations

import argparse
import importlib.util
import os
import platform
import shutil
import statistics
import subprocess
import sys
import time
from pathlib import Path
from typing import NamedTuple

SPEC = """\
procgen: 1
seed: 1
paths: {paths}
time: {{steps: {steps}}}
series:
  x: [{{{term}}}]
"""
TERMS = {
    "walk": "random_walk: {sd: 1}",
    "ar2": "ar: {phi: [0.75, -0.5], sd: 1}",
    "garch": "garch: {omega: 0.05, alpha: 0.1, beta: 0.85}",
}
BY_HAND = """\
import numpy as np
import pandas as pd

rng = np.random.default_rng(1)
x = np.cumsum(rng.standard_normal(({paths}, {steps})), axis=1)
frame = pd.DataFrame(
    {{
        "path": np.repeat(np.arange({paths}), {steps}),
        "step": np.tile(np.arange({steps}), {paths}),
        "x": x.ravel(),
    }}
)
frame.to_parquet("{out}/by-hand.parquet")
"""
FLOOR = """\
import subprocess
import sys

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq


def half(number):
    schema = pa.schema([pa.field("x", pa.float64(), nullable=False)])
    rng = np.random.Generator(np.random.SFC64(number))
    options = dict(compression="none", use_dictionary=False, write_statistics=False)
    with pq.ParquetWriter(f"{out}/floor-{{number}}.parquet", schema, **options) as writer:
        left = {paths} // 2 * {steps}
        while left:
            rows = min(left, 1 << 20)
            x = pa.Array.from_buffers(pa.float64(), rows, [None, pa.py_buffer(rng.standard_normal(rows))])
            writer.write_table(pa.table([x], schema=schema))
            left -= rows


if len(sys.argv) > 1:
    half(1)
else:
    other = subprocess.Popen([sys.executable, __file__, "other"])
    half(0)
    sys.exit(other.wait())
"""


def main() -> None:
    args = arguments()
    paths, steps, rounds = (4096, 200, 1) if args.quick else (65_536, 1_000, args.rounds)
    args.dir.mkdir(parents=True, exist_ok=True)
    cases = prepare(args.dir, paths, steps)
    seen: dict[str, list[Run]] = {name: [] for name in cases}
    for _ in range(rounds):
        for name, command in cases.items():
            seen[name].append(measure(command, args.dir / "out"))
    report(seen, paths, steps, rounds)


def arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="4,096 × 200, once: does it run?")
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--dir", type=Path, default=Path("build/bench"))
    return parser.parse_args()


def prepare(folder: Path, paths: int, steps: int) -> dict[str, list[str]]:
    """The command of every case, after writing the files that it needs."""
    out = folder / "out"
    cases = {}
    for name, term in TERMS.items():
        spec = folder / f"{name}.yaml"
        spec.write_text(SPEC.format(paths=paths, steps=steps, term=term))
        cases[name] = ["-m", "procgen", "render", str(spec), "-o", str(out), "--workers", "2"]
    for name, script in {"by hand": BY_HAND, "floor": FLOOR}.items():
        file = folder / f"{name.replace(' ', '_')}.py"
        file.write_text(script.format(paths=paths, steps=steps, out=out))
        cases[name] = [str(file)]
    return cases


class Run(NamedTuple):
    """One case, once."""

    seconds: float
    processor: float  # seconds, of all processes
    peak: float  # MB, of the largest process


def measure(command: list[str], out: Path) -> Run:
    """Run one case."""
    shutil.rmtree(out, ignore_errors=True)
    out.mkdir()
    began = time.perf_counter()
    process = subprocess.Popen([sys.executable, *command], stdout=subprocess.DEVNULL)
    _, status, usage = os.wait4(process.pid, 0)
    took = time.perf_counter() - began
    process.returncode = os.waitstatus_to_exitcode(status)
    if process.returncode:
        raise SystemExit(f"{' '.join(command)} ended with exit code {process.returncode}")
    shutil.rmtree(out)
    unit = 1 if platform.system() == "Darwin" else 1024
    return Run(took, usage.ru_utime + usage.ru_stime, usage.ru_maxrss * unit / 1e6)


def report(seen: dict[str, list[Run]], paths: int, steps: int, rounds: int) -> None:
    print(f"{paths:,} × {steps:,}, median of {rounds}, {os.cpu_count()} processors, Python {platform.python_version()}")
    print(f"extra speed (numba) {'present' if importlib.util.find_spec('numba') else 'absent'}\n")
    print(f"{'case':9}{'seconds':>9}{'range':>16}{'processor s':>13}{'peak MB':>9}{'to walk':>9}{'to hand':>9}")
    for name, runs in seen.items():
        times = [run.seconds for run in runs]
        print(
            f"{name:9}{statistics.median(times):9.2f}{f'{min(times):.2f} to {max(times):.2f}':>16}"
            f"{statistics.median(run.processor for run in runs):13.2f}{max(run.peak for run in runs):9.0f}"
            f"{ratio(runs, seen['walk']):9.2f}{ratio(runs, seen['by hand']):9.2f}"
        )


def ratio(runs: list[Run], others: list[Run]) -> float:
    """Median of the ratios of times, round by round."""
    return statistics.median(a.seconds / b.seconds for a, b in zip(runs, others, strict=True))


if __name__ == "__main__":
    main()
