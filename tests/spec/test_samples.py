"""Laws of a sample in a spec: from a column of a file, which becomes a part of the spec; spreads beside laws."""

import numpy as np
import pandas as pd
import pytest

import procgen as pg

HEAD = {"procgen": 1, "seed": 5, "paths": 3, "time": {"steps": 40}}


def spec_file(folder, law, **scale):
    import yaml

    noise = {"white_noise": {**(scale or {"sd": 1}), "law": law}}
    (folder / "s.yaml").write_text(yaml.safe_dump({**HEAD, "series": {"x": [noise]}}), encoding="utf-8")
    return folder / "s.yaml"


def faults(path):
    with pytest.raises(pg.SpecError) as error:
        pg.load(path)
    return [fault.message for fault in error.value.faults]


@pytest.mark.parametrize("suffix", ["csv", "parquet"])
def test_a_column_becomes_a_part_of_the_spec(tmp_path, suffix):
    table = pd.DataFrame({"day": range(5), "litres": [3.0, 1.5, 4.0, 1.5, 9.25]})
    getattr(table, f"to_{suffix}")(tmp_path / f"w.{suffix}", index=False)
    path = spec_file(tmp_path, {"empirical": {"values": {"file": f"w.{suffix}", "column": "litres"}}})
    values = pg.render(pg.load(path), out=tmp_path / "out")["x"]
    (tmp_path / f"w.{suffix}").unlink()
    standard = (table["litres"] - table["litres"].mean()) / table["litres"].std(ddof=0)
    assert np.isin(np.round(values, 9), np.round(standard, 9)).all() and len(np.unique(values)) == 4
    assert pg.check_digest(tmp_path / "out", redraw=True).ok  # from the manifest alone
    listed = spec_file(tmp_path, {"empirical": {"values": table["litres"].tolist()}})
    assert np.array_equal(pg.render(pg.load(listed))["x"], values)


def test_what_a_file_says_counts_in_the_digest_of_the_spec(tmp_path):
    seen = []
    for last in (9.25, 9.5):
        pd.DataFrame({"litres": [3.0, 1.5, last]}).to_csv(tmp_path / "w.csv", index=False)
        spec = pg.load(spec_file(tmp_path, {"empirical": {"values": {"file": "w.csv", "column": "litres"}}}))
        seen.append(pg.render(spec, out=tmp_path / f"out{last}").digest)
    assert seen[0] != seen[1]


def test_faults_of_samples(tmp_path):
    pd.DataFrame({"litres": [3.0, 1.5], "name": ["a", "b"]}).to_csv(tmp_path / "w.csv", index=False)

    def of(values, **more):
        return faults(spec_file(tmp_path, {"empirical": {"values": values, **more}}))

    assert of({"file": "w.csv", "column": "litre"}) == [
        "the table has no column litre; it has litres or name; did you mean litres?"
    ]
    assert of({"file": "v.csv", "column": "litres"})[0].startswith("there is no file")
    assert of({"file": "w.csv", "column": "name"})[0].startswith('expected a number, got "a"')
    assert of({"file": "w.csv"}) == ["expected the key column (column of the values: a text)"]
    assert of([1]) == ["empirical: expected at least two different values, all finite, got 1 values between 1 and 1"]
    wrong = of([1, 2], smoothed="much")
    assert wrong == [
        "expected true, false, or a bandwidth: a number in [0.05, 5], got \"much\" "
        "(smoothed: whether a normal is added to the values, in standard deviations of the sample; true: by "
        "Silverman's rule)"
    ]


STABLE = {"stable": {"alpha": 1.5}}


def test_a_law_without_a_variance_takes_a_spread(tmp_path):
    none = "stable(alpha=1.5, beta=0)"
    assert faults(spec_file(tmp_path, STABLE, sd=2)) == [
        f"expected spread in place of sd, for {none} has no variance; write spread: 2"
    ]
    assert faults(spec_file(tmp_path, "laplace", spread=2)) == [
        "expected sd in place of spread, for laplace has a variance; write sd: 2"
    ]
    assert faults(spec_file(tmp_path, STABLE, **{"spread": {"value": 2, "per": "day"}}))[0].startswith(
        "spread cannot be written with per: how a spread scales with the length of a step depends on the law"
    )
    for kind, more in (("ar", {"phi": 0.5}), ("random_walk", {})):
        body = {**HEAD, "series": {"x": [{kind: {**more, "sd": 1, "law": STABLE}}]}}
        assert faults(body) == [
            f"expected a law with a variance, {none} has none; write shock: {{white_noise: {{spread: …, law: "
            "{stable: …}}} in place of law and sd"
        ]
    body = {**HEAD, "series": {"x": [{"garch": {"omega": 1, "alpha": 0.1, "law": STABLE}}]}}
    assert faults(body) == [f"expected a law with a variance, {none} has none; choose one that has"]
