"""Groups of primary streams whose shocks go together: by the correlation of their normals, or through a t copula.

Everything here makes values: only portable operations (see `procgen.chance.portable`).
"""

from __future__ import annotations

from collections.abc import Callable, Hashable, Iterator
from functools import cached_property
from itertools import pairwise
from typing import Any

import numpy as np

from procgen.chance import student_copula
from procgen.chance.kernel import is_compiling, machine
from procgen.chance.laws import Normal
from procgen.chance.portable import cholesky
from procgen.spec.model import Fault, Following, SpecError
from procgen.spec.records import dataclass
from procgen.terms.base import Array
from procgen.terms.combine import Scaled
from procgen.terms.hands import at_hand, each
from procgen.terms.start import weigh

NORMAL = Normal()
AT_ONCE = 512  # values of each row that are mixed at a time, which stay in the nearest cache


@dataclass(eq=False)
class Group:
    """Sources whose shocks go together, leader first, with the lower factor that mixes what they are made from.

    These are normals; under a t copula, of `df` degrees of freedom, they are the numbers of a spherical t vector. Where
    correlations follow the state that the node `by` gives the number of, there is a matrix for each state.
    """

    sources: tuple[Any, ...]
    matrices: tuple[Array, ...]
    df: float | None = None
    by: Any = None

    @property
    def matrix(self) -> Array:
        """The one matrix of a group that follows nothing."""
        return self.matrices[0]

    @cached_property
    def factors(self) -> Array:
        """Lower factors, (states, sources, sources)."""
        return np.stack([cholesky(matrix) for matrix in self.matrices])

    @property
    def gaussian(self) -> bool:
        """Whether the normals behind the shocks are jointly normal."""
        return self.df is None and self.by is None

    def made_from(self, place: int) -> tuple[tuple[Any, ...], Hashable]:
        """The sources that the shocks of one are mixed from, and how; itself alone where it is what it is alone."""
        rows = self.factors[:, place, :]
        if self.df is None:
            used = [j for j in range(place + 1) if np.any(rows[:, j])]
        else:
            used = list(range(place + 1))  # the size of those before it counts, whatever their correlation
        if used == [place] and (rows[:, place] == 1.0).all():
            return (self.sources[place],), None
        weights = tuple([tuple([float(row[j]) for j in used]) for row in rows])
        return tuple([self.sources[j] for j in used]), (weights, self.df)

    def shocks(
        self, fill: Callable[[int, Array], object], shape: tuple[int, ...], states: Array | None = None
    ) -> list[Array]:
        """Shocks of every source, each of this shape (steps, paths); states: the number of the state, so, too.

        fill : puts the uniforms of the source in a place into an array
        """
        rows = np.empty((len(self.sources), *shape))
        made: dict[int, Array] = {}
        laws = [source.law for source in self.sources]

        def draw(place: int) -> None:
            fill(place, rows[place])
            if self._leading[place] and not (self.df is None and isinstance(laws[place], Normal)):
                # straight from its uniforms, so that being named moves nothing
                made[place] = laws[place].shocks(rows[place])
            if self.df is None:
                NORMAL.shocks(rows[place], out=rows[place])

        each(draw, range(len(rows)))
        if self.df is None:
            normals = self._weighed(rows, states)
        else:
            tied = self._weighed(student_copula.spherical(self.df, rows), states)
            normals = [tied[0], *(student_copula.normals(self.df, x) for x in tied[1:])]
        left = [k for k, law in enumerate(laws) if k not in made and not isinstance(law, Normal)]
        made |= zip(left, each(lambda k: laws[k].shocks_from_normals(normals[k]), left), strict=True)
        return [made.get(k, z) for k, z in enumerate(normals)]

    @cached_property
    def _leading(self) -> list[bool]:
        """Of each source, whether its shocks are its own alone."""
        return [len(self.made_from(place)[0]) == 1 for place in range(len(self.sources))]

    def _weighed(self, vectors: Any, states: Array | None) -> Any:
        """Each row of the factor times the vectors, added in order; what is zero in every state is passed over."""
        if states is None and isinstance(vectors, np.ndarray) and is_compiling():
            return mixed_in_place(self.factors[0], vectors)
        if states is None:
            return weigh(self.factors[0], vectors)
        state, out = states.astype(np.int64), []
        for place, vector in enumerate(vectors):
            total = None
            for j, other in enumerate(vectors[: place + 1]):
                weights = self.factors[:, place, j]
                if np.any(weights):
                    part = np.take(weights, state) * other
                    total = part if total is None else total + part
            out.append(vector if total is None else total)
        return out


