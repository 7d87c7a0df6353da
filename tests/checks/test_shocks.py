"""Sums over recovered shocks: tiles and merging do not matter, and every test made of them is calibrated."""

import math
from collections import defaultdict

import numpy as np
import pytest
from scipy import stats

from procgen.chance import kernel
from procgen.chance.laws import LAWS
from procgen.checks import shocks
from procgen.checks.judge_shocks import cross_checks, shock_checks
from procgen.checks.scores import BINS, Scores
from procgen.checks.shocks import ShockLane, ShockSums, _add_in_turn
from procgen.checks.together import CrossSums
from procgen.checks.uniforms import bin_counts
from tests.studies.departures import draw, spec_of, verdict

NORMAL, STUDENT = LAWS["normal"](), LAWS["student_t"](df=6)
SCORES = {law: Scores(law) for law in (NORMAL, STUDENT)}


def summed(z, law=NORMAL, tiles=(10_000,)):
    sums, lane, at = ShockSums(SCORES[law], len(z)), ShockLane(z.shape[1]), 0
    while at < len(z):
        size = tiles[at % len(tiles)]
        sums.absorb(z[at : at + size], at, lane)
        at += size
    sums.finish(lane)
    return sums


def checks_of(sums):
    return {f"{c.what} {c.probe.split(':')[0]}": c for c in shock_checks("x", sums, "")}


def test_tiles_do_not_matter():
    z = np.random.default_rng(1).standard_normal((400, 30))
    whole, parts = checks_of(summed(z)), checks_of(summed(z, tiles=(17, 5, 64)))
    for name, check in whole.items():
        assert parts[name].log_p == pytest.approx(check.log_p, rel=1e-9), name


def test_merged_sums_are_the_sums_of_both():
    z = np.random.default_rng(2).standard_normal((200, 40))
    left, right = summed(z[:, :25]), summed(z[:, 25:])
    left.merge(right)
    whole = summed(z)
    for name, check in checks_of(whole).items():
        if "neighbouring" not in name:  # the pair across the cut is not seen
            assert checks_of(left)[name].log_p == pytest.approx(check.log_p, rel=1e-9), name


def test_a_seasonal_profile_is_found_at_its_phase():
    z = np.random.default_rng(6).standard_normal((240, 50))
    moved = z + 0.15 * np.cos(2 * np.pi * np.arange(240) / 12)[:, None]
    found = []
    for values in (z, moved):
        sums, lane = ShockSums(SCORES[NORMAL], 240, period=12), ShockLane(50)
        sums.absorb(values, 0, lane)
        sums.finish(lane)
        found.append(checks_of(sums))
    name = "shocks: level by phase period 12"
    assert found[0][name].log_p > math.log(1e-3)
    assert found[1][name].log_p < found[1]["shocks: level by step sum over steps"].log_p < math.log(1e-6)


@pytest.mark.parametrize("paths", [1, 3])
def test_phases_are_the_same_whether_or_not_a_profile_tells_them(paths, monkeypatch):
    """Of series that are too long for a profile by step, phases are summed by themselves, however tiles are cut."""
    z, found = np.random.default_rng(7).standard_normal((700, paths)), []
    for longest, tiles in ((1000, (700,)), (100, (700,)), (100, (64, 192))):
        monkeypatch.setattr(shocks, "PROFILE", longest)
        sums, lane, at = ShockSums(SCORES[NORMAL], 700, period=24), ShockLane(paths), 0
        while at < 700:
            size = tiles[at % len(tiles)]
            sums.absorb(z[at : at + size], at, lane)
            at += size
        sums.finish(lane)
        found.append(sums)
    assert found[0].phases.size == 0 and (found[1].phases == found[2].phases).all()
    expected = [(paths * len(z[k::24]), z[k::24].sum()) for k in range(24)]
    for sums in found:
        np.testing.assert_allclose(sums.by_phase().T, expected, rtol=1e-9, atol=1e-12)
    row = checks_of(found[1])["shocks: level by phase period 24"]
    mean = [z[k::24].mean() - z.mean() for k in range(24)]
    count = [z[k::24].size for k in range(24)]
    assert row.log_p == pytest.approx(stats.chi2.logsf(np.dot(count, np.square(mean)), 23), rel=1e-9)


def test_unknown_first_steps_and_single_gaps_are_left_out():
    z = np.random.default_rng(3).standard_normal((100, 6))
    spoiled = np.vstack([np.full((3, 6), np.nan), z])
    spoiled[50, 2] = np.nan
    whole, tiled = summed(spoiled), summed(spoiled, tiles=(2, 30, 19))
    z[47, 2] = np.nan
    known = z[np.isfinite(z)]
    for sums in (whole, tiled):
        assert sums.n == known.size == 599
        assert checks_of(sums)["shocks: variance all steps"].estimate == pytest.approx(known.var(ddof=1))
        for i, lag in enumerate(sums.lags):  # both of a pair must be known
            products = z[lag:] * z[:-lag]
            assert sums.memory[0, i] == np.count_nonzero(np.isfinite(products))
            assert sums.memory[1, i] == pytest.approx(np.nansum(products))
        assert sums.neighbours == pytest.approx(np.nansum(z[:, 1:] * z[:, :-1]))
        assert sums.rows == {6: 99, 2: 1, 3: 1}


