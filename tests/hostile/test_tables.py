"""Tables from strangers, and small files that would become large ones."""

import gzip

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from tests.hostile.commands import refused


def test_text_that_unpacks_to_gigabytes(good, tmp_path):
    with gzip.open(tmp_path / "a.csv.gz", "wb", 9) as file:
        file.write(b"path,step,flow,level\n")
        for _ in range(6):
            file.write(b"0,0,0,0\n" * 2_000_000)
    assert (tmp_path / "a.csv.gz").stat().st_size < 1_000_000
    refused(good, "validate", tmp_path / "a.csv.gz", "--spec", good / "spec.yaml", says="unpack to more than")


@pytest.mark.parametrize(("name", "head"), [("a.csv", b"path,step,flow,level\n0,0,1,1\n"), ("a.csv.gz", b"")])
def test_a_line_without_end(good, tmp_path, name, head):
    with (gzip.open if name.endswith("gz") else open)(tmp_path / name, "wb") as file:
        file.write(head)
        for _ in range(40):
            file.write(b"1" * 1_000_000)
    refused(good, "validate", tmp_path / name, "--spec", good / "spec.yaml", says="a line of more than")


def test_a_header_of_a_million_columns(good, tmp_path):
    (tmp_path / "a.csv").write_bytes(b"a," * 1_000_000 + b"b\n0\n")
    refused(good, "validate", tmp_path / "a.csv", "--spec", good / "spec.yaml", says="1,000,001 columns")


def zeros(path, rows, groups=1, **options):
    """A small file of many rows: path, step, flow and level are all zero."""
    kinds = {"path": pa.int64(), "step": pa.int64(), "flow": pa.float64(), "level": pa.float64()}
    table = pa.table({name: pa.array(np.zeros(rows), kind) for name, kind in kinds.items()})
    with pq.ParquetWriter(path, table.schema, compression="zstd", **options) as file:
        for _ in range(groups):
            file.write_table(table, row_group_size=rows)


def test_rows_that_a_small_file_repeats(good, tmp_path):
    zeros(tmp_path / "a.parquet", 1_000_000, 4)
    assert (tmp_path / "a.parquet").stat().st_size < 1_000_000
    refused(good, "validate", tmp_path / "a.parquet", "--spec", good / "spec.yaml", says="would become 128,000,000")


def test_a_text_that_a_small_file_repeats(good, tmp_path):
    names = pa.DictionaryArray.from_arrays(pa.array(np.zeros(50_000, np.int32)), ["x" * 1_000_000])
    columns = {"path": names.cast(pa.dictionary(pa.int32(), pa.string())), "step": np.arange(50_000)}
    columns |= {name: np.zeros(50_000) for name in ("flow", "level")}
    table = pa.table(columns)
    pq.write_table(table, tmp_path / "a.parquet", compression="zstd", store_schema=False)
    refused(good, "validate", tmp_path / "a.parquet", "--spec", good / "spec.yaml", says="would become 50,000,000,000")
