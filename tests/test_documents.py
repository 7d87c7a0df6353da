"""What the documents show is what the commands print, and the code that they show runs.

    python -m tests.test_documents

writes the shown output again. A block begins with its command; `[...]` as the last line stands for what is left out.
"""

from __future__ import annotations

import contextlib
import re
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner

import procgen as pg
from procgen.app import app
from procgen.chance.laws import LAWS
from procgen.spec.calendar import Grid
from procgen.spec.reader import read_text
from procgen.terms import catalogue

ROOT = Path(__file__).parent.parent
DOCUMENTS = ["README.md", "DEVELOPERS.md"]
BLOCK = re.compile(r"(?<=```console\n)\$ (.+)\n([^`]*)(?=```)")
LEFT_OUT = "[...]"
# What depends on the version of the library that writes Parquet.
SIZE = re.compile(r"(\d+ files?), [\d.]+ [kMG]?B, ")


def output(command: str, folder: Path) -> str:
    """What a command prints when it is run in `folder`, standard error behind standard output."""
    program, *arguments = command.split()
    if program == "cat":
        return (folder / arguments[0]).read_text(encoding="utf-8")
    assert program == "procgen", command
    found = CliRunner().invoke(app, arguments)
    return found.stdout + found.stderr


def shown_like(printed: str, shown: str) -> str:
    """As much of what is printed as the document shows."""
    lines = shown.splitlines()
    if lines[-1:] == [LEFT_OUT]:
        return "\n".join([*printed.splitlines()[: len(lines) - 1], LEFT_OUT]) + "\n"
    return printed


def fresh(page: str, folder: Path) -> Iterator[tuple[re.Match[str], str]]:
    """Every block of a page with its output made anew, in order."""
    for found in BLOCK.finditer(page):
        yield found, shown_like(output(found[1], folder), found[2])


def workplace(folder: Path) -> Path:
    """A folder with the specs and the demo, as a checkout has them."""
    for name in ("specs", "demo"):
        shutil.copytree(ROOT / name, folder / name)
    return folder


@pytest.mark.parametrize("document", DOCUMENTS)
def test_shown_output_is_what_the_command_prints(document, tmp_path, monkeypatch):
    monkeypatch.chdir(workplace(tmp_path))
    page = (ROOT / document).read_text(encoding="utf-8")
    for found, printed in fresh(page, tmp_path):
        assert SIZE.sub(r"\1, ", found[2]) == SIZE.sub(r"\1, ", printed), f"{document}: $ {found[1]}"


def test_the_python_of_the_readme_runs(tmp_path, monkeypatch):
    monkeypatch.chdir(workplace(tmp_path))
    page = (ROOT / "README.md").read_text(encoding="utf-8")
    names: dict[str, object] = {}
    exec(page.partition("```python\n")[2].partition("```")[0], names)
    # AR(1): σ²/(1 − φ²) (Box & Jenkins 1970, ch. 3).
    assert names["variance"] == pytest.approx([9 / (1 - 0.64)] * 2)
    assert names["verdict"].agrees is True


RECIPE = re.compile(r"^\| (`(?:long|panel|nested|wide)`.*?) \| .*?`(pd\..+?)`", re.M)


def test_files_are_read_with_pandas_as_the_readme_says(tmp_path, monkeypatch):
    page = (ROOT / "README.md").read_text(encoding="utf-8")
    monkeypatch.setattr("procgen.ensemble.plan.PART_BYTES", 1 << 19)
    spec = pg.load(ROOT / "specs" / "cold-store.yaml").changed(paths=1100, steps=30)
    usual = pg.render(spec)
    recipes = [
        (layout, "by series" in which, code)
        for which, code in RECIPE.findall(page)
        for layout in re.findall("`(.+?)`", which)
    ]
    assert len(recipes) == 7
    for number, (layout, by_series, code) in enumerate(recipes):
        out = tmp_path / str(number)
        pg.render(spec, out, layout=layout, partition="series" if by_series else None)
        assert len([*out.glob("*load_kw*.parquet" if by_series or layout == "wide" else "*.parquet")]) > 1

        def read(p, out=out):
            return [pd.read_parquet(file) for file in sorted(out.glob(f"{p}.parquet"))]

        found = eval(code, {"pd": pd, "read": read})
        for name in ("load_kw",) if layout == "wide" else ("load_kw", "price"):
            if layout == "panel":
                values = found.loc[found["id"] == name, "value"].to_numpy().reshape(1100, 30)
            elif layout == "wide":
                values = found.to_numpy().T
            else:
                values = np.array([*found[name]]).reshape(1100, 30)
            assert np.array_equal(values, usual[name]), f"{layout}: {code}"


