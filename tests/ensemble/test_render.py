"""Values and digests do not depend on parts, batches, processes, or on how much was asked for."""

import re

import numpy as np
import pyarrow.parquet as pq
import pytest

from procgen.ensemble import EnsembleError, open_ensemble, plan
from procgen.ensemble.plan import STEPS
from tests.ensemble.fakes import fake_check, fake_render, fake_spec

COLUMNS = {"x": {}, "y": {"decimals": 2, "unit": "kW"}, "n": {"type": "int64"}, "s": {"type": "float32"}}
SPEC = fake_spec(seed=5, paths=1100, steps=30, columns=COLUMNS)


@pytest.fixture(scope="module")
def memory():
    return fake_render(SPEC)


@pytest.mark.parametrize("part_bytes", [1 << 12, 1 << 16, 1 << 26])
@pytest.mark.parametrize("buffer_bytes", [1 << 11, 1 << 27])
def test_parts_and_batches_give_one_digest(tmp_path, monkeypatch, memory, part_bytes, buffer_bytes):
    monkeypatch.setattr(plan, "PART_BYTES", part_bytes)
    monkeypatch.setattr(plan, "BUFFER_BYTES", buffer_bytes)
    ens = fake_render(SPEC, tmp_path, workers=1)
    assert ens.digest == memory.digest
    assert (len(ens.manifest.parts) > 1) == (part_bytes < 1 << 26)
    assert not (tmp_path / ".state").exists()


@pytest.mark.parametrize("workers", [1, 2, 3])
def test_worker_processes_give_one_digest(tmp_path, monkeypatch, memory, workers):
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 16)
    assert fake_render(SPEC, tmp_path, workers=workers).digest == memory.digest


def test_tiles_give_one_digest(monkeypatch, memory):
    monkeypatch.setattr(plan, "TILE", 9000)
    assert fake_render(SPEC).digest == memory.digest


@pytest.mark.parametrize("buffer_bytes", [1 << 27, 1 << 22, 1 << 18])
def test_parts_in_both_directions_carry_the_state(tmp_path, monkeypatch, buffer_bytes):
    """Also when a part is drawn in several batches: of paths, or of pieces of one path."""
    spec = fake_spec(paths=35, steps=2 * STEPS + 100)
    whole = fake_render(spec)
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 22)
    monkeypatch.setattr(plan, "BUFFER_BYTES", buffer_bytes)
    ens = fake_render(spec, tmp_path, workers=1)
    assert len(ens.manifest.parts) == 9
    assert {part.block.first_step for part in ens.manifest.parts} == {0, STEPS, 2 * STEPS}
    assert ens.digest == whole.digest
    assert np.array_equal(ens.paths(20, 21)["x"], whole["x"][20:21])


def test_memory_and_disk_hold_the_same_values(tmp_path, memory):
    ens = fake_render(SPEC, tmp_path)
    for name in COLUMNS:
        assert ens[name].dtype == np.float64
        assert np.array_equal(ens[name], memory[name])
    assert ens.to_arrow().equals(memory.to_arrow())
    assert open_ensemble(tmp_path).to_pandas().equals(memory.to_pandas())


def test_fewer_paths_or_steps_are_a_prefix_on_disk(tmp_path, memory):
    fewer = fake_render(SPEC, tmp_path / "fewer", paths=33, steps=7)
    later = fake_render(SPEC, tmp_path / "later", paths=50, first_path=1003)
    assert np.array_equal(fewer["y"], memory["y"][:33, :7])
    assert np.array_equal(later["y"], memory["y"][1003:1053])
    assert later.paths(1010, 1012).to_pandas()["path"].unique().tolist() == [1010, 1011]
    assert later.manifest.parts[0].file == "paths-000001003-000001052.parquet"


def test_blocks_are_every_row_once_in_order(tmp_path, monkeypatch, memory):
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 16)
    for ens in (fake_render(SPEC, tmp_path), memory):
        rows = [block["x"] for _, _, block in ens.blocks()]
        assert [first for first, _, _ in ens.blocks()] == np.cumsum([0, *(len(r) for r in rows[:-1])]).tolist()
        assert np.array_equal(np.concatenate(rows), memory["x"])


def test_the_file_says_what_it_is_and_stays_lean(tmp_path):
    ens = fake_render(SPEC, tmp_path)
    file = pq.ParquetFile(tmp_path / ens.manifest.parts[0].file)
    schema = file.schema_arrow
    assert schema.names == ["path", "step", *COLUMNS]
    assert [str(kind) for kind in schema.types] == ["int64", "int64", "double", "double", "int64", "float"]
    assert not any(field.nullable for field in schema)
    assert schema.field("y").metadata == {b"unit": b"kW"}
    group = file.metadata.row_group(0)
    index = [group.column(k).total_compressed_size for k in (0, 1)]
    values = [group.column(k) for k in range(2, 6)]
    assert sum(index) < 0.1 * group.num_rows * 16
    assert not any(c.has_dictionary_page or c.is_stats_set for c in values)


