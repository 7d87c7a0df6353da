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


def judged(verdict):
    return [(row.series, row.what, row.probe, row.p) for row in verdict.rows if row.p is not None]


def test_a_row_an_observation_is_judged_as_a_column_a_series(frame, tmp_path):
    utc = pd.to_datetime(SPEC.time.stamps(0, 60), unit="us", utc=True).strftime("%Y-%m-%dT%H:%M:%SZ").to_numpy()
    panel = frame.assign(time=utc[frame["step"]]).drop(columns="step").melt(["path", "time"], ["x", "y"], "id", "value")
    found = judged(validate(frame, SPEC))
    panel.sample(frac=1, random_state=2).to_csv(tmp_path / "p.csv", index=False)
    renamed = panel.replace({"id": {"x": "north"}}).rename(columns={"id": "meter", "value": "kw", "path": "run"})
    names = {"id": "meter", "value": "kw", "path": "run", "x": "north"}
    for verdict in (validate(tmp_path / "p.csv", SPEC), validate(renamed, SPEC, columns=names)):
        assert judged(verdict) == found
    short = validate(pd.concat([panel.drop(index=7), panel.iloc[[3]]]), SPEC)
    assert short.agrees is False
    assert any("1 row is there twice, the first path 0, step 3" in row.note for row in short.rows)
    for table, columns, message in (
        (panel[panel["id"] == "x"], None, "no rows whose id is 'y', for the series y; it has x; .* --series-col y=ID"),
        (panel, {"value": "kw"}, "no column 'kw' for value; .* --value-col NAME"),
        (panel.astype({"value": str}).replace({"value": panel["value"].astype(str)[5]}, "?"), None, "got '.' in row 5"),
    ):
        with pytest.raises(TableError, match=message):
            validate(table, SPEC, columns=columns)


def test_a_column_a_path_is_one_series(frame):
    one = read_spec({**RAW, "series": {"x": RAW["series"]["x"]}})
    wide = frame.pivot(index="step", columns="path", values="x")
    named = wide.rename(columns="path_{}".format).reset_index()
    for table in (wide, named):
        assert judged(validate(table, one)) == judged(validate(frame, one))
    with pytest.raises(TableError, match=r"a column a path \(layout wide\), .* the spec has 2: x and y; expected a"):
        validate(named, SPEC)
    nested = frame.groupby("path").agg(list).reset_index()[["path", "x"]]
    with pytest.raises(TableError, match=r"x holds lists \(layout nested\); expected a column a series, .* long"):
        validate(nested, one)


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
        "structure: 1 row is there twice, the first path 3, step 20; 2 rows are missing, the first path 1, step 5"
    )


def test_text_and_empty_cells_are_named(frame, tmp_path):
    spoiled = frame.astype({"x": object})
    spoiled.loc[7, "x"] = "n/a?"
    spoiled.loc[99, "y"] = np.nan
    spoiled.to_csv(tmp_path / "t.csv", index=False)
    verdict = validate(tmp_path / "t.csv", SPEC)
    lines = "\n".join(row.note for row in verdict.rows if row.outcome == "departs")
    assert "1 value is no number, the first 'n/a?' in line 9" in lines
    assert "1 value is not finite, the first at path 1, step 39" in lines


