"""Files for other tools: pandas reads back every value; what a target cannot hold is said before it is written."""

import builtins
import os
import subprocess
import sys
import zipfile
from xml.etree import ElementTree

import numpy as np
import openpyxl
import pandas as pd
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import procgen as pg
from procgen.ensemble import choice, plan, targets
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.plan import STEPS
from procgen.ensemble.targets import SHEET_ROWS
from tests.ensemble.fakes import ROOT, fake_render, fake_spec
from tests.ensemble.test_layouts import DEMAND, REVEAL, WAYS, unstamped

EXACT = {} if int(pd.__version__.split(".")[0]) >= 3 else {"float_precision": "round_trip"}
SERIES = ("tea", "coffee", "guests")


@pytest.fixture(scope="module")
def demand():
    return pg.render(DEMAND)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    out = tmp_path_factory.mktemp("export") / "out"
    pg.render(DEMAND, out, workers=1)
    return out


def read(path):
    """What pandas makes of a file; before version 3, its usual parser of CSV was quick and a bit off."""
    if path.suffix == ".csv":
        return pd.read_csv(path, **EXACT)
    return pd.read_excel(path) if path.suffix == ".xlsx" else pd.read_parquet(path)


def utc(frame, column="time"):
    """The times of a file as instants, whatever they were written as."""
    return pd.to_datetime(frame[column], utc=True)


# every value, read back


@pytest.mark.parametrize("suffix", [".csv", ".xlsx", ".parquet"])
def test_long_tables_read_back_equal(tmp_path, demand, suffix):
    found = read(demand.export(tmp_path / f"values{suffix}"))
    assert list(found) == ["path", "step", "time", *SERIES]
    assert np.array_equal(found["path"], np.repeat(range(30), 20)) and np.array_equal(found["step"], [*range(20)] * 30)
    assert np.array_equal(utc(found).dt.tz_localize(None), np.tile(demand.times(), 30))
    for name in SERIES:
        assert np.array_equal(found[name].to_numpy(float).reshape(30, 20), demand[name])  # every bit
    assert found["guests"].dtype == np.int64


@pytest.mark.parametrize("suffix", [".csv", ".xlsx", ".parquet"])
def test_panels_read_back_equal(tmp_path, demand, suffix):
    found = read(demand.export(tmp_path / f"values{suffix}", layout="panel", columns={"id": "item", "value": "y"}))
    assert list(found) == ["item", "path", "time", "y"]
    assert list(found["item"].unique()) == [*SERIES]  # in order of id, path, time over all of it
    for name in SERIES:
        assert np.array_equal(found.loc[found["item"] == name, "y"].to_numpy().reshape(30, 20), demand[name])


@pytest.mark.parametrize("suffix", [".csv", ".xlsx", ".parquet"])
def test_wide_tables_read_back_equal(tmp_path, demand, suffix):
    path = tmp_path / f"values{suffix}"
    found = read(demand.export(path, layout="wide", series="tea", paths=range(7, 12), steps=range(3, 20)))
    assert list(found) == ["step", "time", *(f"path_{k}" for k in range(7, 12))]
    assert np.array_equal(found.iloc[:, 2:].to_numpy().T, demand["tea"][7:12, 3:])
    assert np.array_equal(utc(found).dt.tz_localize(None), demand.times()[3:])


def test_lists_read_back_equal(tmp_path, demand):
    found = read(demand.export(tmp_path / "values.parquet", layout="nested", steps=range(5, 15)))
    assert list(found) == ["path", "step", "time", *SERIES] and set(found["step"]) == {5}
    for name in SERIES:
        assert np.array_equal(np.stack(found[name]), demand[name][:, 5:15])


def test_arrays_read_back_equal(tmp_path, demand):
    one = np.load(demand.export(tmp_path / "one.npy", series="guests"))
    assert one.dtype == np.int64 and np.array_equal(one, demand["guests"])
    all_of_them = np.load(demand.export(tmp_path / "all.npy", paths=range(4, 9)), mmap_mode="r")
    assert all_of_them.shape == (3, 5, 20)
    assert np.array_equal(all_of_them, np.stack([demand[name][4:9] for name in SERIES]))


