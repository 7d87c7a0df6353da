"""The page of a law: its example is drawn, and the moments beside it are those of SciPy."""

from __future__ import annotations

import pytest
from scipy import stats

from procgen.chance.laws import LAWS
from procgen.report.catalogue import law_spec, page
from procgen.spec.reader import read_text
from procgen.terms import catalogue
from procgen.terms.graph import build
from tests.terms.helpers import draw


@pytest.mark.parametrize("name", LAWS)
def test_every_law_has_an_example_that_is_drawn(name):
    shown = law_spec(name)
    assert draw(build(read_text(shown, catalogue(), LAWS)), 0, 4, [5])["x"].shape == (5, 4)
    assert all(line in page(name) for line in shown.splitlines())


@pytest.mark.parametrize(
    ("name", "law"),
    [
        ("gamma", stats.gamma(2)),
        ("laplace", stats.laplace()),
        ("lognormal", stats.lognorm(0.5)),
        ("ged", stats.gennorm(1.5)),
    ],
)
def test_moments_are_those_of_scipy(name, law):
    skewness, kurtosis = (float(value) for value in law.stats(moments="sk"))
    assert f"skewness {skewness:.6g}, excess kurtosis {kurtosis:.6g}" in " ".join(page(name).split())
