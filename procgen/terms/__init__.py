"""The catalogue of terms, and the graph in which they run.

A module in this package that defines a `Term` with a `kind` adds it by existing: that is most of the files here, one a
family. `level`, `walk`, `arma` and `garch` show the range. What they share:

- What a term is: `base`. By which label it goes: `labels`. Which values it can have: `support`, and a whole series:
  `supports`.
- A spec becomes a graph, and the graph values: `given`, `graph` and what it refuses (`misfits`), correlated shocks
  (`mixing`), `run`, threads that share it (`hands`), one long path beside itself (`pieces`).
- The past: `start` and `vector_start` (stationary), `conditional` (of a variance), `burnt` (burn-ins), `exact` (from
  autocovariances), `vector_shapes` (what a system is given).
- A recorded past, from which a series leaves: `past`, by undoing one source (`past_single`) or by a filter over a sum
  (`past_filter`, `past_parts`, `open_start`).
- Numbers drawn by path: `varied`, `by_path`; many paths at once: `rows` and `stack`.
- Back from values: `recover` undoes and foretells; `ranks` where nothing can be undone, `followed`, `hidden_states`,
  `hidden_memory` and `instate` where chains stand behind the values.
- `recipe`: what each series depends on, so that two specs are compared without drawing.
"""

from __future__ import annotations

import importlib
import pkgutil
from collections.abc import Mapping
from functools import cache

from procgen.terms.base import Term


@cache
def catalogue() -> Mapping[str, type[Term]]:
    """Every kind that a spec may name, with its class, in order of family and kind."""
    found: dict[str, type[Term]] = {}
    for module in pkgutil.iter_modules(__path__):
        for item in vars(importlib.import_module(f"{__name__}.{module.name}")).values():
            if isinstance(item, type) and issubclass(item, Term) and item.kind:
                found[item.kind] = item
    return dict(sorted(found.items(), key=lambda pair: (pair[1].family, pair[0])))
