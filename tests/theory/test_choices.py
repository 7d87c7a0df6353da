"""Functions of what is one of several series: that function of each, by sums over the states of what chooses.

Counts whose mean a hidden chain chooses: Fischer & Meier-Hellstern (1993), from memory. The chain's shares and moves
are written down here, its powers are NumPy's, laws and densities SciPy's; what is averaged over an autoregression
within a branch is averaged by quadrature (tests/theory/gauss.py).
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from procgen.theory import theory

from ..terms.helpers import graph_of
from .gauss import over_one, over_two

MOVES = np.array([[0.8, 0.2], [1.0 / 3.0, 2.0 / 3.0]])  # mean stays of 5 and 3 steps
SHARES = np.array([0.625, 0.375])
STAYS = "durations: {u: 5, v: 3}"
PHI, SD, ABOVE, SPREAD = 0.5, 0.3, 1.0, 0.4
WIDE = SD / np.sqrt(1.0 - PHI**2)  # of the stationary autoregression (Box & Jenkins 1970)
BRANCHES = f"u: [{{ar: {{phi: {PHI}, sd: {SD}}}}}], v: [{{constant: {ABOVE}}}, {{white_noise: {{sd: {SPREAD}}}}}]"
REGIMES = f"{{regimes: {{branches: {{{BRANCHES}}}, {STAYS}}}}}"
LAGS = np.array([0, 1, 2, 7])
BENDS = {
    "exp": (f"{{exp: [{REGIMES}]}}", np.exp, ()),
    "abs": (f"{{abs: [{REGIMES}]}}", np.abs, (0.0,)),
    "clip": (f"{{clip: {{low: -0.2, high: 1.1, of: [{REGIMES}]}}}}", lambda x: np.clip(x, -0.2, 1.1), (-0.2, 1.1)),
    "sigmoid": (f"{{sigmoid: {{of: [{REGIMES}]}}}}", lambda x: 1.0 / (1.0 + np.exp(-x)), ()),
}


def series_of(terms, shared=""):
    graph = graph_of(f"  x: [{terms}]", rest=shared)
    return theory(graph.spec, graph)["x"]


def over_states(means, at_once, later):
    """Mean and autocovariances from the mean in each state, and the mean product within a state at once and later."""
    found = []
    for lag in LAGS:
        joint = SHARES[:, None] * np.linalg.matrix_power(MOVES, int(lag))
        products = np.outer(means, means)
        np.fill_diagonal(products, [later(int(lag))(k) if lag else at_once[k] for k in range(2)])
        found.append((joint * products).sum() - (SHARES @ means) ** 2)
    return SHARES @ means, np.array(found)


def agree(series, mean, covariances, tolerance=1e-9):
    np.testing.assert_allclose(series.mean([0, 9]), mean, rtol=1e-9)
    np.testing.assert_allclose(series.autocovariance(LAGS), covariances, rtol=0, atol=tolerance * covariances[0])


@pytest.mark.parametrize("name", BENDS)
def test_a_bend_of_regimes_is_that_of_each_branch(name):
    text, f, bends = BENDS[name]
    sides = [(0.0, WIDE), (ABOVE, SPREAD)]

    def mean_of(g, level, sd):
        return over_one(lambda z: g(level + sd * z), [(bend - level) / sd for bend in bends])

    def later(lag):
        cuts = [bend / WIDE for bend in bends]
        both = over_two(lambda a, b: f(WIDE * a) * f(WIDE * b), PHI**lag, cuts, cuts)
        return lambda k: both if k == 0 else means[1] ** 2

    means = np.array([mean_of(f, *side) for side in sides])
    at_once = [mean_of(lambda x: f(x) ** 2, *side) for side in sides]
    series = series_of(text)
    agree(series, *over_states(means, at_once, later))
    for x in (-0.1, 0.4, 0.9):
        y = float(f(np.array(x)))
        below = [stats.norm.cdf(x, *side) - (stats.norm.cdf(-x, *side) if name == "abs" else 0.0) for side in sides]
        if name != "abs" or x > 0:
            assert series.marginal(3).cdf(y) == pytest.approx(SHARES @ below, abs=1e-9)


@pytest.mark.parametrize(("kind", "law"), [("poisson", lambda m: stats.poisson(m)), ("negative_binomial", None)])
def test_counts_whose_mean_a_chain_chooses(kind, law):
    size = ", size: 2.5" if law is None else ""
    law = law or (lambda m: stats.nbinom(2.5, 2.5 / (2.5 + m)))
    chain = f"{{chain: {{states: [u, v], {STAYS}}}}}"
    text = f"{{{kind}: {{mean: 3{size}, of: [{{product: [{{use: s}}, {{constant: 0.8}}]}}]}}}}"
    series = series_of(text, f"shared:\n  s: [{chain}]")
    given = [law(3.0), law(3.0 * np.exp(0.8))]
    means = np.array([x.mean() for x in given])
    at_once = [x.var() + x.mean() ** 2 for x in given]
    agree(series, *over_states(means, at_once, lambda lag: lambda k: means[k] ** 2))
    counts = np.arange(25)
    whole = SHARES @ [x.cdf(counts) for x in given]
    np.testing.assert_allclose(series.marginal(4).cdf(counts), whole, rtol=0, atol=1e-12)
    np.testing.assert_allclose(series.marginal(4).ppf(whole - 1e-9), counts)


def test_what_two_flags_choose_has_a_law_of_four_parts():
    flags = "{product: [{flag: {share: 0.3, stay: 4}, as: a}, {constant: 2}]}"
    other = "{product: [{flag: {share: 0.6, stay: 3}, as: b}, {constant: -1, as: down}], as: q}"
    series = series_of(f"{flags}, {other}, {{white_noise: {{sd: 0.5}}}}")
    levels, shares = (0.0, 2.0, -1.0, 1.0), (0.7 * 0.4, 0.3 * 0.4, 0.7 * 0.6, 0.3 * 0.6)
    for x in (-1.2, 0.3, 1.9):
        exact = sum(share * stats.norm.cdf(x, level, 0.5) for level, share in zip(levels, shares, strict=True))
        assert series.marginal(2).cdf(x) == pytest.approx(exact, abs=1e-12)


UNKNOWN = "{abs: [{compound_poisson: {rate: 0.6, mean: 1, sd: 1.5}}]}"


@pytest.mark.parametrize(
    "text",
    [
        f"{{hold: {{of: [{UNKNOWN}], every: 4}}}}",
        f"{{lag: {{by: 1, of: [{{hold: {{of: [{UNKNOWN}], every: 4}}}}]}}}}",
        f"{{product: [{{flag: {{share: 0.5}}}}, {{hold: {{of: [{UNKNOWN}], every: 4}}}}]}}",
        f"{{poisson: {{mean: 3, of: [{UNKNOWN}]}}}}",
        "{poisson: {mean: 3, of: [{product: [{white_noise: {sd: 1}}, {ar: {phi: 0.5, sd: 1}}]}]}}",
        f"{{regimes: {{branches: {{u: [{UNKNOWN}], v: [{{constant: 1}}]}}, {STAYS}}}}}",
        f"{{exp: [{{regimes: {{branches: {{u: [{UNKNOWN}], v: [{{constant: 1}}]}}, {STAYS}}}}}]}}",
    ],
)
def test_a_mean_that_is_not_known_is_nowhere_taken_for_zero(text):
    series = series_of(text)
    assert series.mean([0, 5]) is None
    assert series.reason("mean")


@pytest.mark.parametrize("line", ["slope: 0.1", "level: 0.3, slope: 0.7"])
@pytest.mark.parametrize("steps", [14, 17, 20, 50])
def test_a_rounded_line_is_rounded_as_it_is_drawn(line, steps):
    """Where a line meets a multiple of the grid, its last bit decides: 10 times 0.1 is 1, and 0.3 + 0.7 is 1."""
    graph = graph_of(f"  x: [{{floor: [{{trend: {{{line}}}}}]}}]", steps=steps)
    level, slope = (0.3, 0.7) if "level" in line else (0.0, 0.1)
    t = np.arange(steps)
    np.testing.assert_array_equal(theory(graph.spec, graph)["x"].mean(t), np.floor(level + slope * t))
