"""Copies of paths of counts, and of what a term has rounded: found where chance makes no two paths equal.

Seeds are fixed. Chance makes the shares of equal starts exceed what is asserted with probability 1e-8 at most.
"""

from __future__ import annotations

import numpy as np
import pytest

from procgen.checks.judgement import _chance_of_equal
from procgen.checks.planning import plan_of
from tests.studies.departures import draw, spec_of, verdict


def rounded(to, **ar):
    return [{"round": {"of": [{"ar": ar}], "to": to}}]


BODIES = {
    "rounded": rounded(0.5, phi=0.6, sd=1),
    "coarse": rounded(2, phi=0.6, sd=1),
    "slow": rounded(0.5, phi=0.95, total_sd=1),
    "inar": [{"inar": {"alpha": 0.6, "mean": 5}}],
    "sticky inar": [{"inar": {"alpha": 0.9, "mean": 1}}],
    "clustered inar": [{"inar": {"alpha": 0.5, "mean": 2, "size": 0.5}}],
    "poisson": [{"poisson": {"mean": 0.3}}],
    "zero inflated": [{"zero_inflated": {"of": [{"poisson": {"mean": 4}}], "share": 0.9}}],
}
LIKELY = ("sticky inar", "zero inflated")  # of 300 steps, in which two paths may be equal by chance


def chance(body, steps):
    plan = plan_of(spec_of(body, 200, steps, 1))
    return _chance_of_equal(plan.series[0], plan)


@pytest.mark.parametrize("name", BODIES)
def test_paths_are_equal_at_first_no_oftener_than_the_chance_that_is_taken(name):
    """All pairs of 3,000 paths so many places apart, of 60 places, by their first steps."""
    x = draw(spec_of(BODIES[name], 3000, 12, 3))["x"]
    same = [np.cumprod(x == np.roll(x, shift, axis=0), axis=1).mean(axis=0) for shift in range(1, 61)]
    seen, one = np.mean(same, axis=0), chance(BODIES[name], 120) ** (1 / 120)
    for k in (5, 7, 9):
        assert seen[k] <= seen[0] * one**k + 1e-4, (k, seen, one)


@pytest.mark.parametrize("name", BODIES)
def test_copies_are_found(name):
    body = BODIES[name]
    for seed in range(2):
        x = draw(spec_of(body, 120, 300, seed))["x"]
        assert verdict(body, {"x": x}, 1e-8).agrees is not False
        x[17] = x[3]
        lines = verdict(body, {"x": x}).headline
        assert name in LIKELY or lines[0].startswith("x: structure: one path repeats another one bit for bit"), lines
    x[1::2] = x[::2]
    lines = verdict(body, {"x": x}).headline
    assert name in LIKELY or (lines[0].startswith("x: structure: ") and len(lines) == 1), lines


def test_what_may_stay_is_not_looked_at():
    for body in ([{"flag": {"share": 0.2, "stay": 4}}], [{"intermittent": {"share": 0.2, "size": 12, "sd": 5}}]):
        assert chance(body, 60) == 1.0
