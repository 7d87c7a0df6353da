"""One absurd value is named with its place, and leads; a level, spread or law that is off is not taken for it."""

import json

import numpy as np
import pytest
from scipy import stats

import procgen as pg
from procgen.checks import extremes, tails
from procgen.checks.extremes import KEPT, Reach, checks, merged
from procgen.checks.planning import plan_of
from procgen.checks.structure import Structure
from procgen.checks.words import name_of
from tests.studies.departures import draw, spec_of, verdict

AR = [{"constant": 10}, {"ar": {"phi": 0.6, "sd": 1}}]
HEAVY = [{"white_noise": {"sd": 1, "law": {"student_t": {"df": 5}}}}]
COUNTS = [{"poisson": {"mean": 1.2}}]


class Normal:
    """What is asked of theory, for independent normals of mean 3 and sd 2."""

    gaussian = True

    def mean(self, steps):
        return np.full(len(steps), 3.0)

    def variance(self, steps):
        return np.full(len(steps), 4.0)


class Student(Normal):
    """The same moments, of Student's law with 5 degrees of freedom: excess kurtosis 6 / (5 - 4)."""

    gaussian, highest_moment = False, 5.0

    excess_kurtosis = None  # only asked for at a step

    def excess_kurtosis_at(self, step):
        return 6.0


def far(size):
    return [size, 0, 0, 3.0 + 2.0 * size, 3.0, 2.0]


def test_chance_of_one_value_against_scipy():
    normal, student = Reach(Normal(), 0.0), Reach(Student(), 0.0)
    law = stats.t(5, scale=np.sqrt(3 / 5))
    for size in (4.0, 6.0, 20.0, 1e4):
        assert normal.log_chance(far(size)) == pytest.approx(np.log(2) + stats.norm.logsf(size))
        assert np.exp(student.log_chance(far(size))) >= 2 * law.sf(size)  # a bound, of order d^-4
    assert student.log_chance(far(100.0)) == pytest.approx(np.log(9e-8))
    assert Reach(Student(), 4.0).log_chance(far(5.0)) == pytest.approx(np.log(9.0 / 4.0**4))  # a cell of rounding less


@pytest.mark.parametrize("size", [3.0, 4.5, 50.0])
def test_known_extremes_of_steps_leave_out_nothing(size):
    reach = plan_of(spec_of(AR, 1, 256, 1)).precision[0].reach
    x = np.clip(draw(spec_of(AR, 1, 256, 1))["x"].T, 6.5, 13.5)  # within 2.8 sd of the mean
    x[77] = 10.0 - 1.25 * size
    found = reach.look(x, 0, 0, [], (x.min(axis=1), x.max(axis=1)))
    assert found == reach.look(x, 0, 0, [])
    assert [-far[2] for far in found[0]] == [77] * (size > 4) and found[1] == (size > 4, size > 40)


def test_true_values_are_flagged_no_more_often_than_stated():
    x, reach = 3.0 + 2.0 * np.random.default_rng(5).standard_normal((50, 2000 * 20)), Reach(Normal(), 0.0)
    p = []
    for rows in np.split(x, 2000, axis=1):
        p += [check.p for check in checks("x", reach, reach.look(rows, 0, 0, [])[0], rows.size)]
    # Bonferroni over 1,000 values is all but exact here: 100 expected, sd 10, hence beyond 150 once in 2e6 seeds.
    assert 60 < np.count_nonzero(np.array(p) <= 0.05) < 150


@pytest.mark.parametrize("width", [1, 7, 64])
def test_the_farthest_are_the_same_however_the_data_are_cut(width):
    x = 3.0 + 2.0 * np.random.default_rng(2).standard_t(4, (640, 40))
    x[17, 3] = np.nan
    reach, found = Reach(Normal(), 0.0), []
    for paths in np.split(np.arange(40), [11, 30]):
        mine = []
        for step in range(0, 640, width):
            mine = reach.look(x[step : step + width, paths], int(paths[0]), step, mine)[0]
        found = merged([*found, *json.loads(json.dumps(mine))])
    sizes = np.nan_to_num(np.abs(x - 3.0) / 2.0)
    order = np.argsort(-sizes, axis=None)[:KEPT]
    assert [size for size, *_ in found] == pytest.approx(np.sort(sizes.ravel()[order])[::-1])
    assert [(-step, -path) for _, path, step, *_ in found] == [divmod(int(k), 40) for k in order]


