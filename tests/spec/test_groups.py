"""Groups of series: a template, names and a table become ordinary series."""

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from procgen.chance.laws import LAWS
from procgen.spec.model import SpecError
from procgen.spec.reader import read_raw, read_text
from procgen.terms import catalogue

TABLE = "series,region,base,spread\nnorth_1,north,12,1.5\nnorth_2,north,14.5,2\nsouth_1,south,9,1\n"
TEXT = """\
seed: 3
paths: 5
time: {steps: 20}
series: {total: [{use: north_1}, {use: south_1}]}
groups:
  stores:
    table: {file: stores.csv}
    unit: pieces
    decimals: 1
    of:
      - constant: {level: {column: base}}
      - ar: {phi: 0.5, sd: {column: spread}}
"""


def read(tmp_path, text=TEXT, table=TABLE):
    (tmp_path / "stores.csv").write_text(table)
    return read_text(text, catalogue(), LAWS, str(tmp_path / "spec.yaml"))


def test_members_are_ordinary_series(tmp_path):
    spec = read(tmp_path)
    assert list(spec.series) == ["total", "north_1", "north_2", "south_1"]
    north = spec.series["north_2"]
    assert (north.group, dict(north.attributes)) == ("stores", {"region": "north", "base": 14.5, "spread": 2})
    assert (north.unit, north.decimals, north.stream) == ("pieces", 1, "north_2")
    written = {"of": [{"constant": {"level": 14.5}}, {"ar": {"phi": 0.5, "sd": 2}}], "unit": "pieces", "decimals": 1}
    raw = {"seed": 3, "paths": 5, "time": {"steps": 20}, "series": {"north_2": written}}
    assert read_raw(raw, catalogue(), LAWS).series["north_2"].of == north.of


def test_the_table_becomes_a_part_of_the_spec(tmp_path):
    spec = read(tmp_path)
    assert spec.raw["groups"]["stores"]["table"]["south_1"] == {"region": "south", "base": 9, "spread": 1}
    again = read_raw(spec.raw, catalogue(), LAWS)
    assert again == spec and again.digest() == spec.digest()
    assert read(tmp_path, table=TABLE.replace("14.5", "14.6")).digest() != spec.digest()
    assert read(tmp_path, TEXT + "    note: the shops\n").digest() == spec.digest()


def test_a_parquet_table_says_the_same(tmp_path):
    import pandas as pd

    first = read(tmp_path)
    pd.read_csv(tmp_path / "stores.csv").to_parquet(tmp_path / "stores.parquet")
    assert read(tmp_path, TEXT.replace("stores.csv", "stores.parquet")).series == first.series


def test_names_by_list_and_by_number():
    def names(written):
        raw = {"seed": 1, "paths": 1, "time": {"steps": 2}, "groups": {"g": {"names": written, "of": {"constant": 1}}}}
        return list(read_raw(raw, catalogue(), LAWS).series)

    assert names(["a", "b"]) == ["a", "b"]
    assert names({"prefix": "s_", "count": 11}) == [f"s_{i}" for i in range(1, 12)]  # no padding: more move no name


@pytest.mark.parametrize("old, new, message", [
    ("column: base", "column: bass", "there is no column in the group's table named bass; expected one of region, "
     "base, spread; did you mean base?\n  at groups.stores[0].constant.level.column"),
    ("stores.csv", "store.csv", "store.csv; a path is taken from the folder of the spec\n  at "
     "groups.stores.table.file"),
    ("column: spread", "column: region", "expected a number above 0, got 'north' in column region for north_1; mend "
     "the table\n  at groups.stores[1].ar.sd"),
    ("unit: pieces", "names: [north_1, west]", "the table has no row for west; add it there\n  at "
     "groups.stores.table"),
    ("unit: pieces", "names: [north_1, north_1]", "the name north_1 stands twice; remove one\n  at "
     "groups.stores.names"),
    ("table: {file: stores.csv}", "unit: m", "a group needs names, or a table with a row a series; give one\n"
     "  at groups.stores"),
    ("    of:", "    off:", "expected a mapping with `of`, and `names` or a `table`, got a mapping with the keys "
     "table, unit, decimals, off"),
    ("series: {total: [{use: north_1}, {use: south_1}]}", "series: {north_2: [{constant: 1}]}",
     "the name north_2 of a series in stores is a series already; rename it\n  at groups.stores"),
    ("series: {total: [{use: north_1}, {use: south_1}]}", "shared: {north_2: [{white_noise: {sd: 1}}]}",
     "the name north_2 is a shared body already; rename one\n  at groups.stores"),
    ("decimals: 1", "stream: other", "the series of a group draw by their names; remove stream"),
])  # fmt: skip
def test_faults(tmp_path, old, new, message):
    assert old in TEXT
    text = TEXT.replace(old, new)
    with pytest.raises(SpecError) as error:
        read(tmp_path, text.replace("    unit: pieces\n", "") if new == "unit: m" else text)
    assert message in str(error.value)
    assert "Traceback" not in str(error.value)


