"""The head of a spec, its time and series, and what a Spec can do: raw, changed, canonical, digest."""

import json
import pickle
import subprocess
import sys
import time
from dataclasses import FrozenInstanceError
from datetime import UTC, date, datetime

import numpy as np
import pytest

from procgen.spec.calendar import Grid
from procgen.spec.model import SpecError
from procgen.spec.reader import read_raw
from tests.spec.small import CATALOGUE, HEAD, LAWS, faults, read

WHOLE = """procgen: 1
title: Cold store, quarter-hourly load
seed: 271828
paths: 2000
time: {start: 2027-01-04T00:00, every: 15min, steps: 2688, zone: Europe/Berlin}
reuse:
  noise: &noise {garch: {sd: 6.3, alpha: 0.1, beta: 0.85}}
shared:
  weather: [{ar: {phi: 0.97, total_sd: 1}}]
series:
  load_kw:
    unit: kW
    decimals: 2
    note: the meter of hall 2
    of:
      - trend: {level: 310, slope: {value: 0.9, per: day}}
      - seasonal: {period: 1d, amplitude: 42, peak: 18:00}
      - use: weather
        times: 6.5
      - ar: {phi: [0.7, -0.1], shock: *noise}
        as: swing
  price:
    - exp: [{random_walk: {sd: 0.01, start: 3.9}}]
correlation:
  - {between: [load_kw.swing, price.random_walk], value: 0.35}
"""
BODY = "series: {x: {constant: 1}}\n"


def test_a_whole_spec():
    spec = read(WHOLE)
    assert (spec.title, spec.seed, spec.paths, spec.file) == ("Cold store, quarter-hourly load", 271828, 2000, "a.yaml")
    assert spec.time == Grid(2688, datetime(2027, 1, 4), (15, "min"), "Europe/Berlin", "begin", ())
    assert (list(spec.shared), list(spec.series)) == (["weather"], ["load_kw", "price"])
    load, price = spec.series.values()
    assert (load.unit, load.type, load.decimals, load.stream, load.note) == (
        "kW", None, 2, "load_kw", "the meter of hall 2",
    )  # fmt: skip
    assert (price.unit, price.type, price.decimals, price.stream, price.note) == (None, None, None, "price", None)
    trend, seasonal, use, swing = load.of
    assert (trend.values["slope"], seasonal.values["period"], seasonal.values["peak"]) == (0.9 / 96, 96.0, 72.0)
    assert (use.times, swing.shock.values["sd"], swing.shock.label) == (6.5, 6.3, "swing")
    assert spec.correlation.names == ("load_kw.swing", "price.random_walk")


def test_a_spec_is_frozen_hashed_and_sent_to_workers():
    spec = read(WHOLE)
    with pytest.raises(FrozenInstanceError):
        spec.seed = 1
    with pytest.raises(TypeError):
        spec.series["load_kw"] = None
    assert pickle.loads(pickle.dumps(spec)) == spec
    assert len({spec, read(WHOLE)}) == 1


def test_raw_reads_as_the_same_spec():
    spec = read(WHOLE)
    again = read_raw(json.loads(json.dumps(spec.raw)), CATALOGUE, LAWS)
    assert again == spec and again.raw == spec.raw and again.digest() == spec.digest()
    assert spec.raw["series"]["load_kw"]["of"][3]["ar"]["shock"] == {"garch": {"sd": 6.3, "alpha": 0.1, "beta": 0.85}}


def test_plain_data_may_hold_dates_tuples_and_numpy_numbers():
    raw = {
        "seed": np.int64(7),
        "paths": 10,
        "time": {"start": datetime(2027, 1, 4), "every": "1d", "steps": 9},
        "series": {"x": ({"ar": {"phi": (0.5, np.float64(0.25)), "sd": 1}},)},
    }
    spec = read_raw(raw, CATALOGUE, LAWS)
    assert (spec.seed, spec.time.start) == (7, datetime(2027, 1, 4))
    assert spec.raw["series"]["x"] == [{"ar": {"phi": [0.5, 0.25], "sd": 1}}]


