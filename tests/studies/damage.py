"""Every byte of a part is flipped, and the part is cut short at every byte: what is damaged is said, or does no harm.

    python -m tests.studies.damage [--bits 8]

For each damage `digest`, `validate` and `render --resume` are asked. Either they tell of it, in a sentence that names
the part, and `--resume` writes the very same bytes again, or every value is as it was. A traceback is a fault of ours.
"""

from __future__ import annotations

import argparse
import tempfile
from collections import Counter
from collections.abc import Iterator
from pathlib import Path

import procgen as pg
from procgen.ensemble import check_digest

SPEC = {
    "procgen": 1,
    "seed": 8,
    "paths": 3,
    "time": {"steps": 4},
    "series": {"x": {"ar": {"phi": 0.7, "sd": 1}}},
}


class Victim:
    """An ensemble of one small part, which is damaged again and again."""

    def __init__(self, out: Path):
        self.out = out
        self.made = pg.render(SPEC, out)
        (self.part,) = out.glob("paths-*.parquet")
        self.whole = self.part.read_bytes()
        self.values = self.made["x"].tobytes()

    def damages(self, bits: range, every: int = 1) -> Iterator[tuple[str, bytes]]:
        """What was done, and the bytes of the part then; `bits` that are flipped at a byte are counted on from it."""
        for place in range(0, len(self.whole), every):
            for bit in bits:
                changed = self.whole[place] ^ 1 << (place + bit) % 8
                yield f"bit of byte {place}", self.whole[:place] + bytes([changed]) + self.whole[place + 1 :]
            yield f"cut at byte {place}", self.whole[:place]

    def digested(self) -> bool:
        """Whether `digest` finds all in order; if not, it names the part."""
        found = check_digest(self.out)
        if not found.ok and self.part.name not in found.text():
            raise AssertionError(f"it does not name the part: {found.text()}")
        return found.ok

    def validated(self) -> bool:
        """Whether `validate` takes the values; if not, it names the part."""
        found = pg.validate(str(self.out))
        if found.agrees is False and self.part.name not in found.text():
            raise AssertionError(f"it does not name the part: {found.text()}")
        return found.agrees is not False

    def same(self) -> bool:
        return pg.open_ensemble(self.out)["x"].tobytes() == self.values

    def resumed(self) -> bool:
        """Whether `--resume` brings back the bytes of a part that is damaged."""
        pg.render(SPEC, self.out, resume=True)
        return self.part.read_bytes() == self.whole


def suffer(victim: Victim, done: str, data: bytes, *, validate: bool = True, resume: bool = True) -> str:
    """What one damage came to; AssertionError when values changed unsaid, or what was damaged was not mended."""
    victim.part.write_bytes(data)
    fine = victim.digested()
    if fine and not victim.same():
        raise AssertionError(f"{done}: other values, and digest finds all in order")
    if validate and victim.validated() and not victim.same():
        raise AssertionError(f"{done}: other values, and validate takes them")
    if resume and not fine and not victim.resumed():
        raise AssertionError(f"{done}: --resume leaves other bytes")
    return "no value is another one" if fine else "told, named, and mended by --resume"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--bits", type=int, default=1, help="bits that are flipped at each byte, one at a time")
    args = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        victim, found = Victim(Path(folder) / "out"), Counter[str]()
        for done, data in victim.damages(range(args.bits)):
            found[f"{done.split()[0]}: {suffer(victim, done, data)}"] += 1
    for what, count in sorted(found.items()):
        print(f"{count:6} {what}")


if __name__ == "__main__":
    main()
