"""Rendering against what people would use instead: scripts by hand, statsmodels and arch.

    python -m tests.bench.bench_against [--quick] [--rounds 5] [--only CASE,…] [--shapes 65536x1000,…] [--in-memory]
        [--dir DIR]

To Parquet, whole processes, rounds interleaved, medians of the ratios round by round:

- `by hand`: NumPy draws and filters all paths at once, pandas writes the frame with `to_parquet`;
- `expert`: the same filters on blocks of about a million rows with NumPy's fastest generator, written by pyarrow
  without dictionary, statistics or compression, from memory that is never copied;
- `procgen`: `procgen render` with two workers, digests included;
- `floor`, beside the walk: what cannot be beaten without drawing less, NumPy's fastest `standard_normal` and a bare
  non-null Parquet file of the values, by two processes.

Scripts would take minutes and many GB for a million paths, most of it for their burn-in. Where one would draw more
than MOST_HERE values it draws fewer paths, and what it takes above its start is multiplied; the table says by how much.
Both scripts take time in proportion to paths, and lose nothing by having fewer.

In memory, the call alone: `statsmodels` (`arma_generate_sample`; `simulate` of its state space model) and `arch`
(`simulate`) against `render(out=None)`, which draws in as many threads as there are processors. These too are timed on
fewer paths and multiplied, as the table says. Each has loaded what it needs by a call before, of 200,000 steps for
ours, which loads compiled kernels for no less, and of 100 for theirs; and memory of the size of the result has just
been used and given back: a virtual machine asks its host for any other.
"""

from __future__ import annotations

import argparse
import importlib.util
import os
import platform
import statistics
import subprocess
import sys
from pathlib import Path

from tests.bench.whole import Run, into, ratio

