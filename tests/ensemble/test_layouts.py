"""One ensemble in every layout: the same values and digests, whatever its files look like and however often it died."""

import json
import random
import shutil
import time
from dataclasses import asdict
from unittest import mock

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import procgen as pg
from procgen.ensemble import EnsembleError, files, forms, parquet, plan
from procgen.ensemble.columns import Column, store
from procgen.ensemble.layouts import KINDS, Layout
from procgen.ensemble.plan import CELL, STEPS, Block, batches
from procgen.ensemble.store import PART, Folder
from tests.ensemble.fakes import fake_check, fake_render, fake_spec, start, visible

WAYS = [("long", "paths"), ("long", "series"), ("panel", "paths"), ("panel", "series"), ("nested", "paths")]
WAYS += [("nested", "series"), ("wide", "series")]
ways = pytest.mark.parametrize("layout,partition", WAYS, ids=[f"{layout}-{partition}" for layout, partition in WAYS])

COLUMNS = {"x": {}, "y": {"decimals": 2, "unit": "kW"}, "n": {"type": "int64"}, "s": {"type": "float32"}}
SPEC = fake_spec(seed=5, paths=1100, steps=30, columns=COLUMNS)

DEMAND = {
    "seed": 4,
    "paths": 30,
    "time": {"steps": 20, "start": "2027-03-27", "every": "3h", "zone": "Europe/Berlin"},
    "shared": {"weather": [{"ar": {"phi": 0.9, "sd": 1}}]},
    "series": {
        "tea": {
            "unit": "kg",
            "of": [{"constant": 20}, {"use": "weather", "times": 2}, {"ar": {"phi": 0.5, "sd": 1}, "as": "mood"}],
        },
        "coffee": {"decimals": 1, "of": [{"constant": 30}, {"ar": {"phi": 0.5, "sd": 3}, "as": "mood"}]},
        "guests": {"type": "int64", "of": [{"poisson": {"mean": 7}}]},
    },
}
REVEAL = ["tea.mood", "coffee.mood", "coffee.constant", "weather"]


@pytest.fixture(scope="module")
def memory():
    return fake_render(SPEC)


@pytest.fixture(scope="module")
def demand():
    return pg.render(DEMAND, reveal=REVEAL)


def unstamped():
    return {**DEMAND, "time": {"steps": 20}}


# the same values


@ways
@pytest.mark.parametrize("workers", [1, 2])
def test_every_layout_has_the_same_digests_and_values(tmp_path, monkeypatch, memory, layout, partition, workers):
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 16)
    long = fake_render(SPEC, tmp_path / "long", workers=1)
    made = fake_render(SPEC, tmp_path / "out", layout=layout, partition=partition, workers=workers)
    assert len(made.manifest.parts) > 1
    assert made.digest == memory.digest
    assert (dict(made.manifest.stored), dict(made.manifest.drawn)) == (long.manifest.stored, long.manifest.drawn)
    assert all(made.manifest.stored[name] != made.manifest.drawn[name] for name in ("y", "n", "s"))
    for name in COLUMNS:
        assert np.array_equal(made[name], memory[name])
    assert np.array_equal(made.paths(700, 710)["n"], memory["n"][700:710])
    assert made.to_arrow().equals(memory.to_arrow())
    assert fake_check(tmp_path / "out", redraw=True).ok


@ways
def test_what_is_there_is_found_again_in_its_layout(tmp_path, layout, partition):
    how = {"layout": layout, "partition": partition, "columns": {"path": "scenario"}}
    made = pg.render(DEMAND, tmp_path, reveal=REVEAL, **how)
    before = {file: file.stat().st_mtime_ns for file in tmp_path.iterdir()}
    assert pg.render(DEMAND, tmp_path, reveal=REVEAL, **how).digest == made.digest
    assert before == {file: file.stat().st_mtime_ns for file in tmp_path.iterdir()}
    assert pg.check_digest(tmp_path, redraw=True).ok
    other = "nested" if layout == "panel" else "panel"
    with pytest.raises(EnsembleError, match=f"another kind \\(layout {layout} there, {other} asked"):
        pg.render(DEMAND, tmp_path, reveal=REVEAL, **{**how, "layout": other})
    with pytest.raises(EnsembleError, match=r"columns \{'path': 'scenario'\} there, as usual asked"):
        pg.render(DEMAND, tmp_path, reveal=REVEAL, layout=layout, partition=partition)
    pg.render(DEMAND, tmp_path, overwrite=True)
    assert visible(tmp_path) == ["manifest.json", "paths-000000000-000000029.parquet"]


