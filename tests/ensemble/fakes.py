"""A source of values for the tests of files, engines and digests: a random walk addressed by path.

Its draws are NumPy's Philox with the path as key, so any part can be drawn alone; it knows nothing of specs.
"""

from __future__ import annotations

import hashlib
import json
import os
import subprocess
import sys
import time
from pathlib import Path
from types import SimpleNamespace

import numpy as np

from procgen.ensemble import check_digest, plan, render
from procgen.ensemble.columns import Column
from tests.waiting import wait_for

FACTORY = "tests.ensemble.fakes:fake_source"


class FakeSpec:
    """What `render` asks of a Spec."""

    def __init__(self, raw):
        self.raw = {"seed": 1, "columns": {"x": {}}, **raw}
        self.seed, self.paths = self.raw["seed"], self.raw["paths"]
        self.time = SimpleNamespace(steps=self.raw["steps"], start=None)

    def canonical(self):
        return {key: value for key, value in self.raw.items() if not key.startswith("_")}

    def digest(self):
        return hashlib.sha256(json.dumps(self.canonical(), sort_keys=True).encode()).hexdigest()

    def changed(self, **changes):
        return FakeSpec({**self.raw, **{k: v for k, v in changes.items() if v is not None}})


class FakeSource:
    def __init__(self, raw):
        self.raw = raw
        self.spec = FakeSpec(raw)
        self.columns = [Column(name, **rest) for name, rest in raw["columns"].items()]
        self.stamps = None
        self.portable = (True, "")
        self.depth = 0

    def run(self, first_path, paths):
        return FakeRun(self.raw, first_path, paths)


class FakeRun:
    """Column k of path p: the running sum of Philox normals with key (seed, p), counter block k."""

    def __init__(self, raw, first_path, paths):
        self.raw, self.first_path, self.paths, self.step = raw, first_path, paths, 0
        self.level = {name: np.zeros(paths) for name in raw["columns"]}

    def tile(self, steps):
        if "_pause" in self.raw:
            time.sleep(self.raw["_pause"])
        late, path = self.raw.get("_halt_from"), self.first_path
        if late is not None and path >= late:
            time.sleep(60)  # to be killed meanwhile
        if self.raw.get("_die_at", -1) == self.step:
            dead = Path(self.raw["_until"])
            if "procgen.ensemble.worker" in sys.modules:
                dead.touch()
                os._exit(7)
            wait_for("the death of a worker", dead.exists)
        out = {}
        for k, name in enumerate(self.raw["columns"]):
            values = np.empty((steps, self.paths))
            for j in range(self.paths):
                key = (self.raw["seed"] << 64) + self.first_path + j
                bits = np.random.Philox(key=key, counter=[0, k, 0, 0])
                bits.advance(self.step // 4)
                words = bits.random_raw(self.step % 4 + steps)[self.step % 4 :]
                values[:, j] = (words >> 12) * 2.0**-52 - 0.5
            values[0] += self.level[name]
            out[name] = np.cumsum(values, axis=0)
            self.level[name] = out[name][-1].copy()
            if "bad" in self.raw and self.raw["bad"][1] - self.step in range(steps):
                path, step, value = self.raw["bad"]
                if path - self.first_path in range(self.paths):
                    out[name][step - self.step, path - self.first_path] = float(value)
        self.step += steps
        return out

    def state(self):
        return dict(self.level)

    def restore(self, step, state):
        self.step, self.level = step, {name: values.copy() for name, values in state.items()}


def fake_source(raw, reveal=()):
    return FakeSource(raw)


def fake_spec(**raw):
    return FakeSpec(raw)


def fake_render(spec, out=None, **how):
    return render(spec, out, factory=FACTORY, **how)


def fake_check(path, **how):
    return check_digest(path, factory=FACTORY, **how)


ROOT = Path(__file__).resolve().parents[2]
SCRIPT = """
import json, os, sys
os.environ["JE_ARROW_MALLOC_CONF"] = "background_thread:false"
from procgen.ensemble import own, plan
from procgen.ensemble.errors import EnsembleError
from tests.ensemble.fakes import fake_render, fake_spec
job = json.loads(sys.argv[1])
plan.PART_BYTES = job.get("part_bytes", plan.PART_BYTES)
if job["claimed"]:
    own.claim()  # so that workers are forked where they can be
if "file_limit" in job:
    import resource, signal
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (job["file_limit"],) * 2)
def progress(done, rows):
    print("drawing", flush=True)
try:
    print(fake_render(fake_spec(**job["spec"]), job["out"], progress=progress, **job["how"]).digest)
except EnsembleError as error:
    sys.exit(f"refused: {error}")
"""


def start(spec, out, part_bytes=plan.PART_BYTES, file_limit=None, claimed=False, **how):
    """A render in a process of its own, as soon as it is drawing."""
    job = {"spec": spec, "out": str(out), "part_bytes": part_bytes, "claimed": claimed, "how": how}
    job |= {} if file_limit is None else {"file_limit": file_limit}
    command = [sys.executable, "-c", SCRIPT, json.dumps(job)]
    pipe = subprocess.PIPE
    return subprocess.Popen(command, cwd=ROOT, stdout=pipe, stderr=pipe, text=True, start_new_session=True)


def visible(out):
    """What a reader sees in OUT."""
    return sorted(path.name for path in Path(out).iterdir() if path.name != ".state")
