"""Garbage is looked for less often in a command and its workers, and as ever in a caller's process."""

import os
import subprocess
import sys

import pytest

from tests.ensemble.fakes import ROOT

SPEC = {"procgen": 1, "seed": 3, "paths": 40, "time": {"steps": 50}, "series": {"x": {"ar": {"phi": 0.7, "sd": 1}}}}
API = f"import procgen as pg\npg.validate(pg.render({SPEC}, sys.argv[1], workers=2), workers=2)"
COMMAND = "from procgen import cli\nsys.argv[1:] = ['terms']\ntry: cli.run()\nexcept SystemExit: pass"
CYCLES = """
from procgen.ensemble import own
own.claim()
own.settled()
class Ring:
    alive = most = 0
    def __init__(self):
        self.self = self
        Ring.alive += 1
        Ring.most = max(Ring.most, Ring.alive)
    def __del__(self):
        Ring.alive -= 1
for _ in range(10 * own.WORKING):
    Ring()
print(Ring.most < 2 * own.WORKING, gc.get_freeze_count() > 0)
"""


def said(code, *arguments):
    """What code prints, and the thresholds and frozen objects at its end."""
    told = f"import gc, sys\n{code}\nprint(gc.isenabled(), *gc.get_threshold(), gc.get_freeze_count())"
    command = [sys.executable, "-c", told, *map(str, arguments)]
    return subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True).stdout.splitlines()


@pytest.fixture(scope="module")
def usual():
    return said("")[-1].split()


def test_a_callers_process_is_left_as_it_is(tmp_path, usual):
    assert said(API, tmp_path / "out")[-1].split() == usual


def test_a_command_does_not_look_for_garbage_while_it_begins(usual):
    enabled, first, *others, frozen = said(COMMAND)[-1].split()
    assert (enabled, others, frozen) == ("True", usual[2:-1], "0") and int(first) > 100 * int(usual[1])


def test_garbage_of_the_work_is_found_in_time():
    assert said(CYCLES)[0] == "True True"


@pytest.mark.parametrize("words, code", [(["terms", "garch"], 0), (["terms", "what"], 2), (["-h"], 0)])
def test_a_command_ends_at_once_having_said_everything(words, code):
    """With the exit code, what atexit was asked for, and whole output in a pipe; the process is not asked twice."""
    script = "import atexit, sys\nfrom procgen import cli\natexit.register(print, 'goodbye')\ncli.main()\nprint('more')"
    done = subprocess.run([sys.executable, "-c", script, *words], cwd=ROOT, capture_output=True, text=True)
    plain = subprocess.run(
        [sys.executable, "-c", script.replace("main", "run"), *words], cwd=ROOT, capture_output=True, text=True
    )
    assert done.returncode == plain.returncode == code
    assert (done.stdout, done.stderr) == (plain.stdout, plain.stderr)
    assert done.stdout.endswith("goodbye\n") and "more" not in done.stdout


def test_what_cannot_be_written_is_told_by_python():
    script = "import os\nfrom procgen.ensemble import own\nown.claim()\nprint('x')\nos.close(1)\nown.leave(0)"
    buffered = {name: value for name, value in os.environ.items() if name != "PYTHONUNBUFFERED"}
    done = subprocess.run([sys.executable, "-c", script], cwd=ROOT, capture_output=True, text=True, env=buffered)
    assert done.returncode == 120 and "Bad file descriptor" in done.stderr


FUNCTIONS = """
from procgen.ensemble import own
{claim}
own.load_functions()
import numpy, scipy.special
print(*[name for name in ("numpy.f2py", "numpy.random") if name in sys.modules], sep=",")
import numpy.f2py
print(numpy.testing.assert_equal.__name__, numpy.f2py.__name__, numpy.random.__name__, scipy.special.ndtr(0.0))
"""


@pytest.mark.parametrize("claim", ["own.claim()", ""])
def test_scipys_functions_come_without_what_they_never_use_and_all_of_numpy_is_there(claim):
    loaded, names, _ = said(FUNCTIONS.format(claim=claim))
    assert names == "assert_equal numpy.f2py numpy.random 0.5"
    assert claim == "" or loaded == ""
