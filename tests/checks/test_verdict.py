"""Holm's procedure, outcomes, the JSON shape, and the words."""

import json
import math

import numpy as np
import pytest
from statsmodels.stats.multitest import multipletests

from procgen.checks.judge import Sample, anderson_darling, normal_mean, sample_mean, unit
from procgen.checks.judgement import judged
from procgen.checks.planning import plan_of
from procgen.checks.verdict import COLUMNS, Check, Verdict, holm
from procgen.checks.words import alike, p_text, side_by_side
from tests.studies.departures import draw, gathered, spec_of


def test_holm_of_four():
    # REFERENCES 12.9, Holm (1979), computed.
    np.testing.assert_allclose(holm([0.01, 0.04, 0.03, 0.005]), [0.03, 0.06, 0.06, 0.02])


def test_holm_of_fifteen():
    # REFERENCES 12.10, data of Benjamini & Hochberg (1995), section 3.2.
    p = [
        0.0001,
        0.0004,
        0.0019,
        0.0095,
        0.0201,
        0.0278,
        0.0298,
        0.0344,
        0.0459,
        0.3240,
        0.4262,
        0.5719,
        0.6528,
        0.759,
        1,
    ]
    adjusted = holm(p)
    np.testing.assert_allclose(adjusted[:9], [0.0015, 0.0056, 0.0247, 0.114, 0.2211, 0.278, 0.278, 0.278, 0.3213])
    assert (adjusted[9:] == 1).all()
    assert np.count_nonzero(adjusted <= 0.05) == 3


def test_holm_against_statsmodels():
    p = np.random.default_rng(1).random(40) ** 3
    np.testing.assert_allclose(holm(p), multipletests(p, method="holm")[1], rtol=1e-12)
    assert holm([]).size == 0


def check(z, kind="memory", series="x", what="shocks: autocorrelation", probe="lag 1"):
    return Check.of(series, what, probe, kind, unit(z, 0.001))


def test_outcomes_and_order():
    rows = [check(1.0), check(9.0), Check("x", "covariance", "", "memory", outcome="untestable", note="no variance")]
    verdict = Verdict(rows, 0.001)
    assert verdict.agrees is False
    assert verdict.verdict == "departs"
    assert verdict.counts == {"departs": 1, "agrees": 1, "untestable": 1}
    assert [row.outcome for row in verdict.rows] == ["departs", "agrees", "untestable"]


def test_nothing_judged_is_no_agreement():
    verdict = Verdict([Check("x", "moments", "", "level", outcome="untestable", note="no variance")], 0.001)
    assert verdict.agrees is None
    assert verdict.verdict == "untestable"
    facts_alone = Verdict([Check.fact("x", "finite values", "all steps", "")], 0.001)
    assert facts_alone.agrees is None
    known = Check("x", "values", "all steps", "level", outcome="agrees")  # a series without chance that is its mean
    assert Verdict([known], 0.001).agrees is True


def test_no_agreement_without_a_look_at_the_spread():
    level = [check(0.5, kind="level"), Check("x", "variance", "", "spread", outcome="untestable", note="no variance")]
    assert Verdict(level, 0.001).agrees is None
    assert "nothing about the spread of x" in Verdict(level, 0.001).title
    part = Verdict([check(0.5, kind="level"), check(0.5, kind="spread")], 0.001)
    assert part.agrees is True
    assert part.title == (
        "AGREES on level and spread only: memory, clustering, law and dependence of x could not be judged"
    )
    assert Verdict([check(0.5, kind="level"), check(9.0, kind="level")], 0.001).agrees is False


def test_what_cannot_be_trusted_leaves_the_family():
    skewed = Check.of("x", "variance", "step 9", "spread", sample_mean(Sample(150, 0.0, 1.4, 2.8, 12.0), 1.0))
    verdict = Verdict([skewed, check(2.0, kind="spread")], 0.001)
    assert skewed.outcome == "untestable"
    assert "too few" in skewed.note
    assert skewed.p is None
    assert verdict.agrees is True
    assert verdict.rows[0].detectable == pytest.approx(0.001 * (3.2905 + 1.2816), rel=1e-3)  # level 0.001 / 1


def test_json_has_the_published_shape():
    rows = [check(9.0), Check("y", "mean", "step 0", "level", theory=float("inf"), outcome="reported", note="a reason")]
    data = json.loads(Verdict(rows, 0.01).to_json())
    assert list(data) == ["verdict", "title", "headline", "judged", "false_alarm", "checks"]
    assert data["verdict"] == "departs"
    assert data["title"].startswith("DEPARTS") and data["headline"][0].startswith("x: ")
    first, second = data["judged"]
    assert first["series"] == "x" and first["all"] is False and "law" in first["not_judged"]
    assert second["judged"] == [] and second["not_judged"]["level"] == "a reason"
    assert data["false_alarm"] == 0.01
    assert [tuple(row) for row in data["checks"]] == [COLUMNS, COLUMNS]
    assert data["checks"][1]["theory"] is None
    assert 0 <= data["checks"][0]["p"] < 1e-15


