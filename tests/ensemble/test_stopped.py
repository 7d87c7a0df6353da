"""A worker that fails stops the others, whatever they are saying."""

import subprocess
import sys
import time
from pathlib import Path

from procgen.ensemble.errors import EnsembleError
from tests.ensemble.fakes import ROOT

RUN = """
import sys
from procgen.ensemble.engines import Here, Work
tasks = [{"folder": sys.argv[1], "role": role} for role in ("waits", "fails", "talks")]
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
    """One fails; one notices at its next tick, and has more to say than a pipe holds; the first waits for both."""
    failed, talks = (Path(given["folder"]) / name for name in ("failed", "talks"))
    if given["role"] == "waits":
        until(talks)
        time.sleep(0.5)
    elif given["role"] == "fails":
        failed.touch()
        raise EnsembleError("what the first failure says")
    else:
        until(failed)
        time.sleep(0.5)
        tick(1)
        talks.touch()
        return [{"sums": "x" * (1 << 20)}]
    return []


def test_a_worker_that_says_much_when_another_failed_does_not_hold_up_the_end(tmp_path):
    """Without someone who listens it waited for ever, and the command with it."""
    command = [sys.executable, "-c", RUN, str(tmp_path)]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, timeout=60)
    assert done.stdout == "what the first failure says\n" and "Traceback" not in done.stderr
