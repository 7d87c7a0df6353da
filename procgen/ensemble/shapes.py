"""An ensemble in the shapes that other tools take: frames of pandas, and files."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from procgen.ensemble.layouts import Layout

if TYPE_CHECKING:
    import pandas as pd


class Shapes:
    """What an `Ensemble`, which is what `self` is, can be turned into."""

    def panel(self: Any, columns: Mapping[str, str] | None = None) -> pd.DataFrame:
        """A frame with a row an observation: id (the name of a series), path, time, value; ordered by these.

        It has series × paths × steps rows. Without a start, `step` stands in the place of `time`. What was revealed of
        a series stands beside its value, in a column with the label of the term, NaN for series without that term.
        `value` is int64 where all series are. `columns` gives other names, as in {"id": "shop", "time": "week"}.
        Raises EnsembleError when two columns would have one name.
        """
        import pyarrow as pa

        from procgen.ensemble.choice import Choice

        choice = Choice.of(self)
        rows = choice.form(Layout.asked("panel", None, columns))
        return pa.concat_tables([table for _, table in choice.tables(rows, Path())]).to_pandas()

    def wide(self: Any, series: str) -> pd.DataFrame:
        """A frame (steps, paths) of one series: its index are the times, or the steps without a start, and its
        columns the numbers of the paths; in the unit of the series, and int64 where that is stored so.

        Raises KeyError naming the columns there are.
        """
        import pandas as pd

        self.refuse_unknown(series)
        paths = pd.RangeIndex(self.whole.first_path, self.whole.end_path, name="path")
        return pd.DataFrame(self.rectangle(self.whole, [series])[series].T, self._index(), paths)

    def nested(self: Any) -> pd.DataFrame:
        """A frame with a row a path, indexed by its number, and a column a series; each cell is an array (steps,)."""
        import pandas as pd

        values = self.rectangle(self.whole)
        paths = pd.RangeIndex(self.whole.first_path, self.whole.end_path, name="path")
        return pd.DataFrame({name: pd.Series(list(values[name]), paths, object) for name in self.names})

    def each_path(self: Any, series: Sequence[str] | str | None = None) -> Iterator[tuple[int, pd.DataFrame]]:
        """(number, frame) path by path, in order, in bounded memory: ``for path, frame in ens.each_path():``

        A frame is (steps, series), of the series of these names or of all columns; its index are the times, or the
        steps without a start. Some paths are read at a time, about 128 MB of them and at least one.
        Raises EnsembleError when a series is not there, or a part is damaged.
        """
        import pandas as pd

        from procgen.ensemble.choice import Choice

        choice, index = Choice.of(self, series), self._index()
        for block, values in choice.by_paths():
            for row in range(block.paths):
                yield block.first_path + row, pd.DataFrame({name: v[row] for name, v in values.items()}, index)

    def export(
        self: Any,
        path: str | Path,
        *,
        layout: str | None = None,
        series: Sequence[str] | str | None = None,
        paths: range | None = None,
        steps: range | None = None,
        decimals: int | None = None,
        local_time: bool = False,
        columns: Mapping[str, str] | None = None,
        overwrite: bool = False,
        progress: Callable[[int, int], None] | None = None,
    ) -> Path:
        """Write the ensemble, or some of it, as one file, in bounded memory; returns its path.

        Parameters
        ----------
        path : ends in .csv, .xlsx (needs the extra `sheets`), .parquet, or .npy: an array (paths, steps), and with
            several series (series, paths, steps).
        layout : "long" (when None), "panel", "wide" (one series) or "nested" (.parquet), as in `render`.
        series : names, in the order wanted; all columns when None.
        paths, steps : numbers, such as range(0, 100); all when None.
        decimals : round to so many, an exact half to the even digit; as stored when None.
        local_time : times by the clock of the spec's zone, in place of UTC.
        columns : other names for id, path, step, time and value.
        overwrite : replace a file that is there.
        progress : called with (rows written, rows in all).

        Raises EnsembleError when the target cannot hold it, as a sheet cannot more than 1,048,576 rows, or when the
        file is there; nothing is written then.
        """
        from procgen.ensemble.export import export

        ready = export(
            self,
            path,
            layout=layout,
            series=series,
            paths=paths,
            steps=steps,
            decimals=decimals,
            local_time=local_time,
            columns=columns,
            overwrite=overwrite,
        )
        return ready.write(overwrite, progress)

    def _index(self: Any) -> pd.Index:
        """The times of the steps as an index, or the steps without a start."""
        import pandas as pd

        times = self.times()
        if times is None:
            return pd.RangeIndex(self.whole.first_step, self.whole.end_step, name="step")
        return pd.DatetimeIndex(times, name="time").tz_localize("UTC")
