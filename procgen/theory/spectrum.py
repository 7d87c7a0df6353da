"""Spectral densities and long-run variances of series whose autocovariances depend on the lag alone.

Two-sided, per cycle: with f in cycles a step and gamma the autocovariances,

    S(f) = sum over all lags h of gamma(h) exp(-2 pi i f h),    -1/2 <= f <= 1/2,

so that the integral of S over one cycle is the variance and S(0) the long-run variance. In radians it is 2 pi times
the density of Brockwell & Davis (1991), ch. 4. A stationary linear form has it in closed form from its filters; any
other series by adding up its autocovariances until they have died out.
"""

from __future__ import annotations

import numpy as np

from procgen.theory.covariance import by_base
from procgen.theory.expression import Expression
from procgen.theory.linear import At, Linear
from procgen.theory.sources import PROCESS, Source, Space
from procgen.theory.unknown import Unknown

DIED_OUT = 1e-12  # share of the sum of absolute autocovariances that lies in the last half of those added up
FEWEST = 512
LONGEST, LONGEST_BENT = 1 << 20, 1 << 15  # lags that are added up; fewer where each one costs an integral


def spectral_density(x: Expression, frequencies: np.ndarray) -> np.ndarray:
    """S at frequencies in cycles a step."""
    frequencies = np.asarray(frequencies, float)
    own = [source for source in x.linear.sources if hasattr(source.detail, "spectral_density")]
    if _stands_apart(x, own):
        rest = _of_filters(x.space, x.linear.only(s for s in x.linear.sources if s not in own), frequencies)
        return rest + sum(_of_process(x.linear.only([source]), source, frequencies) for source in own)
    gamma = remembered(x)
    lags = np.arange(1, len(gamma))
    each = [gamma[0] + 2.0 * gamma[1:] @ np.cos(2.0 * np.pi * f * lags) for f in frequencies.ravel()]
    return np.maximum(each, 0.0).reshape(frequencies.shape)


def long_run_variance(x: Expression) -> float:
    """The sum of the autocovariances over all lags, S(0)."""
    return float(spectral_density(x, np.zeros(1))[0])


def is_filtered(x: Expression) -> bool:
    """Whether a series is a sum of stationary filters of white noises, for which everything here is in closed form."""
    plain = all(isinstance(key, At) and not key.base.started for key in x.linear)
    return not x.terms and plain and not any(source.kind == PROCESS for source in x.sources)


def remembered(x: Expression) -> np.ndarray:
    """Autocovariances from lag 0 on, up to where they have died out; kept, since many questions end in them."""
    kept = vars(x)
    if "remembered" not in kept:
        try:
            kept["remembered"] = _added_up(x)
        except Unknown as unknown:
            kept["remembered"] = unknown
    if isinstance(kept["remembered"], Unknown):
        raise kept["remembered"]
    return kept["remembered"]


def _added_up(x: Expression) -> np.ndarray:
    count = max(FEWEST, 4 * _reach(x))
    while count <= longest(x):
        lags = np.arange(count)
        gamma = x.covariance(x, lags, np.zeros_like(lags))
        size = np.abs(gamma)
        if size[count // 2 :].sum() <= DIED_OUT * size.sum():
            return gamma
        count *= 4
    raise Unknown(f"its autocovariances have not died out after {longest(x)} lags")


def longest(x: Expression) -> int:
    """How many autocovariances are added up at most."""
    bent = x.terms or any(source.kind == PROCESS for source in x.sources)
    return LONGEST_BENT if bent else LONGEST


def _reach(x: Expression) -> int:
    """The largest delay that is written in a series, in its moving averages or in its autoregressions."""
    forms = [x.linear, *(form for term in x.terms for form in (*term.factors, term.exponent))]
    keys = [key for form in forms for key in form if isinstance(key, At)]
    return max((max(key.delay, len(key.base.phi)) for key in keys), default=0)


def _stands_apart(x: Expression, own: list[Source]) -> bool:
    """Whether a series is a sum of stationary filters and of these independent processes, which have densities."""
    rest = [source for source in x.sources if source not in own]
    plain = all(isinstance(key, At) and not key.base.started for key in x.linear)
    alone = not any(x.space.dependent(p, q) for p in own for q in (*rest, *own) if p is not q)
    return plain and alone and not x.terms and not any(source.kind == PROCESS for source in rest)


def _of_process(form: Linear, source: Source, frequencies: np.ndarray) -> np.ndarray:
    """What a process adds through its delays."""
    z = np.exp(-2j * np.pi * frequencies)
    response = sum(c * z**key.delay for key, c in form.items() if isinstance(key, At))
    return np.abs(response) ** 2 * source.detail.spectral_density(frequencies)


def _of_filters(space: Space, form: Linear, frequencies: np.ndarray) -> np.ndarray:
    """Sum over pairs of sources of their covariance times both frequency responses."""
    z = np.exp(-2j * np.pi * frequencies)
    responses: dict[Source, np.ndarray] = {}
    for base, (delays, _) in by_base(form).items():
        theta = np.zeros(1 + max(delays))
        theta[list(delays)] = list(delays.values())
        response = np.polyval(theta[::-1], z) / np.polyval([*(-c for c in base.phi[::-1]), 1.0], z)
        responses[base.source] = responses.get(base.source, 0.0) + response
    total = np.zeros(frequencies.shape)
    for a, left in responses.items():
        for b, right in responses.items():
            total = total + space.covariance(a, b) * (left * right.conj()).real
    return np.maximum(total, 0.0)
