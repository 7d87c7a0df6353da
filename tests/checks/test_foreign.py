"""Anyone's table: other names, any row order, times as text, and every fault named in a sentence."""

import numpy as np
import pandas as pd
import pytest

from procgen.checks.foreign import TableError
from procgen.checks.validate import validate
from procgen.ensemble.source import read_spec
from tests.studies.departures import draw

RAW = {
    "procgen": 1,
    "seed": 5,
    "paths": 150,
    "time": {"start": "2027-03-27T22:00", "every": "1h", "steps": 60, "zone": "Europe/Berlin"},
    "series": {"x": [{"ar": {"phi": 0.6, "sd": 1}}], "y": [{"constant": 3}, {"white_noise": {"sd": 2}}]},
}
SPEC = read_spec(RAW)


@pytest.fixture(scope="module")
def frame():
    values = draw(SPEC)
    path, step = np.divmod(np.arange(150 * 60), 60)
    return pd.DataFrame({"path": path, "step": step, "x": values["x"].ravel(), "y": values["y"].ravel()})


def test_a_frame_in_our_names_agrees(frame):
    assert validate(frame, SPEC).agrees is True


def test_other_names_order_and_labels(frame, tmp_path):
    other = frame.sample(frac=1, random_state=1).rename(columns={"path": "run", "step": "hour", "x": "load"})
    other["run"] = "run-" + other["run"].astype(str)
    names = {"path": "run", "step": "hour", "x": "load"}
    expected = {(r.series, r.what, r.probe): r.p for r in validate(frame, SPEC).rows if "neighbouring" not in r.what}
    other.to_csv(tmp_path / "a.csv", index=False)
    other.to_parquet(tmp_path / "a.parquet", index=False)
    for file in ("a.csv", "a.parquet"):
        verdict = validate(tmp_path / file, SPEC, columns=names)
        assert verdict.agrees is True
        found = {(r.series, r.what, r.probe): r.p for r in verdict.rows}
        moments = [key for key in expected if key[1] in ("mean", "variance", "covariance")]
        assert moments
        for key in moments:
            assert found[key] == pytest.approx(expected[key], rel=1e-9)


@pytest.mark.parametrize("style", ["utc", "naive utc", "local", "offset"])
def test_times_as_text(frame, style, tmp_path):
    utc = pd.to_datetime(SPEC.time.stamps(0, 60), unit="us", utc=True)
    local = utc.tz_convert("Europe/Berlin")
    stamps = {
        "utc": utc.strftime("%Y-%m-%dT%H:%M:%SZ"),
        "naive utc": utc.strftime("%Y-%m-%d %H:%M"),
        "local": local.strftime("%Y-%m-%d %H:%M"),
        "offset": [t.isoformat() for t in local],
    }[style]
    table = frame.assign(when=np.array(stamps)[frame["step"]]).drop(columns="step")
    table.to_csv(tmp_path / "t.csv", index=False)
    for role in ("time", "step"):  # a column of stamps is understood under either name
        verdict = validate(tmp_path / "t.csv", SPEC, columns={role: "when"})
        assert verdict.agrees is True
        assert verdict.about["steps"] == 60


def test_rows_without_steps_are_taken_in_their_order(frame):
    verdict = validate(frame.drop(columns="step"), SPEC)
    assert verdict.agrees is True
    assert any(r.what == "step order" and r.outcome == "reported" for r in verdict.rows)


def test_steps_from_one(frame):
    verdict = validate(frame.assign(step=frame["step"] + 1), SPEC)
    assert verdict.agrees is True
    assert any("count from 1" in r.note for r in verdict.rows)


def test_missing_and_doubled_rows_are_named(frame):
    spoiled = pd.concat([frame.drop(index=[65, 66]), frame.iloc[[200]]])
    verdict = validate(spoiled, SPEC)
    assert verdict.agrees is False
    assert verdict.headline[0].startswith(
        "structure: 1 rows are there twice, the first path 3, step 20; 2 rows are missing, the first path 1, step 5"
    )


def test_text_and_empty_cells_are_named(frame, tmp_path):
    spoiled = frame.astype({"x": object})
    spoiled.loc[7, "x"] = "n/a?"
    spoiled.loc[99, "y"] = np.nan
    spoiled.to_csv(tmp_path / "t.csv", index=False)
    verdict = validate(tmp_path / "t.csv", SPEC)
    lines = "\n".join(row.note for row in verdict.rows if row.outcome == "departs")
    assert "1 values are no numbers, the first 'n/a?' in row 7" in lines
    assert "1 value is not finite, the first at path 1, step 39" in lines