@pytest.mark.parametrize("suffix", [".csv", ".parquet"])
def test_what_is_revealed_goes_along(tmp_path, suffix):
    made = pg.render(DEMAND, reveal=REVEAL)
    found = read(made.export(tmp_path / f"values{suffix}", layout="panel")).set_index("id")
    assert np.array_equal(found.loc["tea", "mood"], made["tea.mood"].ravel())
    assert found.loc["guests", ["mood", "constant"]].isna().all(axis=None)
    assert np.array_equal(found.loc["weather", "value"], made["weather"].ravel())


@given(
    st.lists(st.floats(allow_nan=False, allow_infinity=False), min_size=1, max_size=12),
    st.sampled_from([".csv", ".xlsx", ".parquet", ".npy"]),
)
@settings(deadline=None, max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_number_reads_back_as_the_same(tmp_path, numbers, suffix):
    made = fake_render(fake_spec(paths=1, steps=len(numbers)))
    made._values["x"] = np.array([numbers])
    path = made.export(tmp_path / f"values{suffix}", overwrite=True)
    found = np.load(path)[0] if suffix == ".npy" else read(path)["x"].to_numpy(float)
    assert np.array_equal(found, numbers)


@pytest.mark.parametrize("suffix", [".csv", ".xlsx", ".parquet", ".npy"])
@pytest.mark.parametrize("layout", ["long", "panel", "wide"])
def test_what_is_missing_reads_back_as_missing(tmp_path, suffix, layout):
    meter = {"missing": {"of": [{"ar": {"phi": 0.7, "sd": 1}}], "share": 0.3}}
    made = pg.render({"seed": 6, "paths": 12, "time": {"steps": 9}, "series": {"meter": [meter]}})
    path = tmp_path / f"values{suffix}"
    if suffix == ".npy":
        found = np.load(made.export(path))
    else:
        found = read(made.export(path, layout=layout))
        kept = {"long": "meter", "panel": "value", "wide": [f"path_{k}" for k in range(12)]}[layout]
        found = found[kept].to_numpy().T.reshape(12, 9)
    assert np.isnan(found).sum() > 10 and np.array_equal(found, made["meter"], equal_nan=True)
    frames = dict(made.each_path())
    assert np.array_equal(frames[3]["meter"], made["meter"][3], equal_nan=True)
    assert np.array_equal(made.panel()["value"], made["meter"].ravel(), equal_nan=True)


# the order and the bounds do not depend on how it is stored


@pytest.mark.parametrize("layout,partition", WAYS)
@pytest.mark.parametrize("buffer_bytes", [1 << 8, 1 << 12, 1 << 27])
def test_the_same_file_from_every_layout_of_the_source(tmp_path, monkeypatch, layout, partition, buffer_bytes):
    columns = {"x": {}, "n": {"type": "int64"}}
    spec = fake_spec(paths=120, steps=30, columns=columns)
    usual = {way: pd.read_csv(memory_export(spec, tmp_path, way)) for way in ("long", "panel", "wide")}
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 12)
    made = fake_render(spec, tmp_path / "out", layout=layout, partition=partition, workers=1)
    assert len(made.manifest.parts) > 1
    monkeypatch.setattr(choice, "BUFFER_BYTES", buffer_bytes)
    for way, expected in usual.items():
        series = "n" if way == "wide" else None
        path = made.export(tmp_path / "some.csv", layout=way, series=series, overwrite=True)
        pd.testing.assert_frame_equal(pd.read_csv(path), expected)
    nested = read(made.export(tmp_path / "some.parquet", layout="nested", overwrite=True))
    assert np.array_equal(np.stack(nested["x"]), made["x"]) and len(nested) == 120
    assert np.array_equal(np.load(made.export(tmp_path / "some.npy", overwrite=True))[1], made["n"])