def test_faults_of_plain_data_have_paths():
    raw = {
        "seed": 7,
        "paths": 10,
        "time": {"steps": 9},
        "series": {"x": {"constant": object()}, 5: 1},
        "a": {"\x07": 1},
    }
    with pytest.raises(SpecError) as error:
        read_raw(raw, CATALOGUE, LAWS)
    assert str(error.value) == (
        "5 faults in this spec\n"
        "expected a text, number, list or mapping, got object; convert it\n  at series.x.constant\n"
        "expected keys that are texts, got int\n  at series\n"
        'the invisible character U+0007 is not allowed; remove it\n  at a["\\u0007"]\n'
        "unknown key a; expected one of procgen, title, seed, paths, time, reuse, parameters, shared, series, groups, "
        "correlation, variants\n  at a\n"
        "expected a number, got nothing (level: the value)\n  at series.x.constant"
    )


def test_data_within_itself_is_refused():
    raw = {"seed": 7}
    raw["reuse"] = raw
    with pytest.raises(SpecError) as error:
        read_raw(raw, CATALOGUE, LAWS)
    assert error.value.faults[0].message == "expected at most 60 levels of nesting; take the inner levels apart"


def test_one_fault_is_told_without_a_count():
    with pytest.raises(SpecError) as error:
        read(HEAD.replace("seed: 7", "seed: -7") + BODY)
    assert str(error.value) == (
        "expected a whole number in [0, 2^128 − 1], got -7 (seed: the number all draws follow from)\n"
        "  at seed (a.yaml, line 2, column 7)"
    )


def test_changed_edits_what_was_written():
    spec = read(WHOLE)
    other = spec.changed(paths=5, steps=10, seed=1)
    assert (other.paths, other.time.steps, other.seed, other.series) == (5, 10, 1, spec.series)
    assert other == read(WHOLE.replace("2000", "5").replace("2688", "10").replace("271828", "1"))
    assert other.raw["time"]["steps"] == 10 and spec.raw["time"]["steps"] == 2688
    assert spec.changed() == spec


@pytest.mark.parametrize(
    ("asked", "message"),
    [
        ({"paths": 0}, "expected a whole number in [1, 1e+12], got 0 (paths: number of paths)\n  at paths (a.yaml)"),
        ({"steps": -1}, "expected a whole number in [1, 1e+12], got -1 (steps: number of steps)\n"
         "  at time.steps (a.yaml)"),
        ({"steps": 10**9}, "expected steps that end by the year 9998, but the last of 1,000,000,000 would be in 30546; "
         "give fewer or shorter steps, or leave out start\n  at time.steps (a.yaml)"),
        ({"paths": 10**12}, "expected at most 1e+13 values, got 1,000,000,000,000 paths × 2,688 steps × 2 series = "
         "5.4e+15 values, 43,008 TB; ask for fewer\n  at paths (a.yaml)"),
    ],
)  # fmt: skip
def test_changed_refuses_what_a_spec_refuses(asked, message):
    with pytest.raises(SpecError) as error:
        read(WHOLE).changed(**asked)
    assert str(error.value) == message


def test_the_digest_is_of_what_matters():
    digest = read(WHOLE).digest()
    assert len(bytes.fromhex(digest)) == 32
    same = [
        WHOLE.replace("Cold store, quarter-hourly load", "Another title"),
        WHOLE.replace("    note: the meter of hall 2\n", ""),
        WHOLE.replace("level: 310,", "level: 310.0,"),
        WHOLE.replace("{level: 310, slope: {value: 0.9, per: day}}", "{slope: {per: day, value: 9e-1}, level: 310}"),
        WHOLE.replace("reuse:\n  noise: &noise", "reuse:\n  other: 5\n  noise: &noise"),
        WHOLE.replace("*noise", "{garch: {sd: 6.3, alpha: 0.1, beta: 0.85}}"),
    ]
    assert [read(text).digest() for text in same] == [digest] * len(same)
    other = [
        WHOLE.replace("271828", "271829"),
        WHOLE.replace("unit: kW", "unit: MW"),
        WHOLE.replace("times: 6.5", "times: 6.6"),
        WHOLE.replace("2027-01-04", "2027-01-05"),
        WHOLE.replace("price:", "cost:").replace("price.", "cost."),
    ]
    assert len({read(text).digest() for text in other} | {digest}) == len(other) + 1


