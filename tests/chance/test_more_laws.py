"""GED, skewed t, skew normal, gamma, lognormal and mixtures of several normals, as test_laws holds the others."""

import math
import pickle
from itertools import pairwise

import mpmath
import numpy as np
import pytest
from arch.univariate import SkewStudent
from scipy import integrate, special, stats

from procgen.chance.gamma import half_step, log_gamma
from procgen.chance.laws import (
    GED,
    Gamma,
    Laplace,
    Lognormal,
    Mixture,
    Normal,
    NormalMixture,
    SkewedT,
    SkewNormal,
    StudentT,
)
from procgen.chance.portable import normal_quantile
from procgen.spec.reader import SpecError
from tests.terms.helpers import graph_of

from .test_laws import P
from .test_laws import scipys as others

SEVERAL = NormalMixture(components=((0.5, -1, 0.5), (0.3, 0, 1), (0.2, 2, 3)))
EXAMPLES = [
    GED(shape=0.4),
    GED(shape=1),
    GED(shape=1.5),
    GED(shape=2),
    GED(shape=3),
    GED(shape=20),
    SkewedT(df=10, skew=-0.1),
    SkewedT(df=6, skew=0.3),
    SkewedT(df=5, skew=-0.5),
    SkewedT(df=2.05, skew=0.9),
    SkewNormal(alpha=0),
    SkewNormal(alpha=1),
    SkewNormal(alpha=-4),
    SkewNormal(alpha=50),
    Gamma(shape=0.5),
    Gamma(shape=1),
    Gamma(shape=2.5),
    Gamma(shape=10_000),
    Lognormal(sigma=0.001),
    Lognormal(sigma=0.25),
    Lognormal(sigma=1),
    Lognormal(sigma=2),
    SEVERAL,
    NormalMixture(components=((1, 0, 0.01), (1, 5, 100))),
    NormalMixture(components=((3, 0, 1),)),
]
OTHERS = [Normal(), Laplace(), StudentT(df=2.05), StudentT(df=7)]


def scipys(law):
    """(lower area, upper area) of the law before it is standardised, its mean and standard deviation, by SciPy."""
    if isinstance(law, NormalMixture):
        total = sum(w for w, _, _ in law.components)
        parts = [(w / total, stats.norm(m, s)) for w, m, s in law.components]
        mean = sum(w * part.mean() for w, part in parts)
        sd = math.sqrt(sum(w * (part.var() + (part.mean() - mean) ** 2) for w, part in parts))
        areas = [lambda x, side=side: sum(w * getattr(part, side)(x) for w, part in parts) for side in ("cdf", "sf")]
        return *areas, mean, sd
    if isinstance(law, GED):
        raw = stats.gennorm(law.shape)
    elif isinstance(law, Gamma):
        raw = stats.gamma(law.shape)
    elif isinstance(law, Lognormal):
        raw = stats.lognorm(law.sigma)  # whose own deviation cancels for a small sigma
        mean = math.exp(law.sigma**2 / 2)
        return raw.cdf, raw.sf, mean, mean * math.sqrt(math.expm1(law.sigma**2))
    else:
        raise TypeError(law)
    return raw.cdf, raw.sf, raw.mean(), raw.std()


def hansens(law):
    """The areas of Hansen's (1994) law through SciPy's t: each half is half a t, stretched."""
    c = special.gamma((law.df + 1) / 2) / (math.sqrt(math.pi * (law.df - 2)) * special.gamma(law.df / 2))
    a = 4 * law.skew * c * (law.df - 2) / (law.df - 1)
    b = math.sqrt(1 + 3 * law.skew**2 - a * a)
    t = stats.t(law.df, scale=math.sqrt((law.df - 2) / law.df))
    lower, upper = 1 - law.skew, 1 + law.skew

    def below(z):
        x = b * z + a
        return np.where(x < 0, lower * t.cdf(x / lower), 1 - upper * t.sf(x / upper))

    def above(z):
        x = b * z + a
        return np.where(x > 0, upper * t.sf(x / upper), 1 - lower * t.cdf(x / lower))

    return below, above


