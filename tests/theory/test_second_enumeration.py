"""Moments up to the fourth, at every pair of the first steps, against all sequences of shocks through the value code.

Means, covariances and covariances of squares are exact on both sides but for rounding: 1e-11 of their size is allowed.
"""

from __future__ import annotations

import numpy as np
import pytest

from procgen.theory import theory

from .enumeration import every_path, graph_of

PAST = "before: {variance: [2, 0.5], shocks: [1, -0.7]}"
MOVES = "transitions: [[0.75, 0.25], [0.25, 0.75]]"  # quarters, and equal shares: a draw of 4 points is exact

# kind (and what is special): body, equally likely points of a draw, steps, whether squares have a theory
CASES = {
    "white_noise": ("{white_noise: {sd: 2, law: skewed}}", 4, 4, True),
    "ar": ("{ar: {phi: [0.5, 0.2], sd: 2, law: skewed, before: {x: [1, 2]}}}", 4, 6, True),
    "ar, explosive": ("{ar: {phi: [1.5, 0.2], sd: 2, law: skewed, before: {x: [1, 2]}}}", 4, 6, True),
    "ma": ("{ma: {theta: [0.5, -0.2], sd: 2, law: skewed}}", 4, 6, True),
    "ma, before": ("{ma: {theta: [0.5, -0.2], sd: 2, law: quartet, before: {shocks: [1, -2]}}}", 4, 6, True),
    "arma": ("{arma: {phi: 0.5, theta: [0.4, 2], sd: 2, law: skewed, before: {x: 3, shocks: [-2, 1]}}}", 4, 6, True),
    "ornstein_uhlenbeck": (
        "{ornstein_uhlenbeck: {rate: 0.2, mean: 1, sd: 2, law: skewed, before: {x: 5}}}", 4, 5, True),
    "arima": (
        "{arima: {phi: 0.5, d: 1, theta: -0.4, seasonal: {period: 2, d: 1, theta: -0.3}, sd: 1, law: skewed, "
        "drift: 0.1, before: {x: [1, 2, 3, 4, 2, 3, 2, 4], shocks: [1, 0.5, -1]}}}", 4, 6, True),
    "arima, start": ("{arima: {d: 2, theta: -0.4, sd: 1, law: skewed, start: 5}}", 4, 6, True),
    "random_walk": ("{random_walk: {sd: 2, drift: 0.5, start: 3, law: skewed}}", 4, 6, True),
    "seasonal_random_walk": (
        "{seasonal_random_walk: {period: 3, sd: 0.3, start: [5, -2, 1], law: skewed}}", 4, 7, True),
    "seasonal_random_walk, dummy": (
        "{seasonal_random_walk: {period: 3, form: dummy, sd: 0.3, start: [5, -2, -3], law: skewed}}", 4, 7, True),
    "garch": (f"{{garch: {{omega: 1, alpha: 0.2, beta: 0.5, law: quartet, {PAST}}}}}", 4, 6, True),
    "garch, (2,2)": (
        f"{{garch: {{omega: 1, alpha: [0.2, 0.1], beta: [0.3, 0.2], law: quartet, {PAST}}}}}", 4, 6, True),
    "garch, integrated": (f"{{garch: {{omega: 1, alpha: 0.7, beta: 0.5, law: skewed, {PAST}}}}}", 4, 6, True),
    "garch, in an arma": (
        "{arma: {phi: 0.5, theta: 0.4, before: {x: 3, shocks: [-2]}, "
        f"shock: {{garch: {{omega: 1, alpha: 0.2, beta: 0.5, law: quartet, {PAST}}}}}}}}}", 4, 6, True),
    "garch, in a walk": (
        f"{{random_walk: {{shock: {{garch: {{omega: 1, alpha: 0.3, law: coin, {PAST}}}}}}}}}", 2, 9, True),
    "arch": (f"{{arch: {{omega: 1, alpha: [0.2, 0.3], law: quartet, {PAST}}}}}", 4, 6, True),
    "gjr_garch": (
        f"{{gjr_garch: {{omega: 1, alpha: 0.2, gamma: 0.3, beta: 0.4, law: skewed, {PAST}}}}}", 4, 6, True),
    "egarch": (f"{{egarch: {{scale: 1, alpha: 0.2, gamma: -0.1, beta: 0.7, law: skewed, {PAST}}}}}", 4, 6, True),
    "switching_noise": (f"{{switching_noise: {{sd: {{a: 1, b: 3}}, law: quartet, {MOVES}}}}}", 4, 4, True),
    "switching_noise, filtered": (
        f"{{ma: {{theta: 0.5, shock: {{switching_noise: {{sd: {{a: 1, b: 3}}, law: quartet, {MOVES}}}}}}}}}",
        4, 3, True),
    "chain": (f"{{chain: {{states: [a, b], {MOVES}}}}}", 4, 6, True),
    "chain, start": (
        "{chain: {states: [a, b, c], transitions: [[0.5, 0.25, 0.25], [0.25, 0.75, 0], [0, 0.5, 0.5]], start: b}}",
        4, 6, True),
    "flag": ("{flag: {share: 0.5, stay: 4}}", 4, 6, True),
    "regimes": (
        "{regimes: {branches: {a: [{constant: 1}, {white_noise: {sd: 1, law: skewed}}], b: [{trend: {level: 3}}]}, "
        f"{MOVES}}}}}", 4, 4, True),
    "regimes, start": (
        "{regimes: {branches: {a: [{random_walk: {sd: 1, law: skewed}}], b: [{trend: {level: 3, slope: 1}}]}, "
        f"{MOVES}, start: b}}}}", 4, 3, True),
    "product": (
        "{product: [{random_walk: {sd: 1, law: skewed, start: 2}}, {white_noise: {sd: 2, law: skewed}}]}", 4, 4, True),
    "power": ("{power: {of: [{random_walk: {sd: 1, law: skewed, start: 2}}], exponent: 2}}", 4, 6, False),
    "integrate": ("{integrate: {of: [{ar: {phi: 0.5, sd: 1, law: skewed, before: {x: 1}}}], start: 2}}", 4, 6, True),
    "integrate, of a product": (
        "{integrate: {of: [{product: [{ar: {phi: 0.5, sd: 1, law: coin, before: {x: 1}}}, "
        "{white_noise: {sd: 1, law: coin}}]}], start: 2}}", 2, 6, False),
    "difference": ("{difference: {of: [{random_walk: {sd: 1, law: skewed}}], by: 2, order: 2}}", 4, 4, True),
    "lag": ("{lag: {of: [{ar: {phi: [0.5, 0.2], sd: 2, law: skewed, before: {x: [1, 2]}}}], by: 2}}", 4, 7, True),
    "rolling_mean": ("{rolling_mean: {of: [{ma: {theta: 0.5, sd: 1, law: skewed}}], over: 3}}", 4, 5, True),
    "schedule": (
        "{schedule: {of: [{ar: {phi: 0.5, sd: 1, law: skewed, before: {x: 1}}}], until: 2, "
        "then: [{white_noise: {sd: 1, law: quartet}}, {constant: 2}], fade: 3}}", 4, 4, True),
    "hold": ("{hold: {of: [{random_walk: {sd: 1, law: skewed, start: 2}}], every: 3}}", 4, 8, False),
    "sum": (
        "[{sum: [{white_noise: {sd: 1, law: coin}}, {constant: 5}]}, {random_walk: {sd: 1, law: coin}}]", 2, 6, True),
    "use": (
        "[{use: y, times: 2}, {white_noise: {sd: 1, law: skewed}}]\n"
        "  y: {ar: {phi: 0.5, sd: 1, law: quartet, before: {x: 1}}}", 4, 4, True),
}  # fmt: skip

