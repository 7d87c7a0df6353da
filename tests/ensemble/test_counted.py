"""Counts are int64 by default: pandas reads them back so, and what was drawn before they were goes on as it is."""

import json
import shutil

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest

import procgen as pg
from procgen.chance import kernel
from procgen.ensemble import check_digest
from procgen.ensemble.columns import Column, store
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.source import _SOURCES
from procgen.ensemble.store import MANIFEST, PLAN
from procgen.terms import supports
from procgen.terms.graph import build

needs_numba = pytest.mark.skipif(not kernel.available(), reason="numba is not installed")
NOISE = {"white_noise": {"sd": 1}}
POISSON = {"poisson": {"mean": 4, "of": [{"ar": {"phi": 0.9, "total_sd": 0.4}}]}}
SHOP = {
    "seed": 5,
    "paths": 20,
    "time": {"steps": 40},
    "series": {
        "sold": [POISSON],
        "back": {"of": [{"inar": {"alpha": 0.6, "mean": 5}}], "unit": "parcels"},
        "price": [{"constant": 9.5}, NOISE],
        "holed": [{"missing": {"of": [{"poisson": {"mean": 2}}], "share": 0.2}}],
        "plain": {"of": [{"poisson": {"mean": 2}}], "type": "float64"},
    },
}
WHOLE = ("sold", "back")


def of_type(series, **more):
    spec = pg.load({"seed": 1, "paths": 2, "time": {"steps": 3}, **more, "series": {"x": series}})
    return supports.column_type(build(spec), "x")


@pytest.mark.parametrize(
    "series",
    [
        [POISSON],
        [{"flag": {"share": 0.2, "stay": 5}}],
        [{"round": {"of": [NOISE]}}],
        [{"ceiling": {"of": [NOISE, {"constant": 20}], "to": 4}}],
        [{"poisson": {"mean": 3}}, {"constant": 2}],
        [{"product": [{"flag": {"share": 0.2, "stay": 5}}, {"constant": 250}]}],
        [{"intermittent": {"share": 0.3, "size": 4, "law": "counts"}}],
        [{"clip": {"of": [{"poisson": {"mean": 3}}], "high": 5}}],
        [{"given": {"values": [3, 1, 2]}}],
    ],
)
def test_whole_numbers_are_int64(series):
    assert of_type(series) == "int64"
    for kind in ("float64", "float32", "int64"):
        assert of_type({"of": series, "type": kind}) == kind
    assert of_type({"of": series, "decimals": 0}) == "float64"


@pytest.mark.parametrize(
    "series",
    [
        [NOISE],
        [{"missing": {"of": [POISSON], "share": 0.1}}],
        [{"round": {"of": [NOISE], "to": 0.5}}],
        [{"poisson": {"mean": 3}}, {"constant": 0.5}],
        [{"clip": {"of": [{"poisson": {"mean": 3}}], "high": 2.5}}],
        [{"integrate": {"of": [{"poisson": {"mean": 3}}]}}],  # whole, and not known to be
        [{"constant": 1e18}],  # bounded, and beyond what float64 counts
        [{"intermittent": {"share": 0.3, "size": 4, "sd": 2}}],
        [{"constant": 0.1}, {"constant": 0.9, "as": "rest"}, {"poisson": {"mean": 3}}],
        [{"times": 10, "sum": [{"times": 0.1, "poisson": {"mean": 3}}]}],  # 10·(0.1·n) is whole but for rounding
    ],
)
def test_what_may_not_be_whole_stays_float64(series):
    assert of_type(series) == "float64"


def test_numbers_drawn_by_path_are_looked_at_too():
    drawn = {"draw": {"uniform": [2, 8]}, "over": "path"}
    assert of_type([{"poisson": {"mean": drawn}}]) == "int64"
    assert of_type([{"poisson": {"mean": 2}}, {"constant": drawn}]) == "float64"


# written and read back


@pytest.mark.parametrize("layout", ["long", "panel", "nested", "wide"])
def test_every_layout_holds_int64_and_pandas_reads_the_same_numbers(tmp_path, layout):
    ens, held = pg.render(SHOP, tmp_path / "out", workers=1, layout=layout), pg.render(SHOP)
    types = {column.name: column.type for column in ens.columns}
    assert types == {name: "int64" if name in WHOLE else "float64" for name in SHOP["series"]}
    assert ens.digest == ens.manifest.digest_drawn == held.digest
    assert check_digest(tmp_path / "out").ok
    for name in WHOLE:
        frame = ens.wide(name)
        assert (frame.dtypes == np.int64).all() and np.array_equal(frame.T.to_numpy(), held[name])
    files = sorted((tmp_path / "out").glob("*.parquet"))
    if layout == "long":
        frame = pd.concat([pd.read_parquet(file) for file in files])
        assert [str(frame[name].dtype) for name in SHOP["series"]] == [types[name] for name in SHOP["series"]]
        assert np.array_equal(frame["sold"].to_numpy().reshape(20, 40), held["sold"])
        nullable = {field.name for field in pq.read_schema(files[0]) if field.nullable}
        assert nullable == {"holed"}
    if layout == "wide":
        sold = pd.read_parquet(next(file for file in files if "sold" in file.name))
        assert str(sold["path_3"].dtype) == "int64" and np.array_equal(sold["path_3"], held["sold"][3])
    if layout == "nested":
        assert np.stack(pd.read_parquet(files[0])["back"]).dtype == np.int64
    if layout == "panel":  # one column for all, so that of the widest
        frame = pd.read_parquet(files[0])
        assert np.array_equal(frame[frame["id"] == "back"]["value"].to_numpy().reshape(20, 40), held["back"])


