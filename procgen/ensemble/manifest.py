"""The manifest of an ensemble: what was asked for, what made it, which parts there are, and their digests."""

from __future__ import annotations

import hashlib
import json
import math
import platform
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict, field
from typing import Any

from procgen.ensemble import digest
from procgen.ensemble import seal as seals
from procgen.ensemble.columns import TYPES, Column
from procgen.ensemble.errors import Damaged
from procgen.ensemble.layouts import Layout
from procgen.ensemble.plan import Block
from procgen.spec.records import dataclass
from procgen.spec.tree import NAME, show_scalar

FORMAT = 1


@dataclass(frozen=True)
class PartRecord:
    """One part: its name, what it covers, its size, and one hash over the digest nodes of its values.

    The name is that of its file, or the end of the names of its files where a file holds one series.
    """

    file: str
    block: Block
    bytes: int
    node: str

    def json(self) -> dict[str, Any]:
        return {
            "file": self.file,
            **asdict(self.block),
            "rows": self.block.rows,
            "bytes": self.bytes,
            "node": self.node,
        }


@dataclass(frozen=True)
class Manifest:
    """What `OUT/manifest.json` says.

    `identity` names what was drawn (spec digest, seed, ranges, stream version, layout, revealed outputs);
    `stored` and `drawn` are the digests by series, and `digest` is the ensemble's, over stored values.
    """

    identity: Mapping[str, Any]
    raw: Mapping[str, Any]
    canonical: Mapping[str, Any]
    whole: Block
    columns: tuple[Column, ...]
    time: Mapping[str, Any] | None
    parts: tuple[PartRecord, ...]
    stored: Mapping[str, str]
    drawn: Mapping[str, str]
    revealed: Mapping[str, str] = field(default_factory=dict)
    portable: bool = True
    why_not_portable: str = ""
    versions: Mapping[str, str] = field(default_factory=dict)
    changed: tuple[str, ...] = ()  # fields that are not what was written

    @property
    def layout(self) -> Layout:
        return Layout.of(self.identity)

    @property
    def digest(self) -> str:
        return digest.total(self.stored)

    @property
    def digest_drawn(self) -> str:
        return digest.total(self.drawn)

    def json(self) -> dict[str, Any]:
        """The manifest as it is written."""
        data = self._fields()
        return {**data, seals.SEAL: seals.seal(data)}

    def _fields(self) -> dict[str, Any]:
        return {
            "procgen": FORMAT,
            "digest": self.digest,
            "identity": dict(self.identity),
            "paths": self.whole.paths,
            "first_path": self.whole.first_path,
            "steps": self.whole.steps,
            "columns": [column.json() for column in self.columns],
            "time": self.time,
            "digests": {
                "stored": {"ensemble": self.digest, "series": dict(self.stored)},
                "drawn": {"ensemble": self.digest_drawn, "series": dict(self.drawn)},
                "revealed": dict(self.revealed),
            },
            "portable": self.portable,
            "why_not_portable": self.why_not_portable,
            "versions": dict(self.versions),
            "spec": {"raw": dict(self.raw), "canonical": dict(self.canonical)},
            "parts": [part.json() for part in self.parts],
        }

    @classmethod
    def read(cls, data: Mapping[str, Any], where: str) -> Manifest:
        """The manifest from its JSON; EnsembleError when it is not one, or its parts are not its ranges.

        One that can be read, and is not as it was written, says so in `changed`.
        """
        try:
            if data["procgen"] != FORMAT:
                raise ValueError(f"its format is {data['procgen']!r}, this version reads {FORMAT}")
            whole = Block(_whole(data["first_path"]), _whole(data["paths"], 1), 0, _whole(data["steps"], 1))
            manifest = cls(
                identity=dict(data["identity"]),
                raw=dict(data["spec"]["raw"]),
                canonical=dict(data["spec"]["canonical"]),
                whole=whole,
                columns=tuple(_column(item) for item in data["columns"]),
                time=data["time"] and dict(data["time"]),
                parts=tuple(_part(item, whole) for item in data["parts"]),
                stored=_roots(data["digests"]["stored"]["series"]),
                drawn=_roots(data["digests"]["drawn"]["series"]),
                revealed=_roots(data["digests"]["revealed"]),
                portable=bool(data["portable"]),
                why_not_portable=str(data["why_not_portable"]),
                versions=dict(data["versions"]),
                changed=seals.changed(data),
            )
            _ = manifest.layout
            if not all(isinstance(name, str) for name in manifest.identity.get("reveal", ())):
                raise ValueError("what it reveals is not a list of names")
            covers([part.block for part in manifest.parts], whole)
            if set(manifest.stored) | set(manifest.revealed) != {column.name for column in manifest.columns}:
                raise ValueError("its digests and its columns name different series")
        except (KeyError, TypeError, AttributeError, ValueError) as error:
            reason = f"{error} is missing" if isinstance(error, KeyError) else error
            raise Damaged(f"{where} is not a manifest of procgen, or is damaged: {reason}") from None
        return manifest


