"""Chains and regimes: against published moments, enumeration of every chain, SciPy and statsmodels."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
from mpmath import mp
from scipy.stats import laplace, lognorm, norm
from statsmodels.tsa.regime_switching.markov_regression import MarkovRegression

from procgen.spec.model import SpecError
from procgen.terms.markov import backwards, occupancy
from procgen.terms.recover import forecast
from procgen.terms.run import Run
from procgen.theory import theory
from tests.studies import departures

from .helpers import draw, graph_of

THREE = np.array([[0.9, 0.1, 0.0], [0.3, 0.6, 0.1], [0.0, 0.5, 0.5]])
ROWS = "transitions: [[0.9, 0.1, 0], [0.3, 0.6, 0.1], [0, 0.5, 0.5]]"
# Three branches that share a series and a trend, so that nothing about them is independent or constant.
BRANCHES = """branches:
          dry: [{ar: {phi: 0.6, sd: 1}}, {use: common}]
          wet: [{use: common, times: 2}, {trend: {level: 1, slope: 0.2}}]
          storm: [{constant: 5}, {random_walk: {sd: 0.5, start: 1}}]
"""
COMMON = "shared:\n  common: [{white_noise: {sd: 1.5}}]\n"


def two_normals(means, sds, p, q) -> str:
    parts = [
        f"{name}: [{{constant: {m}, as: m{name}}}, {{white_noise: {{sd: {s}}}, as: e{name}}}]"
        for name, m, s in zip("ab", means, sds, strict=True)
    ]
    return f"  x: {{regimes: {{branches: {{{', '.join(parts)}}}, transitions: [[{p}, {1 - p}], [{1 - q}, {q}]]}}}}"


def theory_of(graph, name="x"):
    return theory(graph.spec, graph)[name]


@pytest.mark.parametrize(
    ("model", "variance", "kurtosis", "acf", "squares"),
    [
        # Hamilton (1989), Table I, without his autoregression; moments by Timmermann (2000), recomputed.
        (((1.1643, -0.3577), (0.769, 0.769), 0.9049, 0.755), 1.0579802403, 2.7985521143, 0.2910470583, 0.0688306606),
        (((0.1, -0.2), (0.5, 1.5), 0.95, 0.9), 0.9366666667, 6.1299755576, 0.0181494662, 0.1729470114),
    ],
)
def test_moments_of_switching_normals(model, variance, kurtosis, acf, squares):
    """Timmermann (2000), J. Econometrics 96, 75-111: propositions 1 and 2 for independent normals within a regime."""
    known = theory_of(graph_of(two_normals(*model)))
    (means, _, p, q) = model
    share = (1 - q) / (2 - p - q)
    assert known.stationarity.verdict == "strictly stationary"
    assert known.mean([0, 9]) == pytest.approx([share * means[0] + (1 - share) * means[1]] * 2, rel=1e-12, abs=1e-15)
    assert known.variance([0, 9]) == pytest.approx([variance] * 2, rel=1e-9)
    assert known.excess_kurtosis == pytest.approx(kurtosis - 3, rel=1e-9)
    assert known.autocorrelation([1, 3]) == pytest.approx([acf, acf * (p + q - 1) ** 2], rel=1e-8)
    of_squares = known.autocovariance_of_squares([0, 1, 4])
    assert of_squares[1] / of_squares[0] == pytest.approx(squares, rel=1e-8)
    assert of_squares[2] == pytest.approx(of_squares[1] * (p + q - 1) ** 3, rel=1e-10)


def test_shares_and_durations_are_hamiltons():
    """Hamilton (1989): mean durations 1/(1 − p), 1/(1 − q) and the share of recessions; statsmodels for both."""
    model = MarkovRegression(np.zeros(9), k_regimes=2)
    params = [0.9049, 0.2450, 1.1643, -0.3577, 0.769**2]
    (term,) = [
        n.term for _, n in graph_of(two_normals((1, -1), (1, 1), 0.9049, 0.755)).terms() if n.term.kind == "regimes"
    ]
    assert term.chain.shares == pytest.approx([1 - 0.279623640, 0.279623640], abs=5e-10)
    assert term.chain.shares == pytest.approx(model.initial_probabilities(params), rel=1e-12)
    transitions = model.regime_transition_matrix(params)[:, :, 0].T
    assert term.chain.p == pytest.approx(transitions, rel=1e-12)
    assert "mean stays a 10.5152, b 4.08163" in term.equation("a", "b", "z")


def test_durations_say_how_long_a_state_lasts():
    graph = graph_of("  x: {chain: {states: [a, b, c], durations: {a: 10, b: 1, c: 4}}}")
    p = next(iter(graph.terms()))[1].term.chain.p
    assert p == pytest.approx(np.array([[0.9, 0.05, 0.05], [0.5, 0, 0.5], [0.125, 0.125, 0.75]]), rel=1e-15)


@pytest.mark.parametrize("size", [2, 3, 6])
def test_shares_are_the_left_eigenvector(size):
    """LAPACK's solution of q P = q, on random matrices, some of them nearly split in two."""
    rng = np.random.default_rng(size)
    for scale in (1.0, 1e-6):
        p = rng.random((size, size))
        p[0, 1:] *= scale
        p /= p.sum(axis=1, keepdims=True)
        q = np.linalg.lstsq(np.vstack([p.T - np.eye(size), np.ones(size)]), np.eye(size + 1)[-1], rcond=None)[0]
        assert occupancy(p) == pytest.approx(q, rel=1e-9)
        assert backwards(p, occupancy(p)).sum(axis=1) == pytest.approx(np.ones(size), rel=1e-12)