@ways
def test_validate_reads_every_layout(tmp_path, layout, partition):
    raw = {"seed": 2, "paths": 200, "time": {"steps": 40}, "series": {"x": [{"ar": {"phi": 0.6, "sd": 1}}]}}
    pg.render(raw, tmp_path, layout=layout, partition=partition, workers=1)
    # False-alarm probability 1e-9 of the suite's 1e-6 for each of the seven layouts; their values are the same.
    verdict = pg.validate(tmp_path, false_alarm=1e-9)
    assert verdict.agrees
    first = pg.validate(pg.render(raw), false_alarm=1e-9).checks
    kept = verdict.checks[verdict.checks["what"].isin(first["what"])]
    assert set(first["p"].dropna()) == set(kept["p"].dropna())


# what a reader of the files meets


def frame(folder, pattern="*.parquet"):
    return pd.concat([pd.read_parquet(file) for file in sorted(folder.glob(pattern))], ignore_index=True)


def test_a_panel_has_a_row_an_observation_and_is_whole_numbers_where_all_are(tmp_path, demand):
    pg.render(DEMAND, tmp_path / "all", layout="panel")
    found = frame(tmp_path / "all")
    assert list(found) == ["id", "path", "time", "value"] and len(found) == 3 * 30 * 20
    tea = found[found["id"] == "tea"].pivot(index="path", columns="time", values="value")
    assert np.array_equal(tea.to_numpy(), demand["tea"])
    assert tea.columns[0] == pd.Timestamp("2027-03-26T23:00Z")
    pg.render(DEMAND, tmp_path / "each", layout="panel", partition="series", columns={"id": "item", "value": "sold"})
    assert len(visible(tmp_path / "each")) == 4
    guests = frame(tmp_path / "each", "guests.paths-*.parquet")
    assert list(guests) == ["item", "path", "time", "sold"] and set(guests["item"]) == {"guests"}
    assert np.array_equal(guests["sold"].to_numpy().reshape(30, 20), demand["guests"])
    files = [*(tmp_path / "each").glob("*.parquet")]
    assert {str(pq.read_schema(file).field("sold").type) for file in files} == {"double"}  # of all: one table
    together = pd.read_parquet(files)
    assert len(together) == 3 * 30 * 20 and together["sold"].sum() == pytest.approx(found["value"].sum())
    counts = {**DEMAND, "series": {name: DEMAND["series"]["guests"] for name in ("guests", "cups")}}
    for partition in ("paths", "series"):
        pg.render(counts, tmp_path / partition, layout="panel", partition=partition)
        assert frame(tmp_path / partition)["value"].dtype == np.int64


def test_a_panel_has_the_step_where_there_is_no_time(tmp_path):
    pg.render(unstamped(), tmp_path / "usual", layout="panel")
    assert list(frame(tmp_path / "usual")) == ["id", "path", "step", "value"]
    for role in ("time", "step"):
        made = pg.render(unstamped(), tmp_path / role, layout="panel", columns={role: "when"})
        assert list(frame(tmp_path / role)["when"].unique()) == list(range(20))
        assert made.digest == pg.open_ensemble(tmp_path / "usual").digest


def test_nested_has_a_row_a_path(tmp_path, demand):
    pg.render(DEMAND, tmp_path, layout="nested")
    found = frame(tmp_path)
    assert list(found) == ["path", "step", "time", "tea", "coffee", "guests"] and len(found) == 30
    for name in ("tea", "coffee", "guests"):
        assert np.array_equal(np.stack(found[name]), demand[name])
    assert np.stack(found["guests"]).dtype == np.int64


