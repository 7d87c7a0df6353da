"""Hypothesis strategies made from the declarations: any parameter, any term, any body, any small spec."""

from __future__ import annotations

import numpy as np
from hypothesis import strategies as st

from procgen.chance.laws import LAWS
from procgen.spec import declare, local, named
from procgen.terms import catalogue


def numbers(domain) -> st.SearchStrategy[float]:
    """Numbers of moderate size within the bounds of a Real."""
    lows = [v for v in (domain.above, domain.at_least) if v is not None]
    highs = [v for v in (domain.below, domain.at_most) if v is not None]
    low, high = max(lows, default=-4.0), min(highs, default=4.0)
    return st.floats(low, max(high, low), allow_nan=False).map(lambda x: round(x, 3)).filter(domain.holds)


def value_of(parameter: declare.Parameter) -> st.SearchStrategy:
    """What may be written for a parameter, as YAML data."""
    domain = parameter.domain
    if parameter.name in ("phi", "theta"):
        return partials().map(coefficients)
    if isinstance(domain, declare.Real):
        return numbers(domain)
    if isinstance(domain, declare.Whole):
        low = domain.at_least or 0
        return st.integers(low, low + 6)
    if isinstance(domain, declare.Reals):
        return st.lists(numbers(domain.each), min_size=max(1, domain.min_length), max_size=3)
    if isinstance(domain, declare.Choice):
        return st.sampled_from(domain.words)
    if isinstance(domain, local.CalendarDays):
        return st.lists(st.sampled_from(["2027-01-04", "2027-01-05", "01-04", "02-29"]), min_size=1, max_size=3)
    if isinstance(domain, local.EveryYear):
        return st.sampled_from(["01-01", "07-20", "12-31"])
    if isinstance(domain, declare.Flag):
        return st.booleans()
    if isinstance(domain, declare.Span):
        return st.integers(1, 30)
    if isinstance(domain, declare.Moment):
        return st.integers(-30, 30)
    if isinstance(domain, declare.LawOf):
        return laws()
    if isinstance(domain, declare.Records):
        return st.lists(mapping(domain.parameters), min_size=1, max_size=2)
    if isinstance(domain, declare.Record):
        return mapping(domain.parameters)
    return st.text("abc", min_size=1, max_size=3)


def mapping(parameters) -> st.SearchStrategy[dict]:
    """A mapping with every required parameter and some of the optional ones."""
    required = {p.name: value_of(p) for p in parameters if p.default is declare.REQUIRED}
    optional = {p.name: value_of(p) for p in parameters if p.default is not declare.REQUIRED}
    return st.fixed_dictionaries(required, optional=optional)


def laws() -> st.SearchStrategy:
    return st.sampled_from(sorted(LAWS)).flatmap(
        lambda name: mapping(LAWS[name].parameters).map(lambda values: {name: values} if values else name)
    )


def partials(most: int = 4) -> st.SearchStrategy[list[float]]:
    """Partial autocorrelations, so that polynomials near the border of stationarity come up."""
    return st.lists(st.floats(-0.95, 0.95).map(lambda x: round(x, 3)), min_size=1, max_size=most)


def coefficients(partial: list[float]) -> list[float]:
    """The stationary AR polynomial of some partial autocorrelations (Durbin-Levinson)."""
    phi: list[float] = []
    for k in partial:
        phi = [c - k * d for c, d in zip(phi, phi[::-1], strict=True)] + [k]
    return [float(np.round(c, 6)) for c in phi]


def nests(term) -> bool:
    """Whether a term has bodies, which must end somewhere."""
    return term.composition or any(isinstance(getattr(p.domain, "each", None), declare.Body) for p in term.parameters)


@st.composite
def entries(draw, depth: int = 2) -> dict:
    """An entry of any kind: a term, or a composition of entries."""
    kinds = [kind for kind, term in catalogue().items() if kind != "use" and (depth or not nests(term))]
    kind = draw(st.sampled_from(kinds))
    term = catalogue()[kind]
    plain = [p for p in term.parameters if not isinstance(p.domain, declare.Body | named.Named)]
    values = draw(mapping(plain))
    for parameter in term.parameters:
        if isinstance(parameter.domain, declare.Body) and parameter.name != "follow":
            values[parameter.name] = draw(st.lists(entries(depth - 1), min_size=1, max_size=2))
        if parameter.name == "branches":
            values["branches"] = {n: draw(st.lists(entries(depth - 1), min_size=1, max_size=2)) for n in ("n1", "n2")}
    mended = MEND.get(kind, lambda values, x: values)(values, draw(st.floats(0.1, 0.9).map(lambda x: round(x, 2))))
    entry = {kind: mended, "as": "?"}
    if draw(st.booleans()):
        entry["times"] = draw(st.sampled_from([0.5, -1.0, 2.0]))
    return entry


