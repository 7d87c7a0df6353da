"""States that are seen, as a `chain` or the revealed state of regimes: ranks, and stays by their length.

Seeds are fixed. True data are said to depart with probability at most 1e-8 each under other seeds; the departures lie
far beyond what a level of 1e-8 needs.
"""

import numpy as np
import pandas as pd
import pytest
from scipy.stats import nbinom

import procgen as pg
from procgen.terms.followed import follow
from procgen.terms.markov import States, Stay

FALSE_ALARM = 1e-8
TWO = ["up", "down"]


def chain(stages, mean=12, **more):
    lasts = {"up": {"mean": mean, "stages": stages}, "down": {"mean": mean / 2, "stages": stages}}
    return {"chain": {"states": TWO, "durations": lasts, **more}}


def regimes(stages, mean=12):
    wide = [{"white_noise": {"sd": 1}, "as": "wide"}]
    lasts = {"up": {"mean": mean, "stages": stages}, "down": {"mean": mean / 2, "stages": stages}}
    return {"regimes": {"branches": {"up": [{"white_noise": {"sd": 1}}], "down": wide}, "durations": lasts}}


def spec(term, paths, steps, seed=5):
    return {"procgen": 1, "seed": seed, "paths": paths, "time": {"steps": steps}, "series": {"x": [term]}}


def verdict(drawn, stated, paths=200, steps=300, seed=5, **more):
    table = pg.render(spec(drawn, paths, steps, seed)).to_pandas()
    return pg.validate(table, spec(stated, paths, steps, seed), false_alarm=FALSE_ALARM)


def test_chances_are_the_hazards_of_the_stays():
    """A stay of k stages lasts as many steps as k successes take: its hazard by SciPy's nbinom, from its first step."""
    values = {"transitions": None, "durations": {"up": Stay(6.0, 3), "down": Stay(4.0, 2)}, "start": "up"}
    up = States(values, TWO)
    lengths = nbinom.pmf(np.arange(40) - 3, 3, 3 / 6.0)
    hazard = lengths[1:] / (1.0 - np.cumsum(lengths)[:-1])  # of a stay's end after n = 1, 2, … steps
    steps = 12
    found = follow(up, np.zeros((steps + 1, 1)), None)
    np.testing.assert_allclose(found.chances[0, 1:, 0], 1.0 - hazard[:steps], atol=1e-12)
    np.testing.assert_array_equal(found.age[:, 0], np.arange(steps + 1))


def test_tiles_do_not_matter():
    up = States({"transitions": None, "durations": {"up": Stay(6.0, 3), "down": Stay(4.0)}, "start": "stationary"}, TWO)
    x = np.repeat(np.random.default_rng(1).integers(0, 2, (20, 5)), 3, axis=0).astype(float)
    whole = follow(up, x, None)
    first = follow(up, x[:23], None)
    second = follow(up, x[23:], first.carried)
    np.testing.assert_array_equal(np.concatenate([first.chances, second.chances], axis=1), whole.chances)
    np.testing.assert_array_equal(np.concatenate([first.age, second.age]), whole.age)


def test_what_cannot_happen_goes_on_from_there_and_what_is_no_state_does_not():
    sure = States({"transitions": None, "durations": {"up": Stay(3.0, 3), "down": Stay(3.0, 3)}, "start": "up"}, TWO)
    x = np.array([[0, 0], [1, 0.5], [1, 0], [1, 0], [0, 0]], float)
    chances = follow(sure, x, None).chances[0]
    assert chances[:, 0].tolist() == [1, 1, 0, 0, 1]  # after the first step up it must stay: it left all the same
    assert chances[:2, 1].tolist() == [1, 1] and np.isnan(chances[2:, 1]).all()


TRUE = {
    "memoryless": chain(1),
    "two stages": chain(2),
    "started": chain(3, start="down"),
    "three states": {
        "chain": {"states": ["a", "b", "c"], "transitions": [[0.9, 0.1, 0], [0, 0.5, 0.5], [0.3, 0.3, 0.4]]}
    },
}


@pytest.mark.parametrize("name", TRUE)
@pytest.mark.parametrize(("paths", "steps"), [(200, 300), (1, 20_000), (30, 64)])
def test_true_chains_agree(name, paths, steps):
    found = verdict(TRUE[name], TRUE[name], paths, steps)
    assert found.agrees is not False, found.text()
    assert sum(row.what.startswith("shocks: ") and row.outcome == "agrees" for row in found.rows) > 10


@pytest.mark.parametrize(("paths", "steps"), [(200, 300), (1, 20_000)])
def test_stays_of_another_law_are_found_by_their_length(paths, steps):
    """Two stages drawn as one: short stays end too often, long ones too seldom, their mean being the same."""
    found = verdict(chain(1), chain(2), paths, steps)
    rows = {row.what: row for row in found.rows if row.what.startswith("share: ")}
    early, late = rows["share: up after up, up to 6 steps"], rows["share: up after up, longer"]
    assert early.outcome == late.outcome == "departs", found.text()
    assert early.estimate < early.theory and late.estimate > late.theory
    assert found.headline[0].startswith("x: memory: ")


def test_stays_that_all_have_the_mean_length_are_found():
    """They go on as often as stated over all steps up to their mean; half of it tells them."""
    rng = np.random.default_rng(8)
    x = np.stack([np.tile(np.repeat([0, 1], [12, 6]), 25)[at : at + 300] for at in rng.integers(0, 18, 200)])
    paths, steps = np.indices(x.shape).reshape(2, -1)
    table = pd.DataFrame({"path": paths, "step": steps, "x": x.ravel()})
    found = pg.validate(table, spec(chain(1), 200, 300), false_alarm=FALSE_ALARM)
    assert found.headline[0].startswith("x: memory: lengths of stays are not as stated"), found.text()


def test_the_revealed_state_of_regimes_is_judged_so():
    drawn = pg.render(spec(regimes(1), 200, 300), reveal="all")
    found = pg.validate(drawn, spec(regimes(2), 200, 300), false_alarm=FALSE_ALARM)
    gone = {(row.series, row.what) for row in found.rows if row.outcome == "departs"}
    assert ("x.regimes.regime", "share: down after down, up to 3 steps") in gone, found.text()
    true = pg.validate(pg.render(spec(regimes(2), 100, 300), reveal="all"), false_alarm=FALSE_ALARM)
    assert true.agrees is not False
    assert ("x.regimes.regime", "share: up after up, longer") in {
        (row.series, row.what) for row in true.rows if row.outcome == "agrees"
    }


def test_another_share_is_found():
    assert verdict(chain(2, mean=13), chain(2)).agrees is False
