"""What the system does to a render, seen from the command line: one sentence, no process left, and --resume goes on.

Kills, full disks, read-only disks, locks and missing parts are in `test_store.py`; the two studies are here in small.
"""

import errno
import json
import os
import shutil
import signal
import subprocess
import sys
import time

import pytest

import procgen as pg
from procgen.ensemble import EnsembleError, check_digest
from tests.studies import damage, faults

linux = pytest.mark.skipif(not sys.platform.startswith("linux"), reason="reads /proc, sets limits as Linux has them")
SMALL = {"procgen": 1, "seed": 3, "paths": 40, "time": {"steps": 50}, "series": {"x": {"ar": {"phi": 0.7, "sd": 1}}}}
LIMIT = "import resource; resource.setrlimit(resource.RLIMIT_NOFILE, ({files}, {files}))"
RESUME = "then go on with --resume"


def command(code, *arguments, before=()):
    """A command line that first runs `code`; (exit code, what it says)."""
    script = f"{code}\nfrom procgen import cli\ncli.main()"
    call = [*before, sys.executable, "-c", script, *map(str, arguments)]
    done = subprocess.run(call, cwd=faults.ROOT, capture_output=True, text=True, timeout=120)
    assert "Traceback" not in done.stderr
    return done.returncode, done.stderr


def written(folder, spec):
    path = folder / "spec.yaml"
    path.write_text(json.dumps(spec))
    return path


@linux
@pytest.mark.parametrize("what", [signal.SIGINT, signal.SIGTERM])
def test_a_render_that_is_struck_says_so_leaves_no_process_and_goes_on(tmp_path, what):
    spec, out = written(tmp_path, faults.SPEC), tmp_path / "out"
    script = (
        f"from procgen import cli\nfrom procgen.ensemble import plan\nplan.PART_BYTES = {faults.PART_BYTES}\ncli.main()"
    )
    call = [sys.executable, "-c", script, "render", str(spec), "-o", str(out), "--workers", "2"]
    pipe = subprocess.PIPE
    process = subprocess.Popen(call, cwd=faults.ROOT, stdout=pipe, stderr=pipe, text=True, start_new_session=True)
    assert faults.struck(process, out, 0.0, what, False) == "render"  # it looks for what is said, and for processes
    assert command("", "render", spec, "-o", out, "--resume")[0] == 0
    faults.in_order(out, pg.render(faults.SPEC).digest)


def test_every_byte_of_a_part_that_is_damaged_is_told_or_does_no_harm(tmp_path):
    victim = damage.Victim(tmp_path / "out")
    found = {damage.suffer(victim, done, data, validate=False) for done, data in victim.damages(range(1), every=31)}
    found |= {damage.suffer(victim, done, data) for done, data in victim.damages(range(1), every=401)}
    assert found == {"told, named, and mended by --resume", "no value is another one"}


@pytest.fixture
def bound():
    """What a command is begun with, so that permissions bind it: root without the right to overrule them."""
    if os.name != "posix":
        pytest.skip("permissions of this kind are POSIX's")
    if os.geteuid() != 0:
        return []
    if not shutil.which("setpriv"):
        pytest.skip("permissions do not bind root, and there is no setpriv")
    return ["setpriv", "--bounding-set=-dac_override,-dac_read_search"]


def test_permissions_that_are_lost_half_way(tmp_path, bound):
    spec, out = written(tmp_path, SMALL), tmp_path / "out"
    lose = f"""
import os
from procgen.ensemble import plan, store
plan.PART_BYTES = 1 << 12
put = os.replace
def replace(source, target):
    put(source, target)
    if str(target).endswith(".parquet"):
        os.chmod({str(out)!r}, 0o555)
store.os.replace = replace
"""
    code, said = command(lose, "render", spec, "-o", out, before=bound)
    assert code == 2 and "procgen: no permission for writing" in said, said
    assert f"mend the permissions, {RESUME}" in said
    kept = sorted(out.glob("*.parquet"))
    assert len(kept) == 1 and not list((out / ".state").glob("*.tmp"))
    out.chmod(0o755)
    assert command("", "render", spec, "-o", out, "--resume", before=bound)[0] == 0
    assert check_digest(out).digest == pg.render(SMALL).digest