DERIVED = {name.partition(",")[0]: "test_moments_over_all_sequences" for name in CASES}


@pytest.mark.parametrize("name", CASES)
def test_moments_over_all_sequences(name, monkeypatch):
    body, base, steps, squares = CASES[name]
    graph = graph_of(f"  x: {body}", steps)
    values = every_path(graph, steps, base, monkeypatch)["x"]
    x, t = theory(graph.spec, graph)["x"], np.arange(steps)
    assert agree(x.mean(t), values.mean(axis=1), size=np.abs(values).max())
    centred = values - values.mean(axis=1, keepdims=True)
    assert agree(x.covariance(t[:, None], t), products(centred))
    squared = centred**2 - (centred**2).mean(axis=1, keepdims=True)
    exact = products(squared)
    for k in t:
        found = x.autocovariance_of_squares(t[: steps - k], k)
        assert (found is not None) == squares, x.reason("autocovariance_of_squares")
        assert found is None or agree(found, exact[k:, k], size=np.abs(exact).max())
    if squares:
        last = exact[-1, -1] / products(centred)[-1, -1] ** 2 - 2.0
        assert x.excess_kurtosis_at(steps - 1) == pytest.approx(last, rel=1e-10, abs=1e-10)


def test_a_wrong_coefficient_is_seen(monkeypatch):
    """The same comparison with an alpha that is one part in a million off."""
    body = "{{garch: {{omega: 1, alpha: {}, beta: 0.5, law: quartet, before: {{variance: 2, shocks: 1}}}}}}"
    drawn, stated = (graph_of(f"  x: {body.format(a)}", 4) for a in (0.2, 0.2000002))
    values = every_path(drawn, 4, 4, monkeypatch)["x"]
    assert not agree(theory(stated.spec, stated)["x"].variance(np.arange(4)), (values**2).mean(axis=1))


