"""Hostile files for `hostile.py`: good ones with a change that a stranger might have made, drawn by seed."""

from __future__ import annotations

import copy
import gzip
import io
import json
import random
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from procgen.ensemble.seal import SEAL, seal

TRAP = "secret"  # a file beside what may be read: no message may tell what is in it
TEXTS = (
    "../secret.csv", "../../etc/passwd", "/dev/zero", "/dev/stdin", "C:\\x.csv",
    "a\0b", "\x1b[2J\x1b]0;x\x07", "\u202ecsv",
    "<script>alert(1)</script>", "{task.id}", "%s%n", "[red]x[/red]", "x" * 5000, "\ud800", "", " ", "é́", "=1+2",
    "!!python/object/apply:os.system ['touch x']", "\u2028", "\x9b31m", "nan", "1e999", "9" * 5000,
)  # fmt: skip
NUMBERS = (
    0, -1, 1, 2, 16, 1023, 65_537, 2**31, 2**53, 2**61, 2**62, 2**63, 2**64, 10**18, 10**400, -(2**63), 0.5, 1e308,
    -1e308, 5e-324, float("nan"), float("inf"), 1e18, True, None,
)  # fmt: skip
WORDS = (
    "*a", "&a ", "<<: *a", "!!x ", "[", "{", "]", "}", ": ", "- ", "\n", "\t", "'", '"', "|\n", "#",
    "%YAML 1.1\n---\n", 
    "---\n", "~", ".inf", ".nan", "0x" + "f" * 390, "1e308", "9" * 399, "10000000000000000000", "per: day", "of: ",
    "use: x",
    "draw: ", "parameters:\n  p: 1\n",
    "{from_table: {file: ../secret.csv, key: path}}", "{file: /dev/zero, column: x, step: step}",
    "\x1b[31m", "\u202e", "steps: 1000000000000", "lag: 1000000000", "period: 1e18", "phi: [1, 2, 3]",
    "harmonics: 999999",
)  # fmt: skip
OTHER_TYPES = (
    pa.string(), pa.int8(), pa.uint64(), pa.float16(), pa.float32(), pa.bool_(), pa.binary(), pa.date32(),
    pa.timestamp("s"),
    pa.timestamp("ns", "Europe/Oslo"), pa.duration("us"), pa.decimal128(20, 3), pa.list_(pa.float64()), pa.null(),
    pa.struct([("x", pa.float64())]), pa.map_(pa.string(), pa.int64()), pa.dictionary(pa.int32(), pa.string()),
    pa.large_string(), pa.list_(pa.float64(), 3), pa.time64("us"), pa.list_(pa.list_(pa.int64())),
)  # fmt: skip


def struck(data: bytes, chance: random.Random, other: bytes = b"") -> bytes:
    """Bytes with one to four changes: flips, runs of another byte, cuts, repeats, and pieces of another file."""
    out = bytearray(data)
    for _ in range(chance.choice((1, 1, 1, 2, 4))):
        at = chance.randrange(len(out) + 1)
        size = chance.choice((1, 1, 2, 4, 8, 64, 1000))
        match chance.randrange(7):
            case 0 if at < len(out):
                out[at] ^= 1 << chance.randrange(8)
            case 1:
                out[at : at + size] = bytes([chance.randrange(256)]) * len(out[at : at + size])
            case 2:
                del out[at:]
            case 3:
                del out[at : at + size]
            case 4:
                out[at:at] = out[at : at + size] * chance.choice((1, 2, 50))
            case 5 if other:
                begin = chance.randrange(len(other))
                out[at : at + size] = other[begin : begin + size]
            case _:
                out[at : at + 4] = chance.choice((b"\xff\xff\xff\x7f", b"\0\0\0\0", b"\xff" * 4, b"\x80\x80\x80\x80"))
    return bytes(out)


