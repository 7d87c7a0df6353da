"""Counts with a memory that leave from the last count: the chain of McKenzie (1985), stepped by its transition matrix.

Binomial and Poisson chances are SciPy's.
"""

import numpy as np
import pytest
from scipy.stats import binom, poisson

import procgen as pg
from procgen.spec.model import SpecError

ALPHA, MEAN, LAST = 0.7, 5.0, 20
POISSON, NEGATIVE = ({"inar": {"alpha": ALPHA, "mean": MEAN, **more}} for more in ({}, {"size": 3}))
K = np.arange(70)


def spec_of(of, before, paths=500, **more):
    return {
        "procgen": 1, "seed": 5, "paths": paths, "time": {"steps": 20},
        "series": {"x": {"of": [of], "before": before}, **more},
    }  # fmt: skip


@pytest.fixture(scope="module")
def moves():
    """Chances of a count after a count: who stays, and Poisson arrivals of mean μ(1 − α)."""
    new = poisson(MEAN * (1.0 - ALPHA)).pmf(K)
    return np.array([np.convolve(binom(n, ALPHA).pmf(K), new)[: len(K)] for n in K])


def test_moments_and_law_are_those_of_the_chain(moves):
    x, steps = pg.theory(spec_of(POISSON, [4, LAST]))["x"], np.arange(12)
    chances = [np.linalg.matrix_power(moves, t + 1)[LAST] for t in steps]
    np.testing.assert_allclose(x.mean(steps), [p @ K for p in chances], rtol=1e-10)
    np.testing.assert_allclose(x.variance(steps), [p @ K**2 - (p @ K) ** 2 for p in chances], rtol=1e-9)
    after = np.linalg.matrix_power(moves, 4) @ K
    joint = chances[2] @ (K * after) - (chances[2] @ K) * (chances[6] @ K)
    assert float(x.covariance(6, 2)) == pytest.approx(joint, rel=1e-9)
    for t in (0, 3, 11):
        np.testing.assert_allclose(x.marginal(t).cdf(K[:40]), np.cumsum(chances[t])[:40], rtol=1e-9)


def test_negative_binomial_ones_have_the_moments_of_the_recursion():
    """E(x) = αE + ε, Var = α²Var + α(1 − α)E + Var ε, with the ε that leaves mean and variance as they are."""
    variance = MEAN + MEAN**2 / 3
    new = variance * (1.0 - ALPHA**2) - ALPHA * (1.0 - ALPHA) * MEAN
    mean, spread, means, spreads = float(LAST), 0.0, [], []
    for _ in range(12):
        spread = ALPHA**2 * spread + ALPHA * (1.0 - ALPHA) * mean + new
        mean = ALPHA * mean + (1.0 - ALPHA) * MEAN
        means, spreads = [*means, mean], [*spreads, spread]
    x = pg.theory(spec_of(NEGATIVE, [LAST]))["x"]
    np.testing.assert_allclose(x.mean(np.arange(12)), means, rtol=1e-12)
    np.testing.assert_allclose(x.variance(np.arange(12)), spreads, rtol=1e-12)


@pytest.mark.parametrize("of", [POISSON, NEGATIVE])
def test_drawn_counts_agree_and_those_from_another_count_depart(of):
    spec = spec_of(of, [4, LAST])
    assert pg.validate(pg.render(spec), false_alarm=1e-8).agrees
    other = pg.render(spec_of(of, [LAST - 4])).to_pandas()
    assert pg.validate(other, spec, false_alarm=1e-8).agrees is False


def test_a_term_may_say_itself_where_it_stands_and_is_lagged_from_there():
    own = {"inar": {**POISSON["inar"], "before": {"x": LAST}}}
    series = {"x": [own], "y": [{"lag": {"of": [{"use": "x"}], "by": 1}}]}
    made = pg.render({**spec_of(POISSON, [1], 6), "series": series})
    assert np.array_equal(made["x"], pg.render(spec_of(POISSON, [LAST], 6))["x"])
    assert np.all(made["y"][:, 0] == LAST) and np.array_equal(made["y"][:, 1:], made["x"][:, :-1])


@pytest.mark.parametrize("before", [[3, 2.5, 4], [3, -1, 4]])
def test_a_record_that_is_no_count_is_refused(before):
    with pytest.raises(SpecError, match=r"values are whole numbers from 0, and the record has .* at step −2; mend it"):
        pg.theory(spec_of(POISSON, before))
