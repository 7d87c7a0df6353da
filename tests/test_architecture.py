"""The plan of the house: imports go one way, value code knows no theory, files stay short."""

from __future__ import annotations

import ast
import importlib
import pkgutil
import re
import subprocess
import sys
from pathlib import Path

import pytest

import procgen as pg
from procgen.terms import catalogue

PACKAGE = Path(__file__).parent.parent / "procgen"
ROOMS = ["spec", "chance", "terms", "theory", "ensemble", "checks", "report"]
FILES = sorted(PACKAGE.rglob("*.py"))
LONGEST = 400
# A verdict is public and writes itself, and so is a difference: their texts call the report when they are called.
UPWARD = {"checks/verdict.py": {"report"}, "checks/difference.py": {"report"}}


def room(file: Path) -> str:
    return file.relative_to(PACKAGE).parts[0]


def imported(source: str) -> set[str]:
    """The parts of this package that a source imports, at any depth: `procgen.terms.base` counts as `terms`."""
    found = set()
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            found |= {name.name for name in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports are absolute"
            found |= {f"{node.module}.{name.name}" for name in node.names}
    return {name.split(".")[1] for name in found if name.startswith("procgen.")}


@pytest.mark.parametrize("file", [f for f in FILES if room(f) in ROOMS], ids=lambda f: str(f.relative_to(PACKAGE)))
def test_a_room_imports_only_what_stands_before_it(file):
    allowed = set(ROOMS[: ROOMS.index(room(file)) + 1]) | UPWARD.get(str(file.relative_to(PACKAGE)), set())
    if room(file) == "ensemble":
        allowed -= {"theory"}
    assert imported(file.read_text(encoding="utf-8")) - allowed == set()


@pytest.mark.parametrize("name", ROOMS)
def test_the_guide_of_a_room_names_every_file_in_it(name):
    """But for terms, which are found by their kinds: there the guide names what they share."""
    package = importlib.import_module(f"procgen.{name}")
    assert package.__doc__ is not None
    named = set(re.findall(r"`([a-z_0-9]+)`", package.__doc__))
    files = {module.name for module in pkgutil.iter_modules(package.__path__)}
    if name == "terms":
        files -= {term.__module__.rsplit(".", 1)[1] for term in catalogue().values()}
    assert files - named == set()


@pytest.mark.parametrize(
    ("source", "seen"),
    [
        ("from procgen.theory import theory", {"theory"}),
        ("def f():\n    import procgen.checks.power as p", {"checks"}),
        ("from procgen import cli", {"cli"}),
        ("import numpy", set()),
    ],
)
def test_an_import_is_seen(source, seen):
    assert imported(source) == seen


@pytest.mark.parametrize("file", FILES, ids=lambda f: str(f.relative_to(PACKAGE)))
def test_a_file_can_be_read_in_one_go(file):
    assert len(file.read_text(encoding="utf-8").splitlines()) <= LONGEST


def test_fixtures_for_pytest_stand_apart_and_need_it_only_when_one_is_made():
    """No other file imports `procgen.testing`, and pytest is imported by a call or for its types alone."""
    assert [f.name for f in FILES if "testing" in imported(f.read_text(encoding="utf-8"))] == []
    users = {f.name for f in FILES if "import pytest" in f.read_text(encoding="utf-8")}
    assert users == {"testing.py"}
    code = "import sys, procgen.testing; sys.exit(any(name in sys.modules for name in ('pytest', 'numpy', 'pandas')))"
    subprocess.run([sys.executable, "-c", code], check=True)


def test_public_names_are_there_and_theory_can_be_called_whatever_was_imported_before():
    importlib.import_module("procgen.theory.series")  # binds the package to the name that is also the call
    for name in pg.__all__:
        assert getattr(pg, name) is not None
    assert callable(pg.theory)
    assert dir(pg) == sorted(pg.__all__)
    with pytest.raises(AttributeError, match="no attribute 'foretell'"):
        _ = pg.foretell
