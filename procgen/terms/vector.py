"""Systems of several series that move each other: vector autoregressions, moving averages, and cointegration.

A system stands in a shared body; each of its components is an output, by name: `use: economy.vector_arma.rate`.
Innovations are a stream a component, mixed by the factor of their correlation in the order of the names. A stationary
system starts from the exact joint law of its last values and innovations; what lies further back follows by
regression on these, one step at a time, so that a deeper lag moves nothing.
"""

from __future__ import annotations

from itertools import pairwise
from typing import ClassVar

import numpy as np

from procgen.chance.kernel import kernel
from procgen.chance.laws import Normal
from procgen.chance.portable import cholesky, matmul
from procgen.spec.declare import Parameter, Reals, Record
from procgen.spec.named import Matrices, Names, Rows
from procgen.terms.base import Draw, Term, number, signed, stated
from procgen.terms.start import weigh
from procgen.terms.structural import with_outputs
from procgen.terms.vector_shapes import MOST_NAMES, fits, given, one_each, shape, shape_faults
from procgen.terms.vector_start import VectorStart, state_space

NORMAL = Normal()
UNIT_ROOT = 1e-7  # an eigenvalue nearer to 1 than this counts as 1
MATRICES = Matrices(Rows(Reals()))
NAMES = Parameter("names", "", Names(), "its components, by which `use` finds them; its own value is that of the first")
SPREADS = Parameter(
    "sd", "σ", Reals(above=0), "standard deviation of the shock of each component, or of all", unit="series"
)
CORRELATION = Parameter(
    "correlation", "R", Rows(Reals(at_least=-1, at_most=1)), "correlation of the shocks; none when absent", default=None
)


