"""Text for terminals that cannot show every letter: a plain one for each, of the same width where a table needs it."""

from __future__ import annotations

import codecs
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
