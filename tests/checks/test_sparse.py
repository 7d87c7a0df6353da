"""Series of rare events: what a sample has not met is told by theory, and does not make a true ensemble depart."""

import math

import numpy as np
import pytest
from scipy import stats

from procgen.checks import judge
from procgen.checks.judge import Finding, Sample
from procgen.checks.judge_pools import _hidden
from procgen.checks.judgement import judged
from procgen.checks.planning import plan_of
from procgen.checks.recover import Route, dither
from procgen.checks.verdict import Check, Verdict
from tests.studies.departures import draw, gathered, spec_of

FLAG = [{"flag": {"share": 0.02}}]
COMPOUND = [{"compound_poisson": {"rate": 0.02, "mean": 5, "sd": 2}}]
POISSON = [{"poisson": {"mean": 0.02}}]


def rows(plan, body, seed, paths=150, steps=60):
    """Rows of an ensemble of its own seed, by a plan made once: of it only what spreads ranks has to do with a seed."""
    for way in plan.routes.values():
        if isinstance(way, Route):
            way.salt = f" of seed {seed}"
    return list(judged(gathered(plan, [(0, 0, draw(spec_of(body, paths, steps, seed)))])))


@pytest.mark.parametrize("body", [FLAG, COMPOUND, POISSON], ids=["flag", "compound poisson", "poisson"])
def test_true_sparse_series_depart_no_more_often_than_stated(body):
    plan = plan_of(spec_of(body, 150, 60, 0))
    departed = sum(Verdict(rows(plan, body, seed), 0.05).agrees is False for seed in range(120))
    assert departed <= stats.binom.isf(2e-7, 120, 0.05)  # 21; 24 to 40 in a hundred did for want of what theory knows


@pytest.mark.parametrize("share", [0.02, 0.2])
def test_skewness_of_a_path_s_average_product_against_its_exact_law(share):
    series = plan_of(spec_of([{"flag": {"share": share}}], 150, 60, 1)).series[0]
    # Products of independent deviations of a flag, each of them with moments of the Bernoulli law (scipy.stats).
    skew = float(stats.bernoulli(share).stats("s"))
    assert _hidden(series, series.pool, 1) == pytest.approx(skew**2 / math.sqrt(59), rel=1e-9)
    assert _hidden(series, series.pool, -1) == pytest.approx(skew / math.sqrt(60), rel=1e-9)


@pytest.mark.parametrize(
    ("body", "law"),
    [
        (POISSON, stats.poisson(0.02)),
        ([{"negative_binomial": {"mean": 2, "size": 1.5}}], stats.nbinom(1.5, 1.5 / 3.5)),
        ([{"poisson": {"mean": 900}}], stats.poisson(900)),
    ],
    ids=["rare counts", "negative binomial", "many counts"],
)
def test_skewness_of_counts_and_of_their_squares_against_sums_over_their_values(body, law):
    """Central moments summed value by value over the probabilities of scipy.stats."""
    series = plan_of(spec_of(body, 150, 60, 1)).series[0]
    k = np.arange(0, 2000)
    p, d = law.pmf(k), k - law.mean()
    for order in (1, 2):
        y = d**order - p @ d**order
        assert series.skewness(order) == pytest.approx((p @ y**3) / (p @ y**2) ** 1.5, rel=1e-6)


def test_skewness_of_a_lump_beside_a_density_is_that_of_a_sum_of_jumps():
    """A Poisson number of normal jumps: cumulants λ E(J^k) (Daley & Vere-Jones 2003, from memory)."""
    series = plan_of(spec_of(COMPOUND, 150, 60, 1)).series[0]
    second, third = 5**2 + 2**2, 5**3 + 3 * 5 * 2**2
    assert series.skewness(1) == pytest.approx(0.02 * third / (0.02 * second) ** 1.5, rel=1e-4)


def test_a_skewness_that_the_sample_does_not_show_lifts_the_tail():
    sample = Sample(150, 0.4, 1.0, 0.1, 0.0)
    plain, lifted = (judge.sample_mean(sample, 0.0, 1.0, hidden) for hidden in (0.0, 5.0))
    # The mean of 150 gamma variates of skewness 5, which has that of 0.4 (scipy.stats).
    exact = stats.pearson3(5.0 / math.sqrt(150)).sf(0.4 * math.sqrt(150))
    assert plain.log_p < lifted.log_p
    assert math.exp(lifted.log_p) == pytest.approx(2 * exact, rel=0.05)


def test_what_is_judged_is_the_same_at_every_usual_level():
    def found():
        doubt = judge.excess_doubt(100.0, 1000, "cases")  # of no weight at 0.05, and too much at 0.001 and below
        return [Check.of("x", "some", str(k), "memory", Finding(0, 0, 1, -40.0, lambda p: p, doubt)) for k in range(9)]

    outcomes = {level: [row.outcome for row in Verdict(found(), level).rows] for level in (0.05, 0.01, 0.001)}
    assert outcomes[0.05] == outcomes[0.01] == outcomes[0.001]
    assert judge.excess_doubt(100.0, 1000, "cases")(0.05 / 9) is None
    assert set(outcomes[0.05]) == {"untestable"}


def test_what_spreads_ranks_over_their_chances_differs_from_seed_to_seed():
    one, other = (plan_of(spec_of(FLAG, 150, 60, seed)).routes["x"] for seed in (1, 2))
    assert isinstance(one, Route)
    assert isinstance(other, Route)
    u = [dither(0, 150, 0, 60, "x" + way.salt) for way in (one, other)]
    assert abs(np.corrcoef(u[0].ravel(), u[1].ravel())[0, 1]) < 5 / math.sqrt(9000)


def test_a_check_that_is_not_judged_says_how_many_paths_it_asks_for():
    from procgen.checks.limits import few_paths
    from procgen.report.text import reported

    def said(*notes):
        rows = [Check("x", "some", "", "memory", outcome="reported", note=note) for note in notes]
        return reported(Verdict(rows, 0.001))

    assert said(few_paths(300, 500)) == [
        "reported: shown, not judged; fewer than 500 paths are too few for these checks"
    ]
    assert said(few_paths(60, 500), few_paths(60, 100))[0].endswith(
        "fewer than 100 or 500 paths are too few for these checks"
    )
    assert few_paths(300, 100) == "it is the same on all 300 paths: reported, not judged"
    assert said(few_paths(300, 100)) == ["reported: shown, not judged; the reasons stand below"]
