"""Tables in files: what is read, and what is refused in a sentence that says how to mend it."""

import gzip
import io

import numpy as np
import pandas as pd
import pytest

from procgen.checks.files import TableError
from procgen.checks.validate import validate
from procgen.ensemble.source import read_spec
from tests.studies.departures import draw

SPEC = read_spec(
    {
        "procgen": 1,
        "seed": 5,
        "paths": 150,
        "time": {"start": "2027-03-28", "every": "1h", "steps": 60, "zone": "Europe/Berlin"},
        "series": {"x": [{"ar": {"phi": 0.6, "sd": 1}}], "y": [{"constant": 3}, {"white_noise": {"sd": 2}}]},
    }
)
DAILY = read_spec(
    {
        "procgen": 1,
        "seed": 5,
        "paths": 150,
        "time": {"start": "2027-03-20", "every": "1 day", "steps": 60, "zone": "Europe/Berlin"},
        "series": {"x": [{"white_noise": {"sd": 1}}]},
    }
)


@pytest.fixture(scope="module")
def frame():
    values = draw(SPEC)
    path, step = np.divmod(np.arange(150 * 60), 60)
    return pd.DataFrame({"path": path, "step": step, "x": values["x"].ravel(), "y": values["y"].ravel()})


def refused(path, spec=SPEC, columns=None):
    with pytest.raises(TableError) as error:
        validate(path, spec, columns=columns)
    return str(error.value)


@pytest.mark.parametrize("name", ["t.csv", "t.txt", "t.tsv", "t.tsv.gz"])
@pytest.mark.parametrize("separator", ["\t", ";", ","])
def test_tabs_and_semicolons_are_read_under_any_name(frame, tmp_path, name, separator):
    frame.to_csv(tmp_path / name, sep=separator, index=False)
    assert validate(tmp_path / name, SPEC).agrees is True


def test_names_in_quotes_and_a_mark_of_utf_8_are_read(frame, tmp_path):
    frame.rename(columns={"x": "load, MW"}).to_csv(tmp_path / "t.csv", index=False, encoding="utf-8-sig")
    assert validate(tmp_path / "t.csv", SPEC, columns={"x": "load, MW"}).agrees is True


def test_two_columns_of_one_name_are_refused(frame, tmp_path):
    twice = pd.concat([frame, frame[["x"]]], axis=1)
    said = "has 2 columns named 'x', columns 3 and 5; rename or drop all but the one for x"
    twice.to_csv(tmp_path / "t.csv", index=False)
    assert refused(tmp_path / "t.csv") == f"t.csv {said}"
    assert refused(twice) == f"the table {said}"
    unused = pd.concat([frame, frame[["x", "x"]].set_axis(["z", "z"], axis=1)], axis=1)
    unused.to_csv(tmp_path / "u.csv", index=False)
    assert validate(tmp_path / "u.csv", SPEC).agrees is True


LINES = "path,step,x,y\n" + "".join(f"0,{k},0.5,{k}\n" for k in range(60))


@pytest.mark.parametrize("chunk", [50, 1 << 24])
@pytest.mark.parametrize(
    ("change", "said"),
    [
        (lambda s: s.replace("0,1,0.5,1\n", "0,1,0,5,1\n"), "in line 3, as the header has, got 5: '0,1,0,5,1'"),
        (lambda s: s.replace("0.5", "0,5"), "in line 2, as the header has, got 5: '0,0,0,5,0'"),
        (lambda s: s.replace("59\n", "59,\n"), "in line 61, as the header has, got 5: '0,59,0.5,59,'"),
        (lambda s: s[:-1] + ",7", "in line 61, as the header has, got 5: '0,59,0.5,59,7'"),
        (lambda s: s.replace("0,0,", '"0",0,') + "0,60,1,2,3", "in line 62, as the header has, got 5: '0,60,1,2,3'"),
        (lambda s: (s + "0,60,1,2,3\n").replace("\n", "\r\n"), "in line 62, as the header has, got 5: '0,60,1,2,3'"),
    ],
)
def test_a_line_with_more_fields_than_the_header_is_refused(tmp_path, monkeypatch, chunk, change, said):
    monkeypatch.setattr("procgen.checks.files._CHUNK", chunk)
    (tmp_path / "t.csv").write_bytes(change(LINES).encode())
    text = refused(tmp_path / "t.csv")
    assert f"expected 4 fields between commas {said}; write numbers with a decimal point, not a comma" in text


