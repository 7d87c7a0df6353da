"""Files from strangers: each is refused or read in bounded time and memory, and nothing beside it is touched.

Every case is one command in a process of its own, which reports its processor time and its peak of resident memory:
at most 2 s above those of the same command with a good file, and 500 MB. Bounds of procgen's own, common practice.
The study tests/studies/hostile.py draws thousands of such files; test_study.py is its quick mode.
"""

import os
import re
import subprocess
import sys
import tempfile
from functools import cache
from pathlib import Path

from tests.studies.hostile import MEGABYTES, OBEYED, SECONDS

HEAD = "seed: 1\npaths: 10\ntime: {steps: 20}\n"
HEAD_RAW = {"seed": 1, "paths": 10, "time": {"steps": 20}, "series": {"x": [{"white_noise": {"sd": 1}}]}}
CHILD = """
import atexit, pathlib, resource, sys
peak = pathlib.Path(sys.argv.pop(1))  # of this program: what getrusage tells counts the one that started it, too
atexit.register(lambda: peak.write_bytes(pathlib.Path("/proc/self/status").read_bytes()))
resource.setrlimit(resource.RLIMIT_AS, (6 << 30, 6 << 30))
from procgen.cli import main
main()
"""


def command(*arguments, cwd=None):
    """Exit code, what was printed, processor seconds and peak MB of a command in a process of its own."""
    with tempfile.TemporaryDirectory() as folder:
        peak = Path(folder) / "peak"
        words = [sys.executable, "-c", CHILD, str(peak), *map(str, arguments)]
        with subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, cwd=cwd) as process:
            said = process.stdout.read().decode("utf-8", "replace")
            _, status, used = os.wait4(process.pid, 0)
            process.returncode = os.waitstatus_to_exitcode(status)
        most = re.search(r"VmHWM:\s*(\d+) kB", peak.read_text(encoding="ascii"))
        return process.returncode, said, used.ru_utime + used.ru_stime, int(most[1]) / 1024


@cache
def usual(name, folder):
    """Processor seconds of a command with good files."""
    good = {"validate": [folder / "data.csv", "--spec", folder / "spec.yaml"], "digest": [folder / "out"]}
    return command(name, *good[name])[2]


def refused(good, name, *arguments, says, code=2):
    """A command that ends in time, small, with that code, and says that; its text."""
    found, said, seconds, megabytes = command(name, *arguments)
    assert found == code, said[-500:]
    assert says in said and "Traceback" not in said and "in procgen itself" not in said
    assert not OBEYED.search(said)
    assert seconds < usual(name, good) + SECONDS, f"{seconds:.1f} s"
    assert megabytes < MEGABYTES, f"{megabytes:.0f} MB"
    return said
