"""The slope of a long memory: its law under the stated process, and what it finds."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import toeplitz
from scipy.stats import kstest

import procgen as pg
from procgen.checks.judge import quadratic
from procgen.checks.slow import SlowLane, long_memory, plan_slow
from procgen.theory import theory

SPEC = "procgen: 1\nseed: {seed}\npaths: {paths}\ntime: {{steps: {steps}}}\nseries:\n  x: {body}\n"


def spec_of(body, paths=2, steps=400, seed=7):
    from procgen.chance.laws import LAWS
    from procgen.spec.reader import read_text
    from procgen.terms import catalogue

    return read_text(SPEC.format(body=body, paths=paths, steps=steps, seed=seed), catalogue(), LAWS)


def slow_of(body, steps):
    x = theory(spec_of(body, steps=steps))["x"]
    return x, plan_slow(x, steps, 0.0)


def estimates(slow, values):
    """Of values (steps, paths), seen in tiles."""
    lane, at = SlowLane(slow, values.shape[1]), 0
    for part in np.array_split(values, 7):
        lane.absorb(part, at)
        at += len(part)
    return lane.averages()


def normals(x, steps, paths, seed):
    """Paths of the stated law, (steps, paths), through the factor of its covariance: none of our recursions."""
    root = np.linalg.cholesky(toeplitz(x.autocovariance(np.arange(steps))))
    return root @ np.random.default_rng(seed).standard_normal((steps, paths))


BODIES = ("{arfima: {d: 0.3, phi: 0.4, sd: 1}}", "{fractional_gaussian_noise: {hurst: 0.3, sd: 2}}")
OTHERS = ("{ar: {phi: 0.9, sd: 1}}", "{random_walk: {sd: 1}}", "{exp: [{arfima: {d: 0.2, sd: 1}}]}")


@pytest.mark.parametrize("body", BODIES)
@pytest.mark.parametrize("steps", [300, 1100])
def test_p_is_uniform_under_the_stated_process(body, steps):
    """400 ensembles of 10 paths each; Kolmogorov's test at 1e-7, seeds fixed."""
    x, slow = slow_of(body, steps)
    found = estimates(slow, normals(x, steps, 4000, 1)).reshape(400, 10).mean(axis=1)
    p = np.exp([quadratic(slow.d + each, slow.eigenvalues, 10, slow.d).log_p for each in found])
    assert kstest(p, "uniform").pvalue > 1e-7 and 0.4 < p.mean() < 0.6


def test_its_spread_is_that_of_the_local_whittle_estimate():
    """sd 1/(2√Σν²), ν = log j less its mean; √m of it goes to 1/2 (Robinson 1995, theorem 2)."""
    _, slow = slow_of("{arfima: {d: 0.3, sd: 1}}", 512)
    sd = np.sqrt(2.0 * np.sum(slow.eigenvalues**2))
    log = np.log(np.arange(1, 65))
    assert len(slow.waves) == 128 and sd == pytest.approx(0.5 / (np.sqrt(64) * log.std()), rel=0.05)
    assert abs(slow.eigenvalues.sum()) < 1e-12  # no factor of the whole series moves it


def test_a_wrong_d_is_what_it_estimates():
    x, slow = slow_of("{arfima: {d: 0.3, sd: 1}}", 512)
    other, _ = slow_of("{arfima: {d: 0.26, sd: 3}}", 512)
    found = estimates(slow, normals(other, 512, 4000, 3))
    scale = float(np.mean(normals(other, 512, 400, 4) ** 2)) / float(np.mean(normals(x, 512, 400, 4) ** 2))
    assert slow.d + found.mean() / scale == pytest.approx(0.26, abs=0.01)


# Of the same variance and lag-one autocorrelation as arfima d 0.3, whose is d/(1 − d) (Hosking 1981).
SABOTEUR = "{arfima: {d: 0.25, phi: 0.09657915934, total_sd: 1}}"


def test_another_long_memory_of_the_same_variance_and_first_autocorrelation_is_named():
    right, wrong = (spec_of(body, 200, 1000) for body in ("{arfima: {d: 0.3, total_sd: 1}}", SABOTEUR))
    for lag in (0, 1):
        assert theory(right)["x"].autocovariance(lag) == pytest.approx(theory(wrong)["x"].autocovariance(lag), rel=1e-8)
    verdict = pg.validate(pg.render(wrong), spec=right)
    assert verdict.agrees is False
    assert verdict.headline[0].startswith("x: memory: ") and "long-memory slope" in verdict.headline[0]
    assert pg.validate(pg.render(right)).agrees


@pytest.mark.parametrize("body", OTHERS)
def test_there_is_none_where_it_has_no_exact_law(body):
    x, slow = slow_of(body, 400)
    assert slow is None
    assert long_memory(x) == 0.0 or not x.gaussian
