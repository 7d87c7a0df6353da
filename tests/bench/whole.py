"""Whole processes, measured: what every bench counts in."""

from __future__ import annotations

import os
import platform
import shutil
import statistics
import subprocess
import sys
import time
from pathlib import Path
from typing import NamedTuple

PROCGEN = ("-m", "procgen")


class Run(NamedTuple):
    """One process with its children, once."""

    seconds: float
    processor: float  # seconds, of all processes
    peak: float  # MB, of the largest process


def run(command: list[str]) -> Run:
    """What a Python command takes, from its start to its end; modules it compiles are kept, as an installation's are.

    wait4 counts a process together with the children it has waited for.
    """
    kept = {name: value for name, value in os.environ.items() if name != "PYTHONDONTWRITEBYTECODE"}
    began = time.perf_counter()
    process = subprocess.Popen([sys.executable, *command], stdout=subprocess.DEVNULL, env=kept)
    _, status, usage = os.wait4(process.pid, 0)
    took = time.perf_counter() - began
    process.returncode = os.waitstatus_to_exitcode(status)
    if process.returncode:
        raise SystemExit(f"{' '.join(command)} ended with exit code {process.returncode}")
    unit = 1 if platform.system() == "Darwin" else 1024
    return Run(took, usage.ru_utime + usage.ru_stime, usage.ru_maxrss * unit / 1e6)


def into(command: list[str], out: Path) -> Run:
    """The same of one that writes into a folder, which is empty before and gone after."""
    shutil.rmtree(out, ignore_errors=True)
    out.mkdir()
    found = run(command)
    shutil.rmtree(out)
    return found


def ratio(runs: list[Run], others: list[Run]) -> float:
    """The median of the ratios of seconds, round by round."""
    return statistics.median(a.seconds / b.seconds for a, b in zip(runs, others, strict=True))
