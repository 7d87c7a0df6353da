"""Compiled sums have the bits of the plain ones: tiles wide and narrow, cut anywhere, with gaps and without."""

import numpy as np
import pytest

from procgen.chance import kernel
from procgen.chance.laws import LAWS
from procgen.chance.machine import Machine
from procgen.checks import lane as room
from procgen.checks.blocks import WIDE, add_lags, add_products
from procgen.checks.copies import Repeats, Watch
from procgen.checks.lane import Pass
from procgen.checks.planning import plan_of
from procgen.checks.recover import dither
from procgen.checks.scores import Scores
from procgen.checks.shocks import MEMORY_LAGS, SHOCK_ARRAYS, ShockSums
from procgen.checks.structure import _looked
from procgen.checks.sums import Moments, Powers
from tests.studies.departures import draw, spec_of

needs_numba = pytest.mark.skipif(not kernel.available(), reason="numba is not installed")
RNG = np.random.default_rng(8)
SCORES = {name: Scores(LAWS[name](**given)) for name, given in (("normal", {}), ("student_t", {"df": 6}))}
CUTS = {"whole": [], "blocks": [64, 192, 256], "anywhere": [1, 3, 64, 129, 300]}


def gaps(z):
    """As z, with nothing known at first, and some values missing on the way."""
    z = z.copy()
    z[:20] = np.nan
    z[150, -1], z[151, :] = np.nan, np.nan
    return z


def same(plain, compiled):
    assert plain.keys() == compiled.keys()
    for name, values in plain.items():
        if isinstance(values, np.ndarray):
            assert values.dtype == compiled[name].dtype, name
            np.testing.assert_array_equal(compiled[name], values, err_msg=name, strict=True)
        else:
            assert compiled[name] == values, name


def both(run):
    """What a run gives in both forms."""
    plain = run()
    with kernel.compiling():
        compiled = run()
    return plain, compiled


def tiles(x, cuts):
    return zip([0, *cuts], np.split(x, cuts), strict=True)


@needs_numba
@pytest.mark.parametrize("law", SCORES)
@pytest.mark.parametrize("cuts", CUTS)
@pytest.mark.parametrize("paths", [1, 2, 15, 31, 32, 48, 257])
@pytest.mark.parametrize("period", [None, 90])
def test_sums_of_shocks(monkeypatch, law, cuts, paths, period):
    lags = MEMORY_LAGS + ((period,) if period else ())
    z = np.clip(RNG.standard_normal((400, paths)), -4, 4)
    z[77, 0], z[301, -1], z[5, 0] = 9.0, -7.5, -0.0
    used = []
    name = "_compiled" if paths >= WIDE else "_few"
    original = getattr(ShockSums, name)
    monkeypatch.setattr(ShockSums, name, lambda *args: (used.append(1), original(*args))[1])

    def run():
        found = {}
        for kind, shocks in (("whole", z), ("gaps", gaps(z))):
            sums = ShockSums(SCORES[law], 400, lags, period)
            lane = sums.lane(paths, 32)
            for first, tile in tiles(shocks, CUTS[cuts]):
                sums.absorb(tile, first, lane, 3.0 + tile)
                found[f"{kind} {first}"] = (lane.view.tobytes(), lane.totals.tobytes(), lane.beside.tobytes())
            sums.finish(lane)
            found |= {f"{kind} {name}": getattr(sums, name) for name in SHOCK_ARRAYS}
            facts = sums.n, sums.far, sums.ends, sums.chains, sums.rows, sums.neighbours, sums.outside
            found[f"{kind} facts"] = facts
        return found

    plain, compiled = both(run)
    same(plain, compiled)
    assert len(used) > len(CUTS[cuts])


