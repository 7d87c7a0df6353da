"""`procgen picture` and `validate --report`: what they write, and what they say when they cannot."""

import builtins
import json
import os
import struct
import subprocess
import sys
import zlib
from datetime import date
from pathlib import Path

import pytest
from typer.testing import CliRunner

import procgen as pg
from procgen.app import app
from procgen.report.html import verdict_page
from procgen.report.pictures.write import PictureError, is_ours, place_for
from tests.report.pages import drawing, self_contained

PUMP = str(Path(__file__).parent.parent.parent / "specs" / "pump-flow.yaml")


class Result:
    """Exit code, standard output and standard error of one call in this process."""

    def __init__(self, *args: object):
        found = CliRunner().invoke(app, [str(arg) for arg in args], catch_exceptions=False)
        self.code, self.out, self.err = found.exit_code, found.stdout, found.stderr

    def refused(self) -> str:
        assert (self.code, self.out) == (2, "")
        return self.err


@pytest.fixture(scope="module")
def out(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("ensemble") / "pump"
    assert Result("render", PUMP, "-o", folder, "--paths", 40, "--steps", 60, "--reveal", "all").code == 0
    return folder


def test_a_spec_becomes_a_page_or_an_svg(tmp_path):
    page = tmp_path / "pump.html"
    assert Result("picture", PUMP, "-o", page).out == f"picture: {page}\n"
    found = self_contained(page.read_text(encoding="utf-8"))
    assert "200 paths drawn for this picture" in " ".join(found.text) and "Checks" not in " ".join(found.text)
    assert Result("picture", PUMP, "-o", tmp_path / "pump.SVG").code == 0
    drawing((tmp_path / "pump.SVG").read_text(encoding="utf-8"))
    assert sorted(path.name for path in tmp_path.iterdir()) == ["pump.SVG", "pump.html"]


def test_an_ensemble_becomes_a_page_with_its_verdict(out, tmp_path):
    page = tmp_path / "pump.html"
    page.write_text("what was there before")
    assert "--overwrite" in Result("picture", out, "-o", page).refused()
    assert page.read_text() == "what was there before"
    assert Result("picture", out, "-o", page, "--overwrite").code == 0
    text = " ".join(self_contained(page.read_text(encoding="utf-8")).text)
    assert "all 40 paths" in text and "Checks, the largest disagreement first" in text and "Parts of one path" in text


@pytest.mark.parametrize("name", ["a.html", "a.svg", "a.png"])
def test_what_procgen_wrote_is_replaced_and_nothing_else(name, tmp_path):
    if name.endswith("png"):
        pytest.importorskip("matplotlib", reason="the extra plots is not installed")
    file = tmp_path / name
    for _ in range(2):  # the second one in place of the first
        assert Result("picture", PUMP, "-o", file).code == 0
    file.write_bytes(file.read_bytes().replace(b"procgen", b"another"))
    before = file.read_bytes()
    said = Result("picture", PUMP, "-o", file).refused()
    assert f"{file} is there already, and is no picture or page of procgen" in said
    assert file.read_bytes() == before


def png(*chunks: tuple[bytes, bytes]) -> bytes:
    """A PNG of one grey pixel, with chunks behind its header: length, sort, data, CRC (W3C PNG, 5.3)."""

    def chunk(sort: bytes, data: bytes) -> bytes:
        return struct.pack(">I", len(data)) + sort + data + struct.pack(">I", zlib.crc32(sort + data))

    header = struct.pack(">IIBBBBB", 1, 1, 8, 0, 0, 0, 0)
    ends = [(b"IDAT", zlib.compress(b"\0\x80")), (b"IEND", b"")]
    return b"\x89PNG\r\n\x1a\n" + b"".join(chunk(*one) for one in [(b"IHDR", header), *chunks, *ends])


@pytest.mark.parametrize(
    ("chunks", "ours"),
    [
        ([(b"tEXt", b"Software\0procgen")], True),
        ([(b"tEXt", b"Title\0a fan"), (b"tEXt", b"Software\0procgen")], True),
        ([], False),
        ([(b"tEXt", b"Software\0procgen-like")], False),
        ([(b"tEXt", b"Software\0another")], False),
        ([(b"tEXt", b"Comment\0procgen")], False),
        ([(b"tEXt", b"Comment\0<!-- procgen -->")], False),  # the mark of an SVG
    ],
)
def test_a_png_is_ours_by_its_software(chunks, ours, tmp_path):
    file = tmp_path / "a.png"
    file.write_bytes(png(*chunks))
    assert is_ours(file) is ours
    if ours:
        assert place_for(file) == file
    else:
        with pytest.raises(PictureError, match="is no picture or page of procgen; choose another name"):
            place_for(file)


def test_a_png_by_matplotlib(out, tmp_path):
    pytest.importorskip("matplotlib", reason="the extra plots is not installed")
    from matplotlib import image

    assert Result("picture", out, "-o", tmp_path / "pump.png").code == 0
    pixels = image.imread(tmp_path / "pump.png")
    assert pixels.shape[1] > 1000 and pixels.shape[0] > 1200
    assert pixels.min() < 0.2 and pixels.max() == 1.0 and 0.005 < (pixels[..., 0] < 0.5).mean() < 0.5


def test_without_matplotlib_a_png_says_how_to_get_it(out, tmp_path, monkeypatch):
    real = builtins.__import__

    def without(name, *args, **kwargs):
        if name.startswith("matplotlib"):
            raise ImportError(name)
        return real(name, *args, **kwargs)

    monkeypatch.setattr(builtins, "__import__", without)
    said = Result("picture", out, "-o", tmp_path / "pump.png").refused()
    assert "pip install '.[plots]'" in said and "write .svg or .html, which need nothing" in said
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("source", "file", "says"),
    [
        (PUMP, "pump.jpg", "expected a file that ends in .html, .svg or .png, got 'pump.jpg'"),
        (PUMP, "pump", "expected a file that ends in .html, .svg or .png, got 'pump'"),
        (PUMP, "no/pump.html", "there is no folder {tmp}/no to write pump.html into; make it first"),
        (PUMP, "folder", "{tmp}/folder is a folder; give the name of a file in it, such as {tmp}/folder/picture.html"),
        ("absent.yaml", "a.html", "there is no file or folder absent.yaml; give a spec, or the folder of a render"),
        ("{tmp}/folder", "a.svg", "{tmp}/folder has no manifest.json; expected a folder that procgen render has made"),
        ("{tmp}/t.csv", "a.html", "procgen validate {tmp}/t.csv --spec SPEC --report FILE.html"),
        ("{tmp}/bad.yaml", "a.html", "expected"),
    ],
)
def test_errors_teach(source, file, says, tmp_path):
    (tmp_path / "folder").mkdir()
    (tmp_path / "t.csv").write_text("path,step,flow\n0,0,1\n")
    (tmp_path / "bad.yaml").write_text("procgen: 1\n")
    said = Result("picture", source.format(tmp=tmp_path), "-o", tmp_path / file).refused()
    assert says.format(tmp=tmp_path) in said and "fault in procgen" not in said
    assert not (tmp_path / "a.html").exists()


