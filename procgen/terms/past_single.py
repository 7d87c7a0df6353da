"""One source of chance, undone over its recorded past: the last values and shocks, and the variance that they leave.

Nothing here needs normal shocks. What lies before the record is forgotten: exactly by an autoregression and by
differences, to within a billionth by a moving average, and as far as the record goes by a variance.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from procgen.chance.portable import exp
from procgen.spec.model import Entry, Frozen
from procgen.terms import egarch, garch, gjr
from procgen.terms.arma import inversion
from procgen.terms.base import Array, Node, Unknown, number
from procgen.terms.conditional import FORGOTTEN, Conditional
from procgen.terms.noise import WhiteNoise
from procgen.terms.past_parts import Recursion, recursion_of, told_before
from procgen.terms.start import companion, decay_length

Told = tuple[Entry, tuple[str, ...]]


def single(entry: Entry, node: Node, x: Array) -> Told | Unknown:
    """An entry that leaves from its values x (n,), oldest first, and what could not be conditioned."""
    if node.term.noise:
        alone, why = _noise(entry, node.term, node.name, x)
        if alone is entry and why:
            return Unknown(f"nothing of it is told by its values ({why[0]}); remove before at the series")
        return alone, why
    if node.term.leaves_from_last:
        return _from_last(entry, node.term, x)
    recursion = recursion_of(node.term)
    if recursion is None and node.term.untold:
        return Unknown(f"{node.term.untold}; remove before at the series")
    if recursion is None:
        return Unknown(f"{node.term.kind} cannot be told where it stands; remove before at the series{_own(node.term)}")
    needs = len(recursion.phi) + len(recursion.delta)
    if len(x) < needs:
        return Unknown(f"expected at least {needs} values before step 0 (one a lag), got {len(x)}; add earlier ones")
    found = _shocks(recursion, x - recursion.path(np.arange(-len(x), 0)))
    if isinstance(found, Unknown):
        return found
    left = told_before(entry, x, found[len(found) - len(recursion.theta) :])
    said: tuple[str, ...] = ()
    noise = node.inputs[-1].term
    if entry.shock is not None and len(found):
        shock, said = _noise(entry.shock, noise, node.name, found)
        left = replace(left, shock=shock)
    elif not isinstance(noise, WhiteNoise):
        said = (f"the variance of {node.name}: the record is too short to tell a shock",)
    return left, said


def _from_last(entry: Entry, term: Any, x: Array) -> Told | Unknown:
    """An entry of which all that comes follows from its last value, where its values can be such."""
    possible = term.support()
    for back, value in enumerate(x[::-1].tolist(), start=1):
        inside = possible.low < value if possible.above else possible.low <= value
        if not inside or (possible.step and not possible.on(value)):
            allowed = "whole numbers from 0" if possible.step else f"numbers above {number(possible.low)}"
            return Unknown(f"its values are {allowed}, and the record has {value!r} at step {number(-back)}; mend it")
    last = round(float(x[-1])) if possible.step else float(x[-1])
    return replace(entry, values=Frozen({**entry.values, "before": Frozen({"x": last})})), ()


def _own(term: Any) -> str:
    """How a term is told what a record cannot tell it: written otherwise, or by itself where it has a `before`."""
    if getattr(term, "leaves_as", ""):
        return f", or write it as {term.leaves_as}, which can"
    if not any(p.name == "before" for p in term.parameters):
        return ""
    why = "" if getattr(term, "even", True) else ", whose steps differ in length here,"
    return f" and give {term.kind}{why} its own, as in before: {{x: 16}} with its value at step −1"


def _shocks(recursion: Recursion, x: Array) -> Array | Unknown:
    """The shocks behind the values, from where they can be told on."""
    w, p, q = recursion.differenced(x), len(recursion.phi), len(recursion.theta)
    try:
        skip = p + (decay_length(companion([-c for c in recursion.theta], (), q, 0)[0], FORGOTTEN) if q else 0)
    except ValueError:
        return Unknown("its moving average is not invertible: shocks cannot be told from values; give it a `before`")
    if q and len(w) < skip + q:
        needs = skip + q + len(recursion.delta)
        return Unknown(
            f"its shocks are not normal: expected at least {needs:,} values before step 0 to tell them, got {len(x):,}"
            "; add earlier ones, or give it a `before` of its own"
        )
    a = np.zeros((q + len(w), 1))
    inversion(np.array(recursion.phi), np.array(recursion.theta), np.concatenate([np.zeros((p, 1)), w[:, None]]), a)
    return a[q + skip :, 0]


def _noise(entry: Entry, term: Any, name: str, e: Array) -> Told:
    """A noise that leaves from its values, and what of it does not."""
    if isinstance(term, WhiteNoise):
        return entry, ()
    if not isinstance(term, Conditional) or not any(p.name == "before" for p in term.parameters):
        return entry, (f"the state of {term.kind} in {name} is in its stationary law",)
    h, forgotten = _variances(term, e)
    needs = max(1, len(getattr(term, "alpha", ())) if isinstance(term, garch.Garch) else 1)
    if len(e) < needs:
        return entry, (f"the variance of {name}: at least {needs} shocks tell it, and the record has {len(e)}",)
    told = Frozen({**entry.values, "before": {"variance": tuple(h.tolist()), "shocks": tuple(e.tolist())}})
    if forgotten:
        return replace(entry, values=told), ()
    return replace(entry, values=told), (
        f"the variance of {name} before the record: it is begun at {_begun(term)}, and the {len(e):,} shocks since are "
        "too few for that to be forgotten",
    )


def _begun(term: Any) -> str:
    """Where a variance is begun before the record, in words."""
    if isinstance(term, egarch.Egarch):
        return "the mean of its logarithm there"
    if isinstance(term, garch.Garch):
        rest = 1.0
        for weight in (*term.alpha, *term.beta):
            rest -= weight
    else:
        rest = 1.0 - term.persistence()
    return "its mean there" if rest > 0.0 else f"{float(term.resting()):.5g} there, for its mean is infinite"


def _variances(term: Any, e: Array) -> tuple[Array, bool]:
    """The conditional variances at the steps of known values, from rest; whether where they began is forgotten."""
    column = e[:, None]
    if isinstance(term, garch.Garch):
        p, q, rest = len(term.alpha), len(term.beta), term.resting()
        square, h = np.concatenate([np.full((p, 1), rest), column * column]), np.full((q + len(e), 1), rest)
        garch.variance(term.level(), np.array(term.alpha), np.array(term.beta), square, h)
        return h[:, 0], _forgotten(term.beta, len(e) - p)
    if isinstance(term, gjr.GjrGarch):
        variances = np.empty_like(column)
        gjr.variance(column, *term._coefficients(), variances, np.full(1, term.resting()))
        return variances[:, 0], _forgotten((term.beta,) if term.beta else (), len(e) - 1)
    far = egarch.FAR * (abs(term.alpha) + abs(term.gamma)) / float(np.sqrt(1.0 - term.beta * term.beta))
    x, found = np.array([0.0, -far, far]), []  # at rest, and from far on both sides
    for value in e.tolist():
        variances = exp(term.mean_log() + x)
        found.append(variances[0])
        x = term.beta * x + term._sides(value / np.sqrt(variances))
    return np.array(found), bool(np.max(np.abs(x - x[0])) <= FORGOTTEN)


def _forgotten(beta: tuple[float, ...], steps: int) -> bool:
    return not beta or decay_length(companion(beta, (), len(beta), 0)[0], FORGOTTEN) <= steps
