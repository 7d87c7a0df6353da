"""However an ensemble is cut, and however many processes read it, the sums have the same bits; what dies is said."""

import json
import os
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from procgen.checks import source
from procgen.checks.gather import Gather
from procgen.checks.parts import _outmost, tasks
from procgen.checks.rectangles import grouped
from procgen.checks.validate import validate
from procgen.ensemble import plan as cuts
from procgen.ensemble import render
from procgen.ensemble.plan import Block
from procgen.ensemble.source import read_spec
from tests.waiting import wait_for

WIDE = {
    "procgen": 1,
    "seed": 3,
    "paths": 150,
    "time": {"steps": 140},
    "series": {
        "x": [{"trend": {"level": 2, "slope": 0.1}}, {"ar": {"phi": 0.6, "sd": 1}}, {"random_walk": {"sd": 0.2}}],
        "y": {"decimals": 3, "of": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.5}}]},
        "z": [{"ar": {"phi": 0.5, "sd": 1, "law": {"student_t": {"df": 9}}}}, {"white_noise": {"sd": 1}}],
        "w": [{"switching_noise": {"sd": {"a": 1, "b": 2}, "durations": {"a": 9, "b": 5}}}],
        "fixed": [{"seasonal": {"period": 24, "harmonics": [{"amplitude": 2, "peak": 3}]}}],
    },
    "correlation": [{"between": ["x.ar", "y.garch"], "value": 0.3}],
}
LONG = {
    "procgen": 1,
    "seed": 4,
    "paths": 18,
    "time": {"steps": 150_000},
    "series": {"x": {"type": "float32", "of": [{"ar": {"phi": [0.5, -0.2], "sd": 1}}, {"white_noise": {"sd": 1}}]}},
}


def cut(raw, folder, monkeypatch, part_bytes, first_path=0):
    """The ensemble of a spec in parts of about so many bytes."""
    with monkeypatch.context() as patched:
        patched.setattr(cuts, "PART_BYTES", part_bytes)
        return render(read_spec(raw), folder, first_path=first_path, workers=1)


def gathered(ensemble, workers=1):
    origin = source.origin(ensemble, None, None)
    gather = origin.gathered(workers, None)
    assert [check.outcome for check in origin.faults] == ["agrees", "agrees"]
    return gather


def same_bits(one, other):
    (facts, arrays), (others, more) = one.state(), other.state()
    assert facts.pop("shocks") == others.pop("shocks")
    assert facts == others
    for name in ("kept", "numbers", "counts", "prints"):
        np.testing.assert_array_equal(arrays[name], more[name])


@pytest.mark.parametrize("first_path", [0, 37])
def test_cuts_between_paths_and_processes_do_not_show_in_a_bit(tmp_path, monkeypatch, first_path):
    whole = cut(WIDE, tmp_path / "whole", monkeypatch, 1 << 30, first_path)
    parts = cut(WIDE, tmp_path / "parts", monkeypatch, 200_000, first_path)
    assert (len(whole.manifest.parts), len(parts.manifest.parts)) == (1, 10)
    reference = gathered(whole)
    assert reference.paths == 150
    same_bits(reference, gathered(parts))
    same_bits(reference, gathered(parts, workers=2))
    memory = source.origin(parts.paths(first_path, first_path + 150), None, None)
    same_bits(reference, memory.gathered(None, None))


def test_cuts_along_the_steps_carry_what_the_shocks_need(tmp_path, monkeypatch):
    whole = cut(LONG, tmp_path / "whole", monkeypatch, 1 << 30)
    parts = cut(LONG, tmp_path / "parts", monkeypatch, 1 << 20)
    chains = {(part.block.first_path, part.block.first_step) for part in parts.manifest.parts}
    assert len(whole.manifest.parts) == 1
    assert chains == {(path, step) for path in (0, 16) for step in (0, 65_536, 131_072)}
    same_bits(gathered(whole), gathered(parts, workers=2))
    same_bits(gathered(whole), gathered(parts, workers=4))  # two threads for each of two tasks: one reads ahead


@pytest.mark.parametrize("paths", [1, 5])
def test_reading_ahead_shows_in_no_bit_and_damage_is_told(tmp_path, monkeypatch, paths):
    long = cut(LONG | {"paths": paths}, tmp_path / "long", monkeypatch, 1 << 20)
    for _ in range(3):  # threads may meet in other ways
        same_bits(gathered(long, workers=1), gathered(long, workers=2))
    last = sorted((tmp_path / "long").glob("*.parquet"))[-1]
    last.write_bytes(last.read_bytes()[:-9])
    origin = source.origin(long, None, None)
    origin.gathered(2, None)
    assert [check.outcome for check in origin.faults] == ["departs", "departs"]


