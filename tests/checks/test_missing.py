"""Checks of series with gaps: a filter that passes over them, shares and lengths, and what is wrong behind them."""

from __future__ import annotations

import numpy as np
import pytest

import procgen as pg
from procgen.checks.files import TableError
from procgen.checks.kalman import Kalman
from procgen.checks.missing import GapKalman

HEAD = {"procgen": 1, "seed": 7, "paths": 400, "time": {"steps": 120}}
AR = [{"ar": {"phi": 0.6, "sd": 1}}, {"constant": 3}]


def spec(body=AR, share=0.05, gap=4, seed=7):
    return pg.load(HEAD | {"seed": seed, "series": {"x": [{"missing": {"of": body, "share": share, "gap": gap}}]}})


def ar_plus_noise():
    """State (ar), observed with noise as a second state."""
    a, q = np.diag([0.8, 0.0]), np.diag([1.0, 0.5])
    return Kalman(a, q, np.ones(2), np.diag([1 / (1 - 0.64), 0.5]))


def test_innovations_beside_gaps_are_those_of_statsmodels():
    """statsmodels' SARIMAX with measurement error passes over NaN in the same way (Durbin & Koopman 2012, 4.10)."""
    from statsmodels.tsa.statespace.sarimax import SARIMAX

    rng = np.random.default_rng(3)
    y = rng.normal(size=(60, 5)) * 1.5
    y[rng.random(y.shape) < 0.3] = np.nan
    filter_ = GapKalman.of(ar_plus_noise())
    found, _ = filter_.innovations(y, filter_.start(5), 0)
    for path in range(5):
        model = SARIMAX(y[:, path], order=(1, 0, 0), measurement_error=True)
        theirs = model.filter([0.8, 0.5, 1.0]).standardized_forecasts_error[0]
        np.testing.assert_allclose(np.nan_to_num(found[:, path]), theirs, rtol=1e-6, atol=1e-8)  # 0 where missing


def test_without_gaps_it_is_the_other_filter():
    y = np.random.default_rng(4).normal(size=(200, 32))
    plain, gappy = ar_plus_noise(), GapKalman.of(ar_plus_noise())
    expected, _ = plain.innovations(y, plain.start(32), 0)
    state, parts = gappy.start(32), []
    for first in (0, 7, 120):
        part, state = gappy.innovations(y[first : {0: 7, 7: 120, 120: 200}[first]], state, first)
        parts.append(part)
    np.testing.assert_allclose(np.concatenate(parts), expected, rtol=0, atol=1e-10)


BODIES = {
    "ar": AR,
    "sum": [{"random_walk": {"sd": 0.3}}, {"ar": {"phi": 0.8, "sd": 1}}, {"white_noise": {"sd": 0.5}}],
    "student": [{"ar": {"phi": [0.5, 0.2], "sd": 1, "law": {"student_t": {"df": 8}}}}],
    "counts": [{"inar": {"alpha": 0.6, "mean": 5}}],
    "prices": [{"exp": [{"random_walk": {"sd": 0.02, "start": 3}}]}],
    "known": [{"trend": {"level": 4, "slope": 0.1}}],
}


@pytest.mark.parametrize("name", BODIES)
@pytest.mark.parametrize("share, gap", [(0.1, 1.2), (0.4, 9)])
def test_true_ensembles_agree(name, share, gap):
    verdict = pg.validate(pg.render(spec(BODIES[name], share, gap)), false_alarm=1e-8)
    assert "departs" not in verdict.counts and verdict.counts["agrees"] > 0, verdict.text()


@pytest.mark.parametrize(
    "drawn, named",
    [
        ({"share": 0.06}, "x: rate of new gaps: larger than stated"),
        ({"gap": 3}, "x: share of gaps that go on: smaller than stated"),
        ({"body": [{"ar": {"phi": 0.65, "sd": 1}}, {"constant": 3}]}, "x: memory"),
        ({"body": [{"ar": {"phi": 0.6, "sd": 1.05}}, {"constant": 3}]}, "x: spread"),
        ({"body": [{"ar": {"phi": 0.6, "sd": 1}}, {"constant": 3.1}]}, "x: level"),
    ],
)
def test_saboteurs_behind_gaps_are_found_and_named(drawn, named):
    verdict = pg.validate(pg.render(spec(**drawn)), spec=spec())
    assert verdict.agrees is False and named in verdict.text()


def test_what_is_missing_by_itself_has_its_share_tested():
    stated = pg.load(HEAD | {"series": {"x": [{"missing": {"of": AR, "share": 0.05}}]}})
    other = pg.load(HEAD | {"series": {"x": [{"missing": {"of": AR, "share": 0.06}}]}})
    verdict = pg.validate(pg.render(other), spec=stated)
    assert verdict.agrees is False and "x: share of missing values: larger than stated" in verdict.text()
    assert pg.validate(pg.render(stated), false_alarm=1e-8).agrees
    gaps = pg.load(HEAD | {"series": {"x": [{"missing": {"of": AR, "share": 0.05, "gap": 1.5}}]}})
    assert "x: share of gaps that go on: larger than stated" in pg.validate(pg.render(gaps), spec=stated).text()


