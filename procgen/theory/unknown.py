"""The one way theory says that it does not know."""

from __future__ import annotations


class Unknown(Exception):
    """A moment without a closed form, an exact recursion or a bounded computation; the text is the reason."""

    @property
    def reason(self) -> str:
        return str(self)