def test_sums_are_plain_numbers_that_make_the_same_sums(tmp_path, monkeypatch):
    gather = gathered(cut(WIDE, tmp_path / "out", monkeypatch, 1 << 30))
    facts, arrays = gather.state()
    again = Gather(gather.plan).restore(json.loads(json.dumps(facts)), {k: v.copy() for k, v in arrays.items()})
    same_bits(gather, again)
    again.merge(Gather(gather.plan))  # nothing
    same_bits(gather, again)


def test_blocks_become_whole_lane_groups():
    # Paths 5 to 40 of 10 steps, in row groups of 33 rows: rests of paths, whole ones, beginnings.
    x = np.arange(36 * 10.0).reshape(36, 10)
    rows = [(row // 10, row % 10) for row in range(360)]
    pieces = []
    for start in range(0, 360, 33):
        chunk = rows[start : start + 33]
        for path in dict.fromkeys(p for p, _ in chunk):
            steps = [s for p, s in chunk if p == path]
            pieces.append((5 + path, steps[0], {"x": x[path : path + 1, steps[0] : steps[-1] + 1]}))
    found = list(grouped(pieces, Block(5, 36, 0, 10)))
    assert [(first, len(values["x"])) for first, _, values in found] == [(5, 11), (16, 16), (32, 9)]
    np.testing.assert_array_equal(np.concatenate([values["x"] for _, _, values in found]), x)
    # What is whole is handed on as it is, up to the last whole lane group.
    found = list(grouped([(5, 0, {"x": x[:30]}), (35, 0, {"x": x[30:]})], Block(5, 36, 0, 10)))
    assert [(first, len(values["x"])) for first, _, values in found] == [(5, 27), (32, 9)]


def test_a_number_of_workers_must_be_one(tmp_path):
    ensemble = render(read_spec(WIDE), paths=2)
    with pytest.raises(ValueError, match="expected workers to be a whole number of at least 1, got 0"):
        validate(ensemble, workers=0)


SLOWLY = """
import time
from procgen import cli
from procgen.checks import parts
gather = parts.gather_chain
def slowly(task, tick):
    time.sleep(0.5)
    return gather(task, tick)
parts.gather_chain = slowly
cli.main()
"""


def started(out):
    """A validation by two processes, forked and in no hurry, and the number of its worker process."""
    process = subprocess.Popen(
        [sys.executable, "-c", SLOWLY, "validate", str(out), "--workers", "2"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    children = Path(f"/proc/{process.pid}/task/{process.pid}/children")
    return process, int(wait_for("a worker process", lambda: children.read_text(encoding="ascii").split())[0])


@pytest.fixture(scope="module")
def parts(tmp_path_factory):
    out = tmp_path_factory.mktemp("parts") / "out"
    cut(WIDE, out, pytest.MonkeyPatch(), 200_000)
    return out


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="reads /proc")
def test_a_worker_that_is_killed_is_said(parts):
    process, worker = started(parts)
    os.kill(worker, signal.SIGKILL)
    out, err = process.communicate(timeout=60)
    assert (process.returncode, out) == (2, "")
    said = "procgen: a worker process died (killed by signal 9); signal 9 is often a lack of memory: "
    assert err == said + "use fewer workers (--workers, workers=)\n"


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="reads /proc")
def test_ctrl_c_leaves_no_process(parts):
    process, worker = started(parts)
    os.killpg(process.pid, signal.SIGINT)
    _, err = process.communicate(timeout=60)
    assert (process.returncode, err) == (130, "procgen: stopped\n")
    assert not os.path.exists(f"/proc/{worker}")


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="reads /proc")
def test_a_worker_does_not_outlive_the_process_that_started_it(parts):
    process, worker = started(parts)
    process.kill()
    process.communicate()
    wait_for("the end of the worker", lambda: not os.path.exists(f"/proc/{worker}"))


def test_a_tick_for_every_row_of_all_workers(parts):
    ticks = []
    validate(parts, workers=2, progress=lambda done, rows: ticks.append((done, rows)))
    assert ticks[-1] == (150 * 140, 150 * 140)
    assert ticks == sorted(ticks)


def test_a_run_over_the_data_knows_nothing_of_what_another_saw(tmp_path, monkeypatch):
    """Values may have been mended since: those farthest out are those of this run."""
    ensemble = cut(WIDE, tmp_path / "out", monkeypatch, 200_000)
    columns = {name: name for name in ensemble.names}
    one, other = (tasks(ensemble, read_spec(WIDE), columns, True) for _ in range(2))
    assert len({task["run"] for task in one}) == 1 and one[0]["run"] != other[0]["run"]
    kept = _outmost(one[0]["run"])
    assert _outmost(one[0]["run"]) is kept
    assert _outmost(other[0]["run"]) is not kept
