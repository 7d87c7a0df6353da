"""`digest` finds what has changed, and says where."""

import json
import random

import pyarrow.parquet as pq
import pytest

from procgen.ensemble import EnsembleError, open_ensemble, plan
from procgen.ensemble.layouts import Layout
from procgen.ensemble.parquet import IDENTITY, NODES
from procgen.ensemble.seal import seal
from tests.ensemble.fakes import fake_check, fake_render, fake_spec

SPEC = fake_spec(seed=8, paths=2500, steps=20, columns={"x": {}, "y": {"decimals": 3}})


@pytest.fixture
def made(tmp_path, monkeypatch):
    monkeypatch.setattr(plan, "PART_BYTES", 1 << 17)
    return fake_render(SPEC, tmp_path)


def rewrite(ens, number, change):
    """Write a part again with other contents, as anyone with a Parquet library can."""
    path = ens.path / ens.manifest.parts[number].file
    nodes = {NODES: pq.read_metadata(path).metadata[NODES]}
    table = change(pq.read_table(path))
    pq.write_table(table.replace_schema_metadata(table.schema.metadata | nodes), path)


def test_other_files_with_the_same_values_agree(made):
    rewrite(made, 1, lambda table: table)
    assert fake_check(made.path, redraw=True).ok


def test_untouched_files_agree_in_every_way(made):
    found = fake_check(made.path, expect=made.digest.upper() + "\n", redraw=True)
    assert found.ok and found.digest == made.digest
    assert found.text().splitlines() == [
        f"{made.digest}  as recorded",
        "as expected",
        "drawn again: 2500 paths, all the same bits",
    ]


def test_another_digest_than_expected_is_said(made):
    found = fake_check(made.path, expect="0" * 64)
    assert not found.ok
    assert f"\nexpected {'0' * 64}: other values\nto see where they differ: give the old manifest.json" in found.text()
    with pytest.raises(EnsembleError, match="expected a digest of 64 hex digits, an old manifest"):
        fake_check(made.path, expect="abc")


def test_one_changed_value_is_named_by_series_path_and_step(made):
    def change(table):
        values = table["y"].to_numpy().copy()
        values[37 * 20 + 11] += 0.001
        return table.set_column(3, table.schema.field("y"), [values])

    rewrite(made, 1, change)
    found = fake_check(made.path, redraw=True)
    block = made.manifest.parts[1].block
    assert not found.ok and len(found.damages) == 1
    assert str(found.damages[0]).startswith(f"{made.manifest.parts[1].file}: series y has other values in paths")
    assert (found.difference.series, found.difference.path, found.difference.step) == ("y", block.first_path + 37, 11)
    assert found.difference.stored == pytest.approx(found.difference.drawn + 0.001)
    assert "first difference: series y, path" in found.text()


def test_rows_in_another_order_are_found_at_the_first_of_them(made):
    first = made.manifest.parts[0].block.first_path
    rewrite(made, 0, lambda table: table.take([1, 0, *range(2, table.num_rows)]))
    found = fake_check(made.path)
    assert f"where path {first}, step 0 belongs, column step has 1" in found.text()
    with pytest.raises(EnsembleError, match="column step has 1"):
        list(made.blocks())


def test_a_missing_row_is_found(made):
    rewrite(made, 0, lambda table: table.slice(0, table.num_rows - 1))
    assert "is damaged: expected" in fake_check(made.path).text()


def test_a_part_with_the_values_and_nodes_of_another_spec_is_found(tmp_path, made, monkeypatch):
    other = fake_render(SPEC, tmp_path / "other", seed=9)
    (other.path / other.manifest.parts[0].file).replace(made.path / made.manifest.parts[0].file)
    assert "it has other values than the manifest says" in fake_check(made.path).text()


def edit(ens, change, again=False):
    """Change the manifest as anyone with an editor can; `again` makes its seal fit."""
    path = ens.path / "manifest.json"
    data = json.loads(path.read_text())
    change(data)
    path.write_text(json.dumps(data | {"seal": seal(data)} if again else data))


