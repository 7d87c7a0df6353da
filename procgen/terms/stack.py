"""Terms of many paths, each configured for its own, run side by side.

A term says in `by_rows` which of its parameters may be rows, one value a path, in `recurse`: then the terms of all
paths become one whose numbers are rows, and its recursion runs once for all of them. Any other term runs path by path.
Either way every path has the bits that it has alone.
"""

from __future__ import annotations

import copy
from collections.abc import Mapping, Sequence
from functools import cached_property
from typing import Any

import numpy as np

from procgen.terms.base import Array, State, Term
from procgen.terms.rows import Unlike, alike


def stacked(parts: Sequence[Any]) -> Any:
    """One thing in place of many: itself where all are equal, numbers as rows (paths,), and so on inside."""
    first = parts[0]
    if all(part is first for part in parts) or (isinstance(first, int | str | None) and all(p == first for p in parts)):
        return first
    if isinstance(first, np.ndarray):
        if all(np.array_equal(part, first) for part in parts):
            return first
        raise Unlike
    if all(isinstance(part, float) for part in parts):
        return first if all(part == first for part in parts) else np.array(parts)
    if isinstance(first, tuple) and len({len(part) for part in parts}) == 1:
        return alike(tuple([stacked(each) for each in zip(*parts, strict=True)]))
    if isinstance(first, Mapping) and all(part.keys() == first.keys() for part in parts):
        return {key: stacked([part[key] for part in parts]) for key in first}
    if isinstance(first, Term) and all(type(part) is type(first) for part in parts):
        made = copy.copy(first)
        for name in first.__dict__:
            if not isinstance(getattr(type(first), name, None), cached_property):  # these follow from the others
                made.__dict__[name] = stacked([part.__dict__[name] for part in parts])
            else:
                made.__dict__.pop(name, None)
        return made
    if all(part == first for part in parts):
        return first
    raise Unlike


class Stack(Term):
    """The terms of several paths in one place of a graph; `widths` says how many paths each is for."""

    def __init__(self, terms: Sequence[Term], widths: Sequence[int]):
        super().__init__({})
        self.terms = tuple(terms)
        self.edges = np.concatenate([[0], np.add.accumulate(np.array(widths))]).tolist()
        self.one = self._joined(widths)

    def _joined(self, widths: Sequence[int]) -> Term | None:
        """One term for all paths, or None where they must run one by one."""
        first = self.terms[0]
        differ = {name for name in first.values if any(t.values[name] != first.values[name] for t in self.terms[1:])}
        try:
            repeated = [term for term, width in zip(self.terms, widths, strict=True) for _ in range(width)]
            return stacked(repeated) if differ <= set(first.by_rows) else None
        except Unlike:
            return None

    def recurse(self, inputs, state, at):
        if self.one is not None:
            return self.one.recurse(inputs, state, at)
        values, states = [], []
        for k, term in enumerate(self.terms):
            a, b = self.edges[k], self.edges[k + 1]
            own = {name: _of(rows, a, b) for name, rows in state.items()}
            out, own = term.recurse([_of(rows, a, b) for rows in inputs], own, at)
            values.append(out)
            states.append(own)
        return self._together(values), {name: self._wide([own[name] for own in states]) for name in states[0]}

    def _together(self, values: list[Any]) -> Any:
        if isinstance(values[0], dict):
            return {name: self._wide([out[name] for out in values]) for name in values[0]}
        return self._wide(values)

    def _wide(self, parts: list[Array]) -> Array:
        """Columns of all terms side by side; one column of a term stands for all its paths."""
        widths = np.diff(self.edges)
        wide = [np.broadcast_to(part, (*part.shape[:-1], width)) for part, width in zip(parts, widths, strict=True)]
        return np.concatenate(wide, axis=-1)

    def gathered(self, states: Sequence[State]) -> State:
        """The states of all terms as one."""
        if any(state.keys() != states[0].keys() for state in states):
            raise Unlike
        return {name: self._wide([state[name] for state in states]) for name in states[0]}


def _of(rows: Array, first: int, end: int) -> Array:
    return rows if rows.shape[-1] == 1 else rows[..., first:end]
