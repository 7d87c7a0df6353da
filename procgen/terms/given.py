"""A spec however it is given: read already, as a file, or as a mapping."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from procgen.spec.model import Spec


def spec_of(given: Any) -> Spec:
    """The checked spec of a YAML file, of a mapping in the spec language, or the Spec that was given.

    Raises SpecError with every fault and its place, TypeError for anything else.
    """
    from procgen.chance.laws import LAWS
    from procgen.spec.reader import read_file, read_raw
    from procgen.terms import catalogue

    if isinstance(given, Spec):
        return given
    if isinstance(given, str | Path):
        return read_file(given, catalogue(), LAWS)
    if isinstance(given, Mapping):
        return read_raw(dict(given), catalogue(), LAWS)
    kind = type(given).__name__
    raise TypeError(f"expected a Spec, the path of a YAML file, or a mapping in the spec language, got {kind}")
