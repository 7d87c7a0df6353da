"""Times of steps as the reader of a file wants them: in UTC or by the local clock, as instants, texts or dates."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np

from procgen.ensemble.errors import EnsembleError
from procgen.ensemble.plan import Block
from procgen.spec.zones import offsets

if TYPE_CHECKING:
    import pyarrow as pa

SECOND, MINUTE = 1_000_000, 60_000_000
EARLIEST = np.datetime64("1900-03-01", "us").astype(np.int64)  # before it, spreadsheets disagree on the day


class Clock:
    """The times of steps: `zone` is the one of the local clock, None for UTC."""

    def __init__(self, stamps: Any, zone: str | None):
        self.stamps, self.zone = stamps, zone

    def replaced(self, table: pa.Table, column: str, block: Block, make: Callable[[np.ndarray], Any]) -> pa.Table:
        """The table with its times, microseconds of UTC, made into something else; each step is made once."""
        import pyarrow as pa

        steps = np.asarray(self.stamps(block.first_step, block.steps), np.int64)
        times = table.column(column).cast(pa.int64()).to_numpy()
        made = pa.array(make(steps)).take(pa.array(np.searchsorted(steps, times)))
        return table.set_column(table.schema.get_field_index(column), column, made)

    def texts(self, utc: np.ndarray) -> np.ndarray:
        """ISO 8601 with Z, or with the offset of the local clock."""
        shift = self._offsets(utc)
        kind = "datetime64[us]" if (utc % SECOND).any() else "datetime64[s]"
        clock = np.datetime_as_string((utc + shift).astype("datetime64[us]").astype(kind))
        if self.zone is None:
            return np.char.add(clock, "Z")
        kinds, which = np.unique(shift, return_inverse=True)
        return np.char.add(clock, np.array([_offset(int(kind)) for kind in kinds])[which])

    def dates(self, utc: np.ndarray) -> np.ndarray:
        """The hands of the clock, without a zone; EnsembleError where no sheet can hold them."""
        local = utc + self._offsets(utc)
        if (local < EARLIEST).any() or (local % 1000).any():
            raise EnsembleError(
                "a sheet holds times from 1 March 1900 on, to the millisecond, and some are not so; "
                "write .csv or .parquet, or leave the times to the steps with a spec without start"
            )
        return local.astype("datetime64[us]")

    def twice(self, block: Block) -> bool:
        """Whether the clock shows a time twice."""
        utc = np.asarray(self.stamps(block.first_step, block.steps), np.int64)
        return bool((np.diff(np.sort(utc + self._offsets(utc))) == 0).any())

    def changes(self, block: Block) -> bool:
        """Whether the clock is set forward or back within the steps of a rectangle."""
        offsets_of = self._offsets(np.asarray(self.stamps(block.first_step, block.steps), np.int64))
        return bool((offsets_of != offsets_of[0]).any())

    def _offsets(self, utc: np.ndarray) -> np.ndarray:
        return np.zeros_like(utc) if self.zone is None else offsets(self.zone, utc)


def _offset(size: int) -> str:
    """An offset such as +01:00, with seconds where it has some."""
    hours, rest = divmod(abs(size), 60 * MINUTE)
    minutes, rest = divmod(rest, MINUTE)
    seconds = f":{rest // SECOND:02d}" if rest else ""
    return f"{'-' if size < 0 else '+'}{hours:02d}:{minutes:02d}{seconds}"
