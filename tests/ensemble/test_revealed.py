"""Tables of what was drawn beside the values: they follow from the spec, and stand in a folder of their own."""

import shutil

import numpy as np
import pandas as pd
import pytest

import procgen as pg


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
