"""Whether two ensembles whose values differ without a reason hold what their manifests say."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from procgen.ensemble.beside import First, earliest
from procgen.ensemble.check import Damage, check_digest
from procgen.ensemble.ensemble import OnDisk

Tick = Callable[[int, int], None]


def broken(sides: Mapping[str, Any], found: Mapping[str, First], progress: Tick | None = None) -> tuple[str, ...]:
    """Sentences on ensembles, by what they are called, that do not hold what their manifests say.

    `found` are the differences that no term explains: where one side alone is damaged, they are its places.
    """
    damages = {
        side: check_digest(ensemble, progress=progress).damages
        for side, ensemble in sides.items()
        if isinstance(ensemble, OnDisk)
    }
    alone = sum(1 for some in damages.values() if some) == 1
    return tuple(
        f"{side} does not hold what its manifest says: {damage}{_place(damage, found if alone else {}, len(some) == 1)}"
        for side, some in damages.items()
        for damage in some
    )


def _place(damage: Damage, found: Mapping[str, First], only: bool) -> str:
    """The first value in a damage that differs from the other side's, where it is known."""
    if damage.series is None:
        first = earliest(dict(found)) if only else None
    else:
        first = found.get(damage.series)
    area = damage.area
    if first is None or (area is not None and not area.first_path <= first.path < area.end_path):
        return ""
    return f"; the first is series {first.series}, path {first.path}, step {first.step}"
