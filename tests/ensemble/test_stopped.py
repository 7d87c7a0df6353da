"""A worker that fails stops the others, whatever they are saying."""

import os
import subprocess
import sys
import time
from pathlib import Path

import pytest

from procgen.ensemble.errors import EnsembleError
from tests.ensemble.fakes import ROOT

RUN = """
import os, sys
from procgen.ensemble import own
from procgen.ensemble.engines import Here, Work
if sys.argv[2] == "True":
    own.claim()
tasks = [{"folder": sys.argv[1], "caller": os.getpid(), "late": float(sys.argv[3])}] * 3
try:
    Here(3).run(Work(tasks, "tests.ensemble.test_stopped:task", lambda records: None))
except Exception as error:
    print(error)
"""


def until(flag):
    for _ in range(600):
        if flag.exists():
            return
        time.sleep(0.05)


def task(given, tick):
    """Of two workers one fails, the other notices at its next tick, and has more to say than a pipe holds.

    The caller waits for both.
    """
    names = ("one", "waits", "listens", "failed", "talks")
    one, waits, listens, failed, talks = (Path(given["folder"]) / name for name in names)
    if os.getpid() == given["caller"]:
        waits.touch()
        until(talks)
        time.sleep(0.5)
    elif is_first(one):
        until(waits)  # a caller that has not begun by then would begin nothing any more, and end the other at once
        until(listens)
        failed.touch()
        raise EnsembleError("what the first failure says")
    else:
        listens.touch()
        until(failed)
        time.sleep(0.5)
        tick(1)
        talks.touch()
        time.sleep(given["late"])  # what it has to do after its last tick
        return [{"sums": "x" * (1 << 20)}]
    return []


def is_first(flag):
    try:
        flag.touch(exist_ok=False)
    except FileExistsError:
        return False
    return True


@pytest.mark.parametrize("late", [0.0, 1.5])
@pytest.mark.parametrize("claimed", [False, True], ids=["programs", "forked"])
def test_a_worker_that_says_much_when_another_failed_does_not_hold_up_the_end(tmp_path, claimed, late):
    """It waited for ever, and the command with it: for one who listens, or, asked to end late, for another task."""
    command = [sys.executable, "-c", RUN, str(tmp_path), str(claimed), str(late)]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, timeout=60)
    assert (tmp_path / "talks").exists()
    assert done.stdout == "what the first failure says\n" and "Traceback" not in done.stderr
