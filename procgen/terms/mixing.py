"""Groups of primary streams whose shocks go together: by the correlation of their normals, or through a t copula.

Everything here makes values: only portable operations (see `procgen.chance.portable`).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from procgen.chance import student_copula
from procgen.chance.laws import Normal
from procgen.chance.portable import cholesky
from procgen.terms.base import Array
from procgen.terms.start import weigh

NORMAL = Normal()


@dataclass(eq=False)
class Group:
    """Sources whose shocks go together, leader first, with the lower factor that mixes what they are made from.

    These are normals; under a t copula, of `df` degrees of freedom, they are the numbers of a spherical t vector.
    """

    sources: tuple[Any, ...]
    matrix: Array
    df: float | None = None
    factor: Array = field(init=False)

    def __post_init__(self):
        self.factor = cholesky(self.matrix)

    @property
    def gaussian(self) -> bool:
        """Whether the normals behind the shocks are jointly normal."""
        return self.df is None

    def shocks(self, uniforms: Sequence[Array]) -> list[Array]:
        """Shocks of every source from uniforms of its own, each (steps, paths)."""
        if self.df is None:
            normals = weigh(self.factor, [NORMAL.shocks(u) for u in uniforms])
            leads = [np.count_nonzero(weights) == 1 for weights in self.factor]
        else:
            mixed = weigh(self.factor, student_copula.spherical(self.df, uniforms))
            normals = [mixed[0], *(student_copula.normals(self.df, x) for x in mixed[1:])]
            leads = [True, *([False] * len(mixed[1:]))]
        # A leader's shocks come straight from its uniforms, so that being named moves nothing.
        return [
            s.law.shocks(u) if lead else s.law.shocks_from_normals(z)
            for s, u, z, lead in zip(self.sources, uniforms, normals, leads, strict=True)
        ]
