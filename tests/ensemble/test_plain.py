"""Columns that are read from where they stand in a file hold what the reader of Parquet finds there.

That reader (PyArrow) is the outside source; what is written in any other way is left to it.
"""

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from procgen.ensemble import EnsembleError
from procgen.ensemble.plain import Plain
from procgen.spec.pages import codecs
from tests.ensemble.fakes import fake_render, fake_spec

ROWS = 300_000  # three pages of 1 MB, or fifteen of 20,000 rows
VALUES = np.random.default_rng(5).normal(size=ROWS)
COLUMNS = {
    "x": pa.array(VALUES),
    "y": pa.array(VALUES.astype(np.float32)),
    "n": pa.array(np.arange(ROWS) // 1000),
    "t": pa.array(np.arange(ROWS), pa.timestamp("us", "UTC")),
}
SCHEMA = pa.schema([pa.field(name, column.type, nullable=False) for name, column in COLUMNS.items()])


def written(path, schema=SCHEMA, columns=COLUMNS, **options):
    pq.write_table(pa.table(list(columns.values()), schema=schema), path, **{"use_dictionary": False} | options)
    return path


def read(path, names=tuple(COLUMNS)):
    with pq.ParquetFile(path) as file:
        found = [Plain(path, file).read(group, names) for group in range(file.num_row_groups)]
        return found, [file.read_row_group(group) for group in range(file.num_row_groups)]


@pytest.mark.parametrize("compression", ["none", "zstd"])
@pytest.mark.parametrize("rows", [ROWS, 70_001])
def test_the_same_numbers_come_out(tmp_path, compression, rows):
    found, expected = read(written(tmp_path / "a.parquet", compression=compression, row_group_size=rows))
    for some, group in zip(found, expected, strict=True):
        assert [*some] == [*COLUMNS]
        for name, array in some.items():
            assert array.type == SCHEMA.field(name).type
            assert array.equals(group[name].combine_chunks())


OTHERS = {
    "dictionaries": {"use_dictionary": True},
    "another packing": {"compression": "snappy"},
    "split bytes": {"use_byte_stream_split": ["x", "y"]},
    "pages of the second version": {"data_page_version": "2.0"},
}


@pytest.mark.parametrize("how", OTHERS)
def test_what_is_written_otherwise_is_left_to_parquet(tmp_path, how):
    options = {"compression": "none"} | OTHERS[how]
    assert not {"x", "y"} & {*read(written(tmp_path / "a.parquet", **options))[0][0]}


def test_columns_with_gaps_and_other_types_are_left_to_parquet(tmp_path):
    columns = {
        "gaps": pa.array([1.5, None]),
        "small": pa.array([1, 2], pa.int32()),
        "unsigned": pa.array([1, 2], pa.uint64()),
        "nanoseconds": pa.array([1, 2], pa.timestamp("ns", "UTC")),
        "lists": pa.array([[1.0], [2.0]]),
    }
    schema = pa.schema([pa.field(name, each.type, nullable=name == "gaps") for name, each in columns.items()])
    assert read(written(tmp_path / "a.parquet", schema, columns), [*columns])[0] == [{}]


def test_memory_is_used_again_where_it_is_lent(tmp_path):
    path, memory = written(tmp_path / "a.parquet", compression="none", row_group_size=1000), {}

    def room(name, size):
        return memory.setdefault(name, np.empty(size, np.uint8))

    with pq.ParquetFile(path) as file:
        plain = Plain(path, file, room)
        for group in range(3):
            values = np.frombuffer(plain.read(group, ["x"])["x"].buffers()[1])
            assert np.shares_memory(values, memory["x"])
            assert np.array_equal(values, VALUES[1000 * group :][:1000])


def test_how_columns_are_packed_is_read_from_the_footer(tmp_path):
    packed = {"x": "none", "y": "snappy", "n": "zstd", "t": "gzip"}
    path = written(tmp_path / "a.parquet", compression=packed, row_group_size=ROWS // 2)
    with pq.ParquetFile(path) as file:
        groups = [file.metadata.row_group(group) for group in range(2)]
        names = [[group.column(k).compression for k in range(4)] for group in groups]
    assert names == [["UNCOMPRESSED", "SNAPPY", "ZSTD", "GZIP"]] * 2
    assert codecs(path) == [[0, 1, 6, 2]] * 2  # parquet.thrift, CompressionCodec


def test_an_unknown_packing_ends_no_process(tmp_path):
    made = fake_render(fake_spec(seed=8, paths=16, steps=20, columns={"x": {}}), tmp_path)
    path = made.path / made.manifest.parts[0].file
    data, at = bytearray(path.read_bytes()), 0
    for _ in range(3):  # of the columns path, step, x: the codec is field 4, which follows the names of the path
        at = data.index(b"\x19\x18", at + 1)
    end = data.index(b"x", at) + 1
    assert data[end] == 0x15
    data[end + 1] = 2 * 40
    path.write_bytes(data)
    assert codecs(path)[0][2] == 40
    with pytest.raises(EnsembleError, match="damaged"):
        sum(values["x"].size for _, _, values in made.blocks())


@pytest.mark.parametrize("row", [0, 131_071, 131_072, ROWS - 1])
def test_a_column_is_compared_page_by_page(tmp_path, row):
    path = written(tmp_path / "a.parquet", compression="zstd")
    seen = []

    def agrees(first, numbers):
        seen.append(len(numbers))
        return not first <= row < first + len(numbers) or numbers[row - first] != row // 1000

    with pq.ParquetFile(path) as file:
        plain = Plain(path, file)
        assert plain.holds(0, "n", lambda first, n: np.array_equal(n, np.arange(first, first + len(n)) // 1000))
        assert not plain.holds(0, "n", agrees)
        assert not plain.holds(0, "x", lambda first, numbers: True)  # no whole numbers
    assert sum(seen[:-1]) <= row < sum(seen)


@pytest.mark.parametrize("codec", ["none", "zstd"])
@pytest.mark.parametrize("row", [0, 1999, 5000, 12_799])
def test_a_wrong_path_is_found_in_any_row(tmp_path, codec, row):
    made = fake_render(fake_spec(seed=8, paths=640, steps=20, columns={"x": {}}), tmp_path)
    path = made.path / made.manifest.parts[0].file
    table, metadata = pq.read_table(path), pq.read_metadata(path).metadata
    columns = {name: table[name].to_numpy().copy() for name in table.column_names}
    columns["path"][row] += 1
    schema = table.schema.with_metadata(metadata)
    written(path, schema, {name: pa.array(values) for name, values in columns.items()}, compression=codec)
    with pytest.raises(EnsembleError, match=rf"where path {row // 20}, step {row % 20} belongs, column path has"):
        sum(values["x"].size for _, _, values in made.blocks())


def test_a_page_that_ends_early_is_left_to_parquet(tmp_path):
    path = written(tmp_path / "a.parquet", compression="none")
    with pq.ParquetFile(path) as file:
        end = file.metadata.row_group(0).column(0).data_page_offset + 5000
        path.write_bytes(path.read_bytes()[:end])
        assert Plain(path, file).read(0, ["x"]) == {}
