"""What a painter needs of the eye: arrays ready to draw, and how counts become pixels."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dsp._kernels import picture as kernel


@dataclass(frozen=True, slots=True)
class EyeImage:
    """The class raster of one stretch of symbols, summed for drawing.

    Time runs from -1 to +1 UI about the decision instant, amplitude in level units (neighbouring levels 2 apart).

    Attributes
    ----------
    rails
        Names of the rails: ``("",)`` for one, ``("I", "Q")`` for two.
    density
        Shape ``(rails, columns, rows)``, uint32: traces that crossed column and row; row 0 is the lowest amplitude.
    column_ui
        Shape ``(columns,)``, float64: the time of each column's centre, in UI.
    row_level
        Shape ``(rows,)``, float64: the amplitude of each row's centre, in level units; evenly spaced, rising.
    opening_pct
        Shape ``(columns,)``, float64: least opening of all eyes if one decided at that column; may be negative, NaN where unknown.
    distributions
        Shape ``(rails, levels, rows)``, uint32: how each level's traces are spread at the best instant.
    levels
        Shape ``(levels,)``, float64: where perfect levels would stand, in level units, lowest first.
    best_ui
        The best instant on this time axis, in UI.
    traces
        How many symbols were drawn.
    """

    rails: tuple[str, ...]
    density: NDArray[np.uint32]
    column_ui: NDArray[np.float64]
    row_level: NDArray[np.float64]
    opening_pct: NDArray[np.float64]
    distributions: NDArray[np.uint32]
    levels: NDArray[np.float64]
    best_ui: float | None
    traces: int


def shares_per_pixel(
    counts: NDArray[np.uint32], row_level: NDArray[np.float64], low: float, high: float, height: int
) -> NDArray[np.float64]:
    """Share out row counts ``(..., rows)`` to ``height`` pixel rows from ``low`` to ``high``, ``(..., height)``.

    A count is spread evenly over its row, so the sum over the pixels is the sum over the visible rows.
    """
    rows = row_level.size
    step = (row_level[-1] - row_level[0]) / (rows - 1) if rows > 1 else 1.0
    edges = np.clip((np.linspace(low, high, height + 1) - row_level[0]) / step + 0.5, 0.0, rows)
    lines = np.ascontiguousarray(counts, dtype=np.uint32).reshape(-1, rows)
    pixels = np.zeros((lines.shape[0], height))
    kernel.share_rows(lines, edges, pixels)
    return pixels.reshape(*counts.shape[:-1], height)


def between_columns(tone: NDArray[np.float32], position: NDArray[np.float64], reach: int) -> NDArray[np.float32]:
    """Tones ``(rows, columns)`` at fractional column positions ``(width,)``, rising, as ``(rows, width)``.

    Straight between the two columns in every row where both have traces or neither has. Where only one has, the trace
    runs on to the nearest traced row of the other column, up to ``reach`` rows away, so that a lone steep trace stays a
    line instead of breaking up into the columns' dots; with nothing within reach it fades.
    """
    rows, columns = tone.shape
    left = np.clip(position.astype(np.int64), 0, max(columns - 2, 0))
    weight = (position - left).astype(np.float32)
    if columns < 2 or position.size <= columns:
        start = tone[:, left]
        return np.asarray(start + (tone[:, np.minimum(left + 1, columns - 1)] - start) * weight)
    drawn = np.empty((rows, position.size), np.float32)
    first = np.searchsorted(left, np.arange(columns))
    kernel.between(np.ascontiguousarray(tone, dtype=np.float32), weight, first, reach, drawn)
    return drawn
