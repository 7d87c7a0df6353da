"""Numbers drawn by path as rows of one graph: the same bits as each path of its own spec, and no graph a path."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import solve_discrete_lyapunov

from procgen.chance.laws import LAWS
from procgen.chance.portable import cholesky
from procgen.spec.reader import read_raw
from procgen.terms import catalogue
from procgen.terms.by_path import run, varied_of
from procgen.terms.graph import Graph, build
from procgen.terms.rows import alike, each_path, row_in
from procgen.terms.run import Run
from procgen.terms.start import JointStart, Member, companion, decay_length, decay_lengths, stationary_cross, weigh

FIRST, PATHS, STEPS = 2, 8, 12


def drawn(low, high):
    return {"draw": {"uniform": [low, high]}, "over": "path"}


def lagged(by, entry):
    return {"lag": {"of": [entry], "by": by}}


STUDENT = {"student_t": {"df": 5}}
AR = {"phi": drawn(0.2, 0.9), "sd": 1.0}
GARCH = {"garch": {"sd": drawn(1, 2), "alpha": drawn(0.05, 0.15), "beta": drawn(0.5, 0.84)}}
BODIES = {
    "ar of three": [{"ar": {"phi": [drawn(-0.3, 0.5), 0.0, drawn(-0.4, 0.4)], "total_sd": drawn(1, 2)}}],
    "ar of few values": [{"ar": {"phi": {"draw": {"choice": [0.0, 0.5]}, "over": "path"}, "sd": 1.0}}],
    "arma far back": [lagged(5, {"arma": {"phi": drawn(0.1, 0.5), "theta": [drawn(0.1, 0.4), 0.2], "sd": 1.5}})],
    "integrated": [
        lagged(3, {"arima": {"d": 1, "phi": [drawn(0.1, 0.5), 0.0, drawn(-0.3, 0.3)], "theta": drawn(-0.3, 0.3),
                             "drift": drawn(-1, 1), "start": drawn(5, 9), "sd": drawn(1, 2)}})
    ],
    "integrated by season": [
        lagged(7, {"arima": {"d": 1, "theta": drawn(-0.4, 0.4), "seasonal": {"period": 4, "d": 1, "theta": -0.3},
                             "start": [1.0, drawn(2, 3), 3.0, 4.0, 5.0], "sd": 0.5}})
    ],
    "integrated of some zeros": [
        {"arima": {"d": 1, "phi": {"draw": {"choice": [0.0, 0.5]}, "over": "path"}, "sd": 1.0,
                   "seasonal": {"period": 3, "phi": [0.3, 0.0, 0.1]}}}
    ],
    "integrated, burning in": [
        lagged(2, {"arima": {"d": 2, "phi": drawn(0.1, 0.5), "theta": 0.2, "sd": drawn(1, 2), "law": STUDENT}})
    ],
    "integrated from a past": [
        {"arima": {"d": 1, "phi": drawn(0.1, 0.5), "sd": 1.0, "drift": drawn(0, 1), "before": {"x": [1.0, 3.0]}}}
    ],
    "differenced 0 times": [{"arima": {"d": 0, "phi": 0.5, "drift": drawn(0, 1), "sd": drawn(1, 2)}}],
    "arma": [{"arma": {"phi": [0.5, drawn(-0.3, 0.3)], "theta": 0.3, "total_sd": drawn(1, 3)}}],
    "ma not normal": [lagged(2, {"ma": {"theta": [drawn(0.1, 0.5), 0.2], "sd": drawn(1, 2), "law": STUDENT}})],
    "ar not normal": [{"ar": {"phi": [0.5, 0.2], "sd": drawn(1, 2), "law": STUDENT}}],
    "ar burning in": [lagged(3, {"ar": {"phi": [drawn(-0.3, 0.5), drawn(-0.4, 0.4)], "sd": 1.0, "law": STUDENT}})],
    "arma burning in": [{"arma": {"phi": drawn(0.1, 0.9), "theta": [drawn(0.1, 0.4), 0.2], "law": STUDENT, "sd": 1}}],
    "pulled burning in": [{"ornstein_uhlenbeck": {"rate": drawn(0.1, 2), "sd": drawn(1, 2), "law": STUDENT}}],
    "walk": [lagged(3, {"random_walk": {"sd": drawn(0.1, 1), "drift": drawn(-1, 1), "start": drawn(-3, 3)}})],
    "walk of garch": [{"random_walk": {"drift": drawn(0, 1), "shock": GARCH}}],
    "ar of garch": [lagged(2, {"ar": {"phi": 0.6, "shock": GARCH}})],
    "garch far back": [lagged(7, {"garch": {"omega": 0.1, "alpha": drawn(0.05, 0.1), "beta": drawn(0.1, 0.85)}})],
    "garch without variance": [
        {"garch": {"omega": 0.1, "alpha": drawn(0.1, 0.4), "beta": drawn(0.5, 0.65), "allow_infinite_variance": True}}
    ],
    "threshold": [
        lagged(3, {"gjr_garch": {"sd": drawn(1, 2), "alpha": drawn(0.05, 0.1), "gamma": drawn(0, 0.1), "beta": 0.7}})
    ],
    "threshold from a past": [
        {"gjr_garch": {"omega": drawn(0.1, 1), "alpha": 0.1, "gamma": drawn(0, 0.1), "beta": drawn(0.5, 0.7),
                       "before": {"variance": [2.0], "shocks": [-1.0]}}}
    ],
    "log variance": [
        lagged(3, {"egarch": {"scale": drawn(1, 2), "alpha": drawn(0.1, 0.3), "gamma": drawn(-0.1, 0.1),
                              "beta": drawn(0.5, 0.9)}})
    ],
    "log variance that may forget": [
        {"egarch": {"omega": drawn(-1, 1), "alpha": 0.1, "gamma": 0.1, "law": STUDENT, "allow_infinite_variance": True,
                    "beta": {"draw": {"choice": [0.0, 0.3, 0.6]}, "over": "path"}}}
    ],
    "log variance from a past": [
        {"egarch": {"scale": drawn(1, 2), "alpha": drawn(0.1, 0.3), "gamma": 0.1, "beta": drawn(0.1, 0.9),
                    "before": {"variance": [2.0], "shocks": [-1.0]}}}
    ],
    "volatility": [lagged(3, {"stochastic_volatility": {"sd": drawn(1, 2), "phi": drawn(-0.5, 0.9), "eta": 0.3}})],
    "volatility with leverage": [
        lagged(2, {"stochastic_volatility": {"scale": drawn(1, 2), "phi": 0.6, "eta": drawn(0.1, 0.3), "rho": -0.6}})
    ],
    "ma of volatility": [
        {"ma": {"theta": 0.5, "shock": {"stochastic_volatility": {"sd": drawn(1, 2), "phi": drawn(0, 0.9),
                                                                  "eta": drawn(0.1, 0.3)}}}}
    ],
    "ar with a garch shock": [lagged(3, {"ar": {"phi": drawn(0.1, 0.9), "shock": GARCH}})],
    "arma with a shock of one threshold": [
        {"arma": {"phi": [drawn(0.1, 0.5), drawn(-0.3, 0.3)], "theta": [0.4, 0.2],
                  "shock": {"gjr_garch": {"sd": 1.0, "alpha": 0.05, "gamma": 0.1, "beta": 0.6}}}}
    ],
    "pulled with a shock of a past": [
        {"ornstein_uhlenbeck": {"rate": drawn(0.5, 2), "mean": 1.0,
                                "shock": {"garch": {"omega": 0.1, "alpha": 0.1, "beta": drawn(0.5, 0.8)}}}}
    ],
    "level": [lagged(3, {"local_level": {"level_sd": drawn(0.1, 1), "noise_sd": drawn(0, 1), "start": drawn(5, 9)}})],
    "level, noise on some": [
        {"local_level": {"level_sd": 0.3, "noise_sd": {"draw": {"choice": [0.0, 0.5]}, "over": "path"}}}
    ],
    "trending level": [
        lagged(3, {"local_linear_trend": {"level_sd": drawn(0.1, 1), "slope_sd": 0.1, "noise_sd": drawn(0, 1),
                                          "start": drawn(5, 9), "slope": drawn(-1, 1)}})
    ],
    "smooth trend": [{"local_linear_trend": {"slope_sd": drawn(0.1, 1), "start": 3.0}}],
    "cycle": [lagged(3, {"stochastic_cycle": {"rho": drawn(0.5, 0.99), "period": 7.5, "sd": drawn(1, 2)}})],
    "whole cycle": [{"stochastic_cycle": {"rho": drawn(0.5, 0.99), "period": 5.0, "total_sd": drawn(1, 2)}}],
    "counts": [lagged(3, {"poisson": {"mean": drawn(0.5, 40)}})],
    "counts of a body": [
        {"poisson": {"mean": drawn(0.5, 60), "of": [{"ar": {"phi": 0.5, "total_sd": drawn(0.1, 0.5)}}]}},
        {"poisson": {"mean": drawn(0.5, 9), "of": [{"trend": {"slope": 0.1}}]}, "as": "known"},
    ],
    "wide counts": [
        {"negative_binomial": {"mean": drawn(0.5, 9), "size": 1.5}},
        {"negative_binomial": {"mean": drawn(0.5, 60), "size": 4.0, "of": [{"white_noise": {"sd": 0.3}}]}, "as": "y"},
    ],
    "counts with memory": [lagged(3, {"inar": {"alpha": drawn(0, 0.95), "mean": drawn(0.5, 20)}})],
    "counts with one memory": [{"inar": {"alpha": 0.6, "mean": drawn(0.5, 90)}}],
    "wide counts with memory": [{"inar": {"alpha": drawn(0.1, 0.9), "mean": 4.0, "size": 2.0}}],
    "many counts with memory": [{"inar": {"alpha": drawn(0.1, 0.9), "mean": drawn(20, 90)}}],
    "arch": [{"arch": {"omega": drawn(0.1, 1), "alpha": drawn(0.1, 0.8)}}],
    "spread": [{"white_noise": {"spread": drawn(1, 2), "law": {"stable": {"alpha": 1.5}}}}],
    "pulled": [lagged(3, {"ornstein_uhlenbeck": {"rate": drawn(0.01, 2), "mean": drawn(-2, 2), "total_sd": 1.5}})],
    "pulled from a past": [
        {"ornstein_uhlenbeck": {"rate": drawn(0.01, 2), "mean": 2.0, "sd": drawn(1, 2), "before": {"x": [3.0]}}}
    ],
    "levels": [
        lagged(2, {"trend": {"level": drawn(0, 1), "slope": drawn(0, 1), "bends": [{"at": 3, "slope": drawn(-1, 1)}]}}),
        {"constant": drawn(-1, 1), "times": drawn(1, 2)},
        lagged(2, {"as": "shape",
                   "seasonal": {"period": 6, "profile": [drawn(1, 2), 2.0, drawn(3, 4)], "centre": "mean"}}),
        {"seasonal": {"period": 7, "harmonics": [{"amplitude": drawn(1, 2)}, {"amplitude": 0.5}]}, "times": 0.5},
    ],
    "within others": [
        {"exp": [{"ar": {"phi": drawn(0.2, 0.9), "total_sd": 0.3}}]},
        {"product": [{"constant": drawn(1, 2)}, {"white_noise": {"sd": drawn(1, 2)}}]},
        {"regimes": {"branches": {"a": [{"ma": {"theta": drawn(0.2, 0.9), "sd": 1}}], "b": [{"trend": {"level": 4}}]},
                     "durations": {"a": 5.0, "b": 3.0}}},
    ],
}  # fmt: skip
TIED = {
    "linear": ({"ar": AR}, {"arma": {"phi": 0.3, "theta": drawn(0.1, 0.5), "sd": 2.0}}),
    "integrated": ({"arima": {"d": 1, "phi": drawn(0.1, 0.5), "sd": drawn(1, 2)}}, {"ar": AR}),
    "far back": (lagged(4, {"ar": AR}), {"ar": {"phi": [0.3, 0.2], "sd": 2.0}}),
    "garch": (GARCH, {"white_noise": {"sd": drawn(1, 2)}}),
}  # fmt: skip


def assert_as_alone(raw):
    graph = build(read_raw({"seed": 3, "paths": 20, "time": {"steps": STEPS}, **raw}, catalogue(), LAWS))
    runner = run(graph, FIRST, PATHS)
    tiles = [runner.tile(5), runner.tile(STEPS - 5)]
    assert runner.together
    rows = varied_of(graph).rows(FIRST, PATHS)
    for p in range(PATHS):
        own = Graph(varied_of(graph).at({key: float(row[p]) for key, row in rows.items()}))
        alone = Run(own, FIRST + p, 1).tile(STEPS)
        for name in raw["series"]:
            assert np.array_equal(np.concatenate([tile[name][:, p] for tile in tiles]), alone[name][:, 0]), (name, p)


@pytest.mark.parametrize("name", BODIES)
def test_rows_give_the_bits_of_each_path_alone(name):
    assert_as_alone({"series": {"x": BODIES[name]}})


@pytest.mark.parametrize("name", TIED)
def test_rows_with_correlated_shocks(name):
    first, second = TIED[name]
    names = ["x.ar" if "lag" in first else f"x.{next(iter(first))}", f"y.{next(iter(second))}"]
    correlation = {"names": names, "matrix": [[1, -0.7], [-0.7, 1]]}
    assert_as_alone({"series": {"x": [first], "y": [second]}, "correlation": correlation})


def test_lengths_of_burn_ins_are_those_of_each_path():
    rates = np.concatenate([np.linspace(-0.99, 0.999, 501), [0.0, 1e-13, 1e-12, 2e-12, 1e-6, 0.9999]])
    lengths = [decay_length(np.array([[rate]])) for rate in rates]
    assert decay_lengths(rates).tolist() == lengths
    assert max(lengths) > 250_000 and min(lengths) == 1
    with pytest.raises(ValueError, match="524,288"):
        decay_lengths(np.array([0.5, 0.99999]))


def test_one_graph_is_made_for_all_paths(monkeypatch):
    raw = {"seed": 3, "paths": 500, "time": {"steps": 3}, "series": {"x": BODIES["arma"]}}
    graph, made = build(read_raw(raw, catalogue(), LAWS)), []
    monkeypatch.setattr(Graph, "_plan", lambda self, plan=Graph._plan: (made.append(self), plan(self))[1])
    assert run(graph, 0, 500).tile(3)["x"].shape == (3, 500)
    assert len(made) == 1


@pytest.mark.parametrize(
    "entry",
    [
        {"stochastic_volatility": {"sd": 1.0, "phi": drawn(0.1, 0.9), "eta": 0.3, "rho": -0.5}},
        {"stochastic_volatility": {"sd": 1.0, "phi": 0.5, "eta": 0.3, "rho": drawn(-0.5, 0.5)}},
        {"ar": {"phi": drawn(0.1, 0.9), "shock": {"stochastic_volatility": {"sd": 1.0, "phi": 0.5, "eta": 0.3,
                                                                             "rho": -0.5}}}},
    ],
)
def test_a_term_that_begins_path_by_path_still_does(entry):
    raw = {"seed": 3, "paths": 4, "time": {"steps": 3}, "series": {"x": [entry]}}
    graph = build(read_raw(raw, catalogue(), LAWS))
    assert not run(graph, 0, 4).together


def test_a_factor_of_many_covariances_is_that_of_each():
    a = np.random.default_rng(1).normal(size=(6, 3, 3))
    s = a @ np.swapaxes(a, 1, 2)
    s[0], s[1, :, 2], s[1, 2, :] = 1.0, 0.0, 0.0  # one of rank 1, and one with a part that does not move
    factors = cholesky(s)
    assert np.array_equal(factors, np.array([cholesky(one) for one in s]))
    assert np.allclose(factors @ np.swapaxes(factors, 1, 2), s)
    with pytest.raises(ValueError, match="positive semidefinite"):
        cholesky(np.array([np.eye(2), -np.eye(2)]))


def test_stationary_covariances_of_many_paths_solve_their_equation():
    """Outside source: scipy.linalg.solve_discrete_lyapunov, for each path."""
    first, second = np.array([0.2, 0.6, 0.9]), np.array([0.1, 0.2, -0.3])
    a, b = companion((first, second), (np.full(3, 0.4),), 2, 1)
    q = np.broadcast_to(b[:, None] * b[None, :], a.shape)
    for own, found in zip(a, stationary_cross(a, q, a), strict=True):
        assert np.allclose(found, solve_discrete_lyapunov(own, q[0]), rtol=1e-10)


def test_a_weight_of_0_on_some_paths_is_passed_over_there():
    start = JointStart([Member((np.array([0.5, 0.0]),), (), np.array([1.0, 2.0]))], np.ones((1, 1)))
    assert start.factor.shape == (2, 1, 1)
    z = [np.array([5.0, 1.0]), np.array([2.0, 3.0])]
    (found,) = weigh(np.array([[[0.0, 0.5]], [[2.0, 0.0]]]), z)
    assert found.tolist() == [1.0, 2.0]


def test_numbers_beside_rows_become_rows():
    row = np.array([1.0, 2.0])
    assert [part.tolist() for part in alike((row, 3.0))] == [[1.0, 2.0], [3.0, 3.0]]
    assert alike((1.0, 2.0)) == (1.0, 2.0)
    assert row_in({"a": ((1.0, row),)}) == 2 and row_in((1.0, "x")) == 0
    terms = each_path(catalogue()["constant"]({"level": row}))
    assert [term.level for term in terms] == [1.0, 2.0]
