"""Where the parts of linear forms stand in the state of a state space."""

from __future__ import annotations

from collections.abc import Sequence

from procgen.theory.linear import At, Base, Frozen, Key, Linear, Season, base_of, below


class Layout:
    """Where each key stands in the state: the lags of each base, then frozen values and sums, inner ones first."""

    def __init__(self, forms: Sequence[Linear]):
        self.depth: dict[Base, int] = {}
        kept: dict[Key, None] = {}
        for key in (part for form in forms for whole in form for part in below(whole)):
            base = base_of(key)
            self.depth[base] = max(self.depth.get(base, 1), len(base.phi), _reach(key))
            if not isinstance(key, At):
                kept[_newest(key)] = None
        self.kept = list(kept)
        self.place: dict[Key, int] = {}
        self.size = 0
        for base, depth in self.depth.items():
            self.place[At(base, 0)] = self.size
            self.size += depth
        for key in self.kept:
            self.place[key] = self.size
            self.size += width_of(key)

    def index(self, key: Key) -> int:
        return self.place[_newest(key)] + (key.delay if isinstance(key, At | Season) else 0)


def _newest(key: Key) -> Key:
    return key._replace(delay=0) if isinstance(key, At | Season) else key


def width_of(key: Key) -> int:
    """How many elements of the state a sum or a frozen value takes."""
    return key.every if isinstance(key, Season) else 1


def _reach(key: Key) -> int:
    return 1 + (key.delay if isinstance(key, At) else key.back if isinstance(key, Frozen) else 0)
