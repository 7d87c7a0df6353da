"""Where the processor time of rendering to Parquet goes: nanoseconds a value, stage by stage, in one process.

    python -m tests.bench.bench_nanoseconds [--quick] [--paths 8192] [--rounds 5] [--plain]

Each stage is run alone on what the one before it made, 1,024 paths × 1,000 steps at a time as a render does, and the
least of the rounds is told: other work on the machine adds to processor time. Without --plain there are two columns a
case: as it is drawn plain, and by compiled kernels (numba, the extra `speed`), as every render of some size is.

- `raw bits`: Philox, as uniforms; `quantile`: uniforms become normals; `before step 0`: the steps that a term draws to
  forget where it began, their bits and quantiles too, over the values of all 1,000 steps; `recursion`: the terms;
- `turn`: tiles (steps, paths) become rows (paths, steps), and are seen to be finite; `digest`: SHA-256;
- `index columns`: path and step as arrays; `encode` and `write`: Parquet pages into nothing, and what a file adds.

Below the table: what the start of a process costs, and the loading of machine code. The first is over before a value is
drawn, and is paid by every worker.
"""

from __future__ import annotations

import argparse
import platform
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import pyarrow as pa

from procgen.chance.kernel import available, compiling
from procgen.chance.laws import Normal
from procgen.chance.streams import Stream
from procgen.ensemble.digest import Leaves
from procgen.ensemble.draw import Drawer, empty, turn
from procgen.ensemble.forms import form
from procgen.ensemble.layouts import Layout
from procgen.ensemble.parquet import PartWriter
from procgen.ensemble.plan import CACHED, TILE, Block, batches, tiles
from procgen.ensemble.source import SpecSource, read_spec

CASES = {
    "noise": {"white_noise": {"sd": 1}},
    "walk": {"random_walk": {"sd": 1}},
    "arma": {"arma": {"phi": [0.75, -0.5], "theta": 0.3, "sd": 1}},
    "garch": {"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.85}},
}
STAGES = (
    "raw bits",
    "quantile",
    "before step 0",
    "recursion",
    "turn",
    "digest",
    "index columns",
    "encode index",
    "encode values",
    "write",
)
STEPS = 1_000


def main() -> None:
    args = arguments()
    forms = [False] if args.plain or not available() else [False, True]
    print(f"{args.paths:,} × {STEPS:,}, least of {args.rounds}, one process, Python {platform.python_version()}\n")
    heads, columns = [], []
    for case in CASES:
        for compiled in forms:
            heads.append(case + (", compiled" if compiled else ""))
            columns.append(least(case, args.paths, args.rounds, compiled))
    print("\n".join(table(heads, columns)))
    print(f"\nStart of a process that renders: {started():.2f} s; ", end="")
    print(f"loading of machine code: {loaded():.2f} s" if available() else "numba is absent")


def arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="1,024 paths, once: does it run?")
    parser.add_argument("--plain", action="store_true", help="leave out the compiled kernels")
    parser.add_argument("--paths", type=int, default=8_192)
    parser.add_argument("--rounds", type=int, default=5)
    args = parser.parse_args()
    if args.quick:
        args.paths, args.rounds = 1_024, 1
    return args


def table(heads: list[str], columns: list[dict[str, float]]) -> Iterator[str]:
    yield f"| stage | {' | '.join(heads)} |"
    yield "| --- " * (1 + len(heads)) + "|"
    for stage in STAGES:
        yield f"| {stage} | {' | '.join(f'{column[stage]:.1f}' for column in columns)} |"
    yield f"| all | {' | '.join(f'{sum(column.values()):.1f}' for column in columns)} |"


def least(case: str, paths: int, rounds: int, compiled: bool) -> dict[str, float]:
    """Nanoseconds a value of every stage, the least of some rounds after one that compiles."""
    with compiling(compiled):
        stages(case, 1_024, compiled)
        seen = [stages(case, paths, compiled) for _ in range(rounds)]
    return {stage: min(each[stage] for each in seen) / (paths * STEPS) * 1e9 for stage in STAGES}


class Clock:
    """Processor seconds by stage."""

    def __init__(self) -> None:
        self.seconds = dict.fromkeys(STAGES, 0.0)

    def __call__(self, stage: str, work: Callable[[], object]) -> object:
        began = time.process_time()
        made = work()
        self.seconds[stage] += time.process_time() - began
        return made