@pytest.mark.parametrize("mode", [0o000, 0o444, 0o555])
def test_a_folder_that_may_not_be_written(tmp_path, bound, mode):
    out = tmp_path / "out"
    out.mkdir()
    out.chmod(mode)
    tries = f"""
import procgen as pg
from procgen.ensemble import EnsembleError
for out in ({str(out)!r}, {str(out / "below")!r}):
    for how in ({{}}, {{"resume": True}}, {{"overwrite": True}}):
        try:
            pg.render({SMALL}, out, **how)
        except EnsembleError as error:
            print(error)
"""
    done = subprocess.run([*bound, sys.executable, "-c", tries], cwd=faults.ROOT, capture_output=True, text=True)
    out.chmod(0o755)
    assert done.returncode == 0, done.stderr
    said = done.stdout.splitlines()
    assert len(said) == 6 and list(out.iterdir()) == []
    for line in said:
        assert line.startswith("no permission for ") and str(out) in line
        assert f"mend the permissions, {RESUME} (resume=True), or choose another OUT" in line


@pytest.mark.skipif(os.name != "posix", reason="closes streams as POSIX shells do")
@pytest.mark.parametrize("closed", ["<&-", ">&-", "2>&-", "<&- >&- 2>&-"])
def test_streams_that_are_closed_are_not_missed(tmp_path, closed):
    """Commands in cron and daemons have such; without one, procgen spoke of a fault of its own."""
    spec, out = written(tmp_path, faults.SPEC | {"paths": 2}), tmp_path / "out"
    for arguments in (["render", spec, "-o", out, "--workers", "2"], ["digest", out], ["validate", out]):
        call = ["sh", "-c", f'exec "$@" {closed}', "sh", sys.executable, "-m", "procgen", *map(str, arguments)]
        done = subprocess.run(call, cwd=faults.ROOT, capture_output=True, text=True, timeout=120)
        assert (done.returncode, done.stderr) == (0, "")
    assert check_digest(out).digest == pg.render(faults.SPEC, paths=2).digest


def test_a_manifest_of_another_spec_is_told(tmp_path):
    other = {**SMALL, "series": {"x": {"ar": {"phi": 0.6, "sd": 1}}}}
    made = pg.render(SMALL, tmp_path / "out")
    whole = (tmp_path / "out" / "manifest.json").read_bytes()
    pg.render(other, tmp_path / "other")
    shutil.copy(tmp_path / "other" / "manifest.json", tmp_path / "out")
    found = check_digest(tmp_path / "out")
    part = made.manifest.parts[0].file
    assert [damage.file for damage in found.damages] == [part, part]
    assert "other values than the manifest says" in found.text() and "identity.spec is" in found.text()
    first = check_digest(tmp_path / "out", redraw=True).difference
    assert (first.series, first.path, first.step) == ("x", 0, 0)
    assert pg.validate(str(tmp_path / "out")).agrees is False
    with pytest.raises(EnsembleError, match="holds an ensemble of another kind"):
        pg.render(SMALL, tmp_path / "out", resume=True)
    (tmp_path / "out" / "manifest.json").write_bytes(whole)
    assert check_digest(tmp_path / "out").ok


@pytest.mark.parametrize("when", [0, 4_000_000_000], ids=["1970", "2096"])
def test_a_clock_that_goes_back_changes_nothing(tmp_path, monkeypatch, when):
    spec = written(tmp_path, faults.SPEC)
    out, ticks = tmp_path / "out", iter(range(10**9, 0, -1000))
    stop = """
from procgen.ensemble import part, plan
plan.PART_BYTES = 1 << 20
draw = part._render_part
def once(*task):
    part._render_part = lambda *more: os._exit(9)
    return draw(*task)
import os
part._render_part = once
"""
    assert command(stop, "render", spec, "-o", out, "--workers", "1")[0] == 9
    for file in [*out.iterdir(), *(out / ".state").iterdir()]:
        os.utime(file, (when, when))
    kept = {file: file.stat().st_ino for file in out.glob("*.parquet")}
    monkeypatch.setattr(time, "time", lambda: float(next(ticks)))
    made = pg.render(faults.SPEC, out, resume=True)
    assert made.digest == pg.render(faults.SPEC).digest
    assert kept and all(file.stat().st_ino == number for file, number in kept.items())  # not drawn again


@linux
@pytest.mark.parametrize("files,workers", [(4, 1), (5, 1), (4, 2), (7, 2)])
def test_too_few_open_files(tmp_path, files, workers):
    spec = written(tmp_path, faults.SPEC)
    code, said = command(LIMIT.format(files=files), "render", spec, "-o", tmp_path / "out", "--workers", workers)
    assert code == 2 and said.startswith("procgen: too many open files while "), said
    assert "raise the limit (ulimit -n)" in said and RESUME in said
    assert command("", "render", spec, "-o", tmp_path / "out", "--resume")[0] == 0
    faults.in_order(tmp_path / "out", pg.render(faults.SPEC).digest)


