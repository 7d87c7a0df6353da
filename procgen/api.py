"""The one call that needs every room below: a file becomes a checked spec."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from procgen.spec.model import Spec


def load(spec: str | Path | Mapping[str, Any] | Spec) -> Spec:
    """The checked spec of a YAML file, or of a mapping in the spec language.

    Raises SpecError with every fault and its place, also when the file cannot be read; TypeError for anything else.
    """
    from procgen.terms.given import spec_of

    return spec_of(spec)