@pytest.mark.parametrize(
    ("change", "columns", "sentence"),
    [
        (lambda f: f.rename(columns={"x": "X"}), None, "no column 'x' for x.*with --series-col x=NAME"),
        (lambda f: f, {"path": "run"}, "no column 'run' for path.*with --path-col NAME"),
        (lambda f: f, {"step": "hour"}, "no column 'hour' for step.*with --step-col NAME"),
        (lambda f: f, {"time": "at"}, "no column 'at' for time.*with --time-col NAME"),
        (lambda f: f, {"z": "x"}, "expected a series of the spec, one of x, y, or one of path, .*, got 'z'"),
        (lambda f: f.assign(step=f["step"] * 1000), None, "is the right column taken for the step.*--step-col NAME"),
        (lambda f: f.assign(step=f["step"] + 0.5), None, "whole steps in step, got 0.5 in row 0, the first;"),
        (lambda f: f.assign(step=f["step"] - 3), None, "expected steps from 0 on in step, got -3"),
        (lambda f: f.iloc[:0], None, "has no rows"),
        (lambda f: f.assign(path=f["path"].where(f.index != 4)), None, "row 4, counted from 0 has no path"),
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


def test_missing_rows_are_named_once(frame):
    notes = [r.note for r in validate(frame.drop(index=[65]), SPEC).rows if r.outcome == "departs"]
    assert notes == ["1 row is missing, the first path 1, step 5"]


@pytest.mark.parametrize("apart", [60, 1])
def test_windows_that_keep_the_steps_of_their_record_cannot_be_judged(frame, apart):
    record = frame.assign(step=frame["step"] + apart * frame["path"])
    said = (
        rf"got \d+ paths of 60 steps each that begin at steps of their own, such as 1 at step {apart}, as windows cut "
        "from one long record do; number the steps of each path from 0, or, if they are one path, give them one name"
    )
    with pytest.raises(TableError, match=said):
        validate(record, SPEC)


def test_a_window_that_begins_later_cannot_be_judged(frame):
    """It departs from nothing: of no value that is there is anything wrong."""
    late = (
        "the table cannot be judged as it is: expected steps from 0 on, got steps 20 to 59; a spec states its values "
        "from step 0 on, so give steps 0 to 19 too, as rows with empty values where they are missing; where the spec "
        "states the same of every step, numbers from 0 will do"
    )
    with pytest.raises(TableError) as error:
        validate(frame[frame["step"] >= 20], SPEC)
    assert str(error.value) == late
    one = (
        r"got steps 1 to 58 \(if its steps count from 1, number them from 0\); .*, so give step 0 too, as a row with "
        "an empty value where it is missing;"
    )
    with pytest.raises(TableError, match=one):
        validate(frame[(frame["step"] >= 1) & (frame["step"] < 59)], SPEC)
    with pytest.raises(TableError, match="got steps 20 to 59"):
        timed = frame.assign(time=pd.Timestamp("2027-01-04") + pd.to_timedelta(frame["step"], unit="h"))
        hourly = read_spec({**SPEC.raw, "time": {"start": "2027-01-04T00:00", "every": "1h", "steps": 60}})
        validate(timed[timed["step"] >= 20].drop(columns="step"), hourly)
    from_zero = frame[frame["step"] >= 20].assign(step=lambda rows: rows["step"] - 20)
    assert validate(from_zero, SPEC).agrees is not None
    absent = frame[(frame["step"] >= 20) | (frame["path"] > 0)]  # of one path only: these rows are missing
    assert validate(absent, SPEC).agrees is False


@pytest.mark.parametrize(
    ("spoil", "said"),
    [
        (lambda x: pd.Timestamp("2027-01-01"), "x holds times, such as 2027-01-01 00:00:00; expected numbers"),
        (lambda x: pd.Timestamp("2027-01-01").date(), "x holds times, such as 2027-01-01; expected numbers"),
        (lambda x: pd.Timedelta("1h"), "x holds durations, such as 0 days 01:00:00; expected numbers"),
        (lambda x: x > -99, "x holds True and False, such as True; expected numbers"),
        (lambda x: (x > -99).astype(object), "x holds True and False, such as True; expected numbers"),
        (lambda x: np.where(x.index < 2, "abc", "d"), "x holds text, such as 'abc' and 'd'; expected numbers"),
        (lambda x: pd.Categorical(["abc"] * len(x)), "x holds text, such as 'abc'; expected numbers"),
        (lambda x: x.map(lambda v: f"1,{abs(v):07.3f}"), "x has thousands separators, the first '1,00"),
    ],
)
def test_a_column_of_no_numbers_is_refused(frame, spoil, said):
    with pytest.raises(TableError) as error:
        validate(frame.assign(x=spoil(frame.x)), SPEC)
    assert said in str(error.value)


def test_an_argument_of_another_kind_is_told(frame):
    with pytest.raises(TypeError, match=r'expected columns to be a mapping such as .*, got .x.'):
        validate(frame, SPEC, columns="x")
    with pytest.raises(ValueError, match="expected false_alarm to be a probability between 0 and 1, got 'a'"):
        validate(frame, SPEC, false_alarm="a")
    with pytest.raises(TableError, match=r"expected a series of the spec, one of x, y, or .*, got 'z'.*--series-col"):
        validate(frame, SPEC, columns={"z": "x"})


def test_order_of_rows_and_steps_beyond_the_spec_are_told(frame):
    ordered = " ".join(validate(frame.drop(columns="step"), SPEC).text().split())
    assert "rows of a path are taken in their order; else name the right one with --step-col" in ordered
    spec = read_spec({**RAW, "time": {**RAW["time"], "steps": 40}})
    assert validate(frame, spec).title.endswith(" (steps 40–59 are beyond the 40 steps of the spec; judged on all 60)")


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
    garch = {"garch": {"sd": 2, "alpha": 0.13, "beta": 0.86}}
    spec = read_spec({**RAW, "series": {"vol": [garch]}})
    path, step = np.divmod(np.arange(200 * 50), 50)
    table = pd.DataFrame({"path": path, "step": step})
    table["vol"] = 2 * np.random.default_rng(1).standard_normal(len(table))  # level: false alarm 0.001
    verdict = validate(table, spec)
    assert verdict.agrees is None
    assert verdict.title.startswith("CANNOT BE JUDGED: nothing about the spread of vol could be judged; only level")
    assert "needs about 61 steps, not 50" in verdict.text()


QUARTERS = {**RAW, "time": {"start": "2027-10-31", "every": "15min", "steps": 40, "zone": "Europe/Berlin"}}
STARTS = np.datetime64("2027-10-30T22:00")  # 00:00 there; at 03:00 the clocks go back to 02:00
HOURLY = "expected every 15 min, the first at 2027-10-30T22:00 UTC, got every 1 h, the first at 2027-10-30T22:00 UTC"


@pytest.fixture(scope="module")
def quarters():
    spec = read_spec({**QUARTERS, "series": {"x": RAW["series"]["x"]}})
    path, step = np.divmod(np.arange(150 * 40), 40)
    return spec, pd.DataFrame({"path": path, "step": step, "x": draw(spec)["x"].ravel()})


def timed(table, minutes=15, shift=0, zone=None):
    stamps = STARTS + np.timedelta64(1, "m") * (table["step"].to_numpy() * minutes + shift)
    times = pd.Series(stamps).dt.tz_localize("UTC")
    return table.assign(time=times if zone is None else times.dt.tz_convert(zone).dt.tz_localize(None))


@pytest.mark.parametrize("zone", [None, "UTC", "Europe/Berlin"])  # the last holds 02:00 to 03:00 twice
def test_times_beside_their_steps_agree(quarters, zone):
    spec, table = quarters
    verdict = validate(timed(table, zone=zone), spec)
    assert verdict.agrees is True
    assert next(row for row in verdict.rows if row.what == "times").outcome == "agrees"


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"minutes": 60}, HOURLY),
        ({"shift": 15}, "got the first at 2027-10-30T22:15 UTC, 15 min later (one step)"),
        ({"shift": -15}, "got the first at 2027-10-30T21:45 UTC, 15 min earlier (one step)"),
        ({"zone": "Asia/Tokyo"}, "9 h later (another time zone?); times without a zone are read as UTC, or else as "),
        ({"shift": 365 * 1440}, "got the first at 2028-10-29T22:00 UTC, 365 days later"),
    ],
)
def test_a_grid_that_is_not_the_specs_is_told(quarters, change, said):
    spec, table = quarters
    table = timed(table, **change)
    verdict = validate(table, spec)
    assert verdict.agrees is False
    assert verdict.headline[0].startswith("structure: ") and said in verdict.headline[0]
    with pytest.raises(TableError, match="is no step of the spec; ") as error:
        validate(table.drop(columns="step"), spec)
    assert said in str(error.value)


