"""Which departure is told first, where one makes the others."""

import re

import numpy as np
import pytest

from procgen.checks.lifted import Lifted
from procgen.checks.verdict import Check
from tests.checks.test_chains import chain
from tests.studies.departures import draw, spec_of, verdict


def ar(phi, df):
    return [{"ar": {"phi": phi, "sd": 1, "law": {"student_t": {"df": df}} if df else "laplace"}}]


@pytest.mark.parametrize(
    ("df", "paths", "steps", "phi"),
    [(4, 200, 100, 0.6), (3, 40, 150, 0.3), (3, 200, 100, 0.3), (5, 200, 100, -0.6), (None, 200, 100, 0.6)],
)
def test_memory_of_the_other_sign_is_no_matter_of_spread(df, paths, steps, phi):
    found = verdict(ar(phi, df), draw(spec_of(ar(-phi, df), paths, steps, 7)))
    assert found.headline[0].startswith("x: memory: "), found.headline


@pytest.mark.parametrize("df", [3, 5, None])
def test_a_wider_spread_stays_one(df):
    wide = ar(0.6, df)
    wide[0]["ar"]["sd"] = 1.3
    found = verdict(ar(0.6, df), draw(spec_of(wide, 200, 100, 7)))
    assert found.headline[0].startswith("x: spread: "), found.headline


@pytest.mark.parametrize(
    ("drawn", "stated", "paths", "steps"), [(1, 2, 1000, 100), (1, 4, 1, 20_000), (1, 2, 200, 300)]
)
def test_stays_of_another_law_are_told_as_such(drawn, stated, paths, steps):
    values = draw(spec_of([chain(drawn)], paths, steps, 7))
    line = verdict([chain(stated)], values).headline[0]
    assert line.startswith("x: memory: lengths of stays are not as stated (share of "), line


@pytest.mark.parametrize(
    ("drawn", "stated"),
    [
        ([{"inar": {"alpha": 0.8, "mean": 25}}], [{"inar": {"alpha": 0.8, "mean": 5}}]),
        ([{"poisson": {"mean": 25}}], [{"poisson": {"mean": 5}}]),
        ([*ar(0.6, 5), {"constant": 9}], ar(0.6, 5)),
    ],
)
def test_a_wrong_level_comes_before_the_products_that_it_makes(drawn, stated):
    """About a mean that is far off, all products are large: of shocks, and of neighbouring paths too."""
    line = verdict(stated, draw(spec_of(drawn, 200, 100, 7))).headline[0]
    assert line.startswith("x: level: the mean is ") and "also " in line, line


def test_what_all_paths_have_in_common_at_a_step_is_no_level_of_all_steps():
    rng = np.random.default_rng(4)
    values = {"x": np.sqrt(0.5) * (rng.normal(size=(200, 100)) + rng.normal(size=100))}
    rows = verdict([{"white_noise": {"sd": 1}}], values).rows
    row = next(row for row in rows if row.what == "shocks: neighbouring paths")
    assert row.outcome == "departs" and not Lifted(rows).explains(row)


def test_what_a_level_explains_is_half_of_what_is_seen():
    def row(what, probe, theory, estimate):
        return Check("x", what, probe, "level", theory, estimate, 1.0, -50.0)

    rows = [row("mean", "step 5", 1.0, 3.0), row("shocks: mean", "all steps", 0.0, 0.5)]
    lifted = Lifted(rows)
    for probe, estimate, explained in (("step 5", 9.0, True), ("step 5", 9.1, False), ("step 6", 2.0, False)):
        assert lifted.explains(row("variance", probe, 1.0, estimate)) is explained
    assert lifted.explains(row("shocks: autocorrelation", "lag 1", 0.0, 0.5))
    assert not lifted.explains(row("shocks: autocorrelation", "lag 1", 0.0, 0.51))
    assert lifted.explains(row("shocks: variance of sums", "64 steps", 1.0, 33.0))


def test_paths_of_different_spread_are_told_in_percent_of_their_sd():
    rng = np.random.default_rng(3)
    values = {"x": rng.normal(size=(200, 200)) * np.where(np.arange(200) % 2, 1.1, 0.9)[:, None]}
    line = verdict([{"white_noise": {"sd": 1}}], values).headline[0]
    said = re.search(r"the shocks' sd differs from path to path, by about (.+) %", line)
    assert said and 8.0 < float(said[1]) < 12.0, line


T = np.arange(20_000)
SEASONS = {
    "peak one step off": lambda size: size * np.cos(2 * np.pi * (T - 17) / 24),
    "sine for cosine": lambda size: size * np.sin(2 * np.pi * (T - 18) / 24),
    "another period": lambda size: size * np.cos(2 * np.pi * (T - 18) / 25),
    "left out": lambda size: 0.0 * T,
}


def season(size, phi=0.7):
    """Of an autoregression of sd 1 / sqrt(1 - 0.7²) = 1.4, beside a season of 24 steps."""
    body = {"period": 24, "harmonics": [{"amplitude": size, "peak": 18}]}
    return [{"constant": 10}, {"seasonal": body}, {"ar": {"phi": phi, "sd": 1}}]


@pytest.mark.parametrize("paths", [1, 3])
@pytest.mark.parametrize("size", [1.4, 3])
@pytest.mark.parametrize("mistake", SEASONS)
def test_a_wrong_season_of_few_long_paths_is_a_matter_of_level(mistake, size, paths):
    """What recurs at each phase makes shocks follow each other, and their spread, law and clustering are wrong, too."""
    steps = len(T) if paths == 1 else 5000
    noise = draw(spec_of([{"constant": 10}, {"ar": {"phi": 0.7, "sd": 1}}], paths, steps, 5))["x"]
    line = verdict(season(size), {"x": noise + SEASONS[mistake](size)[:steps]}).headline[0]
    assert line.startswith("x: level: "), line
    assert mistake == "another period" or "most at phase " in line, line


@pytest.mark.parametrize(("phi", "kind"), [(0.65, "memory"), (0.9, "memory")])
def test_memory_beside_a_right_season_stays_memory(phi, kind):
    line = verdict(season(3), draw(spec_of(season(3, phi), 1, 20_000, 5))).headline[0]
    assert line.startswith(f"x: {kind}: ") and "level" not in line, line
