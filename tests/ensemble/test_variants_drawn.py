"""`render --variant all` into a folder that holds some of it already: refused before drawing, stopped, gone on with."""

from __future__ import annotations

import pytest
from typer.testing import CliRunner

import procgen as pg
from procgen.app import app
from procgen.ensemble import plan

SPEC = """procgen: 1
seed: 3
paths: 640
time: {steps: 50}
series:
  dose: [{exp: [{ar: {phi: 0.8, sd: 1}}]}]
variants:
  strong: {series.dose.exp.ar.sd: 2}
  weak: {series.dose.exp.ar.sd: 0.5}
"""


@pytest.fixture
def spec(tmp_path, monkeypatch):
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 16)  # five parts each
    file = tmp_path / "dose.yaml"
    file.write_text(SPEC)
    return file


def render(spec, out, *more):
    return CliRunner().invoke(app, ["render", str(spec), "--variant", "all", "-o", str(out), *more])


def files(out):
    return {path.relative_to(out): path.stat().st_mtime_ns for path in out.rglob("*") if path.is_file()}


def test_what_is_in_the_way_of_any_is_told_before_the_first_is_drawn(spec, tmp_path):
    out = tmp_path / "out"
    pg.render(pg.load(spec).set({"series.dose.exp.ar.phi": 0.5}), out / "weak")
    (out / "strong").write_text("a note")
    before = files(out)
    for more in ((), ("--resume",)):
        done = render(spec, out, *more)
        assert (done.exit_code, done.stdout) == (2, "")
        head, *lines = done.stderr.splitlines()
        assert head == "procgen: nothing is drawn, for not all variants can be:"
        assert lines[0] == f"{out / 'strong'} is not a folder; choose another OUT"
        assert lines[1].startswith(f"{out / 'weak'} holds an ensemble of another kind (spec (its digest) ")
        assert lines[1].endswith(f"; procgen difference {out / 'weak'} SPEC tells what differs") and len(lines) == 2
        assert files(out) == before


def test_what_was_finished_stays_and_the_stopped_one_goes_on(spec, tmp_path):
    """Stopped in the second of three: as Ctrl-C does, half-way through its parts."""
    out, loaded = tmp_path / "out", pg.load(spec)
    pg.render(loaded, out / "base")

    def stop(done, rows):
        if done > rows // 2:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        pg.render(loaded.variant("strong"), out / "strong", workers=1, progress=stop)
    before = files(out)
    assert 5 < sum(path.suffix == ".parquet" for path in before) < 10

    done = render(spec, out)
    assert (done.exit_code, done.stdout) == (2, "") and not (out / "weak").exists()
    assert f"{out / 'strong'} holds an unfinished render of this spec; go on with --resume" in done.stderr

    assert render(spec, out, "--resume").exit_code == 0
    after = files(out)
    kept = [path for path in before if path.suffix == ".parquet"]
    assert all(after[path] == before[path] for path in kept)  # not drawn again
    for name in ("base", "strong", "weak"):
        assert pg.open_ensemble(out / name).digest == pg.render(loaded.variant(name)).digest

    damaged = sorted((out / "weak").glob("*.parquet"))[0]
    damaged.unlink()
    said = render(spec, out).stderr
    assert said.startswith("procgen: variant weak: ") and f"{damaged.name}: the part is missing; draw it again" in said
    assert render(spec, out, "--resume").exit_code == 0 and damaged.exists()


def test_a_failure_says_which_variant_it_is_of(spec, tmp_path):
    spec.write_text(SPEC.replace("sd: 2}", "sd: 3000}"))
    done = render(spec, tmp_path / "out")
    assert done.exit_code == 2 and done.stderr.startswith("procgen: variant strong: series dose: the value at path ")
    assert (tmp_path / "out" / "base" / "manifest.json").exists() and not (tmp_path / "out" / "strong").exists()
