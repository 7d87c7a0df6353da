"""Nothing is printed that was derived only once: every kind of term and every law has a second derivation in the tests.

A test module says which by `DERIVED = {kind or law: the name of its test}`, beside the tests themselves. Such a test
finds the numbers of theory again by code that shares nothing with it.
"""

from __future__ import annotations

import importlib
from pathlib import Path

import pytest

from procgen.chance.laws import LAWS
from procgen.terms import catalogue

TESTS = Path(__file__).parents[1]


def declared() -> list[tuple[str, str, str, bool]]:
    """What is derived, in which module, by which test, and whether there is such a test."""
    found = []
    for path in sorted(TESTS.rglob("test_*.py")):
        if path != Path(__file__) and "\nDERIVED = " in path.read_text():
            name = ".".join(path.relative_to(TESTS.parent).with_suffix("").parts)
            module = importlib.import_module(name)
            exists = {test: callable(getattr(module, test, None)) for test in module.DERIVED.values()}
            found += [(kind, name, test, exists[test]) for kind, test in module.DERIVED.items()]
    return found


@pytest.mark.parametrize("registry", [catalogue, lambda: LAWS], ids=["terms", "laws"])
def test_every_term_and_law_is_derived_again(registry):
    missing = sorted(set(registry()) - {kind for kind, *_ in declared()})
    assert not missing, f"expected a second derivation of {', '.join(missing)}; name its test in DERIVED beside it"


def test_what_is_named_exists():
    """No test that was renamed, and no kind that is gone."""
    known = {*catalogue(), *LAWS}
    assert all(exists for *_, exists in declared()), [row for row in declared() if not row[3]]
    assert {kind for kind, *_ in declared()} <= known, sorted({kind for kind, *_ in declared()} - known)
    assert len({test for *_, test, _ in declared()}) > 20  # and not one test that is said to do it all
