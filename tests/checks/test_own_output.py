"""What the package renders agrees with its own spec: laws by shapes by ways to store, at a small size.

The references are the specs themselves: a departure here is a false alarm. Each verdict is allowed one with
probability 1e-9, and the seed is fixed.
"""

import math

import numpy as np
import pytest
from scipy.stats import norm, uniform

from procgen.chance.laws import LAWS as LAWS_BY_NAME
from procgen.checks.scores import Scores
from procgen.checks.validate import validate
from procgen.ensemble import render
from procgen.ensemble.source import read_spec

FALSE_ALARM = 1e-9
LAWS = {  # without skew_normal: SciPy integrates its tail point by point, which takes longer than all others together
    "normal": "normal",
    "student_t": {"student_t": {"df": 5}},
    "skewed_t": {"skewed_t": {"df": 6, "skew": 0.5}},
    "ged": {"ged": {"shape": 1.3}},
    "laplace": "laplace",
    "logistic": "logistic",
    "uniform": "uniform",
    "gamma": {"gamma": {"shape": 1.5}},
    "lognormal": {"lognormal": {"sigma": 0.5}},
    "mixture": {"mixture": {"weight": 0.2, "ratio": 3}},
    "normal_mixture": {
        "normal_mixture": {"components": [{"weight": 0.3, "mean": 1, "sd": 1}, {"weight": 0.7, "sd": 2}]}
    },
}
SHAPES = {
    "white_noise": lambda law, sd: {"white_noise": {"sd": sd, "law": law}},
    "ar": lambda law, sd: {"ar": {"phi": 0.6, "sd": sd, "law": law}},
    "random_walk": lambda law, sd: {"random_walk": {"sd": sd, "start": 100, "law": law}},
    "integrate": lambda law, sd: {"integrate": [{"ar": {"phi": 0.4, "sd": sd, "law": law}}]},
    "garch": lambda law, sd: {"garch": {"sd": sd, "alpha": 0.1, "beta": 0.8, "law": law}},
}
STORES = {
    "float64": {},
    "float32": {"type": "float32"},
    "float32, 2 decimals": {"type": "float32", "decimals": 2},
    "2 decimals": {"decimals": 2},
    "int64": {"type": "int64"},
    "int64, fine": {"type": "int64"},
    "float64, coarse": {"decimals": 1},
}
SDS = {"int64, fine": 40.0, "float64, coarse": 0.03}


def verdict_of(entries, store, seed, paths=120, steps=80, false_alarm=FALSE_ALARM):
    raw = {
        "procgen": 1,
        "title": "Own output",
        "seed": seed,
        "paths": paths,
        "time": {"steps": steps},
        "series": {"x": {**store, "of": entries}},
    }
    return validate(render(read_spec(raw)), false_alarm=false_alarm)


def matrix():
    """Laws by shapes; the stores rotate along both, so that each shape meets them all.

    A garch's theory and a normal mixture's quantile are costly: one law in two has a garch, the mixture one shape.
    """
    stores = list(STORES)
    return [
        (law, shape, stores[(i + 2 * j) % len(stores)])
        for i, law in enumerate(LAWS)
        for j, shape in enumerate(SHAPES)
        if (shape != "garch" or i % 2 == 0) and (law != "normal_mixture" or shape == "ar")
    ]


@pytest.mark.parametrize(("law", "shape", "store"), matrix())
def test_own_output_never_departs(law, shape, store):
    entry = SHAPES[shape](LAWS[law], SDS.get(store, 1.0))
    verdict = verdict_of([{"constant": 0.3}, entry], STORES[store], seed=11)
    assert verdict.agrees is not False, verdict.headline


