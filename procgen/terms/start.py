"""The stationary past of linear terms: which recursions have one, and how it is drawn exactly.

A term's past is the vector m = (x[−1], …, x[−p], a[−1], …, a[−q]): its last values and shocks, newest
first. For Gaussian shocks m is drawn from its exact covariance S = Σ AʲQA′ʲ through a Cholesky factor;
terms with correlated shocks draw theirs from the joint S, in the order in which the correlation names
them, so that a name appended moves nobody. What lies further back follows by regression on m, one step
at a time, so that a deeper look back moves nothing either.

Everything here makes values: only portable operations (see `procgen.chance.portable`).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from functools import cached_property, lru_cache
from typing import Any

import numpy as np

from procgen.chance.portable import cholesky, matmul
from procgen.spec.records import dataclass
from procgen.terms.rows import Unlike, plain, row_in

Array = np.ndarray
NEGLIGIBLE = 1e-12
DENSE = 40  # orders up to which a lone autoregression starts through the factor of its covariance
LONGEST = 2**19  # steps of burn-in; 16 paths of it fit in memory


def partial_autocorrelations(phi: Sequence[float]) -> list[float] | None:
    """The partial autocorrelations of an AR polynomial by step-down; None unless all lie inside (−1, 1).

    Source: Durbin (1960); Barndorff-Nielsen & Schou (1973): the recursion has a causal stationary
    solution exactly when every one of them is inside the unit interval.
    """
    partials: list[float] = []
    for a in _orders(phi):
        if not -1.0 < a[-1] < 1.0:
            return None
        partials.append(float(a[-1]))
    return partials[::-1]


def _orders(phi: Sequence[float]) -> Iterator[Array]:
    """Best linear predictors from the last p, p − 1, …, 1 values, by step-down; the first is phi itself."""
    a = np.array([float(c) for c in phi])
    while len(a):
        yield a
        k = a[-1]
        with np.errstate(over="ignore", invalid="ignore"):
            a = (a[:-1] + k * a[-2::-1]) / (1.0 - k * k)


class Predictors:
    """A Gaussian autoregression towards the past, one value at a time: from k newer values, up to p of them.

    It gives the law of the Cholesky factor of the stationary covariance, and to rounding its values, in O(p²).
    Source: Durbin (1960); reversed in time a Gaussian autoregression has the same predictors.
    """

    def __init__(self, phi: Sequence[float], sd: float):
        self.orders = [np.zeros(0), *list(_orders(phi))[::-1]]
        variances = [sd * sd]
        for a in self.orders[:0:-1]:
            variances.append(variances[-1] / (1.0 - a[-1] * a[-1]))
        self.variances = np.array(variances[::-1])

    def draw(self, z: Sequence[Array]) -> list[Array]:
        """x[−1], x[−2], … from as many standard normals, at least p."""
        p = len(self.orders) - 1
        x = np.sqrt(self.variances[: len(z), None][:p]) * np.array(z[:p])
        for k in range(p):  # what x[k] adds to all that lie further back, in one go
            weights = np.array([self.orders[t][t - 1 - k] for t in range(k + 1, p)])
            x[k + 1 :] += weights[:, None] * x[k]
        out = list(x)
        for more in z[p:]:
            out.append(self.further(out, more))
        return out

    def further(self, x: list[Array], z: Array) -> Array:
        """The next value further back of at least p."""
        phi = self.orders[-1].tolist()
        total = np.sqrt(self.variances[-1]) * z
        for i, c in enumerate(phi, start=1):
            if c:
                total = total + c * x[-i]
        return total


def companion(phi: Sequence[float], theta: Sequence[float], depth_x: int, depth_a: int) -> tuple[Array, Array]:
    """Transition A and shock loading b of m = (x lags, a lags): m[t] = A m[t−1] + b a[t].

    Coefficients that are rows give one A a path, (paths, n, n).
    """
    n, paths = depth_x + depth_a, row_in((tuple(phi), tuple(theta)))
    a, b = np.zeros((paths, n, n) if paths else (n, n)), np.zeros(n)
    for k, coefficient in enumerate(phi):
        a[..., 0, k] = coefficient
    for k, coefficient in enumerate(theta):
        a[..., 0, depth_x + k] = coefficient
    for i in range(1, depth_x):
        a[..., i, i - 1] = 1.0
    for i in range(1, depth_a):
        a[..., depth_x + i, depth_x + i - 1] = 1.0
    b[0] = 1.0
    if depth_a:
        b[depth_x] = 1.0
    return a, b


def stationary_cross(a: Array, q: Array, b: Array) -> Array:
    """Σ_j aʲ q b′ʲ by doubling: S ← S + a S b′, a ← a², b ← b²."""
    if max(a.ndim, q.ndim, b.ndim) > 2:
        return _crosses(a, q, b)
    if q.size == 1:
        return np.full((1, 1), _cross_of_one(float(a[0, 0]), float(q[0, 0]), float(b[0, 0])))
    total = q
    while True:
        added = matmul(matmul(a, total), b.T.copy())
        total = total + added
        if np.max(np.abs(added)) <= 2.0**-60 * np.max(np.abs(total)):
            return total
        a, b = matmul(a, a), matmul(b, b)


def _crosses(a: Array, q: Array, b: Array) -> Array:
    """`stationary_cross` of many paths (paths, n, m), each with as many doublings as it takes alone."""
    total, done = q, np.zeros(1, dtype=bool)
    while True:
        added = matmul(matmul(a, total), np.swapaxes(b, -1, -2))
        total = np.where(done[..., None, None], total, total + added)
        largest, change = (np.max(np.abs(part), axis=(-1, -2)) for part in (total, added))
        done = done | (change <= 2.0**-60 * largest)
        if done.all():
            return total
        a, b = matmul(a, a), matmul(b, b)


def _cross_of_one(a: float, q: float, b: float) -> float:
    """`stationary_cross` of single numbers, by the same operations in plain floats: each path may have its own."""
    total = q
    while True:
        added = 0.0 + (0.0 + a * total) * b
        total = total + added
        if abs(added) <= 2.0**-60 * abs(total):
            return total
        a, b = 0.0 + a * a, 0.0 + b * b


def decay_length(a: Array, negligible: float = NEGLIGIBLE) -> int:
    """The smallest n with every entry of |Aⁿ| at most `negligible`, found by doubling and then halving."""
    if a.size == 1:
        return _decay_of_one(float(a[0, 0]), negligible)
    return _decay_of_many(np.asarray(a, np.float64).tobytes(), len(a), negligible)


@lru_cache(maxsize=256)
def _decay_of_many(entries: bytes, size: int, negligible: float) -> int:
    """The same of a matrix of several rows; it is asked for every tile, and takes size^3 steps a product."""
    a = np.frombuffer(entries).reshape(size, size)
    powers = [a]
    while np.max(np.abs(powers[-1])) > negligible:
        if 1 << len(powers) > LONGEST:
            raise ValueError(f"the recursion still feels its start after {LONGEST:,} steps")
        powers.append(matmul(powers[-1], powers[-1]))
    n, reached = 0, np.eye(len(a))
    for k in range(len(powers) - 2, -1, -1):
        further = matmul(reached, powers[k])
        if np.max(np.abs(further)) > negligible:
            n, reached = n + (1 << k), further
    return n + 1


def lasting(length: Callable[[], int]) -> float:
    """Steps until nothing is left to the last bit where `length` gives those until 1e-12 is; inf for more than it can.

    For the last bits, which are rounded away at random, there are some more.
    """
    try:
        return int(length()) * 3 // 2 + 32
    except ValueError:
        return np.inf


def _decay_of_one(a: float, negligible: float) -> int:
    """`decay_length` of a single number, by the same products in plain floats: each path may have its own."""
    powers = [a]
    while abs(powers[-1]) > negligible:
        if 1 << len(powers) > LONGEST:
            raise ValueError(f"the recursion still feels its start after {LONGEST:,} steps")
        powers.append(powers[-1] * powers[-1])
    n, reached = 0, 1.0
    for k in range(len(powers) - 2, -1, -1):
        further = reached * powers[k]
        if abs(further) > negligible:
            n, reached = n + (1 << k), further
    return n + 1


def decay_lengths(a: Array) -> Array:
    """`decay_length` of many single numbers at once, by the same products: each path may have its own."""
    powers = [a]
    while (np.abs(powers[-1]) > NEGLIGIBLE).any():
        if 1 << len(powers) > LONGEST:
            raise ValueError(f"the recursion still feels its start after {LONGEST:,} steps")
        powers.append(powers[-1] * powers[-1])
    n, reached = np.zeros(a.shape, np.int64), np.ones(a.shape)
    for k in range(len(powers) - 2, -1, -1):
        further = reached * powers[k]
        more = np.abs(further) > NEGLIGIBLE
        n, reached = np.where(more, n + (1 << k), n), np.where(more, further, reached)
    return n + 1


@dataclass(frozen=True)
class Member:
    """One linear term in a joint start: its recursion, and its shock's standard deviation; or rows, one a path."""

    phi: tuple[Any, ...]
    theta: tuple[Any, ...]
    sd: Any

    @property
    def p(self) -> int:
        return max(1, len(self.phi))

    @property
    def q(self) -> int:
        return len(self.theta)


