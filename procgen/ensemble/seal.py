"""What a manifest says of itself: a digest of every field, and whether the fields mean one and the same ensemble."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator, Mapping
from typing import TYPE_CHECKING, Any

from procgen.chance.streams import STREAM_VERSION
from procgen.ensemble.columns import as_kept
from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.source import FACTORY, open_source

if TYPE_CHECKING:
    from procgen.ensemble.manifest import Manifest

SEAL = "seal"
SHORT = 16  # hex digits a field: they only say which one was changed


def seal(data: Mapping[str, Any]) -> dict[str, Any]:
    """A digest of the whole manifest but its seal, and a short one of every field by its dotted name."""
    whole = {key: value for key, value in data.items() if key != SEAL}
    return {"digest": _hash(whole), "fields": {name: _hash(value)[:SHORT] for name, value in _fields(whole)}}


def changed(data: Mapping[str, Any]) -> tuple[str, ...]:
    """Names of the fields that are not what was written; () when the manifest is as it was."""
    stated, found = data.get(SEAL), seal(data)
    if stated == found:
        return ()
    fields = stated.get("fields") if isinstance(stated, Mapping) else None
    if not isinstance(fields, Mapping):
        return (SEAL,)
    names = [*found["fields"], *(name for name in fields if name not in found["fields"])]
    return tuple(name for name in names if fields.get(name) != found["fields"].get(name)) or (SEAL,)


def _fields(data: Mapping[str, Any]) -> Iterator[tuple[str, Any]]:
    for key, value in data.items():
        if isinstance(value, Mapping):
            yield from ((f"{key}.{name}", inner) for name, inner in value.items())
        else:
            yield key, value


def _hash(value: Any) -> str:
    text = json.dumps(value, sort_keys=True, ensure_ascii=False, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()


def contradictions(manifest: Manifest, factory: str = FACTORY) -> list[str]:
    """Sentences on what cannot be true at once in a manifest: its spec, its identity, its ranges, its columns."""
    identity, whole = manifest.identity, manifest.whole
    found = [
        f"identity.{name} is {identity.get(name)}, and {name} is {value}"
        for name, value in (("first_path", whole.first_path), ("paths", whole.paths), ("steps", whole.steps))
        if identity.get(name) != value
    ]
    try:
        source = open_source(manifest.raw, identity.get("reveal", ()), factory)
    except (ValueError, TypeError) as error:
        return [*found, f"the spec in it cannot be read: {str(error).partition(chr(10))[0]}"]
    spec = source.spec  # type: ignore[attr-defined]
    if spec.digest() != identity.get("spec"):
        found.append("the spec in it is not the one that was drawn: its digest is not identity.spec")
    if _hash(spec.canonical()) != _hash(dict(manifest.canonical)):
        found.append("spec.canonical is not what spec.raw means")
    if spec.seed != identity.get("seed"):
        found.append(f"identity.seed is {identity.get('seed')}, and the seed of its spec is {spec.seed}")
    if as_kept(source.columns, {column.name: column.type for column in manifest.columns}) != [*manifest.columns]:
        found.append("its columns are not those of its spec")
    return found


def other_than_part(identity: Mapping[str, Any], part: Mapping[str, Any]) -> list[str]:
    """Sentences on what a part says of itself and the manifest says otherwise."""
    if not isinstance(part, Mapping):
        return ["the part does not say what it is of"]
    names = [*identity, *(name for name in part if name not in identity and name != "part")]
    return [
        f"identity.{name} is {identity.get(name)}, and {part.get(name)} in the part"
        for name in names
        if identity.get(name) != part.get(name)
    ]


def refuse_version(identity: Mapping[str, Any], where: object) -> None:
    """EnsembleError when the draws are those of another stream version."""
    version = identity.get("stream_version")
    if version != STREAM_VERSION:
        raise EnsembleError(
            f"{where} was drawn with stream version {version}, and this procgen draws version {STREAM_VERSION}; "
            "use the procgen that made it, or draw it again with --overwrite (overwrite=True)"
        )


def refuse_changed(manifest: Manifest, where: object) -> None:
    """EnsembleError when the manifest is not as it was written."""
    if manifest.changed:
        raise EnsembleError(
            f"{where} was changed after it was written ({', '.join(manifest.changed)}); "
            "render again with --resume (resume=True), which writes it anew"
        )