CONTRARY = {  # what used to depart: entries, store, paths, steps
    "uniform": ([{"white_noise": {"sd": 1, "law": "uniform"}}], {}, 300, 100),
    "walk, decimals": ([{"random_walk": {"sd": 1, "start": 10000}}], {"decimals": 2}, 1000, 100),
    "walk, float32": ([{"constant": 3}, {"random_walk": {"sd": 1, "start": 10000}}], {"type": "float32"}, 1000, 100),
    "walk, int64": ([{"random_walk": {"sd": 9, "start": 10000}}], {"type": "int64"}, 1000, 100),
    "integral, decimals": ([{"integrate": [{"ar": {"phi": 0.5, "sd": 1}}]}], {"decimals": 2}, 1000, 100),
    "float32 and decimals": ([{"white_noise": {"sd": 1}}], {"type": "float32", "decimals": 2}, 100, 100),
    "claims": (
        [{"exp": [{"constant": 0.7}, {"ar": {"phi": 0.7, "total_sd": 0.3}}]}], {"type": "int64"}, 8000, 20,
    ),
    "few whole numbers": ([{"constant": 0.3}, {"white_noise": {"sd": 0.2}}], {"type": "int64"}, 1000, 100),
    "few tenths": ([{"constant": 0.3}, {"white_noise": {"sd": 0.03}}], {"decimals": 1}, 1000, 100),
}  # fmt: skip


UNSEEN = {"claims", "few whole numbers", "few tenths"}  # cells so coarse that nothing about the spread can be judged


@pytest.mark.parametrize("case", CONTRARY)
def test_the_ends_of_laws_the_starts_of_walks_and_coarse_cells(case):
    entries, store, paths, steps = CONTRARY[case]
    verdict = verdict_of(entries, store, 6, paths, steps, false_alarm=1e-8)  # nine of them: 9e-8 of the suite's 1e-6
    assert verdict.agrees is (None if case in UNSEEN else True), verdict.text()
    assert any(row.outcome == "agrees" and row.what == "mean" for row in verdict.rows)


def test_rows_hidden_by_rounding_say_so():
    entries, store, paths, steps = CONTRARY["few whole numbers"]
    rows = verdict_of(entries, store, 6, paths, steps).rows
    note = "rounded to 1, too coarse against a standard deviation of 0.2"
    hidden = [row for row in rows if row.note == note]
    assert {"covariance", "averages over steps"} <= {row.what for row in hidden}
    assert all(row.outcome == "untestable" for row in hidden)
    mean = next(row for row in rows if row.what == "mean")
    # The mean of the rounded value is P(x > 1/2) + P(x > 3/2) - P(x < -1/2), by SciPy; the rest is below 1e-14.
    law = norm(0.3, 0.2)
    assert mean.theory == pytest.approx(law.sf(0.5) + law.sf(1.5) - law.cdf(-0.5), rel=1e-9)


def test_scores_of_a_bounded_law_are_exact_up_to_its_ends():
    root = math.sqrt(3)
    u = np.array([1e-12, 3e-6, 1e-4, 0.03, 0.5, 1 - 3e-6])
    z = (2 * u - 1) * root
    got = Scores(LAWS_BY_NAME["uniform"]()).normal_scores(z)
    assert got == pytest.approx(norm.ppf(uniform.cdf(z, -root, 2 * root)), abs=2e-6)
    scores = Scores(LAWS_BY_NAME["uniform"]())
    beyond = np.array([root + 1e-9, root + 2e-3, root - 2e-3])
    assert 4 < scores.normal_scores(beyond)[0] < 8
    assert scores.normal_scores(beyond)[1] == pytest.approx(scores.normal_scores(beyond)[2])  # mirrored
    assert scores.outside(beyond) == 1  # rounding put the first there, nothing of this law the second


def test_float32_far_from_zero_is_coarser_than_its_decimals():
    # At ten million float32 holds whole numbers alone (NumPy's spacing), which the two decimals do not tell.
    x = {"type": "float32", "decimals": 2, "of": [{"constant": 1e7}, {"white_noise": {"sd": 1.5}}]}
    spec = read_spec({"procgen": 1, "seed": 3, "paths": 1000, "time": {"steps": 100}, "series": {"x": x}})
    assert np.spacing(np.float32(1e7)) == 1
    verdict = validate(render(spec), false_alarm=FALSE_ALARM)
    assert verdict.agrees is True, verdict.headline