def test_the_term_of_the_developers_page_is_one(monkeypatch):
    page = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    names: dict[str, object] = {}
    exec(page.partition("```python\n")[2].partition("```")[0], names)
    term = names["Pulse"]
    kinds = {**catalogue(), term.kind: term}
    monkeypatch.setattr("procgen.terms.graph.catalogue", lambda: kinds)
    series = f"x: [{{{term.example}}}, {{white_noise: {{sd: 1}}}}]"
    text = f"procgen: 1\nseed: 1\npaths: 200\ntime: {{steps: 40}}\nseries:\n  {series}\n"
    spec = read_text(text, kinds, LAWS)
    mean = pg.theory(spec)["x"].mean(np.arange(40))
    assert mean.tolist() == [5.0 if 12 <= step < 18 else 0.0 for step in range(40)]
    difference = pg.render(spec)["x"] - pg.render(read_text(text.replace("size: 5", "size: 0"), kinds, LAWS))["x"]
    assert difference == pytest.approx(np.tile(mean, (200, 1)))  # all other draws are as they were


def test_what_the_reference_says_of_time_is_so():
    page = (ROOT / "specs" / "README.md").read_text(encoding="utf-8")

    def grid(start: str, every: str) -> Grid:
        return pg.load(
            {
                "procgen": 1,
                "seed": 1,
                "paths": 1,
                "time": {"start": start, "every": every, "steps": 3, "zone": "Europe/Berlin"},
                "series": {"x": [{"constant": 1}]},
            }
        ).time

    def stamps(start: str, every: str) -> list[str]:
        return [str(np.datetime64(int(at), "us"))[:16] for at in grid(start, every).stamps(0, 3)]

    # The clocks of Berlin: tz database; CEST is UTC+2, and from 31 October 2027, 03:00, CET is UTC+1.
    assert stamps("2027-10-31T02:30", "1h")[0] == "2027-10-31T00:30"
    assert stamps("2027-10-31T02:30+01:00", "1h")[0] == "2027-10-31T01:30"
    assert stamps("2027-03-27T02:30", "1d") == ["2027-03-27T01:30", "2027-03-28T01:30", "2027-03-29T00:30"]
    with pytest.raises(pg.SpecError, match="the clocks skip it"):
        grid("2027-03-28T02:30", "1h")
    assert grid("2027-01-04", "1 business day").steps_per("year") == pytest.approx(365.2425 * 5 / 7)
    assert "260.887 steps" in page and f"{365.2425 * 5 / 7:.6f}".startswith("260.887")
    assert "0.2/√252 = 0.0126" in page and f"{0.2 / 252**0.5:.4f}" == "0.0126"


def test_links_lead_somewhere():
    for document in [*DOCUMENTS, "specs/README.md"]:
        page = (ROOT / document).read_text(encoding="utf-8")
        for target in re.findall(r"\]\(([^)#:]+)(?:#[^)]*)?\)", page):
            assert (ROOT / document).parent.joinpath(target).exists(), f"{document}: {target}"


def rewritten(page: str) -> str:
    """The page with its shown output made anew."""
    with tempfile.TemporaryDirectory() as folder, contextlib.chdir(workplace(Path(folder))):
        made = {found.start(): printed for found, printed in fresh(page, Path(folder))}
    return BLOCK.sub(lambda found: f"$ {found[1]}\n{made[found.start()]}", page)


if __name__ == "__main__":
    for document in DOCUMENTS:
        page = (ROOT / document).read_text(encoding="utf-8")
        (ROOT / document).write_text(rewritten(page), encoding="utf-8")