def test_wide_has_a_row_a_step_and_a_file_a_series(tmp_path, demand):
    pg.render(DEMAND, tmp_path, layout="wide", first_path=7, paths=5)
    found = frame(tmp_path, "guests.*.parquet")
    assert list(found) == ["step", "time", *(f"path_{path}" for path in range(7, 12))]
    assert set(found.dtypes.astype(str)[2:]) == {"int64"}
    assert np.array_equal(found.iloc[:, 2:].to_numpy().T, demand["guests"][7:12])


def test_a_wide_file_has_at_most_1024_paths(tmp_path):
    made = fake_render(fake_spec(paths=2500, steps=3), tmp_path, layout="wide", first_path=100)
    widths = [len(pq.read_schema(file).names) - 1 for file in sorted(tmp_path.glob("x.paths-*"))]
    assert sum(widths) == 2500 and max(widths) <= CELL and len(widths) == len(made.manifest.parts)


@given(st.integers(0, 5000), st.integers(1, 200_000), st.integers(1, 3000), st.integers(1, 9))
@settings(deadline=None)
def test_no_part_is_wider_than_asked(first, paths, steps, workers):
    parts = [part for chain in plan.chains(Block(first, paths, 0, steps), 8, workers, CELL) for part in chain]
    assert sum(part.rows for part in parts) == paths * steps
    assert max(part.paths for part in parts) <= CELL


@ways
def test_only_what_can_be_missing_is_nullable(tmp_path, layout, partition):
    pg.render(DEMAND, tmp_path, layout=layout, partition=partition, reveal=REVEAL)
    for file in tmp_path.glob("*.parquet"):
        schema = pq.read_schema(file)
        nullable = {field.name for field in schema if field.nullable}
        # of three series and a shared body, not all have a mood or a constant; in a file of their own, they do
        assert nullable == ({"mood", "constant"} if (layout, partition) == ("panel", "paths") else set())
        if layout == "nested":
            assert not any(field.type.value_field.nullable for field in schema if field.name == "tea")


@ways
def test_what_is_missing_is_null_and_nothing_else_can_be(tmp_path, layout, partition):
    meter = {"of": [{"missing": {"of": [{"ar": {"phi": 0.7, "sd": 1}}], "share": 0.2}}]}
    raw = {**DEMAND, "series": {**DEMAND["series"], "meter": meter, "small": {**meter, "type": "float32"}}}
    reveal = ["meter.missing", "tea.mood"]
    usual = pg.render(raw, reveal=reveal)
    made = pg.render(raw, tmp_path, layout=layout, partition=partition, reveal=reveal)
    assert made.digest == usual.digest and pg.check_digest(tmp_path, redraw=True).ok
    for name in usual.names:
        assert np.array_equal(made[name], usual[name], equal_nan=True)
    assert 0 < np.isnan(usual["meter"]).mean() < 1
    for file in tmp_path.glob("*.parquet"):
        table = pq.read_table(file)
        nulls = {name for name in table.schema.names if table[name].null_count}
        nullable = {field.name for field in table.schema if field.nullable}
        if layout == "nested":
            inside = {f.name for f in table.schema if pa.types.is_list(f.type) and f.type.value_field.nullable}
            assert inside == {"meter", "small", "meter.missing"} & set(table.schema.names) and not nullable
        else:  # a wide file is of one series, of which some paths may miss nothing
            assert nulls <= nullable and bool(nulls) == bool(nullable)
            assert layout == "wide" or nulls == nullable


# what is revealed


@ways
def test_what_is_revealed_stands_beside_its_series(tmp_path, demand, layout, partition):
    made = pg.render(DEMAND, tmp_path, layout=layout, partition=partition, reveal=REVEAL)
    assert made.manifest.revealed.keys() == set(REVEAL)
    for name in (*REVEAL, "tea"):
        assert np.array_equal(made[name], demand[name])
    if layout == "panel":
        found = frame(tmp_path).set_index("id")
        assert {*found.columns} == {"path", "time", "value", "mood", "constant"}
        assert np.array_equal(found.loc["coffee", "mood"], demand["coffee.mood"].ravel())
        assert np.array_equal(found.loc["weather", "value"], demand["weather"].ravel())
        assert found.loc["guests", "mood"].isna().all() and found.loc["tea", "constant"].isna().all()


