"""Files from strangers, many thousands of them: no traceback, no hang, no flood of memory, nothing touched or run.

    python -m tests.studies.hostile [--minutes 20] [--seed 1]     # mutations of specs, manifests, Parquet and CSV
    python -m tests.studies.hostile --guided --minutes 20         # the reader of specs, guided by coverage
    python -m tests.studies.hostile --quick                       # a few seconds
    python -m tests.studies.hostile --one 1234                    # one input again, with what it printed

The guided part needs atheris, which is not among the extras: `pip install atheris` has wheels for Python 3.11 and
later on Linux; where there is none it wants clang. Its corpus begins with the gallery.

Inputs are drawn by their number, so that each can be had again. A child process gives them to the commands and reports
what is not as it should be: an exit code other than 0, 1 and 2, an exception, a fault "in procgen itself", letters that
a terminal obeys, more than 2 s of processor time, a resident size above 500 MB, a file outside its folder that was
written or told from, a process, a connection or a library (Python's audit events; a sentinel folder is compared).
"""

from __future__ import annotations

import argparse
import hashlib
import json
import os
import random
import re
import resource
import select
import shutil
import subprocess
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

from tests.studies import hostile_files as files

ROOT = Path(__file__).resolve().parents[2]
SECONDS, MEGABYTES, WAIT = 2.0, 500, 90.0  # of processor time; resident; of real time until a child is given up
ADDRESSES = 6 << 30  # bytes: a bomb must not take the machine with it
SECRET = "7041776"
SPEC = """procgen: 1
seed: 3
paths: 20
time: {start: 2027-01-04T00:00, every: 1h, steps: 30}
series:
  flow: {unit: m3, of: [{constant: 80}, {ar: {phi: 0.8, sd: 3}}]}
  level: {of: [{random_walk: {sd: 1}}], decimals: 2}
"""
LAYOUTS: tuple[dict[str, str], ...] = (
    {}, {"layout": "panel"}, {"layout": "nested"}, {"layout": "wide"}, {"partition": "series", "reveal": "flow.ar"},
)  # fmt: skip
OBEYED = re.compile("[\x00-\x08\x0b-\x1f\x7f-\x9f\u061c\u200e\u200f\u2028-\u202e\u2066-\u2069\ud800-\udfff]")
FORBIDDEN = ("subprocess.", "os.system", "os.exec", "os.posix_spawn", "os.fork", "socket.", "pickle.", "ctypes.dlopen")
CHANGING = ("os.remove", "os.rename", "os.mkdir", "os.rmdir", "os.link", "os.symlink", "os.truncate", "os.chmod")
EVENTS: list[str] = []


def watch(folder: Path) -> None:
    """From now on note in EVENTS what this process does that reading a file does not need."""
    inside = (str(folder), "/dev/null")

    def hook(event: str, arguments: tuple) -> None:
        if event == "open":
            path, _, flags = arguments
            writes = isinstance(flags, int) and flags & (
                os.O_WRONLY | os.O_RDWR | os.O_CREAT | os.O_TRUNC | os.O_APPEND
            )
            outside = isinstance(path, str) and not os.path.abspath(path).startswith(inside)
            if outside and writes:
                EVENTS.append(f"opens {path} to write")
        elif event in CHANGING:
            paths = [each for each in arguments[:2] if isinstance(each, str | bytes)]
            if any(not os.path.abspath(os.fsdecode(path)).startswith(inside) for path in paths):
                EVENTS.append(f"{event} {paths!r}")
        elif event.startswith(FORBIDDEN):
            EVENTS.append(f"{event} {arguments!r:.80}")

    sys.addaudithook(hook)


