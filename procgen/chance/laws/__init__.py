"""The laws of shocks, standardised to mean 0 and variance 1, by name."""

from collections.abc import Mapping
from types import MappingProxyType

from procgen.chance.laws.base import Law
from procgen.chance.laws.mixture import Mixture
from procgen.chance.laws.simple import Laplace, Logistic, Normal, Uniform
from procgen.chance.laws.student import StudentT

__all__ = ["LAWS", "Laplace", "Law", "Logistic", "Mixture", "Normal", "StudentT", "Uniform"]

LAWS: Mapping[str, type[Law]] = MappingProxyType(
    {law.name: law for law in (Normal, StudentT, Laplace, Logistic, Uniform, Mixture)}
)
