"""What `render` and `validate --json` print at their end."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from procgen.checks.verdict import Verdict
    from procgen.ensemble.ensemble import OnDisk


def rendered(ensemble: OnDisk) -> str:
    """Where the ensemble is, how much of it there is, and its digest."""
    from procgen.ensemble.manifest import bytes_text

    whole, parts = ensemble.whole, ensemble.manifest.parts
    size = bytes_text(sum(part.bytes for part in parts))
    files = "1 file" if len(parts) == 1 else f"{len(parts)} files"
    lines = [
        f"{ensemble.path}: {whole.paths:,} paths × {whole.steps:,} steps of {', '.join(ensemble.names)}",
        f"{files}, {size}, and manifest.json",
        f"digest {ensemble.digest}",
    ]
    if not ensemble.manifest.portable:
        lines.append(f"not the same bits on every machine: {ensemble.manifest.why_not_portable}")
    return "\n".join(lines)


def verdict_json(verdict: Verdict) -> str:
    """A verdict and all its checks as JSON."""
    return json.dumps(verdict.to_dict(), ensure_ascii=False)
