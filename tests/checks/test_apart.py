"""One path among hundreds that is not as stated is found and named, and what is common to all is not told of one."""

import json

import numpy as np
import pytest
from scipy import stats

from procgen.chance.laws import LAWS
from procgen.checks import apart
from procgen.checks.scores import Scores
from procgen.checks.shocks import ShockSums
from tests.studies.departures import draw, spec_of, verdict

AR = [{"ar": {"phi": 0.7, "sd": 1}}]
NORMAL = Scores(LAWS["normal"]())


@pytest.fixture(scope="module")
def values():
    return draw(spec_of(AR, 500, 200, 3))["x"]


def shifted(x, rng):
    x[123] += 11 * np.sqrt(1 / (1 - 0.49) / 200) * 1.4 / 0.714  # of its mean's own sd, which memory makes larger


def widened(x, rng):
    x[123] *= 1.6


def turned(x, rng):
    for t in range(1, x.shape[1]):
        x[123, t] = -0.7 * x[123, t - 1] + rng.standard_normal()


def trembling(x, rng):
    x[123] = 0.0
    for t in range(1, x.shape[1]):  # the shocks' own size, but not their order
        x[123, t] = -0.1 * x[123, t - 1] + 0.779 * rng.standard_normal()


@pytest.mark.parametrize(
    ("spoil", "kind"), [(shifted, "level"), (widened, "spread"), (turned, "spread"), (trembling, "memory")]
)
def test_one_path_of_500_is_named(values, spoil, kind):
    x = values.copy()
    spoil(x, np.random.default_rng(1))
    judged = verdict(AR, {"x": x})
    (line,) = judged.headline
    assert line.startswith(f"x: {kind}: ") and f"{kind} by path is off most at path 123, by " in line


def test_a_spread_that_is_wrong_everywhere_is_not_told_of_one_path(values):
    rows = {(row.what, row.probe[:5]): row for row in verdict(AR, {"x": 1.1 * values}).rows}
    assert rows["shocks: variance", "all s"].outcome == "departs"
    assert rows["shocks: spread by path", "worst"].outcome == "agrees"


def test_spreads_are_the_normal_scores_of_chi_squares_far_out_on_both_sides():
    q = np.array([60.0, 150.0, 199.0, 250.0, 512.0])
    z = apart.spreads(q, np.full(5, 200))
    assert stats.norm.logsf(z) == pytest.approx(stats.chi2.logsf(q, 200), rel=1e-9)
    assert stats.norm.logcdf(z) == pytest.approx(stats.chi2.logcdf(q, 200), rel=1e-9)


def test_the_slope_of_three_shocks_has_its_exact_law():
    # On the sphere, at distance a from the g2 axis and at an angle b around it, (g1 + g3) g2 is sin(2a) cos(b)/√2; it
    # is above r where a lies between the two ends below, and cos(a) is uniform (Archimedes).
    r, angle = 0.6, (np.arange(200_000) + 0.5) / 200_000 * 2 * np.pi
    need = np.sqrt(2) * r / np.abs(np.cos(angle))
    a = 0.5 * np.arcsin(need[need < 1])
    share = np.sum(np.cos(a) - np.sin(a)) / angle.size
    assert apart._memory(r * np.sqrt(5.0), 3) == pytest.approx(np.log(share), rel=1e-4)


def test_ends_are_the_same_however_paths_are_cut():
    z = np.random.default_rng(2).standard_normal((50, 96))
    z[:, 40] = z[:, 8]  # of equal ones the first
    whole, parts = ShockSums(NORMAL, 50), ShockSums(NORMAL, 50)
    for sums, cuts in ((whole, [96]), (parts, [32, 64, 96])):
        first = 0
        for end in cuts:
            part = ShockSums(NORMAL, 50)
            lane = part.lane(end - first, first)
            part.absorb(z[:, first:end], 0, lane)
            part.finish(lane)
            part.ends = json.loads(json.dumps(part.ends))
            sums.merge(part)
            first = end
    assert whole.ends == parts.ends and whole.ends.keys() == {"level", "spread", "memory"}