@ways
def test_parts_of_a_sum_add_up_to_the_series_as_it_is_stored(tmp_path, layout, partition):
    raw = {
        "seed": 4,
        "paths": 25,
        "time": {"steps": 50},
        "series": {
            name: {
                **how,
                "of": [
                    {"trend": {"level": 5, "slope": 0.1}},
                    {"seasonal": {"period": 7, "harmonics": [{"amplitude": 3}]}},
                    {"garch": {"sd": 2, "alpha": 0.1, "beta": 0.8}},
                ],
            }
            for name, how in {"full": {}, "tenths": {"decimals": 1}, "small": {"type": "float32"}}.items()
        },
    }
    terms = ("trend", "seasonal", "garch")
    made = pg.render(raw, tmp_path, layout=layout, partition=partition, reveal="all")
    for column in (column for column in made.columns if not column.revealed):
        first, second, third = (made[f"{column.name}.{term}"] for term in terms)
        total = store(first + second + third, column)
        assert np.array_equal(total.astype(float), made[column.name])  # every bit, not about


# any values, any shape, any cut


@st.composite
def cases(draw):
    names = draw(st.lists(st.sampled_from("abcde"), min_size=1, max_size=4, unique=True))
    columns = [Column(name, draw(st.sampled_from(["float64", "float32", "int64"]))) for name in names]
    for owner in draw(st.lists(st.sampled_from([*names, "free"]), max_size=2, unique=True)):
        columns.append(Column(f"{owner}.{draw(st.sampled_from(['u', 'v.w']))}", revealed=True))
    whole = Block(draw(st.integers(0, 40)), draw(st.integers(1, 60)), 0, draw(st.integers(1, 50)))
    first = draw(st.integers(0, whole.steps - 1))  # a part that begins later on, too
    part = Block(whole.first_path, whole.paths, first, draw(st.integers(1, whole.steps - first)))
    layout = Layout.asked(*draw(st.sampled_from(WAYS)), draw(st.sampled_from([{}, {"path": "p q"}])))
    limits = draw(st.sampled_from([1, 64, 1 << 20])), draw(st.integers(8, 4000)), draw(st.integers(1, 500))
    return columns, part, whole, layout, draw(st.booleans()), limits, draw(st.integers(0, 2**32))


def stamps(first, count):
    return np.arange(first, first + count) * 3_600_000_000


