"""The laws against scipy.stats and published values, to the last representable uniform."""

import math
import pickle
from dataclasses import fields

import numpy as np
import pytest
from scipy import stats

from procgen.chance.inversion import Inverse
from procgen.chance.laws import LAWS, Laplace, Law, Logistic, Mixture, Normal, StudentT, Uniform
from procgen.chance.portable import normal_quantile, normal_tail

EXAMPLES = [
    Normal(),
    Laplace(),
    Logistic(),
    Uniform(),
    StudentT(df=2.01),
    StudentT(df=3),
    StudentT(df=5),
    StudentT(df=40),
    StudentT(df=1e6),
    Mixture(weight=0.05, ratio=4),
    Mixture(weight=0.5, ratio=0.5, shift=-2),
    Mixture(weight=1e-6, ratio=100),
    Mixture(weight=0.3, ratio=0.01, shift=8),  # nearly two laws: the quantile all but jumps
    Mixture(weight=0.5, ratio=1, shift=20),
]


def scipys(law):
    """(lower area, upper area) as functions of z, from SciPy's own laws and the definition of the standardisation."""
    if isinstance(law, StudentT):
        frozen = stats.t(law.df, scale=math.sqrt((law.df - 2) / law.df))
    elif isinstance(law, Mixture):
        w, r, m = law.weight, law.ratio, law.shift
        mean, sd = w * m, math.sqrt(1 - w + w * r**2 + w * (1 - w) * m**2)
        parts = [(1 - w, stats.norm()), (w, stats.norm(m, r))]
        return tuple(
            lambda z, side=side: sum(v * getattr(part, side)(mean + sd * z) for v, part in parts)
            for side in ("cdf", "sf")
        )
    else:
        frozen = {
            "normal": stats.norm(),
            "laplace": stats.laplace(scale=math.sqrt(0.5)),
            "logistic": stats.logistic(scale=math.sqrt(3) / math.pi),
            "uniform": stats.uniform(-math.sqrt(3), 2 * math.sqrt(3)),
        }[law.name]
    return frozen.cdf, frozen.sf


def tail_areas():
    """Odd multiples of 2**-53 below 1/2, from the least to the greatest, dense in log p and in p."""
    rng = np.random.default_rng(1)
    p = np.concatenate([2.0 ** -rng.uniform(1, 53, 20000), rng.uniform(0, 0.5, 20000)])
    p = (np.floor(p * 2.0**52) + 0.5) * 2.0**-52
    return np.unique(np.concatenate([p[p < 0.5], [2.0**-53, 3 * 2.0**-53, 0.5 - 2.0**-53]]))


P = tail_areas()


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_shocks_against_scipy_to_the_last_uniform(law):
    """The area beyond a shock, in SciPy's words, is the uniform's within 1e-9 min(u, 1 - u)."""
    lower, upper = scipys(law)
    below, above = law.shocks(P), law.shocks(1 - P)
    if isinstance(law, Uniform):  # its ends are coarser in float64 than the areas beyond them
        end = math.sqrt(3)
        assert np.abs(below - end * (2 * P - 1)).max() <= 4.5e-16
        assert np.array_equal(above, -below)
        return
    assert np.abs(lower(below) / P - 1).max() <= 1e-9
    assert np.abs(upper(above) / P - 1).max() <= 1e-9


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_shocks_from_normals_have_the_ranks_of_the_normals(law):
    """Against SciPy's normal areas, out to where a mix of several normals may come."""
    z = np.concatenate([normal_quantile(P[::40]), np.linspace(-9, 9, 601)])
    area = stats.norm.sf(np.abs(z))
    x = law.shocks_from_normals(z)
    lower, upper = scipys(law)
    if isinstance(law, Uniform):
        assert np.abs(x - np.sign(z) * math.sqrt(3) * (1 - 2 * area)).max() <= 4.5e-16
        return
    assert np.abs(np.where(z < 0, lower(x), upper(x)) / area - 1).max() <= 1e-9


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_shocks_rise_with_the_uniform(law):
    """But for rounding: a step down is below 1e-13 of the size."""
    for x in (law.shocks(np.concatenate([P, (1 - P)[::-1]])), law.shocks_from_normals(np.linspace(-9, 9, 5001))):
        assert (np.diff(x) >= -1e-13 * np.abs(x[1:])).all()


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_symmetric_laws_are_exactly_odd(law):
    if getattr(law, "shift", 0.0) == 0.0:
        assert np.array_equal(law.shocks(1 - P), -law.shocks(P))
        assert np.array_equal(law.shocks_from_normals(-P), -law.shocks_from_normals(P))


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_any_memory_and_any_blocks(law):
    u = np.random.default_rng(2).random((300, 71))
    expected = np.array([law.shocks(row) for row in u])
    held = u.copy()
    assert law.shocks(held, out=held) is held
    assert np.array_equal(held, expected)
    assert np.array_equal(law.shocks(u.T).T, expected)
    z = normal_quantile(u)
    expected = np.array([law.shocks_from_normals(row) for row in z])
    held = z.copy()
    assert law.shocks_from_normals(held, out=held) is held
    assert np.array_equal(held, expected)


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_mean_0_and_variance_1(law):
    """By quadrature of the distribution, whose areas are those of the shocks (above)."""
    distribution = law.distribution()
    lower, upper = scipys(law)
    x = law.shocks(P[::500])
    assert distribution.cdf(x) == pytest.approx(lower(x), rel=1e-12)
    assert distribution.sf(-x) == pytest.approx(upper(-x), rel=1e-12)
    assert law.expect(lambda z: z) == pytest.approx(0, abs=1e-8)
    if law.highest_moment > 2.1:
        assert law.expect(lambda z: z * z) == pytest.approx(1, rel=1e-8)
    assert law.moment(0) == 1 and law.moment(1) == pytest.approx(0, abs=1e-15)
    assert law.moment(2) == pytest.approx(1, rel=1e-13)


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_moments_against_quadrature(law):
    for k in (3, 4, 6, 8):
        if k >= law.highest_moment:
            assert law.moment(k) is None
        else:
            assert law.moment(k) == pytest.approx(law.expect(lambda z, k=k: z**k), rel=1e-7, abs=1e-9)