def stages(case: str, paths: int, compiled: bool) -> dict[str, float]:
    """Processor seconds of every stage."""
    spec = {"procgen": 1, "seed": 1, "paths": paths, "time": {"steps": STEPS}, "series": {"x": [CASES[case]]}}
    source, clock, whole = SpecSource(read_spec(spec)), Clock(), Block(0, paths, 0, STEPS)
    rows = form(Layout(), source.columns, None, whole)
    Drawer(source)  # has memory used again, as in every render
    with tempfile.TemporaryDirectory() as folder:
        writer = PartWriter(Path(folder) / "part.parquet", rows, {})
        with writer:
            for batch in batches(whole, 8):
                drawn(clock, source, case, batch, out := empty(batch, source.columns), CACHED if compiled else TILE)
                clock("digest", lambda out=out, batch=batch: Leaves(whole).add(batch.first_path, 0, out["x"]))
                clock("index columns", lambda batch=batch: rows._index(batch, source.columns))
                encode(clock, rows, batch, out)
                clock("write", lambda out=out, batch=batch: writer.write(batch, out))
    for part in ("index columns", "encode index", "encode values"):
        clock.seconds["write"] -= clock.seconds[part]
    return {stage: max(seconds, 0.0) for stage, seconds in clock.seconds.items()}


def drawn(clock: Clock, source: SpecSource, case: str, batch: Block, out: dict[str, np.ndarray], most: int) -> None:
    """Fill a batch stage by stage; what the terms take is what a run takes above its bits and quantiles."""
    run, stream, law, first = source.run(batch.first_path, batch.paths), Stream(1, "x", case, "innovation"), Normal(), 0
    clock("before step 0", run._begin)  # type: ignore[attr-defined]
    for steps in tiles(batch.steps, batch.paths, 1, most):
        before = dict(clock.seconds)
        at = first
        u = clock("raw bits", lambda at=at, n=steps: stream.uniforms(batch.first_path, batch.paths, at, n))
        clock("quantile", lambda u=u: law.shocks(u, out=u))
        tile = clock("recursion", lambda n=steps: run.tile(n))
        taken = sum(clock.seconds[stage] - before[stage] for stage in ("raw bits", "quantile"))
        clock.seconds["recursion"] -= taken
        values = tile["x"]  # type: ignore[index]
        clock("turn", lambda v=values, at=at: (np.isfinite(v).all(), turn(v, out["x"], at)))
        first += steps


def encode(clock: Clock, rows: object, batch: Block, out: dict[str, np.ndarray]) -> None:
    """The pages of a batch, into nothing."""
    import pyarrow.parquet as pq

    made = rows.table(batch, rows.columns, out)  # type: ignore[attr-defined]
    keys = rows.keys  # type: ignore[attr-defined]
    for stage, names in (("encode index", keys), ("encode values", ["x"])):
        part = made.select(names)
        packed = {"compression": "zstd", "compression_level": -5} if names is keys else {"compression": "none"}
        options = {**packed, "use_dictionary": False, "write_statistics": names is keys, "write_batch_size": 1 << 17}
        with pq.ParquetWriter(pa.MockOutputStream(), part.schema, **options) as nothing:
            clock(stage, lambda part=part, nothing=nothing: nothing.write_table(part, row_group_size=part.num_rows))


def started() -> float:
    """Processor seconds of a process before it draws."""
    return child(
        "import procgen.ensemble.worker, procgen.ensemble.engines as e; e.function('procgen.ensemble.part:draw')"
        "; import procgen.terms.graph, pyarrow.parquet"
    )


def loaded() -> float:
    """Processor seconds for the machine code of white noise above those of the same without."""
    code = (
        "from procgen.chance.kernel import compiling\nfrom procgen.chance.normal import normal_quantile\n"
        "from procgen.chance.streams import Stream\nwith compiling({}):\n"
        "    normal_quantile(Stream(1, 'x', 'x', 'x').uniforms(0, 16, 0, 1))"
    )
    child(code.format(True))  # so that it is there
    return min(child(code.format(True)) for _ in range(3)) - min(child(code.format(False)) for _ in range(3))


def child(code: str) -> float:
    told = "\nimport time; print(time.process_time())"
    done = subprocess.run([sys.executable, "-c", code + told], capture_output=True, text=True, check=True)
    return float(done.stdout)


if __name__ == "__main__":
    main()
