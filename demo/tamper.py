"""Change one series of an ensemble a little, in one file, keeping everything else as it is.

    python demo/tamper.py OUT SERIES

From step 1000 on, SERIES is stretched by 3 % about its mean in the last file of OUT: too little to see in a plot.
"""

import sys
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

FROM_STEP, STRETCH = 1000, 1.03


def main(out: str, series: str) -> None:
    part = sorted(Path(out).glob("*.parquet"))[-1]
    table = pq.read_table(part)
    values = table[series].to_numpy()
    late = table["step"].to_numpy() >= FROM_STEP
    middle = values[late].mean()
    changed = np.where(late, middle + STRETCH * (values - middle), values)
    place = table.schema.get_field_index(series)
    pq.write_table(table.set_column(place, table.schema.field(place), pa.array(changed)), part)
    print(f"{series} stretched by {STRETCH - 1:.0%} from step {FROM_STEP} on in {part}")


if __name__ == "__main__":
    main(*sys.argv[1:])
