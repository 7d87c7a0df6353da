"""Steps and times of long paths are written as differences: small, and read by anyone as what they are."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest

import procgen as pg
from procgen.ensemble.parquet import LONG


def written(tmp_path, layout, steps, paths=2):
    time = {"steps": steps, "every": "1h", "start": "2024-01-01"}
    spec = {"procgen": 1, "seed": 5, "paths": paths, "time": time, "series": {"x": {"ar": {"phi": 0.5, "sd": 1}}}}
    pg.render(spec, tmp_path / "out", layout=layout)
    return next((tmp_path / "out").glob("*.parquet"))


def by_step(file):
    """The columns of steps and times in the first row group."""
    group = pq.ParquetFile(file).metadata.row_group(0)
    columns = [group.column(k) for k in range(group.num_columns)]
    return {one.path_in_schema: one for one in columns if one.path_in_schema in ("step", "time")}


@pytest.mark.parametrize("layout", ["long", "panel", "wide"])
def test_they_take_next_to_nothing_and_are_read_as_written(tmp_path, layout):
    file = written(tmp_path, layout, LONG)
    found = by_step(file)
    assert [*found] == (["time"] if layout == "panel" else ["step", "time"])
    for column in found.values():
        assert "DELTA_BINARY_PACKED" in column.encodings and column.total_compressed_size < column.num_values / 8
    paths = 1 if layout == "wide" else 2
    table = pd.read_parquet(file)
    assert (table["time"] == np.tile(pd.date_range("2024-01-01", periods=LONG, freq="h", tz="UTC"), paths)).all()
    assert "step" not in found or (table["step"] == np.tile(np.arange(LONG), paths)).all()
    assert pg.check_digest(tmp_path / "out").ok


def test_those_of_shorter_paths_are_packed_as_what_repeats(tmp_path):
    for column in by_step(written(tmp_path, "long", LONG - 1)).values():
        assert column.compression == "ZSTD" and "DELTA_BINARY_PACKED" not in column.encodings


def test_one_that_is_changed_is_named(tmp_path):
    file = written(tmp_path, "long", LONG, paths=1)
    column, data = by_step(file)["step"], bytearray(file.read_bytes())
    data[column.data_page_offset + column.total_compressed_size // 2] ^= 0xFF
    file.write_bytes(data)
    result = pg.check_digest(tmp_path / "out")
    assert not result.ok and file.name in result.text()
