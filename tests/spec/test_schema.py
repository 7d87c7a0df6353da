"""The JSON Schema of the spec language: valid by the standard's own metaschema, and never tighter than the reader.

Judged by the package jsonschema, a public implementation of JSON Schema 2020-12.
"""

import json
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
from tests.spec.strategies import entries, specs, wild

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


def domains(parameters):
    for p in parameters:
        yield p.domain
        if isinstance(p.domain, (Record, Records)):
            yield from domains(p.domain.parameters)


def test_every_domain_says_what_it_takes():
    owners = [*CATALOGUE.values(), *LAWS.values()]
    silent = {type(d).__name__ for one in owners for d in domains(one.parameters) if type(d).schema is Domain.schema}
    assert silent == set()