@given(cases())
@settings(deadline=None, max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_part_comes_back_from_any_layout(tmp_path, case):
    columns, part, whole, layout, stamped, (part_bytes, buffer_bytes, group_rows), seed = case
    chance = np.random.Generator(np.random.Philox(seed))
    values = {}
    for column in columns:
        bits = chance.integers(-(2**53), 2**53, (part.paths, part.steps))
        values[column.name] = (bits if column.type == "int64" else bits * 2.0**-40).astype(column.type)
    shutil.rmtree(tmp_path)
    (tmp_path / ".state").mkdir(parents=True)
    folder, name, times = Folder(tmp_path), part.file(whole), stamps if stamped else None
    identity = {"part": asdict(part), **layout.identity()}
    limits = {"BUFFER_BYTES": buffer_bytes, "GROUP_ROWS": group_rows}
    with mock.patch.multiple(plan, **limits), mock.patch.multiple(forms, **limits):
        with mock.patch.object(files, "PART_BYTES", part_bytes):
            with files.writing(folder, name, part, layout, columns, times, identity) as writer:
                for batch in batches(part, 8 * len(columns)):
                    rows = slice(batch.first_path - part.first_path, batch.end_path - part.first_path)
                    steps = slice(batch.first_step - part.first_step, batch.end_step - part.first_step)
                    writer.write(batch, {name: data[rows, steps] for name, data in values.items()})
                writer.nodes = {"stored": {column.name: column.name for column in columns}, "drawn": {}}
        said = files.footers(folder, name, layout, columns)
        assert {kind for kind in Layout.of(said[0][1]).identity()} <= identity.keys()
        assert files.together([nodes for _, _, nodes in said])["stored"].keys() == values.keys()
    for some in (None, {columns[-1].name}):  # read with the usual limits: no file depends on those it was made with
        row = part.first_path, part.first_step
        for block, found in parquet.read(tmp_path, name, part, layout, columns, times, names=some):
            assert (block.first_path, block.first_step) == row
            row = (block.end_path, part.first_step) if block.end_step == part.end_step else (row[0], block.end_step)
            assert set(found) == (set(values) if some is None else some)
            rows = slice(block.first_path - part.first_path, block.end_path - part.first_path)
            steps = slice(block.first_step - part.first_step, block.end_step - part.first_step)
            for key, data in found.items():
                assert data.dtype == values[key].dtype and np.array_equal(data, values[key][rows, steps])
        assert row == (part.end_path, part.first_step)


# kills, damage, other people's hands


@ways
def test_killed_at_any_moment_then_resumed_gives_the_same_digest(tmp_path, layout, partition):
    spec = {"seed": 3, "paths": 2000, "steps": 40, "columns": {"x": {}, "y": {"decimals": 1}}}
    how = {"layout": layout, "partition": partition}
    moments = random.Random(f"{layout} {partition}")
    for _ in range(3):
        render = start(spec, tmp_path, part_bytes=1 << 19, workers=2, resume=True, **how)
        render.stdout.readline()
        time.sleep(moments.uniform(0, 0.3))
        render.kill()
        render.communicate()
        for name in visible(tmp_path):
            if PART.fullmatch(name):
                parquet.footer(tmp_path / name)  # whole, or this raises
    made = fake_render(fake_spec(**spec), tmp_path, resume=True, workers=1, **how)
    assert made.digest == fake_render(fake_spec(**spec)).digest
    assert fake_check(tmp_path).ok
    assert not (tmp_path / ".state").exists()


@pytest.mark.parametrize("layout", ["panel", "nested", "wide"])
def test_a_write_that_the_system_refuses_leaves_no_part(tmp_path, layout):
    spec = {"seed": 3, "paths": 2000, "steps": 40, "columns": {"x": {}, "y": {}}}
    render = start(spec, tmp_path, part_bytes=1 << 19, file_limit=150_000, workers=1, layout=layout)
    _, errors = render.communicate(timeout=60)
    assert "refused: a file grew above the limit" in errors and "Traceback" not in errors
    assert visible(tmp_path) == [] and not list((tmp_path / ".state").glob("*.tmp"))
    made = fake_render(fake_spec(**spec), tmp_path, resume=True, layout=layout)
    assert made.digest == fake_render(fake_spec(**spec)).digest


@ways
def test_parts_cut_along_the_steps_carry_the_state(tmp_path, monkeypatch, layout, partition):
    spec = fake_spec(paths=20, steps=2 * STEPS + 100)
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 22)
    made = fake_render(spec, tmp_path, workers=1, layout=layout, partition=partition)
    assert {part.block.first_step for part in made.manifest.parts} == {0, STEPS, 2 * STEPS}
    assert made.digest == fake_render(spec).digest
    name = next(iter(made.manifest.layout.files(made.manifest.parts[1].file, made.columns)))
    (tmp_path / name).unlink()
    with pytest.raises(EnsembleError, match=f"{name} is missing; draw it again with --resume"):
        fake_open(tmp_path)
    again = fake_render(spec, tmp_path, workers=1, layout=layout, partition=partition, resume=True)
    assert again.digest == made.digest and fake_check(tmp_path).ok


def fake_open(path):
    from procgen.ensemble import open_ensemble

    return open_ensemble(path)


@ways
def test_a_changed_file_is_named_and_mended(tmp_path, layout, partition):
    spec = fake_spec(seed=8, paths=50, steps=20, columns={"x": {}, "y": {"type": "int64"}})
    made = fake_render(spec, tmp_path, layout=layout, partition=partition)
    file = sorted(tmp_path.glob("*.parquet"))[-1]
    whole = file.read_bytes()
    table = pq.read_table(file)
    last = table.schema.names[-1]
    values = table[last].to_pylist()
    values[-1] = [*values[-1][:-1], values[-1][-1] + 1] if layout == "nested" else values[-1] + 1
    changed = table.set_column(table.num_columns - 1, table.schema.field(last), pa.array(values, table[last].type))
    for other in (changed, table.slice(1), table.take([1, 0, *range(2, len(table))]), table.drop([last])):
        nodes = pq.read_metadata(file).metadata[parquet.NODES]
        pq.write_table(other.replace_schema_metadata(table.schema.metadata | {parquet.NODES: nodes}), file)
        found = fake_check(tmp_path, redraw=True)
        assert not found.ok and "paths-000000000-000000049.parquet" in found.text()
        if other is changed:
            where = (found.difference.series, found.difference.path, found.difference.step)
            assert where == ("y", 49, 19)
        assert fake_render(spec, tmp_path, layout=layout, partition=partition, resume=True).digest == made.digest
        assert file.read_bytes() == whole


