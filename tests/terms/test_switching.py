"""Noise whose spread switches with a chain: against enumeration of chains, alone and in filters."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest

from procgen.terms.markov import occupancy
from procgen.theory import theory

from .helpers import draw, graph_of
from .test_regimes import ROWS, THREE, theory_of

SWITCHING = "switching_noise: {sd: {dry: 0.5, wet: 1, storm: 3}, " + ROWS + "}"


def test_a_moving_average_of_switching_noise_against_every_chain():
    """Given the chain the values are normal, so that E x⁴ = 3v², E x²y² = vw + 2c² (Isserlis 1918)."""
    known = theory_of(graph_of(f"  x: {{ma: {{theta: 0.7, shock: {{{SWITCHING}}}}}}}"))
    chains = np.array(list(product(range(3), repeat=3)))
    weight = occupancy(THREE)[chains[:, 0]] * np.prod(THREE[chains[:, :-1], chains[:, 1:]], axis=1)
    a, b, c = np.array([0.25, 1.0, 9.0])[chains].T
    v, w, both = b + 0.49 * a, c + 0.49 * b, 0.7 * b
    variance = weight @ v
    assert known.variance([0, 5]) == pytest.approx([variance] * 2, rel=1e-12)
    assert known.autocovariance([1, 2]) == pytest.approx([weight @ both, 0], rel=1e-12, abs=1e-15)
    assert known.excess_kurtosis == pytest.approx(3 * (weight @ v**2) / variance**2 - 3, rel=1e-9)
    lagged = weight @ (v * w + 2 * both**2) - variance**2
    assert known.autocovariance_of_squares([0, 1])[1] == pytest.approx(lagged, rel=1e-9)


def test_switching_noise_alone_is_what_it_is_in_a_filter():
    """The noise as a product with its states, and as a white source in a filter that does nothing."""
    lags = np.arange(6)
    alone = theory_of(graph_of(f"  x: {{{SWITCHING}}}"))
    through = theory_of(graph_of(f"  x: {{ma: {{theta: 0, shock: {{{SWITCHING}}}}}}}"))
    assert alone.autocovariance(lags) == pytest.approx(through.autocovariance(lags), rel=1e-12, abs=1e-15)
    assert alone.excess_kurtosis == pytest.approx(through.excess_kurtosis, rel=1e-10)
    assert alone.autocovariance_of_squares(lags) == pytest.approx(through.autocovariance_of_squares(lags), rel=1e-10)
    assert alone.highest_moment == through.highest_moment == np.inf


def test_switching_noise_is_its_spread_times_its_shock():
    graph = graph_of(
        f"  x: {{ar: {{phi: 0.6, shock: {{{SWITCHING}}}}}}}\n  r: {{use: x.ar.regime}}\n  v: {{use: x.ar.variance}}"
    )
    found = draw(graph, 0, 30, [60])
    z = draw(graph_of("  x: {white_noise: {sd: 1}, as: ar}"), 0, 30, [60])["x"]
    spread = np.array([0.5, 1, 3])[found["r"].astype(int)]
    assert np.array_equal(found["v"], spread**2)
    assert found["x"][1:] - 0.6 * found["x"][:-1] == pytest.approx((spread * z)[1:], rel=1e-9, abs=1e-12)
    both = theory(graph.spec, graph)
    assert both.cross("x", "v").covariance([3, 7], [5, 5]) == pytest.approx([0, 0])
    assert both["v"].mean([4])[0] == pytest.approx(occupancy(THREE) @ [0.25, 1, 9], rel=1e-12)


def test_correlated_shocks_of_switching_noises():
    """With chains of their own, Cov = ρ E σ E τ: the spreads' means over the shares, and the filter's weights."""
    graph = graph_of(
        f"  x: {{{SWITCHING}}}\n  y: {{ma: {{theta: 0.5, shock: {{{SWITCHING}}}}}}}\n  z: {{white_noise: {{sd: 2}}}}",
        rest="correlation:\n  - {between: [x.switching_noise, z.white_noise], value: 0.6}\n"
        "  - {between: [y.ma, z.white_noise], value: 0.3}\n  - {between: [x.switching_noise, y.ma], value: 0.2}",
    )
    both, spread = theory(graph.spec, graph), occupancy(THREE) @ [0.5, 1, 3]
    sd = np.sqrt(occupancy(THREE) @ [0.25, 1, 9])
    lead = np.array([3, 4, 5])
    assert both.cross("x", "z").covariance(lead, [3, 3, 3]) == pytest.approx([0.6 * spread * 2, 0, 0])
    assert both.cross("y", "z").covariance(lead, [3, 3, 3]) == pytest.approx([0.3 * spread * 2, 0.15 * spread * 2, 0])
    implied = {(c.leader, c.follower): c.values for c in both.correlated}
    assert implied["x.switching_noise", "z.white_noise"] == pytest.approx(0.6 * spread / sd)
    assert implied["z.white_noise", "y.ma"] == pytest.approx(0.3 * spread / sd)
    assert implied["x.switching_noise", "y.ma"] == pytest.approx(0.2 * spread**2 / sd**2)
    found = draw(graph, 0, 4096, [4])
    products = found["x"][3] * found["z"][3]
    # 7 standard errors: 3e-12 under a normal error.
    assert abs(products.mean() - 0.6 * spread * 2) < 7 * products.std() / 64