@pytest.mark.parametrize(
    ("law", "level", "quantile"),
    [
        # Bollerslev's (1987) standardisation of Student's t; digits recomputed, areas from NIST/SEMATECH 1.3.6.7.2
        (StudentT(df=5), 0.975, 2.57058183563632 * math.sqrt(3 / 5)),
        (StudentT(df=10), 0.975, 2.22813885198627 * math.sqrt(8 / 10)),
        (StudentT(df=3), 0.975, 1.83738623),
        (StudentT(df=3), 0.99, 2.62157602),
        (StudentT(df=5), 0.99, 2.60646357),
        (StudentT(df=8), 0.975, 1.99705816),
        # from the closed form log(2 (1 - q)) / -sqrt(2)
        (Laplace(), 0.975, 2.11830260524945),
        (Laplace(), 0.99, 2.76621799529600),
    ],
    ids=str,
)
def test_published_quantiles(law, level, quantile):
    assert law.shocks(level) == pytest.approx(quantile, rel=3e-9)


@pytest.mark.parametrize(
    ("law", "kurtosis"),
    [
        # 3 (df - 2) / (df - 4): Bollerslev (1987)
        (StudentT(df=5), 9),
        (StudentT(df=6), 6),
        (StudentT(df=8), 4.5),
        (StudentT(df=10), 4),
        # Johnson, Kotz & Balakrishnan (1995), from memory
        (Normal(), 3),
        (Laplace(), 6),
        (Logistic(), 4.2),
        (Uniform(), 1.8),
        # 3 (1 - w + w r^4) / (1 - w + w r^2)^2, from the definition
        (Mixture(weight=0.05, ratio=4), 3 * (0.95 + 0.05 * 256) / (0.95 + 0.05 * 16) ** 2),
    ],
    ids=str,
)
def test_kurtosis(law, kurtosis):
    assert law.excess_kurtosis == pytest.approx(kurtosis - 3, rel=1e-12)
    assert law.skewness == 0


def test_absolute_moments():
    """E abs(z): normal sqrt(2/pi); t with 5 df 0.73510519389572; Laplace sqrt(1/2) (recomputed in 30 digits)."""
    assert Normal().expect(abs) == pytest.approx(0.7978845608028654, rel=1e-9)
    assert StudentT(df=5).expect(abs) == pytest.approx(0.73510519389572, rel=1e-9)
    assert Laplace().expect(abs) == pytest.approx(0.70710678118655, rel=1e-9)


def test_expectation_of_a_logarithm():
    """E log z^2 = -gamma - log 2 for a normal z (Nelson 1990, on ARCH(1)); singular at 0."""
    gamma = 0.5772156649015329
    assert Normal().expect(lambda z: math.log(z * z) if z else 0.0) == pytest.approx(-gamma - math.log(2), rel=1e-9)