def test_shares_of_what_is_left_for_ever_and_of_two_ends():
    assert occupancy(np.array([[0.5, 0.3, 0.2], [0, 0.6, 0.4], [0, 0.1, 0.9]])) == pytest.approx([0, 0.2, 0.8])
    assert occupancy(np.array([[0.5, 0.3, 0.2], [0, 1, 0], [0, 0, 1]])) is None


@pytest.mark.parametrize("start", ["stationary", "wet"])
def test_moments_against_every_chain(start):
    """Mean and covariance as sums over all 3^6 chains, with the branches' moments from their definitions."""
    steps = 6
    graph = graph_of(f"  x:\n    - regimes:\n        {ROWS}\n        start: {start}\n        {BRANCHES}", rest=COMMON)
    known = theory_of(graph)
    first = occupancy(THREE) if start == "stationary" else np.array([0.0, 1.0, 0.0])
    t = np.arange(steps)
    means = np.stack([0.0 * t, 1 + 0.2 * t, 6.0 + 0 * t])
    noise, lag = 2.25 * np.eye(steps), np.abs(t[:, None] - t)
    cov = np.zeros((3, 3, steps, steps))
    cov[0, 0] = 0.6**lag / (1 - 0.36) + noise
    cov[0, 1] = cov[1, 0] = 2 * noise
    cov[1, 1] = 4 * noise
    cov[2, 2] = 0.25 * np.minimum(t[:, None], t)
    mean, square = np.zeros(steps), np.zeros((steps, steps))
    for chain in np.array(list(product(range(3), repeat=steps))):
        weight = first[chain[0]] * np.prod(THREE[chain[:-1], chain[1:]])
        m = means[chain, t]
        mean += weight * m
        square += weight * (cov[np.ix_(chain, chain)][t[:, None], t, t[:, None], t] + np.outer(m, m))
    assert known.mean(t) == pytest.approx(mean, rel=1e-12)
    assert known.covariance(t[:, None], t) == pytest.approx(square - np.outer(mean, mean), rel=1e-11, abs=1e-13)


