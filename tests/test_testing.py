"""Fixtures of `procgen.testing` in runs of pytest of their own, as a user's test file has them.

pytest and pytest-xdist are what they are held against: outcomes are read from pytest's own report.
"""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

import procgen as pg
from procgen.ensemble.store import Folder
from procgen.testing import ensemble_fixture

SPEC = """procgen: 1
seed: 3
paths: 6
time: {start: 2027-01-04, every: 1d, steps: 30}
series:
  milk: [{constant: 40}, {ar: {phi: 0.6, sd: 2}}]
  whey: [{white_noise: {sd: 1}}]
variants:
  drought: {series.milk.constant.level: 30}
"""
USES = """
from procgen.testing import ensemble_fixture
dairy = ensemble_fixture("dairy.yaml"%s)

def test_one(dairy):
    assert dairy["milk"].shape == (%d, 30)

def test_two(dairy):
    assert dairy.path.parts[-2].startswith("procgen")
"""
BARE = os.environ | {"PYTEST_DISABLE_PLUGIN_AUTOLOAD": "1"}  # plugins of this suite take half the time of a start


class Project:
    """A folder with a spec, a test file, and pytest to run there."""

    def __init__(self, folder: Path):
        self.folder = folder
        (folder / "pytest.ini").write_text("[pytest]\n")
        (folder / "dairy.yaml").write_text(SPEC)
        self.tests()

    def tests(self, given: str = "", paths: int = 6) -> None:
        (self.folder / "test_dairy.py").write_text(USES % (given, paths))

    def spec(self, old: str, new: str) -> None:
        assert old in SPEC
        (self.folder / "dairy.yaml").write_text(SPEC.replace(old, new))

    def run(self, *options: str, passed: int = 0, errors: int = 0, failed: int = 0) -> str:
        """What pytest prints; it is an error when it counts other outcomes than these."""
        needed = ["-p", "xdist.plugin"] if "-n" in options else []
        command = [sys.executable, "-m", "pytest", "-q", *needed, *options]
        done = subprocess.run(command, cwd=self.folder, capture_output=True, text=True, timeout=300, env=BARE)
        counted = {what: int(n) for n, what in re.findall(r"(\d+) (passed|error|failed)", done.stdout.splitlines()[-1])}
        wanted = {"passed": passed, "error": errors, "failed": failed}
        assert counted == {k: n for k, n in wanted.items() if n}, done.stdout + done.stderr
        return done.stdout

    @property
    def kept(self) -> list[Path]:
        return sorted((self.folder / ".pytest_cache" / "d" / "procgen").glob("*"))


@pytest.fixture
def project(tmp_path):
    return Project(tmp_path)


def digest(text: str = SPEC, **changes: int) -> str:
    from procgen.chance.laws import LAWS
    from procgen.spec.reader import read_text
    from procgen.terms import catalogue

    return pg.render(read_text(text, catalogue(), LAWS), **changes).digest


def test_it_is_drawn_once_and_kept_and_without_a_digest_the_one_to_write_is_said(project):
    said = project.run(passed=2)
    assert f'dairy (test_dairy.py, line 3) has no digest to be held against; write expect="{digest()}"' in said
    (folder,) = project.kept
    files = {file: file.stat().st_mtime_ns for file in folder.glob("*.*")}
    assert len(files) == 2  # a part and the manifest
    project.tests(f', expect="{digest()}"')
    assert "warning" not in project.run(passed=2)
    assert project.kept == [folder]
    assert {file: file.stat().st_mtime_ns for file in folder.glob("*.*")} == files


def test_paths_and_a_variant_may_be_asked_for(project):
    drought = digest(SPEC.replace("constant: 40", "constant: 30"), paths=4)
    project.tests(f', paths=4, variant="drought", expect="{drought}"', paths=4)
    project.run(passed=2)


def test_a_digest_that_moved_is_told_with_the_place_and_the_term_when_the_old_ensemble_is_there(project):
    old, new = digest(), digest(SPEC.replace("phi: 0.6", "phi: 0.7"))
    project.tests(f', expect="{old}"')
    project.run(passed=2)
    project.spec("phi: 0.6", "phi: 0.7")
    said = project.run(errors=2)
    assert "dairy (test_dairy.py, line 3): its digest moved" in said
    assert f"now      {new}" in said and f"expected {old}: other values" in said
    assert "series.milk.ar.phi: 0.6 → 0.7" in said
    assert re.search(r"first difference: series milk, path 0, step 0: expected [\d.]+, got [\d.]+", said)
    assert "what may have moved it: milk.ar" in said
    assert f'to accept the new values: expect="{new}"' in said
    assert "Traceback" not in said and "procgen/testing.py" not in said
    project.tests(f', expect="{new}"')
    project.run(passed=2)
    assert len(project.kept) == 2


def test_a_digest_that_moved_is_told_when_the_old_ensemble_is_not_there(project):
    project.tests(f', expect="{"a" * 64}"')
    said = project.run(errors=2)
    assert f"now      {digest()}" in said and f"expected {'a' * 64}, which is not in " in said
    assert "to see where they differ: run the test once with the old spec, then with the new one" in said