@pytest.mark.parametrize("chunk", [50, 1 << 24])
@pytest.mark.parametrize(
    ("change", "said"),
    [
        (lambda s: s.replace("0,1,0.5,1\n", "0,1,0.5\n"), "in line 3, as the header has, got 3: '0,1,0.5'"),
        (lambda s: s.replace("0,1,0.5,1\n", "0,1\n\n"), "in line 3, as the header has, got 2: '0,1'"),
        (lambda s: s[: s.rindex(",")], "in line 61, as the header has, got 3: '0,59,0.5'"),
        (
            lambda s: s.replace("path", '"path"').replace("9,0.5,9", "9", 1),
            "in line 11, as the header has, got 2: '0,9'",
        ),
        (lambda s: s.replace("0,9,0.5,9", "7").replace("\n", "\r\n"), "in line 11, as the header has, got 1: '7'"),
    ],
)
def test_a_line_with_fewer_fields_than_the_header_is_refused(tmp_path, monkeypatch, chunk, change, said):
    monkeypatch.setattr("procgen.checks.files._CHUNK", chunk)
    (tmp_path / "t.csv").write_bytes(change(LINES).encode())
    text = refused(tmp_path / "t.csv")
    assert f"expected 4 fields between commas {said}; is it cut off? Of a value that is missing the field is" in text


@pytest.mark.parametrize("end", ["\n", "\r\n"])
@pytest.mark.parametrize("quoted", [False, True])
def test_blank_lines_are_skipped_and_empty_fields_are_missing_values(frame, tmp_path, end, quoted):
    text = frame.to_csv(index=False).replace("\n", "\n\n  \n", 3) + "\n \n"
    text = text.replace("path", '"path"') if quoted else text
    (tmp_path / "t.csv").write_bytes(text.replace("\n", end).encode())
    assert validate(tmp_path / "t.csv", SPEC).agrees is True
    frame.assign(y=frame["y"].where(frame["step"] != 7)).to_csv(tmp_path / "u.csv", index=False)
    assert "150 values are not finite" in " ".join(validate(tmp_path / "u.csv", SPEC).headline)


@pytest.mark.parametrize("style", ["plain", "quoted", "windows"])
def test_lines_as_they_should_be_are_not_refused(frame, tmp_path, monkeypatch, style):
    monkeypatch.setattr("procgen.checks.files._CHUNK", 4096)
    table = frame.assign(note="a, b\nc" if style == "quoted" else "d")
    table.to_csv(tmp_path / "t.csv", index=False, lineterminator="\r\n" if style == "windows" else "\n")
    assert validate(tmp_path / "t.csv", SPEC).agrees is True


def parquet(frame):
    file = io.BytesIO()
    frame.to_parquet(file)
    return file.getvalue()


@pytest.mark.parametrize(
    ("name", "content", "said"),
    [
        ("t.csv", b"", "t.csv is empty; expected a line of column names"),
        ("t.csv", b"\xef\xbb\xbf\n\n", "t.csv is empty; expected a line of column names"),
        ("t.csv", LINES.encode("utf-16"), "is UTF-16; save it as UTF-8, or read it with pandas"),
        ("t.csv", LINES.encode("utf-16-be"), "is UTF-16; save it as UTF-8, or read it with pandas"),
        ("t.csv", b"path,step\x00\x01", "is not text, for it holds bytes that are 0; expected CSV, or Parquet"),
        ("t.csv", b"PK\3\4\x14\0", "is a workbook or a zip archive, not text; save the sheet as CSV"),
        ("t.csv", gzip.compress(LINES.encode()), "is compressed with gzip; give it a name that ends in .csv.gz"),
        ("t.csv.gz", LINES.encode(), "is not compressed with gzip; if it is text, give it a name without .gz"),
        ("t.csv", LINES.replace("x", "Größe").encode("cp1252"), "is not UTF-8: byte 0xf6 is no part of a letter"),
        ("t.csv", parquet(pd.DataFrame({"x": [1]})), "is a Parquet file; give it a name that ends in .parquet"),
        ("t.parquet", b"", "t.parquet is empty"),
        ("t.parquet", LINES.encode(), "is no Parquet file, for it does not begin with PAR1; if it is text"),
        ("t.parquet", parquet(pd.DataFrame({"x": [1]}))[:-9], "is cut off: a Parquet file ends with PAR1"),
        ("t.xlsx", b"PK", "expected a .csv, .tsv or .parquet file, got t.xlsx; save the sheet as CSV"),
    ],
)
def test_files_that_are_something_else(tmp_path, name, content, said):
    (tmp_path / name).write_bytes(content)
    assert said in refused(tmp_path / name)


