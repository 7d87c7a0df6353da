"""Facts about values: precision, copies, and how certain a copy is."""

import numpy as np

from procgen.checks.structure import Precision, Structure, fingerprint


def looked_at(x, decimals=None, kind="float64", chance=0.0, tiles=(1000,)):
    structure = Structure([Precision("x", kind, decimals, True)])
    prints, at = np.zeros(x.shape[0], dtype=np.uint64), 0
    while at < x.shape[1]:
        size = tiles[at % len(tiles)]
        structure.absorb(0, np.ascontiguousarray(x[:, at : at + size].T), 0, at, prints)
        at += size
    structure.close(0, prints[:, None])
    return {c.what: c for c in structure.checks({"x": chance})}


def noise(paths=50, steps=40, seed=1):
    return np.random.default_rng(seed).standard_normal((paths, steps))


def test_untouched_values_pass():
    assert {c.outcome for c in looked_at(noise()).values()} == {"agrees"}


def test_copies_are_found_wherever_they_are():
    x = noise()
    x[49], x[20] = x[3], x[11]
    check = looked_at(x, tiles=(7, 1))["copied paths"]
    assert check.outcome == "departs"
    assert check.note == "2 paths repeat another one bit for bit, such as paths 11 and 20"


def test_paths_that_differ_in_one_bit_are_no_copies():
    x = noise()
    x[20] = x[11]
    x[20, 17] = np.nextafter(x[20, 17], 2)
    assert looked_at(x)["copied paths"].outcome == "agrees"


def test_whole_numbers_do_not_collide():
    # 20,000 paths of four whole numbers below 4,000: equal prints by chance have probability 1e-11.
    x = np.random.default_rng(2).permutation(20_000 * 4).reshape(20_000, 4).astype(float)
    assert len(np.unique(fingerprint(x.T, 0))) == 20_000


def test_copies_by_rounding_cannot_be_judged():
    x = np.rint(noise(200, 2))
    check = looked_at(x, decimals=0, chance=0.1)["copied paths"]
    assert check.outcome == "untestable"
    assert "equal by chance" in check.note


def test_decimals():
    x = np.rint(noise() * 100) / 100
    assert looked_at(x, decimals=2)["precision"].outcome == "agrees"
    x[4, 9] += 0.001
    check = looked_at(x, decimals=2)["precision"]
    assert check.note == "1 value has more than the 2 decimals declared, the first at path 4, step 9"
    big = np.rint(noise() * 1e9 + 1e9) / 100
    assert looked_at(big, decimals=2)["precision"].outcome == "agrees"


def test_a_detour_through_float32():
    x = noise()
    assert "float32" in looked_at(x.astype(np.float32).astype(float))["precision"].note
    assert looked_at(x.astype(np.float32).astype(float), kind="float32")["precision"].outcome == "agrees"
    assert "finer than float32" in looked_at(x, kind="float32")["precision"].note


def test_whole_numbers_are_not_taken_for_float32():
    note = looked_at(np.rint(100 * noise()))["precision"].note
    assert "rounded to whole numbers" in note
    assert "float32" not in note


def test_values_on_a_grid_are_told_as_rounded_and_not_as_copies():
    from tests.studies.departures import draw, spec_of, verdict

    body = [{"ar": {"phi": 0.7, "sd": 2}}]
    x = draw(spec_of(body, 500, 200, 5))["x"]
    said = "x: structure: values are rounded to 1 decimal, which is not declared; write `decimals: 1`"
    assert verdict(body, {"x": np.round(x, 1)}).headline == [said]
    narrow = verdict(body, {"x": x.astype(np.float32).astype(float)}).headline[0]
    assert narrow.endswith("(all fit in it), where float64 is declared; write `type: float32` if that is meant")
    half = verdict(body, {"x": x.astype(np.float16).astype(float)}).headline[0]
    assert half.startswith("x: structure: values went through float16 (all fit in it)")
    gaps = x.copy()
    for path in range(7):
        gaps[9 * path, 20 * path : 20 * path + 5] = -999.0
    rows = verdict(body, {"x": gaps}).rows
    assert any("all of them are this value, as if it marked what is missing" in row.note for row in rows)
    assert not any("as if stuck" in row.note for row in rows)


def test_a_series_of_one_value_is_told_as_such():
    for value, told in ((0.0, "0"), (5.0, "5"), (-3.7, "−3.7")):
        assert looked_at(np.full((50, 40), value))["precision"].note == f"all values are {told}"
    x = np.full((50, 40), 5.0)
    x[3, 7] = 6.0
    assert "rounded to whole numbers" in looked_at(x)["precision"].note


def test_numbers_too_large_for_digits_are_not_called_rounded():
    assert looked_at(noise() * 1e200)["precision"].outcome == "agrees"
    assert looked_at(noise() * 1e15)["precision"].outcome == "agrees"