@pytest.mark.parametrize("start", ["stationary", "wet"])
def test_moments_of_the_regime_against_every_chain(start):
    steps, t = 6, np.arange(6)
    graph = graph_of(f"  x: {{chain: {{states: [dry, wet, storm], {ROWS}, start: {start}}}}}")
    known = theory_of(graph)
    first = occupancy(THREE) if start == "stationary" else np.array([0.0, 1.0, 0.0])
    chains = np.array(list(product(range(3), repeat=steps)))
    weight = first[chains[:, 0]] * np.prod(THREE[chains[:, :-1], chains[:, 1:]], axis=1)
    mean = weight @ chains
    assert known.mean(t) == pytest.approx(mean, rel=1e-12)
    off = chains - mean
    assert known.covariance(t[:, None], t) == pytest.approx((weight * off.T) @ off, rel=1e-11, abs=1e-14)
    for step in (1, 5):
        fourth = weight @ off[:, step] ** 4 / (weight @ off[:, step] ** 2) ** 2
        assert known.excess_kurtosis_at(step) == pytest.approx(fourth - 3, rel=1e-9)
    of_squares = (weight * (off**2).T) @ off**2 - np.outer(weight @ off**2, weight @ off**2)
    assert known.autocovariance_of_squares([0, 1, 4], 1) == pytest.approx(of_squares[[1, 2, 5], 1], rel=1e-10)


def test_a_trend_that_all_branches_share_stays_a_trend():
    known = theory_of(
        graph_of(
            "  y: {trend: {slope: 1}}\n  x: {regimes: {durations: {a: 5, b: 2}, branches: "
            "{a: [{use: y}, {white_noise: {sd: 1}}], b: [{use: y}, {constant: 9}]}}}"
        )
    )
    assert known.stationarity.verdict == "mean not constant"
    assert known.stationarity.covariance_stationary


def test_verdicts_of_regimes():
    def verdict(branches, more=""):
        return theory_of(
            graph_of(f"  x: {{regimes: {{durations: {{a: 5, b: 2}}, branches: {branches}{more}}}}}")
        ).stationarity

    calm = "{a: [{ar: {phi: 0.5, sd: 1}}], b: [{constant: 9}]}"
    assert verdict(calm).verdict == "strictly stationary"
    assert verdict("{a: [{random_walk: {sd: 1}}], b: [{constant: 9}]}").verdict == "variance grows"
    season = verdict("{a: [{seasonal: {period: 4, profile: [1, 2, 3, 0]}}], b: [{constant: 9}]}")
    assert season.verdict == "mean not constant" and not season.covariance_stationary
    left = verdict(calm, ", start: a")
    assert left.verdict == "settles from its given start" and not left.stationary
    assert "x.regimes leaves from a and forgets it" in left.reasons


@pytest.mark.parametrize("start", ["stationary", "storm"])
def test_states_are_the_uniforms_of_their_own_stream(start):
    """One uniform a step through the cumulated chances of the state before: NumPy's searchsorted, step by step."""
    graph = graph_of(f"  x: {{chain: {{states: [dry, wet, storm], {ROWS}, start: {start}}}}}")
    x = draw(graph, 0, 50, [60])["x"]
    (source,) = graph.sources
    assert source.stream.role == "chain"
    u = source.stream.uniforms(0, 50, 0, 60)
    cumulated = np.cumsum(THREE, axis=1)[:, :-1]
    for k in range(50):
        s = 2 if start == "storm" else np.searchsorted(np.cumsum(occupancy(THREE))[:-1], u[0, k], side="right")
        for t in range(60):
            s = np.searchsorted(cumulated[s], u[t, k], side="right") if t else s
            assert x[t, k] == s


def test_the_past_is_the_chain_seen_backwards():
    """The states before step 0 by Bayes' formula, from uniforms of their own, however many are asked for."""
    chain = f"  x: {{chain: {{states: [dry, wet, storm], {ROWS}}}}}\n"
    graph = graph_of(chain + "  y: {lag: {of: [{use: x}], by: 6}}\n  z: {lag: {of: [{use: x}], by: 2}}")
    found = draw(graph, 0, 40, [8])
    assert np.array_equal(found["y"][6:], found["x"][:2]) and np.array_equal(found["z"][:2], found["y"][4:6])
    u = graph.sources[0].stream.uniforms(0, 40, -6, 6)
    q = occupancy(THREE)
    reverse = q * THREE.T / q[:, None]
    for k in range(40):
        s = int(found["x"][0, k])
        for t in range(1, 7):
            s = np.searchsorted(np.cumsum(reverse[s])[:-1], u[6 - t, k], side="right")
            assert found["y"][6 - t, k] == s
    alone = draw(graph_of(chain), 0, 40, [8])["x"]
    assert np.array_equal(alone, found["x"])


