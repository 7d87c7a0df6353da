"""One number in many places of a continuous series: gaps filled with it, or an end at which values were cut off.

That chance makes no five of 100,000 doubles of such a law equal is the birthday problem: Feller (1968), ch. II.3.
"""

import math

import numpy as np
import pandas as pd
import pytest

from procgen.checks.filled import FILLED, _needed
from procgen.checks.validate import validate
from procgen.ensemble.source import read_spec
from tests.studies.departures import draw

PATHS, STEPS = 400, 100
RAW = {
    "procgen": 1,
    "seed": 11,
    "paths": PATHS,
    "time": {"every": "1h", "steps": STEPS},
    "series": {"x": [{"constant": 10}, {"ar": {"phi": 0.6, "sd": 2}}]},
}
SPEC = read_spec(RAW)
X = draw(SPEC)["x"]
SOME = np.random.default_rng(7).random(X.shape)


def table(x):
    path, step = np.divmod(np.arange(x.size), x.shape[1])
    return pd.DataFrame({"path": path, "step": step, "x": np.asarray(x).ravel()})


def judged(x, spec=SPEC):
    return validate(table(x), spec)


@pytest.mark.parametrize("share", [0.02, 0.005])
def test_gaps_filled_with_one_number_are_counted(share):
    filled = np.where(SOME < share, 12.3, X)
    count, (path, step) = np.count_nonzero(filled[:, 16:] == 12.3), np.argwhere(filled[:, 16:] == 12.3)[0]
    said = f"x: structure: {count:,} values are exactly 12.3; the first at path {path}, step {step + 16}"
    verdict = judged(filled)
    assert verdict.agrees is False and verdict.headline[0].startswith(said), verdict.text()


def test_values_cut_off_at_an_end_are_told_as_that():
    low, high = (float(np.quantile(X, share)) for share in (0.001, 0.998))
    one = judged(np.minimum(X, high)).headline[0]
    assert f"values are exactly the largest, {high}, as if cut off there" in one
    both = judged(np.clip(X, low, high)).headline[0]
    assert f"exactly the largest, {high} and " in both and f"exactly the smallest, {low}, as" in both


def outcome(x, spec=SPEC):
    return {row.what: row for row in judged(x, spec).rows}.get(FILLED)


def test_five_equal_numbers_are_no_chance_and_four_may_be():
    at = [(40 * k, 20 + k) for k in range(5)]
    x = X.copy()
    for path, step in at[:4]:
        x[path, step] = 9.5
    assert outcome(x).outcome == "agrees"
    x[at[4]] = 9.5
    assert outcome(x).outcome == "departs"


def test_what_other_checks_tell_is_left_to_them():
    stuck = X.copy()
    stuck[3, 40:60] = stuck[3, 40]
    copied = X.copy()
    copied[1:8] = copied[0]
    for x in (X, stuck, copied, np.round(X, 2), X.astype(np.float32), np.where(SOME < 0.01, 0.0, X)):
        assert outcome(x).outcome == "agrees"
    assert outcome(np.where(SOME < 0.5, 1.5, 2.5)).outcome == "agrees"  # no number is the exception
    far = np.abs(X - 10) > 10  # 4 sd: one that is out there by chance is not the mark
    marked = judged(np.where((SOME < 0.01) | far, -999.0, X))
    assert "as if it marked what is missing" in marked.headline[0]
    assert not any("exactly" in line for line in marked.headline)
    beside = judged(np.where(SOME < 0.01, -999.0, X)).headline[0]
    assert "values are exactly −999; the first at" in beside


def test_a_law_that_repeats_numbers_is_not_asked():
    counts = read_spec(RAW | {"series": {"x": [{"poisson": {"mean": 40}}]}})
    assert outcome(draw(counts)["x"], counts) is None
    coarse = read_spec(RAW | {"series": {"x": {"of": RAW["series"]["x"], "decimals": 1}}})
    assert outcome(np.round(X, 1), coarse).outcome == "agrees"
    start = read_spec(RAW | {"series": {"x": [{"random_walk": {"sd": 1, "start": 3}}]}})
    assert outcome(draw(start)["x"], start).outcome == "agrees"


def test_how_often_chance_repeats_a_number():
    """Groups of k among n that fall on one of 1/p cells: at most C(n, k) p^(k − 1)."""
    n, p = 100_000, 2.0**-24
    k = int(_needed(n, p))
    expected = [math.comb(n, j) * p ** (j - 1) for j in (k - 1, k)]
    assert expected[1] < 1e-12 < expected[0] and k > 5
    assert _needed(40_000, 1e-12) == 5 and _needed(40_000, 1e-4) == math.inf
