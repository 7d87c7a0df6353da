"""Steps at listed times: read, kept and compared as they are, and a pull in continuous time exact on them."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from scipy.stats import chi2, multivariate_normal

import procgen as pg
from procgen.spec.meaning import changes
from procgen.spec.model import SpecError
from procgen.terms.graph import build

from .test_elapsed import graph_of
from .test_exact_covariance import compare

TICKS = [  # minutes after 9:00, as trades come
    *(0, 7, 8, 31, 32, 95, 96, 97, 240, 241, 300, 1500),
    *(1501, 1510, 1600, 1610, 1700, 1701, 1702, 1790, 1999, 2000, 2006, 2010),
]
KAPPA, SIGMA = 0.8, 1.3  # an hour, and in √hour


def texts(minutes=TICKS, offset=""):
    return [f"{t.isoformat()}{offset}" for t in pd.Timestamp("2027-01-04T09:00") + pd.to_timedelta(minutes, "min")]


def raw(time=None, **rest):
    ou = {"rate": {"value": KAPPA, "per": "h"}, "mean": 2, "sd": {"value": SIGMA, "per": "h"}}
    body = [{"ornstein_uhlenbeck": ou}]
    return {"seed": 3, "paths": 400, "time": time or {"at": texts()}, "series": {"x": body}, **rest}


def exact(minutes=TICKS):
    """σ²/2κ · exp(−κ|t − s|), the stationary covariance (Uhlenbeck & Ornstein 1930, Phys. Rev. 36, 823)."""
    hours = np.array(minutes) / 60
    return SIGMA**2 / (2 * KAPPA) * np.exp(-KAPPA * np.abs(hours[:, None] - hours))


def test_theory_is_the_closed_form():
    x = pg.theory(pg.load(raw()))["x"]
    t, s = np.indices((len(TICKS),) * 2)
    np.testing.assert_allclose(x.covariance(t.ravel(), s.ravel()), exact().ravel(), rtol=1e-12)
    np.testing.assert_allclose(x.mean(np.arange(len(TICKS))), 2.0)


def test_what_is_drawn_has_this_covariance_exactly(monkeypatch):
    """The matrix that makes values of independent normals, against theory; see `compare`."""
    at = ", ".join(texts())
    compare(graph_of(f"  x: {OU}", f"at: [{at}]"), monkeypatch)


OU = "{ornstein_uhlenbeck: {rate: {value: 0.8, per: h}, mean: 3, sd: {value: 2, per: h}}}"


def test_paths_follow_the_normal_law_with_this_covariance():
    """x′C⁻¹x of 400 paths is chi-square with 400 · 24 degrees of freedom; false alarm 1e-9."""
    values = pg.render(pg.load(raw()))["x"] - 2.0
    total = float(np.einsum("pt,ts,ps->", values, np.linalg.inv(exact()), values))
    assert 5e-10 < chi2(values.size).cdf(total) < 1 - 5e-10
    wrong = multivariate_normal(cov=exact(np.arange(24) * np.mean(np.diff(TICKS))))  # as if steps were alike
    right = multivariate_normal(cov=exact())
    assert right.logpdf(values).sum() > wrong.logpdf(values).sum() + 1000


def test_stored_times_are_those_of_the_list(tmp_path):
    ensemble = pg.render(pg.load(raw()), tmp_path / "out")
    stored = pd.read_parquet(next((tmp_path / "out").rglob("*.parquet")))
    times = pd.to_datetime(stored["time"].drop_duplicates(), utc=True).dt.tz_localize(None)
    assert times.tolist() == [pd.Timestamp(t) for t in texts()]
    assert json.loads((tmp_path / "out" / "manifest.json").read_text())["time"]["last"].startswith(texts()[-1])
    assert pg.validate(ensemble).agrees


@pytest.mark.parametrize("form", ["csv", "parquet", "parquet in UTC"])
def test_times_of_a_file_are_those_of_a_list(form, tmp_path):
    """Local ones without a zone, instants with one; the spec then holds them and needs the file no more."""
    at = pd.Series(pd.to_datetime(texts()), name="sent").astype("datetime64[us]")
    file = tmp_path / f"log.{form[:7].strip()}"
    if form == "csv":
        at.to_csv(file, index=False, date_format="%Y-%m-%dT%H:%M")
    else:
        at = at.dt.tz_localize("Europe/Berlin").dt.tz_convert("UTC") if "UTC" in form else at
        pq.write_table(pa.table({"sent": pa.array(at)}), file)
    zone = {"zone": "Europe/Berlin"}
    spec = pg.load(raw({"at": {"file": str(file), "column": "sent"}, **zone}))
    assert spec.time == pg.load(raw({"at": texts(), **zone})).time
    file.unlink()
    assert pg.load(spec.raw).time == spec.time and changes(spec, pg.load(raw({"at": texts(), **zone}))) == ()


def test_zones_offsets_and_changes_of_clocks():
    """Against pandas: the hour that comes twice needs an offset to be told apart."""
    local = ["2027-10-31T02:10+02:00", "2027-10-31T02:10+01:00", "2027-10-31T03:05", "2027-11-01"]
    grid = pg.load(raw({"at": local, "zone": "Europe/Berlin"})).time
    expected = ["2027-10-31T00:10", "2027-10-31T01:10", "2027-10-31T02:05", "2027-10-31T23:00"]
    assert grid.stamps(0, 4).view("datetime64[us]").tolist() == [pd.Timestamp(t).to_pydatetime() for t in expected]
    clock = grid.local(np.arange(4)).view("datetime64[us]").astype(str)
    assert [t[11:16] for t in clock] == ["02:10", "02:10", "03:05", "00:00"]


def test_fewer_steps_begin_alike_and_more_are_refused():
    few = pg.render(pg.load(raw({"at": texts(), "steps": 9})))["x"]
    assert (few == pg.render(pg.load(raw()))["x"][:, :9]).all()
    with pytest.raises(SpecError, match="expected at most 24 steps, for so many times are listed in at, got 30; list"):
        pg.load(raw()).changed(steps=30)


def test_dates_lie_between_listed_times_and_the_calendar_is_theirs():
    at = texts([0, 60, 1440, 1500, 10_080])
    event = {"event": {"size": 5, "at": "2027-01-05T09:30"}}
    days = {"calendar": {"by": "weekday", "values": [1, 2, 3, 4, 5, 6, 7]}}
    spec = pg.load({**raw({"at": at}), "series": {"e": [event], "d": [days]}})
    assert spec.time.moment_steps("2027-01-05T09:30") == 2.5 and spec.time.moment_steps("2027-01-04T09:45") == 0.75
    values = pg.render(spec)
    assert values["e"][0].tolist() == [0, 0, 0, 5, 5] and values["d"][0].tolist() == [1, 1, 2, 2, 1]


def test_before_the_first_and_after_the_last_time_steps_have_the_mean_length():
    grid = pg.load(raw()).time
    mean = 2010 * 60_000_000 / 23
    np.testing.assert_allclose(np.diff(grid.stamps(-4, 5)), mean, atol=1)
    np.testing.assert_allclose(np.diff(grid.stamps(23, 5)), mean, atol=1)


def spoiled(time, series=None):
    return {**raw(time), **({"series": {"x": [series]}} if series else {})}


NOISE = {"white_noise": {"sd": 1}}
CASES = [
    (spoiled({"at": texts([0, 5, 5])}), "each later than the one before, got 2027-01-04T09:05:00 for step 2 after"),
    (spoiled({"at": texts([0])}), "expected a list of at least two dates and times"),
    (spoiled({"at": ["2027-01-04", "later"]}), "expected a date and time such as 2027-01-04T06:07"),
    (
        spoiled({"at": ["2027-03-28T00:00", "2027-03-28T02:30"], "zone": "Europe/Berlin"}),
        "2027-03-28T02:30 does not exist in Europe/Berlin: the clocks skip it; take it out",
    ),
    (
        spoiled({"at": ["2027-10-31T02:30", "2027-10-31T02:10"], "zone": "Europe/Berlin"}),
        "where clocks are set back, write the offset",
    ),
    (spoiled({"at": texts(), "start": "2027-01-04"}), "start has no place beside at"),
    (spoiled({"at": texts(), "every": "1h"}), "every has no place beside at"),
    (spoiled({"at": texts(), "stamp": "end"}), "stamp has no place beside at"),
    (spoiled({"at": {"file": "none.csv", "column": "t"}}), "there is no file"),
    (spoiled(None, {"seasonal": {"period": "1d", "profile": [1, 2]}}), "a day is no fixed number of steps where the"),
    (spoiled(None, {"white_noise": {"sd": {"value": 1, "per": "day"}}}), "per: day needs steps of one length"),
    (spoiled(None, {"trend": {"slope": {"value": 1, "per": "day"}}}), "write the value per step"),
    (
        spoiled(None, {"ornstein_uhlenbeck": {"rate": 0.1, "sd": 1, "law": "laplace"}}),
        "expected normal shocks beside clock: time",
    ),
]


@pytest.mark.parametrize(("broken", "sentence"), CASES, ids=[sentence[:40] for _, sentence in CASES])
def test_what_cannot_be_is_refused_with_the_mend(broken, sentence):
    with pytest.raises(SpecError) as caught:
        build(pg.load(broken))
    assert sentence in str(caught.value)


def test_a_past_with_times_is_matched_by_step(tmp_path):
    (tmp_path / "old.csv").write_text("n,t,v\n-2,2027-01-04T08:50,1\n-1,2027-01-04T08:55,2\n")
    ar = [{"ar": {"phi": 0.5, "sd": 1}}]
    by = {"file": str(tmp_path / "old.csv"), "column": "v"}
    with pytest.raises(SpecError, match="those before step 0 are not among them; match by step"):
        pg.load({**raw(), "series": {"x": {"of": ar, "before": {**by, "time": "t"}}}})
    assert pg.load({**raw(), "series": {"x": {"of": ar, "before": {**by, "step": "n"}}}}).series["x"].before == (1, 2)


def test_a_start_beside_listed_times_is_refused_where_it_is_set():
    with pytest.raises(SpecError, match="start has no place beside at"):
        pg.load(raw()).set({"time.start": "2027-02-01"})


def test_variants_may_list_other_times():
    spec = pg.load(raw(variants={"sparse": {"time.at": texts([0, 60, 300])}}))
    assert spec.variant("sparse").time.steps == 3
    found = {change.place: change for change in changes(spec, spec.variant("sparse"))}
    rates = {f"series.x.ornstein_uhlenbeck.{name}" for name in ("rate", "sd")}  # per another mean step
    assert found.keys() == {"time.steps", "time.at", *rates}
    change = found["time.at"]
    assert change.old.startswith("24 times from 2027-01-04T09:00:00Z to ") and "digest" in change.new


def test_a_table_at_other_times_is_found():
    frame = pg.render(pg.load(raw())).to_pandas()
    spec = pg.load(raw())
    assert pg.validate(frame, spec=spec).agrees
    moved = frame.assign(time=frame["time"] + pd.to_timedelta(frame["step"].eq(5) * 60, "s"))
    found = pg.validate(moved, spec=spec)
    assert found.agrees is False and "expected the times listed in the spec" in str(found)


def test_steps_that_count_alike_are_found_where_times_were_listed():
    """A saboteur: drawn as if all steps had the mean length."""
    wrong = raw()
    wrong["series"]["x"][0]["ornstein_uhlenbeck"]["clock"] = "steps"
    assert pg.validate(pg.render(pg.load(wrong)), spec=pg.load(raw())).agrees is False