def driven(values: dict, x: float) -> dict:
    """One spread, and a past that is long enough or none."""
    values.pop("total_sd", None)
    before = values.get("before")
    if before is not None:
        needs = max(len(values.get("phi", [])), 1), len(values.get("theta", []))
        before["x"] = [*before.get("x", []), *[0.5] * needs[0]]
        before["shocks"] = [*before.get("shocks", []), *[0.2] * needs[1]]
    return values | {"sd": x}


def walking(values: dict, x: float) -> dict:
    return {name: value for name, value in values.items() if name != "total_sd"} | {"sd": x}


def turning(values: dict, x: float) -> dict:
    """One spread, and a period that is not aliased."""
    return walking(values, x) | {"rho": x, "period": 2.5 + values["period"]}


def clustering(values: dict, x: float) -> dict:
    """A variance: alpha and beta scaled to a persistence below 1, and one spread."""
    total = sum(values["alpha"]) + sum(values.get("beta", []))
    scale = x / total if total else 1.0
    kept = {name: [round(v * scale, 4) for v in values[name]] for name in ("alpha", "beta") if name in values}
    if "before" in values:
        values["before"] = {"variance": [0.5] * 4, "shocks": [0.1] * 4}
    return {name: value for name, value in values.items() if name != "omega"} | kept | {"sd": x}


def threshold(values: dict, x: float) -> dict:
    """A persistence below 1 under any law, and omega, which a skewed law needs."""
    values = {name: value for name, value in values.items() if name != "sd"} | past_variances(values)
    return values | {"omega": x, "alpha": 0.3 * x, "gamma": 0.3 * x, "beta": 0.3}


def exponential(values: dict, x: float) -> dict:
    """One level, coefficients of moderate size, and any law."""
    values = {name: value for name, value in values.items() if name != "omega"} | past_variances(values)
    return values | {"scale": x, "alpha": 0.3 * x, "gamma": -0.1, "beta": x, "allow_infinite_variance": True}


def stochastic(values: dict, x: float) -> dict:
    """One level, and leverage under a normal law alone."""
    values = {name: value for name, value in values.items() if name != "sd"} | {"scale": x, "phi": x, "eta": 0.3}
    return values if "law" not in values else {name: value for name, value in values.items() if name != "rho"}


def past_variances(values: dict) -> dict:
    return {"before": {"variance": [0.5] * 4, "shocks": [0.1] * 4}} if "before" in values else {}


def repeating(values: dict, x: float) -> dict:
    """Harmonics or a profile, not both."""
    if values.get("harmonics"):
        values.pop("profile", None)
    else:
        values = {**values, "profile": [1.0, 2.0, x]}
        values.pop("harmonics", None)
    return values


def bending(values: dict, x: float) -> dict:
    """Bends in order."""
    bends = sorted({b["at"]: b for b in values.pop("bends", [])}.values(), key=lambda b: b["at"])
    return values | ({"bends": bends} if bends else {})


def shifting(values: dict, x: float) -> dict:
    """A length where the shape of an event has one."""
    values.pop("length", None)
    return values if values.get("shape", "step") == "step" else values | {"length": 1 + 5 * x}


def counting(values: dict, x: float) -> dict:
    """A value for each place of the calendar."""
    return values | {"values": [x * i for i in range(local.PARTS[values["by"]])]}


def switching(values: dict, x: float) -> dict:
    """By chance, or by dates that are in order."""
    if values.get("spans"):
        return {"spans": [span | {"until": span["from"] + 3} for span in values["spans"]]}
    return {"share": x, "stay": 10}


def bounded(values: dict, x: float) -> dict:
    """Bounds in order."""
    return values | {"low": -x, "high": x}


def moving(values: dict, x: float) -> dict:
    """Two states, by their durations or by transitions."""
    names = list(values.pop("branches", {})) or ["n1", "n2"]
    stays = {"durations": dict(zip(names, (1 + 20 * x, 3), strict=True))}
    rows = {"transitions": [[x, 1 - x], [1, 0]]}
    return (stays if x < 0.5 else rows) | ({"start": names[1]} if 0.3 < x < 0.4 else {})


def chaining(values: dict, x: float) -> dict:
    """Names of two states, and how they follow each other."""
    return {"states": ["n1", "n2"]} | moving({}, x)


