"""A price with jumps that leaves from its last value: of a Lévy process all that comes follows from where it stands.

References: Merton (1976) as a Poisson mixture of SciPy's lognormal laws; moments of exponentials of Lévy processes.
"""

import numpy as np
import pytest
from scipy.stats import lognorm, poisson

import procgen as pg
from procgen.spec.model import SpecError

MU, SIGMA, RATE, JUMP, SPREAD = 0.01, 0.02, 0.3, -0.02, 0.05
MERTON = {
    "merton": {"drift": MU, "sd": SIGMA, "rate": RATE, "jump_mean": JUMP, "jump_sd": SPREAD, "start": 100}
}  # fmt: skip
RECORD = [90.0, 95.0, 97.0]
T = np.array([0, 1, 7, 24])


def spec_of(of, paths=400, steps=25, **more):
    return {"procgen": 1, "seed": 5, "paths": paths, "time": {"steps": steps}, "series": {"x": of, **more}}


LEFT = spec_of({"of": [MERTON], "before": RECORD})


def test_moments_are_those_of_a_start_at_the_last_value_a_step_ago():
    x = pg.theory(LEFT)["x"]
    h, growth = T + 1, SIGMA**2 + RATE * (np.exp(2 * JUMP + 2 * SPREAD**2) - 2 * np.exp(JUMP + SPREAD**2 / 2) + 1)
    np.testing.assert_allclose(x.mean(T), 97.0 * np.exp(MU * h), rtol=1e-13)
    np.testing.assert_allclose(x.variance(T), x.mean(T) ** 2 * np.expm1(growth * h), rtol=1e-12)
    np.testing.assert_allclose(x.covariance(24, 7), x.mean([24]) * x.mean([7]) * np.expm1(growth * 8), rtol=1e-12)


@pytest.mark.parametrize("step", [0, 9])
def test_the_law_is_a_poisson_mixture_of_lognormal_ones(step):
    law, h = pg.theory(LEFT)["x"].marginal(step), step + 1
    drift = MU - SIGMA**2 / 2 - RATE * (np.exp(JUMP + SPREAD**2 / 2) - 1)
    q = np.array([80.0, 95.0, 97.0, 99.0, 120.0])
    n = np.arange(40)[:, None]
    sd = np.sqrt(SIGMA**2 * h + n * SPREAD**2)
    theirs = (poisson(RATE * h).pmf(n) * lognorm(sd, scale=97.0 * np.exp(drift * h + n * JUMP)).cdf(q)).sum(axis=0)
    np.testing.assert_allclose(law.cdf(q), theirs, rtol=1e-9)


def test_drawn_paths_agree_and_those_from_another_value_depart():
    ensemble = pg.render({**LEFT, "series": {**LEFT["series"], "y": [{"use": "x.merton.jumps"}]}})
    assert pg.validate(ensemble, false_alarm=1e-8).agrees
    other = pg.render(spec_of({"of": [MERTON], "before": [98.0]})).to_pandas()
    assert pg.validate(other, LEFT, false_alarm=1e-8).agrees is False


def test_a_term_may_say_itself_where_it_stands_and_is_lagged_from_there():
    own = {"merton": {**MERTON["merton"], "before": {"x": 97.0}}}
    made = pg.render(spec_of([own], paths=5, y=[{"lag": {"of": [{"use": "x"}], "by": 1}}]))
    assert np.array_equal(made["x"], pg.render(LEFT, paths=5)["x"])
    assert np.array_equal(made["y"][:, 1:], made["x"][:, :-1]) and np.all(made["y"][:, 0] == 97.0)


def test_a_record_that_no_price_has_is_refused():
    with pytest.raises(SpecError, match=r"values are numbers above 0, and the record has -5\.0 at step −2; mend it"):
        pg.theory(spec_of({"of": [MERTON], "before": [90.0, -5.0, 97.0]}))


@pytest.mark.parametrize(("of", "said"), [
    ([{"ar": {"phi": 0.9, "total_sd": 0.4}}], "its counts do not tell where the body of their mean stands; give"),
    (None, "its counts have nothing to do with those before"),
])  # fmt: skip
def test_counts_say_why_a_record_does_not_tell_where_they_stand(of, said):
    body = {"poisson": {"mean": 4, **({"of": of} if of else {})}}
    with pytest.raises(SpecError) as error:
        pg.theory(spec_of({"of": [body], "before": [3, 5, 4]}))
    assert said in str(error.value) and "remove before at the series" in str(error.value)
