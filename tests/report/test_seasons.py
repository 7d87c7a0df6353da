"""The figures of a season: means and spreads of its phases, stated and seen, with what chance allows."""

import numpy as np
import pandas as pd
import pytest
from statsmodels.tsa.arima_process import ArmaProcess

import procgen as pg
from procgen.report.html import whole_page
from procgen.report.pictures.chart import Band, Dots, Line
from procgen.report.pictures.gallery import of_data, of_verdict
from procgen.report.pictures.seasons import MOST
from tests.report.pages import ensemble, self_contained

SEASON = {"seasonal": {"period": 6, "harmonics": [{"amplitude": 2, "peak": 1}]}}
AR = {"ar": {"phi": 0.7, "sd": 1}}


def charts(found, series=0):
    shown = of_data(found).sections[series].charts
    return [chart for chart in shown if "by phase" in chart.title]


def marks(chart):
    return {type(mark): mark for mark in chart.marks}


def test_means_and_spreads_are_those_of_pandas():
    """Seen means against a groupby of pandas; stated ones against the cosine and the trend that were written."""
    trend = {"trend": {"level": 10, "slope": 0.05}}
    found = ensemble({"x": {"unit": "kW", "of": [trend, SEASON, AR]}}, paths=80, steps=50)
    mean, spread = charts(found)
    assert mean.title == "Mean by phase of the season, kW"
    assert spread.title == "Standard deviation by phase of the season, kW"
    values, t = found["x"], np.arange(50)
    phase = np.tile(t % 6, 80)
    np.testing.assert_allclose(marks(mean)[Dots].y, pd.Series(values.ravel()).groupby(phase).mean(), rtol=1e-12)
    stated = 10 + 0.05 * t + 2 * np.cos(2 * np.pi * (t - 1) / 6)
    np.testing.assert_allclose(marks(mean)[Line].y, pd.Series(stated).groupby(t % 6).mean(), rtol=1e-12)
    by_step = pd.Series(values.var(axis=0, ddof=1)).groupby(t % 6).mean()
    np.testing.assert_allclose(marks(spread)[Dots].y, np.sqrt(by_step), rtol=1e-12)
    np.testing.assert_allclose(marks(spread)[Line].y, 1 / np.sqrt(1 - 0.49), rtol=1e-12)
    self_contained(whole_page(of_data(found)))


def test_of_a_few_paths_the_band_is_that_of_the_stated_autocovariances():
    """The variance of a mean of values six steps apart, summed pair by pair over autocovariances of statsmodels."""
    found = ensemble({"x": [SEASON, AR]}, paths=3, steps=50)
    (mean,) = charts(found)
    gamma = ArmaProcess([1, -0.7]).acovf(50)
    band = marks(mean)[Band]
    for phase in range(6):
        at = np.arange(phase, 50, 6)
        variance = gamma[np.abs(at[:, None] - at)].mean() / 3
        assert (band.high[phase] - band.low[phase]) / 2 == pytest.approx(1.959964 * np.sqrt(variance), rel=1e-6)
    assert "by the stated autocovariances" in mean.caption


def test_bands_hold_95_times_in_100():
    """1,200 phases of 100 ensembles: 0.945 of a Student-t with 59 degrees, and within 6 sd of that (1e-8)."""
    season = {"seasonal": {"period": 12, "harmonics": [{"amplitude": 2, "peak": 1}]}}
    inside = {"mean": [], "spread": []}
    for seed in range(100):
        found = ensemble({"x": [season, {"white_noise": {"sd": 1}}]}, paths=60, steps=48, seed=seed)
        for name, chart in zip(inside, charts(found), strict=True):
            drawn = marks(chart)
            inside[name] += list((drawn[Band].low <= drawn[Dots].y) & (drawn[Dots].y <= drawn[Band].high))
    room = 6 * np.sqrt(0.945 * 0.055 / 1200)
    assert np.mean(inside["mean"]) == pytest.approx(0.945, abs=room)
    assert np.mean(inside["spread"]) == pytest.approx(0.945, abs=room)


def test_a_season_a_step_late_is_seen():
    late = {"seasonal": {"period": 6, "harmonics": [{"amplitude": 2, "peak": 2}]}}
    found = ensemble({"x": [late, AR]}, paths=200)
    stated = pg.load({**found.spec.raw, "series": {"x": [SEASON, AR]}})
    (section,) = of_verdict(pg.validate(found.to_pandas(), stated)).sections
    (mean,) = [chart for chart in section.charts if chart.title.startswith("Mean by phase")]
    assert "0 of 6 points lie within" in mean.caption


def test_long_seasons_are_drawn_by_neighbours_and_gaps_are_left_out():
    long = {"seasonal": {"period": 100, "harmonics": [{"amplitude": 2, "peak": 1}]}}
    found = ensemble({"x": [long, AR]}, paths=60, steps=200)
    mean, _ = charts(found)
    assert len(mean.rows) == 34 <= MOST and mean.rows[-1][0] == "99"
    assert "3 neighbouring ones a point" in mean.caption
    gone = found.to_pandas()
    gone.loc[::7, "x"] = np.nan
    (section,) = of_verdict(pg.validate(gone, found.spec)).sections
    mean, _ = (chart for chart in section.charts if "by phase" in chart.title)
    step = gone["step"]
    of_steps = gone["x"] - 2 * np.cos(2 * np.pi * (step - 1) / 100)
    third = of_steps[step % 100 // 3 == 5].dropna()
    assert marks(mean)[Dots].y[5] - marks(mean)[Line].y[5] == pytest.approx(third.mean(), abs=0.02)


@pytest.mark.parametrize(
    "body",
    [[AR], [SEASON], [{"seasonal": {"period": 40, "harmonics": [{"amplitude": 2, "peak": 1}]}}, AR]],
    ids=["no season", "nothing left to chance", "one round"],
)
def test_there_is_none_where_there_is_nothing_to_show(body):
    assert charts(ensemble({"x": body}, paths=30)) == []


def test_a_phase_without_any_value_leaves_a_gap():
    found = ensemble({"x": [SEASON, AR]}, paths=60)
    gone = found.to_pandas()
    gone.loc[gone["step"] % 6 == 2, "x"] = np.nan
    (section,) = of_verdict(pg.validate(gone, found.spec)).sections
    for chart in section.charts:
        if "by phase" in chart.title:
            assert np.isnan(marks(chart)[Dots].y).tolist() == [False, False, True, False, False, False]
            assert " of 5 points lie within" in chart.caption


def test_a_season_of_the_spread_alone_has_its_figures():
    """White noise times a profile: the spread of each phase is that of the profile."""
    profile = [0.5, 1.0, 2.0]
    season = {"seasonal": {"period": 3, "profile": profile, "centre": "none"}}
    body = [{"product": [season, {"white_noise": {"sd": 1}}]}]
    _, spread = charts(ensemble({"x": body}, paths=60))
    np.testing.assert_allclose(marks(spread)[Line].y, profile, rtol=1e-12)
