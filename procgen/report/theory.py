"""The theory of a spec as text and as JSON: what `procgen theory` prints."""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence
from textwrap import wrap
from typing import Any

import numpy as np

from procgen.report.correlogram import correlogram, scaled
from procgen.report.equations import equations
from procgen.spec.model import Spec
from procgen.theory import SeriesTheory, Theory
from procgen.theory.series import FREQUENCIES, HORIZONS

WIDTH = 100
DUST = 1e-13  # of the variance
NOTHING = 1e-9  # a partial autocorrelation that is shown as 0
WIDEST = 90  # lags in a correlogram
WANTED = ("mean", "variance", "autocovariance")  # of others, where autocovariances depend on the lag alone
PAIRS = 200  # of series that go together, that a text tells of


def theory_json(
    spec: Spec,
    theory: Theory,
    at: Sequence[int] | None,
    lags: int,
    frequencies: Sequence[float] | None = None,
    horizons: Sequence[int] | None = None,
) -> str:
    """All moments as JSON, at the steps `at` and up to the lag `lags`."""
    return json.dumps(_told(spec, theory, at, lags, frequencies, horizons), ensure_ascii=False)


def theory_text(
    spec: Spec,
    theory: Theory,
    at: Sequence[int] | None,
    lags: int,
    frequencies: Sequence[float] | None = None,
    horizons: Sequence[int] | None = None,
) -> str:
    """Equations, verdicts and moments, for a person to read; spectral densities where frequencies are given."""
    told = _told(spec, theory, at, [0, *some(lags + 1)[1:]], frequencies or (), horizons, PAIRS + 1)
    lines = [head(spec), *equations(spec, WIDTH, theory.graph)]
    for name, facts in told["series"].items():
        lines += ["", *_series(theory[name], facts, spec.series[name].unit, lags)]
    lines += _cross(told["cross"]) + _correlated(told["correlation"]) + _repaired(spec)
    return "\n".join(lines)


def _told(spec, theory, at, lags, frequencies, horizons, pairs=None) -> dict[str, Any]:
    chosen = FREQUENCIES if frequencies is None else frequencies
    return theory.as_dict(at or some(spec.time.steps), lags, chosen, horizons or HORIZONS, pairs)