def test_the_canonical_spec_reads_as_the_same_but_for_its_texts():
    plain = WHOLE.replace("title: Cold store, quarter-hourly load\n", "").replace("    note: the meter of hall 2\n", "")
    canonical = json.loads(json.dumps(read(WHOLE).canonical()))
    assert read_raw(canonical, CATALOGUE, LAWS) == read(plain)
    assert "reuse" not in canonical


def test_the_order_of_columns_is_part_of_a_spec():
    first = HEAD + "series: {a: {constant: 1}, b: {constant: 2}}\n"
    second = HEAD + "series: {b: {constant: 2}, a: {constant: 1}}\n"
    assert list(read(first).canonical()["series"]) == ["a", "b"]
    assert read(first).digest() != read(second).digest()


def test_large_seeds_are_kept():
    seed = 2**128 - 1
    spec = read(HEAD.replace("seed: 7", f"seed: {seed}") + BODY)
    assert spec.seed == spec.canonical()["seed"] == seed


@pytest.mark.parametrize(
    ("text", "message", "place"),
    [
        ("5", "expected a mapping with the keys procgen, seed, paths, time and series, got 5",
         "the spec (a.yaml, line 1, column 1)"),
        (HEAD, "expected the key series (a mapping of names to bodies, as in {load: [{white_noise: {sd: 1}}]})",
         "the spec (a.yaml, line 1, column 1)"),
        (HEAD + "series: {}", "expected a mapping of names to bodies, as in {load: [{white_noise: {sd: 1}}]}, got an "
         "empty mapping", "series (a.yaml, line 5, column 9)"),
        (HEAD.replace("time: {steps: 100}\n", "") + BODY,
         "expected the key time (steps, and a start when there are dates, as in {steps: 100})",
         "the spec (a.yaml, line 1, column 1)"),
        (HEAD + BODY + "serie: 1", "unknown key serie; expected one of procgen, title, seed, paths, time, reuse, "
         "parameters, shared, series, groups, correlation, variants; did you mean series?",
         "serie (a.yaml, line 6, column 1)"),
        (HEAD.replace("seed: 7", "seed: 7.5") + BODY, "expected a whole number in [0, 2^128 − 1], got 7.5 "
         "(seed: the number all draws follow from)", "seed (a.yaml, line 2, column 7)"),
        (HEAD.replace("paths: 10", "paths: 1e13") + BODY, "expected a whole number in [1, 1e+12], got 10000000000000.0 "
         "(paths: number of paths)", "paths (a.yaml, line 3, column 8)"),
        (HEAD.replace("paths: 10", "paths: 1e12") + BODY, "expected at most 1e+13 values, got 1,000,000,000,000 "
         "paths × "
         "100 steps × 1 series = 1.0e+14 values, 800 TB; ask for fewer", "paths (a.yaml, line 3, column 1)"),
        (HEAD + "title: 5\n" + BODY, "expected a text, got 5; put it in quotes (title: free text, shown in reports)",
         "title (a.yaml, line 5, column 8)"),
        (HEAD + "series: {path: {constant: 1}}", "the name path is reserved for a column of the ensemble; choose "
         "another",
         "series.path (a.yaml, line 5, column 10)"),
        (HEAD + "shared: {weight: {constant: 1}}\n" + BODY,
         "the name weight is reserved for a column of the ensemble; choose another",
         "shared.weight (a.yaml, line 5, column 10)"),
        (HEAD + "series: {a.b: {constant: 1}}", "expected a name of at most 100 letters a–z, digits and _, not "
         "beginning "
         'with a digit, got "a.b"', 'series["a.b"] (a.yaml, line 5, column 10)'),
        (HEAD + "series: {größe: {constant: 1}}", "expected a name of at most 100 letters a–z, digits and _, not "
         "beginning "
         'with a digit, got "größe"', 'series["größe"] (a.yaml, line 5, column 10)'),
        (HEAD + "shared: [1]\n" + BODY, "expected a mapping of names to bodies, as in {load: [{white_noise: {sd: "
         "1}}]}, "
         "got a list of 1", "shared (a.yaml, line 5, column 9)"),
        # attributes of a series
        (HEAD + "series: {x: {unit: kW}}", "expected the key of (the terms of the series: a term such as {white_noise: "
         "{sd: 1}}, or a list of terms, which is their sum)", "series.x (a.yaml, line 5, column 13)"),
        (HEAD + "series: {x: {of: {constant: 1}, type: int32}}", "expected one of float64, float32, int64, got "
         "\"int32\"; "
         "did you mean int64? (type: type of the column)", "series.x.type (a.yaml, line 5, column 39)"),
        (HEAD + "series: {x: {of: {constant: 1}, type: int64, decimals: 2}}",
         "an int64 has no decimals; remove decimals, or choose float64", "series.x.decimals (a.yaml, line 5, column "
         "46)"),
        (HEAD + "series: {x: {of: {constant: 1}, decimals: -2}}", "expected a whole number in [0, 15], got -2 "
         "(decimals: decimals to round to)", "series.x.decimals (a.yaml, line 5, column 43)"),
        (HEAD + "series: {x: {of: {constant: 1}, colour: red}}", "unknown key colour; expected one of of, unit, type, "
         "decimals, stream, note, before", "series.x.colour (a.yaml, line 5, column 33)"),
        (HEAD + "series: {x: {of: {constant: 1}, unit: 5}}", "expected a text, got 5; put it in quotes (unit: unit "
         "of the "
         "values, kept in the metadata of the column)", "series.x.unit (a.yaml, line 5, column 39)"),
    ],
)  # fmt: skip
def test_faults(text, message, place):
    assert faults(text) == [f"{message}\n  at {place}"]


