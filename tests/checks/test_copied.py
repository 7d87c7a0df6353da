"""Paths that are copies of each other: what follows from that is told with it, and what does not is told on its own.

Seeds are fixed; what true paths show beside their copies is called a cause with probability 1e-3 a case under others.
"""

from __future__ import annotations

import numpy as np
import pytest

from procgen.checks.copied import Copied
from procgen.checks.verdict import Check
from tests.studies.departures import draw, spec_of, verdict


def ar(phi=0.6, df=None, level=0.0):
    law = {"law": {"student_t": {"df": df}}} if df else {}
    return [{"constant": level}, {"ar": {"phi": phi, "total_sd": 1, **law}}]


BODIES = {
    "ar": ar(),
    "heavy": ar(df=5),
    "walk": [{"random_walk": {"sd": 1}}],
    "garch": [{"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.85}}],
    "season": [{"seasonal": {"period": 24, "harmonics": [{"amplitude": 1}]}}, {"white_noise": {"sd": 1}}],
}
CUTS = {
    "each twice": lambda n: np.arange(n) // 2 * 2,
    "each ten times": lambda n: np.arange(n) // 10 * 10,
    "a quarter again": lambda n: np.where(np.arange(n) < 3 * n // 4, np.arange(n), np.arange(n) - 3 * n // 4),
    "one alone": lambda n: np.zeros(n, dtype=int),
    "drawn with replacement": lambda n: np.random.default_rng(n).integers(0, n, n),
}


@pytest.mark.parametrize("cut", CUTS)
@pytest.mark.parametrize("body", BODIES)
def test_all_that_departs_follows_from_copies(body, cut):
    for paths, steps, seed in ((600, 60, 1), (120, 200, 2)):
        x = draw(spec_of(BODIES[body], paths, steps, seed))["x"]
        found = verdict(BODIES[body], {"x": x[CUTS[cut](paths)]})
        assert len(found.headline) == 1, found.headline
        assert found.headline[0].startswith("x: structure: "), found.headline
        assert "repeat another one bit for bit" in found.headline[0]


NOISY = [*ar()[1:], {"white_noise": {"sd": 0.5}}]


@pytest.mark.parametrize(("drawn", "kind"), [(ar(0.7), "memory"), (ar(level=0.3), "level"), (NOISY, "spread")])
@pytest.mark.parametrize("cut", ["each twice", "a quarter again"])
def test_what_copies_do_not_make_is_a_cause_of_its_own(drawn, kind, cut):
    x = draw(spec_of(drawn, 600, 100, 4))["x"]
    structure, own = verdict(ar(), {"x": x[CUTS[cut](600)]}).headline
    assert structure.startswith("x: structure: ") and own.startswith(f"x: {kind}: "), (structure, own)


def test_series_that_are_copied_together_seem_to_depend_on_each_other():
    two = {"series": {"x": [{"white_noise": {"sd": 1}}], "y": [{"white_noise": {"sd": 1}}]}}
    for seed in range(4):
        values = draw(spec_of(two, 400, 50, seed))
        lines = verdict(two, {name: each[np.arange(400) // 20 * 20] for name, each in values.items()}).headline
        assert {line[:12] for line in lines} == {"x: structure", "y: structure"}, lines


def test_the_factor_is_what_variances_of_means_grow_by():
    prints = np.array([5, 5, 5, 7, 8, 8], dtype=np.uint64)
    copied = Copied.of(prints)
    assert copied.paths == 6 and copied.beside == 3 / 5
    shares = np.array([3, 1, 2]) / 6
    assert copied.factor / 6 == pytest.approx(np.sum(shares**2))  # the variance of the mean of three, so weighted


def test_a_value_far_out_and_a_path_apart_are_no_matter_of_copies():
    copied = Copied(100, 50.0, 0.9)

    def row(what, probe, note=""):
        return Check("x", what, probe, "level", 0.0, 9.0, 1.0, -30.0, note=note)

    assert not copied.explains(row("shocks: level by path", "worst: path 3"), 10.0)
    assert not copied.explains(row("shocks: farthest", "path 3, step 4", "one shock far out"), 10.0)
    assert not Copied(100, 2.0, 0.0).explains(row("shocks: farthest", "path 3, step 4", "tails are cut: none"), 10.0)
    assert copied.explains(row("shocks: farthest", "path 3, step 4", "tails are cut: none"), 10.0)
    assert copied.explains(row("mean", "step 4"), 10.0)
