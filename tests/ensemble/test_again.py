"""Columns that repeat are unpacked once; one that does not hold the same is still found, at its first row."""

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from procgen.ensemble import EnsembleError
from procgen.ensemble.again import Again
from tests.ensemble.fakes import fake_render, fake_spec

STEPS, PATHS = 20, 640
SPEC = fake_spec(seed=8, paths=PATHS, steps=STEPS, columns={"x": {}})


@pytest.fixture
def made(tmp_path):
    return fake_render(SPEC, tmp_path)


@pytest.fixture
def asked(monkeypatch):
    """What was known of each row group, in order."""
    found, known = [], Again.known
    monkeypatch.setattr(Again, "known", lambda self, group: (found.append(known(self, group)), found[-1])[1])
    return found


def write(made, change, paths=64, **options):
    """Write the part again in row groups of so many paths, with some rows changed."""
    path = made.path / made.manifest.parts[0].file
    table, metadata = pq.read_table(path), pq.read_metadata(path).metadata
    columns = {name: table[name].to_numpy().copy() for name in table.column_names}
    change(columns)
    table = pa.table(list(columns.values()), schema=table.schema.with_metadata(metadata))
    pq.write_table(table, path, row_group_size=int(paths * STEPS), **options)


def read(made):
    return sum(values["x"].size for _, _, values in made.blocks())


def test_steps_are_read_once_where_they_repeat(made, asked):
    write(made, lambda columns: None)
    assert read(made) == PATHS * STEPS
    assert asked == [set(), *[{"step"}] * 9]


def test_row_groups_that_begin_within_a_path_are_read_in_full(made, asked):
    write(made, lambda columns: None, paths=3.5)
    assert read(made) == PATHS * STEPS
    assert asked == [set()]  # of the last one, which has three whole paths


@pytest.mark.parametrize("codec", ["none", "zstd"])
@pytest.mark.parametrize("row", [5, 64 * STEPS, 200 * STEPS + 7, PATHS * STEPS - 1])
def test_a_wrong_step_is_found_in_any_row_group(made, codec, row):
    def change(columns):
        columns["step"][row] += 1

    write(made, change, compression=codec)
    with pytest.raises(EnsembleError, match=rf"where path {row // STEPS}, step {row % STEPS} belongs, column step has"):
        read(made)