def test_moments_of_a_skewed_mixture_against_scipy():
    """Raw moments from scipy.stats.norm, then centred and scaled by hand."""
    law = Mixture(weight=0.3, ratio=2, shift=-1.5)
    raw = [0.7 * stats.norm().moment(k) + 0.3 * stats.norm(-1.5, 2).moment(k) for k in range(1, 5)]
    m1, m2, m3, m4 = raw
    variance = m2 - m1**2
    assert law.skewness == pytest.approx((m3 - 3 * m1 * m2 + 2 * m1**3) / variance**1.5, rel=1e-12)
    fourth = m4 - 4 * m1 * m3 + 6 * m1**2 * m2 - 3 * m1**4
    assert law.excess_kurtosis == pytest.approx(fourth / variance**2 - 3, rel=1e-12)
    assert law.distribution().ppf([0.01, 0.4, 0.99]) == pytest.approx(law.shocks([0.01, 0.4, 0.99]), rel=1e-8)
    assert law.distribution().var() == pytest.approx(1)


def test_missing_moments_are_none():
    assert StudentT(df=3).skewness is None and StudentT(df=4).excess_kurtosis is None
    assert StudentT(df=3).moment(3) is None and StudentT(df=4).skewness == 0
    assert StudentT(df=4).highest_moment == 4 and Normal().highest_moment == math.inf


def test_laws_are_values():
    assert StudentT(df=5) == StudentT(df=5.0) != StudentT(df=6)
    assert hash(StudentT(df=5)) == hash(StudentT(df=5.0))
    assert Laplace() != Logistic() and Normal() == Normal()
    assert str(StudentT(df=5)) == "student_t(df=5)" and str(Normal()) == "normal"
    for law in EXAMPLES:
        assert pickle.loads(pickle.dumps(law)) == law
    with pytest.raises(AttributeError):
        StudentT(df=5).df = 6


def test_registry():
    assert {law.name for law in EXAMPLES} <= set(LAWS)  # the others: test_more_laws
    for name, law in LAWS.items():
        assert law.name == name and issubclass(law, Law)
        assert [p.name for p in law.parameters] == [field.name for field in fields(law)]
        assert law.portable and law.gaussian == (name == "normal")


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: StudentT(df=2), "student_t: expected df to be a number above 2, got 2"),
        (lambda: StudentT(df=math.nan), "student_t: expected df to be a number above 2, got nan"),
        (lambda: StudentT(df="5"), "student_t: expected df to be a number above 2, got '5'"),
        (lambda: Mixture(weight=1.0, ratio=2), "mixture: expected weight to be a number in (0, 1), got 1.0"),
    ],
)
def test_parameters_out_of_their_domain(make, message):
    with pytest.raises(ValueError) as error:
        make()
    assert str(error.value) == message


def test_a_wrong_law_is_noticed():
    """The comparison with SciPy can fail: df off by 1e-7 is seen."""
    lower, _ = scipys(StudentT(df=5))
    assert np.abs(lower(StudentT(df=5 + 1e-7).shocks(P)) / P - 1).max() > 1e-9


class Given:
    """Areas of a law whose quantile is known: for the device on its own."""

    def __init__(self, frozen):
        self.frozen = frozen

    def point(self, area):
        return self.frozen.isf(area)

    def beyond(self, x):
        return self.frozen.sf(x)


def test_inversion_beyond_the_table_stays_at_its_end():
    """Areas below 2**-65, which only extreme mixes of normals have, are taken as 2**-65."""
    law = StudentT(df=4)
    end = law.distribution().isf(2.0**-65)
    assert law.shocks_from_normals([10.0, 12.0, 45.0]) == pytest.approx([end] * 3, rel=1e-9)
    assert normal_tail(9.3) < 2.0**-65 < normal_tail(9.1)


def test_inversion_of_a_one_sided_law():
    """The device on SciPy's own areas: a gamma law, far from symmetric."""
    from procgen.chance.blocks import Scratch

    frozen = stats.gamma(2.5)
    mirrored = Given(frozen)
    mirrored.point = lambda area: -frozen.ppf(area)
    mirrored.beyond = lambda x: frozen.cdf(-x)
    out = np.empty_like(P)
    inverse = Inverse(Given(frozen), mirrored)
    inverse.quantile(P, np.ones_like(P), out, Scratch(len(P)))
    assert np.abs(frozen.sf(out) / P - 1).max() <= 1e-9
    inverse.quantile(P, -np.ones_like(P), out, Scratch(len(P)))
    assert np.abs(frozen.cdf(out) / P - 1).max() <= 1e-9