SHAPES = ((1, 1_000_000), (100, 100_000), (65_536, 1_000), (1_000_000, 50))
MOST = 70_000_000  # values of a case; of 20 series there are fewer paths
MOST_HERE = {"by hand": 16_000_000, "expert": 32_000_000, "memory": 16_000_000}  # values drawn, by who draws them
BURN = 500  # steps that the scripts draw before the first, where the process has a memory
SPECS = {
    "noise": "{x: [{white_noise: {sd: 1}}]}",
    "walk": "{x: [{random_walk: {sd: 1}}]}",
    "arma": "{x: [{arma: {phi: [0.75, -0.5], theta: 0.3, sd: 1}}]}",
    "garch": "{x: [{garch: {omega: 0.05, alpha: 0.1, beta: 0.85}}]}",
    "sum of 5": "{x: [{constant: 80}, {seasonal: {period: 24, harmonics: [{amplitude: 12, peak: 18}]}}, "
    "{ar: {phi: 0.8, sd: 3}}, {random_walk: {sd: 0.1}}, {garch: {omega: 0.05, alpha: 0.1, beta: 0.85}}]}",
    "20 series": "{" + ", ".join(f"x{k}: [{{ar: {{phi: 0.5, sd: 1}}}}]" for k in range(20)) + "}",
}
CORRELATION = f"correlation:\n  - {{within: [{', '.join(f'x{k}.ar' for k in range(20))}], value: 0.35}}\n"
# Each draws a mapping of (paths, steps) arrays with 500 steps of burn-in where the process has a memory.
DRAW = """\
import numpy as np
from scipy.signal import lfilter

BURN = 500


def normal(rng, paths, steps):
    return rng.standard_normal((paths, steps))


def arma(rng, paths, steps, phi, theta=()):
    shocks = normal(rng, paths, BURN + steps)
    return lfilter([1.0, *theta], [1.0, *(-c for c in phi)], shocks, axis=1)[:, BURN:]


def garch(rng, paths, steps):
    z = normal(rng, BURN + steps, paths)
    h = np.full(paths, 1.0)
    for row in z:
        row *= np.sqrt(h)
        h = 0.05 + 0.1 * row * row + 0.85 * h
    return z[BURN:].T


def draw(case, rng, paths, steps):
    if case == "noise":
        return {"x": normal(rng, paths, steps)}
    if case == "walk":
        x = normal(rng, paths, steps)
        return {"x": np.cumsum(x, axis=1, out=x)}
    if case == "arma":
        return {"x": arma(rng, paths, steps, (0.75, -0.5), (0.3,))}
    if case == "garch":
        return {"x": garch(rng, paths, steps)}
    if case == "sum of 5":
        x = 3.0 * arma(rng, paths, steps, (0.8,))
        x += 80.0 + 12.0 * np.cos(2 * np.pi * (np.arange(steps) - 18) / 24)
        walk = normal(rng, paths, steps)
        x += 0.1 * np.cumsum(walk, axis=1, out=walk)
        x += garch(rng, paths, steps)
        return {"x": x}
    root = np.linalg.cholesky(0.35 + 0.65 * np.eye(20))
    shocks = rng.standard_normal((20, paths, BURN + steps))
    shocks = np.tensordot(root, shocks, axes=1)
    return {f"x{k}": lfilter([1.0], [1.0, -0.5], shocks[k], axis=1)[:, BURN:] for k in range(20)}
"""
BY_HAND = """\
import pandas as pd

series = draw({case!r}, np.random.default_rng(1), {paths}, {steps})
frame = pd.DataFrame({{"path": np.repeat(np.arange({paths}), {steps}), "step": np.tile(np.arange({steps}), {paths})}})
for name, values in series.items():
    frame[name] = values.ravel()
frame.to_parquet("{out}/by-hand.parquet")
"""
EXPERT = """\
import pyarrow as pa
import pyarrow.parquet as pq

rng = np.random.Generator(np.random.SFC64(1))
names = ["x"] if {case!r} != "20 series" else [f"x{{k}}" for k in range(20)]
schema = pa.schema(
    [pa.field("path", pa.int32(), nullable=False), pa.field("step", pa.int32(), nullable=False)]
    + [pa.field(name, pa.float64(), nullable=False) for name in names]
)


def column(values, kind):
    flat = np.ascontiguousarray(values).reshape(-1)
    return pa.Array.from_buffers(kind, len(flat), [None, pa.py_buffer(flat)])


options = dict(compression="none", use_dictionary=False, write_statistics=False)
with pq.ParquetWriter("{out}/expert.parquet", schema, **options) as writer:
    width = max((1 << 20) // {steps}, 1)
    for first in range(0, {paths}, width):
        count = min(width, {paths} - first)
        series = draw({case!r}, rng, count, {steps})
        path = np.repeat(np.arange(first, first + count, dtype=np.int32), {steps})
        step = np.tile(np.arange({steps}, dtype=np.int32), count)
        columns = [column(path, pa.int32()), column(step, pa.int32())]
        columns += [column(values, pa.float64()) for values in series.values()]
        writer.write_table(pa.table(columns, schema=schema), row_group_size=1 << 20)
"""
SCRIPTS = {"by hand": BY_HAND, "expert": EXPERT}
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
SPEC = "procgen: 1\nseed: 1\npaths: {paths}\ntime: {{steps: {steps}}}\nseries: {series}\n"
# Seconds of each call, one a line, after one call of the same on little.
IN_MEMORY = """\
import sys
import time
import warnings

import numpy as np

warnings.simplefilter("ignore")
paths, steps, few = {paths}, {steps}, {few}


def seconds(call, times):
    call(1, 200_000 if call is ours else 100)
    np.empty(paths * steps).fill(1.0)
    began = time.perf_counter()
    call(few if times > 1 else paths, steps)
    return (time.perf_counter() - began) * times


def ours(paths, steps):
    import procgen as pg

    pg.render({spec!r}, paths=paths, steps=steps)


def generated(paths, steps):
    from statsmodels.tsa.arima_process import arma_generate_sample

    arma_generate_sample([1, -0.75, 0.5], [1, 0.3], (steps, paths), burnin=500, axis=0)


def state_space(paths, steps):
    from statsmodels.tsa.statespace.sarimax import SARIMAX

    model = SARIMAX(np.zeros(10), order=(2, 0, 1))
    for _ in range(paths):
        model.simulate([0.75, -0.5, 0.3, 1.0], steps)


def arch(paths, steps):
    from arch.univariate import ZeroMean, GARCH

    model = ZeroMean(volatility=GARCH())
    for _ in range(paths):
        model.simulate([0.05, 0.1, 0.85], steps)


print(seconds({call}, {times}))
"""


