"""The theory of whole specs: what the terms write on the axis, what is printed, and why a number is missing."""

from __future__ import annotations

import json

import numpy as np
import pytest

from procgen.chance.laws import LAWS
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from procgen.theory import theory

SPEC = """
procgen: 1
seed: 5
paths: 10
time: {steps: 500}
shared:
  weather: [{ar: {phi: 0.9, total_sd: 2}}]
series:
  load:
    - trend: {level: 10, slope: 0.5}
    - use: weather
      times: 3
    - white_noise: {sd: 1}
  price: [{exp: [{random_walk: {sd: 0.1, start: 1.0}}]}]
  shaken: [{garch: {sd: 1, alpha: 0.1, beta: 0.8}}]
  wind:
    - use: weather
    - arma: {phi: 0.5, theta: 0.2, sd: 1, law: {student_t: {df: 6}}}
  storm: [{use: shaken.garch.variance}]
  wild: [{exp: [{white_noise: {sd: 1, law: {student_t: {df: 6}}}}]}]
correlation:
  - {between: [load.white_noise, wind.arma], value: 0.5}
  - {between: [price.random_walk, load.white_noise], value: -0.2}
  - {between: [shaken.garch, price.random_walk], value: 0.1}
"""


@pytest.fixture(scope="module")
def whole():
    return theory(read_text(SPEC, catalogue(), LAWS))


def test_moments_of_every_series(whole):
    t = np.array([0, 1, 100])
    np.testing.assert_allclose(whole["load"].mean(t), 10 + 0.5 * t)
    np.testing.assert_allclose(whole["load"].covariance(t, t + 2), 36 * 0.81 * np.ones(3), rtol=1e-12)
    np.testing.assert_allclose(whole["load"].variance(t), 37.0, rtol=1e-12)
    np.testing.assert_allclose(whole["price"].mean(t), np.exp(1 + 0.005 * t), rtol=1e-12)
    np.testing.assert_allclose(whole["storm"].mean(t), 1.0, rtol=1e-12)


def test_shared_bodies_and_correlated_shocks_across_series(whole):
    """Cov(load(t), wind(s)): 3 g(t - s) of the weather, and the filter's weight times the correlation of the values."""
    cross = whole.cross("load", "wind")
    pair = next(c for c in whole.correlated if {c.leader, c.follower} == {"load.white_noise", "wind.arma"})
    weather = 3 * 4 * 0.9 ** np.array([0, 1, 2])
    np.testing.assert_allclose(cross.covariance([5, 5, 5], [5, 6, 7]), weather + pair.values * np.array([1, 0.7, 0.35]))
    np.testing.assert_allclose(cross.covariance([6, 7], [5, 5]), weather[1:], rtol=1e-12)
    assert np.all(np.abs(cross.correlation(5, 5)) < 1)


def test_who_leads_and_the_correlation_of_values(whole):
    """The first name leads; normal with t(6): 0.5 E z q(z), below 0.5; a garch gives a reason instead."""
    by_pair = {(c.leader, c.follower): c for c in whole.correlated}
    one = by_pair["load.white_noise", "wind.arma"]
    assert one.normals == 0.5 and 0.47 < one.values < 0.5 and one.tolerance < 1e-8
    garch = next(c for c in whole.correlated if "shaken.garch" in (c.leader, c.follower))
    assert garch.values is None and "conditionally heteroskedastic" in garch.reason


def test_printed_form(whole):
    """The shape of `theory --json`, plain numbers throughout, null with a reason where unknown."""
    printed = json.loads(json.dumps(whole.as_dict([0, 1, 10], 4), allow_nan=False))
    load = printed["series"]["load"]
    assert load["stationarity"]["verdict"] == "mean not constant"
    assert load["steps"] == [0, 1, 10] and load["mean"] == [10.0, 10.5, 15.0]
    assert load["autocovariance"]["from_step"] == 0 and load["autocovariance"]["lags"] == [0, 1, 2, 3, 4]
    assert load["autocovariance"]["values"][1] == pytest.approx(32.4)
    assert load["autocorrelation"][0] == 1.0 and load["excess_kurtosis"] == 0.0 and "unknown" not in load
    wild = printed["series"]["wild"]
    assert wild["mean"] is None and "wild.white_noise" in wild["unknown"]["mean"]
    pairs = {tuple(entry["series"]): entry for entry in printed["cross"]}
    assert ("load", "wind") in pairs and ("load", "storm") not in pairs
    assert pairs["price", "shaken"]["covariance"] is None and pairs["price", "shaken"]["reason"]
    assert {entry["leader"] for entry in printed["correlation"]} == {"load.white_noise", "price.random_walk"}


def test_autocovariance_of_a_growing_series_starts_where_asked(whole):
    printed = whole["price"].as_dict([3, 9], [0, 2])
    assert printed["autocovariance"]["from_step"] == 3
    assert printed["autocovariance"]["values"][1] == pytest.approx(float(whole["price"].covariance(5, 3)))