def timed(text):
    return HEAD.replace("{steps: 100}", text) + BODY


def test_times():
    berlin = "zone: Europe/Berlin"
    read_time = lambda text: read(timed(text)).time  # noqa: E731
    assert read_time("{steps: 9}") == Grid(9)
    assert read_time("{steps: 9, every: 1 quarter}") == Grid(9, None, (1, "quarter"))
    assert read_time("{steps: 9, every: day, start: 2027-01-04}") == Grid(9, datetime(2027, 1, 4), (1, "day"))
    assert read_time("{steps: 9, every: 1h, start: 2027-01-04T06:00Z, stamp: end}") == Grid(
        9, datetime(2027, 1, 4, 6), (1, "h"), None, "end"
    )
    assert read_time(
        "{steps: 9, every: 1 business day, start: 2027-01-04, holidays: [2027-12-24, 2027-01-06, 2027-01-06]}"
    ) == Grid(9, datetime(2027, 1, 4), (1, "business day"), holidays=(date(2027, 1, 6), date(2027, 12, 24)))
    later = read_time(f"{{steps: 9, every: 1h, start: 2027-10-31T02:30+01:00, {berlin}}}")
    assert later.start.fold == 1
    assert later.stamps(0, 1)[0] == datetime(2027, 10, 31, 1, 30, tzinfo=UTC).timestamp() * 1e6