def memory_export(spec, folder, layout):
    series = "n" if layout == "wide" else None
    return fake_render(spec).export(folder / f"{layout}.csv", layout=layout, series=series)


@pytest.mark.parametrize("buffer_bytes", [1 << 20, 1 << 27])
def test_paths_that_are_cut_into_parts_come_in_one_piece(tmp_path, monkeypatch, buffer_bytes):
    spec = fake_spec(paths=20, steps=2 * STEPS + 100)
    whole = fake_render(spec)["x"]
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 22)
    made = fake_render(spec, tmp_path / "out", workers=1)
    assert made.cut_by_steps
    monkeypatch.setattr(choice, "BUFFER_BYTES", buffer_bytes)
    assert np.array_equal(np.load(made.export(tmp_path / "x.npy")), whole)
    some = {"paths": range(3, 6), "steps": range(STEPS - 2, STEPS + 3)}
    found = read(made.export(tmp_path / "x.parquet", **some))
    assert np.array_equal(found["x"].to_numpy().reshape(3, 5), whole[3:6, STEPS - 2 : STEPS + 3])
    assert np.array_equal(found["path"], np.repeat([3, 4, 5], 5))
    for path, frame in made.each_path():
        assert np.array_equal(frame["x"], whole[path])
    wide = made.export(tmp_path / "wide.parquet", layout="wide", paths=range(5, 9))
    assert np.array_equal(pd.read_parquet(wide)["path_7"], whole[7])


@pytest.mark.parametrize("suffix,layout", [(".parquet", "long"), (".csv", "wide"), (".csv", "panel"), (".npy", "")])
def test_memory_is_bounded_whatever_the_ensemble(tmp_path, monkeypatch, suffix, layout):
    """What a process needs more while it exports 32 times the buffer, beside one that exports an eighth of it."""
    if not os.path.exists("/proc/self/clear_refs"):
        pytest.skip("needs a system that can be asked for a peak")
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 20)
    grown = [_growth(tmp_path / str(paths), paths, suffix, layout) for paths in (4, 512)]
    assert grown[1] - grown[0] < 20_000  # kB; the values alone are 34 MB, and a table of them is more


def _growth(out, paths, suffix, layout):
    code = (
        "import sys\nfrom procgen.ensemble import choice, forms, plan\n"
        "from tests.ensemble.fakes import fake_render, fake_spec\n"
        "for place in (plan, forms, choice):\n    place.BUFFER_BYTES = 1 << 20\n"
        "def now(what):\n"
        "    return next(int(line.split()[1]) for line in open('/proc/self/status') if line.startswith(what))\n"
        "made = fake_render(fake_spec(paths=int(sys.argv[1]), steps=8192), sys.argv[2])\n"
        "with open('/proc/self/clear_refs', 'w') as file:\n    file.write('5')\n"  # forget the peak so far
        "before = now('VmRSS')\n"
        "made.export(sys.argv[3], layout=sys.argv[4] or None)\n"
        "print(now('VmHWM') - before)\n"
    )
    fake_render(fake_spec(paths=paths, steps=8192), out, workers=1)
    command = [sys.executable, "-c", code, str(paths), str(out), f"{out}{suffix}", layout]
    return int(subprocess.run(command, capture_output=True, text=True, cwd=ROOT, check=True).stdout)


# rounding and clocks


def test_decimals_round_as_the_spec_does(tmp_path, demand):
    found = read(demand.export(tmp_path / "values.csv", decimals=1))
    rounded = pg.render({**DEMAND, "series": {**DEMAND["series"], "tea": {**DEMAND["series"]["tea"], "decimals": 1}}})
    assert np.array_equal(found["tea"].to_numpy().reshape(30, 20), rounded["tea"])
    assert "21.4" in (tmp_path / "values.csv").read_text() and found["guests"].dtype == np.int64
    tens = read(demand.export(tmp_path / "tens.parquet", decimals=-1))
    assert np.array_equal(tens["guests"], np.rint(demand["guests"].ravel() / 10) * 10)


