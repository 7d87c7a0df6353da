"""A render that is killed at random moments, again and again, resumes to the very same digest.

    python -m tests.studies.faults [--moments 200] [--workers 1,2] [--seed 1]

A render with its workers is a process group, which a signal (SIGKILL, SIGTERM or SIGINT) ends at a random moment; so
are up to three `--resume` after it. In between, only whole parts may be visible, and no manifest without all of them.
Then `--resume` is left alone: its digest, and that of the values read back, must be those of a render in one go.
"""

from __future__ import annotations

import argparse
import json
import os
import random
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
SPEC = {
    "procgen": 1,
    "seed": 8,
    "paths": 32,
    "time": {"steps": 2 * 65_536 + 100},
    "series": {"x": [{"ar": {"phi": 0.7, "sd": 1}}, {"garch": {"omega": 0.1, "alpha": 0.1, "beta": 0.8}}]},
}
SCRIPT = """
import json, sys
import procgen as pg
from procgen.ensemble import plan
spec, out, workers, resume = json.loads(sys.argv[1])
plan.PART_BYTES = 1 << 22  # ranges of paths in several parts along the steps: states are carried over
print("drawing", flush=True)
print(pg.render(spec, out, workers=workers, resume=resume).digest)
"""
SIGNALS = (signal.SIGKILL, signal.SIGTERM, signal.SIGINT)


def start(out: Path, workers: int, resume: bool) -> subprocess.Popen[str]:
    command = [sys.executable, "-c", SCRIPT, json.dumps([SPEC, str(out), workers, resume])]
    pipe = subprocess.PIPE
    process = subprocess.Popen(command, cwd=ROOT, stdout=pipe, stderr=pipe, text=True, start_new_session=True)
    assert process.stdout is not None
    assert process.stdout.readline() == "drawing\n"
    return process


def finished(process: subprocess.Popen[str]) -> str:
    out, err = process.communicate()
    if process.returncode:
        raise AssertionError(f"a render that nobody disturbed ended with {process.returncode}: {err}")
    return out.strip()


def struck(process: subprocess.Popen[str], moment: float, what: signal.Signals) -> bool:
    """Whether the signal found the render still at work."""
    time.sleep(moment)
    alive = process.poll() is None
    with_group = os.getpgid(process.pid) if alive else None
    if with_group is not None:
        try:
            os.killpg(with_group, what)
        except ProcessLookupError:
            alive = False
    process.communicate()
    return alive


def seen(out: Path) -> int:
    """The parts that are visible, each of which must be whole, and the manifest only with all of them."""
    import pyarrow.parquet as pq

    from procgen.ensemble import open_ensemble

    parts = sorted(out.glob("paths-*.parquet")) if out.exists() else []
    for part in parts:
        about = json.loads(pq.read_metadata(part).metadata[b"procgen"])
        rows = about["part"]["paths"] * about["part"]["steps"]
        if pq.read_table(part).num_rows != rows:
            raise AssertionError(f"{part.name} is visible and not whole")
    if (out / "manifest.json").exists() and len(open_ensemble(out).manifest.parts) != len(parts):
        raise AssertionError("a manifest without all parts")
    return len(parts)


def once(out: Path, chance: random.Random, workers: int, longest: float, digest: str) -> tuple[int, Counter[str]]:
    """One story: times struck, and what was found in between."""
    from procgen.ensemble import check_digest

    shutil.rmtree(out, ignore_errors=True)
    found: Counter[str] = Counter()
    for attempt in range(1 + chance.randrange(4)):
        what = chance.choice(SIGNALS)
        if struck(start(out, workers, attempt > 0), chance.uniform(0, longest), what):
            found[f"{what.name} in {'resume' if attempt else 'render'}"] += 1
        found[f"left {'no part' if not seen(out) else 'parts'}"] += 1
    if finished(start(out, workers, True)) != digest or not check_digest(out).ok:
        raise AssertionError("the digest after --resume is another one")
    if (out / ".state").exists():
        raise AssertionError("a finished render has left its state behind")
    return sum(count for name, count in found.items() if name.startswith("SIG")), found


def study(moments: int, workers: tuple[int, ...], seed: int, folder: Path) -> Counter[str]:
    """Stories until so many signals have struck."""
    chance = random.Random(seed)
    whole = folder / "whole"
    began = time.monotonic()
    digest = finished(start(whole, max(workers), False))
    longest = time.monotonic() - began
    found: Counter[str] = Counter()
    hits = 0
    while hits < moments:
        more, what = once(folder / "out", chance, chance.choice(workers), longest, digest)
        hits += more
        found.update(what)
        found["stories, each with the digest of one go"] += 1
    return found


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--moments", type=int, default=200, help="signals that must find a render at work")
    parser.add_argument("--workers", type=lambda text: tuple(map(int, text.split(","))), default=(1, 2))
    parser.add_argument("--seed", type=int, default=1)
    args = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        for what, count in sorted(study(args.moments, args.workers, args.seed, Path(folder)).items()):
            print(f"{count:6} {what}")


if __name__ == "__main__":
    main()
