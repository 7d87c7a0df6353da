"""What came before step 0 at a series: read from a file or a list, and refused where it does not fit, in words."""

import re

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
import yaml

import procgen as pg

AR = {"ar": {"phi": 0.5, "sd": 1}}
HEAD = {"procgen": 1, "seed": 5, "paths": 3, "time": {"steps": 4}}
DAILY = {"start": "2027-03-10", "every": "1d", "steps": 4}
FILE = {"file": "h.csv", "column": "load"}


def spec_file(folder, before, time=None, of=AR, **more):
    raw = {**HEAD, "time": time or HEAD["time"], "series": {"x": {"of": of, "before": before}}, **more}
    (folder / "s.yaml").write_text(yaml.safe_dump(raw), encoding="utf-8")
    return folder / "s.yaml"


def days(first, count):
    dates = pd.date_range(first, periods=count, freq="D")
    return pd.DataFrame({"day": dates.strftime("%Y-%m-%d"), "load": np.arange(1.0, count + 1)})


def faults(given):
    with pytest.raises(pg.SpecError) as error:
        pg.theory(pg.load(given))
    return [fault.message for fault in error.value.faults]


@pytest.mark.parametrize("suffix", ["csv", "parquet"])
def test_a_file_is_read_up_to_the_step_before_step_0_whatever_its_order(tmp_path, suffix):
    table = days("2027-03-01", 12).sample(frac=1, random_state=1)  # its last rows lie at steps 0 to 2
    getattr(table, f"to_{suffix}")(tmp_path / f"h.{suffix}", index=False)
    spec = pg.load(spec_file(tmp_path, {**FILE, "file": f"h.{suffix}", "time": "day"}, DAILY))
    assert spec.series["x"].before == tuple(range(1, 10))
    assert pg.theory(spec)["x"].mean([0]) == pytest.approx(4.5)
    assert pg.load(spec.raw).digest() == spec.digest()  # it needs the file no more


@pytest.mark.parametrize("place", ["file", "column", "step"])
def test_what_a_file_was_named_by_is_set_as_a_whole(tmp_path, place):
    for name, first in (("h.csv", -9), ("g.csv", -4)):
        days("2027-03-01", 9).assign(step=range(first, first + 9)).to_csv(tmp_path / name, index=False)
    told = {**FILE, "step": "step"}
    spec = pg.load(spec_file(tmp_path, told, of=[{"given": {"values": {**told, "file": "g.csv"}}}, AR]))
    for at in ("before", "given.values"):
        says = rf"has the numbers of its file by now; set the whole of it, as in series.*{at}=.column: …, file: …, step"
        with pytest.raises(pg.SpecError, match=says):
            spec.set({f"series.x.{at}.{place}": "other"})


def test_a_file_by_step_is_as_the_list(tmp_path):
    pd.DataFrame({"step": [-3, -2, -1, 0], "load": [7.0, 8.5, 9.0, 1.0]}).to_csv(tmp_path / "h.csv", index=False)
    spec = pg.load(spec_file(tmp_path, {**FILE, "step": "step"}))
    listed = pg.load(spec_file(tmp_path, [7, 8.5, 9]))
    assert spec.digest() == listed.digest()
    assert spec.digest() != pg.load(spec_file(tmp_path, [7, 8.5, 9.5])).digest()


