"""Any text and any structure becomes a Spec or a SpecError, in bounded time, and never another exception."""

import contextlib
import json
import time
from datetime import timedelta

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from procgen.chance import laws
from procgen.spec.model import Spec, SpecError
from procgen.spec.reader import read_file, read_raw, read_text
from procgen.terms import catalogue
from tests.spec.small import CATALOGUE, HEAD, LAWS
from tests.spec.strategies import as_yaml, entries, specs, wild
from tests.spec.test_spec import WHOLE

BOUND = timedelta(seconds=10)
any_time = settings(deadline=BOUND, max_examples=60, suppress_health_check=list(HealthCheck), derandomize=True)


def outcome(read, *arguments):
    """Return the Spec, or None after checking that its error can be printed and has places."""
    try:
        spec = read(*arguments)
    except SpecError as error:
        assert error.faults
        for fault in error.faults:
            assert fault.message and str(fault).encode("utf-8")
        return None
    assert isinstance(spec, Spec)
    hash(spec)
    again = read_raw(json.loads(json.dumps(spec.raw)), CATALOGUE, LAWS)
    assert again == spec and again.digest() == spec.digest()
    return spec


@any_time
@given(st.text(max_size=200) | st.text("[]{}:,-&*!|>'\"%@`#?~ \n\t\\abx019.", max_size=80))
def test_any_text(text):
    outcome(read_text, text, CATALOGUE, LAWS)


@any_time
@given(st.binary(max_size=200))
def test_any_file(tmp_path_factory, data):
    path = tmp_path_factory.mktemp("any") / "a.yaml"
    path.write_bytes(data)
    outcome(read_file, path, CATALOGUE, LAWS)


@any_time
@given(st.data())
def test_a_spec_with_a_slip(data):
    text = WHOLE
    for _ in range(data.draw(st.integers(1, 4))):
        at = data.draw(st.integers(0, len(text)))
        cut = data.draw(st.integers(0, 12))
        put = data.draw(
            st.sampled_from(["", " ", "\n", "\t", ":", "- ", "{", "]", "*noise", "-1", "x", "'", "&a", "~"])
        )
        text = text[:at] + put + text[at + cut :]
    outcome(read_text, text, CATALOGUE, LAWS)


@any_time
@given(st.data())
def test_any_structure(data):
    inner = wild(CATALOGUE, LAWS)
    raw = {"procgen": 1, "seed": 7, "paths": 3, "time": {"steps": 9}, "series": {"x": {"constant": 1}}}
    for key in data.draw(st.sets(st.sampled_from(["seed", "time", "series", "shared", "correlation", "title"]))):
        raw[key] = data.draw(inner)
    raw = data.draw(inner) if data.draw(st.booleans()) else raw
    assert (outcome(read_raw, raw, CATALOGUE, LAWS) is None) == (
        outcome(read_text, as_yaml(raw), CATALOGUE, LAWS) is None
    )


@any_time
@given(specs(entries(CATALOGUE, LAWS) | st.lists(entries(CATALOGUE, LAWS), min_size=1, max_size=3)))
def test_near_specs(raw):
    outcome(read_raw, raw, CATALOGUE, LAWS)


SIZE = 300_000
PARTS = {
    "series": "  s{}: {{white_noise: {{sd: 1}}}}\n",
    "misspelt": "  s{}: {{white_nose: {{sd: 1}}}}\n",
    "uses": "  s{}: {{use: s{}}}\n",
    "broken": "  s{}: {{a\n",
}
ODD = ["[", "{a", "- a\n", "? - ", "a:\n ", "&a *a, ", "'", "!", "\n", "'x' ", "%", "# ", "a: b: ", "\u2028"]


@pytest.mark.parametrize("part", PARTS)
def test_a_large_spec_takes_bounded_time(part):
    lines = [PARTS[part].format(i, i + 1) for i in range(SIZE // len(PARTS[part]))]
    timed(HEAD + "series:\n" + "".join(lines))


@pytest.mark.parametrize("part", ODD)
def test_a_large_text_takes_bounded_time(part):
    timed((part * (SIZE // len(part)))[:SIZE])


@pytest.mark.parametrize("text", ["%YAML " + "9" * 10**5 + ".1\n---\n", HEAD.replace("7", "9" * 10**5)], ids=range(2))
def test_a_large_number_takes_bounded_time(text):
    timed(text)


def timed(text):
    """Check that reading takes seconds, not minutes: the slowest of these takes 3 on an idle core."""
    begin = time.process_time()
    with contextlib.suppress(SpecError):
        read_text(text, CATALOGUE, LAWS)
    assert time.process_time() - begin < 10.0


JUNK = [None, True, 3, "x", [], {}, [1], [[]], {"x": 1}, {"of": 3}, {"of": []}, {"value": 1, "per": "day"}]


@pytest.mark.parametrize("kind", catalogue())
def test_what_no_term_takes_is_a_fault_of_every_term(kind):
    for junk in JUNK:
        data = {"seed": 1, "paths": 2, "time": {"steps": 3}, "series": {"x": [{kind: junk}]}}
        with contextlib.suppress(SpecError):
            read_raw(data, catalogue(), laws.LAWS)
