"""Moments over drawn parameters against integrals by mpmath and SciPy, textbook formulas, and brute force.

Random effects: the intraclass correlation sd_b²/(sd_b² + sd_w²) (Searle, Casella & McCulloch 1992, Variance
Components, sec. 3.1). Autoregressions with a random coefficient drawn once a path: moments of the coefficient's law.
"""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from scipy import integrate, stats

from procgen.chance.laws import LAWS
from procgen.spec.draws import BetaDraw, ChoiceDraw, LognormalDraw, NormalDraw, UniformDraw
from procgen.spec.reader import read_raw
from procgen.terms import catalogue
from procgen.theory import theory
from procgen.theory.mixedseries import MixedSeries
from procgen.theory.quadrature import rule
from procgen.theory.series import SeriesTheory

STEPS = np.arange(6)


def path(law):
    return {"draw": law, "over": "path"}


def theory_of(series, **more):
    raw = {"seed": 5, "paths": 100, "time": {"steps": 200}, "series": series, **more}
    return theory(read_raw(raw, catalogue(), LAWS))


def average(f, low, high):
    """The mean of f over a uniform law, in 30 digits by mpmath."""
    with mpmath.workdps(30):
        return float(mpmath.quad(f, [low, high]) / (mpmath.mpf(high) - mpmath.mpf(low)))


def test_autoregression_with_a_uniform_coefficient():
    x = theory_of({"x": [{"ar": {"phi": path({"uniform": [0.3, 0.9]}), "sd": 2}}]})["x"]
    gamma = [average(lambda p, k=k: 4 * p**k / (1 - p * p), 0.3, 0.9) for k in range(40)]
    assert np.allclose(x.autocovariance(np.arange(40)), gamma, rtol=1e-9)
    assert np.allclose(x.autocorrelation(np.arange(40)), np.array(gamma) / gamma[0], rtol=1e-9)
    assert np.allclose(x.mean(STEPS), 0.0)
    fourth = average(lambda p: 3 * (4 / (1 - p * p)) ** 2, 0.3, 0.9)
    assert x.excess_kurtosis == pytest.approx(fourth / gamma[0] ** 2 - 3, rel=1e-8)
    squares = [
        average(lambda p, k=k: 16 * (1 + 2 * p ** (2 * k)) / (1 - p * p) ** 2, 0.3, 0.9) - gamma[0] ** 2
        for k in (0, 1, 7)
    ]
    assert np.allclose(x.autocovariance_of_squares(np.array([0, 1, 7])), squares, rtol=1e-8)
    below = integrate.quad(lambda p: stats.norm(0, 2 / np.sqrt(1 - p * p)).cdf(1.5) / 0.6, 0.3, 0.9, epsabs=1e-13)[0]
    assert float(x.marginal(3).cdf(1.5)) == pytest.approx(below, abs=1e-10)


def test_near_the_unit_root_the_average_still_settles():
    x = theory_of({"x": [{"ar": {"phi": path({"uniform": [0.0, 0.99]}), "sd": 1}}]})["x"]
    assert x.variance(STEPS)[0] == pytest.approx(average(lambda p: 1 / (1 - p * p), 0.0, 0.99), rel=1e-9)


def test_an_infinite_average_is_not_given_a_number():
    x = theory_of({"x": [{"ar": {"phi": path({"beta": {"alpha": 1, "beta": 1}}), "sd": 1}}]})["x"]
    assert x.variance(STEPS) is None
    assert x.reason("variance") == "the average over x.ar.phi does not settle with 128 nodes: it may be infinite"


