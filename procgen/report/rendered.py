"""What `render` and `validate --json` print at their end."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from procgen.checks.verdict import Verdict
    from procgen.ensemble.ensemble import OnDisk


def rendered(ensemble: OnDisk) -> str:
    """Where the ensemble is, how much of it there is, and its digest."""
    from procgen.checks.words import many
    from procgen.ensemble.manifest import bytes_text

    manifest, whole, parts = ensemble.manifest, ensemble.whole, ensemble.manifest.parts
    size = bytes_text(sum(part.bytes for part in parts))
    count = sum(len(manifest.layout.files(part.file, manifest.columns)) for part in parts)
    lines = [
        f"{ensemble.path}: {many(whole.paths, 'path')} × {many(whole.steps, 'step')} of {', '.join(ensemble.names)}",
        f"{'1 file' if count == 1 else f'{count} files'}, {size}, and manifest.json",
        f"digest {ensemble.digest}",
    ]
    if not manifest.layout.streams:
        lines.insert(2, manifest.layout.sentence(manifest.time is not None))
    if not ensemble.manifest.portable:
        lines.append(f"not the same bits on every machine: {ensemble.manifest.why_not_portable}")
    return "\n".join(lines)


def verdict_json(verdict: Verdict) -> str:
    """A verdict and all its checks as JSON."""
    return json.dumps(verdict.to_dict(), ensure_ascii=False)
