"""Running sums of what is no filter of shocks: fractional noise, counts, flags, bends, what is held.

Fractional Brownian motion: Mandelbrot & Van Ness (1968), SIAM Review 10, 422-437, sec. 3. A sum of Poisson counts is a
Poisson count (Johnson, Kemp & Kotz 2005, sec. 4.2). The rest is added up here over all pairs of steps.
"""

from __future__ import annotations

import numpy as np
import pytest

from procgen.theory import theory
from procgen.theory.verdict import GROWS, STRICT

from ..terms.helpers import graph_of

T = np.array([0, 1, 5, 20, 39, 12])
S = np.array([7, 0, 5, 3, 39, 38])


def series(text, rest="", steps=40):
    graph = graph_of(text, steps=steps, rest=rest)
    return theory(graph.spec, graph)


def added(covariance, t, s):
    """Cov of sums over steps 1 .. t and 1 .. s, of summands with a covariance at each pair of steps."""
    boxes = [(range(1, int(a) + 1), range(1, int(b) + 1)) for a, b in zip(t, s, strict=True)]
    return np.array([sum(covariance(i, j) for i in rows for j in columns) for rows, columns in boxes])


@pytest.mark.parametrize("hurst", [0.2, 0.5, 0.85])
def test_the_sum_of_fractional_noise_is_fractional_brownian_motion(hurst):
    th = series(f"  x: {{integrate: [{{fractional_gaussian_noise: {{hurst: {hurst}, sd: 2}}}}]}}")["x"]
    t, s = np.array([1, 5, 1000, 100_000]), np.array([1, 2, 400, 99_999])
    known = 2.0 * (t ** (2 * hurst) + s ** (2 * hurst) - np.abs(t - s) ** (2 * hurst))
    np.testing.assert_allclose(th.covariance(t, s), known, rtol=1e-6)
    assert th.gaussian and th.stationarity.verdict == GROWS


def test_sums_of_counts_are_counts():
    th = series("  x: {integrate: {of: [{poisson: {mean: 3}}, {poisson: {mean: 2}, as: out, times: -1}], start: 40}}")
    np.testing.assert_allclose(th["x"].mean(T), 40 + T)
    np.testing.assert_allclose(th["x"].covariance(T, S), 5.0 * np.minimum(T, S), atol=1e-12)


def test_sums_of_counts_with_a_memory_their_lags_and_differences():
    th = series(
        "  x: {integrate: [{use: n}]}\n  lagged: {lag: {of: [{use: x}], by: 7}}\n"
        "  change: {difference: {of: [{use: x}], by: 3}}\n  late: {integrate: [{lag: {of: [{use: n}], by: 2}}]}",
        rest="shared:\n  n: {inar: {alpha: 0.6, mean: 4}}",
    )

    def one(i, j):
        return 4.0 * 0.6 ** abs(i - j)

    np.testing.assert_allclose(th["x"].covariance(T, S), added(one, T, S), rtol=1e-12, atol=1e-12)
    np.testing.assert_allclose(th["late"].covariance(T, S), added(one, T, S), rtol=1e-9, atol=1e-9)
    late = np.array([7, 12, 30])
    np.testing.assert_allclose(th["lagged"].variance(late), added(one, late - 7, late - 7), rtol=1e-9, atol=1e-9)
    backwards = added(one, [4], [4])  # from step -4 to step 0, as from step 1 to step 4
    np.testing.assert_allclose(th["lagged"].variance([3]), backwards, rtol=1e-12)
    np.testing.assert_allclose(th["change"].variance([0, 9]), added(one, [3, 3], [3, 3]), rtol=1e-12)
    assert th["change"].stationarity.verdict == STRICT


def test_sums_of_what_moves_with_the_step():
    """What is held varies with its place in the block; a bend of a season with its mean. Both beside their body."""
    th = series(
        "  held: {integrate: [{hold: {of: [{ar: {phi: 0.7, sd: 1}}], every: 10}}]}\n"
        "  both: {integrate: [{product: [{hold: {of: [{ar: {phi: 0.7, sd: 1}}], every: 10}}, {use: w}]}]}\n"
        "  size: {hinge: {of: [{seasonal: {period: 12, harmonics: [{amplitude: 2}]}}, {use: w}], above: 0}}\n"
        "  total: {integrate: [{use: size}]}\n  body: {use: w}",
        rest="shared:\n  w: {ar: {phi: 0.5, sd: 1}}",
    )

    def held(i, j):
        return 0.7 ** abs(i // 10 * 10 - j // 10 * 10) / 0.51

    def both(i, j):
        return held(i, j) * 0.5 ** abs(i - j) / 0.75

    np.testing.assert_allclose(th["held"].covariance(T, S), added(held, T, S), rtol=1e-12, atol=1e-12)
    np.testing.assert_allclose(th["both"].covariance(T, S), added(both, T, S), rtol=1e-12, atol=1e-12)
    every = np.arange(40)
    alone = th["size"].covariance(*np.meshgrid(every, every, indexing="ij"))
    np.testing.assert_allclose(th["total"].covariance(T, S), added(lambda i, j: alone[i, j], T, S), rtol=1e-9)
    beside = th.cross("size", "body").covariance(*np.meshgrid(every, every, indexing="ij"))
    known = [beside[1 : a + 1, b].sum() for a, b in zip(T, S, strict=True)]
    np.testing.assert_allclose(th.cross("total", "body").covariance(T, S), known, rtol=1e-9, atol=1e-12)


def test_what_is_not_added_up():
    th = series(
        "  twice: {integrate: [{integrate: [{poisson: {mean: 3}}]}]}\n"
        "  square: {power: {of: [{integrate: [{flag: {share: 0.3, stay: 4}}]}], exponent: 2}}"
    )
    assert th["twice"].variance([5]) is None and "a sum of sums" in th["twice"].reason("variance")
    assert th["square"].variance([5]) is None and "running sums" in th["square"].reason("variance")


def test_a_bend_of_fractional_noise_beside_that_noise():
    """Cov(x₊, y) = P(x > 0) Cov(x, y) for normal x and y of mean 0 (Stein 1981, Ann. Stat. 9, 1135-1151, lemma 2)."""
    th = series(
        "  bend: {hinge: {of: [{use: w}], above: 0}}\n  body: {use: w}\n  beside: [{use: bend}, {use: body}]\n"
        "  clip: {clip: {of: [{use: w}, {white_noise: {sd: 1}}], low: 0}}",
        rest="shared:\n  w: {fractional_gaussian_noise: {hurst: 0.8, sd: 2}}",
    )
    known = th["body"].covariance(T, S)
    for bend in ("bend", "clip"):
        np.testing.assert_allclose(th.cross(bend, "body").covariance(T, S), known / 2, rtol=1e-9)
    together = th["bend"].covariance(T, S) + known + known  # twice the half of it, and the body itself
    np.testing.assert_allclose(th["beside"].covariance(T, S), together, rtol=1e-9)
    assert th["clip"].autocovariance([1])[0] > 0
