"""Addresses and words. The reference is Philox4x64-10 written out here from its paper, in whole numbers.

Salmon, Moraes, Dror & Shaw (2011), Parallel random numbers: as easy as 1, 2, 3, SC'11; its known answers are those
of Random123, tests/kat_vectors.
"""

import hashlib
import itertools
import json
from pathlib import Path

import numpy as np
import pytest

from procgen.chance.kernel import compiling
from procgen.chance.streams import LANES, STREAM_VERSION, Stream, uniforms_of

GOLDEN = json.loads((Path(__file__).parent.parent / "golden" / "chance.json").read_text())
MASK = 2**64 - 1
MULTIPLIERS = 0xD2E7470EE14C6C93, 0xCA5A826395121157
WEYL = 0x9E3779B97F4A7C15, 0xBB67AE8584CAA73B
PI = 0x243F6A8885A308D3, 0x13198A2E03707344, 0xA4093822299F31D0, 0x082EFA98EC4E6C89


def philox(key, counter, rounds=10):
    """One block of four words."""
    c, (k0, k1) = list(counter), key
    for _ in range(rounds):
        first, second = MULTIPLIERS[0] * c[0], MULTIPLIERS[1] * c[2]
        c = [(second >> 64) ^ c[1] ^ k0, second & MASK, (first >> 64) ^ c[3] ^ k1, first & MASK]
        k0, k1 = (k0 + WEYL[0]) & MASK, (k1 + WEYL[1]) & MASK
    return c


def words_of(text):
    return [int(word, 16) for word in text.split()]


KNOWN = [
    ((0, 0), (0, 0, 0, 0), "16554d9eca36314c db20fe9d672d0fdc d7e772cee186176b 7e68b68aec7ba23b"),
    ((MASK, MASK), (MASK,) * 4, "87b092c3013fe90b 438c3c67be8d0224 9cc7d7c69cd777b6 a09caebf594f0ba0"),
    (
        (0x452821E638D01377, 0xBE5466CF34E90C6C),
        PI,
        "a528f45403e61d95 38c72dbd566e9788 a5a1610e72fd18b5 57bd43b5e52b7fe6",
    ),
]


@pytest.mark.parametrize(("key", "counter", "answer"), KNOWN)
def test_known_answers(key, counter, answer):
    """Random123 kat_vectors, philox4x64 10, in the reference here and in NumPy, which makes counter + 1 first."""
    assert philox(key, counter) == words_of(answer)
    start = (sum(word << 64 * i for i, word in enumerate(counter)) - 1) % 2**256
    numpys = np.random.Philox(key=key[0] + (key[1] << 64), counter=start)
    assert numpys.random_raw(4).tolist() == words_of(answer)


def test_seven_rounds_differ():
    """Random123 kat_vectors, philox4x64 7, zero key and counter: the reference tells round counts apart."""
    seven = words_of("5dc8ee6268ec62cd 139bc570b6c125a0 84d6deb4fb65f49e aff7583376d378c2")
    assert philox((0, 0), (0, 0, 0, 0), rounds=7) == seven != philox((0, 0), (0, 0, 0, 0))


def test_cpp26_engine():
    """C++26 [rand.predef]: the 10000th output of philox4x64 with its default seed 20111115; it begins at counter 0."""
    assert philox((20111115, 0), (2499, 0, 0, 0))[3] == 3409172418970261260


def test_numpy_counts_as_we_rely_on():
    """Block c + 1 first, carry across words, `advance` in blocks (found out by trial on NumPy 2.4)."""
    assert np.random.Philox(key=0).random_raw(8).tolist() == words_of(
        "02f4ba6408e4d89b 3dd62b0b9ca8c5b2 1c8667a55d902e79 907d7a052fd5b4dc"
        " 809bf322883987c3" + " {:x} {:x} {:x}".format(*philox((0, 0), (2, 0, 0, 0))[1:])
    )
    assert np.random.Philox(key=(5 << 64) + 7).state["state"]["key"].tolist() == [7, 5]
    assert np.random.Philox(key=0, counter=(9 << 128) + 3).state["state"]["counter"].tolist() == [3, 0, 9, 0]
    assert (
        np.random.Philox(key=0, counter=2**64 - 1).random_raw() == 0xE85FACF8B3B067D6 == philox((0, 0), (0, 1, 0, 0))[0]
    )
    advanced = np.random.Philox(key=0)
    advanced.advance(3)
    assert advanced.random_raw() == 0x928C664EB6C6719E == philox((0, 0), (4, 0, 0, 0))[0]
    assert np.random.Philox(key=0).jumped().state["state"]["counter"].tolist() == [0, 0, 1, 0]