def test_other_row_groups_with_the_same_values_agree(tmp_path):
    for layout, partition in WAYS:
        made = fake_render(SPEC, tmp_path / layout / partition, paths=200, layout=layout, partition=partition)
        for file in made.path.glob("*.parquet"):
            table, nodes = pq.read_table(file), pq.read_metadata(file).metadata[parquet.NODES]
            table = table.replace_schema_metadata(table.schema.metadata | {parquet.NODES: nodes})
            pq.write_table(table, file, row_group_size=7 if len(table) < 2000 else 1234)
        assert fake_check(made.path, redraw=True).ok


def _as(kind):
    """A table whose columns have other types that hold the same."""

    def cast(table):
        fields = []
        for field in table.schema:
            other = kind(field.type)
            fields.append(pa.field(field.name, other or field.type))
        return table.cast(pa.schema(fields))

    return cast


def _text_and_narrow(kind):
    if pa.types.is_string(kind):
        return pa.large_string()
    if pa.types.is_list(kind):
        return pa.large_list(pa.float64())
    if pa.types.is_timestamp(kind):
        return pa.timestamp("ns", kind.tz)
    return pa.int32() if pa.types.is_integer(kind) else None


def _double(kind):
    if pa.types.is_string(kind):
        return pa.dictionary(pa.int32(), pa.string())
    return pa.float64() if pa.types.is_integer(kind) else None


OTHERS = [_as(_text_and_narrow), _as(_double), lambda table: pa.Table.from_pandas(table.to_pandas())]


@ways
@pytest.mark.parametrize("other", OTHERS, ids=["narrow", "double", "pandas"])
def test_a_type_that_holds_the_same_values_is_as_good(tmp_path, layout, partition, other):
    usual = pg.render(DEMAND)
    made = pg.render(DEMAND, tmp_path, layout=layout, partition=partition)
    for file in tmp_path.glob("*.parquet"):
        pq.write_table(other(pq.read_table(file)), file)  # without our footers
    assert pg.check_digest(tmp_path, redraw=True).ok
    assert all(np.array_equal(made[name], usual[name]) for name in usual.names)


@ways
def test_a_value_of_another_kind_is_told_with_its_place(tmp_path, layout, partition):
    pg.render(DEMAND, tmp_path, layout=layout, partition=partition)
    file = next(tmp_path.glob("guests*.parquet" if partition == "series" else "*.parquet"))
    frame = pq.read_table(file).to_pandas()
    for value, told in ((0.5, "path 3, step 7: 0.5 is not of type int64"), (None, "has no value at path 3, step 7")):
        if layout == "nested":
            values = [*map(list, frame["guests"])]
            values[3][7] = value
            frame["guests"] = values
        else:
            column = {"panel": "value", "wide": "path_3"}.get(layout, "guests")
            rows = frame.index[frame["id"] == "guests"] if layout == "panel" else frame.index
            frame[column] = frame[column].astype(float)
            frame.loc[rows[7 if layout == "wide" else 3 * 20 + 7], column] = value
        pq.write_table(pa.Table.from_pandas(frame), file)
        text = pg.check_digest(tmp_path).text()
        assert f"series guests{',' if value else ''} {told}" in text and text.count(file.name) == 1