class JointStart:
    """The joint stationary past of terms whose Gaussian shocks have the correlation matrix R.

    `normals` are taken per member: q of its own shocks before step 0, then p of its role ``start``.
    """

    def __init__(self, members: Sequence[Member], correlation: Array):
        self.members = tuple(members)
        self.correlation = np.asarray(correlation, dtype=np.float64)
        self.paths = max((row_in((m.phi, m.theta, m.sd)) for m in self.members), default=0)
        if self.paths and any(len(m.phi) > DENSE and not m.q for m in self.members):
            raise Unlike("long autoregressions start from predictors of their own")

    def _covariance(self, extra: int) -> tuple[Array, list[int], list[int]]:
        """S of all members to `extra` more depth; the indices of the core, and of the newest-first rest."""
        depths = [(m.p + extra, m.q + extra if m.q else 0) for m in self.members]
        systems = [companion(m.phi, m.theta, *depth) for m, depth in zip(self.members, depths, strict=True)]
        offsets = np.concatenate([[0], np.add.accumulate([p + q for p, q in depths])])
        s = np.zeros((*([self.paths] if self.paths else []), offsets[-1], offsets[-1]))
        for i, (ai, bi) in enumerate(systems):
            for j, (aj, bj) in enumerate(systems[: i + 1]):
                scale = self.correlation[i, j] * self.members[i].sd * self.members[j].sd
                if np.all(scale == 0.0):
                    continue
                block = stationary_cross(ai, _times(scale, bi[:, None] * bj[None, :]), aj)
                s[..., offsets[i] : offsets[i + 1], offsets[j] : offsets[j + 1]] = block
                s[..., offsets[j] : offsets[j + 1], offsets[i] : offsets[i + 1]] = np.swapaxes(block, -1, -2)
        core, rest = [], []
        for m, (px, qa), o in zip(self.members, depths, offsets, strict=False):
            o = int(o)
            core += [o + px + k for k in range(m.q)] + [o + k for k in range(m.p)]
            rest += [o + m.p + k for k in range(px - m.p)] + [o + px + m.q + k for k in range(qa - m.q)]
        return s, core, rest

    @cached_property
    def factor(self) -> Array:
        """Lower factor of the core covariance: rows are each member's shocks, then its values."""
        s, core, _ = self._covariance(0)
        return cholesky(s[..., core, :][..., core])

    @cached_property
    def further(self) -> tuple[Array, Array]:
        """Weights on the core, and the factor of what is new, for one more step back."""
        s, core, rest = self._covariance(1)
        order = core + rest
        whole = cholesky(s[..., order, :][..., order])
        n = len(core)
        return _solve_right(whole[..., :n, :n], whole[..., n:, :n]), whole[..., n:, n:]

    @cached_property
    def alone(self) -> dict[int, Predictors]:
        """Long autoregressions that no earlier member moves: they start from predictors, with others or without."""
        return {
            i: Predictors(m.phi, m.sd)
            for i, m in enumerate(self.members)
            if len(m.phi) > DENSE and not m.q and not np.any(self.correlation[i, :i])
        }

    def variance(self, index: int = 0) -> Any:
        """The stationary variance of one member's values, a row where its numbers are rows."""
        member = self.members[index]
        if len(member.phi) > DENSE and not member.q:
            return float(Predictors(member.phi, member.sd).variances[0])
        a, b = companion(member.phi, member.theta, member.p, member.q)
        s = stationary_cross(a, _times(member.sd * member.sd, b[:, None] * b[None, :]), a)
        return plain(s[..., 0, 0])

    def settle(self, z: Sequence[Array]) -> Array:
        """The one member's past values, newest first, from its scaled shocks and then its start normals."""
        if self.alone:
            return np.array(self.alone[0].draw(z))
        return np.array(weigh(self.factor, z)[self.members[0].q :])

    def draw(self, shocks, starts, head: int) -> list[tuple[Array, Array]]:
        """Each member's past values (at least p, at least `head`) and shocks (q), newest first.

        Parameters
        ----------
        shocks, starts : sequences of callables, one a member
            ``shocks[i](first, count)`` and ``starts[i](first, count)`` give standard normals
            (count, paths) at places first, first + 1, … counted backwards from step −1.
        """
        if len(self.alone) == len(self.members) == 1:
            x = np.array(self.alone[0].draw(starts[0](0, max(head, self.members[0].p))))
            return [(x, np.zeros((0, x.shape[1])))]
        z = []
        for i, m in enumerate(self.members):
            z += [*shocks[i](0, m.q), *starts[i](0, m.p)]
        core = weigh(self.factor, z)
        xs, shock_rows, place = [], [], 0
        for m in self.members:
            shock_rows.append(core[place : place + m.q])
            xs.append(core[place + m.q : place + m.q + m.p])
            place += m.q + m.p
        for i, predictors in self.alone.items():
            xs[i] = predictors.draw(starts[i](0, self.members[i].p))
        self._extend(xs, shock_rows, shocks, starts, head)
        return [
            (np.array(x), np.array(a[: m.q]) if m.q else np.zeros((0, x[0].shape[0])))
            for x, a, m in zip(xs, shock_rows, self.members, strict=True)
        ]

    def _extend(self, xs, shock_rows, shocks, starts, head):
        if head <= min(m.p for m in self.members):
            return
        weights, factor = self.further
        for step in range(head - min(m.p for m in self.members)):
            m, z = [], []
            for i, member in enumerate(self.members):
                m += [*shock_rows[i][step : step + member.q], *xs[i][step : step + member.p]]
                z += [*starts[i](member.p + step, 1)]
                z += [*shocks[i](member.q + step, 1)] if member.q else []
            new = [w + n for w, n in zip(weigh(weights, m), weigh(factor, z), strict=True)]
            for i, member in enumerate(self.members):
                value = new.pop(0)
                if i in self.alone:
                    value = self.alone[i].further(xs[i], starts[i](member.p + step, 1)[0])
                xs[i].append(value)
                if member.q:
                    shock_rows[i].append(new.pop(0))


