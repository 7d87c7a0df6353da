"""A shock that its law all but excludes is named with its place, though the value may be an ordinary one."""

import json

import numpy as np
import pytest
from scipy import stats

from procgen.chance.laws import LAWS
from procgen.checks.farthest import KEPT, checks, farthest, merged
from procgen.checks.scores import Scores
from tests.studies.departures import draw, spec_of, verdict

NORMAL = Scores(LAWS["normal"]())
UNIFORM = Scores(LAWS["uniform"]())
GARCH = [{"garch": {"sd": 2, "alpha": 0.1, "beta": 0.85}}]
AR = [{"ar": {"phi": 0.7, "sd": 1}}]


def found(rows):
    return next(row for row in rows if row.what == "shocks: farthest")


@pytest.mark.parametrize("size", [4.5, 5.5, 9.0, 30.0])
@pytest.mark.parametrize("n", [1_000, 10_000_000])
def test_p_of_the_farthest_of_n_is_that_of_the_largest_of_n_normals_in_size(size, n):
    (check,) = checks("x", NORMAL, [[size, -3, -2, size, 7.0]], n)
    # The largest of n sizes has the n-th power of the half-normal's distribution function (scipy.stats).
    below = n * np.log1p(-2 * stats.norm.sf(size))
    above = np.log(-np.expm1(below)) if below < -1e-290 else -750.0
    assert check.log_p == pytest.approx(np.log(2) + min(below, above), rel=1e-9) if above > -700 else check.log_p < -400
    assert (check.probe, check.estimate) == ("path 2, step 3" if above < below else "all steps", pytest.approx(size))


@pytest.mark.parametrize("n", [1_000, 100_000])
def test_no_shock_beyond_three_sd_is_judged_as_if_one_were_there(n):
    (check,) = checks("x", NORMAL, [], n)
    assert check.log_p == pytest.approx(min(0, np.log(2) + n * np.log1p(-2 * stats.norm.sf(3))), rel=1e-9)
    assert check.note.startswith("tails are cut: of 100,000 shocks none ") if n > 1000 else not check.note


CUT = {
    "white noise": ([{"white_noise": {"sd": 2}}], lambda x: np.clip(x, -6, 6)),
    "t(5)": ([{"white_noise": {"sd": 2, "law": {"student_t": {"df": 5}}}}], lambda x: np.clip(x, -8, 8)),
    "uniform": ([{"white_noise": {"sd": 2, "law": "uniform"}}], lambda x: np.clip(x, -3.46, 3.46)),
}


@pytest.mark.parametrize("name", CUT)
def test_tails_that_are_cut_are_named(name):
    body, cut = CUT[name]
    values = draw(spec_of(body, 500, 200, 3))
    assert verdict(body, values).agrees is True
    values["x"] = cut(values["x"])
    judged = verdict(body, values)
    assert any("equal, the first at path " in line or "tails are cut" in line for line in judged.headline)
    note = found(judged.rows).note
    assert note.startswith("tails are cut: of 100,000 shocks none is farther out than ") or name == "uniform"


def test_shocks_that_are_clipped_are_named_though_values_are_not():
    z = np.clip(np.random.default_rng(4).standard_normal((500, 300)), -3.5, 3.5)
    values = np.zeros(z.shape)
    for t in range(z.shape[1]):
        values[:, t] = z[:, t] * (1 if t else 0.51**-0.5) + (0.7 * values[:, t - 1] if t else 0)
    judged = verdict(AR, {"x": values})
    assert "are equal, the first at path " in judged.headline[0] and "as if cut there" in judged.headline[0]
    assert any(row.note.startswith("tails are cut: ") for row in judged.rows if row.outcome == "departs")


