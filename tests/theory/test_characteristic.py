"""Characteristic functions of sums of shocks against closed forms, and against exact covariances where all is normal.

Student's t: K_{ν/2}(√ν |u|) (√ν |u|)^{ν/2} / (2^{ν/2 − 1} Γ(ν/2)) (Hurst 1995, The characteristic function of the
Student t distribution); Laplace of variance 1: 1 / (1 + u²/2); uniform: sin(√3 u) / (√3 u); gamma of
shape k, brought to mean 0 and variance 1: exp(-i √k u) (1 - i u / √k)^-k (Lukacs 1970, table 1).
"""

import math

import numpy as np
import pytest
from scipy import special

import procgen as pg
from procgen.chance.laws import GED, LAWS, Gamma, Laplace, Lognormal, SkewedT, StudentT, Uniform
from procgen.theory import characteristic as module
from procgen.theory.characteristic import Characteristic, characteristic, of_law, refusal


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


OCTAVES = np.exp(np.linspace(math.log(2e-4), math.log(25.0), 3000))


def unresolved(law, u):
    """The chance of values at which neighbouring nodes are further apart than half a wave of frequency u, (n,)."""
    g = np.linspace(-8, 0, 513)
    apart = np.abs(np.diff(law.distribution().ppf(special.ndtr(g))))
    outer = np.array([np.flatnonzero(apart * each > np.pi).max(initial=-1) for each in u])
    return np.where(outer >= 0, 2 * special.ndtr(g[outer + 1]), 0.0)


@pytest.mark.parametrize(
    ("law", "phi_of", "kink"),
    [
        (StudentT(12.0), np.vectorize(lambda u: student(12, u)), 0.0),
        (StudentT(4.0), np.vectorize(lambda u: student(4, u)), 0.0),
        (Laplace(), lambda u: 1 / (1 + u * u / 2), 0.608),
        (Uniform(), lambda u: np.sinc(math.sqrt(3) * u / np.pi), 0.0),
        (Gamma(3.0), lambda u: np.exp(-1j * math.sqrt(3) * u) * (1 - 1j * u / math.sqrt(3)) ** -3, 0.0),
    ],
    ids=["t(12)", "t(4)", "Laplace", "uniform", "gamma(3)"],
)
def test_many_frequencies_of_a_law_against_its_closed_form(law, phi_of, kink):
    """To rounding, but for what 1,024 nodes a 1/64 apart cannot tell.

    Where the third derivative of what is summed leaps by kink u² in the middle (of Laplace's law by
    6 u² v' v'' φ(0), v its quantile of normals), the sum errs by h⁴ kink u² / 720 (Euler and Maclaurin), here doubled.
    """
    bound = 1e-13 + unresolved(law, OCTAVES) + 2 * kink * OCTAVES**2 / 64**4 / 720
    for u in (OCTAVES, -OCTAVES):
        assert (np.abs(of_law(law, u) - phi_of(u)) < bound).all()


SOME = [
    StudentT(6.0),
    StudentT(2.1),
    SkewedT(df=5.0, skew=0.4),
    GED(0.4),
    Gamma(0.5),
    Lognormal(2.0),
    LAWS["bernoulli"](0.2),
]


@pytest.mark.parametrize("law", SOME, ids=str)
def test_one_by_one_or_many_at_a_time_frequencies_have_the_same_value(law):
    """The series of an octave against the plain sum over nodes, which few frequencies are given by."""
    one_by_one = np.concatenate([of_law(law, u) for u in np.array_split(OCTAVES, len(OCTAVES) // module._FEW + 1)])
    assert np.abs(of_law(law, OCTAVES) - one_by_one).max() < 2e-13
    assert np.abs(of_law(law, -OCTAVES) - one_by_one.conj()).max() < 2e-13


def test_series_are_used_where_a_law_is_smooth_and_not_where_they_would_be_long():
    assert module._series(StudentT(6.0), -3) is not None
    assert module._series(StudentT(2.1), 4) is None
    assert module._series(LAWS["bernoulli"](0.2), 0) is None


def test_steps_far_apart_are_as_independent_ones_and_near_ones_are_not():
    of = Characteristic(expression(ar(0.6, {"student_t": {"df": 4}})))
    alone = of([0], [0.4]) * of([0], [-0.7])
    assert of([3, 48], [0.4, -0.7]).real == pytest.approx(alone.real, rel=1e-9)  # 0.6^45 is 1e-10
    assert of([3, 5], [0.4, -0.7]).real != pytest.approx(alone.real, rel=0.01)
    long = Characteristic(expression({"ma": {"theta": [0.5], "sd": 1, "law": "laplace"}}))
    assert long([3, 5], [0.4, -0.7]) == pytest.approx(long([0], [0.4]) * long([0], [-0.7]), rel=1e-15)