def test_local_times_have_their_offset_in_csv_and_their_zone_in_parquet(tmp_path, demand):
    # Central European Time goes to +02:00 on 2027-03-28 at 02:00 (EU directive 2000/84/EC: last Sunday of March)
    path = demand.export(tmp_path / "values.csv", local_time=True, paths=range(1))
    texts = pd.read_csv(path)["time"]
    assert texts[0] == "2027-03-27T00:00:00+01:00" and texts[8:10].tolist() == [
        "2027-03-28T00:00:00+01:00",
        "2027-03-28T04:00:00+02:00",
    ]
    assert np.array_equal(utc(pd.read_csv(path)).dt.tz_localize(None), demand.times())
    from procgen.ensemble.export import export

    told = "; its offset changes on the way, which pandas.to_datetime reads with utc=True"
    for steps, end in ((None, told), (range(0, 5), "")):
        ready = export(demand, tmp_path / "other.csv", local_time=True, steps=steps)
        assert ready.text().endswith(f"note: time is the local time of Europe/Berlin{end}")
    frame = pd.read_csv(path)
    with pytest.raises(ValueError):
        pd.to_datetime(frame["time"])
    assert np.array_equal(pd.to_datetime(frame["time"], utc=True).dt.tz_localize(None), demand.times())
    times = read(demand.export(tmp_path / "values.parquet", local_time=True, paths=range(1)))["time"]
    assert str(times.dt.tz) == "Europe/Berlin" and times[9] == pd.Timestamp("2027-03-28T04:00", tz="Europe/Berlin")
    assert read(demand.export(tmp_path / "utc.csv"))["time"][0] == "2027-03-26T23:00:00Z"


def test_a_sheet_has_the_hands_of_the_clock_and_says_so(tmp_path):
    autumn = {"steps": 30, "start": "2027-10-31T00:00", "every": "30min", "zone": "Europe/Berlin"}
    made = pg.render({**DEMAND, "time": autumn, "paths": 2})
    from procgen.ensemble.export import export

    ready = export(made, tmp_path / "values.xlsx", local_time=True)
    assert ready.text().splitlines()[1] == (
        "note: a sheet knows no time zones: time is the local time of Europe/Berlin; some times are there twice, where "
        "the clock was set back"
    )
    times = read(ready.write())["time"][:30]
    assert times.dt.tz is None and times[4] == pd.Timestamp("2027-10-31T02:00") == times[6]
    in_utc = export(made, tmp_path / "utc.xlsx")
    assert in_utc.text().endswith("time is in UTC")
    assert read(in_utc.write())["time"][0] == pd.Timestamp("2027-10-30T22:00")


def test_days_that_sheets_disagree_on_are_refused(tmp_path):
    old = {"steps": 3, "start": "1899-12-30", "every": "1d"}
    made = pg.render({**DEMAND, "time": old})
    with pytest.raises(EnsembleError, match="a sheet holds times from 1 March 1900 on"):
        from procgen.ensemble.export import export

        export(made, tmp_path / "values.xlsx").text()
    with pytest.raises(EnsembleError, match="a sheet holds times from 1 March 1900 on"):
        made.export(tmp_path / "values.xlsx")
    assert os.listdir(tmp_path) == []


def test_a_header_is_a_text_and_never_a_formula(tmp_path, demand):
    path = demand.export(tmp_path / "values.xlsx", layout="panel", columns={"value": "=1+1"}, paths=range(1))
    sheet = openpyxl.load_workbook(path)["values"]
    assert sheet["D1"].value == "=1+1" and sheet["D1"].data_type == "s"
    head = demand.export(tmp_path / "values.csv", layout="panel", columns={"value": 'a, "b"'}, paths=range(1))
    assert list(pd.read_csv(head)) == ["id", "path", "time", 'a, "b"']


# what is refused, and that nothing is left