def test_values_left_out_for_their_size_are_found():
    """The largest tenth is missing, which `missing` does not say: the share is right, and the level is not."""
    import pandas as pd

    x = pg.render(pg.load(HEAD | {"series": {"x": AR}}))["x"]
    x = np.where(x > np.quantile(x, 0.9), np.nan, x)
    paths, steps = np.indices(x.shape).reshape(2, -1)
    table = pd.DataFrame({"path": paths, "step": steps, "x": x.ravel()})
    stated = pg.load(HEAD | {"series": {"x": [{"missing": {"of": AR, "share": 0.1}}]}})
    assert pg.validate(table, spec=stated).agrees is False


def test_what_cannot_be_judged_says_why():
    text = pg.validate(pg.render(spec(BODIES["counts"]))).text()
    assert "values are missing: the ranks of what comes after a gap" in text
    assert "averages over steps: values are missing: not judged" in text


def test_gaps_of_one_series_cost_the_others_nothing():
    body = {"x": [{"missing": {"of": AR, "share": 0.5}}], "y": [{"ar": {"phi": 0.5, "sd": 1}}]}
    both = pg.validate(pg.render(HEAD | {"series": body}))
    alone = pg.validate(pg.render(HEAD | {"series": {"y": body["y"]}}))
    pick = ["what", "probe", "estimate", "p"]
    left, right = (v.checks[v.checks["series"] == "y"][pick].reset_index(drop=True) for v in (both, alone))
    assert left.equals(right)


def test_the_same_verdict_from_parts_by_several_processes(tmp_path):
    ens = pg.render(spec(share=0.2), out=tmp_path / "o")
    one, two = pg.validate(ens, workers=1), pg.validate(ens, workers=2)
    assert one.checks.equals(two.checks)


def test_a_share_drawn_by_path_is_not_judged_as_one_share():
    share = {"draw": {"uniform": [0.1, 0.3]}, "over": "path"}
    body = {"x": [{"missing": {"of": AR, "share": share}}]}
    verdict = pg.validate(pg.render(HEAD | {"series": body}), false_alarm=1e-8)
    assert verdict.agrees and "its share or length is drawn by path: not judged" in verdict.text()


def test_rows_left_out_are_the_missing_values_that_are_stated():
    """A long table often has no row where there is no value: told, and judged by the stated share and length."""
    frame = pg.render(spec()).to_pandas()
    frame = frame[frame["x"].notna()]
    verdict = pg.validate(frame, spec())
    (row,) = [r for r in verdict.rows if r.what == "every path and step once"]
    assert verdict.agrees and "judged as missing values" in row.note
    fewer = pg.validate(frame, spec(share=0.02))
    assert fewer.agrees is False and "rate of new gaps: larger than stated" in fewer.headline[0]


@pytest.mark.parametrize("paths", [1, 300])
@pytest.mark.parametrize("steps", ["step", "time", "both"])
def test_a_first_row_that_no_path_has_is_missing_as_any_other(paths, steps):
    """Its chance with one path is 0.25; that of 300 paths is no accident, which what is missing together tells."""
    stated = HEAD | {"paths": paths, "series": {"x": [{"missing": {"of": AR, "share": 0.25, "gap": 3}}]}}
    stated = pg.load(stated | {"time": {"start": "2027-01-04", "every": "1h", "steps": HEAD["time"]["steps"]}})
    frame = pg.render(stated).to_pandas()
    frame = frame[frame["x"].notna() & (frame["step"] > 0)]
    verdict = pg.validate(frame.drop(columns={"step": "time", "time": "step"}.get(steps, [])), stated)
    (row,) = [r for r in verdict.rows if r.what == "every path and step once"]
    assert "the first path 0, step 0: judged as missing values, which the spec states" in row.note
    assert verdict.agrees is (paths == 1)
    assert all("missing" in line or "gaps" in line for line in verdict.headline)


def test_gaps_at_the_start_as_long_as_stated_are_missing_and_longer_ones_a_window():
    stated = HEAD | {"paths": 1, "time": {"start": "2027-01-04", "every": "1h", "steps": 400}}
    stated = pg.load(stated | {"series": {"x": [{"missing": {"of": AR, "share": 0.2, "gap": 20}}]}})
    frame = pg.render(stated).to_pandas().dropna()
    late = frame[frame["step"] >= 60]  # 0.2 × 0.95⁵⁹ is 0.010
    assert pg.validate(late, stated).agrees
    with pytest.raises(TableError, match=r"got steps 3.. to 399; .* as rows with empty values where they are missing"):
        pg.validate(frame[frame["step"] >= 300], stated)  # 0.2 × 0.95²⁹⁹ is 4e-8


@pytest.mark.parametrize("paths", [1, 300])
def test_rows_without_steps_do_not_tell_which_are_missing(paths):
    stated = pg.load(spec().raw | {"paths": paths})
    frame = pg.render(stated).to_pandas().drop(columns="step")
    with pytest.raises(TableError, match="no column of steps or times that tells which; name the right one"):
        pg.validate(frame.dropna(subset="x"), stated)
    assert pg.validate(frame, stated).agrees is not False
    assert pg.validate(frame.groupby("path").head(HEAD["time"]["steps"] - 1), stated).agrees is not False


def test_rows_left_out_are_told_where_a_series_states_no_missing_values():
    both = HEAD | {"series": {"x": [{"missing": {"of": AR, "share": 0.05, "gap": 4}}], "y": AR}}
    frame = pg.render(pg.load(both)).to_pandas()
    notes = [r.note for r in pg.validate(frame.drop(index=[500]), pg.load(both)).rows if r.outcome == "departs"]
    assert any(note.startswith("1 row is missing") for note in notes)
