"""Jumps and prices: values from the same normals, laws by SciPy, by characteristic functions, and by conditioning."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate, stats

from procgen.chance.jumps import Jumps
from procgen.spec.model import SpecError
from procgen.terms.recover import forecast
from procgen.terms.run import Run
from procgen.theory import theory

from .helpers import draw, graph_of
from .test_exact_covariance import compare

STEPS, PATHS = 60, 12


def shocks(graph, name, role, steps=STEPS):
    (source,) = [s for s in graph.sources if (s.name, s.stream.role) == (name, role)]
    return source.law.shocks(source.stream.uniforms(0, PATHS, 0, steps))


def known(body, steps=STEPS):
    graph = graph_of(f"  x: {{{body}}}", steps=steps)
    return theory(graph.spec, graph)["x"]


# geometric Brownian motion


def test_a_price_is_its_closed_form():
    """Black & Scholes (1973): x0 exp((μ − σ²/2) t + σ W); a year has 365.2425 days of 24 hours here."""
    graph = graph_of(
        "  x: {geometric_brownian_motion: {drift: {value: 0.08, per: year}, sd: {value: 0.2, per: year}, start: 100}}",
        steps=STEPS,
    )
    x, z = draw(graph, 0, PATHS, [STEPS])["x"], shocks(graph, "x.geometric_brownian_motion", "innovation")
    year, t = 1 / (365.2425 * 24), np.arange(STEPS)[:, None]
    z[0] = 0.0
    path = (0.08 - 0.02) * year * t + 0.2 * np.sqrt(year) * np.cumsum(z, axis=0)
    np.testing.assert_allclose(x, 100 * np.exp(path), rtol=1e-12)


def test_theory_of_a_price_is_lognormal():
    x = known("geometric_brownian_motion: {drift: 0.01, sd: 0.1, start: 100}")
    law = stats.lognorm(0.1 * np.sqrt(40), scale=100 * np.exp(0.4 - 0.2))
    np.testing.assert_allclose(x.mean([40]), law.mean(), rtol=1e-12)
    np.testing.assert_allclose(x.variance([40]), law.var(), rtol=1e-10)
    np.testing.assert_allclose(x.marginal(40).ppf([0.01, 0.5, 0.99]), law.ppf([0.01, 0.5, 0.99]), rtol=1e-12)
    np.testing.assert_allclose(x.covariance([40], [25]), 1e4 * np.exp(0.65) * np.expm1(0.01 * 25), rtol=1e-12)
    np.testing.assert_allclose(x.excess_kurtosis_at(40), float(law.stats("k")), rtol=1e-9)


def test_correlated_prices_have_the_covariance_of_correlated_walks():
    graph = graph_of(
        "  x: {geometric_brownian_motion: {sd: 0.1, start: 10}}\n  y: {geometric_brownian_motion: {sd: 0.2, start: 5}}",
        rest="correlation: [{between: [x.geometric_brownian_motion, y.geometric_brownian_motion], value: 0.4}]",
    )
    pair = theory(graph.spec, graph).cross("x", "y")
    t, s = np.array([30, 30]), np.array([30, 12])
    np.testing.assert_allclose(pair.covariance(t, s), 50 * np.expm1(0.4 * 0.02 * np.minimum(t, s)), rtol=1e-10)


def test_forecast_of_a_price_is_lognormal():
    graph = graph_of("  x: {geometric_brownian_motion: {drift: 0.01, sd: 0.1, start: 100}}", steps=STEPS)
    run = Run(graph, 0, 4)
    now, answer = run.tile(20)["x"][-1], forecast(run, "x", 3)
    for h in (1, 2, 3):
        law = stats.lognorm(0.1 * np.sqrt(h), scale=np.exp((0.01 - 0.005) * h))
        np.testing.assert_allclose(answer.mean[h - 1], now * law.mean(), rtol=1e-12)
        np.testing.assert_allclose(answer.variance[h - 1], now**2 * law.var(), rtol=1e-9)


# jumps


def by_inversion(characteristic, x):
    """P(X <= x) of a law without atoms, from its characteristic function (Gil-Pelaez 1951)."""
    part = integrate.quad(lambda u: (np.exp(-1j * u * x) * characteristic(u)).imag / u, 1e-12, 60, limit=2000)[0]
    return 0.5 - part / np.pi


def test_the_law_of_a_jump_diffusion_is_that_of_its_characteristic_function():
    """exp(iuγ − u²σ²/2 + λ (exp(ium − u²δ²/2) − 1)), Merton (1976)."""
    law = Jumps(0.7, -0.6, 0.5, shift=0.2, spread=0.4).distribution()

    def characteristic(u):
        return np.exp(1j * u * 0.2 - u * u * 0.08 + 0.7 * (np.exp(-0.6j * u - u * u * 0.125) - 1))

    for x in (-2.5, -0.7, 0.1, 0.9):
        assert law.cdf(x) == pytest.approx(by_inversion(characteristic, x), abs=1e-9)
        assert law.ppf(law.cdf(x)) == pytest.approx(x, abs=1e-9) and law.sf(x) == pytest.approx(1 - law.cdf(x))
    assert law.mean() == pytest.approx(0.2 - 0.42) and law.var() == pytest.approx(0.16 + 0.7 * (0.36 + 0.25))


def test_no_jump_has_a_chance_of_its_own():
    law = Jumps(0.7, -0.6, 0.5).distribution()
    assert law.lump == pytest.approx(np.exp(-0.7))
    x = np.array([-1.0, -1e-9, 0.0, 0.4])
    below = [stats.poisson(0.7).pmf(n) * stats.norm(-0.6 * n, 0.5 * np.sqrt(n)).cdf(x) for n in range(1, 30)]
    np.testing.assert_allclose(law.cdf(x), sum(below) + np.exp(-0.7) * (x >= 0), atol=1e-12)
    np.testing.assert_allclose(law.cdf(x) + law.sf(x), 1.0, atol=1e-12)


def test_merton_is_a_mixture_of_lognormal_laws():
    """Merton (1976), eq. 16: given n jumps in t steps the price is lognormal; summed over n by SciPy."""
    drift, sd, rate, m, d, t = 0.01, 0.1, 0.2, -0.1, 0.15, 30
    x = known(f"merton: {{drift: {drift}, sd: {sd}, rate: {rate}, jump_mean: {m}, jump_sd: {d}, start: 100}}")
    each = np.exp(m + d * d / 2) - 1
    n = np.arange(80)
    weight = stats.poisson(rate * t).pmf(n)
    spread = np.sqrt(sd * sd * t + n * d * d)
    given = stats.lognorm(spread, scale=100 * np.exp((drift - sd * sd / 2 - rate * each) * t + n * m))
    mean, second = weight @ given.mean(), weight @ (given.var() + given.mean() ** 2)
    np.testing.assert_allclose(x.mean([t]), mean, rtol=1e-11)
    np.testing.assert_allclose(mean, 100 * np.exp(drift * t), rtol=1e-11)
    np.testing.assert_allclose(x.variance([t]), second - mean**2, rtol=1e-9)
    law = x.marginal(t)
    for price in (40.0, 100.0, 250.0):
        np.testing.assert_allclose(law.cdf(price), weight @ given.cdf(price), rtol=1e-9)
    np.testing.assert_allclose([law.mean(), law.var()], [mean, second - mean**2], rtol=1e-9)
    # Given the price at s, that at t grows by exp(μ (t − s)) on average.
    early = x.variance([12])[0]
    grown = np.exp(drift * (t - 12))
    np.testing.assert_allclose(x.covariance([t], [12]), grown * early, rtol=1e-11)


def test_forecast_of_merton_is_a_mixture_on_what_it_is_now():
    graph = graph_of("  x: {merton: {drift: 0.01, sd: 0.1, rate: 0.3, jump_mean: -0.1, jump_sd: 0.2, start: 50}}")
    run = Run(graph, 0, 5)
    now, answer = run.tile(20)["x"][-1], forecast(run, "x", 2)
    n = np.arange(60)
    for h in (1, 2):
        drift = (0.01 - 0.005 - 0.3 * (np.exp(-0.1 + 0.02) - 1)) * h
        weight = stats.poisson(0.3 * h).pmf(n)
        given = stats.lognorm(np.sqrt(0.01 * h + 0.04 * n), scale=np.exp(drift - 0.1 * n))
        mean = weight @ given.mean()
        np.testing.assert_allclose(answer.mean[h - 1], now * mean, rtol=1e-11)
        variance = weight @ (given.var() + given.mean() ** 2) - mean**2
        np.testing.assert_allclose(answer.variance[h - 1], now**2 * variance, rtol=1e-9)


def test_merton_values_are_their_parts():
    graph = graph_of(
        "  x: {merton: {drift: 0.01, sd: 0.1, rate: 0.3, jump_mean: -0.1, jump_sd: 0.2, start: 50}}\n"
        "  n: {use: x.merton.jumps}",
        steps=STEPS,
    )
    x = draw(graph, 0, PATHS, [STEPS])
    z, size = (shocks(graph, "x.merton", role) for role in ("innovation", "size"))
    u = shocks(graph, "x.merton", "count") / np.sqrt(12) + 0.5
    n = stats.poisson.ppf(u, 0.3)
    n[0] = 0
    assert np.array_equal(x["n"], n)
    drift = 0.01 - 0.005 - 0.3 * (np.exp(-0.1 + 0.02) - 1)
    change = drift + 0.1 * z - 0.1 * n + np.sqrt(n) * 0.2 * size
    change[0] = 0
    np.testing.assert_allclose(x["x"], 50 * np.exp(np.cumsum(change, axis=0)), rtol=1e-11)


@pytest.mark.parametrize("law", ["normal", "{gamma: {shape: 1}}", "{student_t: {df: 9}}"])
def test_moments_of_summed_jumps_are_those_of_their_cumulants(law):
    """Cumulants λ E J^k (Feller 1971, VI.4), with E J^k by quadrature over SciPy's densities."""
    rate, m, d = 0.4, 1.0, 2.0
    x = known(f"compound_poisson: {{rate: {rate}, mean: {m}, sd: {d}, law: {law}}}")
    density = {
        "normal": stats.norm(m, d),
        "{gamma: {shape: 1}}": stats.expon(m - d, d),
        "{student_t: {df: 9}}": stats.t(9, m, d * np.sqrt(7 / 9)),
    }[law]
    one, two, four = (density.expect(lambda j, k=k: j**k) for k in (1, 2, 4))
    np.testing.assert_allclose(x.mean([3]), rate * one, rtol=1e-7)
    np.testing.assert_allclose(x.variance([3]), rate * two, rtol=1e-7)
    np.testing.assert_allclose(x.excess_kurtosis, four / (rate * two**2), rtol=1e-6)
    np.testing.assert_allclose(x.autocovariance_of_squares(np.array([0, 1]))[1], 0.0)
    assert x.stationarity.verdict == "strictly stationary"