@pytest.mark.parametrize(
    "name,how,sentence",
    [
        ("x.ods", {}, r"expected a file that ends in \.csv, \.xlsx, \.parquet or \.npy, got 'x\.ods'"),
        ("no/x.csv", {}, "there is no folder .*no to write x.csv into; make it first"),
        ("x.csv", {"series": "milk"}, "expected a series among tea, coffee, guests, got 'milk'"),
        ("x.csv", {"series": ["tea", "guests", "tea"]}, "expected each series once, got tea 2 times"),
        ("x.csv", {"series": []}, "expected at least one series among"),
        ("x.csv", {"paths": range(10, 31)}, "expected paths within 0 to 29, got 10 to 30"),
        ("x.csv", {"steps": range(0)}, "expected steps within 0 to 19, got none"),
        ("x.csv", {"decimals": 99}, "expected decimals to be a whole number from -22 to 22, got 99"),
        ("x.csv", {"layout": "cube"}, "expected layout long, panel, nested or wide, got 'cube'"),
        ("x.csv", {"layout": "wide"}, "holds one series, got tea, coffee, guests; choose one"),
        ("x.csv", {"layout": "nested"}, r"x\.csv cannot hold lists in cells; write \.parquet"),
        ("x.xlsx", {"layout": "nested"}, r"x\.xlsx cannot hold lists in cells"),
        ("x.csv", {"columns": {"path": "tea"}}, "2 columns of layout long would be called 'tea'"),
        ("x.csv", {"layout": "wide", "series": "tea", "columns": {"path": "p", "step": "p_3"}}, "be called 'p_3'"),
        ("x.npy", {"layout": "long"}, r"an \.npy file is an array"),
        ("x.npy", {"local_time": True}, r"an \.npy file is an array"),
    ],
)
def test_what_cannot_be_is_explained_and_leaves_nothing(tmp_path, demand, name, how, sentence):
    with pytest.raises(EnsembleError, match=sentence):
        demand.export(tmp_path / name, **how)
    assert os.listdir(tmp_path) == []


def test_arguments_of_another_kind_are_explained(tmp_path, demand):
    with pytest.raises(TypeError, match=r"expected paths to be a range such as range\(0, 10\), got 3"):
        demand.export(tmp_path / "x.csv", paths=3)
    with pytest.raises(TypeError, match="expected path to be the path of a file, got int"):
        demand.export(3)
    with pytest.raises(EnsembleError, match="the spec has no start, so that there is no local time"):
        pg.render(unstamped()).export(tmp_path / "x.csv", local_time=True)


def test_a_sheet_that_would_be_too_large_is_refused_before_anything_is_written(tmp_path):
    made = fake_render(fake_spec(paths=1024, steps=1024))  # with its header, one row more than a sheet has
    with pytest.raises(EnsembleError, match=r"x\.xlsx would need 1,048,577 rows and 3 columns, and a sheet holds"):
        made.export(tmp_path / "x.xlsx")
    broad = fake_render(fake_spec(paths=17_000, steps=2))
    with pytest.raises(EnsembleError, match="holds at most 16,382 paths, got 17,000; choose fewer"):
        broad.export(tmp_path / "x.xlsx", layout="wide")
    assert os.listdir(tmp_path) == [] and SHEET_ROWS == 2**20


def test_a_parquet_file_of_too_many_pieces_is_refused(tmp_path, monkeypatch):
    made = fake_render(fake_spec(paths=1000, steps=200))
    monkeypatch.setattr(targets, "BUFFER_BYTES", 8 * 1000)
    with pytest.raises(EnsembleError, match=r"x\.parquet would be 200,200 pieces of columns, .* more than 131,072"):
        made.export(tmp_path / "x.parquet", layout="wide")
    made.export(tmp_path / "x.parquet", layout="wide", steps=range(100))


def test_without_openpyxl_it_says_how_to_get_it(tmp_path, demand, monkeypatch):
    real = builtins.__import__

    def without(name, *rest, **more):
        if name.partition(".")[0] == "openpyxl":
            raise ImportError(name)
        return real(name, *rest, **more)

    monkeypatch.setattr(builtins, "__import__", without)
    with pytest.raises(EnsembleError, match=r"openpyxl, which is not installed: pip install '\.\[sheets\]'"):
        demand.export(tmp_path / "x.xlsx")
    demand.export(tmp_path / "x.csv")