@pytest.mark.parametrize(("law", "shape"), [(NORMAL, (60, 25)), (STUDENT, (100, 20))])
def test_every_test_is_calibrated(law, shape):
    # 150 draws: the count of p below 0.1 and 0.01 is binomial, held to the interval that leaves 1e-9 outside.
    rng, found = np.random.default_rng(4), defaultdict(list)
    for _ in range(150):
        for name, check in checks_of(summed(law.distribution().rvs(size=shape, random_state=rng), law)).items():
            found[name].append(check.log_p)
    assert len(found) >= 20
    for name, log_ps in found.items():
        for level in (0.1, 0.01):
            count = np.count_nonzero(np.array(log_ps) <= math.log(level))
            low, high = stats.binom.ppf(5e-10, 150, level), stats.binom.isf(5e-10, 150, level)
            assert low <= count <= high, (name, level, count)


def test_components_are_orthonormal_and_blind_to_level_and_spread():
    c = SCORES[STUDENT].components
    np.testing.assert_allclose(c.T @ c / BINS, np.eye(8), atol=1e-10)
    law = STUDENT.distribution()
    z = law.ppf((np.arange(400_000) + 0.5) / 400_000)
    for moved in (z + 0.01, z * 1.01):
        answer = bin_counts(law.cdf(moved)) @ c / 400_000
        assert np.abs(answer[2:]).max() < 0.05 * np.abs(answer[:2]).max()


def test_normal_scores_against_scipy():
    z = np.concatenate([np.linspace(-30, 30, 1001), [1e-9, 15.9999, -16.0001]])
    law = stats.t(6, scale=math.sqrt(4 / 6))
    exact = np.where(z < 0, stats.norm.ppf(law.cdf(z)), stats.norm.isf(law.sf(z)))
    np.testing.assert_allclose(SCORES[STUDENT].normal_scores(z), exact, atol=2e-7)


def test_correlation_between_series_is_calibrated_and_found():
    rng, p = np.random.default_rng(5), []
    for _ in range(400):
        a = rng.standard_normal((30, 20))
        b = 0.4 * a + math.sqrt(1 - 0.16) * rng.standard_normal((30, 20))
        sums = CrossSums()
        totals = sums.lane(20)
        sums.absorb(a[:11], b[:11], 11, 0, totals)
        sums.absorb(a, b, 19, -11, totals)
        sums.finish(totals)
        checks = {c.probe: c for c in cross_checks("x ~ y", sums, {0: 0.4})}
        p.append([checks[probe].log_p for probe in ("same step", "lag +1", "lag -2")])
    for column in np.array(p).T:
        count = np.count_nonzero(column <= math.log(0.05))
        assert stats.binom.ppf(5e-9, 400, 0.05) <= count <= stats.binom.isf(5e-9, 400, 0.05)
    wrong = {c.probe: c for c in cross_checks("x ~ y", sums, {0: -0.4})}
    assert wrong["same step"].log_p < math.log(1e-12)


def test_a_pair_with_shocks_that_cannot_be_recovered_is_not_judged():
    """A price that falls to the grain of its decimals: what was recovered before is no sample of its shocks."""
    stated = {
        "series": {
            "a": [{"random_walk": {"sd": 1}}],
            "b": {"decimals": 2, "of": [{"exp": [{"random_walk": {"sd": 0.02, "start": 3}}]}]},
        }
    }
    values = draw(spec_of(stated, 1, 2000, 1))
    values["b"][0, 1500:] = 0.0
    rows = [row for row in verdict(stated, values).rows if row.what == "shocks: correlation between series"]
    assert [row.outcome for row in rows] == ["untestable"] and "not above 0" in rows[0].note


@pytest.mark.parametrize("first", [0, 3, 7, 64])
@pytest.mark.parametrize("count", [1, 4, 7, 100])
def test_steps_that_share_an_entry_are_added_one_after_another(first, count):
    values, width = np.random.default_rng(count).standard_normal(count), 7
    row = np.random.default_rng(first).standard_normal(40)
    expected = row.copy()
    for k in range(count):  # the bits of a plain loop
        expected[(first + k) // width] += values[k]
    found = row.copy()
    with kernel.compiling(kernel.available()):
        _add_in_turn(found, values, first, width)
    _add_in_turn(row, values, first, width)
    np.testing.assert_array_equal(row, expected)
    np.testing.assert_array_equal(found, expected)


@pytest.mark.parametrize("lag", [3, 6, 12])
def test_products_of_shocks_that_come_every_third_step_are_calibrated(lag):
    """Few pairs are judged by an exact law, which must know how many there are: 400 sets of 30 paths."""
    p = []
    for seed in range(400):
        z = np.full((40, 30), np.nan)
        z[::3] = np.random.default_rng([seed, lag]).standard_normal((14, 30))
        rows = [row for row in shock_checks("x", summed(z), "") if row.what == "shocks: autocorrelation"]
        p += [row.p for row in rows if row.probe == f"lag {lag}"]
    for level, most in ((0.1, 72), (0.01, 18)):  # of 400; more by chance at most once in a million times (binomial)
        assert len(p) == 400 and np.count_nonzero(np.array(p) <= level) <= most
    assert np.count_nonzero(np.array(p) <= 0.1) >= 13


@pytest.mark.parametrize("paths", [2, 15, 16, 17, 31, 48])
def test_neighbours_are_counted_within_their_lane_group(paths):
    """As many pairs are told as there are in groups of 16, whether all shocks are known or a late one is missing."""
    pairs, z = 30 * sum(min(paths - first, 16) - 1 for first in range(0, paths, 16)), np.ones((30, paths))
    for missing in (0, 1):
        sums = ShockSums(Scores(LAWS["normal"]()), 30)
        lane = sums.lane(paths)
        z[:missing, 0] = np.nan
        sums.absorb(z, 0, lane)
        sums.finish(lane)
        assert sum((length - 1) * times for length, times in sums.rows.items()) == pairs - missing
