"""Short paths of a conditional variance whose first value is not known: how soon what is left of it tells no more.

With h[t] = ω + α e²[t−1] + β h[t−1] a first variance h that is off is off by β^t as much at step t, and all variances
are at least about ω / (1 − β): relative to them, what is left is β^t K on average, K = E h (1 − β) / ω. Shocks are
taken from where that moves none of their statistics by more than a small part of its standard error.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

_FELT = 0.03  # standard errors, by which what is left may move a statistic


def soon_forgotten(nodes: Sequence[Any], paths: int, steps: int) -> float | None:
    """The share of a first variance that may be left in shocks; None where steps are many enough to leave none.

    `nodes`: what is undone on the way to the shocks. At one step, the mean square of the shocks of n paths has the
    standard error sqrt(2/n); over m steps, in which 1 / (1 − β) are felt, sqrt(2/(n m)).
    """
    terms = [node.term for node in nodes if hasattr(node.term, "forgotten")]
    if len(terms) != 1 or not steps or terms[0].before is not None or not hasattr(terms[0], "resting"):
        return None
    term = terms[0]
    beta = float(sum(term.beta)) if isinstance(term.beta, tuple) else float(term.beta)
    if not 0.0 < beta < 1.0 or steps >= 2.0 * math.log(term.forgotten) / math.log(beta):
        return None
    felt = float(term.resting()) * (1.0 - beta) / float(term.level())
    share = _FELT * math.sqrt(2.0 / paths) / felt * min(1.0, (1.0 - beta) * math.sqrt(steps / 2.0))
    return max(share, term.forgotten)