def test_sums_of_two_processes_merge():
    from procgen.checks.structure import Precision

    parts = [Structure([Precision("x", "float64", None, True)], 5) for _ in range(2)]
    parts[0].far["x"], parts[1].far["x"] = [far(5.0)], [far(9.0)]
    parts[0].merge(parts[1])
    assert parts[0].far["x"] == [far(9.0), far(5.0)]


@pytest.mark.parametrize("body", [AR, HEAVY, COUNTS], ids=["ar", "heavy tails", "counts"])
def test_one_absurd_value_leads_with_its_place(body):
    values = draw(spec_of(body, 400, 200, 3))
    assert verdict(body, values).agrees is True
    values["x"][11, 145] = 1e6
    found = verdict(body, values)
    mean = {"ar": 10, "white_noise": 0, "poisson": 1.2}[next(iter(body[-1]))]
    assert found.agrees is False
    assert found.headline[0].startswith(
        f"x: one value far outside what the law allows: path 11, step 145, value 1e+06 (expected about {mean} ± "
    )
    assert all(abs(row.estimate or 0.0) <= 1.0 for row in found.rows if name_of(row).endswith("correlation"))


def test_several_absurd_values_are_counted():
    values = draw(spec_of(AR, 400, 200, 3))
    values["x"][:3, 50] = -999.0, -998.0, 1001.0
    line = verdict(AR, values).headline[0]
    assert line.startswith("x: 3 values far outside what the law allows: the farthest path ") and "value " in line


def test_a_value_that_marks_what_is_missing_is_told_as_one():
    values = draw(spec_of(AR, 400, 200, 3))
    values["x"][np.random.default_rng(1).random((400, 200)) < 0.01] = -999.0
    line = verdict(AR, values).headline[0]
    count = np.count_nonzero(values["x"] == -999.0)
    assert line.startswith(f"x: {count} values far outside what the law allows: such as path ")
    assert "value −999 (expected about 10 ± 1.25); all of them are this value, as if it marked what is missing" in line


@pytest.mark.parametrize(
    ("change", "first"),
    [
        (lambda x: x + 12.5, "x: level: the mean is higher than stated"),
        (lambda x: 10 + 2 * (x - 10), "x: spread: the variance is larger than stated"),
        (lambda x: 10 + 100 * (x - 10), "x: spread: the variance is larger than stated"),
    ],
    ids=["mean 10 sd off", "sd doubled", "sd times 100"],
)
@pytest.mark.parametrize("paths", [30, 400])
def test_a_level_or_spread_that_is_far_off_is_not_taken_for_absurd_values(change, first, paths):
    values = draw(spec_of(AR, paths, 200, 3))
    values["x"] = change(values["x"])
    assert verdict(AR, values).headline[0].startswith(first)


def test_heavier_tails_are_a_matter_of_the_law():
    normal, heavy = [{"white_noise": {"sd": 1}}], [{"white_noise": {"sd": 1, "law": {"student_t": {"df": 5}}}}]
    found = verdict(normal, draw(spec_of(heavy, 400, 200, 3)))
    assert found.headline[0].startswith("x: law: ")


def test_many_values_that_differ_are_not_taken_for_a_mark():
    values = draw(spec_of(AR, 400, 200, 3))
    values["x"] = np.tile(1e3 * np.arange(200.0), (400, 1))  # the 400 farthest are one value, those of the last step
    verdict_of_all = verdict(AR, values)
    assert verdict_of_all.agrees is False
    assert "as if it marked" not in "".join(row.note for row in verdict_of_all.rows)


