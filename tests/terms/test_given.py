"""A known input from a file: matched by step or local time, put into the spec, refused where it does not fit."""

import numpy as np
import pandas as pd
import pytest

import procgen as pg

HEAD = {"procgen": 1, "seed": 5, "paths": 3}
BERLIN = {"start": "2027-03-28T00:00", "every": "1h", "steps": 4, "zone": "Europe/Berlin"}
# Local clock readings around the change to summer time in Berlin: there is no 02:00 (IANA time zone database).
CLOCKS = ["2027-03-27T23:00", "2027-03-28T00:00", "2027-03-28T01:00", "2027-03-28T03:00", "2027-03-28T04:00"]


def spec_file(folder, values, time=BERLIN, body=None):
    import yaml

    entry = {"given": {"values": values}}
    raw = {**HEAD, "time": time, "series": {"x": [entry] if body is None else body(entry)}}
    (folder / "s.yaml").write_text(yaml.safe_dump(raw), encoding="utf-8")
    return folder / "s.yaml"


def faults(path):
    with pytest.raises(pg.SpecError) as error:
        pg.load(path)
    return [fault.message for fault in error.value.faults]


@pytest.mark.parametrize("suffix", ["csv", "parquet"])
def test_local_times_are_matched_across_a_change_of_the_clocks(tmp_path, suffix):
    table = pd.DataFrame({"at": CLOCKS, "degrees": [3.0, 2.0, 1.0, 0.5, 0.0]}).sample(frac=1, random_state=1)
    if suffix == "csv":
        table.to_csv(tmp_path / "w.csv", index=False)
    else:
        table.assign(at=pd.to_datetime(table["at"])).to_parquet(tmp_path / "w.parquet")
    spec = pg.load(spec_file(tmp_path, {"file": f"w.{suffix}", "column": "degrees", "time": "at"}))
    assert np.array_equal(pg.render(spec)["x"], np.tile([2.0, 1.0, 0.5, 0.0], (3, 1)))
    assert pg.theory(spec)["x"].mean([0, 3]).tolist() == [2.0, 0.0]


def test_times_with_an_offset_say_which_of_two_hours_is_meant(tmp_path):
    autumn = BERLIN | {"start": "2027-10-31T01:00"}  # 02:00 happens twice: at +02:00 and at +01:00
    clocks = ["2027-10-31T01:00+02:00", "2027-10-31T02:00+02:00", "2027-10-31T02:00+01:00", "2027-10-31T03:00+01:00"]
    pd.DataFrame({"at": clocks, "v": [1, 2, 3, 4]}).to_csv(tmp_path / "w.csv", index=False)
    spec = pg.load(spec_file(tmp_path, {"file": "w.csv", "column": "v", "time": "at"}, autumn))
    assert pg.render(spec)["x"][0].tolist() == [1, 2, 3, 4]


def test_steps_may_begin_before_step_0_for_those_who_look_back(tmp_path):
    pd.DataFrame({"n": range(-2, 4), "v": np.arange(6.0)}).to_csv(tmp_path / "w.csv", index=False)
    path = spec_file(
        tmp_path, {"file": "w.csv", "column": "v", "step": "n"}, {"steps": 4}, lambda e: [{"lag": {"of": [e], "by": 2}}]
    )
    assert pg.render(path)["x"][0].tolist() == [0, 1, 2, 3]
    deeper = spec_file(
        tmp_path, {"file": "w.csv", "column": "v", "step": "n"}, {"steps": 4}, lambda e: [{"lag": {"of": [e], "by": 3}}]
    )
    with pytest.raises(pg.SpecError, match="its numbers begin there; give earlier ones, or lag less"):
        pg.render(pg.load(deeper))