def spec_text(good: list[str], chance: random.Random) -> bytes:
    """The text of a spec with other words, lines, numbers or bytes."""
    lines = chance.choice(good).splitlines()
    for _ in range(chance.choice((1, 1, 2, 3, 8))):
        at = chance.randrange(len(lines))
        line = lines[at]
        match chance.randrange(8):
            case 0:
                lines[at] = line.replace(chance.choice((":", " ", "-", "1", "[")), chance.choice(WORDS), 1)
            case 1:
                cut = chance.randrange(len(line) + 1)
                lines[at] = line[:cut] + chance.choice(WORDS) + line[cut:]
            case 2:
                lines.insert(at, chance.choice(chance.choice(good).splitlines()))
            case 3:
                lines[at:at] = lines[at : at + chance.randrange(1, 9)] * chance.choice((1, 3, 200))
            case 4:
                head, colon, _ = line.rpartition(": ")
                value = chance.choice(
                    (str(chance.choice(NUMBERS)), json.dumps(chance.choice(TEXTS)), chance.choice(WORDS))
                )
                lines[at] = head + colon + value
            case 5:
                lines[at] = line.replace("[", "[" * chance.choice((1, 61, 3000)), 1)
            case 6:
                del lines[at : at + chance.randrange(1, 4)]
                lines = lines or [""]
            case _:
                lines[at] = line + " " + chance.choice(WORDS) * chance.choice((1, 2, 500))
    text = ("\n".join(lines) + "\n").encode("utf-8", "surrogatepass")
    return struck(text, chance, good[0].encode()) if chance.random() < 0.3 else text


def _places(data: Any, path: tuple = ()) -> Iterator[tuple]:
    items = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    for key, inner in items:
        yield (*path, key)
        yield from _places(inner, (*path, key))


def _at(data: Any, path: tuple) -> Any:
    for key in path:
        data = data[key]
    return data


def _hostile_value(old: Any, chance: random.Random) -> Any:
    return chance.choice(
        (
            chance.choice(NUMBERS), chance.choice(TEXTS), [], {}, [old] * 3, {"x": old}, [chance.choice(NUMBERS)],
            {chance.choice(TEXTS): old}, {"file": f"../{TRAP}.csv", "column": "x", "step": "step"},
            -old if type(old) is int else old, old * 10**9 if type(old) is int else old,
            str(old) + chance.choice(TEXTS),
        )
    )  # fmt: skip


def manifest(good: bytes, chance: random.Random) -> bytes:
    """A manifest with other bytes, or with other values somewhere; every second time with a seal that fits them."""
    if chance.random() < 0.2:
        return struck(good, chance)
    data = json.loads(good)
    for _ in range(chance.choice((1, 1, 2, 3))):
        inside = [path for path in _places(data) if path[0] != SEAL]
        if not inside:
            break
        *parent, key = chance.choice(inside)
        holder = _at(data, tuple(parent))
        if chance.random() < 0.15:
            del holder[key]
        elif isinstance(holder, dict) and chance.random() < 0.15:
            holder[chance.choice(TEXTS)] = copy.deepcopy(holder[key])
        else:
            holder[key] = _hostile_value(copy.deepcopy(holder[key]), chance)
    if chance.random() < 0.6:
        try:
            data = {**data, SEAL: seal(data)}
        except (ValueError, TypeError):
            pass
    text = json.dumps(data)
    return text.encode("utf-8", "surrogatepass")


def parquet(good: bytes, chance: random.Random) -> bytes:
    """A Parquet file with other bytes, a struck footer, or written again with other columns, types, rows or facts."""
    how = chance.randrange(6)
    if how < 2:
        return struck(good, chance)
    length = int.from_bytes(good[-8:-4], "little")
    if how == 2:  # in the footer, whose length stays right
        foot = struck(good[-8 - length : -8], chance)
        return good[: -8 - length] + foot + len(foot).to_bytes(4, "little") + b"PAR1"
    if how == 3:
        size = chance.choice((0, 1, 7, 2**31 - 1, 2**32 - 1, length * 2, len(good), chance.randrange(2**32)))
        return good[:-8] + size.to_bytes(4, "little") + b"PAR1"
    table = pq.read_table(io.BytesIO(good))
    for change in chance.sample(CHANGES, chance.choice((1, 1, 2))):
        table = change(table, chance)
    sink = io.BytesIO()
    pq.write_table(
        table,
        sink,
        compression=chance.choice(("none", "zstd", "snappy", "gzip", "brotli", "lz4")),
        row_group_size=chance.choice((1, 7, 1 << 20)) if table.num_rows < 3000 else 1 << 20,
        use_dictionary=chance.random() < 0.5,
        data_page_version=chance.choice(("1.0", "2.0")),
    )
    return sink.getvalue()


