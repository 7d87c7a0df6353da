"""The command line: every command, and every kind of bad input: one message, the exit code, no traceback."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
from importlib import metadata
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from typer.testing import CliRunner

import procgen as pg
from procgen.app import app
from tests.waiting import wait_for

ROOT = Path(__file__).parent.parent
PUMP = str(ROOT / "specs" / "pump-flow.yaml")
COMMAND = [sys.executable, "-m", "procgen"]
SMALL = ["--paths", "120", "--steps", "48"]


class Result:
    """Exit code, standard output and standard error of one call in this process."""

    def __init__(self, *args: str):
        found = CliRunner().invoke(app, list(args), catch_exceptions=False)
        self.code, self.out, self.err = found.exit_code, found.stdout, found.stderr


def refused(result: Result) -> str:
    """The message of a call that was refused: exit code 2, nothing on standard output, no traceback."""
    assert result.code == 2, result.err
    assert result.out == ""
    assert "Traceback" not in result.err and "fault in procgen itself" not in result.err
    assert result.err.startswith(("procgen: ", "Usage: "))
    return result.err


@pytest.fixture
def rendered(tmp_path) -> Path:
    out = tmp_path / "pump"
    assert Result("render", PUMP, "-o", str(out), *SMALL).code == 0
    return out


# what the commands do


def test_help_names_every_command_and_shows_an_example_of_each():
    text = Result("-h").out
    for name in ("render", "export", "validate", "picture", "theory", "terms", "schema", "digest", "difference"):
        assert f"  {name} " in text
        page = Result(name, "--help").out
        assert f"procgen {name}" in page.partition("Example")[2]
        assert page == Result(name, "-h").out


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("render", "--paths", "1e3"), "'--paths': expected a whole number of at least 1, in digits, got '1e3'"),
        (("render", "--workers", "0"), "'--workers': expected a whole number of at least 1, in digits, got '0'"),
        (("theory", "--lags", "100001"), "expected a whole number from 0 to 100,000, in digits, got '100001'"),
        (("export", "--decimals", "1.5"), "'--decimals': expected a whole number from -22 to 22, in digits, got '1.5'"),
        (("export", "--decimals", "23"), "'--decimals': expected a whole number from -22 to 22, in digits, got '23'"),
        (("export", "--paths", "5-2"), "expected numbers from 0 on, the smaller first, such as 0-99 or 7, got '5-2'"),
        (("difference", "--at", "1.5"), "'--at': expected steps from 0 on, such as 0,1,10, got '1.5'"),
        (("validate", "--false-alarm", "1"), "'--false-alarm': expected a number from 1e-12 to 0.5, got '1'"),
    ],
)
def test_a_number_out_of_bounds_is_told_as_it_was_given(arguments, said):
    name, *rest = arguments
    result = CliRunner().invoke(app, [name, "x.yaml", *(("-o", "y") if name in ("render", "export") else ()), *rest])
    assert result.exit_code == 2 and said in " ".join(result.output.split())


def test_the_options_are_those_that_were_promised():
    promised = {
        "render": "-o --paths --first-path --steps --seed --workers --layout --reveal --resume --overwrite --scheduler "
        "--columns --partition --variant --set --start --expect",
        "validate": "--spec --path-col --step-col --time-col --series-col --id-col --value-col --false-alarm --json "
        "--report --overwrite --scheduler",
        "theory": "--json --at --lags --frequencies --horizon --variant --set --start",
        "picture": "-o --overwrite --variant --set --start",
        "digest": "--expect --redraw",
        "export": "-o --layout --series --paths --steps --decimals --local-time --columns --overwrite",
        "difference": "--variant --at --json",
    }
    for name, options in promised.items():
        page = Result(name, "-h").out
        assert [option for option in options.split() if option not in page] == []


def test_the_version_is_that_of_the_package():
    assert Result("--version").out == f"procgen {pg.__version__}\n"
    assert metadata.version("procgen") == pg.__version__


def test_help_imports_nothing_heavy():
    code = (
        "import sys\nfrom procgen.cli import run as main\nsys.argv = ['procgen', '-h']\n"
        "try:\n    main()\nexcept SystemExit:\n    pass\n"
        "heavy = {'numpy', 'scipy', 'pandas', 'pyarrow', 'yaml', 'rich', 'numba'} & set(sys.modules)\n"
        "print(sorted(heavy), file=sys.stderr)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert done.stderr.strip() == "[]"


def test_help_answers_in_under_four_tenths_of_a_second():
    # Processor time of the quickest of five: what the machine does besides is not ours.
    took = []
    for _ in range(5):
        before = os.times()
        subprocess.run([*COMMAND, "-h"], stdout=subprocess.DEVNULL, check=True)
        after = os.times()
        took.append(after.children_user + after.children_system - before.children_user - before.children_system)
    assert min(took) < 0.4


def test_render_says_where_how_much_and_which_digest(rendered):
    again = Result("render", PUMP, "-o", str(rendered), *SMALL)
    assert again.code == 0
    assert again.err == ""  # quiet in a pipe
    ensemble = pg.open_ensemble(rendered)
    assert again.out.splitlines()[0] == f"{rendered}: 120 paths × 48 steps of flow"
    assert again.out.splitlines()[-1] == f"digest {ensemble.digest}"


def test_render_draws_what_the_options_ask_for(tmp_path, rendered):
    whole = pg.open_ensemble(rendered)["flow"]
    options = ["--paths", "20", "--first-path", "30", "--steps", "10", "--workers", "1"]
    assert Result("render", PUMP, "-o", str(tmp_path / "part"), *options).code == 0
    part = pg.open_ensemble(tmp_path / "part")
    assert np.array_equal(part["flow"], whole[30:50, :10])
    assert Result("render", PUMP, "-o", str(tmp_path / "other"), *SMALL, "--seed", "8").code == 0
    assert not np.array_equal(pg.open_ensemble(tmp_path / "other")["flow"], whole)


def test_reveal_writes_terms_beside_the_series(tmp_path):
    options = ["--reveal", "flow.ar", *SMALL]
    assert Result("render", PUMP, "-o", str(tmp_path / "out"), *options).code == 0
    assert "flow.ar" in pg.open_ensemble(tmp_path / "out").names


def test_export_says_what_it_writes_and_takes_numbers_of_paths(tmp_path, rendered):
    file = tmp_path / "flow.csv"
    options = ["--paths", "3-5", "--steps", "7", "--layout", "panel", "--columns", "id=pump,value=litres"]
    done = Result("export", str(rendered), "-o", str(file), *options)
    assert done.code == 0 and done.err == ""
    assert done.out.splitlines()[0] == f"{file}: 3 rows, 4 columns (pump, path, time, litres) of flow"
    assert done.out.splitlines()[-1].startswith("written, ")
    found = pd.read_csv(file)
    assert list(found["path"]) == [3, 4, 5]
    assert np.allclose(found["litres"], pg.open_ensemble(rendered)["flow"][3:6, 7], rtol=1e-15)
    again = Result("export", str(rendered), "-o", str(file), *options)
    assert again.code == 2 and "is there already; choose another name, or replace it with --overwrite" in again.err
    assert Result("export", str(rendered), "-o", str(file), *options, "--overwrite").code == 0
    twice = Result("export", str(rendered), "-o", str(tmp_path / "no.csv"), "--columns", "path=a_,path=b_")
    assert twice.code == 2 and "expected one name for path, got 2" in twice.err
    for wrong in (["--paths", "5-3"], ["--columns", "pump"], ["--layout", "cube"]):
        assert Result("export", str(rendered), "-o", str(tmp_path / "no.csv"), *wrong).code == 2


def test_render_writes_other_layouts(tmp_path):
    out = str(tmp_path / "out")
    options = ["--layout", "panel", "--columns", "id=pump", "--partition", "series"]
    done = Result("render", PUMP, "-o", out, *SMALL, *options)
    assert done.code == 0
    assert "layout panel (pump, path, time, value): a row an observation; a file a series" in done.out
    assert Result("digest", out, "--redraw").code == 0
    assert Result("render", PUMP, "-o", out, *SMALL).code == 2


def test_theory_prints_equations_and_moments_and_the_same_as_json():
    text = Result("theory", PUMP, "--at", "0,6,18", "--lags", "2").out
    assert "x[t] = 0.8 x[t−1] + a[t]" in text
    assert "flow: mean not constant" in text
    told = json.loads(Result("theory", PUMP, "--at", "0,6,18", "--lags", "2", "--json").out)["series"]["flow"]
    assert told["steps"] == [0, 6, 18]
    # AR(1): σ²/(1 − φ²) and φᵏ (Box & Jenkins 1970, ch. 3); the seasonal peaks at step 18, and is 0 at step 0.
    assert told["variance"] == pytest.approx([9 / (1 - 0.64)] * 3)
    assert told["mean"] == pytest.approx([80, 68, 92])
    assert told["autocorrelation"] == pytest.approx([1, 0.8, 0.64])
    assert told["autocovariance"] == {"from_step": 0, "lags": [0, 1, 2], "values": pytest.approx([25, 20, 16])}


def test_validate_ends_with_0_1_or_2(rendered, tmp_path):
    # False-alarm probability 1e-8 of the suite's 1e-6.
    agrees = Result("validate", str(rendered), "--json", "--false-alarm", "1e-8")
    assert (agrees.code, json.loads(agrees.out)["verdict"]) == (0, "agrees")
    other = (ROOT / "specs" / "pump-flow.yaml").read_text().replace("phi: 0.8", "phi: 0.5")
    (tmp_path / "other.yaml").write_text(other)
    part = next(rendered.glob("*.parquet"))
    roles = ["--path-col", "path", "--step-col", "step"]
    departs = Result("validate", str(part), "--spec", str(tmp_path / "other.yaml"), *roles)
    assert departs.code == 1
    assert "flow" in departs.out
    fixed = tmp_path / "fixed.yaml"
    fixed.write_text("procgen: 1\nseed: 1\npaths: 3\ntime: {steps: 4}\nseries:\n  x: [{white_noise: {sd: 1}}]\n")
    assert Result("render", str(fixed), "-o", str(tmp_path / "few")).code == 0
    assert Result("validate", str(tmp_path / "few")).code == 0  # few paths: their exact laws and shocks are judged


def test_validate_reads_a_strangers_table_by_its_own_names(rendered, tmp_path):
    part = next(rendered.glob("*.parquet"))
    frame = pd.read_parquet(part).rename(columns={"path": "run", "time": "at", "flow": "litres"})
    frame.drop(columns="step").sample(frac=1, random_state=1).to_csv(tmp_path / "mine.csv", index=False)
    call = ["validate", str(tmp_path / "mine.csv"), "--spec", str(ROOT / "specs" / "pump-flow.yaml")]
    call += ["--path-col", "run", "--time-col", "at"]
    # False-alarm probability 1e-8 of the suite's 1e-6.
    assert Result(*call, "--series-col", "flow=litres", "--false-alarm", "1e-8").code == 0
    unnamed = Result(*call)
    assert unnamed.code == 2 and "has no column 'flow' for flow; its columns are run, at, litres" in unnamed.err
    assert "expected SERIES=NAME such as load_kw=load, got 'flow'" in Result(*call, "--series-col", "flow").err


def test_terms_fit_on_a_screen_and_every_one_has_a_line_and_a_page():
    from procgen.chance.laws import LAWS
    from procgen.terms import catalogue

    screen = Result("terms").out
    assert len(screen.splitlines()) <= 45 and max(map(len, screen.splitlines())) <= 80
    for family in {term.family for term in catalogue().values()} - set(catalogue()):  # regimes are a term, too
        lines = Result("terms", family).out.splitlines()
        assert lines == Result("terms", family.split()[0]).out.splitlines() and max(map(len, lines)) <= 100
        kinds = [kind for kind, term in catalogue().items() if term.family == family]
        assert [line.split()[0] for line in lines[1:]] == kinds
    for name in [*catalogue(), *LAWS]:
        assert name in screen
        page = Result("terms", name)
        assert page.code == 0 and page.out.startswith(f"{name}: ")


def test_schema_is_the_json_schema_of_the_language():
    from procgen.report.schema import schema

    assert json.loads(Result("schema").out) == schema()


def test_digest_ends_with_0_when_values_are_as_recorded_and_1_when_not(rendered):
    good = Result("digest", str(rendered), "--redraw")
    assert good.code == 0
    known = pg.open_ensemble(rendered).digest
    assert known in good.out
    assert Result("digest", str(rendered), "--expect", known).code == 0
    assert Result("digest", str(rendered), "--expect", "0" * 64).code == 1
    part = next(rendered.glob("*.parquet"))
    table = pq.read_table(part)
    values = table["flow"].to_numpy().copy()
    values[7 * 48 + 5] += 1e-9
    place = table.schema.get_field_index("flow")
    pq.write_table(table.set_column(place, table.schema.field("flow"), pa.array(values)), part)
    bad = Result("digest", str(rendered), "--redraw")
    assert bad.code == 1
    assert "path 7, step 5" in bad.out


def test_a_changed_manifest_is_named_by_digest_and_refused_by_validate(rendered):
    path = rendered / "manifest.json"
    path.write_text(path.read_text().replace('"stream_version": 1', '"stream_version": 9'))
    found = Result("digest", str(rendered))
    assert found.code == 1 and "identity.stream_version is 9, and 1 in the part" in found.out
    assert "manifest.json was changed after it was written (identity.stream_version)" in refused(
        Result("validate", str(rendered))
    )
    assert Result("render", PUMP, "-o", str(rendered), *SMALL, "--resume").code == 0
    assert Result("digest", str(rendered)).code == 0


# bad input


def test_a_broken_spec_lists_every_fault_with_its_place(tmp_path):
    spec = tmp_path / "broken.yaml"
    spec.write_text(
        "procgen: 1\nseed: 1\npaths: 10\ntime: {steps: 5}\nseries:\n  x: [{ar: {phi: 1.2, sd: -1}}, {trnd: {}}]\n"
    )
    for command in (["theory"], ["render", "-o", str(tmp_path / "out")], ["validate", str(tmp_path), "--spec"]):
        text = refused(Result(*command, str(spec)))
        assert "did you mean trend?" in text
        assert "a number above 0, got -1" in text
        assert "line 6, column" in text
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize("command", [["theory"], ["render", "-o", "out"], ["validate"], ["digest"]])
def test_a_file_that_is_not_there(command, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert "nowhere" in refused(Result(*command, "nowhere.yaml"))
    assert list(tmp_path.iterdir()) == []


def test_a_spec_that_is_no_yaml_or_no_text(tmp_path):
    for content in (b"\x00\x01\x02", b"series: [", b"\xff\xfe\x00", b"!!python/object:os.system x", b""):
        (tmp_path / "spec.yaml").write_bytes(content)
        refused(Result("theory", str(tmp_path / "spec.yaml")))
    refused(Result("theory", str(tmp_path)))


def test_a_foreign_or_unreadable_parquet(tmp_path, rendered):
    foreign = tmp_path / "foreign.parquet"
    pq.write_table(pa.table({"a": [1, 2], "b": [3.0, 4.0]}), foreign)
    assert "a, b" in refused(Result("validate", str(foreign), "--spec", PUMP))
    refused(Result("validate", str(foreign)))
    broken = tmp_path / "broken.parquet"
    broken.write_bytes(b"PAR1 this is not a Parquet file PAR1")
    assert "broken.parquet" in refused(Result("validate", str(broken), "--spec", PUMP))
    part = next(rendered.glob("*.parquet"))
    part.write_bytes(part.read_bytes()[:1000])
    result = Result("validate", str(rendered))
    assert result.code in (1, 2) and part.name in result.out + result.err and "Traceback" not in result.err


def test_a_render_that_can_never_succeed_leaves_no_folder(tmp_path):
    spec = tmp_path / "spec.yaml"
    spec.write_text("procgen: 1\nseed: 1\npaths: 10\ntime: {steps: 5}\nseries:\n  x: [{exp: [{constant: 800}]}]\n")
    assert "x.exp needs a body below 709" in refused(Result("render", str(spec), "-o", str(tmp_path / "out")))
    assert not (tmp_path / "out").exists()


def test_a_part_that_is_missing(rendered):
    next(rendered.glob("*.parquet")).unlink()
    assert "paths-000000000" in refused(Result("validate", str(rendered)))
    assert Result("render", PUMP, "-o", str(rendered), *SMALL, "--resume").code == 0
    assert Result("digest", str(rendered)).code == 0


def test_an_ensemble_of_another_spec_is_not_overwritten_unless_asked(rendered):
    before = pg.open_ensemble(rendered).digest
    assert "--overwrite" in refused(Result("render", PUMP, "-o", str(rendered), *SMALL, "--seed", "8"))
    assert pg.open_ensemble(rendered).digest == before
    assert Result("render", PUMP, "-o", str(rendered), *SMALL, "--seed", "8", "--overwrite").code == 0
    assert pg.open_ensemble(rendered).digest != before


def test_what_is_not_ours_in_out_is_left_alone(tmp_path):
    (tmp_path / "notes.txt").write_text("mine")
    Result("render", PUMP, "-o", str(tmp_path), *SMALL)
    Result("render", PUMP, "-o", str(tmp_path), *SMALL, "--overwrite")
    assert (tmp_path / "notes.txt").read_text() == "mine"


def test_sizes_that_nobody_can_mean_are_refused_before_anything_is_drawn(tmp_path):
    text = refused(Result("render", PUMP, "-o", str(tmp_path / "out"), "--paths", "1000000000", "--steps", "1000000"))
    assert "paths" in text
    assert not list(tmp_path.glob("out/*.parquet"))


def test_more_than_the_disk_holds_is_refused_with_the_figure(tmp_path, monkeypatch):
    usage = shutil.disk_usage(tmp_path)
    monkeypatch.setattr(shutil, "disk_usage", lambda path: usage._replace(free=1000))
    text = refused(Result("render", PUMP, "-o", str(tmp_path / "out"), *SMALL))
    assert "1000" in text or "1.00 kB" in text or "1 kB" in text
    assert not list((tmp_path / "out").glob("*.parquet"))


@pytest.mark.parametrize(("option", "place"), [("--paths", "paths"), ("--steps", "time.steps"), ("--seed", "seed")])
def test_what_an_option_says_is_not_set_too(tmp_path, option, place):
    out = ["render", PUMP, "-o", str(tmp_path / "out")]
    message = refused(Result(*out, option, "2", "--set", f"{place}=7"))
    assert f"{place} is set twice, also by {option}; keep one of them" in message
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize(
    "arguments",
    [
        ["render", PUMP],
        ["render", PUMP, "-o", ""],
        ["render", PUMP, "-o", "x", "--paths", "0"],
        ["render", PUMP, "-o", "x", "--paths", "many"],
        ["render", PUMP, "-o", "x", "--workers", "-1"],
        ["render", PUMP, "-o", "x", "--layout", "cube"],
        ["render", PUMP, "-o", "x", "--resume", "--overwrite"],
        ["render", PUMP, "-o", "x", "--reveal", "flow.nothing"],
        ["theory", PUMP, "--at", "one,two"],
        ["theory", PUMP, "--at", "-3"],
        ["theory", PUMP, "--frequencies", "0,0.6"],
        ["theory", PUMP, "--frequencies", "nan"],
        ["theory", PUMP, "--horizon", "0,1"],
        ["validate", "x", "--false-alarm", "2"],
        ["terms", "seasonl"],
        ["digest", "x", "--expect", "abc"],
        ["paint"],
        ["render", PUMP, "--colour"],
    ],
)
def test_arguments_that_mean_nothing(arguments, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    refused(Result(*arguments))
    assert list(tmp_path.iterdir()) == []


def test_a_fault_of_our_own_is_a_sentence_and_a_traceback_only_on_request(monkeypatch):
    def broken(path):
        raise RuntimeError("no such luck")

    monkeypatch.setattr(pg, "load", broken, raising=False)
    result = Result("theory", PUMP)
    assert result.code == 2
    assert "fault in procgen itself (RuntimeError: no such luck); please report it" in result.err
    assert "Traceback" not in result.err
    monkeypatch.setenv("PROCGEN_DEBUG", "1")
    assert "Traceback" in Result("theory", PUMP).err


# whole processes


def test_a_reader_that_has_enough_is_no_failure():
    done = subprocess.run(
        ["sh", "-c", f"'{sys.executable}' -m procgen theory '{PUMP}' --lags 20000 --json | head -c 10"],
        capture_output=True,
        text=True,
    )
    assert done.stderr == "" and len(done.stdout) == 10


def test_a_full_disk_leaves_nothing_that_looks_whole_and_resume_goes_on(tmp_path):
    # A limit on the size of a file stands for the disk: both end a write with an error of the system.
    out = tmp_path / "out"
    command = f"ulimit -f 2000; exec '{sys.executable}' -m procgen render '{PUMP}' -o '{out}' --workers 1"
    done = subprocess.run(["sh", "-c", command], capture_output=True, text=True)
    assert done.returncode == 2, done.stderr
    assert done.stderr.startswith("procgen: ") and "Traceback" not in done.stderr
    assert not out.exists()  # not one part was whole, so that there is nothing to go on with
    refused(Result("validate", str(out)))
    assert Result("render", PUMP, "-o", str(out), "--resume").code == 0
    assert pg.open_ensemble(out).digest == pg.render(pg.load(PUMP)).digest


# The command, each process of which draws one part and then stands still until it was struck: it cannot end before.
STANDING = """
import pathlib, sys, time
from procgen.ensemble import part

