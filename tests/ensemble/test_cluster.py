"""A Dask cluster draws and judges the same ensemble, whatever dies: real schedulers and workers, each a process."""

import contextlib
import os
import random
import signal
import socket
import subprocess
import sys
import threading
import time
from types import SimpleNamespace

import pytest

import procgen as pg
from procgen.ensemble import EnsembleError, cluster, plan
from tests.ensemble.fakes import ROOT, fake_render, fake_spec, visible
from tests.waiting import wait_for

pytest.importorskip("distributed")

SPEC = fake_spec(seed=5, paths=640, steps=60, _pause=0.3)
MANY = 1 << 14  # bytes of a part: 40 parts
NO_WAIT = {"DASK_DISTRIBUTED__COMM__TIMEOUTS__CONNECT": "3s", "DASK_DISTRIBUTED__SCHEDULER__ALLOWED_FAILURES": "2"}


class Machines:
    """A scheduler and its workers on loopback; any of them can be killed and started again."""

    def __init__(self):
        with socket.socket() as free:
            free.bind(("127.0.0.1", 0))
            self.port = free.getsockname()[1]
        self.address = f"tcp://127.0.0.1:{self.port}"
        self.scheduler, self.workers = None, []

    def start_scheduler(self):
        options = ["--host", "127.0.0.1", "--port", str(self.port), "--no-dashboard", "--no-show"]
        self.scheduler = self._start("distributed.cli.dask_scheduler", *options)
        give_up = time.monotonic() + 30
        while time.monotonic() < give_up:
            with contextlib.suppress(OSError), socket.create_connection(("127.0.0.1", self.port), 1):
                return
            time.sleep(0.05)
        raise AssertionError("the scheduler did not start")

    def start_worker(self):
        options = ["--host", "127.0.0.1", "--nthreads", "1", "--no-dashboard", "--no-nanny", "--death-timeout", "60"]
        self.workers.append(self._start("distributed.cli.dask_worker", self.address, *options))

    def _start(self, module, *options):
        env = {**os.environ, "PYTHONPATH": str(ROOT), **NO_WAIT}
        command = [sys.executable, "-m", module, *options]
        return subprocess.Popen(command, env=env, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)

    def kill(self, process):
        process.kill()
        process.wait()

    def end(self):
        for process in [*self.workers, self.scheduler]:
            if process is not None:
                self.kill(process)


@pytest.fixture
def machines():
    them = Machines()
    try:
        them.start_scheduler()
        for _ in range(3):
            them.start_worker()
        yield them
    finally:
        them.end()


@contextlib.contextmanager
def meanwhile(act):
    """Run `act` in a thread of its own beside the block; its failure is the test's."""
    failed = []

    def run():
        try:
            act()
        except BaseException as error:
            failed.append(error)

    thread = threading.Thread(target=run)
    thread.start()
    yield
    thread.join()
    assert not failed


@pytest.fixture(scope="module")
def digest():
    return fake_render(fake_spec(seed=5, paths=640, steps=60)).digest


def test_workers_killed_at_random_moments_leave_the_digest_as_it_is(machines, tmp_path, monkeypatch, digest):
    monkeypatch.setattr(plan, "PART_BYTES", MANY)
    moments = random.Random(20261201)
    over = threading.Event()

    def kill():
        for _ in range(6):
            if over.wait(moments.uniform(0.2, 0.8)):
                return
            machines.kill(machines.workers.pop(moments.randrange(len(machines.workers))))
            machines.start_worker()

    with meanwhile(kill):
        made = fake_render(SPEC, tmp_path / "out", scheduler=machines.address)
        over.set()
    assert made.digest == digest
    assert len(made.manifest.parts) == 40
    assert len(visible(tmp_path / "out")) == 41


def test_a_scheduler_that_is_started_again_goes_on(machines, tmp_path, monkeypatch, digest):
    monkeypatch.setattr(plan, "PART_BYTES", MANY)
    parts = tmp_path / "out"

    def restart():
        wait_for("the first part", lambda: list(parts.glob("paths-*")))
        machines.kill(machines.scheduler)
        machines.start_scheduler()
        for worker in machines.workers:
            machines.kill(worker)
        machines.start_worker()

    with meanwhile(restart):
        assert fake_render(SPEC, parts, scheduler=machines.address).digest == digest


