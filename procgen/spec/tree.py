"""Strict YAML 1.2 as trees whose nodes know their places."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from procgen.spec.model import Place


@dataclass(slots=True)
class Tree:
    """A scalar, a list of trees, or a mapping of names to trees, with the place it was written at."""

    value: Any  # None, bool, int, float or str; tuple[Tree, ...]; dict[str, Tree]
    place: Place
    keys: dict[str, Tree] = field(default_factory=dict)  # of a mapping: each key as a text with its own place

    @property
    def is_map(self) -> bool:
        return isinstance(self.value, dict)

    @property
    def is_list(self) -> bool:
        return isinstance(self.value, tuple)

    @property
    def is_scalar(self) -> bool:
        return not isinstance(self.value, (dict, tuple))

    def key(self, name: str) -> Tree:
        """Return the key itself, for faults about its name."""
        return self.keys.get(name, self)
