"""A pull in continuous time on steps of unequal length: business days, months, days when clocks change."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from scipy.stats import norm

import procgen as pg
from procgen.chance.kernel import available, compiling
from procgen.chance.laws import LAWS
from procgen.spec.model import SpecError
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from procgen.terms.by_path import run
from procgen.terms.graph import build
from procgen.terms.recover import recovery
from procgen.theory import theory

from .helpers import draw
from .test_exact_covariance import STEPS, compare

OU = "ornstein_uhlenbeck: {rate: {value: 40, per: year}, mean: 3, sd: {value: 2, per: year}, clock: time"
GRIDS = {
    "business days": "start: 2027-01-04, every: 1 business day, holidays: [2027-01-06, 2027-01-18]",
    "months": "start: 2027-01-31T06:00, every: 1 month, stamp: end",
    "clocks change": "start: 2027-03-26, every: 1d, zone: Europe/Madrid",
}


def graph_of(series, grid=GRIDS["business days"], steps=STEPS, rest=""):
    text = f"procgen: 1\nseed: 11\npaths: 64\ntime: {{{grid}, steps: {steps}}}\n{rest}\nseries:\n{series}\n"
    return build(read_text(text, catalogue(), LAWS))


@pytest.mark.parametrize("name", GRIDS)
def test_the_same_process_seen_by_the_hour(name):
    """The covariance between stamps is that of the same process on steps of an hour, which are of one length.

    Its conditional mean and variance over any time are in Gillespie (1996), Phys. Rev. E 54, 2084 (from memory).
    """
    graph = graph_of(f"  x: {{{OU}}}}}", GRIDS[name], steps=12)
    x = theory(graph.spec, graph)["x"]
    hours = (graph.spec.time.stamps(0, 12) - graph.spec.time.stamps(0, 1)) // 3_600_000_000
    hourly = graph_of(f"  x: {{{OU}}}}}", "start: 2027-01-04, every: 1h", steps=int(hours[-1]) + 1)
    y = theory(hourly.spec, hourly)["x"]
    t, s = (a.ravel() for a in np.meshgrid(np.arange(12), np.arange(12)))
    np.testing.assert_allclose(x.covariance(t, s), y.covariance(hours[t], hours[s]), rtol=1e-9, atol=1e-15)
    assert x.stationarity.verdict == "autocovariance not constant" and y.stationarity.stationary
    assert len(set(np.diff(hours))) > 1


@mpmath.workdps(30)
def test_decay_over_a_weekend_in_digits():
    """exp(−κ·3/365.2425) from Friday to Monday, and the variance σ²/(2κ)(1 − φ²), in 30 digits."""
    graph = graph_of(f"  x: {{{OU}, before: {{x: 5}}}}}}")
    phi, ratio = graph.series["x"].term.core._paces(np.array([5]))  # step 5 is 12 January, after 8, 7 and 5 January
    stamps = graph.spec.time.stamps(4, 2)
    days = mpmath.mpf(int(stamps[1] - stamps[0])) / 86_400_000_000
    exact = mpmath.exp(-mpmath.mpf(40) * days / mpmath.mpf("365.2425"))
    assert float(phi[0, 0]) == pytest.approx(float(exact), rel=1e-14)
    variance = mpmath.mpf(4) / 80 * (1 - exact**2)
    assert (graph.series["x"].term.shock_sd() * float(ratio[0, 0])) ** 2 == pytest.approx(float(variance), rel=1e-13)


SERIES = {
    "alone": f"  x: {{{OU}}}}}",
    "lagged": f"  x: {{lag: {{of: [{{{OU}}}}}], by: 3}}}}",
    "from a past": f"  x: {{{OU}, before: {{x: 5}}}}}}",
    "differenced": f"  x: {{difference: [{{{OU}}}}}]}}",
    "a sum": f"  x: [{{{OU}}}}}, {{ar: {{phi: 0.6, sd: 1}}}}]\n  y: {{use: x}}",
}


@pytest.mark.parametrize("name", SERIES)
@pytest.mark.parametrize("grid", GRIDS)
def test_covariance_of_what_is_drawn(name, grid, monkeypatch):
    compare(graph_of(SERIES[name], GRIDS[grid]), monkeypatch)


OTHERS = (f"{{{OU.replace('40', '90')}}}, as: e}}", "{ar: {phi: 0.5, sd: 2}, as: e}", "{white_noise: {sd: 2}, as: e}")


@pytest.mark.parametrize("other", OTHERS)
def test_correlated_shocks_start_jointly(other, monkeypatch):
    rest = "correlation:\n  - {between: [x.ornstein_uhlenbeck, y.e], value: -0.6}"
    compare(graph_of(f"  x: {{{OU}}}}}\n  y: {other}", rest=rest), monkeypatch)


@pytest.mark.parametrize("compiled", [False, True] if available() else [False])
def test_tiles_and_prefixes(compiled):
    whole = draw(graph_of(SERIES["lagged"], steps=60), 0, 64, [60])["x"]
    with compiling(compiled):
        cut = draw(graph_of(SERIES["lagged"], steps=90), 16, 16, [1, 1, 7, 20, 31])["x"]
    assert (cut == whole[:, 16:32]).all()


def test_shocks_come_back():
    graph = graph_of(SERIES["alone"], steps=60)
    x, way = draw(graph, 0, 32, [60])["x"], recovery(graph, "x", 32)
    found = np.concatenate([way.tile(part) for part in np.split(x, [1, 9])])
    z = graph.sources[0].stream.uniforms(0, 32, 0, 60)
    assert np.isnan(found[0]).all()
    np.testing.assert_allclose(norm.cdf(found[1:]), z[1:], atol=1e-9)


def test_rates_drawn_by_path_run_side_by_side():
    drawn = OU.replace("{value: 40, per: year}", "{draw: {uniform: [0.1, 0.9]}, over: path}")
    graph = graph_of(f"  x: {{{drawn}}}}}", steps=40)
    whole = run(graph, 0, 8).tile(40)["x"]
    some = run(graph, 3, 2)
    assert (np.concatenate([some.tile(11)["x"], some.tile(29)["x"]]) == whole[:, 3:5]).all()


def test_steps_of_one_length_are_read_as_steps():
    plain = draw(graph_of(SERIES["alone"].replace(", clock: time", ""), "start: 2027-01-04, every: 15min"), 0, 4, [9])
    timed = draw(graph_of(SERIES["alone"], "start: 2027-01-04, every: 15min"), 0, 4, [9])
    assert (plain["x"] == timed["x"]).all()


@pytest.mark.parametrize(
    ("series", "grid", "sentence"),
    [
        (SERIES["alone"].replace(": time", ": time, law: laplace"), None, "expected normal shocks beside clock: time"),
        (SERIES["alone"], "every: 1 month", "the time between steps needs time: {start: …, every: …}"),
        (SERIES["alone"].replace("clock: time", "clock: tiem"), None, "did you mean time?"),
    ],
)
def test_what_cannot_be_is_refused_with_the_mend(series, grid, sentence):
    with pytest.raises(SpecError) as caught:
        graph_of(series, grid or GRIDS["months"])
    assert sentence in str(caught.value)


def test_steps_that_count_alike_are_found_where_time_was_stated():
    """A saboteur: drawn as if no weekend were longer than a night."""
    series = f"  x: {{{OU}}}}}"
    text = f"procgen: 1\nseed: 5\npaths: 400\ntime: {{{GRIDS['business days']}, steps: 60}}\nseries:\n{series}\n"
    right, wrong = (read_text(each, catalogue(), LAWS) for each in (text, text.replace(", clock: time", "")))
    verdict = pg.validate(pg.render(wrong), spec=right)
    assert verdict.agrees is False and verdict.headline[0].startswith("x: ")
    assert pg.validate(pg.render(right)).agrees