@kernel
def move(phi, theta, k, x, a):
    """k rows a step: x[t] = a[t] + Σ Φᵢ x[t−i] + Σ Θⱼ a[t−j]; matrices row by row, the past in the first rows."""
    p = phi.shape[0] // (k * k)
    q = theta.shape[0] // (k * k)
    for t in range(x.shape[0] // k - p):
        for row in range(k):
            v = a[(t + q) * k + row]
            for i in range(p * k):
                c = phi[(i // k * k + row) * k + i % k]
                if c != 0.0:
                    v = v + c * x[(t + p - 1 - i // k) * k + i % k]
            for j in range(q * k):
                c = theta[(j // k * k + row) * k + j % k]
                if c != 0.0:
                    v = v + c * a[(t + q - 1 - j // k) * k + j % k]
            x[(t + p) * k + row] = v


class VectorArma(Term):
    kind = "vector_arma"
    smooth = "filter"
    family = "systems"
    purpose = "several series that move each other: each a mix of the last values and shocks of all; outputs by name"
    source = "Lütkepohl (2005), ch. 2 and 11; regression signs"
    example = (
        "vector_arma: {names: [a, b], phi: [[0.5, 0.2], [-0.1, 0.7]], sd: [1, 2], correlation: [[1, 0.3], [0.3, 1]]}"
    )
    knows = "covariances of all components at any steps and lags; Gaussian law; strictly stationary"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        NAMES,
        Parameter(
            "phi", "Φ", MATRICES, "weights of the last values: row i has those that move component i", default=()
        ),
        Parameter("theta", "Θ", MATRICES, "weights of the last shocks, likewise", default=()),
        SPREADS,
        CORRELATION,
        Parameter(
            "before",
            "",
            Record(
                Parameter("x", "x", Rows(Reals()), "values before step 0, a row a step, oldest first", unit="series"),
                Parameter("shocks", "a", Rows(Reals()), "shocks before step 0, likewise", default=(), unit="series"),
            ),
            "what came before step 0, to leave from a known past instead of the stationary law",
            default=None,
        ),
    )

    @classmethod
    def outputs_of(cls, values):
        return tuple(values.get("names") or ())

    @classmethod
    def check(cls, values):
        k, before = len(values["names"]), values["before"]
        faults = [*shape_faults(values, square=("phi", "theta"))]
        yield from faults
        if faults:
            return
        radius = largest(values["phi"])
        if before is None and radius >= 1.0:
            yield (
                "phi",
                f"expected all eigenvalues of the recursion inside the unit circle, got one of size {radius:.6g}; "
                "shrink phi, use vector_error_correction for unit roots, or give the term its own "
                "`before: {x: [[…], …]}` to run it on purpose",
            )
        for name, past, part in (("x", "values", "phi"), ("shocks", "shocks", "theta")):
            if before is None:
                break
            rows, needs = before[name], len(values[part])
            if len(rows) < needs or not fits(rows, len(rows), k):
                need = f"{needs} or more rows of {k} past {past} in `{name}` (a row a step, one for each lag of {part})"
                mend = f"give those of {', '.join(values['names'])} in each row, the last step last"
                yield "before", f"expected {need}, got {given(rows)}; {mend}"

    def __init__(self, values):
        super().__init__(values)
        self.outputs = tuple(self.names)  # type: ignore[misc]
        self.k = len(self.outputs)
        self.lags, self.moving = self.phi, self.values.get("theta", ())
        self.loading = spread_factor(self.k, self.sd, self.correlation)

    def draws(self):
        return tuple(Draw(f"innovation of {name}", NORMAL) for name in self.outputs)

    def past(self):
        return None if self.before is None else len(self.before["x"])

    def reach(self, head):
        if self.before is not None:
            return (0,) * self.k
        q = len(self.moving)
        return ((q + max(0, head - max(1, len(self.lags)))) if q else 0,) * self.k

    def begin(self, before):
        p, q, k = len(self.lags), len(self.moving), self.k
        if self.before is not None:
            rows = [np.array(self.before[name]).reshape(-1, 1) for name in ("x", "shocks")]
            return self._named(rows[0], before.head), {
                "x": rows[0][len(rows[0]) - p * k :],
                "a": rows[1][len(rows[1]) - q * k :],
            }
        x, z = VectorStart(self.lags, self.moving, self.loading).draw(
            lambda step, count: _interleaved([part[::-1] for part in before.inputs], step, count),
            lambda step, count: (
                before.normals((step + count) * MOST_NAMES)
                .reshape(step + count, MOST_NAMES, -1)[step:, :k]
                .reshape(count * k, -1)
            ),
            before.head,
        )
        x = _oldest_first(x, k)
        a = _oldest_first([row for lag in range(q) for row in weigh(self.loading, z[lag * k : (lag + 1) * k])], k)
        return self._named(x, before.head), {"x": x[len(x) - p * k :], "a": a}

    def _named(self, x, head):
        if not head:
            return None
        return self._outputs(x[len(x) - head * self.k :])

    def _outputs(self, x):
        parts = [np.ascontiguousarray(x[i :: self.k]) for i in range(self.k)]
        return {"": parts[0], **dict(zip(self.outputs, parts, strict=True))}

    def recurse(self, inputs, state, at):
        p, q, k = len(self.lags), len(self.moving), self.k
        steps, width = inputs[0].shape
        a, x = np.empty(((q + steps) * k, width)), np.empty(((p + steps) * k, width))
        a[: q * k], x[: p * k] = state["a"], state["x"]
        for i, row in enumerate(weigh(self.loading, inputs)):
            a[q * k + i :: k] = row
        move(_flat(self.lags), _flat(self.moving), k, x, a)
        rest = {"x": x[len(x) - p * k :].copy(), "a": a[len(a) - q * k :].copy()}
        return self._outputs(x[p * k :]), rest

    def moments(self, axis, *inputs):
        noises = [axis.source(f"{self.address}.{name}", NORMAL, 1.0) for name in self.outputs]
        parts = axis.vector(noises, self.lags, self.moving, self.loading, self.before)
        return with_outputs(parts[0], **dict(zip(self.outputs, parts, strict=True)))

    def equation(self, *inputs):
        return (
            ",  ".join(f"{name}[t] = {self._right(i)}".replace("= + ", "= ") for i, name in enumerate(self.outputs))
            + f",  {self._spreads()}{self._left()}"
        )

    def _left(self):
        """What came before step 0, where that is stated."""
        if self.before is None:
            return ""
        past = (("{}", self.before["x"]), ("ε_{}", self.before["shocks"]))
        columns = [
            (form.format(name), column)
            for form, rows in past
            for name, column in zip(self.outputs, zip(*rows, strict=True), strict=False)
        ]
        return "".join(f",  {stated(name, column)}" for name, column in columns)

    def _right(self, row):
        # ε for shocks, which no component can be named
        terms = [
            signed(matrix[row][j], f"{name}[t−{lag}]")
            for part, names in ((self.lags, self.outputs), (self.moving, [f"ε_{name}" for name in self.outputs]))
            for lag, matrix in enumerate(part, start=1)
            for j, name in enumerate(names)
            if matrix[row][j]
        ]
        return " ".join([*terms, f"+ ε_{self.outputs[row]}[t]"])

    def _spreads(self):
        sds = ", ".join(number(sd) for sd in (self.sd if len(self.sd) == self.k else self.sd * self.k))
        correlated = "correlated" if self.correlation else "independent"
        return f"sd ε = ({sds}), {correlated}"


class VectorErrorCorrection(VectorArma):
    kind = "vector_error_correction"
    smooth = "filter"
    purpose = "several series that wander together: their changes pull stated relations between them back to 0"
    source = "Engle & Granger (1987); Johansen (1995)"
    example = "vector_error_correction: {names: [a, b], relations: [[1, -1]], adjustment: [[-0.2], [0.1]], sd: 1}"
    knows = "mean and covariances of all components at any steps and lags; Gaussian law; the number of unit roots"
    no_past = "a system has none before its `start`; lag less"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        NAMES,
        Parameter("relations", "β′", Rows(Reals()), "a row a relation: the weights of the components in it"),
        Parameter("adjustment", "α", Rows(Reals()), "row i has how much each relation moves component i a step"),
        Parameter("phi", "Γ", MATRICES, "weights of the last changes, likewise", default=()),
        SPREADS,
        CORRELATION,
        Parameter("start", "x₀", Reals(), "value of each component at step 0, or of all", (0.0,), "series"),
    )

    @classmethod
    def check(cls, values):
        k, r = len(values["names"]), len(values["relations"])
        faults = [*shape_faults(values, square=("phi",))]
        if not fits(values["relations"], r, k):
            mend = f"give the weights of {', '.join(values['names'])} in this order, 0 for one that is not in it"
            expected = f"expected a row of {k} weights for each relation, one a component"
            faults.append(("relations", f"{expected}, got {given(values['relations'])}; {mend}"))
        if r >= k:
            why = f"with {r} of them nothing wanders; use vector_arma"
            faults.append(("relations", f"expected fewer relations than the {k} components: {why}"))
        if not fits(values["adjustment"], k, r):
            mend = f"give a row to each of {', '.join(values['names'])}, with a number for each relation, 0 for none"
            expected = f"expected {shape(k, r)} (a row a component, a column a relation)"
            faults.append(("adjustment", f"{expected}, got {given(values['adjustment'])}; {mend}"))
        faults += one_each("start", values["start"], values["names"])
        yield from faults
        if faults:
            return
        sizes = eigenvalues(in_levels(values["relations"], values["adjustment"], values["phi"]))
        ones = int(np.count_nonzero(np.abs(sizes - 1.0) <= UNIT_ROOT))
        others = max([0.0, *np.abs(sizes[np.abs(sizes - 1.0) > UNIT_ROOT]).tolist()])
        if ones != k - r or others >= 1.0:
            yield (
                "adjustment",
                f"expected as many unit roots as components less relations ({k - r}), all else inside the unit circle, "
                f"got {ones} and a root of size {others:.6g}; adjust against a relation: lower what makes it positive",
            )

    def __init__(self, values):
        super().__init__({**values, "before": None})
        self.lags = in_levels(self.relations, self.adjustment, self.phi)
        first = self.start if len(self.start) == self.k else self.start * self.k
        self.first = np.array(first, np.float64).reshape(-1, 1)

    def past(self):
        return 0

    def reach(self, head):
        return (0,) * self.k

    def begin(self, before):
        return None, {}

    def recurse(self, inputs, state, at):
        if "x" in state:
            return super().recurse(inputs, state, at)
        # Step 0 is the start itself, after which the system goes on as if it had stood there before.
        still = {"x": np.concatenate([self.first] * len(self.lags)), "a": np.zeros((0, 1))}
        out, rest = super().recurse([part[1:] for part in inputs], still, at[1:])
        first = self._outputs(self.first + np.zeros((1, inputs[0].shape[1])))
        return {name: np.concatenate([first[name], out[name]]) for name in out}, rest

    def moments(self, axis, *inputs):
        noises = [axis.source(f"{self.address}.{name}", NORMAL, 1.0) for name in self.outputs]
        parts = axis.vector(noises, self.lags, (), self.loading, start=self.first[:, 0], rank=len(self.relations))
        return with_outputs(parts[0], **dict(zip(self.outputs, parts, strict=True)))

    def equation(self, *inputs):
        relations = [
            " ".join(signed(c, f"{name}[t−1]") for c, name in zip(row, self.outputs, strict=True) if c)
            for row in self.relations
        ]
        lines = []
        for i, name in enumerate(self.outputs):
            pulls = [
                signed(c, f"({relation.removeprefix('+ ')})")
                for c, relation in zip(self.adjustment[i], relations, strict=True)
                if c
            ]
            changes = [
                signed(matrix[i][j], f"Δ{other}[t−{lag}]")
                for lag, matrix in enumerate(self.phi, start=1)
                for j, other in enumerate(self.outputs)
                if matrix[i][j]
            ]
            lines.append(f"Δ{name}[t] = {' '.join([*pulls, *changes, f'+ ε_{name}[t]']).removeprefix('+ ')}")
        first = ", ".join(f"{name}[0] = {number(x)}" for name, x in zip(self.outputs, self.first[:, 0], strict=True))
        return ",  ".join([*lines, self._spreads(), first])


def in_levels(relations, adjustment, phi):
    """The matrices of the same system in its values: Φ₁ = I + αβ′ + Γ₁, Φᵢ = Γᵢ − Γᵢ₋₁, the last −Γ."""
    pull = matmul(np.array(adjustment, np.float64), np.array(relations, np.float64))
    changes = [np.array(matrix, np.float64) for matrix in phi]
    first = np.eye(len(pull)) + pull + (changes[0] if changes else 0.0)
    later = [after - before for before, after in pairwise(changes)]
    return (first, *later, *([-changes[-1]] if changes else []))


def spread_factor(k, sd, correlation):
    """Lower factor of the covariance of the shocks."""
    scale = np.array(sd if len(sd) == k else tuple(sd) * k, np.float64)
    return scale[:, None] * (cholesky(np.array(correlation)) if correlation else np.eye(k))


def eigenvalues(phi):
    """Eigenvalues of the recursion, complex; what decides whether it is stationary."""
    k = len(phi[0])
    a, _ = state_space(phi, (), np.eye(k), len(phi), 0)
    return np.linalg.eigvals(a)


def largest(phi):
    return float(np.abs(eigenvalues(phi)).max()) if len(phi) else 0.0


def _flat(matrices):
    return np.array(matrices, np.float64).reshape(-1)


def _interleaved(parts, step, count):
    """Rows of `parts`, k a step, from `step` on: those of the first part come first in each step."""
    return [part[step + i] for i in range(count) for part in parts]


def _oldest_first(rows, k):
    """Rows that are k a step, newest step first, turned round step by step."""
    if not rows:
        return np.zeros((0, 1))
    x = np.array(rows)
    return x.reshape(-1, k, x.shape[1])[::-1].reshape(x.shape)