def test_a_value_where_none_belongs_is_found(tmp_path):
    pg.render(DEMAND, tmp_path, layout="panel", reveal=REVEAL)
    file = next(tmp_path.glob("*.parquet"))
    table, nodes = pq.read_table(file), pq.read_metadata(file).metadata[parquet.NODES]
    filled = table.set_column(4, "mood", [np.ones(len(table))])
    pq.write_table(filled.replace_schema_metadata(table.schema.metadata | {parquet.NODES: nodes}), file)
    assert "column mood has values where guests has none" in pg.check_digest(tmp_path).text()


def test_files_of_others_are_left_alone(tmp_path):
    fake_render(SPEC, tmp_path, layout="wide")
    mine = tmp_path / "mine.paths-000000000-000000009.parquet"
    mine.write_text("mine")
    fake_render(SPEC, tmp_path, layout="long", overwrite=True)
    assert visible(tmp_path) == ["manifest.json", mine.name, "paths-000000000-000001099.parquet"]


def test_an_ensemble_written_before_there_were_layouts_is_the_usual_one(tmp_path):
    made = fake_render(SPEC, tmp_path)
    assert json.loads((tmp_path / "manifest.json").read_text())["identity"].keys() == {
        *("spec", "seed", "first_path", "paths", "steps", "stream_version", "layout", "reveal")
    }
    assert Layout.of({}) == Layout.of(made.manifest.identity) == Layout()


# what is refused


@pytest.mark.parametrize(
    "how,sentence",
    [
        ({"layout": "cube"}, "expected layout long, panel, nested or wide, got 'cube'"),
        ({"partition": "days"}, "expected partition paths or series, got 'days'"),
        ({"layout": "wide", "partition": "paths"}, "a file of layout wide holds one series"),
        ({"columns": {"id": "item"}}, "expected one of path, step, time to get another name in layout long, got 'id'"),
        ({"layout": "wide", "columns": {"value": "y"}}, "expected one of path, step, time to get another name"),
        ({"columns": {"path": ""}}, "expected a name for the column path, got ''"),
        ({"columns": {"path": "tea"}}, "2 columns of layout long would be called 'tea'; give one another name"),
        ({"layout": "panel", "columns": {"id": "path"}}, "2 columns of layout panel would be called 'path'"),
        ({"layout": "wide", "columns": {"step": "r_3", "path": "r"}}, "2 columns of layout wide would be called 'r_3'"),
        ({"layout": "panel", "columns": {"step": "t"}}, "layout panel has time and no step here"),
        ({"layout": "panel", "columns": {"value": "mood"}, "reveal": REVEAL}, "would be called 'mood'"),
        ({"reveal": "tea"}, "cannot reveal: tea is a series, which is written anyway; give tea.LABEL"),
    ],
)
def test_wrong_layouts_are_explained(tmp_path, how, sentence):
    with pytest.raises(EnsembleError, match=sentence):
        pg.render(DEMAND, tmp_path / "out", **how)
    assert not (tmp_path / "out").exists()


def test_names_that_no_file_can_have_are_refused(tmp_path):
    two = fake_spec(paths=2, steps=2, columns={"Tea": {}, "tea": {}})
    with pytest.raises(EnsembleError, match=r"Tea\.paths.* and tea\.paths.* are one file where letters have no case"):
        fake_render(two, tmp_path, layout="wide")
    fake_render(two, tmp_path, layout="panel")
    with pytest.raises(EnsembleError, match="is too long; use partition paths"):
        fake_render(fake_spec(paths=2, steps=2, columns={"x" * 230: {}}), tmp_path / "long", layout="wide")


def test_a_time_that_is_not_there_gets_no_name(tmp_path):
    for layout in ("long", "nested", "wide"):
        with pytest.raises(EnsembleError, match="the spec has no start, so that there is no time"):
            pg.render(unstamped(), tmp_path, layout=layout, columns={"time": "week"})
    with pytest.raises(EnsembleError, match="one column for time or step here"):
        pg.render(unstamped(), tmp_path, layout="panel", columns={"time": "week", "step": "n"})


def test_a_layout_is_about_files():
    for how in ({"layout": "panel"}, {"partition": "series"}, {"columns": {"path": "p"}}):
        with pytest.raises(EnsembleError, match="are about files, and there are none; give out="):
            pg.render(DEMAND, **how)
    assert set(KINDS) == {layout for layout, _ in WAYS}