STREAM = Stream(271828, "load_kw", "swing", "innovation")


def word_at(stream, path, step):
    """The documented address: counter (4 step + lane // 4, group, section, 0), word lane % 4."""
    group, lane = divmod(path, LANES)
    section, position = (0, step) if step >= 0 else (1, -1 - step)
    return philox(stream.key, (4 * position + lane // 4, group, section, 0))[lane % 4]


def test_words_are_at_their_documented_addresses():
    words = STREAM.words(13, 25, -3, 7)
    assert words.dtype == np.uint64
    assert words.tolist() == [[word_at(STREAM, path, step) for path in range(13, 38)] for step in range(-3, 4)]


def test_far_addresses():
    for path, step in itertools.product((2**40 + 5, 2**61 + 1), (10**15, -(10**15))):
        assert STREAM.words(path, 1, step, 1)[0, 0] == word_at(STREAM, path, step)


BIG = STREAM.words(0, 100, -50, 120)
RECTANGLES = [
    (0, 100, -50, 120),
    (3, 20, -10, 30),  # unaligned, and across the start
    (16, 16, 0, 5),
    (31, 2, -5, 5),  # two lane groups, all before the start
    (99, 1, -50, 120),
    (15, 1, 0, 1),
    (7, 64, 69, 1),
]


@pytest.mark.parametrize(("first_path", "paths", "first_step", "steps"), RECTANGLES)
def test_any_rectangle_is_part_of_the_bigger_one(first_path, paths, first_step, steps):
    expected = BIG[first_step + 50 : first_step + 50 + steps, first_path : first_path + paths]
    assert np.array_equal(STREAM.words(first_path, paths, first_step, steps), expected)
    uniforms = STREAM.uniforms(first_path, paths, first_step, steps)
    assert np.array_equal(uniforms, uniforms_of(expected))


@pytest.mark.parametrize(("first_path", "paths", "first_step", "steps"), RECTANGLES)
def test_compiled_words_are_the_same(first_path, paths, first_step, steps):
    """The compiled generator, which makes only the lanes it needs."""
    pytest.importorskip("numba", reason="the extra `speed` compiles")
    rectangle = (first_path, paths, first_step, steps)
    wide = np.zeros((steps, 2 * paths))
    with compiling():
        words = STREAM.words(*rectangle)
        uniforms = STREAM.uniforms(*rectangle, out=wide[:, ::2])
    assert np.array_equal(words, STREAM.words(*rectangle))
    assert np.array_equal(uniforms, STREAM.uniforms(*rectangle))
    assert not wide[:, 1::2].any()


def test_compiled_words_at_far_addresses():
    pytest.importorskip("numba", reason="the extra `speed` compiles")
    with compiling():
        for path, step in itertools.product((2**40 + 5, 2**61 + 1), (10**15, -(10**15))):
            assert STREAM.words(path, 1, step, 1)[0, 0] == word_at(STREAM, path, step)


def test_long_runs_equal_their_pieces():
    """Longer than the runs that words are copied in."""
    whole = STREAM.words(5, 3, -5000, 14000)
    pieces = [STREAM.words(5, 3, step, 700) for step in range(-5000, 9000, 700)]
    assert np.array_equal(whole, np.concatenate(pieces))


def test_out_is_filled_wherever_it_lies():
    wide = np.zeros((40, 64))
    view = wide[::2, 10:30]
    assert STREAM.uniforms(4, 20, -6, 20, out=view) is view
    assert np.array_equal(view, STREAM.uniforms(4, 20, -6, 20))
    assert not wide[1::2].any()
    words = np.zeros((20, 20), np.uint64)
    assert STREAM.words(4, 20, -6, 20, out=words) is words
    assert np.array_equal(uniforms_of(words), view)


def test_uniforms_are_exact_and_open():
    """u = ((word >> 12) + 1/2) 2**-52, in whole numbers; never 0 or 1, and 1 - u without rounding."""
    words = np.array([0, 2**12 - 1, 2**12, 2**63, MASK, 0x123456789ABCDEF0], np.uint64)
    u = uniforms_of(words)
    assert [int(x * 2**53) for x in u] == [2 * (int(w) >> 12) + 1 for w in words]
    assert u.min() == 2.0**-53 and u.max() == 1 - 2.0**-53
    assert [int((1 - x) * 2**53) for x in u] == [2**53 - 2 * (int(w) >> 12) - 1 for w in words]


def test_key_is_the_digest_of_its_fields():
    """First 128 bits of SHA-256 over the length-prefixed version, seed, name, label and role."""
    text = b"".join(
        len(field).to_bytes(8, "little") + field
        for field in (str(STREAM_VERSION).encode(), b"271828", b"load_kw", b"swing", b"innovation")
    )
    digest = hashlib.sha256(text).digest()
    assert STREAM.key == (int.from_bytes(digest[:8], "little"), int.from_bytes(digest[8:16], "little"))


def test_every_field_makes_another_stream():
    streams = [
        Stream(*fields)
        for fields in itertools.product((0, 1, -1, 10), ("a", "ab", "ä"), ("b", "", "bb"), ("innovation", "start"))
    ]
    assert len({stream.key for stream in streams}) == len(streams)


def test_golden_words():
    """Values of this stream version, frozen: they may only change together with STREAM_VERSION."""
    assert GOLDEN["stream_version"] == STREAM_VERSION
    words = STREAM.words(14, 4, -2, 4)
    assert [[f"{word:016x}" for word in row] for row in words.tolist()] == GOLDEN["words"]


def test_empty_rectangles():
    assert STREAM.words(3, 0, 5, 4).shape == (4, 0)
    assert STREAM.uniforms(3, 4, -2, 0).shape == (0, 4)


@pytest.mark.parametrize("rectangle", [(-1, 1, 0, 1), (0, -1, 0, 1), (0, 1, 0, -1)])
def test_negative_sizes_are_refused(rectangle):
    with pytest.raises(ValueError, match="of at least 0, got"):
        STREAM.words(*rectangle)


def test_addresses_beyond_the_counter_are_refused():
    with pytest.raises(ValueError, match="steps within"):
        STREAM.words(0, 1, 2**60, 1)
    with pytest.raises(ValueError, match=r"paths below 2\*\*62"):
        STREAM.words(2**62, 1, 0, 1)


def test_out_of_another_shape_is_refused():
    with pytest.raises(ValueError, match=r"shape \(steps, paths\) = \(2, 3\), got \(3, 2\)"):
        STREAM.words(0, 3, 0, 2, out=np.empty((3, 2), np.uint64))


def test_uniformity():
    """2**20 uniforms in 1,024 cells, and pairs of neighbours in time and across paths in 32 x 32 cells.

    Pearson's chi-square with 1,023 degrees of freedom. Three asserts of 1e-8 each; the seed is fixed.
    """
    from scipy.stats import chi2

    u = STREAM.uniforms(0, 1024, 0, 1024)
    fine = np.floor(u * 1024).astype(np.int64).ravel()
    coarse = np.floor(u * 32).astype(np.int64)
    pairs_in_time = coarse[0::2] * 32 + coarse[1::2]
    pairs_of_paths = coarse[:, 0::2] * 32 + coarse[:, 1::2]
    for cells in (fine, pairs_in_time.ravel(), pairs_of_paths.ravel()):
        counts, expected = np.bincount(cells, minlength=1024), cells.size / 1024
        assert chi2.sf(((counts - expected) ** 2).sum() / expected, 1023) > 1e-8