def mixed_in_place(factor: Array, rows: Array) -> Array:
    """The rows Σ_j factor[i, j]·rows[j] of a lower factor in the place of `rows`, compiled; the bits of `weigh`."""
    flat = rows.reshape(len(rows), -1)
    cuts = [flat.shape[1] * k // at_hand() for k in range(at_hand() + 1)]
    run = machine("mixing", "mixed", "procgen.terms")
    each(lambda part: run(factor, flat, *part, np.empty(AT_ONCE)), [*pairwise(cuts)])
    return rows


def mixed(factor, rows, begin, end, at_once):
    """Put Σ_j factor[i, j]·rows[j], j ≤ i, in the place of rows[i] from `begin` to `end`; exact zeros are passed over.

    From the last row on, so that those it needs are still there; added in order, in a room that stays in the cache.
    """
    for first in range(begin, end, at_once.shape[0]):
        last = min(first + at_once.shape[0], end)
        total = at_once[: last - first]
        for i in range(rows.shape[0] - 1, -1, -1):
            fresh = True
            for j in range(i + 1):
                weight, other = factor[i, j], rows[j, first:last]
                if weight != 0.0 and fresh:
                    fresh = False
                    for k in range(total.shape[0]):
                        total[k] = weight * other[k]
                elif weight != 0.0:
                    for k in range(total.shape[0]):
                        total[k] += weight * other[k]
            mine = rows[i, first:last]
            for k in range(total.shape[0]):
                mine[k] = 0.0 if fresh else total[k]


def followed(node: Any) -> tuple[Any, ...]:
    """What says the state of the correlations of a source; of any other node, nothing."""
    group = getattr(node, "group", None)
    return () if group is None or group.by is None else (group.by,)


def groups_of(graph: Any) -> Iterator[Group]:
    """The groups of the sources of a graph, as `correlation` says."""
    stated = graph.spec.correlation
    names, matrix = stated.names, np.array(stated.matrix, dtype=np.float64)
    sources, linking, degrees, follows = [graph.source_of(name) for name in names], matrix != 0.0, {}, {}
    for copula in stated.copulas:
        tied = [names.index(name) for name in copula.names]
        linking[np.ix_(tied, tied)] = True
        degrees[tied[0]] = copula.df
    for following in stated.following:
        tied = [names.index(name) for name in following.names]
        linking[np.ix_(tied, tied)] = True
        follows[tied[0]] = following
    for linked in _components(linking):
        first, members = linked[0], tuple([sources[i] for i in linked])
        if first in follows:
            by, matrices = _followed(graph, follows[first])
            yield Group(members, matrices, degrees.get(first), by)
        else:
            yield Group(members, (matrix[np.ix_(linked, linked)],), degrees.get(first))


def _followed(graph: Any, following: Following) -> tuple[Any, tuple[Array, ...]]:
    """The node that gives the number of the state, and the matrices in the order of these."""
    from procgen.terms.regimes import chain_of, states_of

    try:
        node = graph.resolve(following.by)
    except KeyError as error:
        raise SpecError((Fault(following.place, error.args[0]),)) from None
    while isinstance(node.term, Scaled) and node.term.factor == 1.0:
        node = node.inputs[0]
    names = states_of(node)
    if names is None or chain_of(node) is None:
        what = "a chain that starts stationary, a flag by chance, or the regime of a series that does"
        raise SpecError((Fault(following.place, f"expected `by` to name {what}; {following.by} is none"),))
    if set(names) != set(following.states):
        given = ", ".join(following.states)
        message = f"expected a value for each state of {following.by} ({', '.join(names)}), got {given}"
        raise SpecError((Fault(following.place, message),))
    return node, tuple([np.array(following.matrices[following.states.index(name)]) for name in names])


def _components(linking: Array) -> list[list[int]]:
    """Index sets of which one leads to the other by links, each in order, singletons left out."""
    left, found = list(range(len(linking))), []
    while left:
        linked = {left[0]}
        while True:
            more = {j for i in linked for j in left if linking[i, j]} | linked
            if more == linked:
                break
            linked = more
        left = [i for i in left if i not in linked]
        if len(linked) > 1:
            found.append(sorted(linked))
    return found
