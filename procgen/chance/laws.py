"""Laws of shocks, standardised to mean 0 and variance 1 (first version: the normal law)."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import ClassVar

import numpy as np

from procgen.chance.portable import normal_quantile
from procgen.spec.declare import Parameter


class Law:
    name: ClassVar[str] = ""
    parameters: ClassVar[tuple[Parameter, ...]] = ()
    portable: ClassVar[bool] = True
    gaussian: ClassVar[bool] = False


@dataclass(frozen=True)
class Normal(Law):
    name: ClassVar[str] = "normal"
    gaussian: ClassVar[bool] = True

    def shocks(self, u, out=None):
        return normal_quantile(u, out)

    def shocks_from_normals(self, z, out=None):
        if out is None:
            return np.array(z, np.float64)
        out[...] = z
        return out

    def __str__(self):
        return self.name


LAWS: Mapping[str, type[Law]] = MappingProxyType({"normal": Normal})
