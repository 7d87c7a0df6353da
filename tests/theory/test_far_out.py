"""Numbers and delays far out: an answer, or a reason, in good time and quietly."""

from __future__ import annotations

import time
import warnings
from math import comb

import numpy as np
import pytest

from procgen.chance.laws import LAWS
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from procgen.theory import theory


def theory_of(*series):
    text = "procgen: 1\nseed: 1\npaths: 1\ntime: {steps: 10}\nseries:\n" + "\n".join(f"  {line}" for line in series)
    return theory(read_text(text, catalogue(), LAWS))


@pytest.mark.parametrize(
    ("body", "name", "reason"),
    [
        ("{ar: {phi: 0.5, sd: 1.0e+308}}", "variance", "too large for double precision"),
        ("{white_noise: {sd: 1.0e+200}}", "variance", "too large for double precision"),
        ("{random_walk: {sd: 1.0e+308}}", "variance", "too large for double precision"),
        ("{exp: [{trend: {slope: 300}}]}", "mean", "too large for double precision"),
        ("{exp: [{ar: {phi: 0.5, sd: 40}}]}", "variance", "too large for double precision"),
    ],
)
def test_what_is_too_large_is_unknown_quietly(body, name, reason):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        x = theory_of(f"x: {body}")["x"]
        told = x.as_dict([0, 5])
    assert told[name] is None
    assert reason in told["unknown"][name]


def test_a_garch_long_ago_has_the_moments_of_now():
    start = time.process_time()
    lag = "{lag: {of: [{use: x}], by: 100000}}"
    both = theory_of("x: {garch: {omega: 1, alpha: 0.1, beta: 0.8}}", f"y: {lag}")
    told = both.as_dict([0, 5])
    assert time.process_time() - start < 8.0  # on a busy machine; it took minutes by convolutions
    x, y = told["series"]["x"], told["series"]["y"]
    # Bollerslev (1986), excess kurtosis of order (1,1): 6 a^2 / (1 - b^2 - 2 a b - 3 a^2).
    expected = 6 * 0.01 / (1 - 0.64 - 0.16 - 0.03)
    np.testing.assert_allclose([x["excess_kurtosis"], y["excess_kurtosis"]], expected, rtol=1e-9)
    np.testing.assert_allclose(
        both["y"].autocovariance_of_squares([0, 3]), both["x"].autocovariance_of_squares([0, 3]), rtol=1e-9
    )


def test_a_difference_of_a_walk_over_many_steps_is_quick_and_exact():
    """Over blocks of 8,000 shocks with the weights (-1)^k C(11, k), whose squares add up to C(22, 11)."""
    start = time.process_time()
    x = theory_of("x: {difference: {of: [{random_walk: {sd: 1}}], by: 8000, order: 12}}")["x"]
    rho = x.autocorrelation(np.array([0, 8000, 95999, 96000]))
    assert time.process_time() - start < 8.0  # on a busy machine; it took a minute there with a dictionary at a time
    ends = [1, -comb(22, 10) / comb(22, 11), -1 / (8000 * comb(22, 11)), 0]
    np.testing.assert_allclose(x.variance(5), 8000 * comb(22, 11), rtol=1e-12)
    np.testing.assert_allclose(rho, ends, rtol=1e-9, atol=1e-15)
