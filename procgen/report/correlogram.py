"""A correlogram of letters: one column a lag, bars in eighths above the axis and in halves below it."""

from __future__ import annotations

from collections.abc import Sequence

ROWS = 3  # letters from 0 up to 1, and down to -1
RISING = " ▁▂▃▄▅▆▇█"
FALLING = " ▀█"
EVERY = 5  # lags between two marks of the axis
VISIBLE = 1 / (2 * ROWS * (len(RISING) - 1))  # less than half of the smallest step is drawn as nothing


def correlogram(values: Sequence[float]) -> list[str]:
    """Lines that show autocorrelations at the lags 1, 2, .., as wide as there are lags; none where all are about 0."""
    if not values or max(map(abs, values)) < VISIBLE:
        return []
    above = [round(max(v, 0.0) * ROWS * 8) for v in values]
    below = [round(max(-v, 0.0) * ROWS * 2) for v in values]
    lines = [_row(above, row, RISING) for row in reversed(range(_rows(above, 8)))]
    axis = "".join("┴" if lag % EVERY == 0 else "─" for lag in range(1, len(values) + 1))
    lines += [axis, *(_row(below, row, FALLING) for row in range(_rows(below, 2)))]
    return [line.rstrip() for line in [*lines, _lags(len(values))] if line.strip()]


def scaled(lines: Sequence[str]) -> list[str]:
    """The lines with what their axis and their ends stand for in front of them."""
    (axis,) = [k for k, line in enumerate(lines) if "─" in line]
    marks = {axis: "0", axis - ROWS: "1", axis + ROWS: "−1"}
    return [f"  {marks.get(k, ''):>3} {line}" for k, line in enumerate(lines[:-1])] + [f"  lag {lines[-1]}"]


def _rows(heights: Sequence[int], steps: int) -> int:
    return -(-max(heights) // steps)


def _row(heights: Sequence[int], row: int, letters: str) -> str:
    """The letters of all bars at one height."""
    full = len(letters) - 1
    return "".join(letters[min(max(height - row * full, 0), full)] for height in heights)


def _lags(count: int) -> str:
    """Numbers under the marks of the axis, their last digit below its mark, as many as have room."""
    step = EVERY if count < 100 else 2 * EVERY
    return "".join(f"{lag:{step}d}" for lag in range(step, count + 1, step)) or "1"
