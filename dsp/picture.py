"""What a painter needs of the eye: arrays ready to draw, no arithmetic left to do."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


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