def test_another_start_reads_the_record_up_to_it_or_says_that_it_ends_before(tmp_path):
    days("2027-03-01", 12).to_csv(tmp_path / "h.csv", index=False)
    spec = pg.load(spec_file(tmp_path, {**FILE, "time": "day"}, DAILY))
    assert spec.set({"time.start": "2027-03-08"}).series["x"].before == tuple(range(1, 8))
    assert spec.set({"time.start": "2027-03-11"}).series["x"].before == tuple(range(1, 11))
    (tmp_path / "h.csv").unlink()  # it was read once, whole
    assert spec.set({"time.start": "2027-03-13"}).series["x"].before == tuple(range(1, 13))
    for place, value, message in (
        ("time.every", "12h", "up to step −1, .* its last row before step 0 is that of step -2"),
        ("time.start", "2027-03-14", "up to step −1, .* its last row before step 0 is that of step -2"),
        ("time.start", "2027-02-01", "up to step −1, .* all its rows lie later"),
        ("time.start", "1927-02-01", "up to step −1, .* all its rows lie later"),
        ("time.start", "2127-02-01", r"2027-03-01 \(line 2\) lies more than 10,012 steps before step 0"),
    ):
        with pytest.raises(pg.SpecError, match=message):
            spec.set({place: value})
    later = {**spec.raw, "time": {**DAILY, "start": "2027-03-11"}}
    with pytest.raises(pg.SpecError, match=r"up to step −1 at 2027.* where the start was another when the file was"):
        pg.load(later)
    assert spec.set({"series.x.before": [1, 2]}).series["x"].before == (1.0, 2.0)
    assert spec.set({"series.x.before": None}).series["x"].before is None


def by_step(folder, time=None, **more):
    table = pd.DataFrame({"step": [-3, -2, -1, 0, 1, 2, 3], "load": [7.0, 8.5, 9.0, 1.0, 2.0, 3.0, 4.0]})
    table.to_csv(folder / "h.csv", index=False)
    return spec_file(folder, {**FILE, "step": "step"}, time or DAILY, **more)


@pytest.mark.parametrize(
    ("place", "value", "message"),
    [
        ("time.start", "2027-03-11", "step 0 began at 2027-03-10T00:00:00.* and begins at 2027-03-11T00:00:00.* now"),
        ("time.every", "12h", "step 1 began at 2027-03-11T00:00:00.* and begins at 2027-03-10T12:00:00.* now"),
        ("time.zone", "Europe/Rome", "step 0 began at 2027-03-10T00:00:00.* and begins at 2027-03-09T23:00:00.* now"),
    ],
)
def test_a_file_by_step_does_not_move_with_another_start_unseen(tmp_path, place, value, message):
    spec = pg.load(by_step(tmp_path))
    with pytest.raises(pg.SpecError) as error:
        spec.set({place: value})
    (fault,) = error.value.faults
    assert re.search(rf"^the rows of h.csv are matched by step, and {message}.* match them by time", fault.message)
    assert "series.x.before: {file: …, column: …, step: …}" in fault.message
    assert fault.place.path == "series.x.before.step" and fault.place.line > 0
    with pytest.raises(pg.SpecError, match="matched by step"):
        spec.changed(paths=7).set({place: value})
    meant = {**FILE, "file": str(tmp_path / "h.csv"), "step": "step"}
    assert spec.set({place: value, "series.x.before": meant}).series["x"].before == (7.0, 8.5, 9.0)


@pytest.mark.parametrize("settings", [{"time.steps": 2}, {"time.stamp": "end"}, {"series.x.of": [AR]}, {"seed": 8}])
def test_a_file_by_step_stays_where_the_start_does(tmp_path, settings):
    spec = pg.load(by_step(tmp_path))
    assert spec.set(settings).set(settings).series["x"].before == (7.0, 8.5, 9.0)


def test_a_start_for_a_spec_without_one_moves_nothing(tmp_path):
    spec = pg.load(by_step(tmp_path, HEAD["time"]))
    assert spec.set({"time.start": "2027-03-11", "time.every": "1d"}).series["x"].before == (7.0, 8.5, 9.0)


def test_a_variant_with_another_start_tells_of_the_file_by_step(tmp_path):
    (said,) = faults(by_step(tmp_path, variants={"later": {"time.start": "2027-03-12"}}))
    assert "matched by step, and step 0 began at 2027-03-10" in said
    again = {"time.start": "2027-03-12", "series.x.before": {**FILE, "step": "step"}}
    spec = pg.load(by_step(tmp_path, variants={"later": again}))
    assert spec.variant("later").series["x"].before == (7.0, 8.5, 9.0)