def test_a_lognormal_volatility_has_prices_without_a_variance():
    """Var x(t) is E exp(σ² t) − 1; a lognormal has no exponential moments (Johnson, Kotz & Balakrishnan 1994)."""
    sd = path({"lognormal": {"median": 0.2, "sigma": 0.5}})
    x = theory_of({"x": [{"geometric_brownian_motion": {"sd": sd}}]})["x"]
    assert x.mean(np.array([0, 1, 50])) == pytest.approx(np.ones(3))
    assert x.variance(np.array([0])) == pytest.approx(0.0, abs=1e-12)
    assert x.variance(np.array([0, 1])) is None
    assert x.reason("variance").startswith("infinite: given x.geometric_brownian_motion.sd")
    held = path({"lognormal": {"median": 0.2, "sigma": 0.5, "within": [0.05, 1.0]}})
    bounded = theory_of({"x": [{"geometric_brownian_motion": {"sd": held}}]})["x"]
    low, high = (np.log(end / 0.2) / 0.5 for end in (0.05, 1.0))
    grown, _ = integrate.quad(lambda z: np.expm1(0.04 * np.exp(z)) * stats.norm.pdf(z), low, high)
    assert bounded.variance(np.array([1])) == pytest.approx(
        grown / (stats.norm.cdf(high) - stats.norm.cdf(low)), rel=1e-9
    )


def test_random_effects():
    """Var = sd_b² + sd_w², and any two steps share sd_b²: the intraclass correlation of the textbook."""
    between, within = 2.0, 1.5
    level = path({"normal": {"mean": 7, "sd": between}})
    x = theory_of({"x": [{"constant": level}, {"white_noise": {"sd": within}}]})["x"]
    assert np.allclose(x.mean(STEPS), 7.0, rtol=1e-12)
    assert np.allclose(x.variance(STEPS), between**2 + within**2, rtol=1e-12)
    intraclass = between**2 / (between**2 + within**2)
    assert np.allclose(x.autocorrelation(np.array([0, 1, 50])), [1.0, intraclass, intraclass], rtol=1e-12)
    assert x.marginal(0).cdf(8.0) == pytest.approx(stats.norm(7, np.hypot(between, within)).cdf(8.0), abs=1e-9)


def test_random_slopes():
    """Laird & Ware (1982): level and slope drawn by path; Cov(t, s) = sd_0² + t s sd_1² + σ² (t = s)."""
    body = [{"trend": {"level": path({"normal": {"mean": 1, "sd": 0.5}}),
                       "slope": path({"normal": {"mean": 0.2, "sd": 0.1}})}}, {"white_noise": {"sd": 0.3}}]  # fmt: skip
    x = theory_of({"x": body})["x"]
    t, s = np.meshgrid(STEPS, STEPS)
    assert np.allclose(x.mean(STEPS), 1 + 0.2 * STEPS, rtol=1e-12)
    assert np.allclose(x.covariance(t, s), 0.25 + 0.01 * t * s + 0.09 * (t == s), rtol=1e-11)
    assert not x.stationarity.covariance_stationary


def test_one_draw_in_two_series_makes_them_go_together():
    k = {"parameter": "k"}
    th = theory_of(
        {"a": [{"constant": k}, {"white_noise": {"sd": 1}}],
         "b": [{"ar": {"phi": k, "sd": 1}}, {"constant": k, "times": 3}],
         "c": [{"constant": path({"uniform": [0, 1]})}]},
        parameters={"k": path({"uniform": [0.2, 0.8]})},
    )  # fmt: skip
    assert np.allclose(th.cross("a", "b").covariance(STEPS, 0), 3 * 0.6**2 / 12, rtol=1e-10)
    assert np.array_equal(th.cross("a", "c").covariance(STEPS, 0), np.zeros(6))
    assert th["c"].marginal(0) is None and "known" in th["c"].reason("marginal")
    assert np.allclose(th["c"].variance(STEPS), 1 / 12, rtol=1e-12)