def test_damage_in_the_cache_is_mended(project):
    project.tests(f', expect="{digest()}"')
    project.run(passed=2)
    (part,) = project.kept[0].glob("*.parquet")
    whole = part.read_bytes()
    part.write_bytes(whole[: len(whole) // 2])
    project.run(passed=2)
    part.unlink()
    project.run(passed=2)
    assert pg.check_digest(project.kept[0]).ok


def test_values_that_other_code_drew_are_not_taken_for_those_of_today(project):
    """The cache holds values of an older release; today's code draws others."""
    project.tests(f', expect="{digest()}"')
    project.run(passed=2)
    (project.folder / "conftest.py").write_text(
        "import procgen.terms.level as level\n"
        "old = level.Constant.at\n"
        "level.Constant.at = lambda self, steps: old(self, steps) + 1e-9\n"
    )
    said = project.run(errors=2)
    assert "first difference: series milk, path 0, step 0" in said
    assert "no term of it differs: the values were changed, or made by other code" in said


def test_two_workers_at_once_draw_it_once(project):
    """One draws until the other has asked too, and for longer than the patience of a lock."""
    project.tests(f', expect="{digest()}"')
    (project.folder / "conftest.py").write_text(
        "import os, pathlib, time\n"
        "import procgen.testing as testing\n"
        "from procgen.ensemble import job, store\n"
        "store.Folder.locked.__wrapped__.__defaults__ = (0.2,)\n"
        "asked, draw = testing._store, job.Job._draw\n"
        "def note(what):\n"
        "    pathlib.Path(f'{what}-by-' + os.environ['PYTEST_XDIST_WORKER']).touch()\n"
        "def noted(request):\n"
        "    note('asked')\n"
        "    return asked(request)\n"
        "def slow(self, *given):\n"
        "    note('drawn')\n"
        "    give_up = time.monotonic() + 60\n"
        "    while len([*pathlib.Path().glob('asked-by-*')]) < 2 and time.monotonic() < give_up: time.sleep(0.05)\n"
        "    time.sleep(1)\n"
        "    return draw(self, *given)\n"
        "testing._store, job.Job._draw = noted, slow\n"
    )
    said = project.run("-n", "2", "-vv", passed=2)
    assert {"[gw0]", "[gw1]"} <= set(re.findall(r"\[gw\d\]", said))
    assert len([*project.folder.glob("asked-by-*")]) == 2 and len([*project.folder.glob("drawn-by-*")]) == 1
    assert len(project.kept) == 1 and not (project.kept[0] / ".state").exists()


@pytest.mark.parametrize("workers", [(), ("-n", "2")], ids=["alone", "xdist"])
def test_without_the_cache_it_is_drawn_into_the_temporary_folder(project, workers, tmp_path_factory):
    base = tmp_path_factory.mktemp("base")
    project.tests(f', expect="{digest()}"')
    project.run("-p", "no:cacheprovider", f"--basetemp={base / 'run'}", *workers, passed=2)
    assert project.kept == [] and len([*base.glob("run/procgen/*/manifest.json")]) == 1


def test_faults_of_a_spec_are_told_without_a_traceback(project):
    project.spec("phi: 0.6", "phi: 1.6")
    said = project.run(errors=2)
    assert "dairy (test_dairy.py, line 3) cannot be drawn: expected all roots" in said
    assert "During handling" not in said and "Traceback" not in said
    assert "Traceback" not in said and "procgen/testing.py" not in said
    (project.folder / "dairy.yaml").unlink()
    said = project.run(errors=2)
    assert f"there is no file {project.folder / 'dairy.yaml'}; check the path of the spec" in said


def test_a_folder_that_another_holds_says_so_in_a_kind_of_its_own(tmp_path):
    from procgen.ensemble.errors import EnsembleError, InUse

    assert issubclass(InUse, EnsembleError)
    with Folder(tmp_path / "a").locked(), pytest.raises(InUse, match="another render is at work"):
        with Folder(tmp_path / "a").locked(patience=0):
            pass


@pytest.mark.parametrize("given", ["abc", "g" * 64, 12])
def test_what_is_no_digest_is_refused_at_once(given):
    with pytest.raises(ValueError, match="expected expect to be a digest of 64 hex digits, got"):
        ensemble_fixture("dairy.yaml", expect=given)


dairy_in_memory = ensemble_fixture(
    {
        "procgen": 1,
        "seed": 3,
        "paths": 2,
        "time": {"steps": 5},
        "series": {"milk": [{"constant": 40}]},
    },
    expect="0" * 64,
)


def test_a_mapping_may_be_given_and_other_values_end_the_test(request):
    with pytest.raises(pytest.fail.Exception, match=r"dairy_in_memory \(tests/test_testing.py, line \d+\)"):
        request.getfixturevalue("dairy_in_memory")


def test_pytest_is_needed_by_the_call_alone(tmp_path):
    code = (
        "import sys; sys.modules['pytest'] = None\n"
        "import procgen.testing as t\n"
        "try: t.ensemble_fixture('a.yaml')\n"
        "except ModuleNotFoundError as error: print(error)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout == "procgen.testing makes fixtures of pytest; pip install pytest\n"


def test_a_spec_is_looked_for_beside_the_test_file_first(project):
    inner = project.folder / "inner"
    inner.mkdir()
    (project.folder / "test_dairy.py").rename(inner / "test_dairy.py")
    project.run(passed=2)  # from rootdir
    (inner / "dairy.yaml").write_text(SPEC.replace("paths: 6", "paths: 7"))
    assert "assert (7, 30) == (6, 30)" in project.run("inner", passed=1, failed=1)
    for file in (project.folder, inner):
        (file / "dairy.yaml").unlink()
    said = project.run(errors=2)
    assert f"there is no file {inner / 'dairy.yaml'} or {project.folder / 'dairy.yaml'}; check the path" in said