def main() -> None:
    args = arguments()
    args.dir = args.dir.absolute()
    args.dir.mkdir(parents=True, exist_ok=True)
    print(f"{os.cpu_count()} processors, Python {platform.python_version()}, median of {args.rounds} rounds")
    print(f"extra speed (numba) {'present' if importlib.util.find_spec('numba') else 'absent'}, {instructions()}\n")
    if not args.in_memory:
        to_files(args)
    print("| case | shape | against | procgen s | theirs s | theirs / procgen |")
    print("| --- | --- | --- | --- | --- | --- |")
    for case, call in (("arma", "generated"), ("arma", "state_space"), ("garch", "arch")):
        for shape in args.shapes if case in args.only else ():
            print(in_memory(case, call, shape, args.rounds, args.dir), flush=True)


def to_files(args: argparse.Namespace) -> None:
    """The first table."""
    heads = ("case", "shape", "procgen s", "by hand s", "expert s", "by hand / procgen", "expert / procgen")
    print(f"| {' | '.join((*heads, 'procgen / floor', 'peak MB', 'multiplied'))} |")
    print("| --- " * (len(heads) + 3) + "|")
    for case in args.only:
        for shape in args.shapes:
            print(written(case, few_paths(case, shape), args.rounds, args.dir), flush=True)
    print()


def arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="small shapes, once: does it run?")
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--only", type=lambda text: text.split(","), default=list(SPECS))
    parser.add_argument("--shapes", type=lambda text: [shape_of(each) for each in text.split(",")], default=SHAPES)
    parser.add_argument("--in-memory", action="store_true", help="the second table alone")
    parser.add_argument("--dir", type=Path, default=Path("build/bench"))
    args = parser.parse_args()
    if args.quick:
        args.rounds, args.shapes = 1, ((1, 2_000), (64, 50))
    return args


def shape_of(text: str) -> tuple[int, int]:
    paths, steps = text.split("x")
    return int(paths), int(steps)