@needs_numba
@pytest.mark.parametrize("cuts", CUTS)
@pytest.mark.parametrize("paths", [1, 2, 17, 32, 257])
def test_marks_and_runs_of_values(cuts, paths):
    x = np.round(RNG.standard_normal((400, paths)), 3)
    x[100:105, 0] = x[100, 0]  # a value that stays, marked nowhere
    x[62:66, -1] = -0.0
    x[200, 0], x[201, -1] = np.nan, np.inf

    def run():
        watch = Watch(Repeats(1e-6, 1000), 64, paths)
        for _, tile in tiles(x, CUTS[cuts]):
            watch.absorb(tile)
        longest, marks = watch.finish()
        return {"longest": longest, **dict(zip(("hashes", "values", "paths", "steps"), marks.arrays, strict=True))}

    plain, compiled = both(run)
    same(plain, compiled)
    assert plain["longest"][0] >= 4 and len(plain["hashes"]) > 5 * paths


@needs_numba
@pytest.mark.parametrize("paths", [1, 3, 64])
def test_what_spreads_values_over_their_cells(paths):
    same(*both(lambda: {"dither": dither(5, paths, 2**33, 70, "x")}))


@needs_numba
@pytest.mark.parametrize("wrong", [None, np.nan, np.inf, -np.inf], ids=str)
@pytest.mark.parametrize("paths", [1, 2, 33])
def test_fingerprints_and_extremes(wrong, paths):
    x = RNG.standard_normal((70, paths)) * 10.0 ** RNG.integers(-300, 300, (70, paths))
    x[3], x[4], x[5, 0] = -np.abs(x[3]), np.abs(x[4]), -0.0
    x[6, 1:4] = 0.0
    if wrong is not None:
        x[60, paths // 2] = wrong

    def run():
        prints = np.arange(paths, dtype=np.uint64)
        ends, zeros = _looked(x, 640, prints)
        low, high = ends or (None, None)
        return {"prints": prints, "finite": ends is not None, "low": low, "high": high, "zeros": zeros}

    plain, compiled = both(run)
    same(plain, compiled)
    np.testing.assert_array_equal(compiled["zeros"], (x == 0.0).sum(axis=1))
    assert plain["finite"] is (wrong is None)
    if wrong is None:
        np.testing.assert_array_equal(compiled["low"], x.min(axis=1))
        np.testing.assert_array_equal(compiled["high"], x.max(axis=1))


@needs_numba
def test_a_pass_over_an_ensemble(monkeypatch):
    """All sums of a pass, among them those of pairs; and that it is the number of values that turns it on."""
    body = {
        "series": {
            "x": [{"constant": 2}, {"ar": {"phi": 0.6, "sd": 1}}, {"random_walk": {"sd": 0.2}}],
            "y": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}],
            "z": [{"white_noise": {"sd": 2, "law": {"student_t": {"df": 5}}}}],
        },
        "correlation": [{"between": ["x.ar", "y.garch"], "value": 0.3}],
    }
    spec = spec_of(body, 88, 300, 5)
    values, plan = draw(spec), plan_of(spec)
    values["x"][5, 130] = np.nan
    found, by_numba = [], []
    monkeypatch.setattr(Machine, "_numba", lambda machine: by_numba.append(machine.name) or (lambda *args: None))
    for repays in (10**9, 1):
        monkeypatch.setattr(room, "LOADING_REPAYS", repays)
        monkeypatch.setattr(room, "COMPILING_REPAYS", repays)
        one = Pass(plan, compile=room.repays(88 * 300))
        assert one.compile is (repays == 1)
        for first, end in ((0, 130), (130, 300)):
            one.absorb(0, first, {name: x[:, first:end] for name, x in values.items()})
        facts, arrays = one.total().state()
        found.append({"facts": facts, **arrays})
    same(*found)
    assert not by_numba  # all is kept as machine code
    assert room.are_kept()  # so that a later process need not have so many values


def test_without_numba_it_goes_on_plain(monkeypatch):
    monkeypatch.setattr(kernel, "available", lambda: False)
    assert Pass(plan_of(spec_of([{"white_noise": {"sd": 1}}], 16, 64, 1)), compile=True).compile is False


