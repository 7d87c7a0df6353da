"""The one call that needs every room below: a file becomes a checked spec."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from procgen.spec.model import Spec


def load(path: str | Path) -> Spec:
    """The checked spec of a YAML file.

    Raises SpecError with every fault and its place, also when the file cannot be read.
    """
    from procgen.chance.laws import LAWS
    from procgen.spec.reader import read_file
    from procgen.terms import catalogue

    return read_file(path, catalogue(), LAWS)