def test_a_branch_is_the_same_whether_it_is_seen_or_not():
    """What is shown is the branch of the regime; taking regimes away leaves its values as they were."""
    regimes = graph_of(
        "  x: {regimes: {durations: {a: 5, b: 2}, branches: "
        "{a: [{ar: {phi: 0.5, sd: 1}}], b: [{garch: {sd: 2, alpha: 0.1}}]}}}"
    )
    alone = graph_of("  x: {ar: {phi: 0.5, sd: 1}}"), graph_of("  x: {garch: {sd: 2, alpha: 0.1}}")
    run = Run(regimes, 0, 30, reveal=("x.regimes.regime", "x.regimes"))
    shown = run.tile(60)
    a, b = (draw(graph, 0, 30, [60])["x"] for graph in alone)
    assert set(np.unique(shown["x.regimes.regime"])) == {0.0, 1.0}
    assert np.array_equal(shown["x"], np.where(shown["x.regimes.regime"] == 0, a, b))


def test_series_that_follow_one_chain():
    rest = f"shared:\n  weather: {{chain: {{states: [dry, wet, storm], {ROWS}}}}}\n"
    three = "{dry: [{constant: 1}], wet: [{constant: 2, as: two}], storm: [{constant: 5, as: five}]}"
    graph = graph_of(
        f"  x: {{regimes: {{follow: {{use: weather}}, branches: {three}}}}}\n"
        f"  y: {{regimes: {{follow: {{use: x.regimes.regime}}, branches: {three.replace('5,', '9,')}}}}}\n",
        rest=rest,
    )
    found = draw(graph, 0, 30, [60])
    assert np.array_equal(found["y"], np.where(found["x"] == 5, 9, found["x"]))
    both, q, t = theory(graph.spec, graph), occupancy(THREE), np.array([0, 3])
    x, y = np.array([1, 2, 5]), np.array([1, 2, 9])
    expected = [q * x @ y - (q @ x) * (q @ y), q * x @ np.linalg.matrix_power(THREE, 3) @ y - (q @ x) * (q @ y)]
    assert both.cross("x", "y").covariance(np.array([0, 0]), t) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(
    ("flag", "chance", "stay"),
    [
        ("{share: 0.25, stay: 4}", np.full(8, 0.25), 0.75),
        ("{spans: [{from: 3, until: 6}]}", np.eye(8)[3:6].sum(axis=0), None),
    ],
)
def test_regimes_follow_a_flag_by_chance_or_by_dates(flag, chance, stay):
    graph = graph_of(
        f"  f: {{flag: {flag}}}\n"
        "  x: {regimes: {follow: {use: f}, branches: {off: [{ar: {phi: 0.5, sd: 1}}], on: [{constant: 6}]}}}"
    )
    found, t, known = draw(graph, 0, 20, [8]), np.arange(8), theory_of(graph)
    assert np.array_equal(found["x"] == 6, found["f"] == 1)
    assert known.mean(t) == pytest.approx(6 * chance, rel=1e-12, abs=1e-15)
    off = 1 - chance if stay is None else None
    both_off = np.outer(off, off) if stay is None else 0.5625 + 0.1875 * (stay - 1 / 12) ** np.abs(t[:, None] - t)
    both_on = np.outer(chance, chance) if stay is None else both_off - 0.5
    expected = both_off * 0.5 ** np.abs(t[:, None] - t) / 0.75 + 36 * (both_on - np.outer(chance, chance))
    assert known.covariance(t[:, None], t) == pytest.approx(expected, rel=1e-11, abs=1e-14)


def test_a_chain_that_lasts_longer_is_found_by_the_validator():
    """The same shares, other durations. Seed 3 finds it with p = 7e-39: a miss by another seed is below 1e-9."""

    def chain(calm, storm):
        return [{"chain": {"states": ["calm", "storm"], "durations": {"calm": calm, "storm": storm}}}]

    drawn = departures.draw(departures.spec_of(chain(50, 10), 1000, 200, 3))
    verdict = departures.verdict(chain(40, 8), drawn)
    assert verdict.agrees is False
    assert "slope over steps" in set(verdict.checks["what"][verdict.checks["outcome"] == "departs"])


