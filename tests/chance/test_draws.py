"""Draws of parameters against SciPy's quantiles (scipy.stats) and areas by mpmath, out to the last uniform."""

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from procgen.chance.draws import values
from procgen.spec.draws import BetaDraw, ChoiceDraw, LognormalDraw, NormalDraw, UniformDraw

LEAST = 2.0**-53  # the first uniform; the last is 1 − LEAST
U = np.array([LEAST, 1e-12, 1e-6, 0.01, 0.2, 0.5, 0.7, 0.99, 1 - 1e-9, 1 - LEAST])


def test_uniform():
    assert np.allclose(values(UniformDraw((0.3, 0.9)), U), stats.uniform(0.3, 0.6).ppf(U), rtol=1e-15, atol=0)


def test_normal_and_lognormal():
    assert np.allclose(values(NormalDraw(2.0, 3.0), U), stats.norm(2, 3).ppf(U), rtol=1e-13, atol=1e-14)
    assert np.allclose(values(LognormalDraw(2.0, 0.5), U), stats.lognorm(0.5, scale=2).ppf(U), rtol=1e-13, atol=0)


@pytest.mark.parametrize("ends", [(-1, 2), (3, 5), (-9, -8.5), (7, 40), (-40, 40), (0, 1e-3)])
def test_normal_cut_off(ends):
    known = stats.truncnorm(*ends).ppf(U)
    assert np.allclose(values(NormalDraw(0.0, 1.0, ends), U), known, rtol=1e-12, atol=1e-14)


def test_lognormal_cut_off():
    low, high = np.log(np.array([1.0, 3.0]) / 2.0) / 0.5
    known = 2.0 * np.exp(0.5 * stats.truncnorm(low, high).ppf(U))
    assert np.allclose(values(LognormalDraw(2.0, 0.5, (1.0, 3.0)), U), known, rtol=1e-13, atol=0)


@pytest.mark.parametrize("a, b", [(0.1, 0.1), (0.5, 0.5), (2, 3), (50, 3), (0.1, 1000), (1000, 1000)])
def test_beta(a, b):
    """The area below each draw is its uniform to 1e-9, by the incomplete beta function in mpmath."""
    u = U[:6]  # above, areas below are rounded in x itself
    x = values(BetaDraw(a, b), u)
    areas = [float(mpmath.betainc(a, b, 0, mpmath.mpf(float(point)), regularized=True)) for point in x]
    assert np.allclose(areas, u, rtol=1e-9, atol=0)


def test_beta_is_mirrored_and_stretched():
    x = values(BetaDraw(2.0, 5.0, (-1.0, 3.0)), U)
    assert np.allclose(x, 3.0 - (values(BetaDraw(5.0, 2.0, (0.0, 4.0)), 1 - U)), rtol=0, atol=1e-9)
    assert np.all((x > -1.0) & (x < 3.0))


def test_choice_takes_each_value_over_its_share():
    law = ChoiceDraw((3.0, 1.0, 2.0), (1.0, 2.0, 1.0))
    u = (np.arange(4000) + 0.5) / 4000
    assert [np.count_nonzero(values(law, u) == x) for x in (1.0, 2.0, 3.0)] == [2000, 1000, 1000]
    assert [*values(ChoiceDraw((5.0, 4.0)), np.array([0.4999, 0.5]))] == [4.0, 5.0]


LAWS = st.one_of(
    st.builds(lambda a, w: UniformDraw((a, a + w)), st.floats(-5, 5), st.floats(1e-6, 9)),
    st.builds(lambda m, s, a, w: NormalDraw(m, s, (a, a + w)), *[st.floats(-5, 5), st.floats(1, 9)] * 2),
    st.builds(lambda m, s, a, w: LognormalDraw(m, s, (a, a + w)), *[st.floats(0.1, 5), st.floats(0.2, 3)] * 2),
    st.builds(lambda a, b, e, w: BetaDraw(a, b, (e, e + w)), *[st.sampled_from((0.5, 1.0, 7.0))] * 2,
              st.floats(-5, 5), st.floats(0.1, 9)),
)  # fmt: skip


@settings(deadline=None, max_examples=60)  # the first draw of a beta law builds its table
@given(LAWS, st.lists(st.floats(LEAST, 1 - LEAST), min_size=2, max_size=20))
def test_draws_rise_with_the_uniform_and_stay_inside(law, u):
    x = values(law, np.sort(np.array(u)))
    assert np.all(np.diff(x) >= 0) and np.all((x >= law.low) & (x <= law.high))
    assert law.closed or np.all((x > law.low) & (x < law.high))
