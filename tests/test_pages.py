"""The pages of a day's work in demo/ are run from top to bottom: what they show is what is printed.

    python -m tests.test_pages

writes the shown output again. In a console block a command stands behind `$ `, its next lines behind `> `, and what it
prints below; `[...]` as the last line stands for what is left out. A python block goes on with the names of the ones
before it, and what it prints stands in the text block that follows.
"""

from __future__ import annotations

import contextlib
import io
import os
import re
import shlex
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path

import pytest
from typer.testing import CliRunner

from procgen.app import app
from tests.test_documents import ROOT, SIZE, shown_like, workplace

PAGES = ["forecaster.md", "qa-engineer.md", "risk-analyst.md"]
BLOCK = re.compile(
    r"```console\n(?P<console>.*?)```|```python\n(?P<python>.*?)```(?:\n\n```text\n(?P<printed>.*?)```)?",
    re.DOTALL,
)
COMMAND = re.compile(r"^\$ (.*\n(?:> .*\n)*)((?:(?!\$ ).*\n)*)", re.MULTILINE)
TIMES = re.compile(r"in [\d.]+s")  # how long pytest took
WRITTEN = re.compile(r"written, [\d.]+ [kMG]?B")


class Day:
    """A folder as a checkout has it, what was typed there, and the Python session of the page."""

    def __init__(self, folder: Path):
        self.folder = workplace(folder)
        shutil.copy(ROOT / "pyproject.toml", folder)
        self.names: dict[str, object] = {}

    def typed(self, command: str) -> str:
        """What a command prints, standard error behind standard output."""
        if command.startswith("procgen ") and not set("|;<>&") & set(command):
            found = CliRunner().invoke(app, shlex.split(command)[1:])
            return found.stdout + found.stderr
        bin = os.pathsep.join([str(Path(sys.executable).parent), os.environ["PATH"]])
        environment = {**os.environ, "PATH": bin, "PYTEST_ADDOPTS": "", "COLUMNS": "80"}
        environment = {key: text for key, text in environment.items() if not key.startswith("PYTEST_XDIST")}
        done = subprocess.run(["sh", "-c", command], capture_output=True, text=True, env=environment, timeout=300)
        return done.stdout + done.stderr

    def console(self, block: str) -> str:
        """A console block with what its commands print today."""
        made = []
        for found in COMMAND.finditer(block):
            command = found[1].replace("\n> ", "\n").rstrip("\n")
            printed = shown_like(self.typed(command), found[2])
            made.append(f"$ {found[1]}{printed}{'' if printed.endswith(chr(10)) or not printed else chr(10)}")
        return "".join(made)

    def python(self, block: str) -> str:
        """What a python block prints."""
        printed = io.StringIO()
        with contextlib.redirect_stdout(printed):
            exec(compile(block, "page", "exec"), self.names)
        return printed.getvalue()

    def lived(self, page: str) -> Iterator[tuple[re.Match[str], str]]:
        """Every block of a page, in order, with its text as it would be today."""
        for found in BLOCK.finditer(page):
            if found["console"] is not None:
                yield found, f"```console\n{self.console(found['console'])}```"
            else:
                printed = shown_like(self.python(found["python"]), found["printed"] or "")
                yield found, f"```python\n{found['python']}```" + (f"\n\n```text\n{printed}```" if printed else "")


def steady(text: str) -> str:
    """Text without what differs from run to run: sizes of Parquet files, and how long tests took."""
    return WRITTEN.sub("written", TIMES.sub("in 0s", SIZE.sub(r"\1, ", text)))


@pytest.mark.parametrize("name", PAGES)
def test_what_a_page_shows_is_what_is_printed(name, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    page = (ROOT / "demo" / name).read_text(encoding="utf-8")
    blocks = 0
    for found, today in Day(tmp_path).lived(page):
        assert steady(today) == steady(found[0])
        blocks += 1
    assert "procgen: " not in page  # no command has failed
    assert blocks > 5 and len(page.splitlines()) <= 165


@pytest.mark.parametrize("name", PAGES)
def test_a_page_is_mentioned_by_the_demo(name):
    assert f"demo/{name}" in (ROOT / "demo" / "run.sh").read_text(encoding="utf-8")


def test_a_block_that_shows_other_output_is_found(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    page = "```console\n$ echo one\n$ cat <<END\n> a\n> END\na\n```\n\n```python\nx = 2\n```\n\n"
    page += "```python\nprint(x)\n```\n\n```text\n3\n```\n"
    found = [(block[0], today) for block, today in Day(tmp_path).lived(page)]
    assert [shown == today for shown, today in found] == [False, True, False]
    assert found[0][1] == "```console\n$ echo one\none\n$ cat <<END\n> a\n> END\na\n```"
    assert found[2][1] == "```python\nprint(x)\n```\n\n```text\n2\n```"
    assert steady("1 file, 4.14 MB, and\n3 passed in 0.52s") == steady("1 file, 4.15 MB, and\n3 passed in 1.2s")


def rewritten(page: str) -> str:
    """The page with its shown output made anew."""
    with tempfile.TemporaryDirectory() as folder, contextlib.chdir(folder):
        made = {found.start(): today for found, today in Day(Path(folder)).lived(page)}
    return BLOCK.sub(lambda found: made[found.start()], page)


if __name__ == "__main__":
    for name in sys.argv[1:] or PAGES:
        file = ROOT / "demo" / name
        file.write_text(rewritten(file.read_text(encoding="utf-8")), encoding="utf-8")