def test_the_forecast_is_the_mean_over_the_chain():
    graph = graph_of(
        "  x: {regimes: {transitions: [[0.8, 0.2], [0.5, 0.5]], branches: "
        "{a: [{constant: 1}], b: [{ar: {phi: 0.5, sd: 2}}]}}}"
    )
    run = Run(graph, 0, 6, reveal=("x.regimes.regime", "x.ar"))
    last = {name: rows[-1] for name, rows in run.tile(9).items()}
    ahead = forecast(run, "x", 3)
    p = np.linalg.matrix_power(np.array([[0.8, 0.2], [0.5, 0.5]]), 3)[last["x.regimes.regime"].astype(int), 1]
    m, v = 0.125 * last["x.ar"], 4 * (1 + 0.25 + 0.0625)
    mean = 1 - p + p * m
    assert ahead.mean[2] == pytest.approx(mean, rel=1e-12)
    assert ahead.variance[2] == pytest.approx((1 - p) + p * (v + m**2) - mean**2, rel=1e-11)


@pytest.mark.parametrize("start", ["stationary", "wet"])
def test_the_law_at_a_step_is_a_mixture_of_normals(start):
    """Weights from powers of P, normals from the branches' definitions, added up with SciPy's normal."""
    graph = graph_of(f"  x:\n    - regimes:\n        {ROWS}\n        start: {start}\n        {BRANCHES}", rest=COMMON)
    law = theory_of(graph).marginal(3)
    first = occupancy(THREE) if start == "stationary" else np.array([0.0, 1.0, 0.0])
    weights, at = first @ np.linalg.matrix_power(THREE, 3), np.linspace(-8, 12, 41)
    means, sds = (0, 1.6, 6), np.sqrt([1 / (1 - 0.36) + 2.25, 4 * 2.25, 3 * 0.25])
    expected = sum(w * norm.cdf(at, m, s) for w, m, s in zip(weights, means, sds, strict=True))
    assert law.cdf(at) == pytest.approx(expected, rel=1e-10)
    assert law.mean() == pytest.approx(theory_of(graph).mean([3])[0], rel=1e-12)
    assert law.var() == pytest.approx(theory_of(graph).variance([3])[0], rel=1e-9)


@pytest.mark.parametrize("start", ["stationary", "b"])
def test_a_state_with_one_number_is_a_value_with_a_chance_of_its_own(start):
    """Weights from powers of P, SciPy's normal beside a step at 2 (Hamilton 1989, the mixture at one step)."""
    branches = "branches: {b: [{constant: 400, as: up}, {white_noise: {sd: 2}}], a: [{constant: 2}]}"
    known = theory_of(graph_of(f"  x: {{regimes: {{durations: {{a: 9, b: 240}}, start: {start}, {branches}}}}}"))
    p = np.array([[239 / 240, 1 / 240], [1 / 9, 8 / 9]])
    for step in (3, 84):
        share = (np.array([1.0, 0.0]) @ np.linalg.matrix_power(p, step))[1] if start == "b" else 9 / 249
        law, at = known.marginal(step), np.array([1.9, 2.0, 2.1, 399.0, 405.0])
        expected = share * (at >= 2) + (1 - share) * norm.cdf(at, 400, 2)
        assert law.atoms == (2.0,) and law.chance(np.array([2.0, 2.5])) == pytest.approx([share, 0], rel=1e-11)
        assert law.cdf(at) == pytest.approx(expected, rel=1e-11)
        assert law.ppf(share / 2) == 2.0 and law.ppf(1 - (1 - share) / 2) == pytest.approx(400)
        assert law.mean() == pytest.approx(known.mean([step])[0]) and law.var() == pytest.approx(
            known.variance([step])[0]
        )


