"""YAML 1.2 against the tables of its own specification (https://yaml.org/spec/1.2.2/), places, and refusals."""

import math
import time

import pytest

from procgen.spec.model import SpecError
from procgen.spec.reader import read_file
from procgen.spec.yaml12 import from_text, resolve
from tests.spec.small import CATALOGUE, HEAD, LAWS, faults, read


def tree(text):
    problems = []
    found = from_text(text, "a.yaml", problems)
    assert problems == [], [str(p) for p in problems]
    return found


def problems(text):
    found = []
    from_text(text, "a.yaml", found)
    return [str(fault) for fault in found]


# YAML 1.2.2, section 10.3.2, the tag resolution of the core schema, with its example 10.9.
@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("", None), ("~", None), ("null", None), ("NULL", None),
        ("true", True), ("True", True), ("FALSE", False),
        ("0", 0), ("0o7", 7), ("0x3A", 58), ("-19", -19), ("+12", 12), ("012", 12), ("0o14", 12),
        ("0.", 0.0), ("-0.0", 0.0), (".5", 0.5), ("+12e03", 12000.0), ("-2E+05", -200000.0), ("1e-3", 0.001),
        (".inf", math.inf), ("-.Inf", -math.inf), ("+.INF", math.inf),
        ("no", "no"), ("yes", "yes"), ("on", "on"), ("off", "off"), ("y", "y"), ("nUll", "nUll"),
        ("18:00", "18:00"), ("1:30:00", "1:30:00"), ("1_000", "1_000"), ("0b11", "0b11"), ("0o8", "0o8"),
        ("2027-01-04", "2027-01-04"), ("1e", "1e"), (".", "."), ("+", "+"), ("0x", "0x"), ("1.2.3", "1.2.3"),
        ("٣", "٣"), ("9" * 401, "9" * 401),
    ],
)  # fmt: skip
def test_core_schema(text, value):
    assert resolve(text) == value
    assert type(resolve(text)) is type(value)


@pytest.mark.parametrize(
    ("line", "name", "column"),
    [
        ("  a: {series.x[0].ar.phi: 0.7}", "series.x[0].ar.phi", 15),
        ("  a: {time.steps: 6, series.x[0].ar.phi: 0.7}", "series.x[0].ar.phi", 30),
        ("  a: {series.x[12]: 0.7}", "series.x[12]", 15),
        ("  a: {correlation[0].value: 0.7, time.steps: 9}", "correlation[0].value", 18),
        ("  a: [load, series.x[0].ar]", "series.x[0].ar", 21),
        ("  a: {series.{load}.ar.phi: 0.7}", "series.{load}.ar.phi", 14),
        ("  {load}.ar.phi: 0.7", "{load}.ar.phi", 9),
        ("  a: {b:\n    {series.x[0][1].y: 1}}", "series.x[0][1].y", 14),
    ],
)
def test_a_place_with_brackets_that_wants_quotes_is_shown_in_them(line, name, column):
    (found,) = problems(f"seed: 1\nvariants:\n{line}\n")
    assert f'a name with brackets or braces wants quotes; write "{name}"' in found
    assert f"(a.yaml, line {3 + line.count(chr(10))}, column {column})" in found
    assert problems(f"seed: 1\nvariants:\n{line}\n".replace(name, f'"{name}"')) == []


def test_other_slips_beside_a_name_with_brackets_keep_their_words():
    (found,) = problems('a: {note: "see x[0]" b: 1}\n')
    assert "expected a comma or }" in found
    (found,) = problems("a: [1, 2\nb: 3\n")
    assert "quotes; write" not in found


def test_not_a_number_is_a_number():
    assert math.isnan(resolve(".nan"))


def test_quoted_and_block_texts_stay_texts():
    assert tree("a: '1'\nb: \"true\"\nc: |\n  12\n").plain() == {"a": "1", "b": "true", "c": "12\n"}


def test_places_are_lines_columns_and_dotted_paths():
    root = tree("a:\n  - {b: 1}\n  - c d: [x, 2]\nséries: 3\n")
    two = root.value["a"].value[1].value["c d"].value[1]
    assert str(two.place) == 'a[1]["c d"][1] (a.yaml, line 3, column 14)'
    assert str(root.value["a"].value[0].value["b"].place) == "a[0].b (a.yaml, line 2, column 9)"
    assert str(root.key("séries").place) == '["séries"] (a.yaml, line 4, column 1)'


