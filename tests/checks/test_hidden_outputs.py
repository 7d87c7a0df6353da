"""Hidden outputs that are revealed are judged as series are: what is true agrees, what is special to them is named.

Shares and durations of two states: Feller (1968), ch. XV; jumps of a step: Poisson (Merton 1976). Seeds are fixed. True
data are said to depart with probability at most 1e-8 each under other seeds.
"""

from __future__ import annotations

import pytest

import procgen as pg
from procgen.chance.laws import LAWS
from procgen.report.catalogue import example_spec
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from tests.checks.test_special import FALSE_ALARM

CATALOGUE = catalogue()


def hides(kind):
    spec = read_text(example_spec(kind), CATALOGUE, LAWS)
    return bool(CATALOGUE[kind].outputs_of(spec.series["x"].of[0].values))


@pytest.mark.parametrize("kind", [kind for kind in CATALOGUE if kind != "use" and hides(kind)])
def test_what_every_term_reveals_agrees(kind, tmp_path):
    spec = read_text(example_spec(kind), CATALOGUE, LAWS).changed(paths=200, steps=48)
    pg.render(spec, out=tmp_path / "out", reveal="all")
    found = pg.validate(tmp_path / "out", false_alarm=FALSE_ALARM)
    assert "departs" not in found.counts, found.text()
    outputs = {f"x.{kind}.{output}" for output in CATALOGUE[kind].outputs_of(spec.series["x"].of[0].values)}
    assert outputs <= {row.series for row in found.rows}


def spec(term, output, paths=400, steps=100):
    (kind,) = term
    series = {"x": term, "y": {"use": f"x.{kind}.{output}"}}
    return {"procgen": 1, "seed": 5, "paths": paths, "time": {"steps": steps}, "series": series}


MERTON = {"drift": 0.001, "sd": 0.02, "rate": 0.3, "jump_mean": -0.05, "jump_sd": 0.05, "start": 90}
WRONG = {
    "fewer jumps": ("compound_poisson", "jumps", {"rate": 0.3, "sd": 2}, {"rate": 0.26}, "jumps"),
    "fewer leaps": ("merton", "jumps", MERTON, {"rate": 0.26}, "jumps"),
    "longer runs": (
        "intermittent", "occurs", {"share": 0.2, "stay": 3, "size": 9, "sd": 4}, {"stay": 4}, "on after on",
    ),
    "more zeros": ("zero_inflated", "passes", {"of": [{"poisson": {"mean": 4}}], "share": 0.3}, {"share": 0.33}, "on"),
    "longer gaps": (
        "missing", "missing", {"of": [{"white_noise": {"sd": 1}}], "share": 0.2, "gap": 3}, {"gap": 4}, "on after on",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", WRONG)
def test_what_makes_a_hidden_output_itself_is_judged(name):
    kind, output, true, change, what = WRONG[name]
    stated = spec({kind: true}, output)
    for drawn, agrees in ((stated, True), (spec({kind: true | change}, output), False)):
        found = pg.validate(pg.render(drawn).to_pandas(), stated, false_alarm=FALSE_ALARM)
        (row,) = [row for row in found.rows if row.series == "y" and row.what == f"share: {what}"]
        assert row.outcome == ("agrees" if agrees else "departs"), found.text()
        assert found.agrees is not False if agrees else found.agrees is False
