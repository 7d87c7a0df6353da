"""Mistakes that simulators make, in tables of anyone's: are they found, and named?

    python tests/studies/mistakes.py [--seeds 100]

A simulator in plain NumPy draws what a spec states, with one mistake or none. Its table is handed over as a plain CSV,
and as a Parquet file that pandas wrote: other column names, shuffled rows, and the time as text in place of steps.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

PATHS, STEPS, BURN = 400, 60, 100
RAW: dict[str, Any] = {
    "procgen": 1,
    "seed": 1,
    "paths": PATHS,
    "time": {"start": "2027-03-27T12:00", "every": "1h", "steps": STEPS, "zone": "Europe/Berlin"},
    "series": {
        "flow": [{"constant": 5}, {"ar": {"phi": 0.6, "sd": 1}}],
        "load": [{"white_noise": {"sd": 2}}],
        "day": [
            {"seasonal": {"period": 12, "harmonics": [{"amplitude": 1, "peak": 4}]}},
            {"white_noise": {"sd": 1}},
        ],
        "gain": [{"white_noise": {"sd": 0.5, "law": {"student_t": {"df": 5}}}}],
    },
}
# The mistake -> the series and the kind that the first line must name; none for the right simulator.
MISTAKES: Mapping[str, str] = {
    "none": "",
    "sign of φ": "flow: memory: ",
    "φ at lag 2 in place of lag 1": "flow: memory: ",
    "variance taken for standard deviation": "load: spread: ",
    "standard deviation taken for variance": "load: spread: ",
    "season starts one step late": "day: level: ",
    "t(5) not divided by its own sd": "gain: spread: ",
    "paths cut from one long series": "flow: structure: each path goes on where the one before ended",
    "paths standardised one by one": "load: structure: each path has mean 0 and standard deviation 1",
    "season's phase drawn by path": "day: structure: the season of 12 steps is in each path at a time of its own",
    "gaps filled with 0": "load: structure: ",
    "gaps filled with the value before": "load: structure: ",
    "all values standardised together": "load: structure: all values together have mean 0 and standard deviation 1",
    "each second path mirrors the one before": "load: structure: each step has mean 0",
    "seeds shared with the next path": "load ~ day: structure: path p of day repeats the draws of path p",
    "float32 on the way": "load: structure: values went through float32",
}
COLUMNS = {"path": "run", "time": "at", "flow": "m3", "load": "kW", "day": "Tag", "gain": "profit"}


def simulated(mistake: str, seed: int, paths: int = PATHS, steps: int = STEPS) -> dict[str, np.ndarray]:
    """Values (paths, steps) of each series by plain NumPy."""
    rng = np.random.default_rng(seed)
    phi = -0.6 if mistake == "sign of φ" else 0.6
    lag = 2 if mistake.startswith("φ at lag 2") else 1
    sd = {"variance taken for standard deviation": 4.0, "standard deviation taken for variance": 2**0.5}.get(mistake, 2)
    scale = 0.5 if mistake.startswith("t(5)") else 0.5 / (5 / 3) ** 0.5
    count, long = (1, BURN + paths * steps) if mistake.startswith("paths cut") else (paths, BURN + steps)
    flow = rng.standard_normal((count, long))
    for t in range(lag, long):
        flow[:, t] += phi * flow[:, t - lag]
    load = sd * rng.standard_normal((paths, steps))
    if mistake.startswith("paths standardised"):
        load = (load - load.mean(axis=1, keepdims=True)) / load.std(axis=1, keepdims=True)
    if mistake.startswith("gaps filled"):
        gone = rng.random((paths, steps)) < 0.02
        gone[:, 0] = False
        load = np.where(gone, 0.0 if mistake.endswith("0") else np.roll(load, 1, axis=1), load)
    if mistake.startswith("all values"):
        load = (load - load.mean()) / load.std()
    if mistake.startswith("each second"):
        load[1::2] = -load[::2]
    if mistake.startswith("float32"):
        load = load.astype(np.float32).astype(float)
    noise = rng.standard_normal((paths, steps))
    if mistake.startswith("seeds shared"):
        noise[:-1] = load[1:] / sd
    step = np.arange(steps) + (1 if mistake.startswith("season starts") else 0)
    if mistake.startswith("season's phase"):
        step = step + rng.uniform(0, 12, (paths, 1))
    return {
        "flow": 5 + flow[:, BURN:].reshape(paths, steps),
        "load": load,
        "day": np.cos(2 * np.pi * (step - 4) / 12) + noise,
        "gain": scale * rng.standard_t(5, (paths, steps)),
    }


def _long(values: Mapping[str, np.ndarray]) -> Any:
    import pandas as pd

    paths, steps = values["flow"].shape
    path, step = np.divmod(np.arange(paths * steps), steps)
    return pd.DataFrame({"path": path, "step": step} | {name: x.ravel() for name, x in values.items()})


def as_csv(values: Mapping[str, np.ndarray], folder: Path) -> tuple[Path, dict[str, str] | None]:
    """A plain CSV in the spec's own names."""
    _long(values).to_csv(folder / "plain.csv", index=False)
    return folder / "plain.csv", None


def as_parquet(values: Mapping[str, np.ndarray], folder: Path) -> tuple[Path, dict[str, str] | None]:
    """A Parquet file by pandas: other names, paths as text, rows shuffled, local time as text in place of the step."""
    import pandas as pd

    frame = _long(values)
    start = pd.Timestamp(RAW["time"]["start"]).tz_localize(RAW["time"]["zone"])
    stamps = np.array([(start + pd.Timedelta(hours=h)).isoformat() for h in range(values["flow"].shape[1])])
    frame["path"] = "run " + frame["path"].astype(str)
    frame = frame.assign(time=stamps[frame["step"]]).drop(columns="step").rename(columns=COLUMNS)
    frame.sample(frac=1, random_state=1).to_parquet(folder / "other.parquet")
    return folder / "other.parquet", COLUMNS


FORMATS: tuple[Callable[[Mapping[str, np.ndarray], Path], tuple[Path, dict[str, str] | None]], ...] = (
    as_csv,
    as_parquet,
)


def judged(mistake: str, write: Any, seed: int, folder: Path, paths: int = PATHS, steps: int = STEPS) -> Any:
    """The verdict on a table with a mistake in it."""
    from procgen.checks.validate import validate
    from procgen.ensemble.source import read_spec

    raw = RAW | {"paths": paths, "time": RAW["time"] | {"steps": steps}}
    file, columns = write(simulated(mistake, seed, paths, steps), folder)
    return validate(file, read_spec(raw), columns=columns)


def table(seeds: int) -> Iterator[str]:
    """Lines of a Markdown table, one a mistake."""
    yield f"| mistake, {PATHS} × {STEPS} | found, CSV | named, CSV | found, Parquet | named, Parquet |"
    yield "| --- | --- | --- | --- | --- |"
    for mistake, line in MISTAKES.items():
        cells = []
        for write in FORMATS:
            found = right = 0
            for seed in range(1, seeds + 1):
                with TemporaryDirectory() as folder:
                    answer = judged(mistake, write, seed, Path(folder))
                found += answer.agrees is False
                right += bool(line) and bool(answer.headline) and answer.headline[0].startswith(line)
            cells += [f"{found}/{seeds}", f"{right}/{seeds}" if line else "–"]
        yield f"| {mistake} | {' | '.join(cells)} |"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=100)
    options = parser.parse_args()
    for line in table(options.seeds):
        print(line, flush=True)


if __name__ == "__main__":
    main()
