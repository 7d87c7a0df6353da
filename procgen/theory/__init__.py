"""The algebra of moments: exact means, covariances, laws and verdicts of composed series. Nothing is simulated.

The way through it: a term writes its moments on an `axis`, which makes an `expression`: known functions (`known`) times
`monomials` of `linear` forms of `sources`. `series` asks it, and `whole` joins the series of a spec. What has no answer
raises `unknown`, with its reason.

- Moments of expressions: `covariance`, `wick` (products), `exponentials`, `cumulants` (orders 3 and 4), `fourth`,
  `ties` and `copula` (two shocks of one step).
- Linear series: `arma`, `weights`, `recursion`, `longhand` (sums that cancel), `system` with `along` and `layout`
  (state spaces, any step), `wold`, `vector`, `fractional`, `elapsed` (unequal steps), `left` (a recorded past).
- Volatility: `volatile` (constructors), `volatility`, `garch`, `powers`, `firstorder`, `perpetuity`, `transient`,
  `logvariance`, `parallel`.
- Processes that are no filter: `processes`, `running`, `stated`, `chains`, `markov`, `bends`, `lattice`, `distributed`,
  `bootstrap`.
- Laws at one step: `laws`, `counted`, `lumps` (values with a chance of their own), `mixtures`, `joint`, `stable`,
  `characteristic`, `averages`.
- What is asked of a series: `memory`, `spectrum`, `horizon` with `filtering`, `verdict` (is it stationary), `doubles`
  (what their rounding hides).
- Drawn parameters, averaged over their law: `varied`, `quadrature`, `mixed`, `mixedseries`, `mixedlaw`, `mixedlumps`.
"""

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
