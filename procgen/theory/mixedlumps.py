"""The law of a series with drawn parameters some of whose values have a chance of their own.

A value that has a chance whatever the parameters are, as 0 of a demand, keeps the average of it. A value that moves
with a parameter has one only at the nodes of a rule, which another rule does not have: the law itself has a density
there, which the sum over nodes does not give.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.theory.lumps import Lumped, atoms_of, chance_of, nearest
from procgen.theory.mixedlaw import MixedLaw
from procgen.theory.unknown import Unknown

UNEVEN = "what is drawn moves a jump or a bend of its distribution function"
SAME = 1e-12  # of the size of values: atoms of two laws that are as near to each other are one


class MixedLumps(Lumped):
    """A finite mixture of laws whose atoms are the same but for rounding: within `room` of those of the mixture."""

    def __init__(self, weights: Sequence[float], laws: Sequence[Any], room: float):
        super().__init__(weights, laws)
        self.room = room

    @cached_property
    def atoms(self) -> tuple[float, ...]:
        return apart((value for law in self.laws for value in atoms_of(law)), self.room)

    def _sum(self, what: str, x: Any) -> NDArray:
        parts = zip(self.weights, self.laws, strict=True)
        return np.sum([w * getattr(law, what)(self._own(law, x)) for w, law in parts], axis=0)

    def chance(self, x: Any) -> NDArray:
        parts = zip(self.weights, self.laws, strict=True)
        return np.sum([w * chance_of(law, self._own(law, x)) for w, law in parts], axis=0)

    def _own(self, law: Any, x: Any) -> NDArray:
        """x, or what a law has for it where x is an atom."""
        x = np.asarray(x, float)
        if not (atoms := atoms_of(law)):
            return x
        atom = nearest(atoms, x)
        return np.where(np.abs(x - atom) <= self.room, atom, x)


def mixed_law(
    weights: Sequence[float], laws: Sequence[Any], others: Callable[[], Sequence[Any]], sd: float, area: float
) -> MixedLaw:
    """The mixture of laws at the nodes of a rule, with the values that have a chance of their own.

    others: gives the laws at the nodes of another rule, which shares only the nodes of parameters of few values. area:
    the chance that counts as none. Unknown where a value with a larger one moves with a parameter.
    """
    if not any(map(atoms_of, laws)):
        return MixedLaw(weights, laws)
    law = MixedLumps(weights, laws, _room(laws, sd))
    _refuse_moving(law, others(), area)
    return law


def refuse_moving(rules: Sequence[Sequence[Any]], sd: float, area: float) -> None:
    """Unknown where a value with a chance of its own moves from the laws at one rule's nodes to those at another's."""
    laws, others = rules
    if any(map(atoms_of, laws)):
        _refuse_moving(MixedLumps([1.0 / len(laws)] * len(laws), laws, _room(laws, sd)), others, area)


def _refuse_moving(law: MixedLumps, others: Sequence[Any], area: float) -> None:
    kept = apart((value for one in others for value in atoms_of(one)), law.room)
    for value in law.atoms:
        fixed = bool(kept) and abs(float(nearest(kept, value)) - value) <= law.room
        if not fixed and float(law.chance(value)) > area:
            raise Unknown("a value with a chance of its own moves with a drawn parameter: its law is not computed")


def _room(laws: Sequence[Any], sd: float) -> float:
    return SAME * (sd + max(abs(value) for one in laws for value in atoms_of(one)))


def apart(values: Iterable[float], room: float) -> tuple[float, ...]:
    """The values in ascending order, those within `room` of the one before them left out."""
    found: list[float] = []
    for value in sorted(values):
        if not found or value - found[-1] > room:
            found.append(value)
    return tuple(found)