def test_a_file_that_is_there_is_replaced_only_when_asked(tmp_path, demand):
    path = tmp_path / "x.csv"
    path.write_text("mine")
    with pytest.raises(EnsembleError, match=r"x\.csv is there already; choose another name, or replace it"):
        demand.export(path)
    assert path.read_text() == "mine"
    demand.export(path, overwrite=True)
    assert len(read(path)) == 600
    with pytest.raises(EnsembleError, match="is a folder; give the name of a file in it"):
        demand.export(tmp_path, overwrite=True)


def test_a_sheet_tells_its_rows_as_they_are_written(tmp_path):
    made, told = fake_render(fake_spec(paths=50, steps=1000)), []
    made.export(tmp_path / "x.xlsx", progress=lambda done, rows: told.append((done, rows)))
    done = [first for first, _ in told]
    assert len(done) >= 50_000 // 8192 and done == sorted(done) and told[-1] == (50_000, 50_000)
    assert {rows for _, rows in told} == {50_000}


def test_a_sheet_has_numbers_texts_and_times_in_their_cells_and_nothing_for_what_is_missing(tmp_path):
    body = {"missing": {"of": [{"white_noise": {"sd": 1}}], "share": 0.5}}
    counts = {"type": "int64", "of": [{"constant": 2**53 + 2}, {"poisson": {"mean": 4}}]}
    time = {"steps": 40, "start": "2027-01-04T00:00", "every": "90min"}
    made = pg.render({"seed": 3, "paths": 2, "time": time, "series": {"m": body, "n": counts}})
    path = made.export(tmp_path / "x.xlsx")
    rows = list(openpyxl.load_workbook(path)["values"].iter_rows(min_row=2, values_only=True))
    found = pd.DataFrame(rows, columns=["path", "step", "time", "m", "n"])
    gaps = np.isnan(made["m"].ravel())
    assert 20 < gaps.sum() < 60 and [row[3] is None for row in rows] == gaps.tolist()
    assert [row[4] for row in rows] == made["n"].ravel().tolist()  # whole numbers as such
    assert np.array_equal(found["time"].to_numpy("datetime64[us]"), np.tile(made.times(), 2))
    with zipfile.ZipFile(path) as book:
        assert book.testzip() is None
        sheet = ElementTree.fromstring(book.read("xl/worksheets/sheet1.xml"))
    spaced = "{http://schemas.openxmlformats.org/spreadsheetml/2006/main}"  # ECMA-376 part 1, annex A
    cells = [cell.get("r") for cell in sheet.iter(f"{spaced}c")]
    assert cells[:6] == ["A1", "B1", "C1", "D1", "E1", "A2"] and len(set(cells)) == len(cells) == 405 - gaps.sum()


def test_the_files_of_the_ensemble_itself_are_never_written_over(tmp_path, monkeypatch):
    made = pg.render(DEMAND, tmp_path / "out")
    part = made.manifest.parts[0].file
    (tmp_path / "link").symlink_to(tmp_path / "out")
    monkeypatch.chdir(tmp_path)
    for place in (f"out/{part}", f"link/{part}", "out/values.csv", str(tmp_path / "out" / part)):
        with pytest.raises(EnsembleError, match="would be among the files of the ensemble itself"):
            pg.open_ensemble("out").export(place, overwrite=True)
    assert sorted(os.listdir("out")) == sorted(["manifest.json", *(one.file for one in made.manifest.parts)])
    made.export("out.csv")


@pytest.mark.parametrize("suffix", [".csv", ".xlsx", ".parquet", ".npy"])
def test_a_stop_leaves_nothing_and_what_was_there_as_it_was(tmp_path, demand, suffix):
    path = tmp_path / f"x{suffix}"
    path.write_text("mine")

    def stop(done, rows):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        demand.export(path, overwrite=True, progress=stop)
    assert os.listdir(tmp_path) == [path.name] and path.read_text() == "mine"


