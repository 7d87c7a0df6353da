"""What is missing: how long, and whether together in neighbouring paths or in two series.

Seeds are fixed. Masks are drawn here by NumPy, as renewals whose gaps have lengths of their own (Cox 1962).
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import procgen as pg
from procgen.checks.masks import MaskSums, beside
from procgen.checks.missing import GapSums, _ages
from procgen.terms.graph import build

PATHS, STEPS, SHARE, GAP = 400, 120, 0.1, 5
FALSE_ALARM = 1e-6
LEFT_OUT = {"missing": {"of": [{"white_noise": {"sd": 1}}], "share": SHARE, "gap": GAP}}


def spec(*names):
    series = {name: [LEFT_OUT] for name in names}
    return pg.load({"procgen": 1, "seed": 7, "paths": PATHS, "time": {"steps": STEPS}, "series": series})


def mask(rng, paths=PATHS, steps=STEPS, length=None):
    """Geometric gaps of the stated mean, or all of one length; what lies between them is geometric."""
    between, started = GAP * (1 - SHARE) / SHARE, 300
    out = np.zeros((paths, steps + started), bool)
    for row in out:
        t = 0
        while t < row.size:
            t += rng.geometric(1 / between)
            end = t + (length or rng.geometric(1 / GAP))
            row[t:end] = True
            t = end
    return out[:, started:]


def verdict(**masks):
    """Of white noise with each series' mask."""
    rng = np.random.default_rng(11)
    paths, steps = np.indices((PATHS, STEPS)).reshape(2, -1)
    values = {name: np.where(gone, np.nan, rng.normal(size=gone.shape)).ravel() for name, gone in masks.items()}
    table = pd.DataFrame({"path": paths, "step": steps, **values})
    return pg.validate(table, spec(*masks), false_alarm=FALSE_ALARM)


def test_gaps_of_another_length_of_the_same_mean_are_found_and_named():
    rng = np.random.default_rng(1)
    assert "departs" not in verdict(x=mask(rng)).counts
    found = verdict(x=mask(rng, length=GAP))
    assert found.headline[0].startswith("x: share of gaps that go on, up to 2 steps: larger than stated")
    rows = found.checks.set_index("what")
    assert rows.loc["share: missing after missing", "outcome"] == "agrees"  # it alone would not tell


@pytest.mark.parametrize("which", [slice(0, None, 2), slice(0, 60, 2)])
def test_a_mask_that_neighbours_share_is_found_and_named(which):
    gone = mask(np.random.default_rng(2))
    gone[1::2][: len(gone[which])] = gone[which]
    says = "x: dependence: paths are not independent of each other (missing values: neighbouring paths"
    assert verdict(x=gone).headline[0].startswith(says)


def test_a_mask_that_two_series_share_is_found_and_named():
    rng = np.random.default_rng(3)
    one, other = mask(rng), mask(rng)
    assert "departs" not in verdict(x=one, y=other).counts
    mixed = np.where(np.arange(PATHS)[:, None] % 4 == 0, one, other)
    for shared in (one, mixed):
        first = verdict(x=one, y=shared).headline[0]
        assert first.startswith("x ~ y: dependence: paths or series hang together otherwise than stated (missing")
    row = next(r for r in verdict(x=one, y=one).rows if r.series == "x ~ y" and r.what.startswith("missing"))
    assert row.estimate == pytest.approx(1.0, abs=0.05)  # a correlation


def test_one_body_left_out_once_is_missing_together_in_both_series():
    head = {"procgen": 1, "seed": 7, "paths": 100, "time": {"steps": 100}, "shared": {"w": [LEFT_OUT]}}
    found = pg.validate(pg.render(head | {"series": {"x": [{"use": "w", "times": 2}], "y": [{"use": "w"}]}}))
    assert found.agrees is not False and not [row for row in found.rows if row.what.startswith("missing values: corr")]


def test_ages_are_those_of_a_loop():
    gone = np.random.default_rng(4).random((30, 8)) < 0.6
    expected, age = [np.full(8, 2)], np.full(8, 2)
    for row in gone:
        age = np.where(row, age + 1, 0)
        expected.append(age)
    np.testing.assert_array_equal(_ages(gone, np.full(8, 2)), expected)


def test_tiles_do_not_matter():
    term = build(spec("x")).series["x"].term
    term.drawn = False
    gone = mask(np.random.default_rng(5), 40, 200).T
    x = np.where(gone, np.nan, 0.0)

    def total(*cuts):
        both = GapSums(term), MaskSums()
        lanes = [each.lane(40) for each in both]
        for first, end in zip((0, *cuts), (*cuts, 200), strict=True):
            both[0].count(x[first:end], first, lanes[0])
            left, right, asked = beside(lanes[0].seen)
            both[1].join(left, right, first, lanes[1], asked)
        for each, lane in zip(both, lanes, strict=True):
            each.finish(lane)
        return both

    for whole, cut in zip(total(), total(64, 128), strict=True):
        np.testing.assert_array_equal(whole.sums, cut.sums)
    assert total()[1].sums[0, 0] == 200 * (40 - 3)  # the first path of a lane group has no neighbour


@pytest.mark.parametrize(("share", "steps"), [(0.1, 4_000), (0.02, 80_000), (0.4, 800)])
def test_tails_of_what_is_missing_together(share, steps):
    """Direct draws: p below a level as often as the level says, give or take; never much more often."""
    rng, draws = np.random.default_rng(6), 100_000
    v, p = share * (1 - share), []
    # of independent steps only the numbers of those at which both, one, the other or none are missing matter
    cells = [share * share, share * (1 - share), share * (1 - share), (1 - share) ** 2]
    counts = rng.multinomial(steps, cells, draws)
    totals = counts @ np.array([(1 - share) ** 2, -share * (1 - share), -share * (1 - share), share**2])
    sums = MaskSums()
    for value in np.unique(np.round(totals, 9)):
        fourth = (v * (1 - 3 * v)) ** 2 - 3 * v**4
        sums.sums[0] = steps * np.array([1, value / steps, v, v * v, (v * (1 - 2 * share)) ** 2, fourth])
        (row,) = sums.checks("x")
        p.append((value, row.p))
    values, found = np.array(p).T
    each = found[np.searchsorted(values, np.round(totals, 9))]
    for level in (1e-1, 1e-2, 1e-3, 1e-4):
        seen, expected = np.count_nonzero(each <= level), level * draws
        assert 0.5 * expected - 6 * np.sqrt(expected) < seen < 1.25 * expected + 6 * np.sqrt(expected)