def test_brute_force_over_a_choice():
    """Every combination of two choices is a spec of its own; total covariance by adding them up."""
    values, weights = [0.2, 0.5, 0.8], [1, 2, 1]
    spec = {"x": [{"ar": {"phi": path({"choice": {"values": values, "weights": weights}}), "sd": 1}},
                  {"constant": path({"choice": [1, 5]})}]}  # fmt: skip
    x, mean, second = theory_of(spec)["x"], 0.0, 0.0
    for phi, weight in zip(values, weights, strict=True):
        for level in (1, 5):
            mean += weight / 8 * level
            second += weight / 8 * (phi**2 / (1 - phi**2) + level**2)
    assert x.mean(STEPS)[0] == pytest.approx(mean, rel=1e-13)
    assert x.autocovariance(np.array([2]))[0] == pytest.approx(second - mean**2, rel=1e-12)


def test_by_series_the_number_is_known():
    sd = {"draw": {"choice": [2, 2.5]}, "over": "series"}
    x = theory_of({"x": [{"white_noise": {"sd": sd}}]})["x"]
    assert x.stationarity.verdict == "strictly stationary" and x.variance(STEPS)[0] in (4.0, 6.25)


def test_the_verdict_says_not_ergodic_and_why():
    x = theory_of({"x": [{"ar": {"phi": path({"uniform": [0.3, 0.9]}), "sd": 1}}]})["x"]
    assert x.stationarity.verdict == "not ergodic"
    assert x.stationarity.reasons[:2] == (
        "a parameter drawn by path: x.ar.phi (uniform on [0.3, 0.9])", "given it: strictly stationary",
    )  # fmt: skip
    assert x.stationarity.stationary and x.stationarity.covariance_stationary
    assert x.system() is None
    assert x.reason("system") == "each path has a state space of its own: its parameters are drawn"
    moving = theory_of({"x": [{"random_walk": {"sd": path({"uniform": [1, 2]})}}]})["x"]
    assert moving.stationarity.verdict == "not ergodic" and "given it: variance grows" in moving.stationarity.reasons
    assert np.allclose(moving.variance(STEPS), STEPS * 7 / 3, rtol=1e-12)


def test_too_many_parameters_are_refused_with_the_reason():
    many = [{"ar": {"phi": [path({"uniform": [-0.1, 0.1]}) for _ in range(7)], "sd": 1}}]
    x = theory_of({"x": many})["x"]
    assert x.variance(STEPS) is None
    assert x.reason("variance") == "the average over 7 drawn parameters needs more than 2,048 nodes"


@pytest.mark.parametrize("law, frozen", [
    (UniformDraw((-1.0, 3.0)), stats.uniform(-1, 4)),
    (NormalDraw(1.0, 2.0), stats.norm(1, 2)),
    (NormalDraw(1.0, 2.0, (-1.0, 2.0)), stats.truncnorm(-1, 0.5, 1, 2)),
    (NormalDraw(0.0, 1.0, (3.0, 9.0)), stats.truncnorm(3, 9)),
    (BetaDraw(2.0, 5.0, (-1.0, 1.0)), stats.beta(2, 5, -1, 2)),
    (BetaDraw(0.5, 0.5), stats.beta(0.5, 0.5)),
    (BetaDraw(300.0, 1000.0), stats.beta(300, 1000)),
], ids=lambda law: "" if hasattr(law, "ppf") else str(law))  # fmt: skip
@pytest.mark.parametrize("points", [8, 32])
def test_rules_have_the_moments_of_their_laws(law, frozen, points):
    x, w = rule(law, points)
    assert len(x) == points and np.all(w > 0) and abs(w.sum() - 1) < 1e-13
    for k in range(1, 5):
        assert w @ x**k == pytest.approx(float(frozen.moment(k)), rel=1e-10, abs=1e-12)


def test_a_lognormal_law_is_no_polynomial_but_soon_exact():
    x, w = rule(LognormalDraw(2.0, 0.4), 32)
    assert [w @ x**k for k in (1, 2, 3)] == pytest.approx([stats.lognorm(0.4, scale=2).moment(k) for k in (1, 2, 3)])


def test_rules_of_few_values_have_them_all():
    x, w = rule(ChoiceDraw((3.0, 1.0), (1.0, 3.0)), 4)
    assert (x.tolist(), w.tolist()) == ([3.0, 1.0], [0.25, 0.75])


