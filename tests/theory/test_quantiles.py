"""Quantiles of mixtures: against SciPy's Brent search, and by hand where a law jumps or is level; what they cost."""

import numpy as np
import pytest
from scipy import optimize, stats

from procgen.chance.jumps import Jumps
from procgen.chance.laws.mixture import crossed
from procgen.theory.lumps import Lumped, Point
from procgen.theory.mixedlaw import MixedLaw

P = np.array([1e-200, 1e-9, 0.01, 0.3, 0.7, 0.99, 1 - 1e-9])
MIXTURES = {
    "normals": MixedLaw([0.3, 0.7], [stats.norm(0, 1), stats.norm(3, 2)]),
    "long tails": MixedLaw([0.5, 0.5], [stats.lognorm(3), stats.norm(0, 1e5)]),
    "far apart": MixedLaw([0.9, 0.1], [stats.gamma(0.3), stats.norm(1e6, 10)]),
}


@pytest.mark.parametrize("name", MIXTURES)
def test_quantiles_are_where_brents_search_finds_them(name):
    law = MIXTURES[name]
    for p, x in zip(P[1:], law.ppf(P)[1:], strict=True):
        low, high = (f(float(each.ppf(p)) for each in law.laws) for f in (min, max))

        def off(y, p=p):
            return float(law.cdf(y)) - p if p < 0.5 else 1 - p - float(law.sf(y))

        found = optimize.brentq(off, low, high, xtol=1e-300, rtol=1e-15)
        assert x == pytest.approx(found, rel=1e-10, abs=1e-13 * law.std())
    assert law.cdf(law.ppf(1e-200)) == pytest.approx(1e-200, rel=1e-10)


def test_few_calls_do_where_a_law_is_smooth():
    calls, z = [], np.linspace(0.01, 0.49, 11)
    both = stats.norm(0, 1), stats.norm(3, 2)

    def off(x):
        calls.append(x)
        return sum(each.cdf(x) for each in both) / (2 * z) - 1

    x = crossed(off, both[0].ppf(z), both[1].ppf(z))
    assert np.abs(off(x)).max() < 1e-14 and len(calls) <= 20  # 53 halvings otherwise


def test_a_quantile_at_a_level_stretch_is_where_it_begins_and_at_a_jump_the_jump():
    apart = MixedLaw([0.5, 0.5], [stats.uniform(0, 1), stats.uniform(2, 1)])
    assert apart.ppf(np.array([0.0, 0.25, 0.5, 0.75, 1.0])) == pytest.approx([0, 0.5, 1, 2.5, 3], abs=1e-14)
    step = crossed(lambda x: np.where(x < 0.3, -1.0, 1.0), np.zeros(2), np.array([1.0, 0.2]))
    assert step == pytest.approx([0.3, 0.2], rel=1e-15)  # the second has no crossing: its end
    law = Lumped([0.3, 0.3, 0.4], [Point(1.0), Point(2.0), stats.uniform(0, 3)])
    found = law.ppf(np.array([0.1, 0.2, 0.43, 0.44, 0.5, 0.7, 0.8, 0.95]))
    assert found == pytest.approx([0.75, 1, 1, 1.05, 1.5, 2, 2, 2.625], rel=1e-13)  # by hand
    assert (found[[1, 2]] == 1.0).all() and (found[[5, 6]] == 2.0).all()


@pytest.mark.parametrize(("rate", "spread"), [(0.02, 0.0), (0.5, 0.0), (3.0, 0.3)])
def test_quantiles_of_jumps_are_those_of_a_sum_over_their_number(rate, spread):
    """Sums over SciPy's Poisson numbers of SciPy's normals (Merton 1976), with all digits in both tails."""
    law, n = Jumps(rate, 1.0, 2.0, 0.0, spread).distribution(), np.arange(1 - (spread > 0), 60)
    each = stats.norm(n, np.sqrt(spread**2 + 4.0 * n))
    chance, lump = stats.poisson.pmf(n, rate), np.exp(-rate) if not spread else 0.0
    for p in (1e-15, 1e-6, 0.001):
        assert chance @ each.cdf(law.ppf(p)) == pytest.approx(p, rel=1e-9, abs=1e-16)
        assert chance @ each.sf(law.isf(p)) == pytest.approx(p, rel=1e-9, abs=1e-16)
    assert law.ppf(chance @ each.cdf(0.0) + 0.5 * lump) == pytest.approx(0.0, abs=1e-12)