def test_a_worker_that_stands_still_holds_nobody_up(machines, tmp_path, monkeypatch, digest):
    monkeypatch.setattr(plan, "PART_BYTES", MANY)
    parts, still = tmp_path / "out", []

    def halt():
        wait_for("the first part", lambda: list(parts.glob("paths-*")))
        still.append(machines.workers[0])
        still[0].send_signal(signal.SIGSTOP)

    began = time.monotonic()
    with meanwhile(halt):
        assert fake_render(SPEC, parts, scheduler=machines.address).digest == digest
    assert time.monotonic() - began < 60  # the library itself would wait 5 minutes before it gives the worker up
    assert still


def test_a_cluster_on_this_machine_gives_the_ensemble_and_the_verdict_of_this_process(tmp_path, monkeypatch):
    raw = {
        "procgen": 1, "seed": 3, "paths": 2000, "time": {"steps": 60},
        "series": {"x": [{"ar": {"phi": 0.5, "sd": 1}}], "y": [{"use": "x"}, {"white_noise": {"sd": 1}}]},
    }  # fmt: skip
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 18)
    here = pg.render(raw, tmp_path / "here", workers=1)
    seen = []
    there = pg.render(
        raw, tmp_path / "there", scheduler="local", workers=2, progress=lambda done, rows: seen.append((done, rows))
    )
    assert there.digest == here.digest
    assert len(there.manifest.parts) > 1
    assert seen == sorted(seen)
    assert seen[-1] == (120_000, 120_000)
    one, two = pg.validate(here, workers=1), pg.validate(there, scheduler="local", workers=2)
    assert one.checks.equals(two.checks)
    assert two.agrees


def test_a_task_that_fails_is_a_sentence_and_render_goes_on_with_resume(machines, tmp_path, monkeypatch, digest):
    monkeypatch.setattr(plan, "PART_BYTES", MANY)
    bad = fake_spec(seed=5, paths=640, steps=60, bad=[600, 7, "nan"])
    with pytest.raises(EnsembleError, match=r"^series x: the value at path 600, step 7 is not a number: "):
        fake_render(bad, tmp_path / "out", scheduler=machines.address)
    assert not (tmp_path / "out" / "manifest.json").exists()


def test_a_render_that_is_killed_goes_on_with_resume(machines, tmp_path, digest):
    from tests.ensemble.fakes import start

    raw = {"seed": 5, "paths": 640, "steps": 60, "_pause": 0.15}
    process = start(raw, tmp_path / "out", part_bytes=MANY, scheduler=machines.address)
    wait_for("the first part", lambda: list((tmp_path / "out").glob("paths-*")))
    process.kill()
    process.communicate()
    assert not (tmp_path / "out" / "manifest.json").exists()
    assert fake_render(fake_spec(**raw), tmp_path / "out", scheduler=machines.address, resume=True).digest == digest
    assert not (tmp_path / "out" / ".state").exists()


def test_nobody_answers(tmp_path, monkeypatch):
    monkeypatch.setattr(cluster, "ANSWER", 1.0)
    with pytest.raises(EnsembleError, match=r"^no scheduler answers at tcp://127\.0\.0\.1:1 .*start one with `dask"):
        fake_render(SPEC, tmp_path / "out", scheduler="tcp://127.0.0.1:1")
    assert not (tmp_path / "out").exists()


def test_memory_and_tables_are_of_this_process(tmp_path):
    with pytest.raises(EnsembleError, match=r"^a cluster writes files; give out="):
        fake_render(SPEC, scheduler="local")
    with pytest.raises(ValueError, match=r"^a cluster reads the parts of an ensemble in a folder"):
        pg.validate(pg.render(str(ROOT / "specs" / "pump-flow.yaml"), paths=2), scheduler="local")


def asked(answers):
    client = SimpleNamespace(run=lambda question, *args: {"tcp://b:1": answers[question]}, close=lambda timeout: None)
    return cluster.Cluster(SimpleNamespace(Client=lambda *args, **kwargs: client), "tcp://a:1")


def test_workers_with_other_versions_or_another_disk_are_refused():
    other = {**cluster.versions(), "numpy": "1.0"}
    with pytest.raises(EnsembleError, match=r"^worker tcp://b:1 has numpy 1\.0, and this process has "):
        asked({cluster.versions: other}).check_versions()
    asked({cluster.versions: cluster.versions()}).check_versions()
    with pytest.raises(EnsembleError, match=r"^worker tcp://b:1 does not see /data/out; choose a folder that all"):
        asked({cluster._sees: False}).check_sees("/data/out")


def test_without_dask_the_extra_is_named(tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(EnsembleError, match=r"^working on a cluster needs dask and distributed, .* extra `cluster`"):
        fake_render(SPEC, tmp_path / "out", scheduler="local")


