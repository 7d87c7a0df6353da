"""The reader with the catalogue and the laws that the package ships."""

import json

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from procgen.chance.laws import LAWS
from procgen.spec.declare import REQUIRED, Body, Domain, Parameter, Record, Records
from procgen.spec.model import Spec, SpecError
from procgen.spec.reader import read_raw, read_text
from procgen.terms import catalogue
from tests.spec.strategies import entries, specs, wild

CATALOGUE = catalogue()
HEAD = "seed: 7\npaths: 10\ntime: {steps: 100, every: 1h, start: 2027-01-04}\n"
OTHERS = "  weather: {white_noise: {sd: 1}}\n  load: {garch: {sd: 1, alpha: 0.1}}\n"


def parameters(declared):
    for parameter in declared:
        yield parameter
        if isinstance(parameter.domain, (Record, Records)):
            yield from parameters(parameter.domain.parameters)


@pytest.mark.parametrize("kind", CATALOGUE)
def test_every_declaration_is_whole(kind):
    declared = list(parameters(CATALOGUE[kind].parameters))
    assert all(isinstance(p, Parameter) and isinstance(p.domain, Domain) for p in declared)
    assert all(p.meaning and p.domain.describe() and p.per in (None, "rate", "diffusion") for p in declared)
    short = CATALOGUE[kind].short
    assert short is None or short in {p.name for p in CATALOGUE[kind].parameters}


@pytest.mark.parametrize("law", LAWS)
def test_every_law_is_read_by_its_declaration(law):
    values = {p.name: p.default for p in LAWS[law].parameters if p.default is not REQUIRED}
    assert len(values) + sum(p.required for p in LAWS[law].parameters) == len(LAWS[law].parameters)
    assert LAWS[law].name == law


@pytest.mark.parametrize("kind", CATALOGUE)
def test_every_example_of_the_catalogue_is_read(kind):
    text = f"{HEAD}series:\n{OTHERS}  x:\n    - {CATALOGUE[kind].example}\n"
    spec = read_text(text, CATALOGUE, LAWS)
    assert [entry.kind for entry in spec.series["x"].of] == [kind]
    assert read_raw(json.loads(json.dumps(spec.raw)), CATALOGUE, LAWS) == spec


@pytest.mark.parametrize("kind", [k for k in CATALOGUE if CATALOGUE[k].parameters])
def test_every_kind_refuses_a_key_it_does_not_know(kind):
    body = {"of": [{"constant": 1}]} if any(isinstance(p.domain, Body) for p in CATALOGUE[kind].parameters) else {}
    raw = {"seed": 7, "paths": 10, "time": {"steps": 9}, "series": {"x": [{kind: {**body, "nonsense": 1}}]}}
    with pytest.raises(SpecError) as error:
        read_raw(raw, CATALOGUE, LAWS)
    assert any(fault.message.startswith("unknown key nonsense; expected ") for fault in error.value.faults)


@settings(deadline=10_000, max_examples=60, suppress_health_check=list(HealthCheck), derandomize=True)
@given(specs(entries(CATALOGUE, LAWS) | st.lists(entries(CATALOGUE, LAWS), min_size=1, max_size=3)))
def test_near_specs(raw):
    check(raw)


@settings(deadline=10_000, max_examples=50, suppress_health_check=list(HealthCheck), derandomize=True)
@given(specs(wild(CATALOGUE, LAWS)))
def test_any_body(raw):
    check(raw)


def check(raw):
    """Read plain data, and whatever comes of it: a Spec that reads again as itself, or faults with messages."""
    try:
        spec = read_raw(raw, CATALOGUE, LAWS)
    except SpecError as error:
        assert error.faults and all(fault.message for fault in error.faults)
        return
    assert isinstance(spec, Spec)
    assert read_raw(json.loads(json.dumps(spec.raw)), CATALOGUE, LAWS) == spec
