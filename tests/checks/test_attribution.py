"""Which departure is told first, where one makes the others."""

import pytest

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
