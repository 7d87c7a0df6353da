"""What `theory` prints for a person: which rows there are, the correlogram, and letters for plain terminals."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest

import procgen as pg
from procgen.report.correlogram import correlogram, scaled
from procgen.report.letters import encoded
from procgen.report.theory import theory_json, theory_text


def text_of(*body, **options) -> str:
    spec = pg.load({"procgen": 1, "seed": 1, "paths": 4, "time": {"steps": 100}, "series": {"x": list(body)}})
    return theory_text(spec, pg.theory(spec), None, options.pop("lags", 40), **options)


def test_a_correlogram_is_drawn_to_scale():
    """Three letters to 1, in eighths above the axis; as many to −1, in halves below it; a mark every five lags."""
    assert correlogram([1.0, 0.5, 1 / 24, 0.0, -1 / 6, -0.5]) == [
        "█",
        "█▄",
        "██▁",
        "────┴─",
        "    ▀█",
        "     ▀",
        "    5",
    ]
    assert correlogram([0.8, -1.0])[-1] == "1" and correlogram([0.001, -0.01]) == [] == correlogram([])


def test_the_scale_stands_in_front():
    drawn = scaled(correlogram([1.0, -1.0, 0.2, 0.1, 0.1]))
    assert [line[:5].strip() for line in drawn] == ["1", "", "", "0", "", "", "−1", "lag"]
    short = scaled(correlogram([0.3, 0.1, 0, 0, 0]))
    assert [line[:5].strip() for line in short] == ["", "0", "lag"]


def test_every_column_of_a_correlogram_is_one_lag_and_no_line_is_too_wide():
    values = 0.99 ** np.arange(1, 91)
    lines = scaled(correlogram(values.tolist()))
    assert max(map(len, lines)) <= 100
    assert all(line.endswith("90") or len(line) <= 6 + 90 for line in lines)


def test_letters_for_terminals_that_have_no_others():
    """ASCII of the same width for what stands in tables and pictures, names and powers for the rest."""
    assert encoded("−1 ┤▁▄█▀┴─ × · √h[t] σ² Σφ ≤ …", "ascii") == b"-1 |.:#.+- x * sqrt h[t] sigma^2 sum phi <= ..."
    assert encoded("é 漢 ₀", "ascii") == b"e ? 0"
    assert encoded("10⁸ m³ − σ", "latin-1") == "10^8 m³ - sigma".encode("latin-1")
    assert encoded("▁█ σ", "utf-8").decode() == "▁█ σ"


def test_memory_forecasts_and_means_are_printed_where_there_is_memory():
    """AR(1), phi 0.8, sd 3: half-life ln 2 / −ln 0.8 = 3.1, so 4 steps; (3/0.2)² = 225 = 9 · 25; σ²(1 + φ²) = 14.76."""
    text = text_of({"ar": {"phi": 0.8, "sd": 3}})
    assert "half-life 4 steps; long-run variance 225: a mean of n steps is worth n/9 independent values" in text
    assert "error variance    9  14.76  22.3156" in text and "seeing all parts" not in text
    assert "    1 ▃\n      █▇▄▂\n      █████▆▅▄▃▃▂▂▁▁▁▁▁\n    0 ────┴────┴" in text
    noise = text_of({"white_noise": {"sd": 1}})
    assert not any(word in noise for word in ("steps ahead", "steps averaged", "half-life", "┴", "partial"))
    late = {"d": 0, "seasonal": {"period": 60, "phi": 0.5}, "sd": 1}
    assert "error variance 1 1 1" in " ".join(text_of({"arima": late}).split())  # nothing at the lags that are shown
    walk = text_of({"random_walk": {"sd": 1}})
    assert "steps ahead" in walk and "steps averaged" not in walk and "┴" not in walk


def test_the_squares_of_a_series_with_a_mean_are_those_of_its_deviations():
    """E exp(aX + bY) of two normals (Aitchison & Brown 1957, ch. 2): (x − m)² for x = exp X is told, and not x²."""

    def moment(a, b, rho):
        return math.exp(0.25 * (a * a + b * b + 2 * rho * a * b) / 2)

    def correlation(weights, rho):
        def product(r):
            return sum(p * q * moment(a, b, r) for a, p in weights.items() for b, q in weights.items())

        size = sum(p * moment(a, 0, 0.0) for a, p in weights.items())
        return (product(rho) - size**2) / (product(1.0) - size**2)

    mean = moment(1, 0, 0.0)
    lines = text_of({"exp": [{"ar": {"phi": 0.8, "sd": 0.3}}]}).splitlines()
    (row,) = [line for line in lines if "of squared deviations" in line]
    assert f" {correlation({2: 1.0, 1: -2 * mean, 0: mean**2}, 0.8):.5g}" in row
    assert f" {correlation({2: 1.0}, 0.8):.5g}" not in row


def test_several_parts_heavy_tails_and_what_is_not_known():
    two = text_of({"ar": {"phi": 0.8, "sd": 3}}, {"white_noise": {"sd": 2, "law": {"student_t": {"df": 5}}}})
    assert "error variance 14.8714 " in " ".join(two.split()) and "seeing all parts 13 " in " ".join(two.split())
    assert "of squared deviations" in two and "moments below order 5 exist" in two
    price = text_of({"exp": [{"ar": {"phi": 0.8, "sd": 0.3}}]})
    assert "error variance, linear" in price and "seeing all parts" not in price
    bursts = text_of({"fractional_gaussian_noise": {"hurst": 0.8, "sd": 1}}, {"white_noise": {"sd": 1}})
    assert "forecast variance unknown: its autocovariances have not died out" in " ".join(bursts.split())
    assert "a mean of n steps is worth n/8.45 independent values" in price  # 3.08273 / 0.364696


def test_spectral_densities_are_printed_when_asked_for():
    body = {"ar": {"phi": 0.8, "sd": 3}}
    assert "spectral density" not in text_of(body)
    lines = text_of(body, frequencies=(0.0, 0.5)).splitlines()
    (head,) = [k for k, line in enumerate(lines) if "cycles a step" in line]
    assert lines[head].split() == ["cycles", "a", "step", "0", "0.5"]
    assert lines[head + 1].split() == ["spectral", "density", "225", "2.77778"]  # (3/0.2)², (3/1.8)²


def test_json_keeps_its_keys_and_has_the_new_numbers():
    """The keys of DESIGN 10, and beside them memory, forecasts and spectra; plain JSON throughout."""
    spec = pg.load(
        {
            "procgen": 1, "seed": 1, "paths": 4, "time": {"steps": 100},
            "series": {"x": [{"ar": {"phi": 0.8, "sd": 3}}], "w": [{"random_walk": {"sd": 1}}]},
        }
    )  # fmt: skip
    told = json.loads(theory_json(spec, pg.theory(spec), (0, 5), 2, (0.0, 0.25), (1, 3)), parse_constant=pytest.fail)
    x, w = told["series"]["x"], told["series"]["w"]
    assert {"stationarity", "steps", "mean", "variance", "autocovariance", "autocorrelation", "excess_kurtosis"} <= {*x}
    assert x["partial_autocorrelation"] == pytest.approx([1, 0.8, 0])
    assert x["autocorrelation_of_squares"] == pytest.approx([1, 0.64, 0.8**4])
    assert (x["half_life"], x["highest_moment"]) == (4, "all") and x["long_run_variance"] == pytest.approx(225)
    assert x["variance_of_mean"]["counts"][:2] == [1, 10] and x["variance_of_mean"]["values"][0] == pytest.approx(25)
    spectrum = {"frequencies": [0, 0.25], "values": pytest.approx([225, 9 / 1.64])}  # |1 − 0.8 (−i)|² = 1.64
    assert x["spectral_density"] == spectrum and "unknown" not in x
    assert x["forecast_variance"]["horizons"] == [1, 3]
    assert x["forecast_variance"]["values"] == pytest.approx([9, 9 * (1 + 0.64 + 0.8**4)])
    assert w["half_life"] is None and w["unknown"]["half_life"].endswith("unit root in w.random_walk")
    assert w["forecast_variance"]["given_parts"] == pytest.approx([1, 3])


def test_equations_stand_in_the_order_of_the_spec():
    from procgen.report.equations import equations

    product = [{"exp": {"ar": {"phi": 0.2, "sd": 0.1}, "as": "inner"}}, {"constant": 2, "as": "size"}]
    body = [{"product": product, "as": "whole"}, {"white_noise": {"sd": 1}}, {"constant": 1}]
    raw = {"procgen": 1, "seed": 1, "paths": 5, "time": {"steps": 9}, "series": {"x": body}}
    lines = equations(pg.load(raw), 100)
    labels = [line.split()[0] for line in lines if line.startswith("  ") and line[2] != " "]
    assert labels == ["whole", "exp", "inner", "size", "white_noise", "constant"]


def test_of_many_series_that_go_together_the_first_pairs_are_told():
    """21 series of one weather make 210 pairs: a text has 200 and says so, JSON has all; 20 series have 190."""
    for count, more in ((20, 0), (21, 1)):
        group = {"names": {"prefix": "s_", "count": count}, "of": [{"use": "w"}]}
        raw = {"procgen": 1, "seed": 1, "paths": 4, "time": {"steps": 2}, "groups": {"shops": group}}
        spec = pg.load(raw | {"shared": {"w": [{"white_noise": {"sd": 1}}]}})
        text, told = theory_text(spec, pg.theory(spec), (0,), 1), theory_json(spec, pg.theory(spec), (0,), 1)
        assert text.count(" with s_") == min(count * (count - 1) // 2, 200)
        assert text.count("… and more pairs of series") == more
        assert len(json.loads(told)["cross"]) == count * (count - 1) // 2