def _retyped(table: pa.Table, chance: random.Random) -> pa.Table:
    at = chance.randrange(table.num_columns)
    kind = chance.choice(OTHER_TYPES)
    try:
        column = table.column(at).cast(kind)
    except (pa.ArrowException, ValueError):
        column = pa.nulls(table.num_rows, kind)
    return table.set_column(at, table.column_names[at], column)


def _renamed(table: pa.Table, chance: random.Random) -> pa.Table:
    names = table.column_names
    names[chance.randrange(len(names))] = chance.choice((*names, *TEXTS)).encode("utf-8", "replace").decode()
    return table.rename_columns(names)


def _retold(table: pa.Table, chance: random.Random) -> pa.Table:
    facts = dict(table.schema.metadata or {b"procgen": b"{}"})
    key = chance.choice([*facts])
    value = chance.choice((b"", b"{}", b"[]", b"\xff", b"[" * 100_000, b"9" * 5000, b"null"))
    facts[key] = struck(facts[key], chance) if chance.random() < 0.5 else value
    return table.replace_schema_metadata(facts)


def _reordered(table: pa.Table, chance: random.Random) -> pa.Table:
    rows = [chance.randrange(table.num_rows) for _ in range(chance.choice((0, 1, table.num_rows, 2 * table.num_rows)))]
    return table.take(pa.array(rows, pa.int64()))


def _bloated(table: pa.Table, chance: random.Random) -> pa.Table:
    return pa.concat_tables([table.slice(0, 1)] * 1 + [table] * chance.choice((1, 3, 300)))


def _emptied(table: pa.Table, chance: random.Random) -> pa.Table:
    at = chance.randrange(table.num_columns)
    mask = np.array([chance.random() < 0.3 for _ in range(table.num_rows)], bool)
    column = pa.chunked_array([pa.array(table.column(at).to_pylist(), table.column(at).type, mask=mask)])
    return table.set_column(at, pa.field(table.column_names[at], column.type), column)


CHANGES: tuple[Callable[[pa.Table, random.Random], pa.Table], ...] = (
    _retyped, _renamed, _retold, _reordered, _bloated, _emptied,
)  # fmt: skip


def csv_text(good: bytes, chance: random.Random) -> bytes:
    """A CSV with other bytes or cells, or very long lines; now and then as gzip, itself struck."""
    lines = good.split(b"\n")
    for _ in range(chance.choice((0, 1, 2, 5))):
        at = chance.randrange(len(lines))
        cells = lines[at].split(b",")
        match chance.randrange(6):
            case 0:
                text = str(chance.choice((*NUMBERS, *TEXTS))).encode("utf-8", "surrogatepass")
                cells[chance.randrange(len(cells))] = text
            case 1:
                cells *= chance.choice((2, 10_000))
            case 2:
                cells[0] = b'"' + cells[0]
            case 3:
                cells[-1] = cells[-1] * chance.choice((2, 100_000))
            case 4:
                cells = cells[1:]
            case _:
                cells[chance.randrange(len(cells))] = chance.choice(
                    (b"\r", b"\0", b"\xff", b"1;2", b"\x1b[2J", b"'", b" ")
                )
        lines[at] = b",".join(cells)
    data = b"\n".join(lines)
    data = struck(data, chance) if chance.random() < 0.4 else data
    return data


def gzipped(data: bytes, chance: random.Random) -> bytes:
    """The data as gzip, every second time struck."""
    packed = gzip.compress(data, 1)
    return struck(packed, chance) if chance.random() < 0.5 else packed


def gallery(folder: Path) -> list[str]:
    """The texts of the small specs of the gallery."""
    texts = [path.read_text(encoding="utf-8") for path in sorted(folder.glob("*.yaml"))]
    return [text for text in texts if len(text) < 4000]