@pytest.mark.parametrize(
    ("time", "message", "place"),
    [
        ("5", "expected a mapping with the keys steps, start, every, at, zone, stamp, holidays, got 5", "time:7"),
        ("{}", "expected the key steps (number of steps: a whole number in [1, 1e+12])", "time:7"),
        ("{steps: 0}", "expected a whole number in [1, 1e+12], got 0 (steps: number of steps)", "time.steps:15"),
        ("{step: 5}", "unknown key step; expected one of steps, start, every, at, zone, stamp, holidays; did you mean "
         "steps?",
         "time.step:8"),
        ("{steps: 5, every: 15}", "expected a length of time such as 15min, 1h, 1d, 1 week, 1 month, 1 quarter, 1 year "
         "or 1 business day, got 15 (every: length of a step)", "time.every:25"),
        ("{steps: 5, every: 1.5h}", "expected a length of time such as 15min, 1h, 1d, 1 week, 1 month, 1 quarter, 1 "
         "year "
         'or 1 business day, got "1.5h"; write a whole number of a smaller unit (every: length of a step)',
         "time.every:25"),
        ("{steps: 5, every: 2 steps}", "expected a length of time such as 15min, 1h, 1d, 1 week, 1 month, 1 quarter, 1 "
         'year or 1 business day, got "2 steps" (every: length of a step)', "time.every:25"),
        ("{steps: 5, start: 2027-01-04}",
         "expected every beside start, as in {start: 2027-01-04, every: 15min, steps: 96}", "time:7"),
        ("{steps: 5, every: 1d, start: 4.1.2027}", "expected a date, with or without a time, such as 2027-01-04 or "
         '2027-01-04T06:00, got "4.1.2027" '
         "(start: local date and time at which step 0 begins; of two, the first)", "time.start:36"),
        ("{steps: 5, every: 1d, start: 2027-02-30}", "expected a date, with or without a time, such as 2027-01-04 or "
         '2027-01-04T06:00, got "2027-02-30" '
         "(start: local date and time at which step 0 begins; of two, the first)", "time.start:36"),
        ("{steps: 5, every: 1d, zone: UTC}", "zone means nothing without start; give start, or remove zone",
         "time.zone:29"),
        ("{steps: 5, stamp: end}", "stamp means nothing without start; give start, or remove stamp", "time.stamp:18"),
        ("{steps: 5, every: 1d, start: 2027-01-04, zone: Europe/Berlni}", "expected a time zone such as "
         "Europe/Berlin or "
         'UTC, got "Europe/Berlni"; did you mean Europe/Berlin? (zone: time zone of start or at; UTC when absent)',
         "time.zone:54"),
        ("{steps: 5, every: 1d, start: 2027-01-04, zone: ../../etc/passwd}", "expected a time zone such as "
         "Europe/Berlin "
         'or UTC, got "../../etc/passwd" (zone: time zone of start or at; UTC when absent)', "time.zone:54"),
        ("{steps: 5, every: 1d, start: 2027-01-04, zone: Europe}", "expected a time zone such as Europe/Berlin or UTC, "
         'got "Europe"; did you mean Europe/Rome? (zone: time zone of start or at; UTC when absent)', "time.zone:54"),
        ("{steps: 5, every: 1h, start: 2027-03-28T02:30, zone: Europe/Berlin}", "2027-03-28T02:30 does not exist in "
         "Europe/Berlin: the clocks skip it; choose a time before or after", "time.start:36"),
        ("{steps: 5, every: 1h, start: 2027-03-28T12:00+01:00, zone: Europe/Berlin}", "2027-03-28T12:00:00+01:00 "
         "has an "
         "offset that Europe/Berlin does not have then; leave the offset out", "time.start:36"),
        ("{steps: 5, every: 1h, start: 2027-03-28T12:00+01:00}", "2027-03-28T12:00:00+01:00 has an offset that UTC "
         "does "
         "not have then; leave the offset out", "time.start:36"),
        ("{steps: 5, every: 1d, start: 0001-01-01}", "expected a year from 2 to 9998, got 1", "time.start:36"),
        ("{steps: 5, every: 1 business day, start: 2027-01-09}", "expected a start on a business day, got "
         "2027-01-09; the "
         "next one is 2027-01-11", "time.start:48"),
        ("{steps: 5, every: 1 business day, start: 2027-01-06, holidays: 2027-01-06}", "expected a start on a business "
         "day, got 2027-01-06; the next one is 2027-01-07", "time.start:48"),
        ("{steps: 5, every: 1d, start: 2027-01-06, holidays: [2027-01-06]}", "holidays count only on steps of business "
         "days; write every: 1 business day, or remove them", "time.holidays:48"),
        ("{steps: 5, every: business day, start: 2027-01-06, holidays: [Easter]}", "expected a day such as 2027-12-24, "
         'got "Easter" (holidays: days that are no business days, beside weekends)', "time.holidays[0]:69"),
        ("{steps: 1e12, every: 1s, start: 2027-01-01}", "expected steps that end by the year 9998, but the last of "
         "1,000,000,000,000 would be in 33715; give fewer or shorter steps, or leave out start", "time.steps:15"),
    ],
)  # fmt: skip
def test_faults_of_time(time, message, place):
    path, column = place.split(":")
    assert faults(timed(time)) == [f"{message}\n  at {path} (a.yaml, line 4, column {column})"]


def test_reading_takes_a_few_milliseconds():
    read(WHOLE)
    begin = time.process_time()
    for _ in range(10):
        read(WHOLE)
    assert (time.process_time() - begin) / 10 < 0.015


def test_reading_imports_nothing_heavy():
    heavy = "('scipy', 'pandas', 'pyarrow', 'numba')"
    code = f"import sys, procgen.spec.reader; print([m for m in {heavy} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout == "[]\n"
