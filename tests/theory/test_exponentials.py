"""Exponentials of shocks that are not normal: moment generating functions of SciPy's laws by quadrature.

Closed forms: Johnson, Kotz & Balakrishnan (1994; 1995), ch. 17, 23, 24 and 26, and Azzalini (1985) for the skew normal.
"""

from __future__ import annotations

from itertools import pairwise

import mpmath as mp
import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad

from .specs import series_of

NOW = np.array([0])
ROOT_3 = np.sqrt(3.0)
SKEW = stats.skewnorm(3.0)
LAWS = {
    "laplace": ("laplace", stats.laplace(scale=np.sqrt(0.5))),
    "logistic": ("logistic", stats.logistic(scale=ROOT_3 / np.pi)),
    "uniform": ("uniform", stats.uniform(-ROOT_3, 2 * ROOT_3)),
    "gamma": ({"gamma": {"shape": 4}}, stats.gamma(4, loc=-2, scale=0.5)),
    "skew_normal": ({"skew_normal": {"alpha": 3}}, stats.skewnorm(3, -SKEW.mean() / SKEW.std(), 1 / SKEW.std())),
    "ged": ({"ged": {"shape": 1}}, stats.gennorm(1, scale=np.sqrt(0.5))),
}


def exponential_of(*body):
    return series_of({"exp": list(body)})


def mean_exp(law, rate):
    low, high = law.support()
    ends = sorted({min(max(end, low), high) for end in (-400.0, -30.0, -3.0, 0.0, 3.0, 30.0, 400.0)})
    return sum(quad(lambda z: np.exp(rate * z) * law.pdf(z), *piece, epsabs=1e-14)[0] for piece in pairwise(ends))


@pytest.mark.parametrize("name", LAWS)
@pytest.mark.parametrize("sd", [0.3, 0.6])
def test_the_mean_and_the_variance_of_an_exponential(name, sd):
    ours, scipys = LAWS[name]
    x = exponential_of({"white_noise": {"sd": sd, "law": ours}})
    mean = mean_exp(scipys, sd)
    assert x.mean(NOW) == pytest.approx(mean, rel=1e-9)
    assert x.variance(NOW) == pytest.approx(mean_exp(scipys, 2 * sd) - mean**2, rel=1e-8)


@pytest.mark.parametrize(
    ("law", "values", "weights"),
    [
        ({"bernoulli": {"p": 0.3}}, [0.0, 1.0], [0.7, 0.3]),
        ({"empirical": {"values": [1, 2, 2, 7]}}, [1.0, 2.0, 7.0], [0.25, 0.5, 0.25]),
    ],
)
def test_laws_of_few_values_by_their_definition(law, values, weights):
    values, weights = np.array(values), np.array(weights)
    mean = weights @ values
    z = (values - mean) / np.sqrt(weights @ (values - mean) ** 2)
    x = exponential_of({"white_noise": {"sd": 2, "law": law}})
    assert x.mean(NOW) == pytest.approx(weights @ np.exp(2 * z), rel=1e-12)


def test_mixtures_by_the_normal_mean_of_each_part():
    parts = [{"weight": 1}, {"weight": 3, "mean": 2, "sd": 0.5}]
    mean, spread = 1.5, np.sqrt(0.25 * (1 + 2.25) + 0.75 * (0.25 + 0.25))
    for law in ({"normal_mixture": {"components": parts}}, {"mixture": {"weight": 0.75, "ratio": 0.5, "shift": 2}}):
        x = exponential_of({"white_noise": {"sd": 0.8, "law": law}})
        q = 0.8 / spread
        whole = np.exp(-q * mean) * (0.25 * np.exp(q * q / 2) + 0.75 * np.exp(2 * q + q * q / 8))
        assert x.mean(NOW) == pytest.approx(whole, rel=1e-12)