def test_table_has_a_row_a_check():
    verdict = Verdict([check(0.5), check(1.5)], 0.001)
    assert list(verdict.checks.columns) == list(COLUMNS)
    assert len(verdict.checks) == 2


def test_headline_names_series_and_kind_the_largest_first():
    rows = [
        check(9.0),
        check(12.0, kind="spread", what="shocks: variance", probe="all steps"),
        check(30.0, series="y", kind="level", what="mean", probe="step 4"),
        Check.fact("z", "finite values", "all steps", "1 value is not finite, the first at path 3, step 4"),
        Check.of("x", "mean", "step 1", "level", normal_mean(0.0, 0.0, 1.0, 5)),
    ]
    assert Verdict(rows, 0.001).headline == [
        "z: structure: 1 value is not finite, the first at path 3, step 4",
        "y: level: the mean is higher than stated (mean at step 4 is 0.03, stated 0, p 9.8e−198)",
        "x: spread: the variance is larger than stated (shocks: variance at all steps is 0.012, stated 0, p 3.6e−33); "
        "also memory, which may follow from it",
    ]


def of(what, estimate, log_p, kind, series="x", probe="all steps", theory=0.0):
    return Check(series, what, probe, kind, theory, estimate, 0.001, log_p)


@pytest.mark.parametrize(
    ("shocks", "first"),
    [
        # The sums of normal shocks, shifted by 5 sd: the shape of their law is farther off than their mean.
        ([("shocks: mean", 5.0, -1e6, "level"), ("shocks: shape of the law", 7.16, -2e6, "law")], "level"),
        ([("shocks: variance", 0.01, -1.4e5, "spread"), ("shocks: shape of the law", 2.2, -2e5, "law")], "spread"),
        # Another law of the same variance, whose mean is off by a little: here the shape stands for itself.
        ([("shocks: mean", 0.05, -100.0, "level"), ("shocks: shape of the law", 0.4, -6e3, "law")], "law"),
        # Bounded scores of a heavy-tailed law see a large shift as spread, too: shift 5 makes 2.61 and 4.4.
        ([("shocks: level score", 2.61, -2e5, "level"), ("shocks: spread score", 4.4, -6e5, "spread")], "level"),
        ([("shocks: level score", 0.3, -3e3, "level"), ("shocks: spread score", 1.5, -6e4, "spread")], "spread"),
    ],
)
def test_what_follows_from_a_level_or_spread_that_is_far_off_does_not_lead(shocks, first):
    rows = [of(what, estimate, log_p, kind) for what, estimate, log_p, kind in shocks]
    assert Verdict(rows, 0.001).headline[0].startswith(f"x: {first}: ")


def test_what_is_off_alike_at_all_steps_is_told_before_what_is_off_step_by_step():
    by_step = of("shocks: level by step", 0.4, -900.0, "level", probe="sum over steps")
    mean = of("shocks: mean", 0.38, -800.0, "level")
    assert "the mean is higher than stated (shocks: mean" in Verdict([by_step, mean], 0.001).headline[0]
    small = of("shocks: mean", 0.03, -30.0, "level")
    assert "the shocks' mean at a step" in Verdict([by_step, small], 0.001).headline[0]


def test_shares_of_events_have_plain_names():
    rows = [
        of("share: none", 0.37, -900.0, "level", theory=0.3),
        of("mean over steps", 1.08, -90.0, "level", theory=1.2),
        of("share: jumps", 0.1, -30.0, "level", series="y", theory=0.2),
        of("share: on after on", 0.5, -25.0, "memory", series="z", theory=0.6),
    ]
    assert Verdict(rows, 0.001).headline == [
        "x: share of zeros: larger than stated (share of zeros at all steps is 0.37, stated 0.3, p < 1e−300); also "
        "level, which may follow from it",
        "y: rate of jumps: smaller than stated (rate of jumps at all steps is 0.1, stated 0.2, p 9.4e−14)",
        "z: memory: values follow earlier ones otherwise than stated (share of on after on at all steps is 0.5, stated "
        "0.6, p 1.4e−11)",
    ]


