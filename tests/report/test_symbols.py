"""Equations name what is drawn by path instead of showing one of its values."""

from procgen.chance.laws import LAWS
from procgen.report.equations import equations
from procgen.spec.reader import read_raw
from procgen.terms import catalogue


def path(law):
    return {"draw": law, "over": "path"}


def test_names_stand_for_drawn_numbers():
    raw = {
        "seed": 1,
        "paths": 5,
        "time": {"steps": 9},
        "parameters": {"k": path({"uniform": [-0.5, 0.5]})},
        "series": {
            "x": [
                {"ar": {"phi": [{"parameter": "k"}, -0.2], "sd": path({"lognormal": {"median": 2, "sigma": 0.1,
                                                                                     "within": [1, 3]}})}},
                {"constant": {"parameter": "k"}, "times": path({"choice": [0, 1]})},
                {"white_noise": {"sd": {"draw": {"choice": [3]}, "over": "series"}}},
            ]
        },
    }  # fmt: skip
    assert equations(read_raw(raw, catalogue(), LAWS), 100) == [
        "",
        "x[t] = ar[t] + times constant[t] + white_noise[t]",
        "  ar           x[t] = k x[t−1] − 0.2 x[t−2] + a[t]",
        "               a[t] = sd z[t],  z independent normal",
        "  constant     x[t] = k",
        "  white_noise  a[t] = 3 z[t],  z independent normal",
        "",
        "drawn by path: k (uniform on [-0.5, 0.5]), x.ar.sd (lognormal with median 2 and sigma 0.1 within [1,",
        "  3]), x.constant.times (one of 0, 1); numbers that follow from them are written at their medians",
    ]
