"""The ensemble on disk or in memory: plan, parts, engines, store, manifest, digests.

`render`, `open_ensemble`, `check_digest`, `Ensemble` and `EnsembleError` are the names for other rooms; they
are imported when they are first used.

- Drawing: `job` asks what is there already (`present`), cuts (`plan`), and hands chains of parts to an engine; a `part`
  is drawn (`source`, `draw`), stored (`columns`), digested (`digest`) and written in one pass.
- Engines: `engines` (this process and `worker` processes, `forked` where that is safe; `own` says whose process it is)
  and `cluster` (Dask).
- Files: `places` and `store` (OUT, whole or not at all), `layouts`, `forms` (rows of a file), `files` and `parquet`;
  read again with `reading`, `plain` (plain numbers), `again` (columns that repeat) and `watched` (behind a URL).
- What is said of it: `manifest` and its `seal`, `revealed` (drawn parameters), `errors`.
- Reading: `ensemble`, its `shapes`; for other tools `export`, `choice`, `targets`, `clock`.
- Comparing: `check` (are these the values that were drawn), `expected`, `beside` (two of them).
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
