"""Text for terminals that cannot show every letter: a plain one for each, of the same width where a table needs it."""

from __future__ import annotations

import codecs
import re
import unicodedata

PLAIN = {
    **dict.fromkeys("−–—─", "-"),
    **dict.fromkeys("▁▂▃▀", "."),
    **dict.fromkeys("▄▅", ":"),
    **dict.fromkeys("▆▇█", "#"),
    **dict.fromkeys("┴┬┼", "+"),
    **dict.fromkeys("│┤├", "|"),
    **dict.fromkeys("‘’′", "'"),
    **dict.fromkeys("“”", '"'),
    **{"×": "x", "·": "*", "…": "...", "≤": "<=", "≥": ">=", "≈": "~", "→": "->", "√": "sqrt ", "∈": "in", "∞": "inf"},
    **{"Σ": "sum ", "±": "+-", "∂": "d", "⌊": "floor(", "⌋": ")"},
}

# What a terminal obeys or turns round: all controls but tab and line feed, odd line ends, marks of direction.
_OBEYED = re.compile("[\x00-\x08\x0b-\x1f\x7f-\x9f\u061c\u200e\u200f\u2028-\u202e\u2066-\u2069\ud800-\udfff]")


def tame(text: str, json: bool = False) -> str:
    """The text with letters that a terminal obeys written as their code; in JSON as an escape of the same value."""
    return _OBEYED.sub(lambda match: f"\\u{ord(match[0]):04x}" if json else f"‹U+{ord(match[0]):04X}›", text)


def encoded(text: str, encoding: str) -> bytes:
    """The text in an encoding, with plain letters where it has no others; unknown ones become question marks."""
    return text.encode(encoding, _HANDLER)


def _plain(error: UnicodeError) -> tuple[str | bytes, int]:
    if not isinstance(error, UnicodeEncodeError):
        raise error
    missing = error.object[error.start : error.end]
    return "".join(map(_letter, missing)), error.end


def _letter(letter: str) -> str:
    """ASCII for one letter: from the table, the name of a Greek one, the number that is raised or lowered."""
    if letter in PLAIN:
        return PLAIN[letter]
    name = unicodedata.name(letter, "")
    if name.startswith("GREEK"):
        return name.rpartition(" LETTER ")[2].partition(" ")[0].lower()
    plain = unicodedata.normalize("NFKD", letter).encode("ascii", "ignore").decode()
    raised = "^" if name.startswith("SUPERSCRIPT") else ""
    return raised + plain if plain else "?"


_HANDLER = "procgen plain letters"
codecs.register_error(_HANDLER, _plain)
