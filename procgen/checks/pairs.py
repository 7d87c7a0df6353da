"""Products of the scores of all pairs of series that are compared, over one range of paths."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from procgen.chance.kernel import machine
from procgen.checks.blocks import compiled
from procgen.checks.shocks import ShockLane
from procgen.checks.together import NEAR, CrossSums
from procgen.checks.untied import SIZES, UntiedSums

_ROWS = len(NEAR) + 1  # totals of a usual pair: one for each lag, and that of the sizes
_STRIPS = 5 * 64  # room that a compiled pass needs

Pair = tuple[str, str]


class Pairs:
    """The totals of each pair; those of usual pairs stand in one array, so that one pass fills them all."""

    def __init__(self, sums: Mapping[Pair, CrossSums], paths: int):
        self.sums, self.paths = sums, paths
        usual = [pair for pair, each in sums.items() if _usual(each)]
        self._stack = np.zeros((len(usual), _ROWS, paths))
        self._place = {pair: k for k, pair in enumerate(usual)}
        rows = {pair: len(NEAR) + isinstance(sums[pair], UntiedSums) for pair in usual}
        stacked = {pair: self._stack[k, : rows[pair]] for pair, k in self._place.items()}
        self.totals = {pair: stacked[pair] if pair in stacked else each.lane(paths) for pair, each in sums.items()}

    def absorb(self, lanes: Mapping[str, ShockLane], steps: int, ready: Mapping[Pair, int]) -> None:
        """Add the last `steps` steps of all series; those of a pair count from step `ready` of these on."""
        done = self._at_once(lanes, steps, ready) if self._place and compiled(self.paths) else set()
        for pair, sums in self.sums.items():
            if pair not in done:
                a, b = (lanes[name] for name in pair)
                sums.beside(a, b, steps, self.totals[pair])
                sums.absorb(a.view, b.view, steps, ready[pair], self.totals[pair])

    def _at_once(self, lanes: Mapping[str, ShockLane], steps: int, ready: Mapping[Pair, int]) -> set[Pair]:
        """Do the usual pairs of which all scores are known, in one pass; which they are."""
        at = {name: k for k, name in enumerate(lanes)}
        known = {name: len(lane.view) for name, lane in lanes.items() if min(len(lane.view), len(lane.sizes)) >= steps}
        pairs = [p for p in self._place if known.get(p[0], -1) == known.get(p[1])]
        first = [max(ready[p], steps - known[p[0]]) for p in pairs]
        places = [(at[p[0]], at[p[1]], self._place[p], f) for p, f in zip(pairs, first, strict=True)]
        sized = [place for pair, place in zip(pairs, places, strict=True) if isinstance(self.sums[pair], UntiedSums)]
        windows = [np.ascontiguousarray(lane.view) for lane in lanes.values()]
        sizes = [np.ascontiguousarray(lane.sizes) for lane in lanes.values()]
        both = [np.array(each, dtype=np.int64).reshape(-1, 4) for each in (places, sized)]
        totals = self._stack.copy()
        given = *_addresses(windows), *_addresses(sizes), *both, steps, totals, np.empty(_STRIPS)
        machine("crossed", "crossed", __package__)(*given)
        done = set()
        for pair, f in zip(pairs, first, strict=True):
            new = totals[self._place[pair]]
            if np.isfinite(new).all():
                self._stack[self._place[pair]] = new
                done.add(pair)
                for key, counted in self.sums[pair].sums.items():
                    missing = 0 if key == SIZES else min(max(f + abs(key), 0), steps)
                    counted[0] += (steps - missing) * self.paths
        return done


def _usual(sums: CrossSums) -> bool:
    """Whether no more is summed than products at the lags near 0, and of sizes."""
    untied = isinstance(sums, UntiedSums) and sums.keys == (SIZES,)
    return sums.lags == NEAR and (untied or type(sums) is CrossSums)


def _addresses(rows: list[NDArray]) -> tuple[NDArray, NDArray]:
    """Where arrays stand in memory, and their heights."""
    return np.array([x.ctypes.data for x in rows], dtype=np.int64), np.array([len(x) for x in rows], dtype=np.int64)
