"""The ensemble on disk or in memory: plan, parts, engines, store, manifest, digests.

`render`, `open_ensemble`, `check_digest`, `Ensemble` and `EnsembleError` are the names for other rooms; they
are imported when they are first used.
"""

from __future__ import annotations

import importlib
from typing import Any

_HOMES = {
    "render": "job",
    "open_ensemble": "ensemble",
    "Ensemble": "ensemble",
    "check_digest": "check",
    "DigestResult": "check",
    "EnsembleError": "errors",
}


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(f"{__name__}.{_HOMES[name]}"), name)
