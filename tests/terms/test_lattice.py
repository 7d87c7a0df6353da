"""Rounding to multiples: moments by SciPy's normal law, Sheppard's corrections, and what is drawn."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import norm

import procgen as pg

DERIVED = dict.fromkeys(("round", "floor", "ceiling"), "test_moments_are_sums_over_the_cells_of_a_normal_law")

HEAD = {"procgen": 1, "seed": 11, "paths": 5, "time": {"steps": 60}}
LOWER = {"round": -0.5, "floor": 0.0, "ceiling": -1.0}  # where the cell of a multiple begins


def of(kind, to, phi, sd, level):
    body = [{"ar": {"phi": phi, "total_sd": sd}}, {"constant": level}]
    return HEAD | {"series": {"x": [{kind: {"of": body, "to": to}}]}}


def cells(kind, to, sd, level):
    """The multiples within 11 standard deviations, the ends of their cells, and their chances by scipy.stats.norm."""
    k = np.arange(np.floor((level - 11 * sd) / to) - 1, np.ceil((level + 11 * sd) / to) + 2)
    low = (k + LOWER[kind]) * to
    return k * to, low, low + to, norm.cdf(low + to, level, sd) - norm.cdf(low, level, sd)


def covariance(kind, to, phi, sd, level):
    """E of both deviations: by Gauss-Legendre in each cell of the first, the second's chances given it by SciPy."""
    values, low, high, chance = cells(kind, to, sd, level)
    mean, total, left = float(values @ chance), 0.0, sd * np.sqrt(1.0 - phi * phi)
    nodes, weights = np.polynomial.legendre.leggauss(64)
    for value, a, b in zip(values, low, high, strict=True):
        x = a + (b - a) * (nodes + 1.0) / 2.0
        ahead = level + phi * (x - level)
        given = norm.cdf((high - ahead[:, None]) / left) - norm.cdf((low - ahead[:, None]) / left)
        density = norm.pdf(x, level, sd) * weights * (b - a) / 2.0
        total += (value - mean) * float(density @ (given @ (values - mean)))
    return total


CASES = [
    (0.5, 0.8, 2.0, 0.3),
    (4, 0.8, 2, 20),
    (1, -0.7, 1, 0.2),
    (1, 0.5, 0.3, 0.4),
    (3, 0.9, 0.5, 1.4),
    (1, 0.99, 1.2, 0),
]


@pytest.mark.parametrize("kind", LOWER)
@pytest.mark.parametrize("to, phi, sd, level", CASES)
def test_moments_are_sums_over_the_cells_of_a_normal_law(kind, to, phi, sd, level):
    x = pg.theory(of(kind, to, phi, sd, level))["x"]
    values, _, high, chance = cells(kind, to, sd, level)
    mean = float(values @ chance)
    variance = float(chance @ (values - mean) ** 2)
    assert float(x.mean(3)) == pytest.approx(mean, abs=1e-10 * sd)
    assert float(x.variance(3)) == pytest.approx(variance, rel=1e-10)
    lags = [1, 2, 5]
    exact = [covariance(kind, to, phi**lag, sd, level) for lag in lags]
    np.testing.assert_allclose(x.autocovariance(lags, 3), exact, rtol=0, atol=1e-10 * variance)
    law = x.marginal(3)
    np.testing.assert_allclose(law.cdf(values), norm.cdf(high, level, sd), rtol=1e-9, atol=1e-300)
    assert law.mean() == pytest.approx(mean, abs=1e-9 * sd) and law.var() == pytest.approx(variance, rel=1e-10)


@pytest.mark.parametrize("sd", [1.0, 1.5, 3.0])
def test_fine_cells_add_a_twelfth_of_their_square(sd):
    """Sheppard (1898): rounding adds to²/12 to the variance; what is left out is of the order exp(-2 pi² sd²/to²)."""
    x = pg.theory(of("round", 1, 0.5, sd, 0.0))["x"]
    left_out = 4.0 * (1.0 + sd * sd) * np.exp(-2.0 * np.pi**2 * sd * sd)
    assert float(x.variance(0)) == pytest.approx(sd * sd + 1.0 / 12.0, abs=left_out + 1e-11)


def test_covariance_with_what_is_rounded_and_between_two_roundings():
    """Cov(round X, X) is the sum over borders b of to · sd · pdf((b - level)/sd), integrated by parts by hand."""
    spec = HEAD | {
        "shared": {"w": [{"ar": {"phi": 0.7, "total_sd": 0.8}}, {"constant": 0.2}]},
        "series": {
            "x": [{"use": "w"}],
            "y": [{"round": {"of": [{"use": "w"}], "to": 1}}],
            "z": [{"floor": {"of": [{"use": "w"}], "to": 2}}],
        },
    }
    th = pg.theory(spec)
    borders = np.arange(-12, 13) + 0.5
    assert float(th.cross("y", "x").covariance(4, 4)) == pytest.approx(0.8 * norm.pdf((borders - 0.2) / 0.8).sum())
    grid = np.linspace(-12, 12, 2_400_001)
    weights = norm.pdf(grid) * (grid[1] - grid[0])
    y, z = np.rint(0.2 + 0.8 * grid), 2 * np.floor((0.2 + 0.8 * grid) / 2)
    exact = weights @ ((y - weights @ y) * (z - weights @ z))
    assert float(th.cross("y", "z").covariance(4, 4)) == pytest.approx(exact, abs=1e-5)  # a sum over a grid of 1e-5


def test_values_are_those_of_numpy_and_known_bodies_stay_known():
    x = np.linspace(-7.3, 9.1, 40)
    raw = [{"given": {"values": x.tolist(), "after": "repeat"}}]
    spec = HEAD | {"series": {kind: [{kind: {"of": raw, "to": 0.5}}] for kind in LOWER}}
    ens = pg.render(spec)
    for kind, f in (("round", np.round), ("floor", np.floor), ("ceiling", np.ceil)):
        assert np.array_equal(ens[kind][0, :40], f(x / 0.5) * 0.5)
        assert np.array_equal(pg.theory(spec)[kind].mean(np.arange(40)), f(x / 0.5) * 0.5)


@pytest.mark.parametrize("kind", LOWER)
def test_the_verdict_knows_the_lattice(kind):
    spec = of(kind, 2, 0.6, 1.5, 7.3) | {"paths": 600}
    assert pg.validate(pg.render(spec), false_alarm=1e-8).agrees
    coarser = of(kind, 2, 0.6, 1.6, 7.3) | {"paths": 600}  # another spread behind the lattice
    assert pg.validate(pg.render(coarser), spec=spec).agrees is False


def test_what_cannot_be_rounded_to():
    with pytest.raises(pg.SpecError, match="expected a number above 0, got 0"):
        pg.load(of("round", 0, 0.5, 1, 0))
