"""Products of the scores of all pairs of series that are compared, over one range of paths."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from procgen.chance.kernel import machine
from procgen.checks.blocks import compiled
from procgen.checks.shocks import NEAR, CrossSums, ShockLane
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
        whole = {name for name, lane in lanes.items() if len(lane.view) >= steps + 2 and len(lane.sizes) >= steps}
        pairs = [p for p in self._place if whole.issuperset(p) and ready[p] <= -2]
        places = [(at[a], at[b], self._place[a, b]) for a, b in pairs]
        sized = [place for pair, place in zip(pairs, places, strict=True) if isinstance(self.sums[pair], UntiedSums)]
        windows = [np.ascontiguousarray(lane.view) for lane in lanes.values()]
        sizes = [np.ascontiguousarray(lane.sizes) for lane in lanes.values()]
        both = [np.array(each, dtype=np.int64).reshape(-1, 3) for each in (places, sized)]
        totals = self._stack.copy()
        given = *_addresses(windows), *_addresses(sizes), *both, steps, totals, np.empty(_STRIPS)
        machine("crossed", "crossed", __package__)(*given)
        done = {pair for pair in pairs if np.isfinite(totals[self._place[pair]]).all()}
        for pair in done:
            self._stack[self._place[pair]] = totals[self._place[pair]]
            for counted in self.sums[pair].sums.values():
                counted[0] += steps * self.paths
        return done


def _usual(sums: CrossSums) -> bool:
    """Whether no more is summed than products at the lags near 0, and of sizes."""
    untied = isinstance(sums, UntiedSums) and sums.keys == (SIZES,)
    return sums.lags == NEAR and (untied or type(sums) is CrossSums)


def _addresses(rows: list[NDArray]) -> tuple[NDArray, NDArray]:
    """Where arrays stand in memory, and their heights."""
    return np.array([x.ctypes.data for x in rows], dtype=np.int64), np.array([len(x) for x in rows], dtype=np.int64)
