"""Digests of every gallery spec at a small size: `python -m tests.golden_specs` prints them as JSON.

With --write they are written to tests/golden/specs.json. A new spec adds a line; a line that changes is a change
of every user's values, which is right only with a new stream version, or before a first release.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import procgen as pg
from procgen.chance.kernel import compiling

ROOT = Path(__file__).parent.parent
FILE = ROOT / "tests" / "golden" / "specs.json"


NAMES = sorted(file.stem for file in (ROOT / "specs").glob("*.yaml"))


def one_small(name: str, paths: int = 40) -> Any:
    """A gallery spec with so many paths and at most 60 steps."""
    spec = pg.load(ROOT / "specs" / f"{name}.yaml").changed(paths=paths)
    return spec.changed(steps=min(60, spec.time.steps))


def small(paths: int = 40) -> Iterator[tuple[str, Any]]:
    """All of them by name."""
    for name in NAMES:
        yield name, one_small(name, paths)


def digests(compiled: bool = False) -> dict[str, str]:
    """The ensemble digest of 40 paths and at most 60 steps of each gallery spec, by name."""
    found = {}
    for name, spec in small():
        with compiling(compiled):
            found[name] = pg.render(spec).digest
    return found


if __name__ == "__main__":
    text = json.dumps(digests(), indent=1) + "\n"
    if "--write" in sys.argv:
        FILE.write_text(text)
    else:
        print(text)
