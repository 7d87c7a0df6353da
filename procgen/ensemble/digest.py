"""Digests over values: a tree of SHA-256 whose shape depends on absolute paths and steps only.

*Leaf*: one series, a lane group of 16 paths, a block of 65,536 steps, the values as little-endian float64,
path then step. *Cell*: the leaves of 64 lane groups (1,024 paths) over one block of steps. *Root*: a tree of
fan-out 64 over the cells in (path block, step block) order. The ensemble's digest is made of names and roots,
sorted by name. A leaf has a multiple of 8 bytes and an inner node has not, so neither can pass for the other
(the idea of RFC 6962, section 2.1; the tree is our own).
"""

from __future__ import annotations

import hashlib
import struct
from collections.abc import Iterable, Mapping

import numpy as np

from procgen.ensemble.plan import CELL, LANES, STEPS, Block

FAN = 64
Key = tuple[int, int]  # (lane group or path block, step block)


class Leaves:
    """The leaves of one series over one part, from values that arrive in row order."""

    def __init__(self, part: Block):
        self.part = part
        self.done: dict[Key, bytes] = {}
        self._open: dict[Key, hashlib._Hash] = {}

    def add(self, first_path: int, first_step: int, values: np.ndarray) -> None:
        """Take (paths, steps) values of a type that float64 holds: whole paths, or a run of one path."""
        paths, steps = values.shape
        for first in range(first_path - first_path % LANES, first_path + paths, LANES):
            rows = slice(max(first - first_path, 0), first - first_path + LANES)
            for start in range(first_step - first_step % STEPS, first_step + steps, STEPS):
                columns = slice(max(start - first_step, 0), start - first_step + STEPS)
                key = (first // LANES, start // STEPS)
                leaf = self._open.get(key)
                if leaf is None:
                    leaf = self._open[key] = hashlib.sha256()
                leaf.update(np.ascontiguousarray(values[rows, columns], "<f8").data)
            if first + LANES <= first_path + paths and first_step + steps == self.part.end_step:
                self._close(first // LANES)

    def _close(self, group: int) -> None:
        for key in [key for key in self._open if key[0] == group]:
            self.done[key] = self._open.pop(key).digest()

    def nodes(self, whole: Block) -> dict[Key, bytes]:
        """Cells when the part has every path of its cells that `whole` has; else the leaves."""
        for key in list(self._open):
            self._close(key[0])
        return cells(self.done) if has_whole_cells(self.part, whole) else self.done


def has_whole_cells(part: Block, whole: Block) -> bool:
    """Whether no cell of the part reaches into another part of `whole`."""
    begins = part.first_path == whole.first_path or part.first_path % CELL == 0
    ends = part.end_path == whole.end_path or part.end_path % CELL == 0
    return begins and ends


def keys(part: Block, whole: Block) -> list[Key]:
    """The keys of a part's nodes, in order."""
    width = CELL if has_whole_cells(part, whole) else LANES
    groups = range(part.first_path // width, -(-part.end_path // width))
    blocks = range(part.first_step // STEPS, -(-part.end_step // STEPS))
    return [(group, block) for group in groups for block in blocks]


def area(key: Key, part: Block, whole: Block) -> Block:
    """The rectangle of a part that a node stands for."""
    width = CELL if has_whole_cells(part, whole) else LANES
    path, step = max(key[0] * width, part.first_path), max(key[1] * STEPS, part.first_step)
    end_path, end_step = min((key[0] + 1) * width, part.end_path), min((key[1] + 1) * STEPS, part.end_step)
    return Block(path, end_path - path, step, end_step - step)


def cells(leaves: Mapping[Key, bytes]) -> dict[Key, bytes]:
    """Cells from all of their leaves."""
    gathered: dict[Key, list[bytes]] = {}
    for (group, block), leaf in sorted(leaves.items()):
        gathered.setdefault((group * LANES // CELL, block), []).append(leaf)
    return {key: _node(b"\1", parts) for key, parts in gathered.items()}


def root(parts: Iterable[tuple[Block, Mapping[Key, bytes]]], whole: Block) -> str:
    """A series' digest (hex) from the nodes of its parts."""
    found: dict[Key, bytes] = {}
    loose: dict[Key, bytes] = {}
    for part, nodes in parts:
        (found if has_whole_cells(part, whole) else loose).update(nodes)
    found.update(cells(loose))
    level = [node for _, node in sorted(found.items())]
    while len(level) > 1:
        level = [_node(b"\2", level[k : k + FAN]) for k in range(0, len(level), FAN)]
    shape = struct.pack("<4Q", whole.first_path, whole.paths, whole.first_step, whole.steps)
    return hashlib.sha256(b"\3" + shape + level[0]).hexdigest()


def total(roots: Mapping[str, str]) -> str:
    """The ensemble's digest (hex) from its series' names and roots."""
    text = hashlib.sha256(b"\4")
    for name in sorted(roots):
        text.update(struct.pack("<Q", len(name.encode())) + name.encode() + bytes.fromhex(roots[name]))
    return text.hexdigest()


def _node(tag: bytes, children: list[bytes]) -> bytes:
    return hashlib.sha256(tag + b"".join(children)).digest()


def pack(nodes: Mapping[Key, bytes]) -> str:
    """Nodes as hex, in the order of `keys`."""
    return b"".join(node for _, node in sorted(nodes.items())).hex()


def unpack(text: str, part: Block, whole: Block) -> dict[Key, bytes]:
    """Nodes from their hex; ValueError when there are too many or too few."""
    order = keys(part, whole)
    data = bytes.fromhex(text)
    if len(data) != 32 * len(order):
        raise ValueError(f"expected {len(order)} nodes for {part}, got {len(data)} bytes")
    return {key: data[32 * k : 32 * k + 32] for k, key in enumerate(order)}
