"""Pictures into files: which sort by the suffix, whole or not at all."""

from __future__ import annotations

import os
from pathlib import Path

SORTS = (".html", ".svg", ".png")
MARKS = {  # what says in a file that it is one of ours, which the next one may replace
    "html": '<meta name="generator" content="procgen">',
    "svg": "<!-- procgen -->",
    "png": "procgen",  # as its Software
}
_HEAD = 1 << 16  # bytes in which a mark stands: a title may come before it


class PictureError(ValueError):
    """A picture that cannot be made or written; the message says why and how to mend it."""


def sort_of(path: Path) -> str:
    """The sort of picture that a file name asks for: html, svg or png."""
    suffix = path.suffix.lower()
    if suffix not in SORTS:
        raise PictureError(f"expected a file that ends in {', '.join(SORTS[:-1])} or {SORTS[-1]}, got {path.name!r}")
    return suffix[1:]


def page_place(path: Path, overwrite: bool = False) -> Path:
    """The path, when a page can be put there: to be asked before the work that it is for."""
    if path.suffix.lower() not in (".html", ".htm"):
        raise PictureError(f"expected a file that ends in .html, got {path.name!r}")
    return place_for(path, overwrite)


def place_for(path: Path, overwrite: bool = False) -> Path:
    """The path, when a file can be put there: where none is, or one of ours, or any one that is to be replaced."""
    if path.is_dir():
        raise PictureError(f"{path} is a folder; give the name of a file in it, such as {path / 'picture.html'}")
    if not path.parent.is_dir():
        raise PictureError(f"there is no folder {path.parent} to write {path.name} into; make it first")
    if path.exists() and not overwrite and not is_ours(path):
        raise PictureError(
            f"{path} is there already, and is no picture or page of procgen; choose another name, or replace it with "
            "--overwrite (overwrite=True)"
        )
    return path


def is_ours(path: Path) -> bool:
    """Whether a file says that procgen wrote it; a PNG in a chunk tEXt (W3C PNG, textual data)."""
    try:
        with path.open("rb") as file:
            head = file.read(_HEAD)
    except OSError:
        return False
    if head.startswith(b"\x89PNG"):
        text = b"Software\0" + MARKS["png"].encode()
        return len(text).to_bytes(4, "big") + b"tEXt" + text in head
    return any(MARKS[sort].encode() in head for sort in ("html", "svg"))


def write(path: Path, content: str | bytes, overwrite: bool = False) -> Path:
    """Put the content there in one go, in place of what may be replaced; returns the path."""
    place_for(path, overwrite)
    data = content.encode("utf-8") if isinstance(content, str) else content
    part = path.with_name(f".{path.name}.part")
    try:
        part.write_bytes(data)
        os.replace(part, path)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise PictureError(f"{path} cannot be written: {error.strerror or error}") from None
    return path