@pytest.mark.parametrize(
    ("change", "columns", "sentence"),
    [
        (lambda f: f.rename(columns={"x": "X"}), None, "no column 'x' for x.*with --series-col x=NAME"),
        (lambda f: f, {"path": "run"}, "no column 'run' for path.*with --path-col NAME"),
        (lambda f: f, {"step": "hour"}, "no column 'hour' for step.*with --step-col NAME"),
        (lambda f: f, {"time": "at"}, "no column 'at' for time.*with --time-col NAME"),
        (lambda f: f, {"z": "x"}, "expected one of path, step, time, x, y to be mapped, got 'z'"),
        (lambda f: f.assign(step=f["step"] * 1000), None, "is the right column taken for the step.*--step-col NAME"),
        (lambda f: f.assign(step=f["step"] + 0.5), None, "whole steps in step, got 0.5 in row 0; .*--step-col"),
        (lambda f: f.assign(step=f["step"] - 3), None, "expected steps from 0 on in step, got -3"),
        (lambda f: f.iloc[:0], None, "has no rows"),
        (lambda f: f.assign(path=f["path"].where(f.index != 4)), None, "row 4 has no path"),
        (lambda f: f.assign(when="soon"), {"time": "when"}, "is no time; .*--time-col NAME"),
    ],
)
def test_what_cannot_be_read_is_said_in_a_sentence(frame, change, columns, sentence):
    table = change(frame)
    with pytest.raises(TableError, match=sentence.replace("(", r"\(")):
        validate(table, SPEC, columns=columns)


def test_times_off_the_grid(frame):
    table = frame.assign(time=pd.Timestamp("2027-03-27 22:30") + pd.to_timedelta(frame["step"], unit="h"))
    with pytest.raises(TableError, match="is no step of the spec"):
        validate(table.drop(columns="step"), SPEC)


@pytest.mark.parametrize("name", ["gone.csv", "broken.parquet", "notes.docx", "empty.csv"])
def test_files_that_are_no_tables(tmp_path, name):
    if name != "gone.csv":
        (tmp_path / name).write_bytes(b"" if name == "empty.csv" else b"\x00\xff not a table")
    with pytest.raises(TableError):
        validate(tmp_path / name, SPEC)


def test_a_table_needs_a_spec(frame):
    with pytest.raises(ValueError, match="give the spec"):
        validate(frame)


def test_a_missing_path_column_is_asked_for(frame):
    said = "no column path; columns are run, step, x, y; name the right one with --path-col"
    with pytest.raises(TableError, match=said):
        validate(frame.rename(columns={"path": "run"}), SPEC)


def test_missing_rows_are_named_once_and_a_window_as_a_window(frame):
    notes = [r.note for r in validate(frame.drop(index=[65]), SPEC).rows if r.outcome == "departs"]
    assert notes == ["1 rows are missing, the first path 1, step 5"]
    notes = [r.note for r in validate(frame[frame["step"] >= 20], SPEC).rows if r.kind == "structure"]
    assert any("a window that starts at step 20" in note for note in notes)
    assert not any("not finite" in note for note in notes)


def test_complex_numbers_are_refused(frame):
    with pytest.raises(TableError, match="x holds complex numbers"):
        validate(frame.assign(x=frame["x"] + 1j), SPEC)


def test_columns_of_an_ensemble_cannot_be_named(tmp_path):
    from procgen.checks.source import origin

    class Ours:
        blocks = whole = None

    with pytest.raises(TableError, match="--path-col"):
        origin(Ours(), SPEC, {"path": "foo"})


def test_a_series_without_chance_is_its_stated_values():
    spec = read_spec({**RAW, "series": {"x": [{"constant": 5}]}})
    path, step = np.divmod(np.arange(150 * 60), 60)
    table = pd.DataFrame({"path": path, "step": step, "x": 5})
    assert validate(table, spec).agrees is True
    table.loc[70, "x"] = 7
    assert validate(table, spec).headline == ["x: level: a value is 7, stated 5, without any chance in the spec"]


def test_a_mean_alone_is_no_agreement():
    garch = {"garch": {"sd": 2, "alpha": 0.15, "beta": 0.8}}
    spec = read_spec({**RAW, "series": {"vol": [garch]}})
    path, step = np.divmod(np.arange(200 * 50), 50)
    table = pd.DataFrame({"path": path, "step": step})
    table["vol"] = 2 * np.random.default_rng(1).standard_normal(len(table))  # level: false alarm 0.001
    verdict = validate(table, spec)
    assert verdict.agrees is None
    assert verdict.title.startswith("CANNOT BE JUDGED: nothing about the spread of vol could be judged; only level")
    assert "needs about 95 steps, not 50" in verdict.to_text()