def test_every_answer_of_a_series_is_averaged_or_refused():
    """A number that is not averaged would silently be the one at the medians."""
    same = {"name", "reason", "as_dict"}
    answers = {name for name in vars(SeriesTheory) if not name.startswith("_")} - same
    assert answers <= set(vars(MixedSeries)), answers - set(vars(MixedSeries))


def test_means_of_many_steps_and_frequencies():
    """Var of a mean of n steps: given phi by the textbook sum (Brockwell & Davis 1991, 7.1), averaged by mpmath."""
    phi = path({"uniform": [0.3, 0.9]})
    x = theory_of({"x": [{"ar": {"phi": phi, "sd": 1}}]})["x"]

    def of_mean(p, n=10):
        return sum((1 - mpmath.mpf(abs(h)) / n) * p ** abs(h) for h in range(1 - n, n)) / (1 - p * p) / n

    assert x.variance_of_mean([10])[0] == pytest.approx(average(of_mean, 0.3, 0.9), rel=1e-9)
    assert x.long_run_variance == pytest.approx(average(lambda p: 1 / (1 - p) ** 2, 0.3, 0.9), rel=1e-9)
    assert x.spectral_density([0.5])[0] == pytest.approx(average(lambda p: 1 / (1 + p) ** 2, 0.3, 0.9), rel=1e-9)
    left = [float(average(lambda p, k=k: p**k / (1 - p * p), 0.3, 0.9)) for k in range(12)]
    assert x.half_life == next(k for k in range(12) if left[k] < left[0] / 2)
    assert x.forecast_variance([1]) is None and "tells of its drawn parameters" in x.reason("forecast_variance")
    assert x.forecast([1], [0.3]) is None and "ask without a history" in x.reason("forecast")
    ahead = x.forecast([1, 5])
    assert ahead.steps.tolist() == [0, 4] and ahead.variance == pytest.approx(left[:1] * 2, rel=1e-9)
    level = path({"normal": {"mean": 0, "sd": 2}})
    y = theory_of({"y": [{"ar": {"phi": 0.5, "sd": 1}}, {"constant": level}]})["y"]
    assert y.variance_of_mean([1000])[0] == pytest.approx(4 + float(of_mean(0.5, 1000)), rel=1e-9)
    assert y.long_run_variance is None and "drawn by path" in y.reason("long_run_variance")
    assert y.half_life is None and "the autocorrelation is still 0.75" in y.reason("half_life")
    assert y.partial_autocorrelation([0, 1])[1] == pytest.approx((4 + 2 / 3) / (4 + 4 / 3), rel=1e-12)


def test_normal_levels_and_slopes_leave_a_series_gaussian():
    level, slope = path({"normal": {"mean": 7, "sd": 2}}), path({"normal": {"mean": 0, "sd": 0.1}})
    shifted = theory_of({"x": [{"trend": {"level": level, "slope": slope}}, {"ar": {"phi": 0.5, "sd": 1}}]})["x"]
    assert shifted.gaussian and shifted.excess_kurtosis_at(9) == pytest.approx(0.0, abs=1e-9)
    known = stats.norm(7, np.sqrt(4 + 81 * 0.01 + 4 / 3))
    assert shifted.marginal(9).sf(12.0) == pytest.approx(known.sf(12.0), rel=1e-11)
    for body in (
        [{"constant": path({"uniform": [0, 1]})}, {"white_noise": {"sd": 1}}],
        [{"constant": path({"normal": {"mean": 0, "sd": 1, "within": [-2, 2]}})}, {"white_noise": {"sd": 1}}],
        [{"constant": level}, {"white_noise": {"sd": 1, "law": "laplace"}}],
        [{"power": {"of": [{"constant": level}], "exponent": 2}}, {"white_noise": {"sd": 1}}],
        [{"white_noise": {"sd": 1}, "times": level}],
    ):
        assert not theory_of({"x": body})["x"].gaussian, body
