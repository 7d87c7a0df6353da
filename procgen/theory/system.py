"""State spaces: covariances of what has no stationary law, exact at any step.

    s(t) = A s(t-1) + B e(t),   y(t) = C s(t),   P(0) = Cov s(0)

Its state holds the lags of each base, each running sum, the last season of each seasonal sum, and each value of step
0 that is remembered. Variances at a few steps come from doubling A and the sum of A^j Q A'^j (Smith 1968, SIAM J.
Appl. Math. 16, 198-201), so that step 1e9 costs thirty products; at many steps from the responses C A^j B, added up
as squares.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import field
from functools import cached_property

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory.along import Along
from procgen.theory.arma import companion, cross_covariance
from procgen.theory.layout import Layout, width_of
from procgen.theory.linear import At, Base, Frozen, Key, Linear, Season, Sum, base_of
from procgen.theory.sources import Source, Space
from procgen.theory.unknown import Unknown

LARGEST_STATE = 1500
MANY = 128  # from so many distinct gaps on, a table of responses is cheaper than powers
OVERHEAD = 20_000  # of a few small array operations, in multiplications
LONGEST_RESPONSE = 50_000_000  # numbers in a table of responses
LONGEST_STILL = 64  # steps from 0 on that are looked at for values that are certain
CANCELS = 1e-14  # of the sizes of what is added up: what is left of it is rounding
LONGEST_MARCH = 500_000  # steps taken one by one while the variance of a source changes
MOST_SEEN = 1024  # steps whose covariances with the state are kept
LONGEST_KEPT = 1 << 20  # steps of a covariance that are kept for the next question

Distinct = tuple[np.ndarray, np.ndarray]


@dataclass(eq=False)
class System:
    """A linear state space; `sources` name the columns of B and the rows of `noise` (their covariance).

    `noise_path` gives the source variances at given steps, (steps, sources), where they change until step `settles`.
    """

    transition: np.ndarray
    loading: np.ndarray
    observation: np.ndarray
    initial: np.ndarray
    noise: np.ndarray
    sources: tuple[str, ...]
    noise_path: Callable[[np.ndarray], np.ndarray] | None = None
    settles: float = 0.0
    _powers: list[np.ndarray] = field(default_factory=list, repr=False)
    _gathered: list[np.ndarray] = field(default_factory=list, repr=False)
    _still: dict[int, np.ndarray] = field(default_factory=dict, repr=False)
    _seen: dict[tuple[int, int], np.ndarray] = field(default_factory=dict, repr=False)
    _along: dict[tuple[int, int, int], Along] = field(default_factory=dict, repr=False)

    def covariance(self, i: int, j: int, t: np.ndarray, s: np.ndarray) -> np.ndarray:
        """Cov(y_i(t), y_j(s)) for one-dimensional int64 arrays of steps >= 0."""
        early = np.minimum(t, s)
        out = np.empty(t.shape)
        for ahead, (late, row), (_, other) in ((True, (t, i), (s, j)), (False, (s, j), (t, i))):
            chosen = (t >= s) if ahead else (t < s)
            if chosen.any():
                out[chosen] = self._ordered(row, other, early[chosen], (late - early)[chosen])
        out[np.isin(t, self.still(i)) | np.isin(s, self.still(j))] = 0.0
        return out

    def still(self, i: int) -> np.ndarray:
        """The steps at which y_i is certain: what it has of the shocks, and of what is random at step 0, cancels.

        That is so where nothing is left but rounding of the sizes of what is added up. From the first shock on that
        does not cancel, nothing is certain.
        """
        if i not in self._still:
            found, row, sizes = [], self.observation[i], np.abs(self.observation[i])
            step, shocks = np.abs(self.transition), np.abs(self.loading)
            for t in range(LONGEST_STILL):
                rounding = CANCELS * float(sizes @ np.abs(self.initial) @ sizes)
                if row @ self.initial @ row <= rounding < np.inf:
                    found.append(t)
                if (np.abs(row @ self.loading) > CANCELS * (sizes @ shocks)).any():
                    break
                row, sizes = row @ self.transition, sizes @ step
            self._still[i] = np.array(found, dtype=np.int64)
        return self._still[i]

    def carried(self, i: int, state: np.ndarray, gaps: np.ndarray) -> np.ndarray:
        """y_i as many steps after a state as `gaps` (int64, any shape) say, when there are no shocks."""
        distinct, which = np.unique(gaps, return_inverse=True)
        return (self.rows(self.observation[i], distinct) @ state)[which].reshape(np.shape(gaps))

    def _ordered(self, late: int, early: int, steps: np.ndarray, gaps: np.ndarray) -> np.ndarray:
        """Cov(y_late(step + gap), y_early(step))."""
        at, gap_at = _distinct(steps), _distinct(gaps)
        size, longest = len(self.transition), int(at[0][-1] + gap_at[0][-1]) + 1
        marching = len(at[0]) * (4 * size**3 + OVERHEAD)
        entries = len(self.noise) + len(self.random)
        responding = 4 * size * int((longest * entries) ** 0.5 * size + longest * entries)
        responding += len(gap_at[0]) * (longest * 2 * entries + OVERHEAD)
        kept = self._along.get((late, early, int(gap_at[0][0]))) if len(gap_at[0]) == 1 else None
        if kept is not None and at[0][-1] < len(kept.known):
            return kept.known[steps]
        if self.noise_path is None and responding < marching and longest * entries <= LONGEST_RESPONSE:
            return self._by_responses(late, early, steps, gap_at)
        return self._by_marching(late, early, at, gap_at)

    def rest(self) -> None:
        """Give back the memory of powers, which are made again where they are wanted."""
        self._powers.clear()
        self._gathered.clear()

    def _by_marching(self, late: int, early: int, at: Distinct, gap_at: Distinct) -> np.ndarray:
        rows = self.rows(self.observation[late], gap_at[0])
        return np.einsum("pi,pi->p", rows[gap_at[1]], self._seen_at(early, at[0].tolist())[at[1]])

    def _seen_at(self, early: int, steps: list[int]) -> np.ndarray:
        """Cov(s(t), y_early(t)) at ascending steps; what was asked for before is known."""
        asked = [step for step in steps if (early, step) not in self._seen]
        if len(self._seen) + len(asked) > MOST_SEEN:
            self._seen.clear()
            asked = steps
        now, p, found = 0, self.initial, self._seen if len(asked) <= MOST_SEEN else {}
        for step in asked:
            p = self._advance(p, now, step)
            found[early, step], now = p @ self.observation[early], step
        return np.array([found[early, step] for step in steps])

    def _advance(self, p: np.ndarray, now: int, step: int) -> np.ndarray:
        while self.noise_path is not None and now < min(step, self.settles):
            if now >= LONGEST_MARCH:
                raise Unknown(f"the variance of a source has not settled after {LONGEST_MARCH} steps")
            block = np.arange(now + 1, min(step, self.settles, now + 4096) + 1)
            for variances in self.noise_path(block):
                q = self.noise.copy()
                np.fill_diagonal(q, variances)
                p = self.transition @ p @ self.transition.T + self.loading @ q @ self.loading.T
            now = int(block[-1])
        gap, k = step - now, 0
        while gap:
            if gap & 1:
                p = self._power(k) @ p @ self._power(k).T + self._noise_gathered(k)
            gap, k = gap >> 1, k + 1
        return p

    def _power(self, k: int) -> np.ndarray:
        """A^n for n = 2^k."""
        if not self._powers:
            self._powers.append(self.transition)
        with np.errstate(under="ignore", over="ignore", invalid="ignore"):
            while len(self._powers) <= k:
                self._powers.append(self._powers[-1] @ self._powers[-1])
        return self._powers[k]

    def _noise_gathered(self, k: int) -> np.ndarray:
        """The sum of A^j Q A'^j over j < 2^k."""
        if not self._gathered:
            self._gathered.append(self.loading @ self.noise @ self.loading.T)
        with np.errstate(under="ignore", over="ignore", invalid="ignore"):
            while len(self._gathered) <= k:
                power, gathered = self._power(len(self._gathered) - 1), self._gathered[-1]
                self._gathered.append(gathered + power @ gathered @ power.T)
        return self._gathered[k]

    def rows(self, row: np.ndarray, gaps: np.ndarray) -> np.ndarray:
        """row A^gap for ascending gaps."""
        if len(gaps) > MANY and (gaps[-1] + 1) * len(row) <= LONGEST_RESPONSE:
            return self.responses(row, int(gaps[-1]) + 1)[gaps]
        rows, now = np.empty((len(gaps), len(row))), 0
        for k, gap in enumerate(gaps.tolist()):
            left, bit, now = gap - now, 0, gap
            while left:
                if left & 1:
                    row = row @ self._power(bit)
                left, bit = left >> 1, bit + 1
            rows[k] = row
        return rows

    def responses(self, row: np.ndarray, count: int, onto: np.ndarray | None = None) -> np.ndarray:
        """row A^j, or row A^j onto, for j < count: rows some steps apart, times columns of the steps between."""
        if onto is None:
            return self._apart(row, count, 0)
        columns, k = onto, 0
        while 4**k * onto.shape[1] < count:
            columns = np.concatenate([columns, self._power(k) @ columns], axis=1)
            k += 1
        rows = self._apart(row, -(-count // (1 << k)), k)
        return (rows @ columns).reshape(-1, onto.shape[1])[:count]

    def _apart(self, row: np.ndarray, count: int, k: int) -> np.ndarray:
        """row A^(j n) for j < count and n = 2^k, twice as many at a time."""
        rows = row[None, :]
        while len(rows) < count:
            rows = np.concatenate([rows, rows[: count - len(rows)] @ self._power(k)])
            k += 1
        return rows

    @cached_property
    def random(self) -> np.ndarray:
        """Which elements of the state are random at step 0."""
        return np.flatnonzero(self.initial.any(axis=1))

    @cached_property
    def entries(self) -> tuple[np.ndarray, np.ndarray]:
        """Columns by which chance enters, those of shocks and those of the state at step 0, and its covariance."""
        onto = np.concatenate([self.loading, np.eye(len(self.transition))[:, self.random]], axis=1)
        return onto, self.initial[np.ix_(self.random, self.random)]

    def _by_responses(self, late: int, early: int, steps: np.ndarray, gap_at: Distinct) -> np.ndarray:
        """Squares of responses added up: all steps of a gap at once."""
        gaps, which = gap_at
        if len(gaps) == 1 and int(steps.max()) < LONGEST_KEPT:
            key = (late, early, int(gaps[0]))
            if key not in self._along:
                self._along[key] = Along(self, *key)
            return self._along[key].upto(int(steps.max()) + 1)[steps]
        last = int(steps.max()) + 1
        onto, initial = self.entries
        ahead = self.responses(self.observation[late], last + int(gaps[-1]), onto)
        behind = self.responses(self.observation[early], last, onto)
        psi_ahead, psi_behind = ahead[:, : len(self.noise)] @ self.noise, behind[:, : len(self.noise)]
        ahead, behind = ahead[:, len(self.noise) :] @ initial, behind[:, len(self.noise) :]
        order = np.argsort(which, kind="stable")
        out = np.empty(steps.shape)
        for gap, chosen in zip(gaps.tolist(), np.split(order, np.cumsum(np.bincount(which))[:-1]), strict=True):
            products = np.einsum("tm,tm->t", psi_ahead[gap : gap + last], psi_behind)
            gathered = np.concatenate([[0.0], np.cumsum(products)])[steps[chosen]]
            out[chosen] = gathered + np.einsum("ti,ti->t", ahead[gap + steps[chosen]], behind[steps[chosen]])
        return out


def _distinct(values: np.ndarray) -> Distinct:
    """The distinct values, ascending, and which of them each is; by a table while that is small."""
    if values.max() > 4 * len(values) + 65_536:
        return np.unique(values, return_inverse=True)
    present = np.zeros(int(values.max()) + 1, bool)
    present[values] = True
    return np.flatnonzero(present), (np.cumsum(present) - 1)[values]


def state_size(forms: Sequence[Linear]) -> int:
    """Number of elements of the joint state of some forms."""
    return Layout(forms).size


def system_of(space: Space, forms: Sequence[Linear]) -> System:
    """The joint state space of linear forms, one row of the observation each.

    Raises Unknown where a covariance of the sources is not known, or the state would be too large.
    """
    filters = [Linear({key: c for key, c in form.items() if _whole(key) is None}) for form in forms]
    joined = _of_filters(space, filters)
    for whole in dict.fromkeys(whole for form in forms for key in form if (whole := _whole(key))):
        rows = np.zeros((len(forms), len(whole.transition)))
        for row, form in zip(rows, forms, strict=True):
            for key, c in form.items():
                if _whole(key) is whole:
                    row += c * whole.observation[_component(key)]
        joined = _beside(joined, whole, rows)
    return joined


def _whole(key: Key) -> System | None:
    """The state space that a key is a component of, where its source is one."""
    return getattr(base_of(key).source.detail, "system", None)


def _component(key: Key) -> int:
    base = base_of(key)
    if not isinstance(key, At) or key.delay or base.phi:
        raise Unknown(f"a delay, a running sum or a filter of a component of {base.source.detail.name}")
    return int(base.source.detail.row)


def _beside(one: System, other: System, rows: np.ndarray) -> System:
    """Both state spaces, independent of each other, seen together."""
    from scipy.linalg import block_diag

    return System(
        block_diag(one.transition, other.transition),
        block_diag(one.loading, other.loading),
        np.concatenate([one.observation, rows], axis=1),
        block_diag(one.initial, other.initial),
        block_diag(one.noise, other.noise),
        (*one.sources, *other.sources),
        one.noise_path,
        one.settles,
    )


def _of_filters(space: Space, forms: Sequence[Linear]) -> System:
    layout = Layout(forms)
    n = layout.size
    if n > LARGEST_STATE:
        raise Unknown(f"its state has {n} elements, more than {LARGEST_STATE}")
    sources = list(dict.fromkeys(base.source for base in layout.depth))
    noise = np.array([[_at_a_step(space, a, b) for b in sources] for a in sources])
    noise = noise.reshape(len(sources), len(sources))
    transition, loading = np.zeros((n, n)), np.zeros((n, len(sources)))
    for base, depth in layout.depth.items():
        at = layout.place[At(base, 0)]
        transition[at : at + depth, at : at + depth] = companion(base.phi, depth)
        loading[at, sources.index(base.source)] = 1.0
    for key in layout.kept:
        at, width = layout.place[key], width_of(key)
        transition[at : at + width, at : at + width] = np.roll(np.eye(width), 1, axis=0)
        summed = key.of.items() if isinstance(key, Season) else [(key.of, 1.0)] if isinstance(key, Sum) else []
        for part, c in summed:  # the value that it goes on from, plus what is summed at this step
            inner = layout.index(part)
            transition[at] += c * transition[inner]
            loading[at] += c * loading[inner]
    observation = np.zeros((len(forms), n))
    for row, form in zip(observation, forms, strict=True):
        for key, c in form.items():
            row[layout.index(key)] += c
    initial = _initial(space, layout, sources)
    return System(
        transition,
        loading,
        observation,
        initial,
        noise,
        tuple(s.key for s in sources),
        _noise_path(sources),
        max((s.settles for s in sources), default=0.0),
    )


def _initial(space: Space, layout: Layout, sources: list[Source]) -> np.ndarray:
    """Cov s(0): bases in their stationary law or from nothing, frozen values as copies of them, sums at 0."""
    bases = list(layout.depth)
    lags = np.zeros((layout.size, layout.size))
    for i, a in enumerate(bases):
        for b in bases[: i + 1]:
            block = _lag_block(space, a, layout.depth[a], b, layout.depth[b])
            p, q = layout.place[At(a, 0)], layout.place[At(b, 0)]
            lags[p : p + len(block), q : q + block.shape[1]] = block
            lags[q : q + block.shape[1], p : p + len(block)] = block.T
    copy = np.eye(layout.size)
    for key in layout.kept:
        copy[layout.place[key] : layout.place[key] + width_of(key)] = 0.0
        if isinstance(key, Frozen):
            copy[layout.place[key], layout.place[At(key.base, 0)] + key.back] = 1.0
    return copy @ lags @ copy.T


def _lag_block(space: Space, a: Base, rows: int, b: Base, columns: int) -> np.ndarray:
    """E w_a(-i) w_b(-j) for i < rows, j < columns."""
    block = np.zeros((rows, columns))
    scale = _at_a_step(space, a.source, b.source)
    if not a.started and not b.started:
        lags = np.arange(columns)[None, :] - np.arange(rows)[:, None]
        return scale * cross_covariance(a.phi, b.phi)(lags) if scale else block
    path = a.source.path if a.source is b.source else None
    block[0, 0] = scale if path is None else float(path(np.zeros(1, np.int64))[0])
    return block


def _at_a_step(space: Space, a: Source, b: Source) -> float:
    """E a(t) b(t); at step 0 for a source whose variance grows from there along its path, without a limit."""
    if a is b and a.path is not None and np.isinf(a.variance) and a.detail.total >= 1.0:
        return float(a.path(np.zeros(1, np.int64))[0])
    return space.covariance(a, b)


def _noise_path(sources: list[Source]) -> Callable[[np.ndarray], np.ndarray] | None:
    if all(source.path is None for source in sources):
        return None

    def path(steps: np.ndarray) -> np.ndarray:
        flat = np.ones(steps.shape)
        return np.stack([s.variance * flat if s.path is None else s.path(steps) for s in sources], axis=1)

    return path