def test_a_uniform_is_never_said_to_be_finer_than_a_double():
    end = 3.0**0.5
    (check,) = checks("x", UNIFORM, [[8.3, 0, 0, end, 600.0]], 100_000, ranks=True)
    assert check.log_p == pytest.approx(np.log(2 * 2e-15 * 100_000), rel=1e-6)
    # Rounding may have carried it there: 10 standard deviations of it are taken off.
    (check,) = checks("x", UNIFORM, [[8.3, 0, 0, end, 600.0]], 1000, noise=1e-12)
    assert check.log_p == pytest.approx(np.log(-2 * np.expm1(1000 * np.log1p(-2e-5 / (2 * end)))), rel=1e-3)


def test_true_shocks_are_flagged_as_often_as_stated():
    z = np.random.default_rng(6).standard_normal((50, 4000 * 80))
    p = []
    for rows in np.split(z, 4000, axis=1):
        p += [check.p for check in checks("x", NORMAL, farthest(rows, rows, rows, 0, 0, ()), rows.size)]
    # The law is exact: 200 expected, sd 13.8; five of these are passed once in 2e6 seeds.
    assert abs(np.count_nonzero(np.array(p) <= 0.05) - 200) < 69


@pytest.mark.parametrize("width", [1, 7, 64])
def test_the_farthest_are_the_same_however_the_data_are_cut(width):
    z = np.random.default_rng(2).standard_t(4, (640, 40))
    z[17, 3], z[100:110, :] = np.nan, 8.3  # many of one size
    kept = []
    for paths in np.split(np.arange(40), [11, 30]):
        mine = []
        for step in range(0, 640, width):
            tile = z[step : step + width, paths]
            mine = farthest(tile, tile, tile, int(paths[0]), step, mine)
        kept = merged([*kept, *json.loads(json.dumps(mine))])
    assert kept == farthest(z, z, z, 0, 0, ())
    assert [far[0] for far in kept] == sorted(np.abs(z[np.isfinite(z)]))[::-1][:KEPT]


@pytest.mark.parametrize("paths", [400, 2000])
def test_a_value_that_only_its_past_tells_to_be_absurd_leads_with_its_place(paths):
    values = draw(spec_of(GARCH, paths, 200, 3))
    assert verdict(GARCH, values).agrees is True
    values["x"][11, 145] = 600
    line = verdict(GARCH, values).headline[0]
    assert line.startswith("x: one shock far outside what the law allows: path 11, step 145, value 600, which given ")


def test_one_shock_of_seven_sd_is_found_in_a_million():
    values = draw(spec_of(AR, 2000, 500, 3))
    x = values["x"][11]
    x[145:] += (7.2 - (x[145] - 0.7 * x[144])) * 0.7 ** np.arange(500 - 145)  # the value is 5 sd from its mean
    judged = verdict(AR, values)
    assert judged.headline[0].startswith("x: one shock far outside what the law allows: path 11, step 145, value ")
    assert found(judged.rows).estimate == pytest.approx(7.2)
    assert [row.what for row in judged.rows if row.outcome == "departs"] == ["shocks: farthest"]


@pytest.mark.parametrize(
    ("body", "value"),
    [
        ({"poisson": {"mean": 1.2}}, 25),
        ({"negative_binomial": {"mean": 1.2, "size": 2}}, 90),
        ({"inar": {"mean": 3, "alpha": 0.5}}, 40),
    ],
    ids=["poisson", "negative binomial", "inar"],
)
def test_a_count_is_held_against_its_own_past(body, value):
    values = draw(spec_of([body], 400, 200, 3))
    assert verdict([body], values).agrees is True
    values["x"][11, 145] = value
    row = found(verdict([body], values).rows)
    assert (row.outcome, row.kind, row.probe) == ("departs", "structure", "path 11, step 145")


def test_many_wide_shocks_are_a_matter_of_spread():
    values = draw(spec_of(AR, 400, 200, 3))
    values["x"] *= 1.5
    judged = verdict(AR, values)
    assert judged.headline[0].startswith("x: spread: ")
    assert (found(judged.rows).outcome, found(judged.rows).kind) == ("departs", "law")