def test_a_folder_that_may_not_be_written_is_named(tmp_path):
    if os.geteuid() == 0:
        pytest.skip("root may write anywhere")
    tmp_path.chmod(0o500)
    said = Result("picture", PUMP, "-o", tmp_path / "a.html").refused()
    assert f"{tmp_path / 'a.html'} cannot be written" in said


def test_validate_says_where_the_report_is(out, tmp_path):
    page = tmp_path / "report.html"
    shown = Result("validate", out, "--false-alarm", "1e-8", "--report", page)
    assert shown.code in (0, 2) and shown.out.endswith(f"\n\nreport: {page}\n")
    found = self_contained(page.read_text(encoding="utf-8"))
    assert "all 40 paths" in " ".join(found.text)
    data = Result("validate", out, "--false-alarm", "1e-8", "--report", page, "--json")
    assert json.loads(data.out)["checks"] and data.err == f"procgen: report: {page}\n"


def test_a_report_replaces_no_file_of_others_before_the_work(out, tmp_path):
    page = tmp_path / "important.html"
    page.write_text("important")
    assert "choose another name" in Result("validate", out, "--report", page).refused()
    with pytest.raises(PictureError, match="overwrite=True"):
        pg.validate(out).to_html(page)
    assert page.read_text() == "important"
    assert Result("validate", out, "--false-alarm", "1e-8", "--report", page, "--overwrite").code in (0, 2)
    assert "<html" in page.read_text(encoding="utf-8")


def test_a_report_that_cannot_be_written_is_refused_before_the_work(out, tmp_path):
    said = Result("validate", out, "--report", tmp_path / "report.pdf").refused()
    assert "expected a file that ends in .html, got 'report.pdf'" in said
    assert "make it first" in Result("validate", out, "--report", tmp_path / "no" / "r.html").refused()