@linux
@pytest.mark.parametrize("asked", ["digest", "validate", "difference", "export", "picture"])
def test_too_few_open_files_to_read_are_no_damage(tmp_path, asked):
    """They were called damaged parts, and an ensemble in order departing, with the exit code of that."""
    out, file = tmp_path / "out", str(tmp_path / "file.csv")
    pg.render(SMALL, out)
    more = {"difference": [out], "export": ["-o", file], "picture": ["-o", file.replace("csv", "svg")]}
    code, said = command(LIMIT.format(files=4), asked, out, *more.get(asked, []))
    assert code == 2 and said.startswith("procgen: too many open files while reading "), said
    assert "raise the limit (ulimit -n)" in said and "damaged" not in said and said.count("\n") == 1
    assert [place.name for place in tmp_path.iterdir()] == ["out"]
    assert command("", "digest", out)[0] == 0


def test_a_part_that_may_not_be_read_is_no_damage(tmp_path, bound):
    made = pg.render(SMALL, tmp_path / "out")
    part = tmp_path / "out" / made.manifest.parts[0].file
    part.chmod(0)
    for asked in (["digest"], ["digest", "--redraw"], ["validate"]):
        code, said = command("", asked[0], tmp_path / "out", *asked[1:], before=bound)
        assert code == 2 and said.startswith("procgen: no permission for reading "), said
        assert part.name in said and "mend the permissions" in said
    part.chmod(0o644)
    assert check_digest(tmp_path / "out").digest == made.digest


@pytest.mark.parametrize("short", [True, False])
def test_memory_that_is_short_is_no_damage_and_an_absurd_size_is(tmp_path, monkeypatch, short):
    pg.render(SMALL, tmp_path / "out")

    def lacking(*given, **more):
        raise MemoryError("malloc of size 1152921504606846976 failed")

    monkeypatch.setattr("procgen.ensemble.parquet._expect_schema", lacking)
    monkeypatch.setattr("procgen.ensemble.errors._TRIAL", 1 << 62 if short else 1 << 16)
    if short:
        with pytest.raises(EnsembleError, match="not enough memory for reading "):
            check_digest(tmp_path / "out")
    else:
        assert "cannot be read in the memory there is" in check_digest(tmp_path / "out").text()


def test_a_lock_that_cannot_be_signed_is_let_go(tmp_path, monkeypatch):
    """In a process that lives on, such as a notebook, it kept everybody out."""

    def full(*given):
        raise OSError(errno.ENOSPC, "No space left on device")

    with monkeypatch.context() as change:
        change.setattr("procgen.ensemble.store.os.pwrite", full)
        with pytest.raises(EnsembleError, match="no space left while making "):
            pg.render(SMALL, tmp_path / "out")
    assert pg.render(SMALL, tmp_path / "out").digest == pg.render(SMALL).digest


@pytest.mark.parametrize("failing", ["os.fork", "subprocess.Popen"])
def test_too_many_processes(tmp_path, failing):
    spec = written(tmp_path, faults.SPEC)
    place, _, name = failing.rpartition(".")
    refuse = f"""
import errno, os, subprocess
from procgen.ensemble import forked, plan
plan.PART_BYTES = {faults.PART_BYTES}
def refuse(*given, **more):
    raise BlockingIOError(errno.EAGAIN, "Resource temporarily unavailable")
{place}.{name} = refuse
forked.possible = lambda: {failing == "os.fork"}
"""
    code, said = command(refuse, "render", spec, "-o", tmp_path / "out", "--workers", 2)
    assert code == 2 and "too many processes (ulimit -u); use fewer workers" in said and RESUME in said, said
    assert command("", "render", spec, "-o", tmp_path / "out", "--resume", "--workers", 1)[0] == 0
    faults.in_order(tmp_path / "out", pg.render(faults.SPEC).digest)


@linux
@pytest.mark.parametrize("more,workers", [(16, 1), (16, 2)])
def test_too_little_memory(tmp_path, more, workers):
    spec = written(tmp_path, SMALL | {"paths": 20_000})
    limit = f"""
import resource
from procgen.ensemble import check, job, part
import procgen.terms.graph, procgen.report.rendered, pyarrow.parquet
size = int(open("/proc/self/statm").read().split()[0]) * resource.getpagesize() + ({more} << 20)
resource.setrlimit(resource.RLIMIT_AS, (size, size))
"""
    code, said = command(limit, "render", spec, "-o", tmp_path / "out", "--workers", workers)
    assert code == 2 and said.startswith("procgen: ") and "memory" in said, said
    assert command("", "render", spec, "-o", tmp_path / "out", "--resume")[0] == 0
    assert check_digest(tmp_path / "out").digest == pg.render(SMALL, paths=20_000).digest