def test_one_time_off_and_a_column_that_holds_none(quarters):
    spec, table = quarters
    table = timed(table)
    table.loc[[41], "time"] += pd.Timedelta("1min")
    line = validate(table, spec).headline[0]
    said = "structure: 1 time of 6,000 is not that of its step, the first 2027-10-30 22:16:00+00:00 at step 1, row 41"
    assert line.startswith(said)
    told = [row for row in validate(table.assign(time="soon"), spec).rows if row.what == "times"]
    assert [(row.outcome, row.note) for row in told] == [
        ("reported", "they are not compared with the spec's: 'soon' in column time, row 0, the first, is no time")
    ]


@pytest.mark.parametrize(
    ("style", "mended"),
    [("%d/%m/%Y %H:%M", "2027-10-30 22:00"), ("%m-%d-%Y", "2027-10-30"), ("%d.%m.%y", "2027-10-30")],
)
def test_dates_with_the_day_or_the_month_first_are_refused(quarters, style, mended, tmp_path):
    spec, table = quarters
    timed(table).assign(time=lambda t: t["time"].dt.strftime(style)).drop(columns="step").to_csv(tmp_path / "t.csv")
    with pytest.raises(TableError, match="in column time, line 2, may have its day or its month first") as error:
        validate(tmp_path / "t.csv", spec)
    assert str(error.value).endswith(f"write times with the year first (ISO 8601), such as {mended}")


