"""Bands of a picture end where values end: no count, and no share, is shown below 0."""

import numpy as np
import pytest

import procgen as pg
from procgen.report.pictures.ends import FREE, ends
from procgen.report.pictures.stated import TWO_SD, Stated
from procgen.terms.graph import build

HEAD = {"procgen": 1, "seed": 3, "paths": 5, "time": {"steps": 30}}
SPARE = {"intermittent": {"share": 0.2, "stay": 3, "size": 3, "sd": 1}}
CLAIMS = {"compound_poisson": {"rate": 0.1, "mean": 4, "sd": 1, "law": {"lognormal": {"sigma": 0.3}}}}


def graph(*body):
    return build(pg.load({**HEAD, "series": {"x": list(body)}}))


@pytest.mark.parametrize(
    ("body", "expected"),
    [
        ([{"poisson": {"mean": 0.5}}], (0.0, np.inf)),
        ([SPARE], (0.0, np.inf)),
        ([{**SPARE, "times": -2}], (-np.inf, 0.0)),
        ([{"flag": {"share": 0.2}}, {"constant": 3}], (3.0, 4.0)),
        ([CLAIMS], (0.0, np.inf)),  # a standardised lognormal of σ 0.3 ends at -1 / sqrt(e^0.09 - 1) = -3.3
        ([{"compound_poisson": {"rate": 0.1, "mean": 1, "sd": 1}}], FREE),
        ([{"white_noise": {"sd": 1}}, {"constant": 3}], FREE),
        ([{"use": "x.garch.variance"}], (0.0, np.inf)),
    ],
)
def test_ends_of_terms(body, expected):
    if "use" in body[0]:
        raw = {"x": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}], "y": body}
        made = build(pg.load({**HEAD, "series": raw}))
        assert ends(made.series["y"]) == expected
    else:
        assert ends(graph(*body).series["x"]) == expected


def test_a_band_of_two_sd_ends_with_the_values():
    made = graph(CLAIMS)
    theory = pg.theory(made.spec)["x"]
    at = np.arange(30)
    free, kind = Stated(theory, 30).quantiles(at, (0.05, 0.5, 0.95))
    held, _ = Stated(theory, 30, ends(made.series["x"])).quantiles(at, (0.05, 0.5, 0.95))
    assert kind == TWO_SD and (free[0] < 0).all()
    assert (held[0] == 0).all() and np.array_equal(held[1:], free[1:])