def _whole(value: Any, least: int = 0) -> int:
    if type(value) is not int or not least <= value < 2**62:
        raise ValueError(f"expected a whole number of at least {least}, got {value!r}")
    return value


def _column(item: Mapping[str, Any]) -> Column:
    column = Column(**item)
    named = isinstance(column.name, str) and all(NAME.fullmatch(part) for part in column.name.split("."))  # no path
    told = isinstance(column.decimals, int | None) and isinstance(column.unit, str | None)
    if not (named and told) or column.type not in TYPES:
        raise ValueError(f"a column is {show_scalar(str(item))}")
    return column


def _part(item: Mapping[str, Any], whole: Block) -> PartRecord:
    ranges = [_whole(item[key]) for key in ("first_path", "paths", "first_step", "steps")]
    part = PartRecord(str(item["file"]), Block(*ranges), _whole(item["bytes"]), str(item["node"]))
    if part.file != part.block.file(whole):
        raise ValueError(f"a part is named {part.file!r}, expected {part.block.file(whole)!r}")
    return part


def _roots(data: Mapping[str, Any]) -> dict[str, str]:
    for name, text in data.items():
        if not isinstance(text, str) or len(text) != 64:
            raise ValueError(f"the digest of {name} is {text!r}, expected 64 hex digits")
    return dict(data)


def covers(parts: Sequence[Block], whole: Block) -> None:
    """ValueError unless the parts, chain by chain, are exactly `whole`."""
    path, step = whole.first_path, 0
    end = path
    for block in parts:
        if step == 0:
            end = block.end_path
        if (block.first_path, block.end_path, block.first_step) != (path, end, step) or block.rows == 0:
            raise ValueError(f"its parts leave a gap or overlap at {block}")
        step = block.end_step
        if step == whole.steps:
            path, step = end, 0
    if (path, step) != (whole.end_path, 0):
        raise ValueError(f"its parts do not cover paths {whole.first_path} to {whole.end_path - 1}")


def node(stored: Mapping[str, str]) -> str:
    """One hash over the digest nodes (hex, by column) of a part's stored values."""
    text = json.dumps(stored, sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()


def part_record(record: Mapping[str, Any], whole: Block) -> PartRecord:
    """The manifest's line about a part, from what `render_chain` returned."""
    block = Block(**record["part"])
    return PartRecord(block.file(whole), block, record["bytes"], node(record["nodes"]["stored"]))


def roots(records: Iterable[Mapping[str, Any]], whole: Block, kind: str, names: Iterable[str]) -> dict[str, str]:
    """Digests by column from the nodes of all parts; `kind` is "stored", or "drawn" where it differs."""
    records = list(records)
    blocks = [Block(**record["part"]) for record in records]
    found = {}
    for name in names:
        texts = [record["nodes"][kind].get(name) or record["nodes"]["stored"][name] for record in records]
        parts = [(b, digest.unpack(text, b, whole)) for b, text in zip(blocks, texts, strict=True)]
        found[name] = digest.root(parts, whole)
    return found


def versions() -> dict[str, str]:
    """What made an ensemble: for the reader of a manifest; no value depends on it where `portable` is true."""
    import numpy
    import pyarrow

    import procgen

    found = {"python": platform.python_version(), "machine": platform.machine(), "tzdata": tz_version()}
    return found | {package.__name__: package.__version__ for package in (procgen, numpy, pyarrow)}


def tz_version() -> str:
    """Edition of the time zone database in use, such as 2026a, or "unknown"."""
    import zoneinfo
    from pathlib import Path

    for folder in zoneinfo.TZPATH:
        for name, pick in (
            ("tzdata.zi", lambda text: text.split("\n", 1)[0].rpartition(" ")[2]),
            ("+VERSION", str.strip),
        ):
            file = Path(folder) / name
            if file.is_file():
                return pick(file.read_text(encoding="utf-8", errors="replace"))
    try:
        import tzdata
    except ImportError:
        return "unknown"
    return tzdata.IANA_VERSION


def bytes_text(count: float) -> str:
    """A size such as "1.5 GB"."""
    power = min(int(math.log(max(count, 1), 1000)), 5)
    return f"{count / 1000**power:.3g} {['B', 'kB', 'MB', 'GB', 'TB', 'PB'][power]}"