class Bench:
    """Good files in a folder, and a place where one hostile input after the other is laid out and tried."""

    def __init__(self, folder: Path):
        self.folder, self.good, self.out = folder, folder / "good", folder / "work" / "in"
        self.specs = files.gallery(ROOT / "specs")
        self.spec = folder / "good" / "spec.yaml"

    def lay(self) -> None:
        """Write the good files, and the sentinel that nothing may touch or tell from."""
        import procgen as pg

        self.good.mkdir(parents=True)
        self.spec.write_text(SPEC, encoding="utf-8")
        for k, options in enumerate(LAYOUTS):
            pg.render(self.spec, self.good / str(k), **options)  # type: ignore[arg-type]
        pg.open_ensemble(self.good / "0").export(self.good / "data.csv")
        pg.open_ensemble(self.good / "0").export(self.good / "data.parquet")
        self.sentinel.mkdir()
        for place in (self.sentinel, self.folder / "work"):
            place.mkdir(exist_ok=True)
            (place / f"{files.TRAP}.csv").write_text(f"step,x\n0,{SECRET}\n", encoding="utf-8")

    @property
    def sentinel(self) -> Path:
        return self.folder / "sentinel"

    def snapshot(self) -> str:
        """A hash over names, contents and times of what must stay as it is."""
        seen = hashlib.sha256()
        for path in sorted(
            [*self.good.rglob("*"), *self.sentinel.rglob("*"), self.folder / "work" / f"{files.TRAP}.csv"]
        ):
            if path.is_file():
                seen.update(f"{path} {path.stat().st_mtime_ns} ".encode() + path.read_bytes())
        return seen.hexdigest()

    def commands(self, number: int) -> tuple[str, list[list[str]]]:
        """Lay out the hostile input of that number; its kind, and the commands that it is given to."""
        chance = random.Random(f"hostile {number}")
        shutil.rmtree(self.out, ignore_errors=True)
        self.out.mkdir(parents=True)
        kind = ("spec", "manifest", "part", "csv", "data.parquet", "table", "manifest", "part")[number % 8]
        return kind, {
            "spec": self._spec, "manifest": self._manifest, "part": self._part, "csv": self._csv,
            "data.parquet": self._parquet, "table": self._table,
        }[kind](chance)  # fmt: skip

    def _spec(self, chance: random.Random) -> list[list[str]]:
        path = self.out / "a.yaml"
        path.write_bytes(files.spec_text(self.specs, chance))
        return [["difference", str(path), str(self.spec)]]

    def _ensemble(self, chance: random.Random) -> Path:
        path = self.out / "ens"
        shutil.copytree(self.good / str(chance.randrange(len(LAYOUTS))), path)
        return path

    def _manifest(self, chance: random.Random) -> list[list[str]]:
        path = self._ensemble(chance)
        file = path / "manifest.json"
        file.write_bytes(files.manifest(file.read_bytes(), chance))
        return [*self._of_ensemble(path, chance), ["difference", str(file), str(self.spec)]]

    def _part(self, chance: random.Random) -> list[list[str]]:
        path = self._ensemble(chance)
        part = chance.choice(sorted(path.glob("*.parquet")))
        part.write_bytes(files.parquet(part.read_bytes(), chance))
        return self._of_ensemble(path, chance)

    def _of_ensemble(self, path: Path, chance: random.Random) -> list[list[str]]:
        out = str(path)
        last = ["render", str(self.spec), "-o", out, chance.choice(("--resume", "--overwrite"))]
        return [
            ["digest", out, *chance.choice(([], ["--redraw"]))],
            ["validate", out, "--workers", "1"],
            ["export", out, "-o", str(self.out / f"x{chance.choice(('.csv', '.npy', '.parquet'))}")],
            ["difference", out, str(self.good / "0")],
            *([last] if chance.random() < 0.3 else []),
        ]

    def _csv(self, chance: random.Random) -> list[list[str]]:
        data = files.csv_text((self.good / "data.csv").read_bytes(), chance)
        name = chance.choice(("a.csv", "a.csv", "a.tsv", "a.csv.gz"))
        path = self.out / name
        path.write_bytes(files.gzipped(data, chance) if name.endswith("gz") else data)
        return [["validate", str(path), "--spec", str(self.spec), *chance.choice(([], ["--time-col", "time"]))]]

    def _parquet(self, chance: random.Random) -> list[list[str]]:
        path = self.out / "a.parquet"
        path.write_bytes(files.parquet((self.good / "data.parquet").read_bytes(), chance))
        return [["validate", str(path), "--spec", str(self.spec)]]

    def _table(self, chance: random.Random) -> list[list[str]]:
        """A table that a spec names."""
        name = chance.choice(("data.csv", "data.parquet"))
        change = files.csv_text if name.endswith("csv") else files.parquet
        (self.out / name).write_bytes(change((self.good / name).read_bytes(), chance))
        by = chance.choice(("step: step", "time: time"))
        body = f"[{{given: {{file: {name}, column: flow, {by}}}}}]"
        path = self.out / "a.yaml"
        path.write_text(SPEC.partition("  flow")[0] + f"  flow: {body}\n", encoding="utf-8")
        return [["difference", str(path), str(self.spec)]]

    def tried(self, number: int) -> Iterator[str]:
        """What was not as it should be with the input of that number."""
        kind, commands = self.commands(number)
        for command in commands:
            for fault in self.run(command):
                yield f"{number} {kind}: {command[0]}: {fault}"

    def run(self, command: list[str]) -> Iterator[str]:
        from typer.testing import CliRunner

        from procgen.app import app

        EVENTS.clear()
        begin = time.process_time()
        result = CliRunner().invoke(app, command)
        seconds = time.process_time() - begin
        said = result.output
        if result.exception is not None and not isinstance(result.exception, SystemExit):
            yield f"{type(result.exception).__name__}: {result.exception}"
        elif result.exit_code not in (0, 1, 2):
            yield f"exit code {result.exit_code}"
        if "a fault in procgen itself" in said or "Traceback" in said:
            yield said.strip()[-300:]
        if found := OBEYED.search(said):
            yield f"prints U+{ord(found[0]):04X}: {said[max(found.start() - 60, 0) : found.end() + 20]!r}"
        if SECRET in said:
            yield "tells what is in a file beside"
        if seconds > SECONDS:
            yield f"takes {seconds:.1f} s"
        yield from dict.fromkeys(EVENTS)


