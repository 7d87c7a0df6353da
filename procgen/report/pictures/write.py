"""Pictures into files: which sort by the suffix, whole or not at all."""

from __future__ import annotations

import os
from pathlib import Path

SORTS = (".html", ".svg", ".png")


class PictureError(ValueError):
    """A picture that cannot be made or written; the message says why and how to mend it."""


def sort_of(path: Path) -> str:
    """The sort of picture that a file name asks for: html, svg or png."""
    suffix = path.suffix.lower()
    if suffix not in SORTS:
        raise PictureError(f"expected a file that ends in {', '.join(SORTS[:-1])} or {SORTS[-1]}, got {path.name!r}")
    return suffix[1:]


def page_place(path: Path) -> Path:
    """The path, when a page can be put there: to be asked before the work that it is for."""
    if path.suffix.lower() not in (".html", ".htm"):
        raise PictureError(f"expected a file that ends in .html, got {path.name!r}")
    return place_for(path)


def place_for(path: Path) -> Path:
    """The path, when a file can be put there."""
    if path.is_dir():
        raise PictureError(f"{path} is a folder; give the name of a file in it, such as {path / 'picture.html'}")
    if not path.parent.is_dir():
        raise PictureError(f"there is no folder {path.parent} to write {path.name} into; make it first")
    return path


def write(path: Path, content: str | bytes) -> Path:
    """Put the content there in one go, in place of what was there; returns the path."""
    place_for(path)
    data = content.encode("utf-8") if isinstance(content, str) else content
    part = path.with_name(f".{path.name}.part")
    try:
        part.write_bytes(data)
        os.replace(part, path)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise PictureError(f"{path} cannot be written: {error.strerror or error}") from None
    return path