def weigh(matrix: Array, vectors: Sequence[Array]) -> list[Array]:
    """Rows Σ_j matrix[i, j]·vectors[j], added in order; exact zeros are passed over."""
    if matrix.ndim > 2:
        return [_weighed(weights.T, vectors) for weights in np.moveaxis(matrix, 1, 0)]
    out = []
    for weights in matrix:
        total = None
        for w, v in zip(weights.tolist(), vectors, strict=True):
            if w != 0.0:
                total = w * v if total is None else total + w * v
        out.append(np.zeros_like(vectors[0]) if total is None else total)
    return out


def _weighed(weights: Array, vectors: Sequence[Array]) -> Array:
    """Σ_j weights[j]·vectors[j] of weights (count, paths), as `weigh` has it for each path."""
    total = np.full(weights.shape[1], -0.0)  # what changes nothing that is added to it
    for w, v in zip(weights, vectors, strict=True):
        if w.any():
            total = np.where(w != 0.0, total + w * v, total)
    return np.where(weights.any(axis=0), total, 0.0)


def _times(scale: Any, matrix: Array) -> Array:
    """A matrix times a number, or one matrix a path of a row."""
    return scale[:, None, None] * matrix if np.ndim(scale) else scale * matrix


def _solve_right(lower: Array, rows: Array) -> Array:
    """W with W·lower = rows, for a lower factor whose zero columns stand for what is already determined."""
    w = np.zeros_like(rows)
    for j in range(lower.shape[-1] - 1, -1, -1):
        pivot = lower[..., j, j, None]
        if not pivot.any():
            continue
        rest = rows[..., :, j].copy()
        for i in range(j + 1, lower.shape[-1]):
            rest = rest - w[..., :, i] * lower[..., i, j, None]
        w[..., :, j] = np.where(pivot != 0.0, rest / np.where(pivot != 0.0, pivot, 1.0), 0.0)
    return w
