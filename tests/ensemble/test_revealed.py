"""Tables of what was drawn beside the values: they follow from the spec, and stand in a folder of their own."""

import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import yaml
from typer.testing import CliRunner

import procgen as pg
from procgen.app import app
from procgen.ensemble.columns import store
from procgen.terms.labels import labelled

ROOT = Path(__file__).parents[2]


def path(law):
    return {"draw": law, "over": "path"}


RAW = {
    "seed": 9,
    "paths": 40,
    "time": {"steps": 6},
    "parameters": {"k": path({"uniform": [0.3, 0.9]}), "size": {"draw": {"choice": [1, 2]}, "over": "series"}},
    "series": {"plain": [{"constant": path({"normal": {"mean": 0, "sd": 1}})}]},
    "groups": {
        "stores": {
            "table": {"a": {"region": "north", "base": 3}, "b": {"region": "south", "base": 4.5}},
            "of": [{"constant": {"column": "base"}}, {"ar": {"phi": {"parameter": "k"}, "sd": {"parameter": "size"}}}],
        }
    },
}


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    out = tmp_path_factory.mktemp("revealed") / "out"
    pg.render(RAW, out=out, workers=1)
    return out


def test_a_row_a_path(folder):
    frame = pd.read_parquet(folder / "tables" / "parameters.parquet")
    assert list(frame) == ["path", "plain.constant.level", "k"] or list(frame) == ["path", "k", "plain.constant.level"]
    ensemble = pg.open_ensemble(folder)
    assert np.array_equal(frame["path"], np.arange(40))
    pd.testing.assert_frame_equal(ensemble.parameters, frame.set_index("path"), check_index_type=False)
    assert np.array_equal(ensemble["plain"], np.repeat(frame["plain.constant.level"].to_numpy()[:, None], 6, axis=1))


def test_a_row_a_series(folder):
    frame = pd.read_parquet(folder / "tables" / "series.parquet").set_index("series")
    assert list(frame.index) == ["plain", "a", "b"]
    assert frame.loc["b", ["group", "region", "base"]].tolist() == ["stores", "south", 4.5]
    assert set(frame["size"].dropna()) <= {1.0, 2.0} and frame["size"].isna().tolist() == [True, False, False]
    pd.testing.assert_frame_equal(pg.open_ensemble(folder).series, frame)


def test_in_memory_and_any_range_of_paths(folder):
    some = pg.render(RAW, first_path=30, paths=5)
    whole = pg.open_ensemble(folder)
    pd.testing.assert_frame_equal(some.parameters, whole.parameters.loc[30:34])
    assert np.array_equal(some["a"], whole["a"][30:35])
    assert whole.paths(30, 35).parameters.equals(some.parameters)


def test_parts_are_read_without_them(folder):
    frame = pd.read_parquet(sorted(folder.glob("*.parquet")))
    assert len(frame) == 240 and list(frame) == ["path", "step", "plain", "a", "b"]


def test_workers_and_resume_give_the_same(folder, tmp_path):
    two = pg.render(RAW, out=tmp_path / "two", workers=2)
    assert two.digest == pg.open_ensemble(folder).digest
    shutil.rmtree(tmp_path / "two" / "tables")
    pg.render(RAW, out=tmp_path / "two", resume=True)
    for name in ("parameters", "series"):
        first, second = (pd.read_parquet(out / "tables" / f"{name}.parquet") for out in (folder, tmp_path / "two"))
        pd.testing.assert_frame_equal(first, second)


def test_overwriting_removes_them_and_nothing_else(folder, tmp_path):
    out = tmp_path / "out"
    pg.render(RAW, out=out)
    (out / "tables" / "mine.txt").write_text("notes")
    other = {"groups": {"g": {"names": ["a"], "of": {"constant": 1}}}, "series": {"x": {"constant": 2}}}
    pg.render({**RAW, **other}, out=out, overwrite=True)
    assert sorted(file.name for file in (out / "tables").iterdir()) == ["mine.txt", "series.parquet"]