def switching_spread(values: dict, x: float) -> dict:
    """Two spreads, and how they follow each other."""
    moves = {name: value for name, value in moving({}, x).items() if name != "start"}
    return {"sd": {"n1": x, "n2": 1.5}, "law": values.get("law", "normal")} | moves


def switching_variance(values: dict, x: float) -> dict:
    weights = {"omega": {"n1": x, "n2": 3.0}, "alpha": {"n1": 0.1, "n2": 0.3}, "beta": {"n1": 0.5, "n2": x / 2}}
    return switching_spread(values, x) | weights


def branching(values: dict, x: float) -> dict:
    """Two branches, and how they follow each other."""
    return {"branches": dict(values["branches"])} | moving(values, x)


def one_sided(values: dict, x: float) -> dict:
    """One threshold."""
    return {name: value for name, value in values.items() if name != "below"} | {"above": x}


def between(values: dict, x: float) -> dict:
    """A body within the bounds of a logit."""
    return {"of": [{"sigmoid": {"of": values["of"]}, "as": "?"}]}


def integrated(values: dict, x: float) -> dict:
    """A whole season, one start for all, and a past that is long enough or none."""
    season = values.get("seasonal")
    if season is not None:
        season["period"] = 2 + season["period"] % 3
        season["d"] = season.get("d", 0) % 3
    if "d" in values:
        values["d"] %= 3
    if "period" in values:
        values["period"] = 2 + values["period"] % 5
    for name in ("start", "before"):
        if name in values:
            values[name] = 0.0 if name == "start" else {"x": [0.5] * 60, "shocks": [0.2] * 30}
    if "before" in values and "d" not in values:
        values["before"].pop("shocks")
    return walking(values, x)


def coming(values: dict, x: float) -> dict:
    """Demand whose sizes have a law, as gamma sizes or as counts."""
    sizes = {"size": 3 + x, "sd": 2 * x} if x < 0.5 else {"size": 1 + x, "law": "counts"}
    return {"share": x, "stay": 10, **sizes}


def rare(values: dict, x: float) -> dict:
    """Jumps that are few enough to be drawn one by one."""
    return values | {"rate": x}


def arriving(values: dict, x: float) -> dict:
    """An end after step 0."""
    return values | {"until": 3 + abs(values["until"])}


MEND = {
    "intermittent": coming,
    "compound_poisson": rare,
    "bridge": arriving,
    "event": shifting,
    "calendar": counting,
    "flag": switching,
    "chain": chaining,
    "switching_noise": switching_spread,
    "switching_garch": switching_variance,
    "regimes": branching,
    "clip": bounded,
    "sigmoid": bounded,
    "hinge": one_sided,
    "logit": between,
    **dict.fromkeys(("ar", "ma", "arma"), driven),
    "random_walk": walking,
    **dict.fromkeys(("arima", "seasonal_random_walk", "ornstein_uhlenbeck"), integrated),
    "stochastic_cycle": turning,
    **dict.fromkeys(("garch", "arch"), clustering),
    "gjr_garch": threshold,
    "egarch": exponential,
    "stochastic_volatility": stochastic,
    "seasonal": repeating,
    "trend": bending,
}


TIME = {"start": "2027-01-04", "every": "1h"}


def labelled(entries: list, count: list[int]) -> list:
    """The same entries, each with a label of its own."""
    for entry in entries:
        if "as" in entry:
            count[0] += 1
            entry["as"] = f"n{count[0]}"
        for values in entry.values():
            for name in ("of", "then", "and"):
                if isinstance(values, dict) and isinstance(values.get(name), list):
                    labelled(values[name], count)
            for body in values.get("branches", {}).values() if isinstance(values, dict) else ():
                labelled(body, count)
    return entries


@st.composite
def specs(draw) -> dict:
    """A spec with a shared body and one to three series of any terms, some of them reading each other."""
    names = ["a", "b", "c"][: draw(st.integers(1, 3))]
    series = {}
    for name in names:
        body = draw(st.lists(entries(), min_size=1, max_size=2))
        readable = ["w", *series]
        if draw(st.booleans()):
            body.append({"use": draw(st.sampled_from(readable))})
        series[name] = labelled(body, [0])
    steps = draw(st.integers(1, 40))
    shared = {"w": labelled([draw(entries(0))], [0])}
    return {"procgen": 1, "seed": 5, "paths": 20, "time": TIME | {"steps": steps}, "shared": shared, "series": series}