def test_an_unknown_answer_is_none_with_its_reason_and_forgotten_when_known(whole):
    wild = whole["wild"]
    assert wild.variance([1, 2]) is None and wild.reason("variance")
    assert wild.reason("covariance") is None
    price = whole["price"]
    assert price.variance(10**9) is None and "too large" in price.reason("variance")
    assert price.variance(10) is not None and price.reason("variance") is None
    assert price.autocorrelation(1, 0) is None and "variance is 0" in price.reason("autocorrelation")


def test_wrong_steps_and_names_are_refused(whole):
    with pytest.raises(ValueError, match="expected whole steps from 0 on, got \\[-1\\]"):
        whole["load"].mean(-1)
    with pytest.raises(ValueError, match="expected whole steps"):
        whole["load"].variance([0.5])
    with pytest.raises(KeyError, match="expected one of the series load, price"):
        whole["lode"]


def test_laws_at_a_step(whole):
    assert whole["load"].marginal(4).std() == pytest.approx(np.sqrt(37))
    assert whole["price"].marginal(9).median() == pytest.approx(np.e)
    assert whole["price"].marginal(0) is None and "known, not random" in whole["price"].reason("marginal")
    assert whole["wind"].marginal(3) is None and "wind.arma" in whole["wind"].reason("marginal")
    assert whole["wind"].highest_moment == 6.0 and whole["load"].highest_moment == np.inf
    assert whole["wild"].highest_moment == 0.0


def test_system_gives_the_same_covariances(whole):
    """s(t) = A s(t-1) + B e(t), y = C s: propagated here step by step."""
    system = whole["load"].system()
    p, seen = system.initial, []
    for _ in range(4):
        seen.append(float(system.observation[0] @ p @ system.observation[0]))
        p = system.transition @ p @ system.transition.T + system.loading @ system.noise @ system.loading.T
    np.testing.assert_allclose(seen, whole["load"].variance(np.arange(4)), rtol=1e-12)
    assert set(system.sources) == {"weather.ar", "load.white_noise"}
    assert whole["price"].system() is None and "not linear" in whole["price"].reason("system")


def test_a_law_scaled_and_turned_round():
    """loc + scale z for one uncorrelated shock that is not normal, also with a negative factor."""
    text = "procgen: 1\nseed: 1\npaths: 1\ntime: {steps: 10}\nseries:\n  x:\n    - constant: 5\n"
    text += "    - white_noise: {sd: 2, law: laplace}\n      times: -1\n"
    law = theory(read_text(text, catalogue(), LAWS))["x"].marginal(3)
    assert law.mean() == pytest.approx(5.0) and law.std() == pytest.approx(2.0)
    assert law.cdf(5.0 + np.sqrt(2) * np.log(2.0)) == pytest.approx(0.75)
    assert law.ppf(0.25) == pytest.approx(5.0 - np.sqrt(2) * np.log(2.0))
    assert law.sf(5.0) == pytest.approx(0.5) and law.pdf(5.0) == pytest.approx(1 / (2 * np.sqrt(2)))


def test_the_past_of_correlated_terms_is_drawn_as_theory_says():
    """A lagged walk reads shocks before step 0, and they are correlated with the past of an autoregression.

    30,000 paths with a fixed seed; 100 products with |z| above 6.5 at 8e-11 each: 1e-8 in all.
    """
    from procgen.terms.graph import build
    from procgen.terms.run import Run

    text = "procgen: 1\nseed: 11\npaths: 1\ntime: {steps: 5}\nseries:\n"
    text += "  a: [{arma: {phi: [0.5, 0.2], theta: 0.4, sd: 1}}]\n"
    text += "  v: [{lag: {of: [{random_walk: {sd: 0.5, start: 2}, as: walk}], by: 3}}]\n"
    text += "  b: [{lag: {of: [{use: a}], by: 3}}]\n"
    text += "correlation: [{between: [a.arma, v.walk], value: -0.3}]\n"
    spec = read_text(text, catalogue(), LAWS)
    graph = build(spec)
    whole, t, paths = theory(spec, graph), np.arange(5), 30_000
    values = {name: x - x.mean(axis=1, keepdims=True) for name, x in Run(graph, 0, paths).tile(5).items()}
    for one, other in (("a", "v"), ("b", "v"), ("a", "b"), ("v", "v")):
        x, y = values[one], values[other]
        estimate = x @ y.T / paths
        error = np.sqrt(np.maximum((x * x) @ (y * y).T / paths - estimate**2, 0.0) / paths)
        exact = whole.cross(one, other).covariance(t[:, None], t[None, :])
        assert np.all(np.abs(estimate - exact) <= 6.5 * error + 1e-12)
