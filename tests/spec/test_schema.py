"""The JSON Schema of the spec language: valid by the standard's own metaschema, and never tighter than the reader.

Judged by the package jsonschema, a public implementation of JSON Schema 2020-12.
"""

import json
import re
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from jsonschema import Draft202012Validator

from procgen.chance.laws import LAWS
from procgen.report.catalogue import example_spec
from procgen.report.schema import schema
from procgen.spec.declare import Domain, Record, Records
from procgen.spec.entries import REPLACED
from procgen.spec.model import SpecError
from procgen.spec.reader import read_file, read_raw, read_text
from procgen.spec.yaml12 import from_text
from procgen.terms import catalogue
from tests.spec.broken import broken
from tests.spec.strategies import entries, specs, wild
from tests.spec.test_groups import TABLE

CATALOGUE = catalogue()
SCHEMA = Draft202012Validator(schema())
ROOT = Path(__file__).parents[2]
NOTHING = {"nothing of the kind": [None]}


def taken(raw):
    try:
        read_raw(raw, CATALOGUE, LAWS)
    except SpecError:
        return False
    return True


def example(kind):
    return read_text(example_spec(kind), CATALOGUE, LAWS).raw


def test_it_is_a_json_schema():
    Draft202012Validator.check_schema(schema())
    assert json.loads(json.dumps(schema())) == schema()


@pytest.mark.parametrize("file", sorted((ROOT / "specs").glob("*.yaml")), ids=lambda file: file.stem)
def test_the_gallery_is_accepted(file):
    assert [*SCHEMA.iter_errors(read_file(file, CATALOGUE, LAWS).raw)] == []


def test_the_demo_with_faults_is_refused():
    file = ROOT / "demo" / "fault.yaml"
    raw = from_text(file.read_text(encoding="utf-8"), str(file), []).plain()
    assert not SCHEMA.is_valid(raw) and not taken(raw)


@pytest.mark.parametrize("kind", CATALOGUE)
def test_every_example_is_accepted_and_every_spoiled_one_refused(kind):
    raw = example(kind)
    assert SCHEMA.is_valid(raw)
    for spoiled in spoilt(raw, kind):
        assert not taken(spoiled) and not SCHEMA.is_valid(spoiled), spoiled


def spoilt(raw, kind):
    """Specs with one thing wrong: a parameter that is no such value, one that is missing, one too many."""
    entry = raw["series"]["x"][0]
    values = entry[kind] if isinstance(entry[kind], dict) else {}
    declared = [p.name for p in CATALOGUE[kind].parameters if p.name in values]
    needed = [p.name for p in CATALOGUE[kind].parameters if p.name in values and p.required and p.name not in REPLACED]
    for changed in [
        *({kind: {**values, name: NOTHING}} for name in declared),
        *({kind: {k: v for k, v in values.items() if k != name}} for name in needed),
        {kind: {**values, "nothing": 1}},
        {**entry, "nothing": 1},
        {**entry, "as": "1st"},
        {**entry, "times": "x"},
        {},
    ]:
        yield {**raw, "series": {"x": [changed]}}


@pytest.mark.parametrize(
    "change",
    [
        {"seed": -1},
        {"seed": None},
        {"paths": 0},
        {"paths": "many"},
        {"time": {"steps": 0}},
        {"time": {"steps": 9, "colour": "red"}},
        {"time": {"zone": "UTC"}},
        {"time": {"at": ["2027-01-04"]}},
        {"time": {"at": {"file": "log.csv"}}},
        {"series": {}},
        {"series": {"1st": [{"constant": 1}]}},
        {"series": {"x": {"of": [{"constant": 1}], "type": "float16"}}},
        {"correlation": [{"between": ["x.white_noise"], "value": 0.3}]},
        {"colour": "red"},
    ],
    ids=str,
)
def test_what_the_head_cannot_say_is_refused(change):
    raw = example("constant") | change
    assert not taken(raw) and not SCHEMA.is_valid(raw)


