"""Workers that a command forks do all that workers begun as programs do, and hold nothing of the command's."""

import json
import os
import subprocess
import sys
import time
from pathlib import Path

import pytest

import procgen as pg
from procgen.ensemble import forked
from tests.ensemble.fakes import ROOT

pytestmark = pytest.mark.skipif(not sys.platform.startswith("linux"), reason="workers are forked on Linux alone")
SPEC = {"procgen": 1, "seed": 3, "paths": 64, "time": {"steps": 40_000}, "series": {"x": {"random_walk": {"sd": 1}}}}
RUN = """
import json, os, sys, threading
from procgen.ensemble import own
from procgen.ensemble.engines import Here, Work
from procgen.ensemble.errors import EnsembleError
asked = json.loads(sys.argv[1])
if asked["claimed"]:
    own.claim()
if asked["thread"]:
    threading.Thread(target=threading.Event().wait, daemon=True).start()
lock = os.open(asked["folder"], os.O_RDONLY)
file = open(asked["folder"] + "/file", "w")
file.write("once")
print("begun", end=" ")
tasks = [{**asked, "of": os.getpid(), "number": number} for number in range(asked["size"])]
records = []
try:
    Here(asked["size"], lock).run(Work(tasks, "tests.ensemble.test_forked:task", records.extend))
except EnsembleError as error:
    print(error)
file.close()
print(json.dumps([lock, os.getpgid(0), *records]))
"""


def task(given, tick):
    """Each process has one, since it waits until all are at work; then it tells of itself, or does what is asked."""
    folder = Path(given["folder"])
    (folder / f"{given['number']}").write_text(str(os.getpid()))
    until(lambda: all((folder / f"{k}").exists() for k in range(given["size"])))
    mine = os.getpid() != given["of"]
    if mine and given["does"] == "die":
        os._exit(7)
    if mine and given["does"] == "fail":
        raise RuntimeError("a fault of our own")
    if given["does"] == "wait":
        until(lambda: False)
    files = {int(name): os.readlink(f"/proc/self/fd/{name}") for name in os.listdir("/proc/self/fd") if seen(name)}
    worker = "procgen.ensemble.worker" in Path("/proc/self/cmdline").read_text()
    about = {"pid": os.getpid(), "group": os.getpgid(0), "files": files, "program": worker, "mine": mine}
    return [about]


def seen(name):
    return os.path.exists(f"/proc/self/fd/{name}") and os.readlink(f"/proc/self/fd/{name}") != f"/proc/{os.getpid()}/fd"


def until(done, seconds=30.0):
    end = time.monotonic() + seconds
    while not done() and time.monotonic() < end:
        time.sleep(0.01)
    return done()


def begun(folder, claimed=True, thread=False, size=3, does=""):
    told = {"folder": str(folder), "claimed": claimed, "thread": thread, "size": size, "does": does}
    # A fork beside threads warns from Python 3.12 on.
    command = [sys.executable, "-W", "error::DeprecationWarning", "-c", RUN, json.dumps(told)]
    pipe = subprocess.PIPE
    return subprocess.Popen(command, cwd=ROOT, stdout=pipe, stderr=pipe, text=True, start_new_session=True)


def told(process):
    """What it printed, before the last line and as data in it; nothing was said beside it."""
    out, err = process.communicate(timeout=60)
    assert (process.returncode, err) == (0, "")
    *lines, data = out.removeprefix("begun ").splitlines()
    assert out.count("begun") == 1
    return lines, json.loads(data)


@pytest.mark.parametrize("claimed,thread", [(True, False), (False, False), (True, True)])
def test_workers_are_forked_where_that_is_safe_and_hold_only_what_they_need(tmp_path, claimed, thread):
    lines, (lock, group, *records) = told(begun(tmp_path, claimed, thread))
    workers = [record for record in records if record["mine"]]
    assert not lines and len(workers) == 2 and len({record["pid"] for record in records}) == 3
    for worker in workers:
        assert worker["program"] == (not claimed or thread)
        assert worker["group"] == worker["pid"] != group  # Ctrl-C is for the command alone
        files = worker["files"]
        assert set(files) == {"0", "1", "2", str(lock)} and files[str(lock)] == str(tmp_path)
        assert all(files[end].startswith("pipe:") for end in "01") and files["0"] != files["1"]
    assert (tmp_path / "file").read_text() == "once"


@pytest.mark.parametrize("claimed", [True, False])
def test_a_worker_that_dies_is_told_in_one_line(tmp_path, claimed):
    lines, _ = told(begun(tmp_path, claimed, does="die"))
    assert len(lines) == 1 and lines[0].startswith("a worker process died (exit code 7); ")


def test_a_fault_in_a_worker_is_seen_and_ends_it(tmp_path):
    process = begun(tmp_path, does="fail")
    out, err = process.communicate(timeout=60)
    assert "a worker process died (exit code 1); " in out and "RuntimeError: a fault of our own" in err
    assert (tmp_path / "file").read_text() == "once"


@pytest.mark.parametrize("claimed", [True, False])
def test_workers_end_when_the_process_that_began_them_is_killed(tmp_path, claimed):
    process = begun(tmp_path, claimed, does="wait")
    names = [tmp_path / str(number) for number in range(3)]
    assert until(lambda: all(name.exists() and name.read_text() for name in names))
    workers = {int(name.read_text()) for name in names} - {process.pid}
    process.kill()
    process.communicate(timeout=60)
    assert len(workers) == 2 and until(lambda: not any(os.path.exists(f"/proc/{worker}") for worker in workers))


def test_the_digest_is_that_of_one_process(tmp_path):
    spec = tmp_path / "spec.yaml"
    spec.write_text(json.dumps(SPEC))
    script = (
        "import sys\nfrom procgen import cli\nfrom procgen.ensemble import engines, forked, plan\n"
        "plan.PART_BYTES = 1 << 20\nmade = forked.Forked.__init__\n"
        "def begin(*given):\n    made(*given)\n    print('forked', file=sys.stderr)\n"
        "forked.Forked.__init__ = begin\ncli.main()"
    )
    for command in (["render", str(spec), "-o", str(tmp_path / "out")], ["validate", str(tmp_path / "out")]):
        call = [sys.executable, "-c", script, *command, "--workers", "3"]
        done = subprocess.run(call, cwd=ROOT, capture_output=True, text=True, timeout=120)
        assert (done.returncode, done.stderr) == (0, "forked\nforked\n")
    assert pg.open_ensemble(tmp_path / "out").digest == pg.render(SPEC, workers=1).digest


def test_a_bar_on_a_terminal_has_no_thread_of_its_own():
    pty = pytest.importorskip("pty")
    outer, inner = pty.openpty()
    code = (
        "import os\nfrom procgen.console import progress\nfrom procgen.ensemble import forked, own\nown.claim()\n"
        "with progress('drawing') as tick:\n    tick(1, 2)\n    os.write(1, str(forked.possible()).encode())"
    )
    found = subprocess.run([sys.executable, "-c", code], stderr=inner, stdout=subprocess.PIPE, text=True)
    os.close(inner)
    os.close(outer)
    assert found.stdout.strip() == "True"


def test_the_process_of_a_caller_is_never_forked():
    assert not forked.possible()