@pytest.mark.parametrize("count", [31, 32, 40, 800])
def test_a_small_share_of_spikes_is_told_first(count):
    values = draw(spec_of(AR, 400, 200, 3))
    at = np.random.default_rng(2).choice(80_000, count, replace=False)
    values["x"].ravel()[at] += 15 * 1.25
    line = verdict(AR, values).headline[0]
    assert line.startswith(f"x: {count} values far outside what the law allows: the farthest path ")
    assert "as if it marked" not in line


def test_a_law_with_heavier_tails_is_told_as_a_law():
    shocks = {"ar": {"phi": 0.6, "sd": 1, "law": {"student_t": {"df": 5}}}}
    values = draw(spec_of([{"constant": 10}, shocks], 1000, 200, 3))
    found = verdict(AR, values)
    assert found.headline[0].startswith("x: law: ")
    assert "as if it marked" not in "".join(row.note for row in found.rows)


BODIES = {
    "ar": AR,
    "seasonal": [{"seasonal": {"period": 24, "harmonics": [{"amplitude": 3}]}}, {"ar": {"phi": 0.7, "sd": 2}}],
    "garch": [{"garch": {"sd": 1.5, "alpha": 0.1, "beta": 0.8}}],
    "counts": [{"poisson": {"mean": 6}}],
    "walk": [{"random_walk": {"sd": 1}}],
    "two": [{"ar": {"phi": 0.7, "sd": 2}}, {"white_noise": {"sd": 1}}],
    "no chance": [{"seasonal": {"period": 24, "harmonics": [{"amplitude": 3}]}}],
    "decimals": {"procgen": 1, "paths": 60, "time": {"steps": 80}, "series": {"x": {"decimals": 2, "of": AR}}},
}


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("body", BODIES.values(), ids=BODIES)
def test_one_value_of_any_size_is_named(body):
    # 9.96921e36 is what NetCDF fills gaps with (NC_FILL_FLOAT), 1.7e308 nearly the largest double.
    values = draw(spec_of(body, 60, 80, 3))
    for huge in (1e3, 1e12, 1e20, 9.96921e36, 1e60, 1e155, 1.7e308):
        spoiled = values["x"].copy()
        spoiled[5, 60] = huge
        line = verdict(body, {"x": spoiled}).headline[0]
        if body is BODIES["no chance"]:
            assert line.startswith(f"x: level: a value is {huge:.10g}, stated ")
        else:
            seen = f"value {huge:.6g}".replace("-", "−")
            assert line.startswith("x: one value far outside what the law allows: path 5, step 60, " + seen)


def test_tail_is_lifted_by_its_limit_far_out():
    # phi(z) / Q(z) = z + 1/z - 2/z^3 ... (Abramowitz & Stegun 26.2.12)
    for z in (9e3, 2e4, 1e8, 1e40):
        assert tails.lift(z, 24.0) == pytest.approx(z**4, rel=1e-6)


@pytest.mark.parametrize(("term", "asked"), [({"ar": {"phi": 0.5, "sd": 1}}, 1), ({"random_walk": {"sd": 1}}, 4)])
def test_what_does_not_depend_on_the_step_is_computed_once(monkeypatch, term, asked):
    theory = pg.theory({"seed": 1, "paths": 1, "time": {"steps": 10}, "series": {"x": [{"constant": 3}, term]}})["x"]
    monkeypatch.setattr(extremes, "_CHUNK", 64)
    reach, calls, original = Reach(theory, 0.0, 256), [], type(theory).mean
    monkeypatch.setattr(type(theory), "mean", lambda self, steps: (calls.append(1), original(self, steps))[1])
    mean, sd = reach._at(30, 200)
    assert len(calls) == asked
    np.testing.assert_array_equal(mean, theory.mean(np.arange(30, 230)))
    np.testing.assert_array_equal(sd, np.sqrt(theory.variance(np.arange(30, 230))))