def test_semicolons_are_read_and_decimal_commas_named(frame, tmp_path):
    frame.to_csv(tmp_path / "points.csv", sep=";", index=False)
    assert validate(tmp_path / "points.csv", SPEC).agrees is True
    frame.to_csv(tmp_path / "commas.csv", sep=";", decimal=",", index=False)
    with pytest.raises(TableError, match=r"x has decimal commas, the first '[-0-9]+,[0-9]+' in line 2; write numbers"):
        validate(tmp_path / "commas.csv", SPEC)


def test_of_many_columns_the_nearest_are_listed(frame):
    others = pd.DataFrame(0, frame.index, [f"c{k}" for k in range(200)])
    wide = pd.concat([frame.rename(columns={"x": "xx"}), others], axis=1)
    said = "no column 'x' for x; its 204 columns have none of that name, the nearest are xx, "
    with pytest.raises(TableError, match=said) as error:
        validate(wide, SPEC)
    assert len(str(error.value)) < 250


def test_paths_are_named_as_the_table_names_them(frame):
    table = frame.assign(path="run-" + frame["path"].map("{:03d}".format))
    table.loc[table["path"] == "run-008", "x"] = table.loc[table["path"] == "run-003", "x"].to_numpy()
    table.loc[67, "y"] = 1e9
    lines = "\n".join(validate(table, SPEC).headline)
    assert "y: one value far outside what the law allows: path run-001, step 7, value 1e+09 (" in lines
    assert "bit for bit, such as paths run-003 and run-008" in lines


def test_steps_that_no_path_has_are_said_in_the_first_line(frame):
    verdict = validate(frame[frame["step"] < 40], SPEC)
    assert verdict.agrees is True
    assert verdict.title.endswith(" (steps 40–59 are absent; judged on 40 steps)")
    assert "judged_on" in verdict.about and "absent" not in validate(frame, SPEC).title


def test_rows_of_many_paths_are_not_taken_for_one(frame):
    table = frame.rename(columns={"path": "run", "step": "hour"})
    with pytest.raises(TableError, match="no column of paths and none of steps or times, where a path has"):
        validate(table, SPEC)


def test_what_was_assumed_of_a_table_is_said_in_the_first_line(frame, tmp_path):
    counted = "steps in step count from 1; taken as steps 0 to 59"
    from_one = validate(frame.assign(step=frame["step"] + 1), SPEC)
    assert from_one.agrees is True and from_one.text().splitlines()[0].endswith(f" ({counted})")
    some = validate(frame[frame["path"] < 120].assign(step=frame["step"] + 1, y=frame["y"] + 9), SPEC)
    both = f"{counted}; 120 of the 150 paths stated"
    assert some.agrees is False and some.title == f"DEPARTS from what the spec states ({both})"
    assert f">{both[0].upper()}{both[1:]}.<" in some.to_html(tmp_path / "some.html").read_text()
    more = validate(frame, read_spec(RAW | {"paths": 100}))
    assert more.agrees is True and more.title.endswith(" (150 paths, 100 stated)")
    assert validate(frame, SPEC).title.endswith("spec states")


@pytest.mark.parametrize("name", ["none.csv", "none.parquet"])
def test_a_file_without_rows_says_so(frame, tmp_path, name):
    path = tmp_path / name
    (frame.iloc[:0].to_csv if name.endswith("csv") else frame.iloc[:0].to_parquet)(path, index=False)
    with pytest.raises(TableError, match=rf"{name} has no rows$"):
        validate(path, SPEC)
