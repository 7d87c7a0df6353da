"""Departures planted in terms of all families, mostly one parameter of one term, and faults of data by the hand.

The same number of a term may move several sides of a series at once; any of the kinds that it moves is a right name.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from tests.studies.departures import AR, GARCH, NOISE, Departure, Values


def one(kind: str, **parameters: Any) -> list[Any]:
    return [{kind: parameters}]


def fractional(d: float, variance: float) -> list[Any]:
    """(1 − B)^−d of white noise, scaled to a variance (Hosking 1981)."""
    unit = math.gamma(1 - 2 * d) / math.gamma(1 - d) ** 2
    return one("arfima", d=d, sd=math.sqrt(variance / unit))


def wanderers(adjustment: float) -> dict[str, Any]:
    """Two series that wander together; the first comes back to the second."""
    system = {"names": ["u", "v"], "relations": [[1, -1]], "adjustment": [[adjustment], [0]], "sd": [1, 1]}
    uses = {name: [{"use": f"m.vector_error_correction.{name}"}] for name in ("u", "v")}
    return {"shared": {"m": [{"vector_error_correction": system}]}, "series": {"x": uses["u"], "y": uses["v"]}}


def calm_and_storm(calm: int, storm: int) -> list[Any]:
    branches = {"calm": NOISE, "storm": [{"constant": 3}, {"white_noise": {"sd": 2}, "as": "gusts"}]}
    return one("regimes", branches=branches, durations={"calm": calm, "storm": storm})


def leading(steps: int) -> dict[str, Any]:
    lead = {"lag": {"of": [{"use": "f"}], "by": steps}}
    series = {"x": [{"use": "f"}, *NOISE], "y": [lead, {"white_noise": {"sd": 1, "law": "laplace"}}]}
    return {"shared": {"f": [{"white_noise": {"sd": 0.5}}]}, "series": series}


def _stretch_copied(values: Values, rng: np.random.Generator) -> None:
    x = values["x"]
    a, b = rng.choice(len(x), 2, replace=False)
    first, second = rng.integers(0, x.shape[1] - 80, 2)
    x[a, first : first + 80] = x[b, second : second + 80].copy()


def _stuck(values: Values, rng: np.random.Generator) -> None:
    x = values["x"]
    path, step = rng.integers(len(x)), int(rng.integers(x.shape[1] - 12))
    x[path, step : step + 12] = x[path, step]


def _ten_times(values: Values, rng: np.random.Generator) -> None:
    x = values["x"]
    x[rng.integers(len(x)), rng.integers(x.shape[1])] = 60.0


def _hidden_shock(values: Values, rng: np.random.Generator) -> None:
    """One step of a slow series that is rare only given the step before it."""
    x = values["x"]
    path, step = rng.integers(len(x)), int(rng.integers(1, x.shape[1]))
    x[path, step] = x[path, step - 1] - math.copysign(5.0, x[path, step - 1])


def _below_zero(values: Values, rng: np.random.Generator) -> None:
    x = values["x"]
    x[rng.integers(len(x)), rng.integers(x.shape[1])] = -1.0


def _a_half(values: Values, rng: np.random.Generator) -> None:
    values["x"][rng.integers(len(values["x"])), 7] += 0.5


def _mirrored(values: Values, rng: np.random.Generator) -> None:
    x = values["x"]
    x[1::2] = -x[::2]


def _overlapping(values: Values, rng: np.random.Generator) -> None:
    """Every path a window of one long record, 25 steps after the one before it."""
    x = values["x"]
    record = x.reshape(-1)
    values["x"] = np.stack([record[25 * k : 25 * k + x.shape[1]] for k in range(len(x))])


def _garch_from_calm(values: Values, rng: np.random.Generator) -> None:
    """A garch whose first variance is omega / (1 − beta), as if there had been no shocks before, and no burn-in."""
    _garch_from(0.05 / (1 - 0.85), values, rng)


def _garch_from_mean(values: Values, rng: np.random.Generator) -> None:
    """A garch whose first variance is the mean of all on each path, and no burn-in."""
    _garch_from(1.0, values, rng)


def _garch_from(variance: float, values: Values, rng: np.random.Generator) -> None:
    paths, steps = values["x"].shape
    z, h = rng.standard_normal((paths, steps)), np.full(paths, variance)
    for t in range(steps):
        values["x"][:, t] = np.sqrt(h) * z[:, t]
        h = 0.05 + 0.10 * values["x"][:, t] ** 2 + 0.85 * h


SLOW = one("ar", phi=0.95, total_sd=2)
POISSON = one("poisson", mean=4)
LEVERAGE = one("gjr_garch", sd=1, alpha=0.03, gamma=0.10, beta=0.86)
GUSTS = one("stochastic_volatility", sd=1, phi=0.95, eta=0.25)
JUMPS = [*NOISE, *one("compound_poisson", rate=0.05, sd=3)]
CYCLE = one("stochastic_cycle", period=12, rho=0.9, total_sd=1)
FRACTION = fractional(0.30, 1.0)


def short(phi: float) -> list[Any]:
    return one("ar", phi=phi, total_sd=1)


CASES = (
    Departure("arfima d 0.30 drawn as AR(1) of its variance and φ", FRACTION, short(0.30 / 0.70), kinds=("memory",)),
    Departure("arfima d 0.30 drawn as 0.29, same variance", FRACTION, fractional(0.29, 1.0), kinds=("memory",)),
    Departure(
        "cycle of 12 steps drawn as of 12.2", CYCLE, one("stochastic_cycle", period=12.2, rho=0.9, total_sd=1),
        kinds=("memory",),
    ),
    Departure(
        "arma θ 0.30 drawn as 0.28", one("arma", phi=0.7, theta=0.30, sd=1), one("arma", phi=0.7, theta=0.28, sd=1),
        kinds=("memory",),
    ),
    Departure(
        "local level: noise of level 0.10 drawn as 0.11", one("local_level", level_sd=0.10, noise_sd=1),
        one("local_level", level_sd=0.11, noise_sd=1), kinds=("memory", "spread"),
    ),
    Departure(
        "gjr_garch: γ 0.10 drawn without leverage", LEVERAGE, one("garch", sd=1, alpha=0.08, beta=0.86),
        kinds=("clustering",),
    ),
    Departure(
        "stochastic volatility φ 0.95 drawn as 0.93, same law", GUSTS,
        one("stochastic_volatility", sd=1, phi=0.93, eta=0.25 * math.sqrt((1 - 0.93**2) / (1 - 0.95**2))),
        kinds=("clustering",),
    ),
    Departure(
        "stochastic volatility with leverage −0.3, stated without", GUSTS,
        one("stochastic_volatility", sd=1, phi=0.95, eta=0.25, rho=-0.3), kinds=("clustering",),
    ),
    Departure("garch from ω / (1 − β), no burn-in", GARCH, spoil=_garch_from_calm, kinds=("spread",)),
    Departure("garch from its mean variance, no burn-in", GARCH, spoil=_garch_from_mean, kinds=("spread",)),
    Departure("regimes: stays of 40 and 8 drawn as 35 and 7", calm_and_storm(40, 8), calm_and_storm(35, 7),
              kinds=("memory", "clustering", "law")),
    Departure("regimes: stays of 40 and 8 drawn as 40 and 10", calm_and_storm(40, 8), calm_and_storm(40, 10),
              kinds=("level", "spread", "memory", "law")),
    Departure("Poisson 4 drawn as negative binomial, size 100", POISSON, one("negative_binomial", mean=4, size=100),
              kinds=("spread", "law")),
    Departure("inar α 0.60 drawn as 0.59", one("inar", alpha=0.60, mean=5), one("inar", alpha=0.59, mean=5),
              kinds=("memory",)),
    Departure("intermittent: stays of 3 drawn as 2.8", one("intermittent", share=0.2, stay=3, size=12, sd=6),
              one("intermittent", share=0.2, stay=2.8, size=12, sd=6), kinds=("memory", "clustering", "law")),
    Departure("jumps at 0.05 drawn at 0.03, same variance", JUMPS,
              [*NOISE, *one("compound_poisson", rate=0.03, sd=3 * math.sqrt(0.05 / 0.03))], kinds=("law", "spread")),
    Departure("missing 5 % alone, drawn in gaps of 2", one("missing", of=NOISE, share=0.05),
              one("missing", of=NOISE, share=0.05, gap=2), kinds=("share of gaps",)),
    Departure("missing 5 % drawn as 5.2 %", one("missing", of=NOISE, share=0.05),
              one("missing", of=NOISE, share=0.052), kinds=("share of missing",)),
    Departure("cointegration: adjustment −0.10 drawn as −0.11", wanderers(-0.10), wanderers(-0.11),
              kinds=("memory", "spread"), series="x ~ y"),
    Departure("a factor leads by 2 steps, drawn with 3", leading(2), leading(3), kinds=("dependence",), series="x ~ y"),
    Departure("paths 2k + 1 mirror paths 2k", AR, spoil=_mirrored, kinds=("structure", "dependence")),
    Departure("paths are windows of one record", AR, spoil=_overlapping, kinds=("structure", "dependence")),
    Departure("80 steps copied into another path", AR, spoil=_stretch_copied, kinds=("structure",)),
    Departure("one value stays for 12 steps", AR, spoil=_stuck, kinds=("structure",)),
    Departure("one value of 60 sd", NOISE, spoil=_ten_times, kinds=("one value far",)),
    Departure("one shock of 8 sd, at a value within reach", SLOW, spoil=_hidden_shock, kinds=("one shock far",)),
    Departure("one count of −1", POISSON, spoil=_below_zero, kinds=("structure", "law")),
    Departure("one count with a half", POISSON, spoil=_a_half, kinds=("structure", "law")),
)  # fmt: skip
