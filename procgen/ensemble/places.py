"""Where an ensemble lives: a folder of this machine, or a place behind a URL such as s3://bucket/name.

A `Remote` answers what this room asks of a `pathlib.Path`. Stores behind URLs know no folders, no locks and no
renaming of what others may see half of: a file is uploaded under a temporary name and moved to its own, which such
stores do in one step. Which stores there are is Arrow's to say (s3, gs, abfs, hdfs), and fsspec's where that is there.
"""

from __future__ import annotations

import os
import re
from collections.abc import Iterator
from pathlib import Path, PurePosixPath
from types import SimpleNamespace
from typing import TYPE_CHECKING, Any

from procgen.ensemble.errors import EnsembleError

if TYPE_CHECKING:
    import pyarrow.fs as fs

CHUNK = 8 << 20  # bytes of an upload at a time
ONE_SLASH = re.compile(r"([A-Za-z][A-Za-z0-9+.-]+):/")  # a drive has one letter
RETRY = {"gs": "retry_limit_seconds=20"}  # where a store that does not answer would be asked for many minutes


class Remote:
    """A file or prefix in a store; `store` speaks of it as `key`, and people as the URL before `options`."""

    def __init__(self, store: fs.FileSystem, key: str, root: str, options: str = ""):
        self.store, self.key, self._root, self._options = store, key.rstrip("/"), root, options

    def __truediv__(self, name: str) -> Remote:
        return Remote(self.store, f"{self.key}/{name}", self._root, self._options)

    def __str__(self) -> str:
        return f"{self._root}{self.key}"

    def __repr__(self) -> str:
        return f"Remote({str(self)!r})"

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Remote) and str(other) == str(self)

    def __hash__(self) -> int:
        return hash(str(self))

    @property
    def url(self) -> str:
        """What opens this place again, in another process too."""
        return str(self) + self._options

    @property
    def name(self) -> str:
        return PurePosixPath(self.key).name

    @property
    def parent(self) -> Remote:
        return Remote(self.store, str(PurePosixPath(self.key).parent), self._root, self._options)

    @property
    def suffix(self) -> str:
        return PurePosixPath(self.key).suffix

    def _type(self) -> Any:
        return self.store.get_file_info(self.key)

    def exists(self) -> bool:
        return bool(self._type().type) or self.is_dir()

    def is_file(self) -> bool:
        return bool(self._type().is_file)

    def is_dir(self) -> bool:
        """Whether anything is below it: a store may list names alone."""
        return next(self.iterdir(), None) is not None

    def stat(self) -> Any:
        """`st_size` of a file; FileNotFoundError when it is not there."""
        info = self._type()
        if not info.is_file:
            raise FileNotFoundError(str(self))
        return SimpleNamespace(st_size=int(info.size))

    def iterdir(self) -> Iterator[Remote]:
        from pyarrow.fs import FileSelector

        for info in self.store.get_file_info(FileSelector(self.key, allow_not_found=True)):
            yield self / info.base_name

    def mkdir(self, parents: bool = True, exist_ok: bool = True) -> None:
        """Nothing: a name is enough."""

    def rmdir(self) -> None:
        """Remove what some stores keep to mark a folder, and all below it."""
        self.store.delete_dir(self.key)

    def unlink(self, missing_ok: bool = False) -> None:
        if not missing_ok or self.is_file():
            self.store.delete_file(self.key)

    def open(self) -> Any:
        """A file to read, as Arrow and NumPy take it."""
        return self.store.open_input_file(self.key)

    def read_text(self, encoding: str = "utf-8") -> str:
        with self.open() as file:
            return file.read().decode(encoding)

    def put(self, local: Path, temporary: Remote) -> None:
        """Bring a file of this machine here; whoever looks sees all of it or nothing."""
        with open(local, "rb") as file, self.store.open_output_stream(temporary.key) as out:
            while block := file.read(CHUNK):
                out.write(block)
        self.store.move(temporary.key, self.key)


Place = Path | Remote


def is_url(text: str) -> bool:
    return "://" in text


def place_of(value: str | os.PathLike[str]) -> Place:
    """The place that a path or a URL names; EnsembleError for a URL whose store cannot be opened."""
    text = os.fspath(value)
    if not is_url(text):
        if lost := ONE_SLASH.match(text):
            raise EnsembleError(
                f"expected a path, or a URL such as {lost[1]}://bucket/name, got {text} with one slash; write two (a "
                f"pathlib.Path drops one: give a text), or ./{text} for a folder of this machine"
            )
        return Path(text)
    import pyarrow as pa
    from pyarrow.fs import FileSystem

    plain, _, options = text.partition("?")
    scheme, _, rest = plain.partition("://")
    if scheme == "file":
        return Path(rest)
    retry = RETRY.get(scheme, "")
    if retry and retry.partition("=")[0] not in options:
        options = f"{options}&{retry}" if options else retry
    options = f"?{options}" if options else ""
    try:
        store, key = FileSystem.from_uri(plain + options)
        root = plain.rstrip("/").removesuffix(key.rstrip("/"))
    except pa.ArrowInvalid as error:
        store, key, root = _by_fsspec(text, plain, str(error))
    except OSError as error:
        raise EnsembleError(f"{plain} cannot be opened: {error}") from None
    return Remote(store, key, root, options)


def _by_fsspec(text: str, plain: str, refused: str) -> tuple[fs.FileSystem, str, str]:
    """A store that Arrow does not know itself."""
    from pyarrow.fs import FSSpecHandler, PyFileSystem

    try:
        import fsspec

        store, key = fsspec.core.url_to_fs(text)
    except ImportError as error:
        raise EnsembleError(f"{plain} cannot be opened: {refused}; {error}") from None
    except ValueError as error:
        raise EnsembleError(f"{plain} cannot be opened: {error}") from None
    return PyFileSystem(FSSpecHandler(store)), key, plain.rstrip("/").removesuffix(key.rstrip("/"))


def readable(place: Place) -> Any:
    """What Parquet readers take: a path, or an open file."""
    return place.open() if isinstance(place, Remote) else place


def address(place: Place) -> str:
    """A text that names the place in any process."""
    return place.url if isinstance(place, Remote) else str(place.absolute())
