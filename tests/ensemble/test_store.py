"""Nothing half-written looks whole: kills, full disks, locks, other people's files."""

import contextlib
import json
import os
import random
import shutil
import signal
import subprocess
import time

import numpy as np
import pandas as pd
import pytest

from procgen.ensemble import EnsembleError, check_digest, open_ensemble, plan
from procgen.ensemble.parquet import footer
from procgen.ensemble.plan import STEPS
from procgen.ensemble.store import PART
from tests.ensemble.fakes import fake_check, fake_render, fake_spec, start, visible
from tests.waiting import wait_for

WIDE = {"seed": 3, "paths": 3000, "steps": 40, "columns": {"x": {}, "y": {"decimals": 1}}}
LONG = {"seed": 3, "paths": 20, "steps": 3 * STEPS + 7, "columns": {"x": {}}}
PARTS = {"part_bytes": 1 << 19}
STEP_PARTS = {"part_bytes": 1 << 21}


@pytest.mark.parametrize(
    "spec,layout,workers,claimed",
    [(WIDE, PARTS, 1, False), (WIDE, PARTS, 2, False), (WIDE, PARTS, 3, True), (LONG, STEP_PARTS, 1, False)],
    ids=["1", "2", "forked", "steps"],
)
def test_killed_at_any_moment_then_resumed_gives_the_same_digest(tmp_path, spec, layout, workers, claimed):
    moments = random.Random(spec["paths"] + workers)
    for _ in range(4):
        render = start(spec, tmp_path, **layout, claimed=claimed, workers=workers, resume=True)
        render.stdout.readline()
        time.sleep(moments.uniform(0, 0.2))
        render.kill()
        render.communicate()
        for name in visible(tmp_path):
            if PART.fullmatch(name):
                footer(tmp_path / name)  # whole, or this raises
    ens = fake_render(fake_spec(**spec), tmp_path, resume=True, workers=1)
    assert ens.digest == fake_render(fake_spec(**spec)).digest
    assert fake_check(tmp_path).ok
    assert not (tmp_path / ".state").exists()


@pytest.mark.parametrize("claimed", [False, True], ids=["programs", "forked"])
@pytest.mark.parametrize("signum", [signal.SIGINT, signal.SIGTERM])
def test_ctrl_c_and_termination_leave_whole_parts_and_no_process(tmp_path, signum, claimed):
    # so slow that a busy machine cannot finish it between a line that is read and the signal
    render = start(WIDE | {"_pause": 3.0}, tmp_path, **PARTS, claimed=claimed, workers=2)
    for _ in range(2):
        render.stdout.readline()
    os.killpg(render.pid, signum)
    _, errors = render.communicate(timeout=60)
    assert render.returncode != 0
    assert "worker.py" not in errors
    assert "manifest.json" not in visible(tmp_path)
    if signum == signal.SIGINT:
        assert not list((tmp_path / ".state").glob("*.tmp"))
    again = fake_render(fake_spec(**WIDE), tmp_path, resume=True)
    assert again.digest == fake_render(fake_spec(**WIDE)).digest


@pytest.mark.parametrize("claimed", [False, True], ids=["programs", "forked"])
def test_a_second_render_into_one_folder_is_refused_until_the_first_is_dead(tmp_path, claimed):
    first = start(WIDE | {"_pause": 9.0}, tmp_path, **PARTS, claimed=claimed, workers=2)
    wait_for("the plan of the first render", (tmp_path / ".state" / "plan.json").exists)
    with pytest.raises(EnsembleError, match=f"another render is at work in .* \\(process {first.pid}\\)"):
        fake_render(fake_spec(**WIDE), tmp_path, overwrite=True)
    first.kill()
    first.communicate()
    fake_render(fake_spec(**WIDE), tmp_path, overwrite=True)


def test_a_worker_that_dies_is_reported_and_the_rest_is_kept(tmp_path, monkeypatch):
    monkeypatch.setattr(plan, "PART_BYTES", PARTS["part_bytes"])
    spec = fake_spec(**WIDE, _die_at=0, _until=str(tmp_path / "dead"))
    with pytest.raises(EnsembleError, match=r"a worker process died \(exit code 7\).*--resume"):
        fake_render(spec, tmp_path / "out", workers=2)
    assert fake_render(spec, tmp_path / "out", workers=1, resume=True).digest == fake_render(spec).digest