@pytest.mark.parametrize("table, message", [
    (TABLE.replace("series", "store"), "the table has no column series, which names the series"),
    (TABLE + "north_1,north,1,1\n", "the series north_1 stands in two rows of the table; keep one"),
    (TABLE.replace("north_1", "north 1"), "expected a name"),
    (TABLE.replace("12,1.5", "12,-1.5"), "expected a number above 0, got -1.5 in column spread for north_1"),
    ("", "cannot read the table"),
])  # fmt: skip
def test_faults_of_tables(tmp_path, table, message):
    with pytest.raises(SpecError) as error:
        read(tmp_path, TEXT.replace("series: {total: [{use: north_1}, {use: south_1}]}\n", ""), table)
    assert message in str(error.value)


def test_a_correlation_within_a_group():
    """`shops.ar` names `.ar` of each member; the bodies are named in place, as anyone would write them out."""

    def read_with(correlation):
        groups = {"shops": {"names": ["a", "b", "c"], "of": [{"ar": {"phi": 0.5, "sd": 1}}]}}
        raw = {"seed": 1, "paths": 1, "time": {"steps": 2}, "groups": groups, "correlation": correlation}
        return read_raw({**raw, "series": {"d": [{"white_noise": {"sd": 1}}]}}, catalogue(), LAWS)

    for short, long in (
        ({"within": "shops.ar", "value": 0.3}, {"within": ["a.ar", "b.ar", "c.ar"], "value": 0.3}),
        (
            {"within": ["d.white_noise", "shops.ar"], "value": 0.2},
            {"within": ["d.white_noise", "a.ar", "b.ar", "c.ar"], "value": 0.2},
        ),
        (
            {"blocks": [{"names": "shops.ar", "value": 0.5}], "across": 0.1},
            {"blocks": [{"names": ["a.ar", "b.ar", "c.ar"], "value": 0.5}], "across": 0.1},
        ),
    ):
        spec = read_with(short)
        assert spec.correlation == read_with(long).correlation
        assert spec.raw["correlation"] == short and read_raw(spec.raw, catalogue(), LAWS) == spec
    with pytest.raises(SpecError, match=r"there is no term of a named arr; .*did you mean ar\?"):
        read_with({"within": "shops.arr", "value": 0.3})


PIECES = st.recursive(
    st.sampled_from([None, True, 0.5, -1, "k", "path", "series", "uniform", [0.3, 0.9], [1], []]),
    lambda inner: st.dictionaries(
        st.sampled_from(["draw", "over", "parameter", "column", "from_table", "uniform", "normal", "beta", "choice",
                         "mean", "sd", "within", "key", "values", "file", "value", "per"]), inner, max_size=3),
    max_leaves=6,
)  # fmt: skip


@settings(max_examples=60, deadline=None)
@given(PIECES, PIECES, PIECES)
def test_nearly_a_number_that_varies_is_read_or_refused(number, declared, table):
    """Never anything but a Spec or a SpecError."""
    raw = {
        "seed": 1,
        "paths": 2,
        "time": {"steps": 3},
        "parameters": {"k": declared},
        "groups": {"g": {"names": ["a"], "table": table, "of": [{"ar": {"phi": number, "sd": 1}, "times": number}]}},
        "series": {"x": [{"trend": {"level": number, "slope": {"value": number, "per": "step"}}}]},
    }
    try:
        spec = read_raw(raw, catalogue(), LAWS)
    except SpecError as error:
        assert str(error)
        return
    assert read_raw(spec.raw, catalogue(), LAWS) == spec
