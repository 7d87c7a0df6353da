"""Values of each family against other people's code fed with the same shocks, and against the definitions."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter, lfiltic

from procgen.spec.model import SpecError
from procgen.terms.start import JointStart, Member, decay_length, partial_autocorrelations

from .helpers import draw, graph_of

STEPS, PATHS = 200, 24


def shocks(graph, steps=STEPS, paths=PATHS):
    (source,) = graph.sources
    return source.law.shocks(source.stream.uniforms(0, paths, 0, steps))


def test_white_noise_is_the_scaled_shock():
    graph = graph_of("  x: {white_noise: {sd: 2.5}}")
    assert np.array_equal(draw(graph, 0, PATHS, [STEPS])["x"], 2.5 * shocks(graph))


def test_random_walk_starts_at_its_start_and_adds_the_shocks():
    graph = graph_of("  x: {random_walk: {sd: 2, drift: 0.5, start: 7}}")
    x = draw(graph, 0, PATHS, [STEPS])["x"]
    assert np.all(x[0] == 7)
    np.testing.assert_allclose(np.diff(x, axis=0), 0.5 + 2 * shocks(graph)[1:], atol=1e-12)


@pytest.mark.parametrize(
    ("phi", "theta"),
    [([0.75, -0.5], []), ([0.5], [0.4, 0.2]), ([], [0.4, 0.2, -0.3]), ([1.318, -0.634], [0.1])],
)
def test_arma_is_scipys_filter_of_the_same_shocks(phi, theta):
    """scipy.signal.lfilter, started from the first values and shocks."""
    kind = "arma" if phi and theta else "ar" if phi else "ma"
    parameters = ", ".join(f"{name}: {value}" for name, value in (("phi", phi), ("theta", theta)) if value)
    graph = graph_of(f"  x: {{{kind}: {{{parameters}, sd: 2}}}}")
    x, a = draw(graph, 0, PATHS, [STEPS])["x"], 2 * shocks(graph)
    n = 5
    for path in range(PATHS):
        b, den = [1.0, *theta], [1.0, *(-c for c in phi)]
        start = lfiltic(b, den, x[:n, path][::-1], a[:n, path][::-1])
        expected, _ = lfilter(b, den, a[n:, path], zi=start)
        np.testing.assert_allclose(x[n:, path], expected, rtol=0, atol=1e-11)


def test_garch_variance_follows_the_squares():
    graph = graph_of("  x: {garch: {omega: 0.2, alpha: [0.1, 0.05], beta: 0.8}}\n  h: {use: x.garch.variance}")
    values = draw(graph, 0, PATHS, [STEPS])
    e, h, z = values["x"], values["h"], shocks(graph)
    np.testing.assert_allclose(e, np.sqrt(h) * z, rtol=1e-14)
    expected = 0.2 + 0.1 * e[1:-1] ** 2 + 0.05 * e[:-2] ** 2 + 0.8 * h[1:-1]
    np.testing.assert_allclose(h[2:], expected, rtol=1e-13)


def test_trend_and_seasonal_are_their_formulas():
    graph = graph_of(
        "  x: {trend: {level: 3, slope: 0.5, quadratic: 0.01, bends: [{at: 50, slope: -1}, {at: 80, slope: 2}]}}\n"
        "  y: {seasonal: {period: 24, harmonics: [{amplitude: 4, peak: 18}, {amplitude: 2, peak: 3}]}}\n"
        "  z: {seasonal: {period: 6, profile: [1, 5, 3], centre: none}}\n"
        "  s: {seasonal: {period: 3, profile: [1, 5, 3]}}\n"
        "  m: {seasonal: {period: 3, profile: [1, 5, 3], centre: mean}}"
    )
    x, t = draw(graph, 0, 1, [STEPS]), np.arange(STEPS)
    line = 3 + 0.5 * t + 0.01 * t**2 - 1.5 * np.maximum(t - 50, 0) + 3 * np.maximum(t - 80, 0)
    np.testing.assert_allclose(x["x"][:, 0], line, rtol=1e-13)
    wave = 4 * np.cos(2 * np.pi * (t - 18) / 24) + 2 * np.cos(4 * np.pi * (t - 3) / 24)
    np.testing.assert_allclose(x["y"][:, 0], wave, atol=1e-13)
    assert np.array_equal(x["z"][:12, 0], [1, 1, 5, 5, 3, 3] * 2)
    np.testing.assert_allclose(x["s"][:3, 0], [-2, 2, 0])
    np.testing.assert_allclose(x["m"][:3, 0], [1 / 3, 5 / 3, 1])


def test_compositions_are_what_they_say():
    graph = graph_of(
        "  a: {ar: {phi: 0.5, sd: 1}}\n"
        "  s: [{use: a, times: 2}, {constant: 3}]\n"
        "  p: {product: [{use: a}, {use: s}]}\n"
        "  e: {exp: [{use: a}]}\n"
        "  i: {integrate: {of: [{use: a}], start: 5}}\n"
        "  d: {difference: {of: [{use: i}]}}\n"
        "  l: {lag: {of: [{use: a}], by: 3}}"
    )
    v = draw(graph, 0, PATHS, [STEPS])
    assert np.array_equal(v["s"], 2 * v["a"] + 3) and np.array_equal(v["p"], v["a"] * v["s"])
    np.testing.assert_allclose(v["e"], np.exp(v["a"]), rtol=1e-15)
    assert np.all(v["i"][0] == 5)
    np.testing.assert_allclose(np.diff(v["i"], axis=0), v["a"][1:], atol=1e-11)
    np.testing.assert_allclose(v["d"], v["a"], atol=1e-11)  # from step 0 on: both sides of the start
    assert np.array_equal(v["l"][3:], v["a"][:-3])


def test_adding_renaming_nesting_and_reordering_move_no_draw():
    base = draw(graph_of("  x: [{ar: {phi: 0.5, sd: 1}}, {white_noise: {sd: 2}}]"), 0, 8, [40])["x"]
    same = [
        "  w: {random_walk: {sd: 1}}\n  x: [{ar: {phi: 0.5, sd: 1}}, {white_noise: {sd: 2}}]",
        "  x: [{sum: [{ar: {phi: 0.5, sd: 1}}, {white_noise: {sd: 2}}]}]\n  y: {lag: {of: [{use: x}], by: 9}}",
    ]
    for text in same:
        assert np.array_equal(draw(graph_of(text), 0, 8, [40])["x"], base)
    moved = draw(graph_of("  y: {of: [{white_noise: {sd: 2}}, {ar: {phi: 0.5, sd: 1}}], stream: x}"), 0, 8, [40])
    assert np.array_equal(moved["y"], base)
    louder = draw(graph_of("  x: [{ar: {phi: 0.5, sd: 1}}, {white_noise: {sd: 4}}]"), 0, 8, [40])["x"]
    quiet = draw(graph_of("  x: [{ar: {phi: 0.5, sd: 1}}]"), 0, 8, [40])["x"]
    np.testing.assert_allclose(louder - quiet, 2 * (base - quiet), atol=1e-12)
    assert not np.array_equal(draw(graph_of("  z: {ar: {phi: 0.5, sd: 1}}"), 0, 8, [40])["z"], quiet)


def test_an_appended_correlation_moves_nobody():
    text = (
        "  x: {ar: {phi: 0.5, sd: 1}}\n  y: {arma: {phi: 0.3, theta: [0.2, 0.4, 0.1], sd: 1}}\n"
        "  z: {ma: {theta: 0.5, sd: 1}}"
    )
    pair = "correlation:\n  - {between: [x.ar, y.arma], value: 0.5}"
    more = pair + "\n  - {between: [x.ar, z.ma], value: -0.4}"
    alone, two, three = (draw(graph_of(text, rest=rest), 0, 8, [40]) for rest in ("", pair, more))
    assert np.array_equal(alone["x"], two["x"]) and np.array_equal(two["x"], three["x"])
    assert np.array_equal(two["y"], three["y"]) and not np.array_equal(alone["y"], two["y"])


def test_a_shock_takes_the_draws_of_the_law_that_it_replaces():
    plain, garch = (
        graph_of("  x: {ar: {phi: 0, sd: 1}}"),
        graph_of("  x: {ar: {phi: 0, shock: {garch: {sd: 1, alpha: 0.1}}}}"),
    )
    assert plain.sources[0].stream == garch.sources[0].stream


@pytest.mark.parametrize(
    ("phi", "expected"),
    [((0.5,), [0.5]), ((0.75, -0.5), [0.5, -0.5]), ((1.0,), None), ((1.5, -0.4), None), ((0.5, 0.6), None)],
)
def test_partial_autocorrelations(phi, expected):
    """AR(2) (0.75, −0.5): Box & Jenkins sec. 3.2.4 (rho1 = 0.5, phi22 = −0.5)."""
    found = partial_autocorrelations(phi)
    assert found == expected if expected is None else np.allclose(found, expected)


def test_stationary_variance():
    """Published: AR(2) (1, −0.5) g0 = 2.4 (Box & Jenkins exercise 3.6); ARMA(1,1) (0.5, 0.4) g0 = 2.08 (sec. 3.4.3)."""
    one = np.ones((1, 1))
    assert JointStart([Member((1.0, -0.5), (), 1.0)], one).variance() == pytest.approx(2.4, rel=1e-13)
    assert JointStart([Member((0.5,), (0.4,), 1.0)], one).variance() == pytest.approx(2.08, rel=1e-13)


def test_decay_length_is_enough_and_not_one_too_many():
    for phi in (0.0, 0.5, 0.9, 0.999):
        n = decay_length(np.array([[phi]]))
        assert phi**n <= 1.001e-12 and (n == 1 or phi ** (n - 1) > 0.999e-12)


@pytest.mark.parametrize(
    ("term", "sentence"),
    [
        (
            "{ar: {phi: 1.02, sd: 1}}",
            "expected all roots of 1 − φ₁z − … outside the unit circle, got one at 0.9804",
        ),
        ("{ar: {phi: 0.5, sd: 1, total_sd: 2}}", "both"),
        (
            "{garch: {omega: 1, alpha: 0.5, beta: 0.6}}",
            "alpha + beta must be below 1 for a finite variance, got 1.1",
        ),
        ("{garch: {omega: 1, alpha: 3.7}}", "expected E log(β + αz²) below 0 for a stationary garch"),
        ("{garch: {alpha: 0.5, beta: 0.3}}", "exactly one"),
        ("{lag: {of: [{ar: {phi: 0.5, sd: 1, before: {x: 3}}}], by: 4}}", "give 4 values there, or lag less"),
    ],
)
def test_what_cannot_be_drawn_is_refused_with_the_mend(term, sentence):
    with pytest.raises(SpecError) as caught:
        graph_of(f"  x: {term}")
    assert sentence in str(caught.value)


def test_an_infinite_variance_is_run_on_purpose():
    graph = graph_of("  x: {garch: {omega: 1, alpha: 0.6, beta: 0.5, allow_infinite_variance: true}}")
    assert np.isfinite(draw(graph, 0, 4, [50])["x"]).all()


def test_an_equation_says_from_which_past_it_leaves():
    graph = graph_of(
        "  a: {arma: {phi: [0.5, 0.2], theta: 0.3, sd: 1, before: {x: [3, 4, 5], shocks: [0.5]}}}\n"
        "  w: {random_walk: {sd: 1, before: {x: [90, 100]}}}\n  s: {random_walk: {sd: 1, start: 7}}"
    )
    said = {name: graph.series[name].term.equation() for name in graph.series}
    assert said["a"] == "x[t] = 0.5 x[t−1] + 0.2 x[t−2] + a[t] + 0.3 a[t−1],  x[−2] = 4, x[−1] = 5,  a[−1] = 0.5"
    assert said["w"] == "x[t] = x[t−1] + a[t],  x[−1] = 100" and said["s"].endswith("x[0] = 7")


def test_an_equation_says_from_which_variance_it_leaves():
    graph = graph_of(
        "  g: {garch: {omega: 1, alpha: [0.1, 0.2], beta: 0.5, before: {variance: [3, 2], shocks: [9, -1, 0.5]}}}\n"
        "  h: {garch: {omega: 1, alpha: 0.1, beta: 0.5, before: {variance: [3, 2]}}}\n"
        "  j: {gjr_garch: {omega: 1, alpha: 0.1, gamma: 0.1, beta: 0.5, before: {variance: 2, shocks: -1}}}\n"
        "  k: {egarch: {scale: 1, alpha: 0.1, gamma: 0.1, beta: 0.5, before: {variance: 2, shocks: -1}}}\n"
        "  o: {ornstein_uhlenbeck: {rate: 0.1, sd: 1, before: {x: [7, 8]}}}"
    )
    ends = {name: graph.series[name].term.equation().split("z independent normal")[-1] for name in "ghjk"}
    assert ends == {
        "g": ",  h[−1] = 2,  e[−2] = −1, e[−1] = 0.5",
        "h": ",  h[−1] = 2,  e²[−1] = 2",
        "j": ",  h[−1] = 2, e[−1] = −1",
        "k": ",  h[−1] = 2, e[−1] = −1",
    }
    assert graph.series["o"].term.equation().endswith("exp(−0.1),  x[−1] = 8")


@pytest.mark.parametrize(
    ("term", "said"),
    [
        ("logistic_trend: {capacity: 3, rate: 1, midpoint: -30}", "x[t] = 3/(1 + exp(−(t + 30)))"),
        ("logistic_trend: {capacity: 3, rate: 0.5, midpoint: 0, floor: -1}", "x[t] = −1 + 4/(1 + exp(−0.5 t))"),
        ("exponential_trend: {level: -2, rate: -0.5}", "x[t] = − 2 exp(−0.5 t)"),
        ("event: {shape: ramp, at: -5, size: 2, length: 3}", "x[t] = 2 min(max((t + 5)/3, 0), 1)"),
        ("seasonal: {period: 12, harmonics: [{amplitude: 2}, {amplitude: 3, peak: 5}]}",
         "x[t] = 2 cos(2πt/12) + 3 cos(2π·2(t − 5)/12)"),
    ],
)  # fmt: skip
def test_an_equation_counts_from_where_it_begins(term, said):
    assert graph_of(f"  x: {{{term}}}").series["x"].term.equation() == said


def test_a_negative_zero_is_a_zero():
    assert graph_of("  x: {integrate: {of: [{white_noise: {sd: 1}}], start: -0.0}}").series["x"].term.equation("e") == (
        "y[t] = y[t−1] + e[t],  y[0] = 0"
    )