def test_of_is_left_out_of_paths_except_as_a_name():
    root = tree("series:\n  of: 1\n  x: {of: [{exp: {of: [5]}}]}\n")
    assert root.value["series"].value["of"].place.path == "series.of"
    inner = root.value["series"].value["x"].value["of"].value[0].value["exp"].value["of"].value[0]
    assert inner.place.path == "series.x[0].exp[0]"


def test_an_alias_has_the_path_of_its_use_and_the_line_of_its_anchor():
    root = tree("a: &x {b: 1}\nc: *x\n")
    assert str(root.value["c"].value["b"].place) == "c.b (a.yaml, line 1, column 11)"


def test_a_byte_order_mark_of_utf8_and_windows_line_ends_are_read():
    assert tree("\ufeffa: 1\r\nb: 2\r\n").plain() == {"a": 1, "b": 2}


@pytest.mark.parametrize(
    ("text", "message", "path", "line", "column"),
    [
        ("a: 1\nb: 2\na: 3", "the key a is written twice, first in line 1; remove one",
         "a", 3, 1),
        ("a: !!str 1", "tags such as tag:yaml.org,2002:str are not allowed; remove it, or quote a text",
         "a", 1, 4),
        ("a: !!python/object/apply:os.system [ls]",
         "tags such as tag:yaml.org,2002:python/object/apply:os are not allowed; remove it, or quote a text",
         "a", 1, 4),
        ("!!str a: 1", "tags such as tag:yaml.org,2002:str are not allowed; remove it, or quote a text",
         "the spec", 1, 1),
        ("a: &x {b: 1}\nc: {<<: *x}", "merge keys (<<) are not part of YAML 1.2; write the keys out, or use one alias",
         "c", 2, 5),
        ("a: *nois", "the alias *nois has no anchor &nois before it; write the anchor first",
         "the spec", 1, 4),
        ("a: &noise 1\nb: *nois", "the alias *nois has no anchor &nois before it; did you mean noise?",
         "the spec", 2, 4),
        ("a: &x [*x]", "the anchor &x contains itself; remove the alias",
         "the spec", 1, 8),
        ("1: a", "expected a key that is a text, got 1",
         "the spec", 1, 1),
        ("? [a]\n: 1", "expected a key that is a text, got an empty list",
         "the spec", 1, 3),
        ("%YAML 1.1\n---\na: 1", "expected YAML 1.2, got the line %YAML 1.1; remove it",
         "the spec", 1, 1),
        ("a: 1\n---\nb: 2", "expected one document; remove the line --- and what follows it",
         "the spec", 2, 1),
        ("", "expected a spec, got an empty text",
         "the spec", 0, 0),
        ("# nothing\n", "expected a spec, got an empty text",
         "the spec", 0, 0),
        ("a: \"\\UFFFFFFFF\"", "this is not valid YAML: an escape in a quoted text names no character; correct it",
         "the spec", 0, 0),
        ("a: \"\\0\"", "the invisible character U+0000 is not allowed; remove it",
         "a", 1, 4),
        ("a: \"\\ud800\"", "the invisible character U+D800 is not allowed; remove it",
         "a", 1, 4),
        ("a: 1\nb: x\x07y", "the invisible character U+0007 is not allowed; remove it",
         "the spec", 2, 5),
        ("a: \u2028", "the invisible character U+2028 is not allowed; remove it",
         "the spec", 1, 4),
        ("a: b\ufeff", "the invisible character U+FEFF is not allowed; remove it",
         "the spec", 1, 5),
        ("a:\n\tb: 1", "this is not valid YAML: a tab; indent and separate with spaces",
         "the spec", 2, 1),
        ("a: @b", "this is not valid YAML: a text cannot begin with @; put it in quotes",
         "the spec", 1, 4),
        ("title: one: two", "this is not valid YAML: a second colon in one value; put the text in quotes, or the inner "
         "key on a line of its own",
         "the spec", 1, 11),
        ("a:\n  b: 1\n c: 2", "this is not valid YAML: this line is indented differently from the lines it belongs to; "
         "align it",
         "the spec", 3, 2),
        ("a: 1\nb\nc: 2", "this is not valid YAML: expected a colon and a space between a key and its value",
         "the spec", 3, 1),
        ("a: 'x", "this is not valid YAML: a quote is opened and not closed",
         "the spec", 1, 6),
        ("a: [1, 2\nb: 3", "this is not valid YAML: expected a comma or ] here",
         "the spec", 2, 2),
    ],
)  # fmt: skip
def test_refusals(text, message, path, line, column):
    where = f", line {line}, column {column}" if line else ""
    assert problems(text) == [f"{message}\n  at {path} (a.yaml{where})"]


