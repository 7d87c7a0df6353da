"""A few long paths are judged as many short ones, where shocks cannot be recovered.

Blocks with gaps between them that count as independent: Bernstein (1927), from memory. The sizes of the gaps are held
against SciPy's bivariate normal law; what is found was planted here.
"""

import numpy as np
import pytest
from scipy import stats

import procgen as pg
from procgen.checks import spans
from procgen.checks.planning import plan_of
from procgen.terms.given import spec_of

HEAD = "procgen: 1\nseed: 1\npaths: {paths}\ntime: {{steps: {steps}}}\nseries:\n  x: [{term}]\n"
ROUNDED = "{round: {of: [{ar: {phi: PHI, total_sd: 2}}], to: 0.5}}"
COUNTS = "{poisson: {mean: 4, of: [{ar: {phi: 0.9, total_sd: 0.4}}]}}"
REGIMES = (
    "{regimes: {branches: {calm: [{ar: {phi: [0.7, 0.1], sd: 1}}], storm: [{white_noise: {sd: 4}}]}, "
    "durations: {calm: 40, storm: 8}}}"
)


def spec(folder, term, steps=20_000, paths=1):
    file = folder / "s.yaml"
    file.write_text(HEAD.format(paths=paths, steps=steps, term=term), encoding="utf-8")
    return file


def gap(folder, term, steps=20_000):
    from procgen.theory import theory

    stated = spec_of(spec(folder, term, steps))
    plan = plan_of(stated)
    gather = type("Sums", (), {"plan": plan, "paths": 1})()
    return spans.forgets(plan.series[0], gather, theory(stated))


def cut_rows(verdict):
    return [row for row in verdict.rows if " spans of " in row.probe]


@pytest.mark.parametrize("term", [ROUNDED.replace("PHI", "0.8"), COUNTS], ids=["rounded", "counts"])
@pytest.mark.parametrize("paths,steps", [(1, 20_000), (3, 5_000)])
def test_a_true_long_path_agrees_and_was_judged(tmp_path, term, paths, steps):
    """The seed is fixed; a true one is accused one time in a thousand, at most."""
    verdict = pg.validate(pg.render(spec(tmp_path, term, steps, paths)))
    assert verdict.agrees is True and len(cut_rows(verdict)) > 10
    judged = verdict.coverage[0].judged
    assert {"level", "spread", "memory", "law"} <= {*judged}


def test_spans_in_parts_on_disk_are_those_in_memory(tmp_path):
    file = spec(tmp_path, ROUNDED.replace("PHI", "0.8"), 8_000, 2)
    pg.render(file, out=tmp_path / "out", workers=1)
    texts = [str([row.row() for row in cut_rows(pg.validate(where))]) for where in (pg.render(file), tmp_path / "out")]
    assert texts[0] == texts[1] and "spans of" in texts[0]


@pytest.mark.parametrize(
    "stated,drawn,kind",
    [
        (ROUNDED.replace("PHI", "0.8"), ROUNDED.replace("PHI", "0.6"), "memory"),
        (COUNTS, "{poisson: {mean: 4.333}}", "spread"),
        (REGIMES, REGIMES.replace("sd: 4", "sd: 8"), "spread"),
    ],
    ids=["weaker memory", "no body", "larger storms"],
)
def test_a_saboteur_is_found_and_named(tmp_path, stated, drawn, kind):
    data = pg.render(spec(tmp_path, drawn)).to_pandas()
    found = pg.validate(data, spec=spec(tmp_path, stated))
    assert found.agrees is False
    assert any(row.outcome == "departs" and row.kind == kind for row in cut_rows(found))


@pytest.mark.parametrize(
    "term",
    [
        "{round: {of: [{random_walk: {sd: 1}}], to: 0.5}}",
        "{round: {of: [{arfima: {d: 0.4, sd: 1}}], to: 0.5}}",
        "{round: {of: [{ar: {phi: {draw: {uniform: [0.5, 0.9]}, over: path}, sd: 1}}], to: 0.5}}",
    ],
    ids=["walk", "long memory", "numbers by path"],
)
def test_what_does_not_forget_is_not_cut(tmp_path, term):
    assert gap(tmp_path, term) is None


def test_a_gap_is_twice_what_the_body_needs(tmp_path):
    """Any function of normals is correlated at most as they are (Gebelein 1941): here signs, by SciPy's normal law."""
    steps = gap(tmp_path, ROUNDED.replace("PHI", "0.8"))
    rho = 0.8 ** (steps // 2)
    assert rho <= spans.FORGOTTEN < 0.8 ** (steps // 2 - 1)
    both = stats.multivariate_normal([0, 0], [[1, 0.8**steps], [0.8**steps, 1]]).cdf([0, 0])
    assert abs(4 * both - 1) < 2e-6


def test_a_moving_mean_is_taken_along(tmp_path):
    """The stated mean at a span's steps is put to that of steps 0, 1, …; without a body nothing else is left."""
    plan = plan_of(
        spec_of(spec(tmp_path, "{seasonal: {period: 7, harmonics: [{amplitude: 2}]}}, {white_noise: {sd: 1}}", 900))
    )
    cut = spans.cut_of(10, 900, 4, 1)
    mean = plan.series[0].theory.mean(np.arange(900))
    moved = spans._moved(plan.series[0], cut, 1)
    for k, begin in enumerate(cut.begins):
        np.testing.assert_allclose(mean[begin : begin + cut.steps] + moved[k], mean[: cut.steps], atol=1e-12)


def test_spans_are_the_values_however_blocks_are_cut():
    x = np.arange(1000.0)
    cut = spans.cut_of(7, 1000, 10, 1)
    whole, pieces = (np.full((len(cut.begins), cut.steps), np.nan) for _ in range(2))
    cut.of(x, 0, whole)
    for first in range(0, 1000, 37):
        cut.of(x[first : first + 37], first, pieces)
    np.testing.assert_array_equal(whole, pieces)
    np.testing.assert_array_equal(whole, cut.begins[:, None] + np.arange(cut.steps))
    assert np.all(np.diff(cut.begins) == cut.steps + 7) and cut.begins[-1] + cut.steps <= 1000
    assert spans.cut_of(400, 1000, 10, 1) is None