def test_a_given_input_by_step_does_not_move_either_and_blocks_to_draw_from_may(tmp_path):
    values = {**FILE, "step": "step"}
    by_step(tmp_path)
    spec = pg.load(spec_file(tmp_path, None, DAILY, series={"x": [{"given": {"values": values}}]}))
    with pytest.raises(pg.SpecError, match=r"matched by step.*given.values: \{file"):
        spec.set({"time.start": "2027-03-11"})
    drawn = [{"moving_blocks": {"values": values, "length": 2}}]
    blocks = pg.load(spec_file(tmp_path, None, DAILY, series={"x": drawn}))
    assert blocks.set({"time.start": "2027-03-11"}).time.start.day == 11


def without(table, *rows):
    return table.drop(index=list(rows))


@pytest.mark.parametrize(
    ("table", "message"),
    [
        (days("2027-02-20", 10), r"expected rows up to step −1, .* its last row before step 0 is that of step -9; add"),
        (days("2027-03-10", 3), r"expected rows up to step −1, .* all its rows lie later; add what is missing"),
        (without(days("2027-03-01", 9), 4), r"the table has nothing for step -5, and more before it; fill the gap"),
        (
            days("2027-03-01", 9).replace(5.0, np.nan),
            r'expected a number, got "" in column load on line 6, where day is 2027-03-05; fill what is empty',
        ),
        (
            days("2027-03-01", 9).assign(load="50,5"),
            r'got "50,5" in column load on line 2, .* 8 other rows have none either; write the decimal sign as a',
        ),
        (
            days("2027-03-01", 9).replace("2027-03-05", "2027-03-05T11:00"),
            r"no step is at 2027-03-05T11:00 \(line 6\), the nearest, step -5, is at 2027-03-05T00:00:00 in UTC; take",
        ),
        (
            days("2027-03-01", 9).replace(5.0, np.inf),
            r'got "inf" in column load on line 6, .*; it must be finite: give',
        ),
        (pd.concat([days("2027-03-01", 9)] * 2), r"the table has two rows for step -9; keep one"),
        (days("2027-03-01", 9).rename(columns={"load": "lode"}), r"the table has no column load; .* did you mean lode"),
        (days("2027-03-01", 9).replace("2027-03-05", "last friday"), r"expected a date, or a date and time, in column"),
    ],
)
def test_records_that_do_not_fit(tmp_path, table, message):
    table.to_csv(tmp_path / "h.csv", index=False)
    (said,) = faults(spec_file(tmp_path, {**FILE, "time": "day"}, DAILY))
    assert re.search(message, said)


@pytest.mark.parametrize(("lost", "row"), [(1.0, "row 0, the first"), (5.0, "row 4, counted from 0")])
def test_a_row_that_has_no_line_is_told_by_its_number(tmp_path, lost, row):
    days("2027-03-01", 9).replace(lost, np.nan).to_parquet(tmp_path / "h.parquet", index=False)
    (said,) = faults(spec_file(tmp_path, {**FILE, "file": "h.parquet", "time": "day"}, DAILY))
    assert f"in column load on {row}, where day is 2027-03-0" in said


@pytest.mark.parametrize(
    ("before", "message"),
    [
        ({"column": "load"}, r"expected a list of numbers, the last of them at step −1, or a column of a file such as"),
        ([], r"expected a number, or a list of such numbers, got an empty list"),
        ([1, "two"], r'expected a number, got "two"'),
        ([1.0] * 10_001, r"expected at most 10,000 numbers before step 0, got 10,001; keep the last ones"),
        ({**FILE, "time": "day"}, r"times need time: \{start"),
    ],
)
def test_other_ways_to_write_it_wrong(tmp_path, before, message):
    days("2027-03-01", 9).to_csv(tmp_path / "h.csv", index=False)
    (said,) = faults(spec_file(tmp_path, before))
    assert re.search(message, said)