def azzalinis(law):
    """The areas of Azzalini's (1985) law: 2 phi Phi(alpha x) added up outwards (SciPy's lose digits far out)."""
    delta = law.alpha / math.sqrt(1 + law.alpha**2)
    mean = delta * math.sqrt(2 / math.pi)
    sd = math.sqrt(1 - mean**2)
    x, w = np.polynomial.legendre.leggauss(16)
    edges = np.concatenate([[0.0], 2.0 ** np.arange(-12, -4.5, 0.5), np.arange(1, 300) * 0.045])
    half = np.diff(edges)[:, None] / 2
    out, weights = (edges[:-1, None] + half * (x + 1)).ravel(), (half * w).ravel()

    def tail(z, sign):
        y = (sd * np.asarray(z, float) + mean)[..., None] + sign * out
        return (weights * np.exp(math.log(2 / math.pi) / 2 - y * y / 2 + special.log_ndtr(law.alpha * y))).sum(axis=-1)

    return (lambda z: tail(z, -1)), (lambda z: tail(z, 1))


def areas(law):
    if isinstance(law, SkewedT):
        return hansens(law)
    if isinstance(law, SkewNormal):
        return azzalinis(law)
    lower, upper, mean, sd = scipys(law)
    return (lambda z: lower(mean + sd * z)), (lambda z: upper(mean + sd * z))