def test_an_escape_into_code_is_only_a_fault(tmp_path):
    target = tmp_path / "made"
    found = faults(f"a: !!python/object/apply:pathlib.Path.touch ['{target}']\n")
    assert found[0].startswith("unknown key a; expected one of procgen, ")
    assert not target.exists()


def bomb(levels, width):
    lines = ["a0: &a0 [x, x]"]
    lines += [f"a{i}: &a{i} [{', '.join([f'*a{i - 1}'] * width)}]" for i in range(1, levels)]
    return "\n".join(lines)


REFUSED = [
    (bomb(40, 10), "expected at most 100,000 values, with aliases expanded; count what anchors and aliases (& and *) "
     "expand to"),
    (bomb(70, 1), "expected at most 60 levels of nesting; take the inner levels apart"),
    ("[" * 900, "expected at most 60 levels of nesting; take the inner levels apart"),
    ("[" * 100_000, "expected at most 60 levels of nesting; take the inner levels apart"),
    ("- " * 100_000, "expected at most 60 levels of nesting; take the inner levels apart"),
    ("? " * 100_000, "expected at most 60 levels of nesting; take the inner levels apart"),
    ("{a: " * 5000, "expected at most 60 levels of nesting; take the inner levels apart"),
    ("x" * 300_001, "expected a spec of at most 300,000 characters, got 300,001"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "message"), REFUSED, ids=range(len(REFUSED)))
def test_bombs_are_refused_before_harm(text, message):
    begin = time.process_time()
    (found,) = problems(text)
    assert found.split("\n")[0] == message
    assert time.process_time() - begin < 3.0


def refusal(path):
    with pytest.raises(SpecError) as error:
        read_file(path, CATALOGUE, LAWS)
    return str(error.value).replace(str(path.parent), "DIR")


def test_files_that_are_no_spec(tmp_path):
    bad = tmp_path / "bad.yaml"
    bad.write_bytes(b"procgen: 1\ntitle: Gr\xfc\xdfe\n")
    assert refusal(bad) == (
        "expected UTF-8, got the byte 0xfc; save the file as UTF-8\n  at the spec (DIR/bad.yaml, line 2, column 10)"
    )
    bad.write_bytes("procgen: 1\n".encode("utf-16"))
    assert refusal(bad) == "expected UTF-8, got UTF-16; save the file as UTF-8\n  at the spec (DIR/bad.yaml)"
    bad.write_bytes(b" " * 300_001)
    assert refusal(bad) == "expected a spec of at most 300,000 bytes, got a larger file\n  at the spec (DIR/bad.yaml)"
    assert refusal(tmp_path / "none.yaml") == (
        "cannot read the spec: No such file or directory; check the path\n  at the spec (DIR/none.yaml)"
    )
    (tmp_path / "folder").mkdir()
    assert refusal(tmp_path / "folder") == (
        "expected a file, got a folder or a device; give the path of a YAML file\n  at the spec (DIR/folder)"
    )


def test_a_file_is_read_and_named(tmp_path):
    path = tmp_path / "good.yaml"
    path.write_text(HEAD + "series:\n  x: {white_noise: {sd: 1}}\n", encoding="utf-8")
    assert read_file(path, CATALOGUE, LAWS).file == str(path)


def test_faults_of_the_text_do_not_hide_those_of_the_spec():
    text = HEAD + "series:\n  x: {white_noise: {sd: -1, sd: 2}}\nseed: 8\n"
    assert faults(text) == [
        "expected a number above 0, got -1 (sd: standard deviation)\n"
        "  at series.x.white_noise.sd (a.yaml, line 6, column 25)",
        "the key sd is written twice, first in line 6; remove one\n"
        "  at series.x.white_noise.sd (a.yaml, line 6, column 29)",
        "the key seed is written twice, first in line 2; remove one\n  at seed (a.yaml, line 7, column 1)",
    ]


def test_a_long_list_is_read_in_reasonable_time():
    numbers = ", ".join(["0.12345"] * 10_000)
    begin = time.process_time()
    spec = read(HEAD + f"series:\n  x: {{ar: {{phi: [{numbers}], sd: 1}}}}\n")
    assert len(spec.series["x"].of[0].values["phi"]) == 10_000
    assert time.process_time() - begin < 3.0
