"""Two series that are stated independent, and are not: in size, or at longer lags."""

from itertools import pairwise

import numpy as np
import pytest

from procgen.chance import kernel
from procgen.checks.gather import Gather
from procgen.checks.lane import Pass
from procgen.checks.planning import plan_of
from tests.studies.departures import draw, spec_of, verdict

NOISE = {"series": {"x": [{"white_noise": {"sd": 1}}], "y": [{"white_noise": {"sd": 2}}]}}


def of_one_size(values, rng):
    values["y"] = 2 * np.abs(values["x"]) * rng.choice([-1.0, 1.0], (500, 200))


def of_a_t_copula(values, rng):
    from scipy import stats

    scale = np.sqrt(rng.chisquare(4, (500, 200)) / 4)
    for name, sd in (("x", 1), ("y", 2)):
        values[name] = sd * stats.norm.ppf(stats.t(4).cdf(rng.standard_normal((500, 200)) / scale))


def late(values, rng):
    values["y"][:, 3:] = 2 * values["x"][:, :-3]


def much_earlier(values, rng):
    values["x"][:, 12:] = values["x"][:, 12:] * 0.995**0.5 + 0.05 * values["y"][:, :-12]


@pytest.mark.parametrize(
    ("spoil", "line"),
    [
        (of_one_size, "correlation of sizes at same step is "),
        (of_a_t_copula, "correlation of sizes at same step is "),
        (late, "correlation at longer lags at lags −3 to 12 is "),
        (much_earlier, "correlation at longer lags at lags +3 to 12 is "),
    ],
)
def test_what_is_not_independent_is_named(spoil, line):
    values = draw(spec_of(NOISE, 500, 200, 3))
    assert verdict(NOISE, values).agrees is True
    spoil(values, np.random.default_rng(2))
    judged = verdict(NOISE, values)
    assert any(told.startswith("x ~ y: dependence: ") and line in told for told in judged.headline), judged.headline


@pytest.mark.skipif(not kernel.available(), reason="numba is not installed")
def test_sums_are_the_same_compiled_cut_anywhere_and_sent():
    spec = spec_of(NOISE, 64, 300, 3)
    values, plan = draw(spec), plan_of(spec)
    found = []
    for compile, cuts in ((False, [0, 300]), (True, [0, 300]), (True, [0, 7, 64, 130, 300])):
        one = Pass(plan, compile=compile)
        for first, end in pairwise(cuts):
            one.absorb(0, first, {name: x[:, first:end] for name, x in values.items()})
        total = Gather(plan).restore(*one.total().state())
        found.append({key: sums.tolist() for key, sums in total.cross["x", "y"].sums.items()})
    assert found[0] == found[1] == found[2]
    assert [found[0][key][0] for key in ("sizes", "later", "earlier")] == [64 * 300, 64 * 288, 64 * 288]


def test_many_pairs_are_not_looked_at_at_longer_lags():
    body = {"series": {f"x{k}": [{"white_noise": {"sd": 1}}] for k in range(5)}}
    whats = {row.what for row in verdict(body, draw(spec_of(body, 40, 30, 3))).rows}
    assert "shocks: correlation of sizes" in whats and "shocks: correlation at longer lags" not in whats