@pytest.mark.parametrize(
    "change,name",
    [
        (lambda m: m["identity"].update(stream_version=9), "identity.stream_version is 9, and 1 in the part"),
        (lambda m: m["identity"].update(seed=9), "identity.seed is 9, and 8 in the part"),
        (lambda m: m["spec"]["raw"].update(seed=9), "the spec in it is not the one that was drawn"),
        (lambda m: m["spec"]["canonical"].update(seed=9), "spec.canonical is not what spec.raw means"),
        (lambda m: m["digests"]["drawn"].update(ensemble="0" * 64), "digests.drawn"),
        (lambda m: m["digests"]["stored"]["series"].update(x="0" * 64), "digests.stored"),
        (lambda m: m.update(digest="0" * 64), "after it was written: digest"),
        (lambda m: m["versions"].update(numpy="0"), "versions.numpy"),
        (lambda m: m["seal"].update(digest="0" * 64), "seal"),
        (lambda m: m.pop("seal"), "seal"),
        (lambda m: m.update(note="mine"), "note"),
    ],
)
def test_a_changed_field_of_the_manifest_is_named_and_resume_writes_it_anew(made, change, name):
    before = made.manifest.json()
    edit(made, change)
    found = fake_check(made.path, redraw=True)
    assert not found.ok and name in found.text() and "--resume" in found.text()
    with pytest.raises(EnsembleError, match=r"manifest.json was changed after it was written \("):
        open_ensemble(made.path)
    with pytest.raises(EnsembleError, match=r"manifest.json was changed after it was written \("):
        fake_render(SPEC, made.path)
    assert fake_render(SPEC, made.path, resume=True).manifest.json() == before
    assert fake_check(made.path).ok


@pytest.mark.parametrize("name,value", [("seed", 9), ("stream_version", 9), ("layout", "wide"), ("paths", 2499)])
def test_an_identity_that_was_changed_and_sealed_again_is_held_against_the_parts(made, name, value):
    edit(made, lambda m: m["identity"].update({name: value}), again=True)
    found = fake_check(made.path)
    assert not found.ok and f"identity.{name} is {value}" in found.text()


def test_another_stream_version_is_refused(made, monkeypatch):
    monkeypatch.setattr("procgen.ensemble.seal.STREAM_VERSION", 9)
    for read in (fake_check, open_ensemble):
        with pytest.raises(EnsembleError, match="was drawn with stream version 1, and this procgen draws version 9"):
            read(made.path)


def test_every_part_that_is_cut_or_has_a_flipped_bit_is_named_or_unharmed(made):
    """A flipped bit either changes nothing that anyone reads, or the part is named."""
    chance = random.Random(4)
    part = made.manifest.parts[0]
    path = made.path / part.file
    whole = path.read_bytes()
    for trial in range(60):
        data = bytearray(whole)
        if trial % 6 == 0:
            data = data[: chance.randrange(len(data))]
        else:
            place = chance.randrange(len(data)) if trial % 2 else chance.randrange(len(data) - 9000, len(data))
            data[place] ^= 1 << chance.randrange(8)
        path.write_bytes(data)
        found = fake_check(made.path)
        if found.ok:
            assert found.digest == made.digest
        else:
            assert {damage.file for damage in found.damages} == {part.file}
    path.unlink()
    assert "the part is missing; draw it again with --resume" in fake_check(made.path).text()


def test_large_ensembles_are_drawn_again_in_places_of_their_whole_range(made, monkeypatch):
    monkeypatch.setattr("procgen.ensemble.check.ROWS", 20 * 160)
    found = fake_check(made.path, redraw=True)
    assert found.ok
    assert 100 < sum(place.paths for place in found.redrawn) < 320
    assert found.redrawn[0].first_path == 0 and found.redrawn[-1].end_path == 2500


@pytest.mark.parametrize(
    "change",
    [
        lambda m: m.pop("parts"),
        lambda m: m["parts"].pop(0),
        lambda m: m["parts"].append(m["parts"][0]),
        lambda m: m["parts"][0].update(file="../../etc/passwd"),
        lambda m: m["parts"][0].update(paths=-1),
        lambda m: m.update(paths=10**30),
        lambda m: m.update(columns=[{"name": "x", "type": "object"}]),
        lambda m: m["columns"].pop(),
        lambda m: m.update(digests=7),
        lambda m: m.update(procgen=99),
    ],
)
def test_a_manifest_that_contradicts_itself_is_refused(made, change):
    path = made.path / "manifest.json"
    manifest = json.loads(path.read_text())
    change(manifest)
    path.write_text(json.dumps(manifest))
    with pytest.raises(EnsembleError, match="is not a manifest of procgen, or is damaged"):
        fake_check(made.path)


def test_the_names_of_metadata_are_not_in_the_way_of_series():
    assert {IDENTITY, NODES}.isdisjoint(name.encode() for name in Layout().index(stamped=True))
