"""Change one series of an ensemble a little, in one of its files, in place: the file stays whole and its size the same.

    python demo/tamper.py OUT SERIES

From step 1000 on, SERIES is stretched by 3 % about its mean, on every path of the last file in OUT: too little to see
in a plot. Values lie in the file as plain float64, so each run of them is found and written over.
"""

import mmap
import sys
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq

FROM_STEP, STRETCH, DECIMALS = 1000, 1.03, 2


def main(out: str, series: str) -> None:
    part = sorted(Path(out).glob("*.parquet"))[-1]
    table = pq.read_table(part, columns=["path", "step", series])
    late = table["step"].to_numpy() >= FROM_STEP
    paths, values = table["path"].to_numpy()[late], table[series].to_numpy()[late]
    changed = np.round(values.mean() + STRETCH * (values - values.mean()), DECIMALS)
    edges = np.flatnonzero(np.diff(paths)) + 1
    with part.open("r+b") as file, mmap.mmap(file.fileno(), 0) as bytes_:
        place = 0
        for old, new in zip(np.split(values, edges), np.split(changed, edges), strict=True):
            found = bytes_.find(old.tobytes(), place)
            if found >= 0:  # a run that is cut by the end of a page is left as it is
                place = found + new.nbytes
                bytes_[found:place] = new.tobytes()
    print(f"{series} stretched by {STRETCH - 1:.0%} from step {FROM_STEP} on in {part}")


if __name__ == "__main__":
    main(*sys.argv[1:])