def test_jumps_that_do_not_exist_have_no_kurtosis():
    x = known("compound_poisson: {rate: 0.4, sd: 2, law: {student_t: {df: 4}}}")
    assert x.excess_kurtosis is None and x.variance([1]) is not None and x.highest_moment == 4


def test_jumps_are_added_one_by_one():
    graph = graph_of("  x: {compound_poisson: {rate: 0.8, mean: 3, sd: 2, law: {gamma: {shape: 2}}}}", steps=STEPS)
    x = draw(graph, 0, PATHS, [STEPS])["x"]
    n = stats.poisson.ppf(shocks(graph, "x.compound_poisson", "count") / np.sqrt(12) + 0.5, 0.8)
    exact = sum(
        np.where(n >= k, 3 + 2 * shocks(graph, "x.compound_poisson", f"size {k}"), 0.0)
        for k in range(1, int(n.max()) + 1)
    )
    np.testing.assert_allclose(x, exact, rtol=1e-12)


# bridges


def test_a_bridge_is_a_walk_given_its_end(monkeypatch):
    """Covariance as drawn (impulses through the value code) = theory = a walk's, conditioned on step 15."""
    graph = graph_of("  x: {bridge: {start: 10, end: 13, until: 15, sd: 2}}", steps=24)
    compare(graph, monkeypatch)
    x = theory(graph.spec, graph)["x"]
    t = np.arange(16)
    walk = 4.0 * np.minimum(t[:, None], t[None, :])
    given = walk - np.outer(walk[:, 15], walk[15]) / walk[15, 15]
    np.testing.assert_allclose(x.covariance(t[:, None], t[None, :]), given, atol=1e-12)
    np.testing.assert_allclose(x.mean(t), 10 + walk[:, 15] / walk[15, 15] * 3, rtol=1e-13)
    assert x.gaussian and x.stationarity.verdict == "variance not constant"


