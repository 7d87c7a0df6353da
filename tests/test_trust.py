"""What strangers' files can make this package do: nothing in it runs, unpickles or expands what it reads."""

from __future__ import annotations

import ast
import os
import stat
from pathlib import Path

import pytest

import procgen as pg

PACKAGE = Path(__file__).parent.parent / "procgen"
FILES = sorted(PACKAGE.rglob("*.py"))
MODULES = {"pickle", "cPickle", "marshal", "shelve", "dill", "cloudpickle", "joblib"}
CALLS = {"eval", "exec", "compile", "__import__", "os.system", "os.popen", "yaml.load", "yaml.unsafe_load"}
# of the package's own kernels, to be compiled by numba, and of a call of one, made of the kinds of its arguments
OWN = {"chance/kernel.py": ["exec", "compile"], "chance/machine.py": ["exec"]}


def name_of(node: ast.expr) -> str:
    if isinstance(node, ast.Name):
        return node.id
    return f"{name_of(node.value)}.{node.attr}" if isinstance(node, ast.Attribute) else ""


def dangers(source: str) -> list[str]:
    """What a source imports or calls that may run or unpickle what it is given."""
    found = []
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            found += [name.name for name in node.names if name.name.split(".")[0] in MODULES]
        elif isinstance(node, ast.ImportFrom) and str(node.module).split(".")[0] in MODULES:
            found.append(str(node.module))
        elif isinstance(node, ast.Call):
            called = name_of(node.func)
            words = {word.arg: word.value for word in node.keywords}
            if called in CALLS:
                found.append(called)
            safe = words.get("allow_pickle")
            if called in ("np.load", "numpy.load") and not (isinstance(safe, ast.Constant) and safe.value is False):
                found.append(called)
            if "shell" in words:
                found.append("shell=")
    return found


@pytest.mark.parametrize("file", FILES, ids=lambda f: str(f.relative_to(PACKAGE)))
def test_nothing_that_is_read_is_run(file):
    assert dangers(file.read_text(encoding="utf-8")) == OWN.get(file.relative_to(PACKAGE).as_posix(), [])


@pytest.mark.parametrize(
    "source",
    ["import pickle", "from pickle import loads", "eval(x)", "np.load(f)", "np.load(f, allow_pickle=True)",
     "subprocess.run(x, shell=True)", "yaml.load(f)", "import yaml\nyaml.unsafe_load(f)"],
)  # fmt: skip
def test_a_danger_is_seen(source):
    assert dangers(source)


@pytest.mark.skipif(os.name != "posix", reason="permissions of this kind are POSIX's")
@pytest.mark.parametrize("mask", [0o022, 0o077, 0o002])
def test_permissions_of_what_is_written_follow_umask(tmp_path, mask):
    before = os.umask(mask)
    try:
        series = {"x": [{"white_noise": {"sd": 1}}]}
        spec = {"procgen": 1, "seed": 1, "paths": 3, "time": {"steps": 4}, "series": series}
        made = pg.render(spec, tmp_path / "out")
        made.export(tmp_path / "x.csv")
        pg.validate(made).to_html(tmp_path / "x.html")
    finally:
        os.umask(before)
    files = [path for path in tmp_path.rglob("*") if path.is_file()]
    assert {stat.S_IMODE(path.stat().st_mode) for path in files} == {0o666 & ~mask}
    assert stat.S_IMODE((tmp_path / "out").stat().st_mode) == 0o777 & ~mask