def some(count: int) -> list[int]:
    """0, 1, 2, 5, 10, 20, 50, … below `count`, and the last before it; eight at most."""
    ladder = [k * 10**e for e in range(13) for k in (1, 2, 5) if k * 10**e < count - 1]
    return sorted({0, *ladder[:: max(1, -(-len(ladder) // 6))], count - 1})


def head(spec: Spec) -> str:
    """Title, size, seed and time in two lines."""
    grid = spec.time
    size = f"{_many(spec.paths, 'path')} × {_many(grid.steps, 'step')}"
    if grid.at:
        size += f" at listed times, {grid.length} apart on average,"
    elif grid.every:
        size += f" of {grid.length}"
    if grid.start:
        size += f" from {grid.start:%Y-%m-%d %H:%M} ({grid.zone or 'UTC'})"
    return "\n".join([*([spec.title] if spec.title else []), f"{size}, seed {spec.seed}"])


def _many(count: int, what: str) -> str:
    return f"{count:,} {what}{'' if count == 1 else 's'}"


def _series(theory: SeriesTheory, facts: dict[str, Any], unit: str | None, lags: int) -> list[str]:
    lines = [f"{theory.name}{f' ({unit})' if unit else ''}: {facts['stationarity']['verdict']}"]
    lines += _wrapped(reason for reason in facts["stationarity"]["reasons"] if not _said_below(reason, facts))
    if "past" in facts:
        lines += _wrapped(_past(facts["past"]))
    lines += _wrapped(facts.get("unfelt", ()))
    if "rounding" in facts:
        lines += _wrapped([facts["rounding"]["text"]])
    if "missing" in facts:
        share, gap = facts["missing"]["share"], facts["missing"]["gap"]
        text = f"{share:.4g} of its values are missing, in gaps of {gap:.4g} steps on average, whatever they are"
        lines += _wrapped([f"{text}; what follows is said of those that are there"])
    lines += _table("step", facts["steps"], [("mean", facts["mean"]), ("variance", facts["variance"])])
    lines += _memory(theory, facts)
    lines += _spectrum(facts["spectral_density"])
    if not theory.stationarity.covariance_stationary or _remembers(facts):
        lines += _ahead(facts["forecast_variance"])
        lines += _averaged(theory, facts) + _correlogram(theory, lags)
    lines += _law(facts)
    lines += _wrapped(_unknown(facts, theory.stationarity.covariance_stationary))
    if "condition" in facts:
        lines.append(f"  condition number {facts['condition']:.2g}: expect relative errors of 1e-16 times that")
    return lines


def _past(past: dict[str, Any]) -> Iterable[str]:
    values, last = _many(past["values"], "value"), number(past["last"])
    yield f"leaves from its recorded past of {values}, the last {last} at step −1; all that follows is given that past"
    for what in past.get("replaced", ()):
        yield f"the {what} is not used: the record says where it stands"
    for what in past["unconditioned"]:
        yield f"what came before could not be conditioned: {what}"


def _memory(theory: SeriesTheory, facts: dict[str, Any]) -> list[str]:
    """Autocovariances from step 0, or from the middle of the steps shown where they change with the step."""
    steps, lags = facts["steps"], facts["autocovariance"]["lags"]
    start = 0 if theory.stationarity.covariance_stationary else steps[len(steps) // 2]
    found: list[tuple] = [("autocovariance", theory.autocovariance(lags, start))]
    found += [("autocorrelation", theory.autocorrelation(lags, start))]
    if start == 0 and _remembers(facts):
        found += [("partial", theory.partial_autocorrelation(lags), NOTHING)]
    if start == 0 and not facts["gaussian"]:
        found += [("of squared deviations", theory.autocorrelation_of_squares(lags))]
    rows = [(name, None if v is None else _without_dust(v, *size)) for name, v, *size in found]
    return _table("lag" if start == 0 else f"lag, from step {start}", lags, rows)


def _remembers(facts: dict[str, Any]) -> bool:
    """Whether anything is left of a value at later steps: at the lags that are shown, or for a forecast."""
    values, errors = facts["autocovariance"]["values"], facts["forecast_variance"]["values"]
    if values is None:
        return False
    return any(abs(v) > DUST * values[0] for v in values[1:]) or (errors or values)[0] < (1.0 - NOTHING) * values[0]


def _spectrum(facts: dict[str, Any]) -> list[str]:
    return _table("cycles a step", facts["frequencies"], [("spectral density", facts["values"])])


def _ahead(facts: dict[str, Any]) -> list[str]:
    """Variances of forecast errors; those that all parts' pasts would leave, where these tell more."""
    values, parts = facts["values"], facts["given_parts"]
    same = values is None or parts is None or np.allclose(values, parts, rtol=1e-9, atol=0.0)
    if facts["given_record"]:
        return _table("steps after the record", facts["horizons"], [("error variance", values)])
    linear = "error variance" if parts is not None else "error variance, linear"  # of the best linear forecast
    rows = [(linear, values), ("seeing all parts", None if same and values else parts)]
    return _table("steps ahead", facts["horizons"], rows)


def _averaged(theory: SeriesTheory, facts: dict[str, Any]) -> list[str]:
    """What a mean of many steps is worth."""
    if not theory.stationarity.covariance_stationary:
        return []
    curve = facts["variance_of_mean"]
    spreads = None if curve["values"] is None else np.sqrt(curve["values"]).tolist()
    return _table("steps averaged", curve["counts"], [("sd of the mean", spreads)]) + _wrapped(_worth(facts))


def _worth(facts: dict[str, Any]) -> list[str]:
    said = []
    if facts["half_life"] is not None:
        said.append(f"half-life {facts['half_life']} step{'' if facts['half_life'] == 1 else 's'}")
    whole = facts["long_run_variance"]
    if whole is not None:
        said.append(f"long-run variance {number(whole)}")
        variance = facts["autocovariance"]["values"][0]
        if whole > DUST * variance:
            share = variance / whole
            worth = f"n/{number(float(f'{1 / share:.3g}'))}" if share < 1 else f"{number(float(f'{share:.3g}'))} n"
            said[-1] += f": a mean of n steps is worth {worth} independent values"
    return ["; ".join(said)] if said else []


def _correlogram(theory: SeriesTheory, lags: int) -> list[str]:
    values = theory.autocorrelation(range(1, min(lags, WIDEST) + 1)) if lags else None
    if values is None or not theory.stationarity.covariance_stationary:
        return []
    drawn = correlogram(values.tolist())
    return ["  autocorrelation", *scaled(drawn)] if drawn else []


def _law(facts: dict[str, Any]) -> list[str]:
    lines = []
    if facts["excess_kurtosis"] is not None and abs(facts["excess_kurtosis"]) > 1e-12:
        lines.append(f"excess kurtosis {number(facts['excess_kurtosis'])}")
    elif facts["gaussian"] and any(facts["variance"] or []):
        lines.append("jointly Gaussian")
    if isinstance(facts["highest_moment"], float) and facts["highest_moment"] > 0.0:
        lines.append(f"moments below order {number(facts['highest_moment'])} exist")
    return _wrapped(["; ".join(lines)]) if lines else []


def _without_dust(values: np.ndarray, least: float = DUST) -> list[float]:
    """Numbers with what is left of cancelled digits shown as 0."""
    size = abs(values[0]) if len(values) and values[0] else np.abs(values).max(initial=0.0)  # lag 0 is the scale
    return np.where(np.abs(values) < least * size, 0.0, values).tolist()


def _unknown(facts: dict[str, Any], steady: bool) -> list[str]:
    """Why numbers are missing, those with one reason together."""
    by_reason: dict[str, list[str]] = {}
    for what, why in facts.get("unknown", {}).items():
        if what in WANTED or (steady and "." not in what):
            by_reason.setdefault(why, []).append(what.replace("_", " "))
    return [f"{', '.join(names)} unknown: {why}" for why, names in by_reason.items()]


def _said_below(reason: str, facts: dict[str, Any]) -> bool:
    """Whether a verdict's remark on unknown moments comes again with the numbers that are missing."""
    begins, _, why = reason.partition(" unknown: ")
    missing = facts.get("unknown", {})
    return begins in ("mean", "moments") and why in (missing.get(what) for what in WANTED)


def _table(head: str, columns: Sequence[float], rows: Sequence[tuple[str, list | None]]) -> list[str]:
    """Rows of numbers under their steps or lags; what is unknown altogether is left out."""
    known = [(name, [number(v) for v in values]) for name, values in rows if values is not None]
    if not known or not columns:
        return []
    wide = max(len(head), *(len(name) for name, _ in known)) + 2
    cells = [[f"{c:.10g}", *(values[i] for _, values in known)] for i, c in enumerate(columns)]
    sizes = [max(map(len, column)) + 2 for column in cells]
    names = [head, *(name for name, _ in known)]
    return [
        "  " + name.ljust(wide) + "".join(cells[i][j].rjust(sizes[i]) for i in range(len(cells)))
        for j, name in enumerate(names)
    ]


def _cross(entries: Iterable[dict[str, Any]]) -> list[str]:
    lines: list[str] = []
    listed = list(entries)
    for entry in listed[:PAIRS]:
        lines += ["", f"{entry['series'][0]} with {entry['series'][1]}"]
        if "reason" in entry:
            lines += _wrapped([f"covariance unknown: {entry['reason']}"])
            continue
        rows = [("covariance", entry["covariance"]), ("correlation", entry["correlation"])]
        lines += _table("step", entry["steps"], rows)
    more = [f"… and more pairs of series that go together: these are the first {PAIRS}, --json tells of all"]
    return [*lines, "", *more] if len(listed) > PAIRS else lines


def _correlated(entries: Iterable[dict[str, Any]]) -> list[str]:
    lines: list[str] = []
    for entry in entries:
        values = entry["values"]
        implied = (
            f"of the values {number(values)}" if values is not None else f"of the values unknown: {entry['reason']}"
        )
        text = f"{entry['leader']} leads {entry['follower']}: correlation of the normals {number(entry['normals'])}, "
        lines += _wrapped([text + implied + _tails(entry)])
    return ["", "shocks that go together", *lines] if lines else []


def _tails(entry: dict[str, Any]) -> str:
    """How often both are far out together, where that is not what normals do."""
    if "copula" not in entry:
        return ""
    tails = entry["joint_tail"]
    chances = [number(float(f"{tails[name]:.3g}")) for name in ("chance", "normal")]
    share = f"{tails['share']:.0%}"
    return (
        f"; {entry['copula']}: when one is in its lowest {share}, so is the other with probability {chances[0]} "
        f"({chances[1]} under a normal copula)"
    )


def _repaired(spec: Spec) -> list[str]:
    stated = spec.raw.get("correlation") or []
    items = stated if isinstance(stated, list) else [stated]
    moved = max([item["moved"] for item in items if item.get("moved")], default=None)
    if moved is None:
        return []
    return _wrapped([f"a stated matrix was no correlation; the nearest one moves an entry by up to {number(moved)}"])


def _wrapped(texts: Iterable[str]) -> list[str]:
    return [line for text in texts for line in wrap(text, WIDTH, initial_indent="  ", subsequent_indent="    ")]


def number(x: float | None) -> str:
    """Six significant digits; a dash for what is not known."""
    return "–" if x is None else f"{0.0 if abs(x) < 1e-300 else x:.6g}".replace("-", "−")
