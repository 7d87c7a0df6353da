"""The catalogue of terms. A module in this package that defines a `Term` with a `kind` adds it by existing."""

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
