"""Paths that balance each other: mirrored ones, side by side or not, are named as paths that are not independent.

Mirrored pairs: Hammersley & Morton (1956), antithetic variates. Seeds are fixed.
"""

import numpy as np
import pytest
from scipy import stats

from procgen.checks import judge, power, tails
from tests.studies.departures import draw, spec_of, verdict

AR = [{"ar": {"phi": 0.6, "sd": 1}}]
HEAVY = [{"ar": {"phi": 0.6, "sd": 1, "law": {"student_t": {"df": 5}}}}]
ORDERS = {
    "side by side": np.arange(200).reshape(2, 100).T.ravel(),
    "in halves": np.arange(200),
    "shuffled": np.random.default_rng(7).permutation(200),
}


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("body", [AR, HEAVY], ids=["normal", "heavy tails"])
def test_mirrored_paths_are_named_as_not_independent(body, order):
    half = draw(spec_of(body, 100, 80, 3))["x"]
    found = verdict(body, {"x": np.concatenate([half, -half])[ORDERS[order]]})
    assert found.agrees is False
    assert found.headline[0].startswith("x: dependence: paths are not independent of each other (")


def test_a_spread_that_is_too_small_is_no_balance():
    found = verdict(AR, {"x": 0.5 * draw(spec_of(AR, 200, 80, 3))["x"]})
    (row,) = found.checks[found.checks["what"] == "shocks: balance of paths"].itertuples()
    assert found.headline[0].startswith("x: spread: ")
    assert row.outcome == "agrees"


@pytest.mark.parametrize(("m", "n"), [(2, 50), (60, 24_000), (240, 480_000)])
def test_the_lower_tail_is_that_of_fishers_law(m, n):
    for f in (0.05, 0.5, 0.9, 1.2):
        if (known := stats.f.logcdf(f, m, n)) > -600:
            assert tails.ratio_below(f, m, n) == pytest.approx(known, rel=1e-7)
    assert tails.ratio_below(1e-33, m, n) < tails.ratio_below(1e-30, m, n) < 0.0
    # SciPy's F: what lies below its 1e-5 point 9 times in 10 when all is smaller by a factor.
    factor = stats.f.ppf(1e-5, m, n) / stats.f.ppf(0.9, m, n)
    assert power.evenness(1e-5, m, n) == pytest.approx(1 - factor, rel=1e-6)
    assert judge.evenness(0.5 * m, m, float(n), n).estimate == 0.5
