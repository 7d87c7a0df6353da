"""`procgen difference`, `--expect`, and their calls: what differs in meaning and in values, and by how much."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from scipy import stats
from typer.testing import CliRunner

import procgen as pg
from procgen.app import app
from procgen.ensemble import beside
from procgen.ensemble.beside import Redrawn, common, firsts, side_by_side
from procgen.ensemble.ensemble import Ensemble
from procgen.ensemble.plan import Block
from procgen.report.text import CAUTION

SPEC = """procgen: 1
seed: 5
paths: 50
time: {steps: 40}
series:
  load: [{constant: 80}, {ar: {phi: 0.8, sd: 3}}]
  price: {decimals: 2, of: [{random_walk: {sd: 1, start: 30}}]}
variants:
  crisis: {series.load.ar.sd: 5}
"""


class Result:
    def __init__(self, *args: object):
        found = CliRunner().invoke(app, [str(arg) for arg in args], catch_exceptions=False)
        self.code, self.out, self.err = found.exit_code, found.stdout, found.stderr


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    """base and crisis rendered, the specs beside them, and one with a series more."""
    home = tmp_path_factory.mktemp("pair")
    (home / "spec.yaml").write_text(SPEC)
    (home / "more.yaml").write_text(SPEC.replace("  price:", "  wind: [{use: load}, {white_noise: {sd: 1}}]\n  price:"))
    assert Result("render", home / "spec.yaml", "--variant", "all", "-o", home).code == 0
    assert Result("render", home / "more.yaml", "-o", home / "more").code == 0
    return home


def test_a_series_that_is_added_is_new_and_all_others_are_equal(folder):
    for a, b in (("base", "more"), ("spec.yaml", "more.yaml"), ("base/manifest.json", "more.yaml")):
        result = Result("difference", folder / a, folder / b)
        assert result.code == 1
        assert "What differs in meaning:\n  series.wind: new, use + white_noise\n" in result.out
        assert "Series: 1 new, all others equal (" in result.out
        assert "  equal: load, price\n  wind: new in b" in result.out and CAUTION[:40] not in result.out
    gone = Result("difference", folder / "more", folder / "base")
    assert gone.code == 1 and "1 gone, all others equal" in gone.out and "wind: gone, only in a" in gone.out


def test_what_is_equal_ends_with_0(folder):
    result = Result("difference", folder / "base", folder / "base")
    assert result.code == 0 and "Both mean the same." in result.out and "Series: all equal" in result.out
    assert Result("difference", folder / "spec.yaml", folder / "base").code == 0


def test_variants_are_told_place_by_place_and_paired(folder):
    result = Result("difference", folder / "base", folder / "crisis", "--at", "0,10,39")
    assert result.code == 1
    assert "  series.load.ar.sd: 3 → 5\n" in result.out and "  equal: price\n" in result.out
    found = pg.difference(folder / "base", folder / "crisis", at=[0, 10, 39])
    base, crisis = (pg.open_ensemble(folder / name)["load"] for name in ("base", "crisis"))
    first = found.series[0].first
    assert (first.path, first.step, first.a, first.b) == (0, 0, base[0, 0], crisis[0, 0])
    values = f"{float(base[0, 0])!r} → {float(crisis[0, 0])!r}"
    assert f"load: first at path 0, step 0: {values}; by load.ar" in result.out
    for row in found.paired:
        test = stats.ttest_rel(crisis[:, row.step], base[:, row.step])
        assert row.change / row.standard_error == pytest.approx(test.statistic, rel=1e-9)
        # z and 5/3 z around one level: saved 2·(5/3)/(1 + 25/9) = 15/17
        assert row.saved == pytest.approx(15 / 17, rel=1e-9)
    assert [row.step for row in found.paired] == [0, 10, 39] and list(found.table["paths"]) == [50] * 3
    assert " ".join(result.out.split()).endswith(CAUTION)
    assert found.text() + "\n" == result.out and not found.equal
    assert [row.step for row in pg.difference(folder / "base", folder / "crisis").paired] == [0, 9, 19, 29, 39]


def test_json_has_the_same(folder):
    result = Result("difference", folder / "base", folder / "crisis", "--json")
    data = json.loads(result.out)
    assert result.code == 1 and data["equal"] is False
    assert data["meaning"] == [{"place": "series.load.ar.sd", "old": "3", "new": "5"}]
    assert data["series"][0]["moved"] == ["load.ar"] and data["series"][0]["first"]["step"] == 0
    assert data["series"][1]["state"] == "equal" and data["series"][1]["first"] is None
    assert data["paired"][0]["saved"] == pytest.approx(15 / 17)
    assert data["compared"] == {"first_path": 0, "paths": 50, "first_step": 0, "steps": 40}
    assert json.loads(Result("difference", folder / "spec.yaml", folder / "spec.yaml", "--json").out)["equal"] is True


def test_a_renamed_series_of_the_same_stream_is_said_to_be_renamed_and_moves_nothing(folder, tmp_path):
    load = "load: {stream: load, of: [{constant: 80}, {ar: {phi: 0.8, sd: 3}}]}"
    users = "\n  twice: [{use: load}, {use: load}]\n  price:"
    plain = SPEC.replace("  price:", users[1:]).partition("variants")[0]
    plain = plain.replace("load: [{constant: 80}, {ar: {phi: 0.8, sd: 3}}]", load)
    (tmp_path / "a.yaml").write_text(plain)
    (tmp_path / "b.yaml").write_text(plain.replace("load: {", "power: {").replace("use: load", "use: power"))
    (tmp_path / "c.yaml").write_text((tmp_path / "b.yaml").read_text().replace("stream: load", "stream: power"))
    a, b, c = (pg.render(tmp_path / f"{name}.yaml") for name in "abc")
    assert np.array_equal(a["load"], b["power"]) and not np.array_equal(a["load"], c["power"])
    for pair in ((a, b), (tmp_path / "a.yaml", tmp_path / "b.yaml")):
        found = pg.difference(*pair)
        assert [(one.name, one.state, one.was) for one in found.series] == [
            ("power", "renamed", "load"), ("twice", "equal", ""), ("price", "equal", ""),
        ]  # fmt: skip
        assert "Series: 1 renamed, all others equal" in found.text() and not found.equal
        assert "  renamed: load → power (same draws)" in found.text()
    assert {one.state for one in pg.difference(a, c).series} == {"new", "gone", "differs", "equal"}


def test_a_change_of_a_parameter_is_told_once(tmp_path):
    text = SPEC.replace("series:", "parameters:\n  k: {draw: {uniform: [0.3, 0.9]}, over: path}\nseries:", 1)
    text = text.replace("phi: 0.8", "phi: {parameter: k}")
    text = text.replace("series.load.ar.sd: 5", "parameters.k.draw.uniform: [0.4, 0.5]")
    (tmp_path / "spec.yaml").write_text(text)
    spec = pg.load(tmp_path / "spec.yaml")
    found = pg.difference(spec, spec.variant("crisis"))
    assert [one.place for one in found.meaning] == ["parameters.k"] and found.series[0].state == "differs"
    moved = {"series.load.ar.phi": 0.5, "series.price.random_walk.sd": {"parameter": "k"}}
    assert [one.place for one in pg.difference(spec, spec.set(moved)).meaning] == [*moved]


def test_two_specs_are_compared_without_drawing(folder, monkeypatch):
    monkeypatch.setattr("procgen.ensemble.draw.Drawer.fill", None)
    result = Result("difference", folder / "spec.yaml", "--variant", "crisis")
    assert result.code == 1
    assert "load: would change, by load.ar" in result.out and "nothing drawn" in result.out
    assert "spec.yaml, variant crisis: 50 paths" in result.out
    found = pg.difference(pg.load(folder / "spec.yaml"), pg.load(folder / "spec.yaml").set({"series.price.unit": "€"}))
    assert [c.place for c in found.meaning] == ["series.price.unit"] and not found.equal
    assert all(one.state == "equal" for one in found.series)


def test_ranges_that_overlap_are_compared_where_they_do(folder, tmp_path):
    assert Result("render", folder / "spec.yaml", "-o", tmp_path / "b", "--first-path", 20, "--steps", 30).code == 0
    found = pg.difference(folder / "base", tmp_path / "b")
    assert found.compared == Block(20, 30, 0, 30) and all(one.state == "equal" for one in found.series)
    assert not found.equal  # the ranges differ
    assert ("range of paths", "0–49", "20–69") in [(one.place, one.old, one.new) for one in found.meaning]
    shifted = pg.difference(pg.render(folder / "spec.yaml"), pg.render(folder / "spec.yaml", first_path=20))
    assert "range of paths: 0–49 → 20–69\n" in shifted.text() and "Both mean the same" not in shifted.text()
    assert "Series: all equal (values compared on paths 20–49, those in both, steps 0–39)" in shifted.text()
    assert [one["place"] for one in shifted.to_dict()["meaning"]] == ["range of paths"]
    far = pg.difference(pg.render(SPECS := pg.load(folder / "spec.yaml")), pg.render(SPECS, first_path=50))
    assert far.compared is None and "no path is in both" in far.text()


def test_missing_values_are_null_in_json_and_paired_where_both_have_a_value():
    def spec(sd):
        body = {"missing": {"of": [{"white_noise": {"sd": sd}}], "share": 0.4}}
        return pg.load({"seed": 3, "paths": 60, "time": {"steps": 6}, "series": {"m": body}})

    a, b = pg.render(spec(1)), pg.render(spec(2))
    found = pg.difference(a, b)

    def refuse(word):
        raise AssertionError(f"{word} is not JSON (RFC 8259)")

    data = json.loads(found.to_json(), parse_constant=refuse)
    both = (~np.isnan(a["m"] + b["m"])).sum(axis=0)
    assert [row["paths"] for row in data["paired"]] == [both[row["step"]] for row in data["paired"]]
    assert all(row["change"] is not None and 0 < row["paths"] < 60 for row in data["paired"])
    assert "(60 paths):" in found.text() and "paths: those on which both have a value at the step" in found.text()
    gone = pg.difference(a, pg.render(spec(1).set({"series.m.missing.share": 0.8})))
    first = json.loads(gone.to_json(), parse_constant=refuse)["series"][0]["first"]
    assert first["a"] is not None and first["b"] is None and "→ missing; by m." in gone.text()


def test_layouts_and_parts_do_not_matter(folder, tmp_path):
    for layout in ("wide", "nested", "panel"):
        pg.render(folder / "spec.yaml", tmp_path / layout, layout=layout)
        assert pg.difference(folder / "base", tmp_path / layout).equal
        found = pg.difference(tmp_path / layout, folder / "crisis", at=[3])
        assert found.paired == pg.difference(folder / "base", folder / "crisis", at=[3]).paired
    short = pg.render(folder / "spec.yaml", steps=30)
    assert [one.state for one in pg.difference(short, tmp_path / "wide").series] == ["equal", "equal"]


def test_other_seeds_share_no_shocks_and_are_not_paired(folder):
    spec = pg.load(folder / "spec.yaml")
    found = pg.difference(pg.render(spec), pg.render(spec.changed(seed=6)))
    assert found.paired == () and not any(one.shares for one in found.series)
    assert "no shocks are shared by load, price" in found.text()


@pytest.mark.parametrize(
    ("args", "message"),
    [
        (["base"], "expected B, or --variant NAME"),
        (["base", "crisis", "--variant", "crisis"], "expected B, or --variant NAME"),
        (["base", "nowhere.yaml"], "there is no file or folder nowhere.yaml; give a spec, the folder of an ensemble"),
        (["base", "nowhere.json"], "there is no file"),
        (["base", "values.CSV"], "values.CSV is a file of values, and these are compared with a spec: procgen"),
        (["base", "crisis", "--at", "40"], "expected steps from 0 to 39, which both have, got 40"),
        (["base", "crisis", "--at", "x"], "expected steps from 0 on"),
        (["spec.yaml", "--variant", "crysis"], "did you mean crisis?"),
        (["spec.yaml", "."], "has no manifest.json"),
    ],
)
def test_bad_input_is_told_and_ends_with_2(folder, monkeypatch, args, message):
    monkeypatch.chdir(folder)
    result = Result("difference", *args)
    assert result.code == 2 and message in " ".join(result.err.split()) and result.out == ""


# side by side


class InPieces(Ensemble):
    """An ensemble that hands out its values in runs of a few steps of a few paths, as parts of long paths are."""

    def __init__(self, ensemble, paths, steps):
        super().__init__(ensemble.columns, ensemble.whole)
        self.values, self.sizes = {name: ensemble[name] for name in ensemble.names}, (paths, steps)

    def stored(self, first_path=None, end_path=None, names=None):
        first, end = first_path or 0, self.whole.end_path if end_path is None else end_path
        paths, steps = self.sizes
        for p in range(0, self.whole.paths, paths):
            for s in range(0, self.whole.steps, steps):
                block = Block(p, min(paths, self.whole.paths - p), s, min(steps, self.whole.steps - s))
                if block.first_path < end and block.end_path > first:
                    rows, span = slice(p, block.end_path), slice(s, block.end_step)
                    yield block, {name: values[rows, span] for name, values in self.values.items()}


@pytest.mark.parametrize("values", [1, 39, 100, 40 * 16 * 2, 1 << 22])
@pytest.mark.parametrize("cuts", [((50, 40), (50, 40)), ((16, 7), (50, 40)), ((3, 11), (20, 13)), ((1, 1), (50, 9))])
def test_every_cut_of_both_gives_the_same_values(folder, monkeypatch, values, cuts):
    monkeypatch.setattr(beside, "VALUES", values)
    a, b = (pg.open_ensemble(folder / name) for name in ("base", "crisis"))
    whole = Block(3, 40, 0, 37)
    left, right = (InPieces(one, *sizes) for one, sizes in zip((a, b), cuts, strict=True))
    seen = {name: np.full((2, 40, 37), np.nan) for name in ("load", "price")}
    for block, pairs in side_by_side(left, right, whole, ["load", "price"]):
        assert block.paths == 1 or block.first_path % 16 == 0 or block.first_path == 3 or values < 40 * 16 * 2
        rows = slice(block.first_path - 3, block.end_path - 3)
        for name, pair in pairs.items():
            seen[name][:, rows, block.first_step : block.end_step] = pair
    for name, pair in seen.items():
        assert np.array_equal(pair, np.stack([one[name][3:43, :37] for one in (a, b)]))


def test_the_first_difference_is_first_by_path_and_then_by_step(folder):
    ensemble = pg.open_ensemble(folder / "base")
    other = InPieces(ensemble, 50, 40)
    for path, step in ((31, 0), (30, 39), (30, 8)):
        other.values["load"] = other.values["load"].copy()
        other.values["load"][path, step] = np.nextafter(other.values["load"][path, step], 0)
    found = firsts(ensemble, other, ensemble.whole, ["load", "price"])
    assert [*found] == ["load"] and (found["load"].path, found["load"].step) == (30, 8)


def test_what_is_drawn_again_is_what_was_drawn(folder):
    ensemble = pg.open_ensemble(folder / "base")
    again = Redrawn(ensemble.spec, ensemble.whole)
    assert firsts(ensemble, again, ensemble.whole, ensemble.names) == {}
    assert np.array_equal(again["price"], ensemble["price"])
    assert common(Block(0, 5, 0, 9), Block(5, 5, 0, 9)) is None


# expectations


def test_an_expected_digest_is_met_or_not(folder, tmp_path):
    digest = pg.open_ensemble(folder / "base").digest
    met = Result("render", folder / "spec.yaml", "-o", tmp_path / "a", "--expect", digest.upper())
    assert met.code == 0 and met.out.endswith("as expected\n")
    missed = Result("render", folder / "spec.yaml", "-o", tmp_path / "b", "--expect", digest, "--variant", "crisis")
    assert missed.code == 1 and f"expected {digest}: other values\n" in missed.out
    assert "give the old manifest.json" in missed.out
    assert pg.check_digest(tmp_path / "b").ok  # the files are kept, and whole


def test_an_old_manifest_tells_the_first_difference_and_what_may_have_moved_it(folder, tmp_path):
    base, crisis = (pg.open_ensemble(folder / name)["load"] for name in ("base", "crisis"))
    old_value, new_value = float(base[0, 0]), float(crisis[0, 0])
    lines = [
        "  series.load.ar.sd: 3 → 5",
        f"first difference: series load, path 0, step 0: expected {old_value!r}, got {new_value!r}",
        "what may have moved it: load.ar",
    ]
    alone = tmp_path / "old.json"  # no files beside it: the old values are drawn again
    shutil.copy(folder / "base" / "manifest.json", alone)
    render = ("render", folder / "spec.yaml", "--variant", "crisis", "-o", tmp_path / "c")
    for old in (folder / "base", folder / "base" / "manifest.json", alone):
        for args in (("digest", folder / "crisis"), render):
            result = Result(*args, "--expect", old)
            assert result.code == 1 and result.out.splitlines()[-3:] == lines
    met = Result("digest", folder / "base", "--expect", alone)
    assert met.code == 0 and "as expected" in met.out


def test_the_old_manifest_may_be_the_one_that_is_overwritten(folder, tmp_path):
    out = tmp_path / "out"
    shutil.copytree(folder / "base", out)
    result = Result("render", folder / "spec.yaml", "-o", out, "--overwrite", "--variant", "crisis", "--expect", out)
    assert result.code == 1 and "what may have moved it: load.ar" in result.out


def test_a_new_series_and_another_length_are_told(folder, tmp_path):
    old = folder / "base" / "manifest.json"
    more = Result("digest", folder / "more", "--expect", old)
    assert more.code == 1 and "series wind: new" in more.out and "first difference" not in more.out
    assert more.out.endswith("the series that are in both are equal\n")
    longer = Result("render", folder / "spec.yaml", "--steps", 41, "-o", tmp_path / "long", "--expect", old)
    assert longer.code == 1 and "compared where both are" in longer.out
    assert "where both are, all values are equal" in longer.out


def test_values_that_no_spec_explains_are_said_to_be_changed(folder, tmp_path, monkeypatch):
    """Other code with the same spec: half of the values of one series are drawn otherwise."""
    old = folder / "base"
    from procgen.ensemble.draw import Drawer

    fill = Drawer.fill

    def otherwise(self, batch, out):
        fill(self, batch, out)
        out["load"][25:] += 1.0

    monkeypatch.setattr(Drawer, "fill", otherwise)
    result = Result("render", folder / "spec.yaml", "-o", tmp_path / "b", "--expect", old, "--workers", 1)
    assert result.code == 1 and "the spec means the same" in result.out
    assert "first difference: series load, path 25, step 0" in result.out and "made by other code" in result.out


@pytest.mark.parametrize(
    ("expect", "message"),
    [("abc", "64 hex digits, an old manifest.json"), ("spec.yaml", "is not JSON"), (".", "64 hex digits")],
)
def test_what_cannot_be_expected_is_refused_before_anything_is_drawn(folder, tmp_path, monkeypatch, expect, message):
    monkeypatch.chdir(folder)
    result = Result("render", "spec.yaml", "-o", tmp_path / "b", "--expect", expect)
    assert result.code == 2 and message in result.err and not (tmp_path / "b").exists()


def test_one_digest_is_not_that_of_all_variants(folder, tmp_path):
    result = Result("render", folder / "spec.yaml", "--variant", "all", "-o", tmp_path / "b", "--expect", "0" * 64)
    assert result.code == 2 and not (tmp_path / "b").exists()


def _rewritten(file: Path, change) -> None:
    """The file with a changed table, what its footer says as it was."""
    table, said = pq.read_table(file), pq.read_metadata(file).metadata
    changed = pa.Table.from_pandas(change(table.to_pandas()), table.schema, preserve_index=False)
    said = {key: text for key, text in said.items() if key.startswith(b"procgen")}
    pq.write_table(changed.replace_schema_metadata(said), file)


def _other_value(name: str):
    def change(frame):
        frame.loc[(frame["path"] == 3) & (frame["step"] == 17), name] += 1.0
        return frame

    return change


@pytest.fixture
def copy(folder, tmp_path) -> Path:
    """The ensemble base with a revealed column, as `a`, and a copy `b` of it to be damaged; the file of `b`."""
    assert Result("render", folder / "spec.yaml", "--reveal", "load.ar", "-o", tmp_path / "a").code == 0
    shutil.copytree(tmp_path / "a", tmp_path / "b")
    return next((tmp_path / "b").glob("*.parquet"))


@pytest.mark.parametrize("column", ["load", "load.ar"])
def test_a_value_that_was_changed_is_told_though_manifests_agree(copy, column):
    _rewritten(copy, _other_value(column))
    result = Result("difference", copy.parents[1] / "a", copy.parent)
    found = pg.difference(copy.parents[1] / "a", copy.parent)
    assert result.code == 1 and not found.equal and found.to_dict()["equal"] is False
    assert "b does not hold what its manifest says: " in result.out
    assert f"the first is series {column}, path 3, step 17\n" in result.out
    assert ("Series: all equal (" in result.out) == (column == "load.ar")  # what is revealed is no series
    assert len(found.damages) == 1 and found.damages[0] == found.to_dict()["damages"][0]
    assert pg.difference(copy.parent, copy.parents[1] / "a").damages[0].startswith("a does not hold")


DAMAGES = [
    lambda file: file.write_bytes(file.read_bytes()[:1000]),
    lambda file: _rewritten(file, lambda frame: frame.drop(index=77)),
    lambda file: _rewritten(file, lambda frame: frame.iloc[[*range(len(frame)), 5]]),
    lambda file: _rewritten(file, lambda frame: frame.sample(frac=1.0, random_state=1)),
]


@pytest.mark.parametrize("damage", DAMAGES, ids=["cut", "a row less", "a row more", "shuffled"])
def test_a_damaged_file_is_named_and_nothing_said_to_be_equal(copy, damage):
    damage(copy)
    result = Result("difference", copy.parents[1] / "a", copy.parent)
    assert result.code == 1 and "Series: 2 not compared, 0 equal (values could not be read" in result.out
    assert "b does not hold what its manifest says: " in result.out and result.out.count(copy.name) == 1
    data = json.loads(Result("difference", copy.parents[1] / "a", copy.parent, "--json").out)
    assert data["equal"] is False and [one["state"] for one in data["series"]] == ["unread", "unread"]


def test_the_last_line_of_digest_says_what_failed(copy):
    _rewritten(copy, _other_value("load.ar"))
    result = Result("digest", copy.parent, "--expect", pg.open_ensemble(copy.parent).digest)
    lines = result.out.splitlines()
    assert result.code == 1 and "series load.ar has other values" in lines[0] and "as expected" in lines
    assert lines[-1] == "not in order: load.ar, as said above"
    copy.write_bytes(copy.read_bytes()[:1000])
    result = Result("digest", copy.parent, "--expect", "a" * 64)
    assert result.code == 1 and result.out.endswith("not all of it can be read\n")
    assert result.out.count(copy.name) == 1