drawn, struck, done = part._render_part, pathlib.Path(sys.argv.pop(1)), []

def first_only(*task):
    while done and not struck.exists():
        time.sleep(0.01)
    done.append(drawn(*task))
    return done[-1]

part._render_part = first_only
import procgen.__main__
"""


def test_ctrl_c_ends_with_130_and_resume_gives_the_same_values(tmp_path):
    out, size = tmp_path / "out", ["--paths", "40000", "--workers", "2"]  # four parts, two at a time
    command = [sys.executable, "-c", STANDING, str(tmp_path / "struck"), "render", PUMP, "-o", str(out), *size]
    process = subprocess.Popen(command, stderr=subprocess.PIPE, text=True, start_new_session=True)
    wait_for("the first part", lambda: list(out.glob("*.parquet")) or process.poll() is not None)
    os.killpg(process.pid, signal.SIGINT)  # as a terminal does: to every process of the group
    (tmp_path / "struck").touch()
    _, err = process.communicate(timeout=60)
    assert process.returncode == 130, err
    assert err.splitlines() == ["procgen: stopped; what was finished is kept, and render goes on with --resume"]
    assert not (out / "manifest.json").exists()
    assert "--resume" in refused(Result("render", PUMP, "-o", str(out), *size))
    assert Result("render", PUMP, "-o", str(out), *size, "--resume").code == 0
    again = Result("digest", str(out), "--redraw")
    assert again.code == 0 and "all the same bits" in again.out


def test_a_bar_on_a_terminal():
    pty = pytest.importorskip("pty")
    outer, inner = pty.openpty()
    code = (
        "import time\nfrom procgen.console import progress\n"
        "with progress('drawing') as tick:\n"
        "    for done in range(0, 10_000_001, 1_000_000):\n        tick(done, 10_000_000)\n        time.sleep(0.03)\n"
    )
    environment = os.environ | {"TERM": "xterm", "COLUMNS": "120"}
    subprocess.run([sys.executable, "-c", code], stderr=inner, stdout=subprocess.DEVNULL, env=environment, check=True)
    os.close(inner)
    shown = b""
    while len(shown) < 100_000:
        try:
            block = os.read(outer, 4096)
        except OSError:
            break
        if not block:
            break
        shown += block
    os.close(outer)
    text = shown.decode()
    assert "drawing" in text and "of 10,000,000 rows" in text and "a second" in text and "%" in text


@pytest.mark.parametrize("text", ["ftp:/host/x", "s3:/bucket/run"])
def test_a_url_with_one_slash_is_no_folder(text, tmp_path, monkeypatch, rendered):
    monkeypatch.chdir(tmp_path)
    said = refused(Result("render", PUMP, "-o", text, *SMALL))
    assert "with one slash; write two" in said and f"./{text}" in said
    assert "with one slash; write two" in refused(Result("picture", text, "-o", "x.html"))
    assert "on this machine, where exports are written" in refused(Result("export", str(rendered), "-o", f"{text}.csv"))
    assert list(tmp_path.iterdir()) == [rendered]
