"""Every spec of the gallery, and every example of the catalogue: it reads, has a theory, draws, and agrees with it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import procgen as pg
from procgen.chance.laws import LAWS
from procgen.checks import coverage
from procgen.report import catalogue, reference
from procgen.spec.entries import walk
from procgen.spec.reader import read_text
from procgen.terms import catalogue as terms

SPECS = Path(__file__).parent.parent / "specs"
FILES = sorted(SPECS.glob("*.yaml"))
NAMES = [file.stem for file in FILES]
# Probability that a true ensemble is said to depart, over the gallery, some 30 specs: 3e-7 of the suite's 1e-6.
FALSE_ALARM = 1e-8


@pytest.mark.parametrize("file", FILES, ids=NAMES)
def test_its_first_line_says_what_it_is_for(file):
    first = file.read_text(encoding="utf-8").splitlines()[0]
    assert first.startswith("# ") and first.endswith(".") and len(first) <= 120


@pytest.mark.parametrize("file", FILES, ids=NAMES)
def test_its_theory_is_numbers_or_reasons(file):
    spec = pg.load(file)
    theory = pg.theory(spec)
    steps = np.array([0, 1, spec.time.steps - 1])
    assert list(theory) == list(spec.series)
    for series in theory.values():
        assert series.stationarity.verdict and series.stationarity.reasons is not None
        for name, values in (
            ("mean", series.mean(steps)),
            ("variance", series.variance(steps)),
            ("autocovariance", series.autocovariance(steps)),
        ):
            if values is None:
                assert len(series.reason(name)) > 20
            else:
                assert values.shape == (3,) and np.isfinite(values).all()
        if series.variance(steps) is not None:
            assert (series.variance(steps) >= 0).all()


@pytest.mark.parametrize("file", FILES, ids=NAMES)
def test_its_paths_agree_with_its_theory(file):
    spec = pg.load(file).changed(paths=200)
    spec = spec.changed(steps=min(spec.time.steps, 128))
    ensemble = pg.render(spec)
    verdict = pg.validate(ensemble, false_alarm=FALSE_ALARM)
    # 200 paths are too few to judge the spread of some heavy-tailed series: then the verdict must say so of them,
    # and where that leaves no spread judged at all it is no agreement.
    assert "departs" not in verdict.counts and verdict.counts["agrees"] > 0, verdict.text()
    assert verdict.agrees is (None if coverage.blind(verdict.coverage) else True), verdict.text()
    for each in verdict.coverage:
        if each.blind:
            assert len(each.missing["spread"]) > 20 and each.series in verdict.title
    assert set(spec.series) <= set(verdict.checks["series"])


def test_there_are_forty_scenarios_at_least():
    assert len(FILES) >= 40
    assert len({pg.load(file).digest() for file in FILES}) == len(FILES)


def test_every_term_and_every_law_is_used_somewhere():
    kinds, laws = set(), set()
    for file in FILES:
        spec = pg.load(file)
        for body in [*spec.shared.values(), *spec.series.values()]:
            for entry, _ in walk(body.of):
                kinds.add(entry.kind)
                laws.add(getattr(entry.values.get("law"), "name", None))
    assert kinds == set(terms())
    assert laws >= set(LAWS)


@pytest.mark.parametrize("kind", list(terms()))
def test_the_example_of_a_term_draws_and_its_page_tells_all_parameters(kind):
    spec = read_text(catalogue.example_spec(kind), terms(), LAWS)
    x = pg.render(spec)["x"]
    assert np.isfinite(x[~np.isnan(x)] if terms()[kind].gaps else x).all()
    page = catalogue.page(kind)
    assert all(f"  {name} " in page for name, *_ in catalogue.rows(terms()[kind].parameters))
    assert terms()[kind].source in " ".join(page.split())


def test_the_nearest_name_is_offered():
    with pytest.raises(catalogue.UnknownName, match=r"there is no term, law or family grach; did you mean garch\?"):
        catalogue.page("grach")


def test_the_reference_is_up_to_date():
    page = (SPECS / "README.md").read_text(encoding="utf-8")
    assert reference.rewritten(page, SPECS) == page, "run: python -m procgen.report.reference specs/README.md"


def test_the_spec_shown_in_the_reference_is_one():
    page = (SPECS / "README.md").read_text(encoding="utf-8")
    shown = page.partition("```yaml\n")[2].partition("```")[0]
    spec = read_text(shown, terms(), LAWS)
    assert list(spec.series) == ["load_kw", "price"]
