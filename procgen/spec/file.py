"""The text of a spec's file, or why there is none."""

from __future__ import annotations

from pathlib import Path

from procgen.spec.model import Fault, Place, SpecError
from procgen.spec.yaml12 import MAX_BYTES


def text_of(path: Path) -> str:
    """Return the text of a file, refusing what is too large or not UTF-8."""

    def refuse(message: str) -> SpecError:
        return SpecError((Fault(Place(str(path), 0, 0, ""), message),))

    try:
        strange = path.exists() and not path.is_file()
        data = b"" if strange else _bytes_of(path)
    except (OSError, ValueError) as error:
        why = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise refuse(f"cannot read the spec: {why}; check the path") from None
    if strange:
        raise refuse("expected a file, got a folder or a device; give the path of a YAML file")
    if len(data) > MAX_BYTES:
        raise refuse(f"expected a spec of at most {MAX_BYTES:,} bytes, got a larger file")
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise refuse("expected UTF-8, got UTF-16; save the file as UTF-8")
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        column = error.start - data.rfind(b"\n", 0, error.start)
        message = f"expected UTF-8, got the byte 0x{data[error.start]:02x}; save the file as UTF-8"
        raise SpecError((Fault(Place(str(path), line, column, ""), message),)) from None


def _bytes_of(path: Path) -> bytes:
    with open(path, "rb") as file:
        return file.read(MAX_BYTES + 1)