def few_paths(case: str, shape: tuple[int, int]) -> tuple[int, int]:
    """Fewer paths, or steps of the one path, where 20 series of that shape would be too much for the machine."""
    paths, steps = shape
    if case == "20 series" and 20 * paths * steps > MOST:
        return max(paths // 20, 1), steps
    return shape


def spec_file(folder: Path, case: str, shape: tuple[int, int]) -> Path:
    file = folder / f"{case.replace(' ', '-')}.yaml"
    text = SPEC.format(paths=shape[0], steps=shape[1], series=SPECS[case])
    file.write_text(text + (CORRELATION if case == "20 series" else ""))
    return file


def instructions() -> str:
    """Whether the processor has instructions for SHA-256, which digests are made with."""
    try:
        words = Path("/proc/cpuinfo").read_text(encoding="ascii").split()
    except OSError:
        return "SHA instructions not known"
    return f"SHA instructions {'present' if {'sha_ni', 'sha2'} & {*words} else 'absent'}"


def drawn_by(who: str, case: str, shape: tuple[int, int]) -> int:
    """How many of the paths a rival draws."""
    steps = shape[1] + (0 if case in ("noise", "walk") else BURN)
    values = steps * {"sum of 5": 3, "20 series": 20}.get(case, 1)
    return max(min(shape[0], MOST_HERE[who] // values), 1)


class Script:
    """What somebody would write instead, run on some of the paths."""

    def __init__(self, who: str, case: str, shape: tuple[int, int], folder: Path) -> None:
        self.few, self.file, self.out = (
            drawn_by(who, case, shape),
            folder / f"{who.replace(' ', '_')}.py",
            folder / "out",
        )
        self.times, self.start = shape[0] / self.few, 0.0
        for paths in (1, self.few) if self.times > 1 else (self.few,):
            text = SCRIPTS[who].format(case=case, paths=paths, steps=shape[1], out=self.out)
            self.file.write_text(f"{DRAW}\n\n{text}")
            if paths < self.few:
                self.start = min(into([str(self.file)], self.out).seconds for _ in range(3))

    def run(self) -> Run:
        """One run, as long as it would take for all paths; the peak is that of the few."""
        run = into([str(self.file)], self.out)
        return run._replace(seconds=self.start + (run.seconds - self.start) * self.times)


def written(case: str, shape: tuple[int, int], rounds: int, folder: Path) -> str:
    """A row of the first table."""
    out, floor = folder / "out", folder / "floor.py"
    ours = ["-m", "procgen", "render", str(spec_file(folder, case, shape)), "-o", str(out), "--workers", "2"]
    scripts = {who: Script(who, case, shape, folder) for who in SCRIPTS}
    floor.write_text(FLOOR.format(paths=shape[0], steps=shape[1], out=out))
    seen: dict[str, list[Run]] = {name: [] for name in ("procgen", *scripts, "floor")}
    for _ in range(rounds):
        seen["procgen"].append(into(ours, out))
        for who, script in scripts.items():
            seen[who].append(script.run())
        if case == "walk" and shape[0] > 1:
            seen["floor"].append(into([str(floor)], out))
    rivals = ("procgen", *scripts)
    times = [f"{statistics.median(run.seconds for run in seen[name]):.2f}" for name in rivals]
    ratios = [f"{ratio(seen[name], seen['procgen']):.2f}" for name in scripts]
    ratios.append(f"{ratio(seen['procgen'], seen['floor']):.2f}" if seen["floor"] else "")
    peaks = " / ".join(f"{max(run.peak for run in seen[name]):.0f}" for name in rivals)
    scaled = ", ".join(f"{who} × {script.times:.1f}" for who, script in scripts.items() if script.times > 1)
    return f"| {case} | {shape[0]:,} × {shape[1]:,} | {' | '.join(times + ratios)} | {peaks} | {scaled} |"


def in_memory(case: str, call: str, shape: tuple[int, int], rounds: int, folder: Path) -> str:
    """A row of the second table."""
    paths, steps = shape
    few = drawn_by("memory", case, shape) if call == "generated" else max(min(paths, 200_000 // steps, 500), 1)
    times = paths / few if few < paths else 1
    spec = str(spec_file(folder, case, shape))
    ours, theirs = [], []
    for _ in range(rounds):
        ours.append(called(IN_MEMORY.format(paths=paths, steps=steps, few=few, spec=spec, call="ours", times=1)))
        theirs.append(called(IN_MEMORY.format(paths=paths, steps=steps, few=few, spec=spec, call=call, times=times)))
    name = {"generated": "arma_generate_sample", "state_space": "SARIMAX.simulate", "arch": "GARCH.simulate"}[call]
    scaled = f", {few:,} of {paths:,} paths timed" if times > 1 else ""
    quotient = statistics.median(b / a for a, b in zip(ours, theirs, strict=True))
    middle = f"{statistics.median(ours):.3f} | {statistics.median(theirs):.3f}"
    return f"| {case} | {paths:,} × {steps:,} | {name}{scaled} | {middle} | {quotient:.2f} |"


def called(script: str) -> float:
    found = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    return float(found.stdout)


if __name__ == "__main__":
    main()
