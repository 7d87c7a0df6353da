"""The validator: does an ensemble have the exact behaviour that its spec states?

`validate` and `Verdict` are the names for other rooms; they are imported when they are first used.
"""

from __future__ import annotations

import importlib
from typing import Any

_HOMES = {"validate": "validate", "Verdict": "verdict", "Check": "verdict", "holm": "verdict"}


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(f"{__name__}.{_HOMES[name]}"), name)
