"""Parquet files from strangers, tables or parts: their pages, columns and row groups."""

import shutil

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from typer.testing import CliRunner

import procgen as pg
from procgen.app import app
from procgen.spec import pages
from procgen.spec.pages import Bomb, read_within, refuse_bombs
from tests.hostile.commands import HEAD_RAW


def test_a_page_that_grows_to_gigabytes(tmp_path, monkeypatch):
    # written with one page of 16 MB for each column, and read with a bound below that: the size is the header's
    options = {"data_page_size": 1 << 30, "use_dictionary": False}
    pq.write_table(pa.table({"x": ["y" * (16 << 20)]}), tmp_path / "a.parquet", compression="zstd", **options)
    found = pq.read_metadata(tmp_path / "a.parquet")
    assert refuse_bombs(tmp_path / "a.parquet", found, ["x"]) == 1
    monkeypatch.setattr(pages, "MOST_BYTES", 1 << 20)
    with pytest.raises(Bomb, match=r"a page of column x would become 16,777,\d\d\d bytes, more than 1,048,576"):
        refuse_bombs(tmp_path / "a.parquet", found, ["x"])
    assert refuse_bombs(tmp_path / "a.parquet", found, []) == 0


@pytest.mark.parametrize("version", ["1.0", "2.0"])
@pytest.mark.parametrize("compression", ["none", "snappy", "gzip", "zstd", "brotli"])
@pytest.mark.parametrize("dictionary", [True, False])
def test_values_of_pages_are_those_of_the_file(tmp_path, version, compression, dictionary):
    data = {
        "x": pa.array(np.arange(5000.0), mask=np.arange(5000) % 7 == 0),
        "y": pa.array([f"a{k % 9}" for k in range(5000)]),
        "z": pa.array([[k] * 3 for k in range(5000)]),
        "w": pa.array([{"a": k, "b": "c"} for k in range(5000)]),
    }
    path = tmp_path / "a.parquet"
    options = {"data_page_version": version, "compression": compression, "use_dictionary": dictionary}
    pq.write_table(pa.table(data), path, data_page_size=1000, row_group_size=2000, write_statistics=True, **options)
    found = pq.read_metadata(path)
    assert [refuse_bombs(path, found, [name]) for name in "xyzw"] == [5000, 5000, 15_000, 10_000]
    assert read_within(path, None, 1 << 20).to_pylist() == pa.table(data).to_pylist()
    with pytest.raises(Bomb, match="would become"):
        read_within(path, ["x"], 10_000)


@pytest.mark.parametrize(
    "kind", [pa.list_(pa.float64()), pa.struct([("a", pa.string())]), pa.binary(200), pa.decimal256(70)]
)
def test_columns_of_other_types(good, tmp_path, kind):
    table = pq.read_table(next((good / "out").glob("*.parquet")))
    for name in ("step", "flow"):
        other = table.set_column(table.column_names.index(name), name, pa.nulls(table.num_rows, kind))
        pq.write_table(other, tmp_path / "a.parquet")
        result = CliRunner().invoke(app, ["validate", str(tmp_path / "a.parquet"), "--spec", str(good / "spec.yaml")])
        assert result.exit_code in (1, 2) and "in procgen itself" not in result.output
        out = tmp_path / name
        shutil.copytree(good / "out", out)
        shutil.copy(tmp_path / "a.parquet", next(out.glob("*.parquet")))
        result = CliRunner().invoke(app, ["digest", str(out)])
        assert result.exit_code == 1 and f"expected one column {name} of type" in result.output


def test_a_panel_without_its_ids(tmp_path):
    made = pg.render(HEAD_RAW, tmp_path / "out", layout="panel")
    part = next((tmp_path / "out").glob("*.parquet"))
    table = pq.read_table(part)
    pq.write_table(table.set_column(0, "id", pa.array(["x"] * 199 + ["y"])), part)
    assert "column id has y" in pg.check_digest(tmp_path / "out").text()
    pq.write_table(table.set_column(0, "id", pa.array(["x"] * 200).dictionary_encode()), part)
    assert pg.check_digest(tmp_path / "out").digest == made.digest
    pq.write_table(table.drop_columns(["id"]), part)
    assert "is damaged: it has no column id" in pg.check_digest(tmp_path / "out").text()


def test_row_groups_of_any_size_are_read_in_runs(tmp_path, monkeypatch):
    from procgen.ensemble import parquet

    made = pg.render(HEAD_RAW, tmp_path / "out")
    part = next((tmp_path / "out").glob("*.parquet"))
    pq.write_table(pq.read_table(part), part, row_group_size=150)
    monkeypatch.setattr(parquet, "LARGEST", 100)
    monkeypatch.setattr(parquet, "GROUP_ROWS", 70)
    assert pg.check_digest(tmp_path / "out").digest == made.digest
    assert np.array_equal(pg.open_ensemble(tmp_path / "out")["x"], pg.render(HEAD_RAW)["x"])