def test_an_exponential_of_an_autoregression_is_a_product_over_its_weights():
    x = exponential_of({"ar": {"phi": 0.8, "sd": 0.4, "law": "laplace"}})
    with mp.workdps(30):

        def level(*weights):
            w = lambda j: sum(s * mp.mpf("0.8") ** (j + h) for s, h in weights)  # noqa: E731
            return mp.nprod(lambda j: 1 / (1 - (mp.mpf("0.4") * w(int(j))) ** 2 / 2), [0, 400])

        mean = level((1, 0))
        # three shocks that only the later value has
        three = [1 / (1 - (mp.mpf("0.4") * mp.mpf("0.8") ** j) ** 2 / 2) for j in range(3)]
        lag_3 = level((1, 0), (1, 3)) * mp.fprod(three) - mean**2
        variance = level((2, 0)) - mean**2
    assert x.mean(NOW) == pytest.approx(float(mean), rel=1e-11)
    assert x.covariance(np.array([0, 3]), np.array([0, 0])) == pytest.approx([float(variance), float(lag_3)], rel=1e-10)


@pytest.mark.parametrize(
    ("law", "sd", "mean", "end"),
    [("laplace", 0.9, 1 / (1 - 0.405), np.sqrt(2.0)), ({"gamma": {"shape": 1}}, 0.6, np.exp(-0.6) / 0.4, 1.0)],
)
def test_where_it_diverges_the_reason_says_infinite(law, sd, mean, end):
    x = exponential_of({"white_noise": {"sd": sd, "law": law}})
    assert x.mean(NOW) == pytest.approx(mean, rel=1e-12)
    assert x.variance(NOW) is None
    assert x.reason("variance").startswith("infinite variance")
    assert x.highest_moment == pytest.approx(end / sd)
    beyond = exponential_of({"white_noise": {"sd": 3, "law": law}})
    assert beyond.mean(NOW) is None
    assert beyond.reason("mean").startswith("infinite mean")


def test_the_bounded_side_of_a_skewed_law_has_no_end():
    # x = exp(1) exp(-u) of an exponential u with mean 3: E exp(-u) = 1/4
    noise = {"product": [{"constant": -3}, {"white_noise": {"sd": 1, "law": {"gamma": {"shape": 1}}}}]}
    assert exponential_of(noise).mean(NOW) == pytest.approx(np.exp(3) / 4, rel=1e-12)


def test_what_is_finite_and_not_worked_out_is_not_said_to_have_no_closed_form():
    x = exponential_of({"white_noise": {"sd": 1, "law": {"ged": {"shape": 1.5}}}})
    assert x.mean(NOW) is None and "finite, but not worked out" in x.reason("mean")


@pytest.mark.parametrize(
    ("body", "values", "chances"),
    [
        ({"clip": {"of": [{"poisson": {"mean": 3}}], "high": 2}}, [0.0, 1.0, 2.0], [*stats.poisson(3).cdf([0, 1]), 1]),
    ],
)
def test_moments_of_a_bend_of_counts_are_not_worked_out_and_its_law_is(body, values, chances):
    x = series_of(body)
    assert x.mean(NOW) is None and "not worked out" in x.reason("mean")
    np.testing.assert_allclose(x.marginal(0).cdf(np.array(values)), chances, rtol=1e-12)


def test_a_bend_of_a_flag_is_that_of_each_of_its_two_values():
    x = series_of({"min": {"of": [{"flag": {"share": 0.2, "stay": 8}}], "and": [{"constant": 0.5}]}})
    assert (x.mean(NOW), x.variance(NOW)) == (pytest.approx(0.2 * 0.5), pytest.approx(0.16 * 0.25))
    np.testing.assert_allclose(x.marginal(0).cdf(np.array([0.0, 0.5])), [0.8, 1.0], rtol=1e-12)


def test_the_law_of_a_bend_of_what_is_skewed_is_known_though_its_moments_are_not():
    x = series_of({"clip": {"of": [{"white_noise": {"sd": 1, "law": "laplace"}}], "high": 2}})
    at = np.array([-1.0, 0.5, 1.9, 2.0])
    exact = np.where(at < 2.0, stats.laplace(scale=np.sqrt(0.5)).cdf(at), 1.0)
    np.testing.assert_allclose(x.marginal(0).cdf(at), exact, rtol=1e-9)
