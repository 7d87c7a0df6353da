"""The algebra of moments: exact means, covariances, laws and verdicts of composed series."""

import sys
from types import ModuleType

from procgen.theory.axis import Axis
from procgen.theory.expression import Expression
from procgen.theory.garch import Garch
from procgen.theory.series import CrossTheory, SeriesTheory
from procgen.theory.system import System
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import Stationarity
from procgen.theory.whole import Correlated, Theory, theory

__all__ = [
    "Axis",
    "Correlated",
    "CrossTheory",
    "Expression",
    "Garch",
    "SeriesTheory",
    "Stationarity",
    "System",
    "Theory",
    "Unknown",
    "theory",
]


class _Callable(ModuleType):
    """This package under its public name: `procgen.theory(spec)` is `procgen.theory.theory(spec)`."""

    def __call__(self, spec: object) -> Theory:
        """The theory of every series of a spec, derived and not simulated: ``th["load_kw"].variance([0, 96])``.

        `spec` is what `procgen.load` takes. Numbers that are not known are None, and `.reason(name)` says why.
        Raises SpecError with every fault of the spec.
        """
        return theory(spec)


sys.modules[__name__].__class__ = _Callable