@pytest.mark.parametrize("suffix", [".csv", ".xlsx", ".parquet", ".npy"])
def test_a_write_that_the_system_refuses_is_a_sentence(tmp_path, suffix):
    code = (
        "import resource, signal, sys\nfrom procgen.ensemble.errors import EnsembleError\n"
        "from tests.ensemble.fakes import fake_render, fake_spec\n"
        "made = fake_render(fake_spec(paths=1000, steps=100))\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\nresource.setrlimit(resource.RLIMIT_FSIZE, (9000, 9000))\n"
        "try:\n    made.export(sys.argv[1])\nexcept EnsembleError as error:\n    sys.exit(str(error))\n"
    )
    path = tmp_path / f"x{suffix}"
    done = subprocess.run([sys.executable, "-c", code, str(path)], capture_output=True, text=True, cwd=ROOT)
    assert done.returncode == 1 and f"{path} cannot be written: File too large; nothing is left of it" in done.stderr
    assert os.listdir(tmp_path) == []


def test_progress_reaches_all_rows(tmp_path, demand):
    for suffix, rows in ((".csv", 600), (".xlsx", 600), (".npy", 1800)):
        seen = []
        demand.export(tmp_path / f"x{suffix}", progress=lambda *now, seen=seen: seen.append(now))
        assert seen[-1] == (rows, rows)


# frames


def test_frames_of_an_ensemble(demand, folder):
    for ens in (demand, pg.open_ensemble(folder)):
        panel = ens.panel(columns={"id": "item", "time": "at"})
        assert list(panel) == ["item", "path", "at", "value"] and len(panel) == 3 * 30 * 20
        assert np.array_equal(panel.loc[panel["item"] == "coffee", "value"].to_numpy(), demand["coffee"].ravel())
        wide = ens.wide("guests")
        assert wide.shape == (20, 30) and wide.index.name == "time" and wide.columns.name == "path"
        assert wide.loc["2027-03-26T23:00Z", 7] == demand["guests"][7, 0] and (wide.dtypes == np.int64).all()
        nested = ens.nested()
        assert list(nested) == [*SERIES] and np.array_equal(nested.loc[29, "tea"], demand["tea"][29])
        with pytest.raises(KeyError, match="expected one of tea, coffee, guests, got 'milk'"):
            ens.wide("milk")


def test_paths_come_one_by_one(demand, folder):
    ens = pg.open_ensemble(folder).paths(4, 9)
    seen = dict(ens.each_path())
    assert list(seen) == [4, 5, 6, 7, 8] and list(seen[5]) == [*SERIES]
    assert all(np.array_equal(frame["tea"], demand["tea"][path]) for path, frame in seen.items())
    assert seen[4].index.equals(pd.DatetimeIndex(demand.times()).tz_localize("UTC"))
    assert [list(frame) for _, frame in ens.each_path("guests")] == [["guests"]] * 5
    steps = next(pg.render(unstamped()).each_path())[1]
    assert steps.index.name == "step" and list(steps.index) == [*range(20)]


def test_a_table_of_parquet_keeps_types_and_units(tmp_path, demand):
    schema = pq.read_schema(demand.export(tmp_path / "x.parquet"))
    assert [str(kind) for kind in schema.types[2:]] == ["timestamp[us, tz=UTC]", "double", "double", "int64"]
    assert schema.field("tea").metadata[b"unit"] == b"kg" and not any(field.nullable for field in schema)


def test_float32_reads_back_from_csv_as_it_is_stored(tmp_path):
    raw = {"procgen": 1, "seed": 2, "paths": 3, "time": {"steps": 40}}
    ensemble = pg.render(raw | {"series": {"x": {"of": [{"white_noise": {"sd": 1}}], "type": "float32"}}})
    ensemble.export(tmp_path / "x.csv")
    read = pd.read_csv(tmp_path / "x.csv")["x"].to_numpy()
    np.testing.assert_array_equal(read, ensemble["x"].ravel())
