"""Time series whose true behaviour is known: a written spec becomes theory, an ensemble of paths, and a verdict.

import procgen as pg

spec = pg.load("specs/cold-store.yaml")              # pg.SpecError lists every fault
th = pg.theory(spec)                                 # th["load_kw"].variance([0, 96])
ens = pg.render(spec, out="build/cold-store")        # or out=None: in memory
ens["load_kw"]                                       # (paths, steps) float64; frames: ens.panel(), ens.wide("load_kw")
for path, frame in ens.each_path(): ...              # a frame a path, without loading all
pg.validate(ens, false_alarm=0.001)                  # .agrees, .checks, .to_html("report.html")
pg.difference(ens, pg.render(spec.variant("heatwave")))  # which series, from which step on, and by how much

`procgen.testing` has fixtures for pytest.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from procgen.api import load
    from procgen.checks.difference import Difference, difference
    from procgen.checks.validate import validate
    from procgen.checks.verdict import Verdict
    from procgen.ensemble.check import check_digest
    from procgen.ensemble.ensemble import Ensemble, open_ensemble
    from procgen.ensemble.errors import EnsembleError
    from procgen.ensemble.job import render
    from procgen.spec.model import Spec, SpecError
    from procgen.theory import theory

__version__ = "0.1.0"

_HOMES = {
    "Difference": "procgen.checks.difference",
    "Ensemble": "procgen.ensemble.ensemble",
    "EnsembleError": "procgen.ensemble.errors",
    "Spec": "procgen.spec.model",
    "SpecError": "procgen.spec.model",
    "Verdict": "procgen.checks.verdict",
    "check_digest": "procgen.ensemble.check",
    "difference": "procgen.checks.difference",
    "load": "procgen.api",
    "open_ensemble": "procgen.ensemble.ensemble",
    "render": "procgen.ensemble.job",
    "validate": "procgen.checks.validate",
}

__all__ = [
    "Difference",
    "Ensemble",
    "EnsembleError",
    "Spec",
    "SpecError",
    "Verdict",
    "__version__",
    "check_digest",
    "difference",
    "load",
    "open_ensemble",
    "render",
    "theory",
    "validate",
]


def __getattr__(name: str) -> Any:
    """Public names are imported when they are first used, so that `import procgen` costs nothing."""
    if name == "theory":  # the package of that name, which can be called
        return importlib.import_module("procgen.theory")
    if name not in _HOMES:
        raise AttributeError(f"module 'procgen' has no attribute {name!r}")
    value = getattr(importlib.import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)
