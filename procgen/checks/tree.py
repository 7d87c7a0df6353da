"""Mergeable sums of ranges of paths, merged in an order that only the numbers of the paths decide.

Two neighbouring ranges that are the halves of an aligned one (of 16, 32, 64 … paths) are merged at once, whichever
comes first, as cells are in the digest's tree; what is left in the end is merged from left to right. So the same
bits come out of any number of processes and of any cut between parts.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any, Generic, Protocol, TypeVar

from procgen.checks.blocks import GROUP

WIDEST = 1024  # paths that are summed together at most


class Mergeable(Protocol):
    def merge(self, other: Any) -> None: ...


T = TypeVar("T", bound=Mergeable)


def ranges(first: int, end: int) -> Iterator[tuple[int, int]]:
    """The paths first … end − 1 as aligned ranges of 16 to 1,024 paths, and at the ends a rest of a lane group."""
    while first < end:
        stop = (first // GROUP + 1) * GROUP
        if first % GROUP == 0:
            size = GROUP
            while size < WIDEST and first % (2 * size) == 0 and first + 2 * size <= end:
                size *= 2
            stop = first + size
        yield first, min(stop, end)
        first = min(stop, end)


class Tree(Generic[T]):
    """Sums by range of paths."""

    def __init__(self) -> None:
        self.nodes: dict[int, tuple[int, T]] = {}  # first path -> (end, sums)

    def add(self, first: int, end: int, sums: T) -> None:
        """Take the sums of the paths first … end − 1, which are nowhere else in the tree."""
        while (end - first) >= GROUP and first % (end - first) == 0 and (end - first).bit_count() == 1:
            size = end - first
            other = self.nodes.get(first ^ size)
            if other is None or other[0] != (first ^ size) + size:
                break
            del self.nodes[first ^ size]
            left, right = (sums, other[1]) if first < first ^ size else (other[1], sums)
            left.merge(right)
            first, end, sums = min(first, first ^ size), max(end, other[0]), left
        self.nodes[first] = end, sums

    def total(self, nothing: T) -> T:
        """All of it, merged into `nothing`."""
        for _, (_, sums) in sorted(self.nodes.items(), key=lambda node: node[0]):
            nothing.merge(sums)
        return nothing
