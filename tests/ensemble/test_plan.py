"""Parts, batches, lanes and tiles: every row once and in order, bounded, cut where digests allow."""

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from procgen.ensemble import plan
from procgen.ensemble.plan import CELL, LANES, PAST, STEPS, Block, batches, chains, cut, lanes, narrow_steps, tiles

shapes = st.builds(
    Block,
    st.integers(0, 5000) | st.integers(0, 2**40),
    st.integers(1, 200) | st.integers(1, 200_000),
    st.just(0),
    st.integers(1, 200) | st.integers(1, 3_000_000),
)


def rows_in_order(blocks, whole):
    """Whether blocks cover `whole` in (path, step) order without gap or overlap."""
    path, step, end = whole.first_path, whole.first_step, whole.first_path
    for block in blocks:
        if step == whole.first_step:
            end = block.end_path
        if (block.first_path, block.first_step, block.end_path) != (path, step, end):
            return False
        step = block.end_step
        if step == whole.end_step:
            path, step = end, whole.first_step
    return (path, step) == (whole.end_path, whole.first_step)


@settings(max_examples=60, deadline=None)
@given(shapes, st.integers(1, 50), st.integers(1, 9))
def test_parts_cover_the_ensemble_once_and_are_cut_where_leaves_are(whole, columns, workers):
    plans = chains(whole, 8 * columns, workers)
    parts = [part for chain in plans for part in chain]
    assert rows_in_order(parts, whole)
    usual = max(plan.PART_BYTES, whole.rows * 8 * columns // plan.MOST_PARTS)  # of very many, parts grow
    for part in parts:
        assert part.first_path in (whole.first_path, part.first_path // LANES * LANES)
        assert part.first_step % STEPS == 0
        narrowest = min(part.paths, LANES) * min(part.steps, STEPS) * 8 * columns
        assert part.rows * 8 * columns <= max(2.6 * usual, narrowest)


@settings(max_examples=50, deadline=None)
@given(shapes, st.integers(1, 50))
def test_batches_cover_a_part_in_row_order_within_the_buffer(whole, columns):
    chain = chains(whole, 8 * columns)[0]
    for part in {chain[0], chain[-1]}:
        found = list(batches(part, 8 * columns, chain[0].steps))
        assert rows_in_order(found, part)
        assert max(batch.rows for batch in found) * 8 * columns <= 1.3 * plan.BUFFER_BYTES
        assert rows_in_order(list(lanes(found[0])), found[0])


@settings(max_examples=50, deadline=None)
@given(shapes, st.integers(1, 50))
def test_all_parts_of_a_chain_are_drawn_by_the_same_runs(whole, columns):
    """A carried state belongs to a range of paths, so the last, shorter part must be cut like the first."""
    chain = chains(whole, 8 * columns)[0]

    def ranges(part):
        pieces = [p for b in batches(part, 8 * columns, chain[0].steps) for p in lanes(b)]
        return {(piece.first_path, piece.paths) for piece in pieces}

    if len(chain) > 1:
        assert ranges(chain[0]) == ranges(chain[-1])


@given(st.integers(1, 10**6), st.integers(1, 9000), st.integers(1, 300))
def test_tiles_are_all_steps_and_bounded(steps, paths, columns):
    found = tiles(steps, paths, columns)
    assert sum(found) == steps and min(found) >= 1
    assert max(found) * paths <= max(plan.TILE, paths)


def test_row_groups_hold_whole_paths_or_a_piece_of_one():
    assert {b.steps for b in cut(Block(0, 4096, 0, 1000), 1 << 20)} == {1000}
    assert {b.paths for b in cut(Block(0, 3, 0, 2_500_000), 1 << 20)} == {1}


def test_the_usual_shape_is_cut_at_cells_and_keeps_all_workers_busy():
    for workers in (1, 2, 3, 7):
        plans = chains(Block(0, 65_536, 0, 1000), 8, workers)
        assert len(plans) >= workers
        assert all(len(chain) == 1 and chain[0].first_path % CELL == 0 for chain in plans)
        assert len({chain[0].paths for chain in plans}) <= 2


def test_a_long_past_is_drawn_for_fewer_paths_at_a_time():
    whole = Block(0, 4096, 0, 10)
    for depth in (0, 1000, 300_000, 10**9):
        runs = list(lanes(whole, depth))
        assert sum(run.paths for run in runs) == 4096
        assert all(run.paths * depth <= PAST or run.paths == 1 for run in runs)


def test_only_narrow_runs_repay_compiling():
    assert narrow_steps((Block(0, 4096, 0, 1000),), 8) == 0
    assert narrow_steps((Block(0, 1, 0, 2_000_000),), 8) == 2_000_000
    assert narrow_steps((Block(0, 100, 0, 5000),), 8) == 5000


@pytest.mark.parametrize("steps", [10, 10_000, 10**9])
def test_parts_of_the_largest_ensembles_grow_so_that_a_manifest_can_list_them(steps):
    whole = Block(0, 10**13 // steps, 0, steps)
    parts = [part for chain in plan.chains(whole, 8) for part in chain]
    assert len(parts) <= 1.1 * plan.MOST_PARTS
    assert sum(part.rows for part in parts) == whole.rows
    assert max(part.rows for part in parts) * 8 < 5e9  # what a store behind a URL moves in one step
