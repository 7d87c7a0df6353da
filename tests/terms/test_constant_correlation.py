"""Garch series with correlated shocks: constant conditional correlations, Bollerslev (1990), Rev. Econ. Stat. 72."""

from __future__ import annotations

import numpy as np
import pytest
from arch.univariate import GARCH

import procgen as pg
from tests.theory.specs import theory_of

from .helpers import draw, graph_of

X = "garch: {omega: 0.05, alpha: 0.1, beta: 0.8, before: {variance: 1, shocks: 1}}"
Y = "garch: {omega: 0.2, alpha: 0.2, beta: 0.5, before: {variance: 4, shocks: -2}}"


def test_the_conditional_covariance_matrix_is_d_r_d():
    """Variances by arch's own recursion; the shocks divided by them have the stated correlation, at 7 errors."""
    graph = graph_of(f"  x: {{{X}}}\n  y: {{{Y}}}\n  v: {{use: y.garch.variance}}",
                     rest="correlation: {between: [x.garch, y.garch], value: 0.6}")  # fmt: skip
    found = draw(graph, 0, 4096, [40])
    alone = draw(graph_of(f"  x: {{{X}}}"), 0, 4096, [40])["x"]
    assert np.array_equal(found["x"], alone)  # it leads
    shocks = {}
    for name, parameters, first in (("x", (0.05, 0.1, 0.8), 0.95), ("y", (0.2, 0.2, 0.5), 3.0)):
        h = np.empty_like(found[name])
        for path in range(4096):
            bounds = np.array([[1e-12, 1e12]] * 40)
            e = np.ascontiguousarray(found[name][:, path])
            backcast = (first - parameters[0]) / (parameters[1] + parameters[2])  # what makes h[0] the stated one
            GARCH(1, 0, 1).compute_variance(np.array(parameters), e, h_of := np.empty(40), backcast, bounds)
            h[:, path] = h_of
        shocks[name] = found[name] / np.sqrt(h)
        if name == "y":
            np.testing.assert_allclose(found["v"], h, rtol=1e-9)
    products = shocks["x"] * shocks["y"]
    assert abs(products.mean() - 0.6) < 7 * np.sqrt((1 + 0.36) / products.size)
    by_step = products.mean(axis=1)  # the same at every step: 40 of them at 7 errors
    assert np.abs(by_step - 0.6).max() < 7 * np.sqrt((1 + 0.36) / 4096)


def spec(value, second=0.11):
    garch = {"sd": 0.62, "alpha": second, "beta": 0.8, "law": {"student_t": {"df": 7}}}
    series = {"x": [{"garch": {"sd": 0.45, "alpha": 0.06, "beta": 0.85}}], "y": [{"garch": garch}]}
    both = [{"between": ["x.garch", "y.garch"], "value": value}]
    raw = {"procgen": 1, "seed": 41, "paths": 1000, "time": {"steps": 600}, "series": series, "correlation": both}
    return pg.load(raw)


def test_theory_has_no_covariance_and_says_why():
    th = pg.theory(spec(0.4))
    cross = th.cross("x", "y")
    assert cross.covariance(5, 5) is None
    assert "the mean product of their conditional standard deviations" in cross.reason()
    assert cross.covariance(6, 5) is None
    (pair,) = th.correlated
    assert pair.normals == 0.4 and pair.values is None and "heteroskedastic" in pair.reason
    assert th["x"].variance(3) == pytest.approx(0.45**2) and th["y"].variance(3) == pytest.approx(0.62**2)


def test_uncorrelated_ones_are_independent():
    th = theory_of({n: [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}] for n in ("x", "y")})
    assert th.cross("x", "y").covariance(5, 5) == 0.0


def test_the_correlation_is_judged_by_the_shocks():
    """Where moments are silent: 0.40 agrees, and 0.42 drawn in its place is found, and named."""
    verdict = pg.validate(pg.render(spec(0.4)), false_alarm=1e-7)
    rows = verdict.checks[verdict.checks.series == "x ~ y"]
    same = rows[rows.probe == "same step"]
    assert verdict.agrees and same.theory.tolist() == [0.4] and same.outcome.tolist() == ["agrees"]
    (moments,) = rows[rows.what == "covariance between series"].itertuples()
    assert moments.outcome == "untestable" and "which is not known" in moments.note
    other = pg.validate(pg.render(spec(0.42)).to_pandas(), spec(0.4))
    worst = other.checks.sort_values("p").iloc[0]
    assert other.agrees is False and (worst.series, worst.what) == ("x ~ y", "shocks: correlation between series")
