"""Our own ensembles: values are also held against the digests of the manifest."""

import json

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from procgen.checks.validate import validate
from procgen.ensemble import open_ensemble, render
from procgen.ensemble.source import read_spec

RAW = {
    "procgen": 1,
    "title": "A small one",
    "seed": 9,
    "paths": 40,
    "time": {"steps": 80},
    "series": {"x": [{"ar": {"phi": 0.6, "sd": 1}}], "y": {"decimals": 2, "of": [{"white_noise": {"sd": 1}}]}},
}


@pytest.fixture
def out(tmp_path):
    render(read_spec(RAW), out=tmp_path / "ens")
    return tmp_path / "ens"


def rewritten(out, change):
    """Write the only part again with another table, hence with another size."""
    (file,) = out.glob("*.parquet")
    table = change(pq.read_table(file))
    pq.write_table(table, file)


def test_an_untouched_ensemble_agrees(out):
    ticks = []
    verdict = validate(out, progress=lambda done, rows: ticks.append((done, rows)))
    assert verdict.agrees is True
    assert ticks[-1] == (40 * 80, 40 * 80)
    assert verdict.about["digest"] == open_ensemble(out).digest
    assert any(row.what == "digest" and row.outcome == "agrees" for row in verdict.rows)


def test_in_memory_and_by_paths(out):
    assert validate(render(read_spec(RAW))).agrees is True
    assert validate(open_ensemble(out).paths(5, 30)).agrees is True


def test_one_changed_value_is_found_by_its_digest(out):
    def change(table):
        x = table.column("x").to_numpy().copy()
        x[1234] = np.nextafter(x[1234], 9)
        return table.set_column(table.schema.get_field_index("x"), table.schema.field("x"), pa.array(x))

    rewritten(out, change)
    verdict = validate(out)
    assert verdict.agrees is False
    assert verdict.headline[0].startswith("x: structure: ")
    assert "path 15, step 34" in verdict.headline[0]


def test_a_part_that_pandas_wrote_again_is_judged_by_its_values(out):
    (file,) = out.glob("*.parquet")
    frame = pd.read_parquet(file)
    frame.to_parquet(file, compression="gzip")
    verdict = validate(out)
    assert verdict.agrees is True
    assert any(row.what == "digest" and row.outcome == "agrees" for row in verdict.rows)
    frame.loc[1234, "x"] += 0.5
    frame.to_parquet(file)
    verdict = validate(out)
    assert verdict.agrees is False
    assert "first difference: series x, path 15, step 34" in verdict.headline[0]


def test_rows_out_of_order(out):
    def change(table):
        order = np.arange(table.num_rows)
        order[100:110] = order[100:110][::-1]
        return table.take(order).cast(table.schema)

    rewritten(out, change)
    verdict = validate(out)
    assert verdict.agrees is False
    assert verdict.headline[0].startswith("structure: ")
    assert "where path 1, step 20 belongs, column step has 29" in verdict.headline[0]


def test_another_spec_is_held_against_it(out):
    wrong = json.loads(json.dumps(RAW))
    wrong["series"]["x"][0]["ar"]["phi"] = 0.2
    verdict = validate(out, read_spec(wrong))
    assert verdict.headline[0].startswith("x: memory")
    wrong["series"]["z"] = wrong["series"].pop("x")
    with pytest.raises(ValueError, match="has no series z; it has x, y"):
        validate(out, read_spec(wrong))


def test_other_numbers_of_paths_and_steps_than_stated_are_told_as_of_a_table(out, tmp_path):
    """Of an ensemble on disk, of one in memory and of the table that it is, in the same words."""
    found = open_ensemble(out)
    larger = read_spec({**found.spec.raw, "paths": 1000, "time": {"steps": found.spec.time.steps + 5}})
    steps, paths = found.whole.steps, found.whole.paths
    said = f" (steps {steps}–{steps + 4} are absent; judged on {steps} steps; {paths} of the 1,000 paths stated)"
    for data in (out, found, render(found.spec), found.to_pandas()):
        verdict = validate(data, larger)
        assert verdict.title.endswith(said)
        rows = {row.what: row.note for row in verdict.rows if row.outcome == "reported"}
        assert rows["paths"] == f"{paths} paths, where the spec states 1,000: judged on those that are there"
        assert rows["steps"].startswith(f"steps {steps}–{steps + 4} are absent")
    assert validate(out).title.endswith("spec states")


def test_false_alarm_must_be_a_probability(out):
    with pytest.raises(ValueError, match="between 0 and 1, got 2"):
        validate(out, false_alarm=2)
    with pytest.raises(TypeError, match="expected an ensemble, a DataFrame, or the path of one, got int"):
        validate(3)


def test_revealed_terms_are_checked_as_series(tmp_path):
    # The sum of an AR and a garch has no shocks of its own to recover; its parts have, once they are revealed.
    raw = {
        "procgen": 1,
        "seed": 4,
        "paths": 300,
        "time": {"steps": 300},
        "series": {
            "x": [{"ar": {"phi": 0.9, "sd": 1}}, {"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}, "as": "noise"}]
        },
    }
    stated = read_spec(raw)
    assert validate(render(stated, out=tmp_path / "a", reveal="all")).agrees is True
    raw["series"]["x"][1] = {"white_noise": {"sd": 1}, "as": "noise"}
    drawn = render(read_spec(raw), out=tmp_path / "b", reveal="all")
    assert validate(render(read_spec(raw)), stated).agrees is True  # too little to see in the sum alone
    verdict = validate(drawn, stated)
    assert verdict.agrees is False
    assert verdict.headline[0].startswith("x.noise: clustering")


def test_reasons_name_a_revealed_term_by_its_address(tmp_path):
    calm, wild = {"ar": {"phi": 0.2, "sd": 1}}, {"white_noise": {"sd": 4}}
    branches, durations = {"calm": calm, "wild": wild}, {"calm": 20, "wild": 10}
    regimes = {"regimes": {"branches": branches, "durations": durations}}
    raw = {"procgen": 1, "seed": 4, "paths": 120, "time": {"steps": 60}, "series": {"flow": [{"constant": 3}, regimes]}}
    verdict = validate(render(read_spec(raw), out=tmp_path / "a", reveal="all"))
    text = verdict.text() + str(verdict.to_dict())
    assert "flow.regimes" in text
    assert "flow__" not in text