def test_a_new_series_changes_no_other_digest(memory):
    more = fake_render(fake_spec(seed=5, paths=1100, steps=30, columns={**COLUMNS, "more": {}}))
    assert more.digest != memory.digest
    for name in COLUMNS:
        assert np.array_equal(more[name], memory[name])


def test_drawn_and_stored_digests_differ_only_where_values_are_rounded(tmp_path):
    found = fake_render(SPEC, tmp_path).manifest
    assert found.stored["x"] == found.drawn["x"]
    assert all(found.stored[name] != found.drawn[name] for name in ("y", "n", "s"))
    plain = fake_render(fake_spec(seed=5, paths=1100, steps=30, columns={name: {} for name in COLUMNS}))
    assert plain.digest == found.digest_drawn


@pytest.mark.parametrize("workers", [1, 2])
@pytest.mark.parametrize("value", ["nan", "inf"])
def test_a_value_that_is_not_finite_is_named_and_nothing_is_left(tmp_path, monkeypatch, value, workers):
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 16)
    spec = fake_spec(paths=2000, steps=30, columns=COLUMNS, bad=(1500, 17, value))
    said = {"nan": "not a number: ", "inf": "inf, not a finite"}[value]
    with pytest.raises(EnsembleError, match=f"the value at path 1500, step 17 is {said}"):
        fake_render(spec, tmp_path, workers=workers)
    parts = [re.search(r"paths-(\d+)-(\d+)", file.name) for file in tmp_path.rglob("*")]
    assert not any(part and int(part[1]) <= 1500 <= int(part[2]) for part in parts)
    with pytest.raises(EnsembleError, match="path 1500, step 17"):
        fake_render(spec)


def test_sizes_are_refused_before_anything_is_drawn(tmp_path):
    huge = fake_spec(paths=10**9, steps=10**6)
    with pytest.raises(EnsembleError, match=r"take about 8 PB, and .* has .* free; ask for fewer paths"):
        fake_render(huge, tmp_path / "out")
    assert not (tmp_path / "out").exists()
    with pytest.raises(EnsembleError, match=r"take 8 PB in memory, and .* are free; give out="):
        fake_render(huge)
    with pytest.raises(EnsembleError, match="expected at most"):
        fake_render(fake_spec(paths=2**60, steps=1))


@pytest.mark.parametrize(
    "how,sentence",
    [
        ({"layout": "cube"}, "expected layout long, panel, nested or wide, got 'cube'"),
        ({"first_path": -1}, "expected first_path to be a whole number of at least 0, got -1"),
        ({"workers": 0}, "expected workers to be a whole number of at least 1, got 0"),
        ({"resume": True, "overwrite": True}, "give one of them"),
    ],
)
def test_wrong_arguments_are_explained(tmp_path, how, sentence):
    with pytest.raises(EnsembleError, match=sentence):
        fake_render(SPEC, tmp_path, **how)


@pytest.mark.parametrize(
    "how,sentence",
    [
        ({"workers": -1}, "expected workers to be a whole number of at least 1, got -1"),
        ({"overwrite": True}, "overwrite is about a folder, and there is none; give out="),
        ({"resume": True}, "resume is about a folder, and there is none; give out="),
        ({"out": ""}, "expected out to be the path of a folder, got an empty text"),
    ],
)
def test_wrong_arguments_are_explained_in_memory_too(how, sentence):
    with pytest.raises(EnsembleError, match=sentence):
        fake_render(SPEC, **how)


def test_a_digest_is_checked_of_what_is_on_disk(tmp_path, memory):
    made = fake_render(SPEC, tmp_path)
    assert fake_check(made).digest == made.digest == memory.digest
    with pytest.raises(EnsembleError, match="the ensemble is in memory and has no files"):
        fake_check(memory)
    for call in (fake_check, open_ensemble):
        with pytest.raises(TypeError, match="expected path to be the path of a folder, got int"):
            call(3)
    with pytest.raises(TypeError, match="expected out to be the path of a folder, got bool"):
        fake_render(SPEC, True)


def test_unknown_names_and_ranges_are_explained(memory):
    with pytest.raises(KeyError, match="expected one of x, y, n, s, got 'z'"):
        memory["z"]
    with pytest.raises(EnsembleError, match="expected paths within 0 to 1100"):
        memory.paths(1000, 1101)