@settings(deadline=10_000, max_examples=60, suppress_health_check=list(HealthCheck), derandomize=True)
@given(
    specs(entries(CATALOGUE, LAWS) | st.lists(entries(CATALOGUE, LAWS), min_size=1, max_size=3) | wild(CATALOGUE, LAWS))
)
def test_what_the_reader_takes_is_accepted(raw):
    assert SCHEMA.is_valid(raw) or not taken(raw)


# What no schema can say, by how the reader says it: names and what they stand for, sums and roots of several numbers,
# numbers that are not finite (JSON has none), the grid of steps, the clock and the calendar, keys written twice.
BEYOND = {
    "what a name stands for": "there is no (series|term|hidden output|parameter|place|column)|expected a (hidden "
    "output|term that draws shocks|noise as shock)|nothing uses|these uses go in a circle|"
    "has 2 terms of kind|a shock goes by",
    "a name that is taken": "needs a label of its own|the label .* is taken|the stream .* belongs|is a (series|shared "
    "body) already|expected two different names|(is given|stands) twice|is set twice",
    "the form of a stream's name": "expected a name of at most 100 letters",
    "numbers that go together": r"expected all roots|alpha \+ beta|expected E log|positive definite|on the diagonal|"
    r"symmetric matrix|rows of 2 for 2|expected 2 rows|squares that sum|at most 1e\+13 values|an int64 has no decimals",
    "how a list of names is read": "expected a list of at least two names",
    "a number that is not finite": "the number must be finite",
    "a comma in a number, which YAML takes for the end of it": "no comma within a number",
    "a key that means nothing without another": "means nothing without|says its own spread|cannot vary|count only on",
    "the steps of the grid": "needs the length of a step|expected steps that end by",
    "the clock and the calendar": "expected a (time zone|date|year|start)|does not exist in|has an offset that|unknown "
    "unit",
    "what a variant puts in place": r"expected a (number|whole number).* got (-1|\"high\"|1e\+99)",
    "a draw, its range and its weights": "where draws are|no end there|which reach|low end below|a weight for each",
    "a table, and what stands in it": "there is no file|in column|the table has no row|has a row of a table|or a table "
    "with a row|expected a list of numbers, for key",
    "a key written twice": "is written twice",
}


@pytest.fixture(scope="module")
def judged(tmp_path_factory):
    """Every broken spec of the suite that is YAML: by name, whether the schema takes it, and what the reader says."""
    file = tmp_path_factory.mktemp("broken") / "a.yaml"
    (file.parent / "stores.csv").write_text(TABLE)
    found = {}
    for name, text in broken():
        tree = from_text(text, str(file), [])
        if tree is not None:
            said = []
            try:
                read_text(text, CATALOGUE, LAWS, str(file))
            except SpecError as error:
                said = [fault.message for fault in error.faults]
            found[name] = SCHEMA.is_valid(tree.plain()), said
    return found


def test_of_every_broken_spec_what_a_schema_can_say_is_refused(judged):
    """What it lets pass is wrong in a way that no schema can say, and what the reader takes it takes as well."""
    passed = {name: said for name, (valid, said) in judged.items() if valid}
    untold = {name: said for name, said in passed.items() if not all(map(beyond, said))}
    assert untold == {}
    assert all(valid for valid, said in judged.values() if not said)
    assert len(judged) > 200 and len(passed) < len(judged) / 2


def test_each_reason_is_one_that_is_met(judged):
    met = {reason for valid, said in judged.values() if valid for reason in map(beyond, said)}
    assert met == set(BEYOND)


def beyond(message):
    return next((reason for reason, pattern in BEYOND.items() if re.search(pattern, message)), None)


def domains(parameters):
    for p in parameters:
        yield p.domain
        if isinstance(p.domain, (Record, Records)):
            yield from domains(p.domain.parameters)


def test_every_domain_says_what_it_takes():
    owners = [*CATALOGUE.values(), *LAWS.values()]
    silent = {type(d).__name__ for one in owners for d in domains(one.parameters) if type(d).schema is Domain.schema}
    assert silent == set()