def test_a_bridge_arrives_whatever_the_steps_are():
    text = "  x: {bridge: {start: 10, end: 13, until: 2027-01-05T06:00, sd: 2}}"
    long = draw(graph_of(text, steps=60), 0, PATHS, [60])["x"]
    assert np.all(long[0] == 10) and np.all(long[30:] == 13) and long[29].std() > 0.5
    assert np.array_equal(draw(graph_of(text, steps=20), 0, PATHS, [20])["x"], long[:20])


def test_forecast_of_a_bridge_is_a_shorter_bridge():
    graph = graph_of("  x: {bridge: {start: 10, end: 13, until: 30, sd: 2}}", steps=STEPS)
    run = Run(graph, 0, 5)
    now, answer = run.tile(11)["x"][-1], forecast(run, "x", 25)
    left = np.clip(np.arange(1, 26), 0, 20)[:, None]
    np.testing.assert_allclose(answer.mean, now + (13 - now) * left / 20, rtol=1e-12)
    np.testing.assert_allclose(answer.variance[:, :1], 4.0 * left * (20 - left) / 20, rtol=1e-12)


FAULTS = {
    "lag: {of: [{merton: {sd: 0.1, rate: 1, jump_sd: 0.1}}], by: 2}": "its jumps begin after step 0; lag less",
    "lag: {of: [{bridge: {until: 9, sd: 1}}], by: 2}": "a bridge begins at step 0; lag less",
    "bridge: {until: 0, sd: 1}": "expected a step after step 0, got 0; give a later one",
    "compound_poisson: {rate: 5, sd: 1, law: laplace}": "expected a rate of at most 2 a step for jumps that are "
    "not normal",
}


@pytest.mark.parametrize("text", FAULTS)
def test_faults_say_how_to_mend_them(text):
    with pytest.raises(SpecError) as error:
        graph_of(f"  x: {{{text}}}")
    assert FAULTS[text] in str(error.value)
