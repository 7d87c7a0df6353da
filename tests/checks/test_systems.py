"""Components of a system: a wrong weight of one on another is found though each component alone is as stated.

In x[t] = 0.5 x[t−1] + c y[t−k] + e[t] with y white of variance 1 and Var e = 1 − c², the law of x alone does not depend
on c, nor on k: it is an autoregression of shocks e[t] + c y[t−k]. Seeds are fixed; c = 0.2 drawn as 0.1 moves the
correlation of its shocks with those of y by 0.1, 30 standard errors of 90,000 steps.
"""

import math

import pytest

from tests.studies.departures import Departure, draw, planted, spec_of, verdict


def led(weight, lag):
    """x follows y, `lag` steps later."""
    zero = [[0.0, 0.0], [0.0, 0.0]]
    phi = [[row[:] for row in zero] for _ in range(max(lag, 1))]
    phi[0][0][0] = 0.5
    phi[lag - 1][0][1] = weight
    return pair({"phi": phi, "sd": [math.sqrt(1 - weight**2), 1]})


def pair(system):
    shared = {"v": [{"vector_arma": {"names": ["a", "b"], **system}}]}
    return {"shared": shared, "series": {"x": [{"use": "v.vector_arma.a"}], "y": [{"use": "v.vector_arma.b"}]}}


def crossed(a, b):
    return pair({"phi": [[0.5, a], [b, 0.5]], "sd": 1})


def probes(found):
    what = "shocks: correlation between series"
    return {row.probe for row in found.rows if row.what == what and row.outcome == "departs"}


@pytest.mark.parametrize("lag", [1, 4, 6])
def test_a_weight_that_no_component_shows_alone_is_found(lag):
    found = planted(Departure("", led(0.2, lag), led(0.1, lag)), 5, paths=300, steps=300)
    assert f"lag +{lag}" in probes(found), found.text()
    assert {row.series for row in found.rows if row.outcome == "departs"} == {"x ~ y"}
    assert found.headline[0].startswith("x ~ y: dependence: ")
    assert verdict(led(0.2, lag), draw(spec_of(led(0.2, lag), 300, 300, 6))).agrees is True


@pytest.mark.parametrize("drawn", [(0.1, 0.1), (0.1, 0.2)], ids=["halved", "swapped"])
def test_a_wrong_weight_is_told_as_dependence(drawn):
    found = planted(Departure("", crossed(0.2, 0.1), crossed(*drawn)), 5, paths=300, steps=300)
    assert found.headline[0].startswith("x ~ y: dependence: "), found.headline
    assert {"lag +1", "lag +2"} <= probes(found)


def test_series_that_share_nothing_at_other_steps_are_compared_at_few_lags():
    apart = {"series": {"x": [{"white_noise": {"sd": 1}}], "y": [{"ar": {"phi": 0.5, "sd": 1}}]}}
    rows = verdict(apart, draw(spec_of(apart, 200, 50, 5))).rows
    lags = [row.probe for row in rows if row.what == "shocks: correlation between series"]
    assert sorted(lags) == ["lag +1", "lag +2", "lag -1", "lag -2", "same step"]