@contextlib.contextmanager
def small_disk(path, size):
    """A file system of `size` bytes at `path`; skips where mounting is not allowed."""
    path.mkdir()
    made = subprocess.run(["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(path)], capture_output=True)
    if made.returncode:
        pytest.skip("needs the right to mount a small file system")
    try:
        yield path
    finally:
        subprocess.run(["umount", "-l", str(path)], check=True)


def test_a_full_disk_is_said_and_the_render_goes_on_when_there_is_room(tmp_path, monkeypatch):
    monkeypatch.setattr(plan, "PART_BYTES", PARTS["part_bytes"])
    spec = fake_spec(**WIDE)
    real = shutil.disk_usage
    with small_disk(tmp_path / "disk", 3 << 19) as disk:
        with pytest.raises(EnsembleError, match=r"take about 1.92 MB, and .* has 1.5\d MB free"):
            fake_render(spec, disk)
        monkeypatch.setattr(shutil, "disk_usage", lambda path: real("/"))
        with pytest.raises(EnsembleError, match=r"no space left while writing .*parquet; free some space"):
            fake_render(spec, disk)
        kept = len(visible(disk))
        assert not list((disk / ".state").glob("*.tmp"))
        subprocess.run(["mount", "-o", "remount,size=8m", str(disk)], check=True)
        whole = fake_render(spec, disk, resume=True)
        assert whole.digest == fake_render(spec).digest
        assert 0 < kept < len(whole.manifest.parts)


def test_a_write_that_the_system_refuses_leaves_no_file(tmp_path):
    """The same as a full disk, where nothing can be mounted: a limit on the size of files."""
    render = start(WIDE, tmp_path, **PARTS, file_limit=200_000, workers=1)
    _, errors = render.communicate(timeout=20)
    assert "refused: a file grew above the limit" in errors and "Traceback" not in errors
    assert visible(tmp_path) == []
    assert not list((tmp_path / ".state").glob("*.tmp"))


def test_a_read_only_folder_serves_what_is_complete_and_refuses_the_rest(tmp_path):
    spec = fake_spec(paths=20, steps=5)
    with small_disk(tmp_path / "disk", 1 << 20) as disk:
        made = fake_render(spec, disk)
        subprocess.run(["mount", "-o", "remount,ro", str(disk)], check=True)
        assert fake_render(spec, disk).digest == made.digest
        assert fake_check(disk).ok
        with pytest.raises(EnsembleError, match="no permission for making"):
            fake_render(spec, disk, overwrite=True)


def test_a_complete_ensemble_asked_for_again_is_not_drawn_again(tmp_path):
    spec = fake_spec(paths=20, steps=5)
    fake_render(spec, tmp_path)
    before = [(path, path.stat().st_mtime_ns) for path in sorted(tmp_path.iterdir())]
    fake_render(spec, tmp_path)
    fake_render(spec, tmp_path, resume=True)
    assert before == [(path, path.stat().st_mtime_ns) for path in sorted(tmp_path.iterdir())]


def test_an_ensemble_of_another_kind_is_refused_unless_overwritten(tmp_path):
    fake_render(fake_spec(paths=20, steps=5), tmp_path)
    for change, word in [({"seed": 2}, "seed 1 there, 2 asked"), ({"steps": 6}, "steps 5 there, 6 asked")]:
        for resume in (False, True):
            with pytest.raises(EnsembleError, match=f"another kind \\({word}\\); choose another OUT"):
                fake_render(fake_spec(paths=20, steps=5), tmp_path, **change, resume=resume)
    with pytest.raises(EnsembleError, match=r"first_path 0 there, 16 asked"):
        fake_render(fake_spec(paths=20, steps=5), tmp_path, first_path=16)
    other = fake_render(fake_spec(paths=30, steps=5), tmp_path, overwrite=True)
    assert visible(tmp_path) == ["manifest.json", other.manifest.parts[0].file]


def test_an_unfinished_ensemble_is_said_to_be_one(tmp_path):
    render = start(WIDE | {"_pause": 0.1}, tmp_path, **PARTS, workers=1)
    render.stdout.readline()
    render.kill()
    render.communicate()
    with pytest.raises(EnsembleError, match="unfinished ensemble; go on with: procgen render SPEC"):
        open_ensemble(tmp_path)
    with pytest.raises(EnsembleError, match="unfinished render of this spec; go on with --resume"):
        fake_render(fake_spec(**WIDE), tmp_path)
    with pytest.raises(EnsembleError, match="another kind"):
        fake_render(fake_spec(**WIDE), tmp_path, seed=4, resume=True)


def test_files_of_others_are_never_touched(tmp_path):
    spec = fake_spec(paths=20, steps=5)
    (tmp_path / "notes").mkdir()
    foreign = {tmp_path / "README.md", tmp_path / "notes" / "paths.parquet", tmp_path / "paths-1-2.parquet"}
    for path in foreign:
        path.write_text("mine")
    fake_render(spec, tmp_path)
    fake_render(spec, tmp_path, seed=2, overwrite=True)
    mine = tmp_path / "paths-000000000-000000029.parquet"
    mine.write_text("mine")
    with pytest.raises(EnsembleError, match=r"paths-000000000-000000029.parquet .* not ours: move it away"):
        fake_render(spec, tmp_path, paths=30, overwrite=True)
    assert all(path.read_text() == "mine" for path in [*foreign, mine])


def test_parts_of_an_older_ensemble_are_not_left_among_new_ones(tmp_path):
    old = fake_render(fake_spec(paths=40, steps=5), tmp_path)
    (tmp_path / "manifest.json").unlink()
    (part,) = (tmp_path / one.file for one in old.manifest.parts)
    written, fewer = part.read_bytes(), fake_spec(paths=4, steps=5)
    for resume in (False, True):
        with pytest.raises(EnsembleError, match=f"holds {part.name}, of another ensemble, .* another OUT, .*overwrite"):
            fake_render(fewer, tmp_path, resume=resume)
        assert visible(tmp_path) == [part.name] and part.read_bytes() == written and not (tmp_path / ".state").exists()
    made = fake_render(fewer, tmp_path, overwrite=True)
    assert visible(tmp_path) == ["manifest.json", made.manifest.parts[0].file]


def test_a_parquet_file_of_others_is_told_before_anything_is_drawn_or_removed(tmp_path):
    spec, mine = fake_spec(paths=20, steps=5), tmp_path / "measured.parquet"
    made = fake_render(spec, tmp_path)
    pd.DataFrame({"x": [1.0, 2.0]}).to_parquet(mine)
    written = mine.read_bytes()
    assert fake_render(spec, tmp_path).digest == made.digest  # nothing is drawn
    with pytest.raises(EnsembleError, match=r"holds measured.parquet, not ours, .*; choose another OUT, or move away"):
        fake_render(spec, tmp_path, seed=2, overwrite=True)
    assert fake_check(tmp_path).ok and mine.read_bytes() == written
    (tmp_path / "manifest.json").unlink()
    (tmp_path / made.manifest.parts[0].file).unlink()
    with pytest.raises(EnsembleError, match=r"holds measured\.parquet, not ours"):
        fake_render(spec, tmp_path)
    assert visible(tmp_path) == ["measured.parquet"] and mine.read_bytes() == written


def test_a_manifest_of_others_is_not_removed(tmp_path):
    for text in ('{"name": "app"}', "[]", "not json"):
        (tmp_path / "manifest.json").write_text(text)
        for overwrite in (False, True):
            with pytest.raises(EnsembleError, match=r"manifest.json .*another OUT, or, .* remove it and"):
                fake_render(fake_spec(paths=20, steps=5), tmp_path, overwrite=overwrite)
        assert (tmp_path / "manifest.json").read_text() == text


def test_out_that_is_a_file_is_refused(tmp_path):
    (tmp_path / "out").write_text("mine")
    with pytest.raises(EnsembleError, match="out is not a folder; choose another OUT"):
        fake_render(fake_spec(paths=20, steps=5), tmp_path / "out")
    for out in ("out", "out/below"):
        with pytest.raises(EnsembleError, match="out is not a folder; choose another OUT"):
            fake_render(fake_spec(paths=20, steps=5), tmp_path / out, overwrite=True)
    for reads in (open_ensemble, check_digest):
        with pytest.raises(EnsembleError, match="out is a file; expected the folder of an ensemble"):
            reads(tmp_path / "out")
    assert (tmp_path / "out").read_text() == "mine"


def test_a_missing_part_is_named_and_drawn_again(tmp_path, monkeypatch):
    monkeypatch.setattr(plan, "PART_BYTES", PARTS["part_bytes"])
    made = fake_render(fake_spec(**WIDE), tmp_path)
    (tmp_path / made.manifest.parts[2].file).unlink()
    with pytest.raises(EnsembleError, match=f"{made.manifest.parts[2].file}: the part is missing; draw it again"):
        fake_render(fake_spec(**WIDE), tmp_path)
    with pytest.raises(EnsembleError, match="is missing"):
        open_ensemble(tmp_path)
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 26)
    again = fake_render(fake_spec(**WIDE), tmp_path, resume=True)
    assert again.manifest.json() == made.manifest.json()


def test_a_missing_part_in_the_middle_of_a_chain_is_drawn_again(tmp_path, monkeypatch):
    monkeypatch.setattr(plan, "PART_BYTES", STEP_PARTS["part_bytes"])
    made = fake_render(fake_spec(**LONG), tmp_path)
    (tmp_path / made.manifest.parts[2].file).unlink()
    again = fake_render(fake_spec(**LONG), tmp_path, resume=True)
    assert again.digest == made.digest
    assert np.array_equal(again["x"], made["x"])


def test_what_a_kill_after_the_manifest_leaves_is_tidied_up(tmp_path):
    spec = fake_spec(paths=20, steps=5)
    fake_render(spec, tmp_path)
    (tmp_path / ".state").mkdir()
    for name in ("plan.json", "x.npz", "x.1.tmp", "lock"):
        (tmp_path / ".state" / name).write_text("{}")
    fake_render(spec, tmp_path)
    assert not (tmp_path / ".state").exists()


def test_a_state_folder_that_leads_elsewhere_or_holds_files_of_others_is_left_alone(tmp_path):
    spec, elsewhere, out = fake_spec(paths=20, steps=5), tmp_path / "elsewhere", tmp_path / "out"
    for folder in (elsewhere, out):
        folder.mkdir()
    (elsewhere / "plan.json").write_text("mine")
    (out / ".state").symlink_to(elsewhere)
    with pytest.raises(EnsembleError, match=r"\.state is a link to another place"):
        fake_render(spec, out, overwrite=True)
    assert (elsewhere / "plan.json").read_text() == "mine"
    (out / ".state").unlink()
    (out / ".state").mkdir()
    (out / ".state" / "notes").write_text("mine")
    fake_render(spec, out)
    assert (out / ".state" / "notes").read_text() == "mine"


def test_a_damaged_plan_is_said_and_can_be_overwritten(tmp_path):
    spec = fake_spec(paths=20, steps=5)
    made = fake_render(spec, tmp_path)
    (tmp_path / "manifest.json").unlink()
    (tmp_path / ".state").mkdir()
    for parts in ([], [[0, 20, 0, 4]], "x", [["a"]]):
        plan_text = json.dumps({"identity": made.manifest.identity, "files": [], "parts": parts})
        (tmp_path / ".state" / "plan.json").write_text(plan_text)
        with pytest.raises(EnsembleError, match=r"plan.json is damaged; begin again with --overwrite"):
            fake_render(spec, tmp_path, resume=True)
    assert fake_render(spec, tmp_path, overwrite=True).digest == made.digest


@pytest.mark.parametrize("there", [False, True])
def test_a_render_that_can_never_succeed_leaves_nothing(tmp_path, monkeypatch, there):
    out = tmp_path / "a" / "b"
    keep = fake_spec(paths=20, steps=5, bad=[7, 3, "inf"])
    if there:
        out.mkdir(parents=True)
        (out / "notes").write_text("mine")
    with pytest.raises(EnsembleError, match="path 7, step 3 is inf"):
        fake_render(keep, out)
    monkeypatch.setattr(shutil, "disk_usage", lambda path: type("usage", (), {"free": 10}))
    with pytest.raises(EnsembleError, match="has 10 B free"):
        fake_render(fake_spec(paths=20, steps=5), out)
    assert [path.name for path in tmp_path.rglob("*")] == (["a", "b", "notes"] if there else [])
    with pytest.raises(EnsembleError, match="has no manifest.json; exp" if there else f"there is no folder {out}; exp"):
        open_ensemble(out)


def test_an_ensemble_is_not_removed_for_one_that_is_too_large(tmp_path, monkeypatch):
    made = fake_render(fake_spec(paths=20, steps=5), tmp_path)
    monkeypatch.setattr(shutil, "disk_usage", lambda path: type("usage", (), {"free": 10}))
    with pytest.raises(EnsembleError, match="has 10 B free"):
        fake_render(fake_spec(paths=2000, steps=5), tmp_path, overwrite=True)
    assert open_ensemble(tmp_path).digest == made.digest


def rewrite(path, change):
    """A part written again by another program: another size, no word of ours in its metadata."""
    frame = pd.read_parquet(path)
    change(frame)
    frame.to_parquet(path, compression="gzip")


def test_a_part_of_another_size_with_the_same_values_is_whole(tmp_path):
    spec = fake_spec(paths=20, steps=5)
    made = fake_render(spec, tmp_path)
    path = tmp_path / made.manifest.parts[0].file
    rewrite(path, lambda frame: None)
    assert path.stat().st_size != made.manifest.parts[0].bytes
    written = path.read_bytes()
    for how in ({}, {"resume": True}):
        assert fake_render(spec, tmp_path, **how).digest == made.digest
    assert path.read_bytes() == written
    assert np.array_equal(open_ensemble_of_fakes(tmp_path)["x"], made["x"])
    assert fake_check(tmp_path, redraw=True).ok


def test_a_part_of_another_size_with_another_value_is_drawn_again(tmp_path):
    spec = fake_spec(paths=20, steps=5)
    made = fake_render(spec, tmp_path)
    path = tmp_path / made.manifest.parts[0].file

    def change(frame):
        frame.loc[37, "x"] += 0.25

    rewrite(path, change)
    with pytest.raises(EnsembleError, match=r"other values than the manifest says.*; draw it again with --resume"):
        fake_render(spec, tmp_path)
    found = fake_check(tmp_path, redraw=True)
    assert "render again with --resume" in found.text() and "--overwrite" not in found.text()
    assert (found.difference.series, found.difference.path, found.difference.step) == ("x", 7, 2)
    again = fake_render(spec, tmp_path, resume=True)
    assert again.digest == made.digest
    assert fake_check(tmp_path).ok


@pytest.mark.parametrize("damage", [lambda data: data[:300], lambda data: b"", lambda data: flipped(data)])
def test_resume_draws_a_damaged_part_again_whatever_its_size(tmp_path, damage):
    spec = fake_spec(paths=20, steps=5)
    made = fake_render(spec, tmp_path)
    path = tmp_path / made.manifest.parts[0].file
    whole = path.read_bytes()
    path.write_bytes(damage(whole))
    assert "--resume" in fake_check(tmp_path).text() and not fake_check(tmp_path).ok
    fake_render(spec, tmp_path, resume=True)
    assert path.read_bytes() == whole


def flipped(data):
    """The file with one bit of its last value changed, and its size as it was."""
    place = data.index(fake_render(fake_spec(paths=20, steps=5))["x"][-1, -1].tobytes())
    return data[:place] + bytes([data[place] ^ 1]) + data[place + 1 :]


def open_ensemble_of_fakes(path):
    """The finished ensemble in `path`; the spec of a fake is read by its own factory."""
    return fake_render(fake_spec(paths=20, steps=5), path)