def near_an_end(law, z):
    """How far a rounding of z, or of the mean that z is measured from, moves the area beyond it, as a share."""
    if not isinstance(law, Gamma | Lognormal):
        return 0.0
    spacing = 4 * np.spacing(np.maximum(np.abs(z), 1.0)) * max(1.0, 1 / abs(getattr(law, "sigma", 1.0)))
    if isinstance(law, Gamma):
        spacing = spacing * max(1.0, math.sqrt(law.shape))
    lower, _ = areas(law)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = (lower(z + spacing) - lower(z - spacing)) / lower(z)
    return np.where(np.isfinite(share), share, np.inf)


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_shocks_against_scipy_to_the_last_uniform(law):
    """The area beyond a shock, in SciPy's words, is the uniform's within 1e-9 min(u, 1 - u).

    Near the bounded end of a gamma or lognormal law float64 is coarser than the areas: what its spacing moves is added.
    """
    p = np.unique(np.concatenate([P[:: len(P) // 199], P[[0, 1, -1]]])) if isinstance(law, SkewNormal) else P
    lower, upper = areas(law)
    below, above = law.shocks(p), law.shocks(1 - p)
    assert (np.abs(lower(below) / p - 1) <= 1e-9 + near_an_end(law, below)).all()
    assert (np.abs(upper(above) / p - 1) <= 1e-9).all()


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_shocks_from_normals_have_the_ranks_of_the_normals(law):
    z = np.concatenate([normal_quantile(P[::40]), np.linspace(-8.5, 8.5, 301)])
    z = z[::9] if isinstance(law, SkewNormal) else z
    area = stats.norm.sf(np.abs(z))
    x = law.shocks_from_normals(z)
    lower, upper = areas(law)
    off = np.abs(np.where(z < 0, lower(x), upper(x)) / area - 1)
    assert (off <= 1e-9 + np.where(z < 0, near_an_end(law, x), 0.0)).all()


@pytest.mark.parametrize("alpha", [0.05, 0.3, 1, 4, 50, -4, -50])
def test_areas_of_a_skew_normal_law_against_quadrature(alpha):
    """Both tails to 1e-10 of themselves, down to 1e-250, against the density added up outwards."""
    law = SkewNormal(alpha=alpha)
    (lower, upper), z, mine = azzalinis(law), np.linspace(-12.0, 2.0, 561), law.distribution()
    for ours, theirs in ((mine.cdf(z), lower(z)), (mine.sf(-z), upper(-z))):
        told = theirs > 1e-250
        assert np.abs(ours[told] / theirs[told] - 1).max() <= 1e-10


@pytest.mark.parametrize("law", [SEVERAL, Mixture(weight=0.1, ratio=4, shift=-1)], ids=str)
def test_quantiles_of_mixtures_invert_their_areas(law):
    p = np.concatenate([10.0 ** np.arange(-300, 0, 7), np.linspace(0.01, 0.5, 50)])
    mine = law.distribution()
    assert mine.cdf(mine.ppf(p)) == pytest.approx(p, rel=1e-11)
    assert mine.sf(mine.isf(p)) == pytest.approx(p, rel=1e-11)
    assert mine.cdf(mine.ppf(1 - p)) == pytest.approx(1 - p, rel=1e-14)
    assert list(mine.ppf([0.0, 1.0])) == [-np.inf, np.inf]


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_shocks_rise_with_the_uniform(law):
    """But for rounding: a step down is below 1e-13 of the size, or of what the size is measured from."""
    root = max(1.0, getattr(law, "shape", 1.0) ** 0.5)
    for x in (law.shocks(np.concatenate([P, (1 - P)[::-1]])), law.shocks_from_normals(np.linspace(-9, 9, 5001))):
        assert (np.diff(x) >= -1e-13 * root * np.maximum(np.abs(x[1:]), 1.0)).all()


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_any_memory_and_any_blocks(law):
    u = np.random.default_rng(2).random((120, 71))
    for draw, x in ((law.shocks, u), (law.shocks_from_normals, normal_quantile(u))):
        expected = np.array([draw(row) for row in x])
        held = x.copy()
        assert draw(held, out=held) is held
        assert np.array_equal(held, expected)
        assert np.array_equal(draw(x.T).T, expected)


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_mean_0_variance_1_and_the_other_moments_by_quadrature(law):
    assert law.moment(0) == 1 and law.moment(1) == pytest.approx(0, abs=1e-13)
    assert law.moment(2) == pytest.approx(1, rel=1e-12)
    assert law.expect(lambda z: z) == pytest.approx(0, abs=1e-8)
    for k in (2, 3, 4, 6, 8):
        if k >= law.highest_moment:
            assert law.moment(k) is None
        elif k < 0.8 * law.highest_moment:  # nearer to the last moment a quadrature does not settle
            wanted = law.expect(lambda z, k=k: z**k)
            assert law.moment(k) == pytest.approx(wanted, rel=2e-7, abs=1e-9 * law.moment(2 * ((k + 1) // 2)))


@pytest.mark.parametrize("law", EXAMPLES, ids=str)
def test_the_distribution_is_the_standardised_law(law):
    distribution, (lower, upper) = law.distribution(), areas(law)
    x = law.shocks(np.array([0.02, 0.3, 0.5, 0.8, 0.99]))
    assert distribution.cdf(x) == pytest.approx(lower(x), rel=1e-9)
    assert distribution.sf(x) == pytest.approx(upper(x), rel=1e-9)
    assert distribution.ppf(np.array([0.02, 0.3, 0.8])) == pytest.approx(x[[0, 1, 3]], rel=1e-7, abs=1e-9)
    assert distribution.isf(0.01) == pytest.approx(x[4], rel=1e-7)
    assert distribution.mean() == pytest.approx(0, abs=1e-9) and distribution.var() == pytest.approx(1, rel=1e-9)


@pytest.mark.parametrize(
    ("shape", "scale", "kurtosis", "absolute"),
    [
        # Nelson (1991), eq. 2.4, recomputed: lambda, whose scale here is lambda 2^(1/nu), E z^4, E abs(z)
        (1.5, 0.733063476367, 3.761954236930, 0.767384899140),
        (1.2, None, 4.743484224966, None),
        (3, None, 2.4183991523123, None),
    ],
)
def test_ged_against_nelson(shape, scale, kurtosis, absolute):
    law = GED(shape=shape)
    assert law.excess_kurtosis + 3 == pytest.approx(kurtosis, rel=1e-11)
    if scale:
        assert law.scale == pytest.approx(scale * 2 ** (1 / shape), rel=1e-11)
        assert law.expect(abs) == pytest.approx(absolute, rel=1e-9)


def test_ged_quantiles():
    """Recomputed from Nelson's density: .975 and .99 at nu = 1.5; nu = 1 is Laplace, nu = 2 normal."""
    assert GED(shape=1.5).shocks([0.975, 0.99]) == pytest.approx([2.0331467045788, 2.4980281352725], rel=1e-9)
    u = np.array([0.01, 0.2, 0.6, 0.999])
    assert GED(shape=1).shocks(u) == pytest.approx(stats.laplace(scale=math.sqrt(0.5)).ppf(u), rel=1e-8)
    assert GED(shape=2).shocks(u) == pytest.approx(stats.norm.ppf(u), rel=1e-8)


@pytest.mark.parametrize(
    ("df", "skew", "skewness", "kurtosis"),
    [
        # Jondeau & Rockinger (2003), recomputed
        (10, -0.1, -0.241416557689, 4.05683510979),
        (6, 0.3, 0.982601188140, 7.33112669954),
        (5, -0.5, -1.84042918050, 15.6501896527),
    ],
)
def test_skewed_t_against_jondeau_and_rockinger_and_arch(df, skew, skewness, kurtosis):
    law = SkewedT(df=df, skew=skew)
    assert law.skewness == pytest.approx(skewness, rel=1e-10)
    assert law.excess_kurtosis + 3 == pytest.approx(kurtosis, rel=1e-10)
    u = np.array([1e-6, 0.01, 0.025, 0.3, 0.5, 0.7, 0.975, 0.99, 1 - 1e-6])
    assert law.shocks(u) == pytest.approx(SkewStudent().ppf(u, [df, skew]), rel=1e-8)


def test_skewed_t_against_hansen():
    """a and b at (10, -0.1), recomputed from Hansen (1994), eq. 11-13; the quantiles by arch's SkewStudent."""
    a, b = SkewedT(df=10, skew=-0.1).shift_and_scale
    assert (a, b) == pytest.approx((-0.154679608385, 1.003032511313), rel=1e-11)
    levels = [0.01, 0.025, 0.5, 0.975, 0.99]
    published = {
        (10, -0.1): [-2.61124845, -2.08641723, 0.03933846, 1.89243762, 2.32301255],
        (6, 0.3): [-2.02103370, -1.64501753, -0.12016383, 2.27820870, 3.00791663],
    }
    for (df, skew), quantiles in published.items():
        assert SkewedT(df=df, skew=skew).shocks(levels) == pytest.approx(quantiles, abs=6e-9)
    missing = SkewedT(df=3, skew=0.2)
    assert missing.skewness is None and missing.excess_kurtosis is None and missing.highest_moment == 3


def test_skewness_and_kurtosis_of_the_others_against_scipy():
    for law, raw in (
        (SkewNormal(alpha=-4), stats.skewnorm(-4)),
        (SkewNormal(alpha=1), stats.skewnorm(1)),
        (Gamma(shape=2.5), stats.gamma(2.5)),
        (Lognormal(sigma=0.25), stats.lognorm(0.25)),
        (Lognormal(sigma=1), stats.lognorm(1)),
    ):
        skewness, excess = raw.stats(moments="sk")
        assert law.skewness == pytest.approx(float(skewness), rel=1e-9)
        assert law.excess_kurtosis == pytest.approx(float(excess), rel=1e-9)
    assert (Gamma(shape=1).skewness, Gamma(shape=1).excess_kurtosis) == (2, 6)  # exponential, from memory
    w = math.exp(1e-6)  # Aitchison & Brown (1957): (w + 2) sqrt(w - 1), where plain moments would cancel
    assert Lognormal(sigma=0.001).skewness == pytest.approx((w + 2) * math.sqrt(math.expm1(1e-6)), rel=1e-12)


def test_moments_of_several_normals_against_scipy():
    raw = [sum(w * stats.norm(m, s).moment(k) for w, m, s in SEVERAL.components) for k in range(1, 5)]
    m1, m2, m3, m4 = raw
    variance = m2 - m1**2
    assert SEVERAL.skewness == pytest.approx((m3 - 3 * m1 * m2 + 2 * m1**3) / variance**1.5, rel=1e-12)
    fourth = m4 - 4 * m1 * m3 + 6 * m1**2 * m2 - 3 * m1**4
    assert SEVERAL.excess_kurtosis == pytest.approx(fourth / variance**2 - 3, rel=1e-12)


def test_gamma_functions_against_mpmath():
    x = 10.0 ** np.random.default_rng(3).uniform(-3, 7, 400)
    with mpmath.workdps(30):
        for value in x.tolist():
            exact = mpmath.loggamma(value)
            assert abs(log_gamma(value) - exact) <= 2e-14 * (1 + abs(exact))
            ratio = mpmath.exp(mpmath.loggamma(mpmath.mpf(value) + 0.5) - exact)
            assert abs(half_step(value) / ratio - 1) <= 4e-15


def test_rates_of_exponential_moments():
    """E exp(q z) by SciPy's own quadrature: finite and settled just below the rate, for the sides that have one."""
    assert GED(shape=1).exponential_moments == pytest.approx((math.sqrt(2), math.sqrt(2)))
    assert GED(shape=1.5).exponential_moments == (math.inf, math.inf)
    assert GED(shape=0.9).exponential_moments == SkewedT(df=9, skew=0).exponential_moments == (0, 0)
    assert Gamma(shape=4).exponential_moments == (math.inf, 2) and Lognormal(sigma=1).exponential_moments[1] == 0
    q, k = 1.9, 4.0  # E exp(q (x - k) / sqrt(k)) = exp(-q sqrt(k)) (1 - q / sqrt(k))^-k: the gamma transform
    wanted = math.exp(-q * 2) * (1 - q / 2) ** -k
    assert Gamma(shape=4).expect(lambda z: math.exp(min(q * z, 700))) == pytest.approx(wanted, rel=1e-6)


def test_laws_are_values():
    for law in EXAMPLES:
        assert pickle.loads(pickle.dumps(law)) == law and hash(law) == hash(pickle.loads(pickle.dumps(law)))
    assert str(NormalMixture(components=({"weight": 1, "sd": 2},))) == "normal_mixture(1·N(0, 2²))"
    assert str(SkewedT(df=5, skew=0.1)) == "skewed_t(df=5, skew=0.1)"


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: GED(shape=0), "ged: expected shape to be a number in [0.4, 20], got 0"),
        (lambda: SkewedT(df=5, skew=1), "skewed_t: expected skew to be a number in (-1, 1), got 1"),
        (lambda: Gamma(shape=-1), "gamma: expected shape to be a number in [0.5, 10000], got -1"),
        (
            lambda: NormalMixture(components=((1, 0, 0),)),
            "normal_mixture: expected sd to be a number in [0.01, 100], got 0",
        ),
        (lambda: NormalMixture(components=()), "normal_mixture: expected 1 to 16 components, got 0"),
    ],
)
def test_parameters_out_of_their_domain(make, message):
    with pytest.raises(ValueError) as error:
        make()
    assert str(error.value) == message


def test_a_spec_reads_a_mixture_as_a_list():
    text = "  x: {{white_noise: {{sd: 1, law: {{normal_mixture: {{components: {}}}}}}}}}"
    graph = graph_of(text.format("[{weight: 9}, {weight: 1, mean: -2, sd: 3}]"))
    assert graph.sources[0].law == NormalMixture(components=((9, 0, 1), (1, -2, 3)))
    with pytest.raises(SpecError, match=r"expected a number in \[0.01, 100\], got 0"):
        graph_of(text.format("[{weight: 9, sd: 0}]"))


def test_a_wrong_law_is_noticed():
    """The comparison can fail: a shape off by 1e-7 is seen."""
    lower, _ = areas(GED(shape=1.5))
    assert np.abs(lower(GED(shape=1.5 + 1e-7).shocks(P)) / P - 1).max() > 1e-9


@pytest.mark.parametrize("law", [*EXAMPLES, *OTHERS], ids=str)
def test_mean_size_by_quadrature(law):
    """E abs(z) as twice the mean of the upper side, by SciPy's quadrature of SciPy's own areas: the integral of sf."""
    _, upper = others(law) if law in OTHERS else areas(law)
    edges = [0.0, *np.geomspace(1e-3, 1e3, 25), np.inf]
    wanted = 2 * sum(integrate.quad(upper, a, b, epsabs=1e-13, limit=200)[0] for a, b in pairwise(edges))
    assert law.mean_size == pytest.approx(wanted, rel=2e-9)


def test_balanced_laws():
    assert all(
        law.balanced for law in (Normal(), Laplace(), GED(shape=0.4), SkewedT(df=3, skew=0), SkewNormal(alpha=0))
    )
    assert not any(law.balanced for law in (SkewedT(df=3, skew=0.01), Gamma(shape=10_000), Lognormal(sigma=0.001)))
