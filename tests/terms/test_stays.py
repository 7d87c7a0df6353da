"""Stays of several stages: a semi-Markov chain, against renewal equations and SciPy's negative binomial law."""

from itertools import pairwise

import numpy as np
import pytest
from scipy.stats import chisquare, nbinom

from procgen.spec.model import SpecError
from procgen.theory import theory

from .helpers import draw, graph_of

UP, DOWN = (6.0, 3), (4.0, 4)  # mean and stages: a sum of three geometric stays, and exactly four steps
CHAIN = "{chain: {states: [up, down], durations: {up: {mean: 6, stages: 3}, down: {mean: 4, stages: 4}}, start: up}}"
RESTING = CHAIN.replace(", start: up", "")
STEPS = 80


def lengths(mean, stages):
    """Chances of a stay of 0, 1, 2, .. steps: failures before `stages` successes, and these (SciPy's nbinom)."""
    return nbinom.pmf(np.arange(STEPS + 1) - stages, stages, stages / mean)


def chances_of_down():
    """P(down at t), a stay of `up` beginning at step 0, by the renewal equation: sums over when stays begin."""
    up, down = lengths(*UP), lengths(*DOWN)
    begins_up, begins_down = np.zeros(STEPS + 1), np.zeros(STEPS + 1)
    begins_up[0] = 1.0
    for t in range(1, STEPS + 1):
        begins_down[t] = sum(begins_up[t - n] * up[n] for n in range(1, t + 1))
        begins_up[t] = sum(begins_down[t - n] * down[n] for n in range(1, t + 1))
    lasts = 1.0 - np.cumsum(down)  # a stay of more than n steps
    return np.array([sum(begins_down[t - n] * lasts[n] for n in range(t + 1)) for t in range(STEPS)])


def test_chances_are_those_of_the_renewal_equation():
    graph = graph_of(f"  x: {CHAIN}", steps=STEPS)
    known = theory(graph.spec, graph)["x"]
    expected = chances_of_down()
    np.testing.assert_allclose(known.mean(np.arange(STEPS)), expected, rtol=0, atol=1e-12)
    np.testing.assert_allclose(known.variance(np.arange(STEPS)), expected * (1 - expected), rtol=0, atol=1e-12)


def test_shares_are_the_mean_stays():
    """A state's share is its mean stay over that of a cycle (Ross 1996, ch. 4, from memory)."""
    graph = graph_of(f"  x: {RESTING}", steps=STEPS)
    known = theory(graph.spec, graph)["x"]
    np.testing.assert_allclose(known.mean([0, 50]), 0.4, rtol=1e-13)
    assert known.stationarity.verdict == "strictly stationary"


def runs(x):
    """Lengths of the whole stays in each state, but for the first and the last of each path."""
    found = {0.0: [], 1.0: []}
    for path in x.T:
        edges = np.flatnonzero(np.diff(path)) + 1
        for begin, end in pairwise(edges):
            found[path[begin]].append(end - begin)
    return {state: np.array(lengths) for state, lengths in found.items()}


def test_stays_that_are_drawn_have_the_stated_lengths():
    """Chi-square of about 30,000 stays against nbinom: a chance of 1e-9 to fail for a right law, one fixed seed."""
    x = draw(graph_of(f"  x: {CHAIN}", steps=2000), 0, 150, [2000])["x"]
    found = runs(x)
    assert set(found[1.0]) == {4}
    count = np.bincount(np.minimum(found[0.0], 20), minlength=21)[3:]
    law = nbinom.pmf(np.arange(0, 17), 3, 0.5)
    expected = np.append(law, 1.0 - law.sum()) * count.sum()
    assert count.sum() > 20_000 and chisquare(count, expected).pvalue > 1e-9


def test_one_stage_is_the_memoryless_stay():
    one = draw(graph_of("  x: {chain: {states: [a, b], durations: {a: {mean: 6, stages: 1}, b: 4}}}"), 0, 20, [60])
    plain = draw(graph_of("  x: {chain: {states: [a, b], durations: {a: 6, b: 4}}}"), 0, 20, [60])
    assert np.array_equal(one["x"], plain["x"])


def test_branches_and_spreads_follow_the_state_and_not_the_stage():
    body = (
        "{regimes: {branches: {up: [{constant: 1}], down: [{constant: 5, as: low}]}, durations: {up: {mean: 6, "
        "stages: 3}, down: {mean: 4, stages: 4}}}}"
    )
    noise = "{switching_noise: {sd: {up: 1, down: 3}, durations: {up: {mean: 6, stages: 3}, down: 4}}}"
    graph = graph_of(f"  x: {body}\n  e: {noise}", steps=STEPS)
    assert set(np.unique(draw(graph, 0, 10, [STEPS])["x"])) == {1.0, 5.0}
    known = theory(graph.spec, graph)
    np.testing.assert_allclose(known["x"].mean([3]), 1 + 4 * 0.4, rtol=1e-13)
    np.testing.assert_allclose(known["e"].variance([3]), 0.6 * 1 + 0.4 * 9, rtol=1e-13)


@pytest.mark.parametrize(
    ("stay", "message"),
    [
        ("{mean: 3, stages: 4}", "expected a mean of at least 4 steps for a, got 3; each stage lasts a step or more"),
        ("{mean: 30, stages: 19}", "expected at most 20 stages in all, got 21"),
        ("{mean: 3}", "expected the key stages"),
        ("0.5", "expected at least 1 step for a, got 0.5; a state lasts a step or more"),
    ],
)
def test_refusals(stay, message):
    with pytest.raises(SpecError) as error:
        graph_of(f"  x: {{chain: {{states: [a, b], durations: {{a: {stay}, b: {{mean: 9, stages: 2}}}}}}}}")
    assert message in str(error.value)
