"""The covariance of the values as drawn, by impulses through the value code, against the theory."""

from __future__ import annotations

import numpy as np
import pytest

from procgen.theory import theory

from .helpers import graph_of, jacobian

STEPS = 24
CASES = {
    "ar1": "  x: {ar: {phi: 0.8, sd: 2}}",
    "ar3": "  x: {ar: {phi: [0.5, -0.3, 0.25], total_sd: 2}}",
    "near a unit root": "  x: {ar: {phi: [1.2, -0.21], sd: 1}}",
    "ma2": "  x: {ma: {theta: [0.4, -0.7], sd: 2}}",
    "arma32": "  x: {arma: {phi: [0.5, -0.2, 0.1], theta: [0.4, 0.3], sd: 2}}",
    "arma13": "  x: {arma: {phi: 0.9, theta: [0.4, 0.3, -0.2], sd: 2}}",
    "common factor": "  x: {arma: {phi: 0.5, theta: -0.5, sd: 1}}",
    "common factor, deep": "  x: {lag: {of: [{arma: {phi: [0.9, -0.2], theta: [-0.9, 0.2, 0.1], sd: 1}}], by: 8}}",
    "zero coefficients": "  x: {arma: {phi: [0, 0, 0.5], theta: [0, 0.3], sd: 1}}",
    "not invertible": "  x: {arma: {phi: 0.3, theta: [-1, 2], sd: 1}}",
    "burnt in": "  x: {arma: {phi: [0.3, 0.2], theta: [0.4, 0.1], sd: 2, law: laplace}}",
    "burnt in, lagged": "  x: {lag: {of: [{ar: {phi: 0.5, sd: 1, law: {student_t: {df: 4}}}}], by: 3}}",
    "moving average of uniforms": "  x: {ma: {theta: [0.4, 0.1], sd: 2, law: uniform}}",
    "walk": "  x: {random_walk: {sd: 2, drift: 1, start: 5}}",
    "left from a past": "  x: {arma: {phi: [1.1, -0.2], theta: 0.4, sd: 1, before: {x: [1, 2], shocks: [0.3]}}}",
    "walk from a past": "  x: {random_walk: {sd: 2, before: {x: [10]}}}",
    "local linear trend": "  x: [{integrate: [{random_walk: {sd: 0.3}}, {white_noise: {sd: 1}, as: level}]},"
    " {white_noise: {sd: 2}}]",
    "arima": "  x: {integrate: {of: [{arma: {phi: 0.5, theta: 0.4, sd: 1}}], start: 9}}",
    "lag of ar": "  x: {lag: {of: [{ar: {phi: [0.5, 0.2], sd: 1}}], by: 5}}",
    "lag of arma": "  x: {lag: {of: [{arma: {phi: 0.5, theta: [0.2, 0.4], sd: 1}}], by: 6}}",
    "lag of walk": "  x: {lag: {of: [{random_walk: {sd: 1}}], by: 5}}",
    "difference of walk": "  x: {difference: {of: [{random_walk: {sd: 1, drift: 2}}], by: 3}}",
    "difference of an integral": "  x: {difference: {of: [{integrate: [{ma: {theta: 0.3, sd: 1}}]}], by: 2, order: 2}}",
    "lag of an integral": "  x: {lag: {of: [{integrate: [{ar: {phi: 0.5, sd: 1}}]}], by: 3}}",
    "long memory": "  x: {arfima: {d: 0.4, sd: 2}}",
    "long memory, filtered": "  x: {arfima: {d: 0.3, phi: [0.5, 0.2], theta: 0.4, total_sd: 2}}",
    "rough": "  x: {arfima: {d: -0.45, theta: [0.3, -0.2], sd: 1}}",
    "fractional Gaussian noise": "  x: {fractional_gaussian_noise: {hurst: 0.8, sd: 3}}",
    "two series sharing": "  x: [{use: w, times: 2}, {white_noise: {sd: 1}}]\n  y: {lag: {of: [{use: w}], by: 4}}",
    "lead and lag of oneself": "  x: [{use: w}, {lag: {of: [{use: w}], by: 1}, times: -0.5}]\n  y: {use: w}",
}
SHARED = {"two series sharing", "lead and lag of oneself"}
CORRELATED = {
    "walks": ("  x: {random_walk: {sd: 1}}\n  y: {random_walk: {sd: 2}}", "random_walk"),
    "ars": ("  x: {ar: {phi: 0.9, sd: 1}}\n  y: {ar: {phi: [0.2, 0.3], sd: 2}}", "ar"),
    "armas": (
        "  x: {arma: {phi: 0.9, theta: 0.5, sd: 1}}\n  y: {arma: {phi: [0.2, 0.3], theta: [0.1, 0.6], sd: 2}}",
        "arma",
    ),
    "lagged armas": (
        "  x: {lag: {of: [{arma: {phi: 0.9, theta: 0.5, sd: 1}}], by: 4}}\n"
        "  y: {lag: {of: [{arma: {phi: [0.2, 0.3], theta: [0.1, 0.6], sd: 2}}], by: 2}}",
        "arma",
    ),
    "arma and noise before": (
        "  x: {ar: {phi: 0.9, sd: 1}, as: e}\n  y: {lag: {of: [{white_noise: {sd: 2}, as: e}], by: 3}}",
        "e",
    ),
    "ma and ar": ("  x: {ma: {theta: [0.4, 0.3], sd: 1}, as: e}\n  y: {ar: {phi: 0.7, sd: 1}, as: e}", "e"),
}


def compare(graph, monkeypatch):
    drawn = jacobian(graph, STEPS, monkeypatch)
    known = theory(graph.spec, graph)
    t, s = (a.ravel() for a in np.meshgrid(np.arange(STEPS), np.arange(STEPS)))
    for a in drawn:
        for b in drawn:
            exact = (drawn[a] @ drawn[b].T)[t, s]
            said = known.cross(a, b).covariance(t, s) if a != b else known[a].covariance(t, s)
            scale = max(1e-300, float(np.max(np.abs(exact))))
            np.testing.assert_allclose(said, exact, rtol=1e-9, atol=1e-11 * scale)


@pytest.mark.parametrize("name", CASES)
def test_covariance_of_what_is_drawn(name, monkeypatch):
    rest = "shared:\n  w: {ar: {phi: [0.5, 0.3], sd: 1}}" if name in SHARED else ""
    compare(graph_of(CASES[name], steps=STEPS, rest=rest), monkeypatch)


@pytest.mark.parametrize("name", CORRELATED)
def test_correlated_shocks_start_jointly(name, monkeypatch):
    series, label = CORRELATED[name]
    rest = f"correlation:\n  - {{between: [x.{label}, y.{label}], value: -0.6}}"
    compare(graph_of(series, steps=STEPS, rest=rest), monkeypatch)