def test_a_correlation_is_called_so_only_where_it_can_be_one():
    for estimate, name in ((0.4, "shocks: autocorrelation"), (-7.5e6, "shocks: autocovariance in stated variances")):
        row = of("shocks: autocorrelation", estimate, -5000.0, "memory", probe="lag 1")
        verdict = Verdict([row], 0.001)
        assert f"({name} at lag 1 is " in verdict.headline[0]
        assert f"  {name}  lag 1" in verdict.text()
        assert "< 1e−300" in verdict.text() and "1e−2" not in verdict.text()


def test_statistics_are_told_by_what_was_compared():
    """A law has no value, and neither have sums: what was computed of them is named."""
    uniforms = np.random.default_rng(1).random(200) ** 2
    rows = [
        Check.of("x", "law", "step 0", "law", anderson_darling(uniforms)),
        of("shocks: variance of sums", 41.93, -60.0, "memory", probe="16 steps", theory=1.0),
        of("shocks: neighbouring paths", 0.08377, -50.0, "dependence", probe="path − 1"),
    ]
    law, sums, paths = (Verdict([row], 0.001).headline[0] for row in rows)
    assert f"(the Anderson–Darling statistic of the values at step 0 is {rows[0].estimate:.4g}, expected about 1" in law
    assert "(sums of shocks over 16 steps have 41.93 times the variance of independent ones, stated 1, p" in sums
    assert "(shocks of path p and p − 1 correlate by 0.08377, stated 0, p" in paths


def test_p_is_rounded_to_two_digits_and_not_down_to_a_power_of_ten():
    said = [p_text(math.log(p)) for p in (0.00012, 9.9e-6, 9.96e-6, 1.04e-6, 3.14159e-200)]
    assert said == ["0.0001", "9.9e−6", "1e−5", "1e−6", "3.1e−200"]


def test_two_numbers_that_differ_are_shown_to_differ():
    pairs = ((120.0004, 120.0), (0.03, 0.0), (5.0, 5.0), (None, 2.0), (1 + 2**-52, 1.0))
    said = [side_by_side(*both, 4) for both in pairs]
    assert said[:4] == [("120.0004", "120"), ("0.03", "0"), ("5", "5"), ("–", "2")]
    assert said[4][0] != said[4][1]
    row = of("mean", 120.0004, -200.0, "level", probe="step 4", theory=120.0)
    verdict = Verdict([row], 0.001)
    assert "mean at step 4 is 120.0004, stated 120, p" in verdict.headline[0]
    assert "120  120.0004" in verdict.text()


def test_a_known_value_that_is_missed_says_by_how_much():
    values = draw(spec := spec_of([{"constant": 120}, {"random_walk": {"start": 0, "sd": 1}}], 150, 20, 3))
    values["x"] = values["x"] + 4e-4  # the first value of a walk is known
    (row,) = [row for row in judged(gathered(plan_of(spec), [(0, 0, values)])) if row.what == "constant"]
    assert "must be 120 at step 0; the paths' mean is 120.0004, their sd" in row.note
    assert Verdict([row], 0.001).headline == [f"x: level: {row.note}"]


def test_reasons_that_differ_in_counts_alone_are_told_once():
    notes = [f"{n} paths are too few for the skewed tail that a p of 2e-05 lies in" for n in (264, 268, 266)]
    rows = [Check("x", "slope", f"lag {n}", "memory", outcome="untestable", note=note) for n, note in enumerate(notes)]
    text = Verdict(rows, 0.001).text()
    assert text.count("too few for the skewed tail") == 2  # once by side, once by check
    assert "slope ×3: 264–268 paths are too few for the skewed tail that a p of 2e-05 lies in" in " ".join(text.split())
    other = "only 40 paths of at least 100: reported, not judged"
    assert alike([*notes, other])[other] == other
    assert alike(["1,000 paths are few", "999 paths are few"])["999 paths are few"] == "999–1,000 paths are few"


@pytest.mark.parametrize(("options", "code"), [([], 0), (["--in-full"], 2)])
def test_a_pipeline_may_insist_that_all_was_judged(options, code, tmp_path):
    """Of a garch of few steps, what came before step 0 cannot be forgotten: its clustering and law are not judged."""
    from typer.testing import CliRunner

    from procgen.app import app

    body = [{"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.85}}]
    raw = {"procgen": 1, "seed": 3, "paths": 600, "time": {"steps": 40}, "series": {"x": body}}
    (tmp_path / "spec.yaml").write_text(json.dumps(raw))
    runner = CliRunner()
    assert runner.invoke(app, ["render", str(tmp_path / "spec.yaml"), "-o", str(tmp_path / "out")]).exit_code == 0
    found = runner.invoke(app, ["validate", str(tmp_path / "out"), "--json", *options])
    data = json.loads(found.stdout)
    assert found.exit_code == code and data["verdict"] == "agrees"
    assert data["judged"][0]["all"] is False and data["title"].startswith("AGREES on ")