PAIRS = {
    "sharing": (
        "  x: [{use: y, times: 2}, {white_noise: {sd: 1, law: skewed}}]\n"
        "  y: {ar: {phi: 0.5, sd: 1, law: quartet, before: {x: 1}}}", 4, 4),
    "a product and its factor": (
        "  x: {product: [{use: y}, {use: y}]}\n  y: {random_walk: {sd: 1, law: skewed, start: 1}}", 4, 6),
    "a running sum and what it sums": (
        "  x: {integrate: [{product: [{use: y}, {use: y}]}]}\n"
        "  y: {random_walk: {sd: 1, law: quartet, start: 1}}", 4, 6),
    "a regime and what it drives": (
        f"  x: {{regimes: {{branches: {{a: [{{use: y}}], b: [{{constant: 3}}]}}, {MOVES}}}}}\n"
        "  y: [{random_walk: {sd: 1, law: quartet}}, {constant: 1}]", 4, 4),
    "a switching noise and its variance": (
        f"  x: {{power: {{of: [{{use: y}}], exponent: 2}}}}\n"
        f"  y: {{switching_noise: {{sd: {{a: 1, b: 3}}, law: quartet, {MOVES}}}}}", 4, 4),
    "one chain in two series": (
        "  x: {product: [{use: y}, {white_noise: {sd: 1, law: quartet}}]}\n"
        f"  y: {{chain: {{states: [a, b], {MOVES}}}}}", 4, 4),
}  # fmt: skip


@pytest.mark.parametrize("name", PAIRS)
def test_cross_covariances_over_all_sequences(name, monkeypatch):
    text, base, steps = PAIRS[name]
    graph = graph_of(text, steps)
    values = every_path(graph, steps, base, monkeypatch)
    x, y = (v - v.mean(axis=1, keepdims=True) for v in (values["x"], values["y"]))
    t = np.arange(steps)
    size = np.sqrt((x**2).mean(axis=1).max() * (y**2).mean(axis=1).max())
    found = theory(graph.spec, graph).cross("x", "y").covariance(t[:, None], t)
    assert found is not None and agree(found, products(x, y), size)


def products(x, y=None):
    """Means over paths of the products of all pairs of rows."""
    return x @ (x if y is None else y).T / x.shape[1]


def agree(found, exact, size=None):
    size = np.abs(exact).max(initial=1e-300) if size is None else size
    return found is not None and bool(np.abs(found - exact).max() <= 1e-11 * size)
