"""Digests are a function of values and addresses alone; the tree is rebuilt here by hand."""

import hashlib
import struct
from itertools import pairwise

import numpy as np
import pytest

from procgen.ensemble import digest
from procgen.ensemble.plan import STEPS, Block

RNG = np.random.Generator(np.random.Philox(11))


def by_hand(values, first_path):
    """The root of a series with at most 65,536 steps, straight from the definition."""
    sha = lambda data: hashlib.sha256(data).digest()  # noqa: E731
    paths, steps = values.shape
    level, path = [], first_path
    while path < first_path + paths:
        cell_end, leaves = (path // 1024 + 1) * 1024, b""
        while path < min(cell_end, first_path + paths):
            end = min((path // 16 + 1) * 16, first_path + paths)
            leaves += sha(values[path - first_path : end - first_path].astype("<f8").tobytes())
            path = end
        level.append(sha(b"\1" + leaves))
    while len(level) > 1:
        level = [sha(b"\2" + b"".join(level[k : k + 64])) for k in range(0, len(level), 64)]
    return sha(b"\3" + struct.pack("<4Q", first_path, paths, 0, steps) + level[0]).hex()


@pytest.mark.parametrize("first_path,paths", [(0, 1), (0, 16), (5, 40), (1000, 100), (0, 3000), (7, 70_000)])
def test_the_root_is_the_one_of_the_definition(first_path, paths):
    values = RNG.random((paths, 3))
    whole = Block(first_path, paths, 0, 3)
    leaves = digest.Leaves(whole)
    leaves.add(first_path, 0, values)
    assert digest.root([(whole, leaves.nodes(whole))], whole) == by_hand(values, first_path)


@pytest.mark.parametrize("cuts", [[], [16], [48, 1024], [1024, 2048], [32, 1040, 1056, 2032]])
@pytest.mark.parametrize("steps,step_cuts", [(20, []), (STEPS + 2, [STEPS])])
def test_parts_and_pieces_do_not_matter(cuts, steps, step_cuts):
    whole = Block(3, 2100, 0, steps) if not step_cuts else Block(3, 40, 0, steps)
    cuts = [cut for cut in cuts if cut < whole.end_path]
    values = RNG.random((whole.paths, whole.steps))
    parts = []
    for a, b in pairwise([3, *cuts, whole.end_path]):
        for c, d in pairwise([0, *step_cuts, whole.steps]):
            part = Block(a, b - a, c, d - c)
            leaves = digest.Leaves(part)
            for path in range(a, b, 37):
                end = min(path + 37, b)
                leaves.add(path, c, values[path - 3 : end - 3, c:d])
            parts.append((part, leaves.nodes(whole)))
    one = digest.Leaves(whole)
    one.add(3, 0, values)
    assert digest.root(parts, whole) == digest.root([(whole, one.nodes(whole))], whole)


def test_a_path_may_arrive_in_pieces_of_steps():
    whole = Block(0, 2, 0, 2 * STEPS + 5)
    values = RNG.random((2, whole.steps))
    pieces, once = digest.Leaves(whole), digest.Leaves(whole)
    for path in range(2):
        for start in range(0, whole.steps, 50_000):
            pieces.add(path, start, values[path : path + 1, start : start + 50_000])
    once.add(0, 0, values)
    assert pieces.nodes(whole) == once.nodes(whole)
    assert len(once.done) == 3


def test_one_bit_one_name_or_one_place_changes_the_digest():
    values = RNG.random((20, 5))
    assert by_hand(values, 0) != by_hand(values, 16)
    other = values.copy()
    other.view(np.uint64)[19, 4] ^= np.uint64(1)
    assert by_hand(values, 0) != by_hand(other, 0)
    roots = {"a": by_hand(values, 0), "b": by_hand(other, 0)}
    assert digest.total(roots) == digest.total(dict(reversed(roots.items())))
    assert digest.total(roots) != digest.total({"a": roots["b"], "b": roots["a"]})


def test_nodes_survive_their_hex_and_a_wrong_number_of_them_is_refused():
    whole = Block(0, 3000, 0, 2)
    leaves = digest.Leaves(whole)
    leaves.add(0, 0, RNG.random((3000, 2)))
    nodes = leaves.nodes(whole)
    assert digest.unpack(digest.pack(nodes), whole, whole) == nodes
    with pytest.raises(ValueError, match="expected 3 nodes"):
        digest.unpack(digest.pack(nodes)[:-64], whole, whole)
