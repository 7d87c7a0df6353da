"""A render that is killed at random moments, again and again, resumes to the very same digest.

    python -m tests.studies.faults [--moments 200] [--signals KILL] [--workers 1,2] [--seed 1]

A signal (SIGKILL, SIGTERM, SIGINT) ends `procgen render`, or with SIGKILL one of its workers, at a random moment; so
do others to up to three `--resume` after it. In between no process may be left, only whole parts may be visible, no
manifest without all of them, and nobody may see a traceback. Then `--resume` is left alone: the digest, and that of the
values read back, must be those of a render in one go.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import os
import random
import shutil
import signal
import sys
import tempfile
import time
import traceback
from collections import Counter
from collections.abc import Callable
from pathlib import Path
from typing import Protocol

ROOT = Path(__file__).resolve().parents[2]
SPEC = {
    "procgen": 1,
    "seed": 8,
    "paths": 32,
    "time": {"steps": 65_536 + 100},
    "series": {"x": {"random_walk": {"sd": 1}}},
}
PART_BYTES = 1 << 20  # ranges of paths in several parts along the steps: states are carried over
STOPPED = "procgen: stopped; what was finished is kept, and render goes on with --resume\n"
DIED = "procgen: a worker process died (killed by signal 9)"


class Struck(Protocol):
    """What is asked of a process that may be struck; `subprocess.Popen` is one, too."""

    @property
    def pid(self) -> int: ...
    @property
    def returncode(self) -> int | None: ...
    def poll(self) -> int | None: ...
    def communicate(self) -> tuple[str, str]: ...


class Render:
    """`procgen render` in a process that is forked from this one: strikes fall on the work, not on imports."""

    def __init__(self, out: Path, workers: int, resume: bool):
        self.said = out.parent / "said"
        self.returncode: int | None = None
        self.pid = os.fork()
        if not self.pid:
            os._exit(self._main([str(out.parent / "spec.yaml"), "-o", str(out), "--workers", str(workers)], resume))

    def _main(self, arguments: list[str], resume: bool) -> int:
        from procgen import cli
        from procgen.ensemble import plan

        plan.PART_BYTES = PART_BYTES
        os.setsid()
        signal.signal(signal.SIGINT, signal.default_int_handler)
        file = os.open(self.said, os.O_WRONLY | os.O_CREAT | os.O_TRUNC)
        for stream, target in ((0, os.open(os.devnull, os.O_RDONLY)), (1, file), (2, file)):
            os.dup2(target, stream)
        sys.argv = ["procgen", "render", *arguments, *["--resume"] * resume]
        try:
            cli.run()
        except SystemExit as ended:
            sys.stderr.flush()
            return int(ended.code or 0)
        return 1  # a traceback has been printed

    def poll(self, how: int = os.WNOHANG) -> int | None:
        if self.returncode is None:
            pid, status = os.waitpid(self.pid, how)
            self.returncode = os.waitstatus_to_exitcode(status) if pid else None
        return self.returncode

    def communicate(self) -> tuple[str, str]:
        self.poll(0)
        said = self.said.read_text() if self.said.exists() else ""
        return "", said


def aside(do: Callable[[], None]) -> None:
    """Do it in a process of its own: this one must stay without threads, since it forks."""
    pid = os.fork()
    if not pid:
        try:
            do()
            os._exit(0)
        except BaseException:
            traceback.print_exc()
            os._exit(1)
    if os.waitpid(pid, 0)[1]:
        raise AssertionError("as printed above")


def finished(process: Struck) -> None:
    _, err = process.communicate()
    if process.returncode:
        raise AssertionError(f"a render that nobody disturbed ended with {process.returncode}: {err}")


def at_work(process: Struck, out: Path) -> None:
    """Wait until a render holds OUT, or has ended."""
    while process.poll() is None:
        with contextlib.suppress(OSError):
            if (out / ".state" / "lock").read_text() == str(process.pid):
                return
        time.sleep(0.001)


def of_session(number: int) -> list[int]:
    """The processes of a session, which are a render and its workers; [] where there is no /proc."""
    found = []
    for stat in Path("/proc").glob("[0-9]*/stat"):
        try:
            state, _, _, session = stat.read_text().rpartition(") ")[2].split()[:4]
        except OSError:
            continue  # it has ended
        if int(session) == number and state != "Z":
            found.append(int(stat.parent.name))
    return found


def struck(process: Struck, out: Path, moment: float, what: signal.Signals, worker: bool) -> str:
    """Who was struck, "" when nobody was at work any more; the signal comes `moment` after the work begins."""
    at_work(process, out)
    time.sleep(moment)
    helpers = [number for number in of_session(process.pid) if number != process.pid]
    who = "worker" if worker and helpers else "render"
    alive = process.poll() is None
    if alive:
        with contextlib.suppress(ProcessLookupError):
            os.kill(process.pid if who == "render" else helpers[0], what)
    said = process.communicate()[1]
    until = time.monotonic() + 60
    while (others := of_session(process.pid)) and time.monotonic() < until:
        time.sleep(0.01)
    if others:
        raise AssertionError(f"{what.name} has left processes: {others}")
    done = (out / "manifest.json").exists() and not (out / ".state").exists()
    if not done:
        _expect_said(process.returncode, said, what, who)
    return who if alive and not done else ""


def _expect_said(code: int | None, said: str, what: signal.Signals, who: str) -> None:
    """A render that was killed says nothing, one that was stopped or has lost a worker one sentence."""
    if code == -signal.SIGKILL and what is signal.SIGKILL and said == "":
        return
    if who == "worker" and code == 2 and said.startswith(DIED) and said.count("\n") == 1:
        return
    if who == "render" and code == 130 and said in ("", STOPPED):
        return
    raise AssertionError(f"{what.name} to the {who}: exit code {code}, and it says {said!r}")


def seen(out: Path) -> None:
    """Each part that is visible must be whole, and the manifest is there only with all of them."""
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


def left(out: Path) -> str:
    manifest = ", manifest" * (out / "manifest.json").exists()
    return ("parts" if list(out.glob("paths-*.parquet")) else "no part") + manifest


def once(
    out: Path, chance: random.Random, workers: int, signals: tuple[signal.Signals, ...], longest: float
) -> Counter[str]:
    """One story: what was struck, and what was found in between."""
    shutil.rmtree(out, ignore_errors=True)
    found: Counter[str] = Counter()
    for attempt in range(1 + chance.randrange(4)):
        what, moment = chance.choice(signals), chance.uniform(0, longest)
        worker = what is signal.SIGKILL and chance.random() < 0.3
        if who := struck(Render(out, workers, attempt > 0), out, moment, what, worker):
            found[f"struck: SIG{what.name[3:]} to the {who} in {'resume' if attempt else 'render'}"] += 1
        aside(lambda: seen(out))
        found[f"left: {left(out)}"] += 1
    return found


def in_order(out: Path, digest: str) -> None:
    """After --resume: the digest of one go, in the manifest and of the values, and nothing beside them."""
    from procgen.ensemble import check_digest

    result = check_digest(out)
    if result.digest != digest or not result.ok:
        raise AssertionError(f"after --resume: {result.text()}")
    if (out / ".state").exists():
        raise AssertionError("a finished render has left its state behind")


def study(
    moments: int, workers: tuple[int, ...], signals: tuple[signal.Signals, ...], seed: int, folder: Path
) -> Counter[str]:
    """Stories until so many signals have struck."""
    import pyarrow.parquet  # noqa: F401

    import procgen as pg
    import procgen.report.rendered
    from procgen.ensemble import check, parquet, part, present  # noqa: F401

    pg.render(SPEC, paths=1, steps=1)  # imports what a render imports, once for all
    chance = random.Random(seed)
    (folder / "spec.yaml").write_text(json.dumps(SPEC))
    out, longest = folder / "out", {}
    for some in sorted(set(workers)):
        shutil.rmtree(out, ignore_errors=True)
        process = Render(out, some, False)
        at_work(process, out)
        began = time.monotonic()
        finished(process)
        longest[some] = time.monotonic() - began
    digest = json.loads((out / "manifest.json").read_text())["digest"]
    found: Counter[str] = Counter()
    while sum(count for name, count in found.items() if name.startswith("struck")) < moments:
        some = chance.choice(workers)
        found.update(once(out, chance, some, signals, longest[some]))
        finished(Render(out, some, True))
        aside(lambda: in_order(out, digest))
        found["stories, each with the digest of one go"] += 1
    return found


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--moments", type=int, default=200, help="signals that must find a render at work")
    parser.add_argument("--workers", type=lambda text: tuple(map(int, text.split(","))), default=(1, 2))
    parser.add_argument("--signals", default="KILL", help="of KILL,TERM,INT")
    parser.add_argument("--seed", type=int, default=1)
    args = parser.parse_args()
    signals = tuple(signal.Signals[f"SIG{name}"] for name in args.signals.split(","))
    began = time.monotonic()
    os.environ |= {"OPENBLAS_NUM_THREADS": "1", "JE_ARROW_MALLOC_CONF": "background_thread:false"}  # no threads
    with tempfile.TemporaryDirectory() as folder:
        for what, count in sorted(study(args.moments, args.workers, signals, args.seed, Path(folder)).items()):
            print(f"{count:6} {what}")
    print(f"{time.monotonic() - began:6.0f} seconds")


if __name__ == "__main__":
    main()
