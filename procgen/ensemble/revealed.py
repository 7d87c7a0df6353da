"""What was drawn beside the values: a table of the parameters of every path, and one of the series.

`OUT/tables/parameters.parquet` has a row a path: `path`, and each parameter drawn by path. `OUT/tables/series.parquet`
has a row a series: its group, its row in the group's table, and each parameter drawn by series. Both follow from the
spec alone; they stand in a folder of their own, so that a reader of all parts of OUT does not meet them.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from procgen.ensemble.errors import EnsembleError, system_sentence
from procgen.ensemble.parquet import IDENTITY
from procgen.ensemble.places import readable
from procgen.ensemble.plan import Block
from procgen.ensemble.store import Folder

if TYPE_CHECKING:
    import pyarrow as pa

FOLDER = "tables"
PATHS, SERIES = f"{FOLDER}/parameters.parquet", f"{FOLDER}/series.parquet"
ROWS = 1 << 20  # paths at a time


def path_table(varied: Any, first_path: int, paths: int) -> pa.Table | None:
    """The parameters of a range of paths, a row a path; None when none are drawn by path."""
    import pyarrow as pa

    if not varied.parameters:
        return None
    rows = varied.rows(first_path, paths)
    return pa.table({"path": np.arange(first_path, first_path + paths), **rows})


def series_table(varied: Any) -> pa.Table | None:
    """Group, attributes and parameters of every series, a row a series; None when no series has any."""
    import pyarrow as pa

    spec, drawn = varied.given, list(varied.by_series.values())
    if not drawn and not any(one.group for one in spec.series.values()):
        return None
    names = [*spec.series, *(p.owner for p in drawn if p.owner not in spec.series)]
    rows: dict[str, dict[str, Any]] = {name: {} for name in dict.fromkeys(names)}
    for name, one in spec.series.items():
        rows[name] = {"group": one.group} if one.group else {}
        rows[name] |= dict(one.attributes)
    for p in drawn:
        rows[p.owner][p.varying.name or p.varying.label] = varied.constants[p.name]
    columns = dict.fromkeys(column for row in rows.values() for column in row)
    table: dict[str, list[Any]] = {"series": [*rows]}
    table |= {column: [row.get(column) for row in rows.values()] for column in columns}
    return pa.table({column: _alike(values) for column, values in table.items()})


def _alike(values: list[Any]) -> list[Any]:
    """Values of one kind: numbers as float where they are mixed, and all as texts where some are."""
    kinds = {type(value) for value in values if value is not None}
    if len(kinds) < 2:
        return values
    kind: Any = float if kinds <= {int, float} else str
    return [None if value is None else kind(value) for value in values]


def write(folder: Folder, spec: Any, whole: Block, identity: Mapping[str, Any]) -> None:
    """Write the tables of a render into OUT, where there is something to say."""
    from procgen.terms.varied import Varied

    varied = Varied(spec)
    path_tables = _path_tables(varied, whole) if varied.parameters else iter(())
    series = series_table(varied)
    _refuse_link(folder)
    for name, tables in ((PATHS, path_tables), (SERIES, iter(() if series is None else (series,)))):
        _refuse_foreign(folder, name)
        _write(folder, name, tables, identity)


def there(folder: Folder, spec: Any) -> bool:
    """Whether the tables of a spec are in OUT, those that it has."""
    from procgen.terms.varied import Varied

    varied = Varied(spec)
    wanted = [PATHS] * bool(varied.parameters) + [SERIES] * (series_table(varied) is not None)
    return all(folder.size(name) >= 0 for name in wanted)


def remove(folder: Folder) -> None:
    """Remove the tables that are ours, and their folder when nothing else is in it."""
    _refuse_link(folder)
    folder.remove([name for name in (PATHS, SERIES) if _is_ours(folder, name)])
    try:
        if isinstance(folder.path, Path):
            (folder.path / FOLDER).rmdir()
    except OSError:
        return  # not there, or somebody keeps other things in it


def _path_tables(varied: Any, whole: Block) -> Iterator[pa.Table]:
    for first in range(whole.first_path, whole.end_path, ROWS):
        yield path_table(varied, first, min(ROWS, whole.end_path - first))


def _write(folder: Folder, name: str, tables: Iterator[pa.Table], identity: Mapping[str, Any]) -> None:
    import json

    import pyarrow.parquet as pq

    first = next(tables, None)
    if first is None:
        return
    try:
        (folder.path / FOLDER).mkdir(exist_ok=True)
    except OSError as error:
        raise EnsembleError(system_sentence(error, f"making {folder.path / FOLDER}")) from None
    marked = first.schema.with_metadata({IDENTITY: json.dumps(dict(identity))})
    with folder.writing(name) as temporary, pq.ParquetWriter(temporary, marked) as writer:
        for table in (first, *tables):
            writer.write_table(table.replace_schema_metadata(marked.metadata))


def _is_ours(folder: Folder, name: str) -> bool:
    import pyarrow.parquet as pq

    try:
        return IDENTITY in (pq.read_schema(readable(folder.path / name)).metadata or {})
    except (OSError, ValueError):
        return False


def _refuse_link(folder: Folder) -> None:
    """EnsembleError where what is written or removed in OUT would be so in another place."""
    place = folder.path / FOLDER
    if isinstance(place, Path) and place.is_symlink():
        raise EnsembleError(f"{place} is a link to another place; remove it, or choose another OUT")


def _refuse_foreign(folder: Folder, name: str) -> None:
    if folder.size(name) >= 0 and not _is_ours(folder, name):
        raise EnsembleError(f"{folder.path / name} is in the way and not ours; move it away")
