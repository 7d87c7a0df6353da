"""Text of anyone's, made safe to stand in markup and to be looked at."""

from __future__ import annotations

import re
from html import escape

# What XML cannot hold, and marks that turn the direction of the text around them.
_FORBIDDEN = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\ud800-\udfff\ufffe\uffff]")
_TURNING = re.compile("[\u061c\u200e\u200f\u202a-\u202e\u2066-\u2069]")


def visible(text: object) -> str:
    """The text with letters that cannot be shown, or that hide what they are, written as their code."""
    found = _FORBIDDEN.sub(_code, str(text))
    return _TURNING.sub(_code, found)


def escaped(text: object) -> str:
    """The same for HTML and XML, in text and in quoted attributes."""
    return escape(visible(text), quote=True)


def breakable(text: object) -> str:
    """The same for the text of HTML, where long names may go on in the next line after an underscore."""
    return escaped(text).replace("_", "_<wbr>")


def short(text: str, most: int) -> str:
    """The text, or its beginning and an ellipsis, in at most `most` letters."""
    return text if len(text) <= most else text[: most - 1] + "…"


def _code(match: re.Match[str]) -> str:
    return f"‹U+{ord(match[0]):04X}›"
