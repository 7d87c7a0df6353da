"""Addresses become words: where every primary draw comes from.

A draw is a pure function of (seed, stream name, label, role, path, step). The first four give the key of a
Philox4x64-10 generator (Salmon, Moraes, Dror & Shaw 2011), path and step give its counter, so that any rectangle
of draws can be made alone, in any order, anywhere.

Sixteen neighbouring paths, a lane group, share one sequence laid out [step][lane]; its counter is
(4 * step + lane // 4, group, section, 0). Section 0 holds the steps 0, 1, 2 ...; section 1 the steps before them
counted backwards, step -1 first, so that a longer past moves nothing.
"""

from __future__ import annotations

from functools import cached_property
from hashlib import sha256

import numpy as np

from procgen.chance.kernel import is_compiling, machine, uniforms
from procgen.spec.records import dataclass

STREAM_VERSION = 1
LANES = 16

_WORDS_A_BLOCK = 4  # Philox4x64 makes four words from one counter
_ROWS_A_RUN = 4096  # 512 KiB of words at a time: bounded memory, and still in cache when they are copied
_MOST_STEPS = 2**62 // LANES
_AT_HAND = 64  # steps whose blocks machine code has at hand
_ONE = np.uint64(0x3FF0000000000000)  # the bits of 1.0
_SHIFT = np.uint64(12)


@dataclass(frozen=True)
class Stream:
    """The draws of one role of one term, addressed by path and step.

    seed: any whole number. name: of the series. label: of the term in it. role: what the draws are for
    (innovation, chain, jump size ...). Two streams that differ in any of the four are independent.
    """

    seed: int
    name: str
    label: str
    role: str

    @cached_property
    def key(self) -> tuple[int, int]:
        """The two 64-bit key words: the first 128 bits of SHA-256 over the length-prefixed fields."""
        fields = (str(STREAM_VERSION), str(int(self.seed)), self.name, self.label, self.role)
        coded = [field.encode("utf-8") for field in fields]
        text = b"".join(len(field).to_bytes(8, "little") + field for field in coded)
        digest = sha256(text).digest()
        return int.from_bytes(digest[:8], "little"), int.from_bytes(digest[8:16], "little")

    def words(
        self, first_path: int, paths: int, first_step: int, steps: int, out: np.ndarray | None = None
    ) -> np.ndarray:
        """Raw 64-bit words, uint64 (steps, paths), row i being step first_step + i (negative steps allowed)."""
        _check_address(first_path, paths, first_step, steps)
        out = np.empty((steps, paths), np.uint64) if out is None else out
        self._fill(first_path, paths, first_step, steps, out)
        return out

    def uniforms(
        self, first_path: int, paths: int, first_step: int, steps: int, out: np.ndarray | None = None
    ) -> np.ndarray:
        """Uniforms in (0, 1), float64 (steps, paths): odd multiples of 2**-53, so 1 - u is exact too."""
        _check_address(first_path, paths, first_step, steps)
        out = np.empty((steps, paths)) if out is None else out
        self._fill(first_path, paths, first_step, steps, out)
        return out

    def _fill(self, first_path: int, paths: int, first_step: int, steps: int, out: np.ndarray) -> None:
        """Words, or uniforms where out is float64."""
        if out.shape != (steps, paths):
            raise ValueError(f"expected out of shape (steps, paths) = ({steps}, {paths}), got {out.shape}")
        if is_compiling():
            _compiled(self.key, first_path, first_step, out)
            return
        draw = _Plain(self.key)
        before = min(steps, max(0, -first_step))
        for section, first, rows in (
            (1, -first_step - before, out[:before][::-1]),
            (0, first_step + before, out[before:]),
        ):
            if not len(rows):
                continue
            for group in range(first_path // LANES, -(-(first_path + paths) // LANES)):
                low = max(first_path, group * LANES)
                high = min(first_path + paths, (group + 1) * LANES)
                columns = rows[:, low - first_path : high - first_path]
                draw.fill(section, group, first, slice(low - group * LANES, high - group * LANES), columns)


def uniforms_of(words: np.ndarray) -> np.ndarray:
    """Uniforms ((word >> 12) + 1/2) * 2**-52 of 64-bit words, float64 of the same shape."""
    bits = np.array(words, np.uint64)
    _uniform_bits(bits)
    return bits.view(np.float64)


def _uniform_bits(words: np.ndarray) -> None:
    """Turn words, in place, into the bits of their uniforms: 1 + k 2**-52 is a change of exponent away."""
    np.right_shift(words, _SHIFT, out=words)
    np.bitwise_or(words, _ONE, out=words)
    floats = words.view(np.float64)
    np.subtract(floats, 1 - 2.0**-53, out=floats)  # exact: the result has 53 significant bits at most


class _Plain:
    """NumPy's Philox, moved from lane group to lane group."""

    def __init__(self, key: tuple[int, int]) -> None:
        self.philox = np.random.Philox(key=np.array(key, np.uint64))
        self.state = self.philox.state

    def fill(self, section: int, group: int, first: int, lanes: slice, out: np.ndarray) -> None:
        """Some lanes of a group, at the positions first, first + 1 ... of a section, into out (positions, lanes)."""
        self._seek(section, group, first)
        for row in range(0, len(out), _ROWS_A_RUN):
            target = out[row : row + _ROWS_A_RUN]
            raw = self.philox.random_raw(len(target) * LANES)
            if out.dtype == np.float64:
                _uniform_bits(raw)
            target[...] = raw.view(out.dtype).reshape(-1, LANES)[:, lanes]

    def _seek(self, section: int, group: int, first: int) -> None:
        """Set the counter one before the wanted block: NumPy increments it before it makes a block."""
        block = first * (LANES // _WORDS_A_BLOCK) + (group << 64) + (section << 128)
        before = (block - 1) % 2**256
        counter = self.state["state"]["counter"]
        for word in range(4):
            counter[word] = (before >> (64 * word)) & (2**64 - 1)
        self.state["buffer_pos"] = _WORDS_A_BLOCK  # nothing left over from the last block
        self.philox.state = self.state


def _compiled(key: tuple[int, int], first_path: int, first_step: int, out: np.ndarray) -> None:
    """The same filling by `procgen.chance.compiled`."""
    made = np.ascontiguousarray(out)
    if out.dtype == np.float64:
        uniforms()(*key, first_step, first_path, made, np.empty((_WORDS_A_BLOCK, _AT_HAND)))
    else:
        machine("compiled", "words")(*key, first_step, first_path, made)
    if made is not out:
        out[...] = made


def _check_address(first_path: int, paths: int, first_step: int, steps: int) -> None:
    if first_path < 0 or paths < 0 or steps < 0:
        raise ValueError(f"expected first_path, paths and steps of at least 0, got {first_path}, {paths} and {steps}")
    if first_path + paths > 2**62 or max(abs(first_step), abs(first_step + steps)) > _MOST_STEPS:
        raise ValueError(
            f"expected paths below 2**62 and steps within {_MOST_STEPS} of step 0, got paths up to "
            f"{first_path + paths} and steps {first_step} to {first_step + steps}"
        )
