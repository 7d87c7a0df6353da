"""Reading correlations `by` state: values for each state of a chain, and which names follow it together."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from procgen.spec.declare import INVALID, Domain, Parameter, Reading, Schema, Text
from procgen.spec.domains import varies
from procgen.spec.links import Links
from procgen.spec.model import Following, Frozen
from procgen.spec.named import Named
from procgen.spec.tree import Tree

BY_STATE = ("value", "matrix", "loadings", "across")  # and the value of each of `blocks`
BY = Parameter("by", "", Text(), "what says the state: a chain, a flag, or the regime of a series", None)


class ByState(Domain):
    """A value, or one for each state of what `by` names; read as the value, or a mapping of states to values."""

    structured = True

    def __init__(self, each: Domain) -> None:
        self.each = each

    def describe(self) -> str:
        return self.each.describe()

    def read(self, tree: Tree, reader: Reading) -> Any:
        if not tree.is_map or varies(tree):
            return self.each.read(tree, reader)
        return Named(self.each).read(tree, reader)

    def schema(self) -> Schema:
        return {"anyOf": [self.each.schema(), Named(self.each).schema()]}


def states_in(tree: Tree, values: Mapping[str, Any], links: Links, reader: Reading) -> tuple[str, ...] | None:
    """Return the states that an item gives values for, () where it has one value for all; None after a fault."""
    given, by = _given(tree, values), values.get("by")
    if by is INVALID or any(value is INVALID for _, value in given):
        return None
    stated = [(place, tuple(value)) for place, value in given if isinstance(value, Frozen)]
    if by is None and not stated:
        return ()
    if by is None:
        reader.fault(tree, "a value for each state needs `by`: the name of a chain, as in by: weather; give it")
        return None
    place = tree.value["by"]
    try:
        links.find(by)
    except LookupError as error:
        reader.fault(place, str(error))
        return None
    if not stated:
        reader.fault(
            given[0][0] if given else tree, f"expected a value for each state of {by}, as in {{calm: 0.2, storm: 0.8}}"
        )
        return None
    if values.get("repair"):
        reader.fault(tree.value["repair"], "a matrix by state is not repaired; write one that is a correlation")
        return None
    states = stated[0][1]
    for at, others in stated[1:]:
        if set(others) != set(states):
            reader.fault(at, f"expected the states {', '.join(states)}, as before, got {', '.join(others)}")
            return None
    return states


def _given(tree: Tree, values: Mapping[str, Any]) -> list[tuple[Tree, Any]]:
    """The values of an item that may differ by state, with where they are written."""
    found = [(tree.value[key], values[key]) for key in BY_STATE if key in values and key in tree.value]
    if isinstance(values.get("blocks"), tuple):
        blocks = tree.value["blocks"]
        written = blocks.value if blocks.is_list else (blocks,)
        inside = [(one.value["value"], block["value"]) for one, block in zip(written, values["blocks"], strict=True)]
        found = [*inside, *found]
    return found


def in_state(values: Mapping[str, Any], state: str) -> dict[str, Any]:
    """The values of an item in one state: those by state are its own, others hold in all."""

    def here(value: Any) -> Any:
        return value[state] if isinstance(value, Frozen) else value

    found = {key: here(value) if key in BY_STATE else value for key, value in values.items()}
    if "blocks" in found:
        found["blocks"] = tuple([{**block, "value": here(block["value"])} for block in found["blocks"]])
    return found


class Followers:
    """The items of `correlation` by what they follow, and which names are linked by them."""

    def __init__(self) -> None:
        self._items: list[tuple[set[str], str | None, tuple[str, ...], Tree]] = []

    def add(self, names: Sequence[Tree], by: str | None, states: tuple[str, ...], tree: Tree) -> None:
        """Keep what one item follows (None: nothing) and its names as written."""
        self._items.append(({name.value for name in names}, by, states, tree))

    def joined(
        self, order: Sequence[str], values: Mapping[tuple[int, int], Any], smallest: float, reader: Reading
    ) -> tuple[Following, ...]:
        """Every set of names that follow something together, with a positive definite matrix in each state."""
        groups: list[tuple[set[str], list[tuple[str, tuple[str, ...], Tree]]]] = []
        for names, by, states, tree in self._items:
            told = [] if by is None else [(by, states, tree)]
            linked = [group for group in groups if group[0] & names]
            groups = [group for group in groups if group not in linked]
            groups.append((names.union(*(g[0] for g in linked)), [*(t for g in linked for t in g[1]), *told]))
        found = []
        for names, told in groups:
            if told and (following := _together(names, told, order, values, smallest, reader)) is not None:
                found.append(following)
        return tuple(sorted(found, key=lambda each: order.index(each.names[0])))


def _together(
    names: set[str],
    told: Sequence[tuple[str, tuple[str, ...], Tree]],
    order: Sequence[str],
    values: Mapping[tuple[int, int], Any],
    smallest: float,
    reader: Reading,
) -> Following | None:
    by, states, tree = told[0]
    for other, others, place in told[1:]:
        if other != by or set(others) != set(states):
            first = f"{by} ({', '.join(states)})"
            here = f"{other} ({', '.join(others)})"
            reader.fault(place, f"names that are linked follow {first}, and here {here}; let all follow the same")
            return None
    at = [i for i, name in enumerate(order) if name in names]
    matrices = []
    for state in states:
        matrix = np.eye(len(at))
        for (i, j), value in values.items():
            if i in at and j in at:
                here = value[state] if isinstance(value, Frozen) else value
                matrix[at.index(i), at.index(j)] = matrix[at.index(j), at.index(i)] = here
        least = float(np.linalg.eigvalsh(matrix)[0])
        if least < smallest:
            reader.fault(
                tree,
                f"expected a positive definite correlation in {state}, got one whose smallest eigenvalue is {least:.3g}"
                "; bring the values nearer to 0, or to each other",
            )
            return None
        matrices.append(tuple([tuple(map(float, row)) for row in matrix]))
    return Following(by, tuple([order[i] for i in at]), states, tuple(matrices), tree.value["by"].place)
