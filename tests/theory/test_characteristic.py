"""Characteristic functions of sums of shocks against closed forms, and against exact covariances where all is normal.

Student's t: K_{ν/2}(√ν |u|) (√ν |u|)^{ν/2} / (2^{ν/2 − 1} Γ(ν/2)) (Hurst 1995, The characteristic function of the
Student t distribution); Laplace of variance 1: 1 / (1 + u²/2).
"""

import math

import numpy as np
import pytest
from scipy import special

import procgen as pg
from procgen.theory.characteristic import characteristic, refusal


def expression(*body):
    raw = {"procgen": 1, "seed": 1, "paths": 9, "time": {"steps": 50}, "series": {"x": list(body)}}
    return pg.theory(raw)["x"].expression


def student(df, u):
    """Of a t brought to variance 1."""
    y = math.sqrt(df) * abs(u) * math.sqrt((df - 2) / df)
    return special.kv(df / 2, y) * y ** (df / 2) / (2 ** (df / 2 - 1) * special.gamma(df / 2))


def ar(phi, law):
    return {"ar": {"phi": phi, "sd": 1.5, "law": law}}


@pytest.mark.parametrize("u", [0.3, 1.0, 2.5])
@pytest.mark.parametrize(
    ("law", "phi_of"),
    [
        ({"student_t": {"df": 4}}, lambda u: student(4, u)),
        ({"student_t": {"df": 2.5}}, lambda u: student(2.5, u)),
        ("laplace", lambda u: 1 / (1 + u * u / 2)),
    ],
    ids=["t(4)", "t(2.5)", "Laplace"],
)
def test_a_sum_of_shocks_is_the_product_over_them(u, law, phi_of):
    x = expression({"constant": 3}, ar(0.6, law), {"white_noise": {"sd": 0.5}})
    weights = 1.5 * 0.6 ** np.arange(80)
    normal = math.exp(-0.5 * (0.5 * u) ** 2)
    found = characteristic(x, [7], [u])
    assert found.imag == pytest.approx(0.0, abs=1e-9)
    assert found.real == pytest.approx(math.prod(phi_of(u * w) for w in weights) * normal, abs=1e-6)
    # Two steps three apart: the later one has three shocks of its own.
    found = characteristic(x, [4, 7], [-u, 0.5 * u]).real
    own = math.prod(phi_of(0.5 * u * w) for w in weights[:3])
    shared = math.prod(phi_of(-u * w + 0.5 * u * later) for w, later in zip(weights, weights[3:], strict=False))
    rest = math.exp(-0.5 * 0.25 * u * u) * math.exp(-0.5 * 0.25 * 0.25 * u * u)
    assert found == pytest.approx(own * shared * rest, abs=1e-6)


def test_of_normal_shocks_it_is_that_of_their_covariance():
    theory = pg.theory({
        "procgen": 1, "seed": 1, "paths": 9, "time": {"steps": 50},
        "series": {"x": [{"random_walk": {"sd": 0.3}}, {"arma": {"phi": 0.7, "theta": 0.4, "sd": 0.5}}]},
    })["x"]  # fmt: skip
    at, u = np.array([5, 9]), np.array([1.1, -0.8])
    covariance = np.array([[float(theory.covariance(a, b)) for b in at] for a in at])
    found = characteristic(theory.expression, at.tolist(), u.tolist())
    assert found.real == pytest.approx(math.exp(-0.5 * float(u @ covariance @ u)), rel=1e-9)


def test_what_has_none_says_why():
    assert refusal(expression({"garch": {"omega": 0.1, "alpha": 0.1, "beta": 0.8}}))
    assert refusal(expression({"exp": [{"ar": {"phi": 0.5, "sd": 1}}]}))
    assert refusal(expression(ar(0.5, "laplace"))) == ""