def megabytes() -> float:
    """The peak of this program: what getrusage tells counts the process that it was started by, too."""
    if not Path("/proc/self/status").exists():
        return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    peak = re.search(r"VmHWM:\s*(\d+) kB", Path("/proc/self/status").read_text(encoding="ascii"))
    return int(peak[1]) / 1024 if peak else 0.0


def child(folder: Path, first: int, count: int) -> None:
    """Try inputs, one line of JSON before each and one for each fault; ends early above the bound of memory."""
    sys.dont_write_bytecode = True
    os.chdir(folder / "work")
    os.environ["TMPDIR"] = str(folder / "work")
    tempfile.tempdir = None
    bench = Bench(folder)
    for command in (["digest"], ["validate"]):  # what is imported once is not what an input takes
        list(bench.run([*command, str(bench.good / "0")]))
    list(bench.run(["export", str(bench.good / "0"), "-o", str(folder / "work" / "warm.csv"), "--overwrite"]))
    list(bench.run(["difference", str(bench.good / "0"), str(bench.good / "1")]))
    list(bench.run(["validate", str(bench.good / "data.csv"), "--spec", str(bench.spec)]))
    resource.setrlimit(resource.RLIMIT_AS, (ADDRESSES, ADDRESSES))
    watch(folder / "work")
    before = bench.snapshot()
    say = sys.__stdout__.write  # type: ignore[union-attr]
    for number in range(first, first + count):
        say(json.dumps({"begins": number}) + "\n")
        sys.__stdout__.flush()  # type: ignore[union-attr]
        for fault in bench.tried(number):
            say(json.dumps({"fault": fault}) + "\n")
        if bench.snapshot() != before:
            say(json.dumps({"fault": f"{number}: a file that is not its own was touched"}) + "\n")
            before = bench.snapshot()
        if megabytes() > MEGABYTES:
            say(json.dumps({"fault": f"{number}: {megabytes():.0f} MB"}) + "\n")
            break
    say(json.dumps({"done": number + 1 - first}) + "\n")