def test_a_spec_that_was_read_needs_its_file_no_more(tmp_path):
    pd.DataFrame({"n": range(4), "v": [1.5, 2, 3, 4]}).to_csv(tmp_path / "w.csv", index=False)
    spec = pg.load(spec_file(tmp_path, {"file": "w.csv", "column": "v", "step": "n"}, {"steps": 4}))
    (tmp_path / "w.csv").unlink()
    again = pg.load(spec.raw)
    assert again.digest() == spec.digest() and pg.render(again)["x"][0].tolist() == [1.5, 2, 3, 4]
    pd.DataFrame({"n": range(4), "v": [1.5, 2, 3, 5]}).to_csv(tmp_path / "w.csv", index=False)
    assert pg.load(tmp_path / "s.yaml").digest() != spec.digest()


@pytest.mark.parametrize(("after", "values"), [("hold", [1, 2, 3, 3, 3]), ("repeat", [1, 2, 3, 1, 2])])
def test_what_follows_the_last_number(after, values):
    raw = {**HEAD, "time": {"steps": 5}, "series": {"x": [{"given": {"values": [1, 2, 3], "after": after}}]}}
    assert pg.render(raw)["x"][0].tolist() == values


def test_more_steps_than_numbers_are_refused():
    raw = {**HEAD, "time": {"steps": 5}, "series": {"x": [{"given": [1, 2, 3]}]}}
    with pytest.raises(pg.SpecError, match="expected at most 3 steps with given, got 5"):
        pg.render(raw)


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        ({"at": CLOCKS[:2], "wrong": [1, 2]}, "the table has no column degrees; it has at or wrong"),
        ({"at": [*CLOCKS, CLOCKS[1]], "degrees": range(6)}, "the table has two rows for step 0; keep one"),
        ({"at": CLOCKS[2:], "degrees": range(3)}, "the table has nothing for step 0; check its first row"),
        ({"at": [*CLOCKS[:2], CLOCKS[3]], "degrees": range(3)}, "the table has nothing for step 1, and more after it"),
        ({"at": ["2027-03-28T00:30"], "degrees": [1]}, "no step is at 2027-03-28T00:30 (line 2), the nearest, step "),
        ({"at": ["monday"], "degrees": [1]}, "expected a date, or a date and time, in column at, got 'monday'"),
        ({"at": CLOCKS, "degrees": [1, 2, "", 4, 5]}, 'expected a number, got ""'),
    ],
)
def test_a_table_that_does_not_fit_is_refused(tmp_path, rows, message):
    pd.DataFrame(rows).to_csv(tmp_path / "w.csv", index=False)
    (found,) = faults(spec_file(tmp_path, {"file": "w.csv", "column": "degrees", "time": "at"}))
    assert found.startswith(message)


def test_a_file_that_is_not_there_is_named(tmp_path):
    (found,) = faults(spec_file(tmp_path, {"file": "w.csv", "column": "degrees", "time": "at"}))
    assert found.startswith("there is no file") and "w.csv" in found


def test_another_start_finds_the_rows_of_its_own_times(tmp_path):
    days = pd.date_range("2027-03-01", periods=9, freq="D").strftime("%Y-%m-%d")
    pd.DataFrame({"at": days, "degrees": range(1, 10)}).to_csv(tmp_path / "w.csv", index=False)
    time = {"start": "2027-03-02", "every": "1d", "steps": 4}
    spec = pg.load(spec_file(tmp_path, {"file": "w.csv", "column": "degrees", "time": "at"}, time))
    assert pg.render(spec)["x"][0].tolist() == [2, 3, 4, 5]
    assert pg.render(spec.set({"time.start": "2027-03-05"}))["x"][0].tolist() == [5, 6, 7, 8]
    with pytest.raises(pg.SpecError, match=r"2027-03-01 \(line 2\) lies more than 9 steps before step 0; take"):
        spec.set({"time.start": "2027-04-05"})
    with pytest.raises(pg.SpecError, match="the table has nothing for step 0"):
        spec.set({"time.start": "2025-04-05"})
