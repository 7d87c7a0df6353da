"""Every broken spec that the tests of the reader hold, in one place: their texts, from the tests themselves."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

from tests.spec import test_correlated, test_entries, test_groups, test_links, test_parameters, test_spec, test_variants
from tests.spec.small import HEAD
from tests.spec.test_links import series

FILE = Path(__file__).parents[2] / "demo" / "fault.yaml"
WRITTEN = "seed: 7\npaths: 10\ntime: {steps: 50}\nparameters: {k: {draw: {uniform: [0.3, 0.9]}, over: path}}\n"


def _body(text: str) -> str:
    return f"{HEAD}series:\n  x: {text}\n"


def _correlation(text: str) -> str:
    return HEAD + test_correlated.BODIES + f"correlation: {text}\n"


def _used(name: str) -> str:
    shared = "shared: {w: [{garch: {sd: 1, alpha: 0.1}, as: swing}, {constant: 1}]}\n"
    return HEAD + shared + f"series:\n  x: {{use: {name}}}\n"


def _renamed(body: str, name: str) -> str:
    return HEAD + f"shared:\n  w: {body}\n  z: {{constant: 1}}\nseries:\n  x: {{use: {name}}}\n"


# How each test makes a whole spec of what it is parametrised by.
WHOLE: tuple[tuple[Callable[..., None], Callable[..., str]], ...] = (
    (test_spec.test_faults, lambda text: text),
    (test_spec.test_faults_of_time, test_spec.timed),
    (test_entries.test_faults, _body),
    (test_correlated.test_faults, _correlation),
    (test_correlated.test_more_faults, _correlation),
    (
        test_correlated.test_copulas_that_are_none,
        lambda copula: _correlation(f"{{between: [a.white_noise, b.swing], value: 0.3, copula: {copula}}}"),
    ),
    (test_links.test_labels_stand_once, series),
    (test_links.test_uses_of_what_is_not_there, _used),
    (test_links.test_what_goes_by_another_name_is_said, _renamed),
    (test_links.test_circles_are_refused, series),
    (
        test_links.test_streams_stand_once,
        lambda text: series(text).replace("series:", "shared: {s: {constant: 1}}\nseries:"),
    ),
    (test_parameters.test_faults, lambda entry: f"{WRITTEN}series: {{x: [{entry}]}}\n"),
    (test_groups.test_faults, lambda old, new: test_groups.TEXT.replace(old, new)),
    (
        test_variants.test_what_is_wrong_in_a_variant_is_said_with_its_line,
        lambda setting: f"{test_variants.SPEC}variants:\n  worse:\n    {setting}\n",
    ),
    (
        test_variants.test_a_value_is_judged_as_in_the_file,
        lambda written, wrong: test_variants.SPEC.replace(written, wrong),
    ),
    (test_variants.test_faults_of_the_section, lambda text: f"{test_variants.SPEC}{text}\n"),
)


def broken() -> Iterator[tuple[str, str]]:
    """The name and the text of each."""
    yield "demo/fault.yaml", FILE.read_text(encoding="utf-8")
    for test, whole in WHOLE:
        asked = whole.__code__.co_argcount
        for k, values in enumerate(_parametrised(test)):
            yield f"{test.__module__.rpartition('.')[2]}.{test.__name__}[{k}]", whole(*values[:asked])


def _parametrised(test: Any) -> Iterator[tuple[Any, ...]]:
    (mark,) = [mark for mark in test.pytestmark if mark.name == "parametrize"]
    return iter(mark.args[1])
