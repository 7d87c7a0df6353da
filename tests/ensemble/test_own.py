"""Garbage is looked for less often in a command and its workers, and as ever in a caller's process."""

import subprocess
import sys

import pytest

from tests.ensemble.fakes import ROOT

SPEC = {"procgen": 1, "seed": 3, "paths": 40, "time": {"steps": 50}, "series": {"x": {"ar": {"phi": 0.7, "sd": 1}}}}
API = f"import procgen as pg\npg.validate(pg.render({SPEC}, sys.argv[1], workers=2), workers=2)"
COMMAND = "from procgen import cli\nsys.argv[1:] = ['terms']\ntry: cli.main()\nexcept SystemExit: pass"
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
