"""An ensemble against the one that was expected: are the values the same, where not, and what may have moved them.

What is expected is a digest, or an old manifest. Of an old manifest the values are known as well: from the files that
stand beside it, or else drawn again from its spec.
"""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

from procgen.ensemble.beside import First, Redrawn, Tick, common, earliest, firsts
from procgen.ensemble.ensemble import Ensemble, open_ensemble
from procgen.ensemble.errors import EnsembleError, Refused
from procgen.ensemble.manifest import Manifest
from procgen.ensemble.places import Place, place_of
from procgen.ensemble.seal import refuse_changed, refuse_version
from procgen.ensemble.source import read_spec
from procgen.ensemble.store import MANIFEST, Folder
from procgen.spec.meaning import changes
from procgen.spec.records import dataclass
from procgen.terms.recipe import recipes

HEX = re.compile("[0-9a-fA-F]{64}")
MOST = 12  # changes that are listed


@dataclass(frozen=True)
class Expected:
    """A digest, and the old manifest that it is of where there is one."""

    digest: str
    manifest: Manifest | None = None
    file: Place | None = None

    def old(self) -> Ensemble:
        """The old ensemble: its files where they still are as they were, else drawn again."""
        assert self.manifest is not None and self.file is not None
        try:
            found = open_ensemble(self.file.parent)
            if self.file.name == MANIFEST and found.digest == self.digest:
                return found
        except Refused:
            raise
        except EnsembleError:
            pass
        return Redrawn(read_spec(self.manifest.raw), self.manifest.whole)


def expected(given: str | Path) -> Expected:
    """What is expected, read at once: 64 hex digits, an old manifest, or the folder of an old ensemble.

    Raises EnsembleError when it is none of these, or when the manifest was changed.
    """
    text = str(given).strip()
    if HEX.fullmatch(text):
        return Expected(text.lower())
    path = place_of(given)
    file = path / MANIFEST if path.is_dir() else path
    if not file.is_file():
        raise EnsembleError(
            f"expected a digest of 64 hex digits, an old manifest.json, or the folder of an ensemble, got {text!r}"
        )
    manifest = Manifest.read(Folder(file.parent).read_json(file.name) or {}, str(file))
    refuse_changed(manifest, file)
    refuse_version(manifest.identity, file)
    return Expected(manifest.digest, manifest, file)


def departure(ensemble: Any, wanted: Expected, progress: Tick | None = None) -> str:
    """In a few lines why an ensemble has not the digest that was expected; "" when it has."""
    if ensemble.digest == wanted.digest:
        return ""
    lines = [f"expected {wanted.digest}: other values"]
    if wanted.manifest is None:
        return "\n".join([*lines, "to see where they differ: give the old manifest.json instead of its digest"])
    return "\n".join([*lines, *_explained(ensemble, wanted, wanted.manifest, progress)])


def _explained(new: Any, wanted: Expected, manifest: Manifest, progress: Tick | None) -> list[str]:
    before = read_spec(manifest.raw)
    found = [f"  {change}" for change in changes(before, new.spec)]
    lines = ["the spec differs at", *found[:MOST]] if found else ["the spec means the same"]
    if len(found) > MOST:
        lines.append(f"  and {len(found) - MOST} more; procgen difference lists them all")
    old = wanted.old()
    old_names, new_names = ([c.name for c in one.columns if not c.revealed] for one in (old, new))
    lines += [f"series {name}: gone" for name in old_names if name not in new_names]
    lines += [f"series {name}: new" for name in new_names if name not in old_names]
    whole = common(old.whole, new.whole)
    if whole is None:
        return [*lines, f"no path is in both: expected {old.whole}, got {new.whole}"]
    if old.whole != new.whole:
        lines.append(f"expected {old.whole}, got {new.whole}; compared where both are")
    names = _suspects(manifest, new, [name for name in new_names if name in old_names], old.whole == new.whole)
    first = earliest(firsts(old, new, whole, names, progress)) if names else None
    if first is not None:
        return [*lines, *_first(first, before, new.spec)]
    if names and isinstance(old, Redrawn) and old.whole == new.whole:
        made = ", ".join(f"{name} {version}" for name, version in manifest.versions.items())
        lines.append(f"drawn again, the old spec gives today's values: the old ones were made otherwise ({made})")
    elif names:
        lines.append("where both are, all values are equal")
    elif len(old_names) != len(new_names):
        lines.append("the series that are in both are equal")
    return lines


def _suspects(manifest: Manifest, new: Any, names: list[str], alike: bool) -> list[str]:
    """The series whose digests differ; all where digests are of other ranges."""
    if not alike:
        return names
    return [name for name in names if manifest.stored[name] != new.manifest.stored[name]]


def _first(first: First, before: Any, after: Any) -> list[str]:
    lines = [
        f"first difference: series {first.series}, path {first.path}, step {first.step}: "
        f"expected {first.a!r}, got {first.b!r}"
    ]
    moved = recipes(after)[first.series].moved_from(recipes(before)[first.series])
    if moved:
        return [*lines, f"what may have moved it: {', '.join(moved)}"]
    return [*lines, "no term of it differs: the values were changed, or made by other code"]