def test_a_file_of_others_is_not_overwritten(tmp_path):
    out = tmp_path / "out"
    (out / "tables").mkdir(parents=True)
    (out / "tables" / "parameters.parquet").write_text("not a table")
    with pytest.raises(pg.EnsembleError, match="is in the way and not ours; move it away"):
        pg.render(RAW, out=out)


def test_a_spec_without_any_has_no_tables(tmp_path):
    raw = {"seed": 1, "paths": 3, "time": {"steps": 2}, "series": {"x": [{"white_noise": {"sd": 1}}]}}
    ensemble = pg.render(raw, out=tmp_path / "out")
    assert not (tmp_path / "out" / "tables").exists()
    assert ensemble.parameters.shape == (3, 0) and list(ensemble.series.index) == ["x"]


# components


def parts_of(spec, name):
    """The columns that a series is the sum of, in order."""
    here = [f"{name}.{label}" for label, entry in labelled(spec.series[name].of) if entry in spec.series[name].of]
    return here + [f"{name}.open_start"] * bool(spec.series[name].before)


@pytest.mark.parametrize("file", ["cold-store", "sensor-drift", "bakery-sales", "reservoir-fan", "machine-vibration"])
def test_components_add_up_to_the_series_exactly_as_stored(file):
    """In the order of the spec, then rounded as the series is (decimals, int64, float32); no outside source needed."""
    spec = pg.load(ROOT / "specs" / f"{file}.yaml").changed(paths=5, steps=40)
    ens = pg.render(spec, reveal="all")
    some = 0
    for column in (column for column in ens.columns if not column.revealed):
        first, *others = [ens[part] for part in parts_of(spec, column.name) if part in ens]
        assert len(others) + 1 == len(spec.series[column.name].of) + (f"{column.name}.open_start" in ens)
        some += len(others)
        total = sum(others, start=first)
        assert np.array_equal(store(total, column), ens[column.name], equal_nan=True)
    assert some


SEVERAL = {
    "seed": 3,
    "paths": 4,
    "time": {"steps": 10},
    "shared": {"wind": [{"ar": {"phi": 0.5, "sd": 1}}], "sun": [{"ar": {"phi": 0.3, "sd": 1}}]},
    "series": {
        "a": [{"use": "wind"}, {"use": "sun", "times": 2}, {"constant": 3}],
        "b": [{"use": "wind"}, {"use": "wind", "times": 2}, {"product": [{"use": "a"}, {"use": "sun.ar"}]}],
        "c": [{"use": "a"}],
    },
}


def test_several_uses_in_a_series_go_by_what_they_use():
    ens = pg.render(SEVERAL, reveal="all")
    assert [name for name in ens if name[:2] in ("a.", "c.")] == ["a.use_wind", "a.use_sun", "a.constant", "c.use"]
    assert np.array_equal(ens["a.use_sun"], 2 * ens["sun.ar"]) and np.array_equal(ens["a.use_wind"], ens["wind.ar"])
    assert np.array_equal(ens["a.use_wind"] + ens["a.use_sun"] + ens["a.constant"], ens["a"])
    assert [name for name in ens if name.startswith("b.")] == ["b.product", "b.use_a", "b.use_sun_ar"]
    assert pg.render(SEVERAL, reveal=["a.use_sun"]).names == ("a", "b", "c", "a.use_sun")


def test_a_name_that_several_terms_would_share_is_refused(tmp_path):
    said = "b has 4 terms of kind use (b.use_a, b.use_sun_ar): write as: some_name beside the one that is meant"
    for name in ("b.use", "b.use_wind"):
        with pytest.raises(pg.EnsembleError) as error:
            pg.render(SEVERAL, reveal=name)
        assert ("cannot reveal: " + said if name == "b.use" else "cannot reveal: expected one of") in str(error.value)
    file = tmp_path / "several.yaml"
    file.write_text(yaml.safe_dump({"procgen": 1, **SEVERAL}))
    done = CliRunner().invoke(app, ["render", str(file), "-o", str(tmp_path / "out"), "--reveal", "all"])
    assert done.exit_code == 0 and "not all terms of b are revealed: several of one kind have no label" in done.stderr
