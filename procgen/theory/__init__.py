"""The algebra of moments: exact means, covariances, laws and verdicts of composed series."""

from procgen.theory.axis import Axis
from procgen.theory.expression import Expression
from procgen.theory.garch import Garch
from procgen.theory.series import CrossTheory, SeriesTheory, Theory, theory
from procgen.theory.system import System
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import Stationarity

__all__ = [
    "Axis",
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