def test_states_of_other_laws_are_mixed_too():
    """A Laplace and a lognormal law by SciPy, in their shares 0.75 and 0.25."""
    branches = "a: [{white_noise: {sd: 1, law: laplace}}], b: [{exp: [{ar: {phi: 0.5, total_sd: 1}}]}]"
    law = theory_of(graph_of(f"  x: {{regimes: {{branches: {{{branches}}}, durations: {{a: 9, b: 3}}}}}}")).marginal(5)
    at = np.linspace(-4, 9, 40)
    expected = 0.75 * laplace.cdf(at, 0, np.sqrt(0.5)) + 0.25 * lognorm.cdf(at, 1)
    assert law.cdf(at) == pytest.approx(expected, rel=1e-10)
    assert law.cdf(law.ppf([0.01, 0.4, 0.99])) == pytest.approx([0.01, 0.4, 0.99])


def test_a_law_that_is_not_known_in_a_state_is_not_known_at_all():
    branches = "a: [{garch: {sd: 1, alpha: 0.1, beta: 0.8}}], b: [{constant: 3}]"
    known = theory_of(graph_of(f"  x: {{regimes: {{branches: {{{branches}}}, durations: {{a: 9, b: 3}}}}}}"))
    assert known.marginal(3) is None
    assert known.reason("marginal").startswith("in a state of its chain, a combination of shocks that are not normal")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("durations: {a: 5, c: 2}", "expected one for each of a, b, got a, c"),
        ("durations: {a: 5, b: 0.5}", "expected at least 1 step for b, got 0.5; a state lasts a step or more"),
        ("transitions: [[1]]", "expected 2 rows of 2 numbers (a, b), got 1 of 1"),
        ("transitions: [[0.5, 0.4], [0, 1]]", "expected the row of a to add up to 1, got 0.9"),
        ("transitions: [[0.5, 0.5], [0.5, 1.5]]", "expected a number in [0, 1], got 1.5"),
        (
            "transitions: [[1, 0], [0, 1]]",
            "expected one set of states that is entered sooner or later and never left, got more: the shares would "
            "depend on the start; let one lead to the other, or give `start`",
        ),
        ("durations: {a: 5, b: 5}, start: c", "expected stationary, or one of a, b, got c"),
        (
            "durations: {a: 5, b: 5}, transitions: [[1, 0], [0, 1]]",
            "expected `durations` or `transitions`, exactly one",
        ),
        ("start: a", "expected `durations` or `transitions`, exactly one of them; give one"),
        ("follow: {constant: 3, as: c}", "expected `follow` to be a chain, a flag, or the regime of another series"),
        (
            "follow: {chain: {states: [i, j, k], durations: {i: 2, j: 2, k: 2}}}",
            "a branch for each state (i, j, k), got a, b",
        ),
        (
            "follow: {use: y}, durations: {a: 5, b: 5}",
            "what is followed has its own; remove durations, or remove follow",
        ),
    ],
)
def test_refusals(text, message):
    with pytest.raises(SpecError) as error:
        graph_of(
            "  y: {chain: {states: [i, j], durations: {i: 2, j: 2}}}\n"
            f"  x: {{regimes: {{branches: {{a: {{constant: 1}}, b: {{ar: {{phi: 0.1, sd: 1}}}}}}, {text}}}}}"
        )
    assert message in str(error.value)


def test_a_chain_from_a_given_state_has_no_past():
    with pytest.raises(
        SpecError, match=r"reads x\.chain 2 steps before step 0, and a chain has none before a given state; let"
    ):
        graph_of("  x: {lag: {of: [{chain: {states: [i, j], durations: {i: 2, j: 2}, start: i}}], by: 2}}")


def test_covariances_far_apart_keep_their_digits():
    """Two states: p₀p₁(1 − a − b)^lag with a, b the chances to leave (Feller 1968, XV.1), in 50 digits by mpmath."""
    known = theory_of(graph_of("  x: {chain: {states: [i, j], durations: {i: 1000000, j: 100000}}}", steps=20_000_000))
    lags = [1, 1000, 1_000_000, 15_000_000]
    with mp.workdps(50):
        a, b = mp.mpf(1) / 10**6, mp.mpf(1) / 10**5
        expected = [float(a * b / (a + b) ** 2 * (1 - a - b) ** lag) for lag in lags]
    assert known.autocovariance(lags) == pytest.approx(expected, rel=1e-8)