PAST = [3.0, 1.0, 4.0, 1.0, 5.0, 9.0, 2.0, 6.0]


@pytest.mark.parametrize(
    ("of", "message"),
    [
        ([{"constant": 3}], r"nothing in x is random, so its past changes nothing; remove before"),
        ([{"ar": {"phi": 0.5, "sd": 1, "before": {"x": [1]}}}], r"x.ar \(ar\) has a `before` of its own, .* one"),
        ([{"floor": [AR]}], r"x.floor cannot leave from the past of x: floor cannot be told where .*; remove before"),
        (
            [{"stochastic_volatility": {"sd": 1, "phi": 0.9, "eta": 0.2}}],
            r"x.stochastic_volatility cannot leave .* nothing of it is told by its values .* remove before",
        ),
        (
            [{"ar": {"phi": 1.05, "sd": 3}}],
            r"shrink phi, .* or give the term its own `before: \{x: …\}` \(one at the series does not do\)",
        ),
        ([{"poisson": {"mean": 3}}], r"x.poisson cannot leave from the past of x: its counts have nothing to do with"),
        (
            [AR, {"random_walk": {"sd": 1, "law": "laplace"}}],
            r"the past of x does not tell its parts apart: expected normal shocks and linear .* got x.random_walk",
        ),
        ([AR, {"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}], r"parts apart: .* got x.garch \(garch\); leave before"),
        ([AR, {"integrate": [{"ma": {"theta": 0.5, "sd": 1}}]}], r"parts apart: .* got x.integrate \(integrate\)"),
        (
            [{"use": "both"}, {"white_noise": {"sd": 1}}],
            r"what x uses has a state that others may see; write its .* before out at x",
        ),
        ([{**AR, "times": 0}], r"x.ar \(ar\) is multiplied by 0, and its past is lost; take it out"),
        (
            [{"seasonal_random_walk": {"period": 9, "sd": 1}}, AR],
            r"expected at least 9 values before step 0 to tell where the parts of x stand, got 8; add earlier ones",
        ),
        (
            [{"seasonal_random_walk": {"period": 9, "sd": 1, "law": "laplace"}}],
            r"expected at least 9 values before step 0 \(one a lag\), got 8; add earlier ones",
        ),
        (
            [{"ar": {"phi": {"draw": {"uniform": [0, 0.9]}, "over": "path"}, "sd": 1}}],
            r"phi is drawn by path in x, which leaves from its recorded past: expected numbers there",
        ),
    ],
)
def test_terms_that_cannot_be_conditioned(tmp_path, of, message):
    (said,) = faults(spec_file(tmp_path, PAST, of=of, shared={"both": [AR]}))
    assert re.search(message, said), said


def test_steps_of_their_own_lengths_send_to_the_before_of_the_term(tmp_path):
    days("2027-03-01", 9).to_csv(tmp_path / "h.csv", index=False)
    time = {"at": ["2027-03-10", "2027-03-11", "2027-03-14"]}
    body = {"ornstein_uhlenbeck": {"rate": 0.3, "sd": 2}}
    for before in ({**FILE, "time": "day"}, [16]):
        (said,) = faults(spec_file(tmp_path, before, time, of=[body]))
        assert "ornstein_uhlenbeck" in said and "its own" in said and "before: {x: 16}" in said
    own = {"ornstein_uhlenbeck": {**body["ornstein_uhlenbeck"], "before": {"x": 16}}}
    assert pg.theory({**HEAD, "time": time, "series": {"x": [own]}})["x"].variance(0) > 0


def test_what_a_record_replaces_is_said(tmp_path):
    from procgen.report.theory import theory_text

    for kind, numbers, what in (
        ("random_walk", {"sd": 1, "start": 7}, ["start of x.random_walk"]),
        ("random_walk", {"sd": 1}, []),
        (
            "local_linear_trend",
            {"level_sd": 1, "slope_sd": 1, "noise_sd": 1, "start": 7, "slope": 2},
            ["start of x.local_linear_trend", "slope of x.local_linear_trend"],
        ),
    ):
        assert told(tmp_path, [{kind: numbers}]).get("replaced", []) == what
        spec = pg.load(tmp_path / "s.yaml")
        text = " ".join(theory_text(spec, pg.theory(spec), [0], 1).split())
        assert all(f"the {one} is not used: the record says where it stands" in text for one in what)


@pytest.mark.parametrize("decimal", [",", "."])
def test_a_record_with_another_separator_is_told(tmp_path, decimal):
    days("2027-03-01", 9).to_csv(tmp_path / "h.csv", index=False, sep=";", decimal=decimal)
    (said,) = faults(spec_file(tmp_path, {**FILE, "time": "day"}, DAILY))
    assert said.endswith("; semicolons part its names: use commas, and write numbers with a decimal point")


def test_a_record_by_another_clock_is_told_with_the_nearest_step(tmp_path):
    at = pd.date_range("2027-03-01", periods=9, freq="D", tz="UTC")
    table = pd.DataFrame({"day": at.astype(str), "load": 1.0})
    table.to_csv(tmp_path / "h.csv", index=False)
    (said,) = faults(spec_file(tmp_path, {**FILE, "time": "day"}, {**DAILY, "zone": "Europe/Berlin"}))
    assert "no step is at 2027-03-01 00:00:00+00:00 (line 2), the nearest, step -9, is at 2027-02-28T23:00:00Z" in said
    assert "which is 2027-03-01T00:00:00 in Europe/Berlin, and so it is with all 9 rows: is the zone of the" in said
    table.loc[1:, "day"] = days("2027-03-02", 8)["day"]
    table.to_csv(tmp_path / "h.csv", index=False)
    (said,) = faults(spec_file(tmp_path, {**FILE, "time": "day"}, {**DAILY, "zone": "Europe/Berlin"}))
    assert said.endswith("in Europe/Berlin; take that row out, or change the spec's time")


def test_a_group_has_no_past(tmp_path):
    more = {"groups": {"g": {"names": ["a", "b"], "of": [AR], "before": [1, 2]}}}
    (said,) = faults(spec_file(tmp_path, PAST, **more))
    assert said == "what came before is that of one series; write it at a series of its own, or remove before"


def told(tmp_path, of, before=PAST, **more):
    theory = pg.theory(pg.load(spec_file(tmp_path, before, of=of, **more)))
    return theory.as_dict([0])["series"]["x"]["past"]


def test_theory_says_what_it_leaves_from_and_what_could_not_be_conditioned(tmp_path, capsys):
    assert told(tmp_path, [AR]) == {"values": 8, "last": 6.0, "unconditioned": []}
    (said,) = told(tmp_path, [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}])["unconditioned"]
    assert said.startswith("the variance of x.garch before the record: it is begun at its mean there, and the 8 shocks")
    endless = {"omega": 0.1, "alpha": 0.2, "beta": 0.8, "allow_infinite_variance": True}  # ω/(1 − β) is 0.5
    (said,) = told(tmp_path, [{"garch": endless}])["unconditioned"]
    assert "it is begun at 0.5 there, for its mean is infinite, and the 8 shocks since" in said
    (said,) = told(tmp_path, [{"gjr_garch": {**endless, "alpha": 0.15, "gamma": 0.1}}])["unconditioned"]
    assert "for its mean is infinite, and the 8 shocks since" in said
    (said,) = told(tmp_path, [{"egarch": {"scale": 1, "gamma": 0, "alpha": 0.2, "beta": 0.99}}])["unconditioned"]
    assert "it is begun at the mean of its logarithm there, and the 8 shocks since" in said
    tied = {"correlation": [{"between": ["x.ar", "y.ar"], "value": 0.5}]}
    raw = yaml.safe_load(spec_file(tmp_path, PAST).read_text(encoding="utf-8"))
    raw = {**raw, "series": {**raw["series"], "y": [AR]}, **tied}
    (said,) = pg.theory(raw).as_dict([0])["series"]["x"]["past"]["unconditioned"]
    assert said.startswith("on the pasts of y.ar, whose shocks are correlated with its own")

    from procgen.report.theory import theory_text

    text = theory_text(pg.load(raw), pg.theory(raw), [0], 3)
    assert "leaves from its recorded past of 8 values, the last 6 at step −1" in text
    assert "what came before could not be conditioned: on the pasts of y.ar" in text
    assert "x: settles from its given start" in text


def test_a_filter_leaves_from_its_values_where_the_state_of_its_shock_cannot_be_told(tmp_path):
    shock = {"switching_noise": {"sd": {"calm": 1, "storm": 4}, "durations": {"calm": 40, "storm": 8}}}
    body = [{"ar": {"phi": 0.5, "shock": shock}}]
    assert told(tmp_path, body)["unconditioned"] == ["the state of switching_noise in x.ar is in its stationary law"]
    assert pg.theory(pg.load(tmp_path / "s.yaml"))["x"].mean([0]) == pytest.approx(3.0)


def test_a_part_by_itself_is_said_to_be_one(tmp_path):
    more = {"series": {"x": {"of": [AR, {"white_noise": {"sd": 1}}], "before": PAST}, "y": [{"use": "x.ar"}]}}
    (said,) = pg.theory({**HEAD, **more}).as_dict([0])["series"]["x"]["past"]["unconditioned"]
    assert said.startswith("x.ar by itself: a part runs from the mean of where it may stand")


def test_a_series_leaves_from_its_past_beside_one_whose_numbers_are_drawn_by_path(tmp_path):
    drawn = {"ar": {"phi": {"draw": {"uniform": [0.2, 0.8]}, "over": "path"}, "sd": 1}}
    raw = {**HEAD, "paths": 40, "series": {"x": {"of": [AR], "before": PAST}, "z": [drawn], "w": [{"use": "x"}]}}
    theory = pg.theory(raw)
    assert theory.as_dict([0])["series"]["x"]["past"]["last"] == 6.0
    alone = {**raw, "series": {"x": raw["series"]["x"]}}
    both = pg.render(raw)
    assert np.array_equal(both["x"], pg.render(alone)["x"]) and np.array_equal(both["x"], both["w"])
    assert theory["w"].mean([0]) == pytest.approx(3.0)


def test_what_differs_and_what_moves_is_told(tmp_path):
    from procgen.spec.meaning import changes
    from procgen.terms.recipe import recipes

    raw = {**HEAD, "series": {"x": {"of": [AR], "before": PAST}, "y": [AR]}}
    old, new = pg.load(raw), pg.load({**raw, "series": {**raw["series"], "x": {"of": [AR], "before": [*PAST, 7.0]}}})
    assert [str(c) for c in changes(old, new)] == ["series.x.before: 8 values, the last 6.0 → 9 values, the last 7.0"]
    assert recipes(new)["x"].moved_from(recipes(old)["x"]) == ("x.ar",)
    assert recipes(new)["y"].moved_from(recipes(old)["y"]) == ()


def test_a_variant_with_another_start_reads_the_record_up_to_it(tmp_path):
    days("2027-03-01", 12).to_csv(tmp_path / "h.csv", index=False)
    later = {"variants": {"later": {"time.start": "2027-03-12"}}}
    spec = pg.load(spec_file(tmp_path, {**FILE, "time": "day"}, DAILY, **later))
    assert spec.variant("later").series["x"].before == tuple(range(1, 12))
    assert spec.variant("later").variant("base").series["x"].before == tuple(range(1, 12))
    assert spec.series["x"].before == tuple(range(1, 10))


def test_a_file_that_is_not_there_is_told_with_the_folder_that_was_looked_in(tmp_path, monkeypatch):
    spec = spec_file(tmp_path, {**FILE, "time": "day"}, DAILY)
    (said,) = faults(spec)
    assert said == f"there is no file {tmp_path / 'h.csv'}; a path is taken from the folder of the spec"
    days("2027-03-01", 12).to_csv(tmp_path / "h.csv", index=False)
    (tmp_path / "elsewhere").mkdir()
    monkeypatch.chdir(tmp_path / "elsewhere")
    with pytest.raises(pg.SpecError) as error:
        pg.load(spec).set({"series.x.before": {**FILE, "time": "day"}})
    assert f"there is no file {tmp_path / 'elsewhere' / 'h.csv'}; a path is taken from the current" in str(error.value)


@pytest.mark.parametrize("sort", [np.array, pd.Series, tuple, lambda values: range(1, 6)])
def test_arrays_and_columns_are_lists(sort):
    raw = {**HEAD, "series": {"x": {"of": AR, "before": sort([1, 2, 3, 4, 5])}}}
    spec = pg.load(raw)
    assert spec.series["x"].before == (1.0, 2.0, 3.0, 4.0, 5.0)
    assert spec.digest() == pg.load({**HEAD, "series": {"x": {"of": AR, "before": [1, 2, 3, 4, 5]}}}).digest()
    assert spec.set({"series.x.before": sort([1, 2, 3, 4, 5])}).digest() == spec.digest()


def test_arrays_that_are_no_numbers_or_too_long_are_one_fault():
    def said(before):
        return faults({**HEAD, "series": {"x": {"of": AR, "before": before}}})

    assert len(said(np.arange(200_000.0))) == 1
    assert len(said(np.full(5, np.nan))) == 1


@pytest.mark.parametrize("suffix", ["csv", "parquet"])
@pytest.mark.parametrize(
    ("name", "told"),
    [
        ("load", {"series": {"x": {"of": AR, "before": {**FILE, "step": "step"}}}}),
        ("step", {"series": {"x": {"of": AR, "before": {**FILE, "step": "step"}}}}),
        ("load", {"series": {"x": {"of": {"given": {"values": {**FILE, "step": "step"}}}}}}),
        ("load", {"series": {"x": {"of": {"white_noise": {"sd": 1, "law": {"empirical": {"values": FILE}}}}}}}),
        ("load", {"series": {"x": {"of": {"constant": {"from_table": {**FILE, "key": "series"}}}}}}),
        ("load", {"groups": {"g": {"table": {"file": "h.csv"}, "of": {"constant": 1}}}}),
    ],
)
def test_a_column_that_stands_twice_is_refused_wherever_it_is_used(tmp_path, suffix, name, told):
    """The reader of `validate` says the same of a table of paths (tests/checks/test_files.py)."""
    table = pd.DataFrame([[0, "x", 1.0, 2.0], [-1, "y", 3.0, 4.0]], columns=["step", "series", "load", "other"])
    table = table.rename(columns={"other": "load"} if name == "load" else {"other": "load", "load": name})
    if suffix == "csv":
        table.to_csv(tmp_path / "h.csv", index=False)
    else:
        columns = [pa.array(table.iloc[:, k]) for k in range(4)]
        pq.write_table(pa.Table.from_arrays(columns, names=list(table.columns)), tmp_path / "h.parquet")
    text = yaml.safe_dump({**HEAD, **told}).replace("h.csv", f"h.{suffix}")
    (tmp_path / "s.yaml").write_text(text, encoding="utf-8")
    (said,) = faults(tmp_path / "s.yaml")
    places = "3 and 4" if name == "load" else "1 and 3"
    assert said == f"the table has 2 columns named '{name}', columns {places}; rename or drop all but the one meant"


def test_a_name_that_stands_twice_and_is_not_used_does_no_harm(tmp_path):
    (tmp_path / "h.csv").write_text("step,load,,\n-2,1,,\n-1,2,,\n")
    assert pg.load(spec_file(tmp_path, {**FILE, "step": "step"})).series["x"].before == (1.0, 2.0)