@needs_numba
@pytest.mark.parametrize("offset", [0, 5, 63])
@pytest.mark.parametrize("steps", [1, 59, 64, 400])
@pytest.mark.parametrize("paths", [1, 3, 17, 40])
@pytest.mark.parametrize("unknown", [False, True])
def test_products_of_two(offset, steps, paths, unknown):
    a, b = RNG.standard_normal((2, steps, paths))
    if unknown:
        a[0, paths // 2], b[-1, -1] = np.nan, np.inf

    def run():
        one, two = np.full((2, paths), 0.1)
        counts = add_products(one, a, None, offset), add_products(two, a, b, offset)
        return {"one": one, "two": two, "counts": counts}

    same(*both(run))


@needs_numba
@pytest.mark.parametrize("unknown", [False, True])
@pytest.mark.parametrize("ready", [-300, -1, 1, 70, 500])
@pytest.mark.parametrize("held", [(12, 12), (0, 12), (-40, 3)])
@pytest.mark.parametrize("paths", [1, 5, 40])
def test_products_of_two_series_at_lags(unknown, ready, held, paths):
    steps, lags = 400, (-12, -2, -1, 0, 1, 2, 5)
    a, b = (RNG.standard_normal((steps + more, paths)) for more in held)
    a[30, -1] = np.nan if unknown else a[30, -1]

    def run():
        totals = np.ones((len(lags), paths))
        return {"counts": np.array(add_lags(totals, a, b, lags, steps, ready)), "totals": totals}

    same(*both(run))
    counts, expected = run()["counts"], []
    for lag in lags:
        later, earlier = (a, b) if lag >= 0 else (b, a)
        at = [(steps - t, steps - t + abs(lag)) for t in range(max(ready + abs(lag), 0), steps)]
        pairs = [later[-i] * earlier[-j] for i, j in at if i <= len(later) and j <= len(earlier)]
        expected.append(np.count_nonzero(np.isfinite(pairs)))
    np.testing.assert_array_equal(counts, expected)


@needs_numba
def test_strips_have_the_room_and_the_lags_that_they_are_called_with():
    from procgen.checks import shocks, strips

    assert (shocks.STRIP, shocks.ROOM) == (strips.STRIP, strips.ROOM)
    assert (max(MEMORY_LAGS), max(shocks.CLUSTER_LAGS)) == (strips.BEFORE, strips.SIZES_BEFORE)
    assert 4 + len(MEMORY_LAGS) + len(shocks.CLUSTER_LAGS) == strips.SUMS


@needs_numba
@pytest.mark.parametrize("paths", [32, 33, 47, 64, 1000, 1024])
def test_powers_over_paths_and_products_of_neighbours(paths):
    rows = RNG.standard_normal((paths, 7)) * 10.0 ** np.array([0, 3, -3, 80, 160, 0, 0])
    rows[3, 5], rows[4, 5], rows[paths - 1, 5], rows[7, 0], rows[:, 6] = np.nan, np.inf, -np.inf, -0.0, np.nan

    def run():
        powers = Powers(7)
        powers.absorb(rows)
        powers.absorb(rows[::-1])
        return {name: getattr(powers, name) for name in ("n", "sums", "pairs", "ends", "paths")}

    same(*both(run))


@needs_numba
@pytest.mark.parametrize("paths", [32, 48, 112, 1024])
def test_means_and_scatter_over_paths(paths):
    rows = RNG.standard_normal((paths, 7)) * 10.0 ** np.array([0, 3, -3, 80, 0, 0, 0]) + 5.0
    rows[3, 5], rows[4, 5], rows[paths - 1, 5] = np.nan, np.inf, -np.inf
    rows[16:32] = np.nan

    def run():
        moments = Moments(7)
        moments.absorb(rows)
        moments.absorb(rows[::-1])
        return {name: getattr(moments, name) for name in ("n", "mean", "products")}

    same(*both(run))