@pytest.mark.parametrize(
    ("unit", "said"),
    [
        ("s", "it looks like seconds since 1970, which would be 2027-03-27T23:00:00: convert with pandas.to_datetime"),
        ("ms", "it looks like milliseconds since 1970, which would be 2027-03-27T23:00:00: convert with "),
        ("ns", "it looks like nanoseconds since 1970, which would be 2027-03-27T23:00:00: convert with "),
        ("day", "it looks like a day number of a spreadsheet, which would be 2027-03-27T23:00:00: convert with "),
    ],
)
def test_times_that_are_numbers(frame, tmp_path, unit, said):
    utc = np.asarray(SPEC.time.stamps(0, 60)).astype("datetime64[us]")
    if unit == "day":  # a spreadsheet counts from 1900-01-01 as 1, and has a 1900-02-29
        number = (utc - np.datetime64("1899-12-30")) / np.timedelta64(1, "D")
    else:
        number = utc.astype(f"datetime64[{unit}]").astype(np.int64)
    frame.assign(time=number[frame["step"]]).drop(columns="step").to_csv(tmp_path / "t.csv", index=False)
    text = refused(tmp_path / "t.csv")
    assert "in column time, line 2, is a number, not a time; " in text
    assert said in text


def test_faults_of_a_text_are_told_by_their_lines(frame, tmp_path):
    """Which an editor shows: line 1 has the column names, and blank lines count, as do the line ends in quotes."""
    lines = frame[["path", "step", "x"]].assign(y="1").head(6).to_csv(index=False).splitlines()
    lines[4] = lines[4][:-1] + "oops"
    for before, expected in (([], 5), (["", "  ", ""], 8)):
        text = "\n".join([*lines[:2], *before, *lines[2:]])
        for name, opened in (("t.csv", open), ("t.csv.gz", gzip.open)):
            with opened(tmp_path / name, "wt") as file:
                file.write(text)
            notes = [row.note for row in validate(tmp_path / name, SPEC).rows if row.what == "numbers"]
            assert notes == [f"1 value is no number, the first 'oops' in line {expected}"]
    quoted = "\n".join([lines[0] + ",note", lines[1] + ',"two\nlines"', *(line + "," for line in lines[2:])])
    (tmp_path / "q.csv").write_text(quoted)
    assert any(row.note.endswith("'oops' in line 6") for row in validate(tmp_path / "q.csv", SPEC).rows)


def test_faults_in_the_time_of_a_row_are_told_where_the_row_was_given(frame, tmp_path):
    """Though tables with a row an observation, or a column a path, are put in another order to be judged."""
    utc = pd.to_datetime(SPEC.time.stamps(0, 60), unit="us", utc=True).strftime("%Y-%m-%dT%H:%M:%SZ").to_numpy()
    panel = frame.assign(time=utc[frame["step"]]).drop(columns="step").melt(["path", "time"], ["x", "y"], "id", "value")
    panel.loc[len(frame) + 7, "time"] = "soon"
    panel.to_csv(tmp_path / "p.csv", index=False)
    assert f"'soon' in column time, line {len(frame) + 9}, is no time" in refused(tmp_path / "p.csv")
    panel.to_parquet(tmp_path / "p.parquet", index=False)
    row = f"row {len(frame) + 7}, counted from 0, is no time"
    assert row in refused(tmp_path / "p.parquet") and row in refused(panel)
    one = read_spec({**SPEC.raw, "series": {"x": SPEC.raw["series"]["x"]}})
    wide = frame.pivot(index="step", columns="path", values="x").rename(columns="path_{}".format).assign(time=utc)
    wide.iloc[9, -1] = "soon"
    wide.to_csv(tmp_path / "w.csv", index=False)
    with pytest.raises(TableError, match=r"'soon' in column time, line 11, is no time"):
        validate(tmp_path / "w.csv", one)


def test_times_without_an_hour(frame, tmp_path):
    utc = pd.to_datetime(SPEC.time.stamps(0, 60), unit="us", utc=True).tz_convert("Europe/Berlin")
    table = frame.assign(time=np.array(utc.strftime("%Y-%m-%d"))[frame["step"]])
    said = "times in time have no hour, only dates such as 2027-03-28, where the spec has a step every 1 h; write them "
    assert said in refused(table.drop(columns="step"))
    assert said in validate(table, SPEC).headline[0]


def test_dates_are_times_of_a_daily_grid_also_where_clocks_change(tmp_path):
    path, step = np.divmod(np.arange(150 * 60), 60)
    days = pd.date_range("2027-03-20", periods=60).strftime("%Y-%m-%d").to_numpy()
    table = pd.DataFrame({"path": path, "time": days[step], "x": draw(DAILY)["x"].ravel()})
    assert validate(table, DAILY).agrees is True