def batch(folder: Path, first: int, count: int) -> tuple[int, list[str]]:
    """How many inputs a child of its own tried, and the faults; one that it died of, or hung at, is a fault."""
    command = [sys.executable, "-m", "tests.studies.hostile", "--child", str(folder), str(first), str(count)]
    process = subprocess.Popen(command, cwd=ROOT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, bufsize=1)
    faults: list[str] = []
    at = first - 1
    assert process.stdout is not None
    while True:
        if not select.select([process.stdout], [], [], WAIT)[0]:
            process.kill()
            faults.append(f"{at}: no end within {WAIT:.0f} s")
            break
        if not (line := process.stdout.readline()):
            break
        said: dict[str, Any] = json.loads(line)
        at = said.get("begins", at)
        faults += [said["fault"]] if "fault" in said else []
        if "done" in said:
            process.communicate()
            return said["done"], faults
    _, error = process.communicate()
    faults.append(f"{at}: the process ended with {process.returncode}: {error[-500:]}")
    return at + 1 - first, faults


def study(until: Callable[[int], bool], seed: int, size: int, tell: Callable[[str], object]) -> Counter[str]:
    """Batches of inputs until it is enough; "inputs" and "faults" counted, each fault told."""
    found: Counter[str] = Counter()
    first = seed * 1_000_000
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name).resolve()
        Bench(folder).lay()
        while not until(found["inputs"]):
            done, faults = batch(folder, first, size)
            first += done
            found["inputs"] += done
            found["faults"] += len(faults)
            for fault in faults:
                tell(fault)
    return found


def guided(seconds: int) -> None:
    """Texts of specs, guided by the coverage of the reader; ends with the first that is no SpecError."""
    import atheris  # type: ignore[import-not-found]

    with atheris.instrument_imports(include=["procgen.spec", "procgen.terms", "yaml"]):
        from procgen.chance.laws import LAWS
        from procgen.spec.model import SpecError
        from procgen.spec.reader import read_text
        from procgen.terms import catalogue

    def once(data: bytes) -> None:
        try:
            read_text(data.decode("utf-8", "surrogateescape"), catalogue(), LAWS)
        except SpecError as error:
            if OBEYED.search(str(error)):
                raise AssertionError(f"letters that a terminal obeys: {error!s:.200}") from None

    with tempfile.TemporaryDirectory() as corpus:
        for k, text in enumerate(files.gallery(ROOT / "specs")):
            (Path(corpus) / str(k)).write_text(text, encoding="utf-8")
        options = [
            f"-max_total_time={seconds}",
            "-max_len=4000",
            "-timeout=10",
            "-rss_limit_mb=1500",
            "-print_final_stats=1",
        ]
        atheris.Setup([sys.argv[0], *options, corpus], once)
        atheris.Fuzz()


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--minutes", type=float, default=20.0)
    parser.add_argument("--seed", type=int, default=1, help="inputs begin at this number times a million")
    parser.add_argument("--quick", action="store_true", help="48 inputs")
    parser.add_argument("--guided", action="store_true", help="the reader of specs by atheris")
    parser.add_argument("--one", type=int, help="one input again")
    parser.add_argument("--child", nargs=3, help=argparse.SUPPRESS)
    args = parser.parse_args()
    if args.child:
        child(Path(args.child[0]), int(args.child[1]), int(args.child[2]))
    elif args.guided:
        guided(int(60 * args.minutes))
    elif args.one is not None:
        again(args.one)
    else:
        end = time.monotonic() + 60 * args.minutes
        enough = (lambda n: n >= 48) if args.quick else (lambda n: time.monotonic() > end)
        found = study(enough, args.seed, 48 if args.quick else 400, lambda fault: print(fault, flush=True))
        print(f"{found['inputs']} inputs, {found['faults']} faults")
        raise SystemExit(found["faults"] > 0)


def again(number: int) -> None:
    """One input, with what each command printed of it; its files are kept."""
    folder = Path(tempfile.mkdtemp())
    bench = Bench(folder)
    bench.lay()
    os.chdir(folder / "work")
    _, commands = bench.commands(number)
    print(f"files in {bench.out}")
    for command in commands:
        print("procgen", *command)
        subprocess.run(
            [sys.executable, "-m", "procgen", *command], env=os.environ | {"PROCGEN_DEBUG": "1"}, check=False
        )


if __name__ == "__main__":
    main()
