"""The laws of shocks, standardised to mean 0 and variance 1, by name."""

from collections.abc import Mapping
from types import MappingProxyType

from procgen.chance.laws.base import Law
from procgen.chance.laws.components import NormalMixture
from procgen.chance.laws.empirical import Empirical
from procgen.chance.laws.ged import GED
from procgen.chance.laws.mixture import Mixture
from procgen.chance.laws.points import Bernoulli
from procgen.chance.laws.positive import Gamma, Lognormal
from procgen.chance.laws.simple import Laplace, Logistic, Normal, Uniform
from procgen.chance.laws.skew_normal import SkewNormal
from procgen.chance.laws.skewed import SkewedT
from procgen.chance.laws.stable import Stable
from procgen.chance.laws.student import StudentT

__all__ = [
    "GED",
    "LAWS",
    "Bernoulli",
    "Empirical",
    "Gamma",
    "Laplace",
    "Law",
    "Logistic",
    "Lognormal",
    "Mixture",
    "Normal",
    "NormalMixture",
    "SkewNormal",
    "SkewedT",
    "Stable",
    "StudentT",
    "Uniform",
]

_ALL: tuple[type[Law], ...] = (
    Normal,
    StudentT,
    SkewedT,
    GED,
    Laplace,
    Logistic,
    Uniform,
    SkewNormal,
    Gamma,
    Lognormal,
    Mixture,
    NormalMixture,
    Bernoulli,
    Empirical,
    Stable,
)
LAWS: Mapping[str, type[Law]] = MappingProxyType({law.name: law for law in _ALL})
