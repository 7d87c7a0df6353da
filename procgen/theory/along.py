"""Covariances of a state space along all steps, made once and gone on with: squares of its responses, added up."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from procgen.theory.system import System

AT_ONCE = 4096  # responses that are in memory together


class Along:
    """Cov(y_late(t + gap), y_early(t)) for t = 0, 1, 2 …, as far as it has been asked for: squares of responses."""

    def __init__(self, system: System, late: int, early: int, gap: int):
        self.alike = late == early and gap == 0
        self.system, self.gathered, self.known = system, 0.0, np.empty(0)
        self.ahead = system.rows(system.observation[late], np.array([gap]))[0]  # row A^(gap + t), and
        self.behind = system.observation[early]  # row A^t, of the next step
        self.onto, self.initial = system.entries

    def upto(self, count: int) -> np.ndarray:
        """At least so many steps."""
        found = [self.known]
        for begin in range(len(self.known), count, AT_ONCE):
            found.append(self._next(min(AT_ONCE, count - begin)))
        self.known = np.concatenate(found) if len(found) > 1 else self.known
        return self.known

    def _next(self, count: int) -> np.ndarray:
        system, shocks = self.system, len(self.system.noise)
        ahead = system.responses(self.ahead, count, self.onto)
        behind = ahead if self.alike else system.responses(self.behind, count, self.onto)
        products = np.einsum("tm,tm->t", ahead[:, :shocks] @ system.noise, behind[:, :shocks])
        sums = np.cumsum(np.concatenate([[self.gathered], products]))
        self.gathered, after = float(sums[-1]), np.array([count])
        self.ahead, self.behind = system.rows(self.ahead, after)[0], system.rows(self.behind, after)[0]
        return sums[:-1] + np.einsum("ti,ti->t", ahead[:, shocks:] @ self.initial, behind[:, shocks:])