def test_whoever_reads_the_first_line_only_has_the_report_all_the_same(out, tmp_path):
    page = tmp_path / "report.html"
    command = [sys.executable, "-m", "procgen", "validate", str(out), "--report", str(page)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL) as process:
        assert process.stdout is not None
        process.stdout.close()
    assert page.read_text(encoding="utf-8").rstrip().endswith("</html>")


def test_a_report_names_the_data_the_spec_and_the_day(out, tmp_path):
    """Without these two pages in a mailbox cannot be told apart."""
    table, page, first = tmp_path / "mine.csv", tmp_path / "named.html", date.today()
    pg.open_ensemble(out).to_pandas().to_csv(table, index=False)
    asked = {f"{out}": (out,), f"{out} against {PUMP}": (out, "--spec", PUMP)}
    asked |= {f"{table} against {PUMP}": (table, "--spec", PUMP)}
    for what, arguments in asked.items():
        shown = Result("validate", *arguments, "--report", page, "--overwrite")
        assert shown.out.endswith(f"report: {page}\n"), shown.err
        head = page.read_text(encoding="utf-8").partition("</header>")[0].replace("<wbr>", "")
        assert any(f">Judged on {day}: {what}.</p>" in head for day in (first, date.today())), head


def test_a_page_of_the_same_data_is_the_same_on_another_day(out):
    verdict = pg.validate(out)
    assert verdict_page(verdict) == verdict_page(verdict) and "Judged on" not in verdict_page(verdict)
    named = verdict_page(verdict, date(2027, 1, 4))
    assert named.replace("Judged on 2027-01-04:", "Judged:") == verdict_page(verdict)


def test_the_seed_of_a_report_is_that_of_the_data_whichever_spec_they_are_held_against(out):
    ours = pg.open_ensemble(out).spec
    other = ours.set({"seed": ours.seed + 92})
    text = verdict_page(pg.validate(out, other))
    assert f"<dt>seed</dt><dd>{ours.seed}, of the spec that the values were drawn from, which is another</dd>" in text
    assert f"<dt>SHA-256 of the spec that they are held against</dt><dd>{other.digest()}</dd>" in text
    assert f"<dt>SHA-256 of the spec that they were drawn from</dt><dd>{ours.digest()}</dd>" in text
    assert "<dt>SHA-256 of the spec</dt>" not in text
    own = verdict_page(pg.validate(out, ours))
    assert (
        f"<dt>seed</dt><dd>{ours.seed}</dd>" in own and f"<dt>SHA-256 of the spec</dt><dd>{ours.digest()}</dd>" in own
    )


def test_the_spec_of_a_verdict_is_the_one_that_was_given_though_parts_are_revealed():
    spec = pg.load(PUMP)
    ensemble = pg.render(spec, paths=20, steps=40, reveal="all")  # whose spec has that many paths and steps
    assert pg.validate(ensemble, spec, false_alarm=1e-8).about["spec_digest"] == spec.digest()


def test_a_report_on_a_foreign_file_tells_its_bytes_and_no_seed(tmp_path):
    """The digest is what coreutils' sha256sum says; a table in memory has none, and neither has a seed."""
    table = pg.render(pg.load(PUMP), paths=20, steps=40).to_pandas()
    pages = []
    for name in ("plant.csv", "plant.parquet", "plant.csv.gz"):
        file, page = tmp_path / name, tmp_path / f"{name}.html"
        table.to_parquet(file) if name.endswith(".parquet") else table.to_csv(file)
        assert Result("validate", file, "--spec", PUMP, "--false-alarm", "1e-8", "--report", page).code == 0
        pages.append(page.read_text())
        said = subprocess.run(["sha256sum", file], capture_output=True, text=True, check=True).stdout.split()[0]
        assert f"<dt>SHA-256 of the file</dt><dd>{said}</dd>" in pages[-1]
        assert f"<dt>file</dt><dd>{file}</dd>" in pages[-1]
    pages.append(verdict_page(pg.validate(table, pg.load(PUMP), false_alarm=1e-8)))
    assert "SHA-256 of the file" not in pages[-1]
    for text in pages:
        assert "<dt>seed</dt>" not in text and "<dt>stream version</dt>" not in text
        assert f"<dt>SHA-256 of the spec</dt><dd>{pg.load(PUMP).digest()}</dd>" in text