@pytest.mark.parametrize("suffix", [".csv", ".parquet"])
def test_exports_hold_int64_and_read_back(tmp_path, suffix):
    held = pg.render(SHOP)
    file = held.export(tmp_path / f"x{suffix}", series=WHOLE, layout="panel")
    frame = pd.read_csv(file) if suffix == ".csv" else pd.read_parquet(file)
    assert frame["value"].dtype == np.int64
    assert np.array_equal(frame["value"].to_numpy().reshape(2, 20, 40), np.stack([held[name] for name in WHOLE]))
    frames = held.panel()
    assert np.array_equal(frames[frames["id"] == "sold"]["value"].to_numpy().reshape(20, 40), held["sold"])
    assert np.load(held.export(tmp_path / "x.npy", series="sold")).dtype == np.int64


# nothing is damaged


@pytest.fixture(params=[False, pytest.param(True, marks=needs_numba)], ids=["plain", "compiled"])
def either_form(request):
    with kernel.compiling(request.param):
        yield


def test_whole_numbers_that_float64_does_not_have_are_refused_with_the_mend(either_form):
    spec = {**SHOP, "series": {"far": [{"round": {"of": [{"constant": 2e16}, NOISE]}}]}}
    with pytest.raises(EnsembleError, match=r"series far .* int64.* 2.*e\+16 .* 2\^53 .*; write type: float64"):
        pg.render(spec)
    far = {**spec, "series": {"far": {"of": spec["series"]["far"], "type": "float64"}}}
    assert pg.render(far)["far"].max() > 2**53


def test_a_value_that_is_not_whole_is_never_rounded_away(either_form):
    kept = store(np.array([[2.0**53, -3.0, -0.0]]), Column("n", "int64", counted=True))
    assert kept.dtype == np.int64 and kept.tolist() == [[2**53, -3, 0]]
    drawn = np.arange(60_000.0).reshape(300, 200)
    spare = store(drawn.copy(), Column("n", "int64", counted=True), spare=True)
    assert spare.dtype == np.int64 and np.array_equal(spare, drawn)
    assert store(drawn, Column("n", "int64", counted=True))[0, 1] == 1 and drawn[0, 1] == 1.0
    for wrong in (2.5, 2.0**53 + 2, 1e300, np.nan):
        with pytest.raises(EnsembleError, match="type: float64"):
            store(np.array([[1.0, wrong]]), Column("n", "int64", counted=True))


# drawn before counts were int64


@pytest.fixture
def before(tmp_path, monkeypatch):
    """An ensemble whose manifest and files have counts as float64, as all once had."""
    with monkeypatch.context() as patch:
        patch.setattr(supports, "counted", lambda graph, name: False)
        patch.setattr(supports, "column_type", lambda graph, name: graph.spec.series[name].type or "float64")
        _SOURCES.clear()
        found = pg.render(SHOP, tmp_path / "old", workers=1, layout="wide")
    _SOURCES.clear()
    assert {column.type for column in found.columns} == {"float64"}
    return tmp_path / "old"


def types_in(folder):
    return {str(pq.read_schema(file).field("path_0").type) for file in folder.glob("*.parquet")}


def test_an_older_ensemble_is_read_and_checked_as_it_is(before):
    old, new = pg.open_ensemble(before), pg.render(SHOP)
    assert {column.type for column in old.columns} == {"float64"} and old.wide("sold").dtypes.eq(np.float64).all()
    assert old.digest == new.digest and np.array_equal(old["sold"], new["sold"])
    assert check_digest(before).ok
    assert pg.validate(old).agrees
    again = pg.render(SHOP, before, workers=1, layout="wide")
    assert {column.type for column in again.columns} == {"float64"}


def test_an_older_ensemble_is_mended_with_the_types_it_has(before):
    whole = pg.open_ensemble(before).digest
    next(before.glob("*sold*")).unlink()
    found = pg.render(SHOP, before, workers=1, layout="wide", resume=True)
    assert found.digest == whole and types_in(before) == {"double"} and check_digest(before).ok


@pytest.mark.parametrize("told", [False, True])
def test_an_unfinished_render_goes_on_with_the_types_it_began_with(before, told):
    manifest = json.loads((before / MANIFEST).read_text())
    names = [file.name for file in before.glob("*.parquet")]
    blocks = [[part[key] for key in ("first_path", "paths", "first_step", "steps")] for part in manifest["parts"]]
    plan = {"identity": manifest["identity"], "files": names, "parts": blocks}
    if told:
        plan["types"] = {column["name"]: column["type"] for column in manifest["columns"]}
    (before / MANIFEST).unlink()
    (before / PLAN).parent.mkdir(exist_ok=True)
    (before / PLAN).write_text(json.dumps(plan))
    next(before.glob("*sold*")).unlink()
    found = pg.render(SHOP, before, workers=1, layout="wide", resume=True)
    assert found.digest == manifest["digest"] and types_in(before) == {"double"} and check_digest(before).ok


def test_overwriting_draws_counts_as_int64(before):
    found = pg.render(SHOP, before, workers=1, layout="wide", overwrite=True)
    assert types_in(before) == {"double", "int64"} and {c.type for c in found.columns} == {"float64", "int64"}
    shutil.rmtree(before)
