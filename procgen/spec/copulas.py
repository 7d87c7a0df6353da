"""Reading `copula`: what ties the shocks of an item of `correlation` beyond the correlation of their normals."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from procgen.spec.declare import INVALID, Domain, Parameter, Reading, Real, Schema, mapping, mapping_of, read_parameters
from procgen.spec.model import Copula
from procgen.spec.tree import Tree

MOST_TIED = 100  # names; each has a table of its own
STUDENT = "student_t"
DF = Parameter("df", "ν", Real(above=2), "degrees of freedom; the fewer, the more often all are far out together")


class CopulaOf(Domain):
    """A copula that is not the normal one; read as its degrees of freedom."""

    structured = True

    def describe(self) -> str:
        return "a copula such as {student_t: {df: 4}}; without one it is the normal copula"

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_map or list(tree.value) != [STUDENT]:
            return reader.expected(tree, self.describe())
        values = read_parameters(tree.value[STUDENT], (DF,), reader.closed())
        return INVALID if values is INVALID else values["df"]

    def schema(self) -> Schema:
        return mapping({STUDENT: mapping_of((DF,))}, [STUDENT])


COPULA = Parameter("copula", "", CopulaOf(), "what ties the shocks beyond the correlation of their normals", None)


class Ties:
    """The copulas of the items of `correlation`, by the names that they tie."""

    def __init__(self) -> None:
        self._items: list[tuple[set[str], float | None, Tree]] = []

    def add(self, names: Sequence[Tree], df: float | None, tree: Tree) -> None:
        """Keep the copula of one item (None: the normal one) and its names as written."""
        self._items.append(({name.value for name in names}, df, tree))

    def joined(self, order: Sequence[str], reader: Reading) -> tuple[Copula, ...]:
        """Every t copula with its names in order; what two items say of one name must agree."""
        groups: list[tuple[set[str], float | None]] = []
        for names, df, tree in self._items:
            linked = [group for group in groups if group[0] & names and (df is not None or group[1] is not None)]
            for other, stated in linked:
                if stated != df:
                    name = next(n for n in order if n in other & names)
                    says = f"{_said(stated)}, and here {_said(df)}; give the same copula in both, or part their names"
                    reader.fault(tree, f"another item ties {name} by {says}")
                    return ()
            groups = [group for group in groups if group not in linked]
            groups.append((set().union(names, *(other for other, _ in linked)), df))
        found = [(tuple([n for n in order if n in names]), df) for names, df in groups if df is not None]
        most = max((len(tied) for tied, _ in found), default=0)
        if most > MOST_TIED:
            reader.fault(self._items[0][2], f"expected at most {MOST_TIED} names in a t copula, got {most}")
        return tuple([Copula(tied, df) for tied, df in sorted(found, key=lambda each: order.index(each[0][0]))])


def _said(df: float | None) -> str:
    return "the normal copula" if df is None else f"a t copula of {df:g} degrees of freedom"
