"""From the eye's arrays to pixels: no Qt."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dsp.picture import EyeImage, between_columns, shares_per_pixel

TIME_MIN_UI, TIME_MAX_UI = -1.0, 1.0
# the opening axis ends above 100 %, so that a perfect eye's curve is clear of the frame
OPENING_TOP_PCT = 110.0
# a single trace must stand out from the empty panel: this share of the ramp at least
_FAINTEST = 0.16
# how far up or down a lone trace is followed from one column to the next, as a share of the plot's height
_REACH = 0.05
# traces in the fullest bin of a distribution below which bins are made wider
_FULL_BIN = 120.0
# bends the logarithm down, so that the crowded parts keep their relief
_BEND = 1.6
# rows that hold less than this share of all traces may fall outside the picture
_CUT_SHARE = 1e-5


def visible_levels(image: EyeImage) -> tuple[float, float]:
    """Lowest and highest amplitude to show, in level units, one axis for all rails.

    Whole half units, so that a live picture's axis does not tremble; always some room beyond the outer levels.
    """
    low, high = float(image.levels[0]) - 1.0, float(image.levels[-1]) + 1.0
    total = image.density.sum(axis=(0, 1), dtype=np.float64)
    if total.sum() > 0:
        share = np.cumsum(total) / total.sum()
        first = int(np.searchsorted(share, _CUT_SHARE, side="right"))
        last = int(np.searchsorted(share, 1.0 - _CUT_SHARE, side="left"))
        low = min(low, float(image.row_level[first]) - 0.1)
        high = max(high, float(image.row_level[min(last, image.row_level.size - 1)]) + 0.1)
    return math.floor(low * 2.0) / 2.0, math.ceil(high * 2.0) / 2.0


def column_tones(image: EyeImage, rail: int, low: float, high: float, height: int) -> NDArray[np.float32]:
    """How dense each column of the raster is at ``height`` pixel rows, ``(height, columns)``, top row first.

    From 0 to 1, on a bent logarithm that ends at the 99.8 % quantile of what is there.
    """
    density = image.density[rail]
    pixels = shares_per_pixel(density, image.row_level, low, high, height)
    rows_per_pixel = (high - low) / height / (image.row_level[1] - image.row_level[0])
    if rows_per_pixel < 1.0:  # a row that covers several pixels keeps its count in each
        pixels /= rows_per_pixel
    return np.ascontiguousarray(_tones(pixels).T[::-1], dtype=np.float32)


def _tones(pixels: NDArray[np.float64]) -> NDArray[np.float32]:
    """Counts as tones from 0 to 1."""
    filled = pixels[pixels > 0]
    if filled.size == 0:
        return np.zeros(pixels.shape, dtype=np.float32)
    full = max(float(np.quantile(filled[:: max(1, filled.size // 20000)], 0.998)), 1.0)
    tone = np.asarray(np.log1p(pixels.astype(np.float32)) / np.float32(math.log1p(full)), dtype=np.float32)
    np.power(tone, np.float32(_BEND), out=tone)
    np.maximum(tone, np.minimum(2.0 * pixels, 1.0) * _FAINTEST, out=tone, casting="same_kind")
    np.minimum(tone, 1.0, out=tone)
    return tone


def count_indices(counts: NDArray[np.uint32], width: int, height: int, steps: int) -> NDArray[np.uint8]:
    """Counts ``(rows upwards, columns)`` as indices into a colour ramp, ``(height, width)``, top row first; to ``steps - 1``.

    Tones as those of `column_tones`. Nothing is blurred: a pixel has the counts of the one bin that it lies in, or the sum of
    all the bins that it covers.
    """
    tone = _tones(_along_first(_along_first(counts.astype(np.float64), height).T, width).T)[::-1]
    return np.asarray((tone * np.float32(steps - 1) + np.float32(0.5)).astype(np.uint8))


def _along_first(counts: NDArray[np.float64], size: int) -> NDArray[np.float64]:
    """The first axis on ``size`` places: bins repeated where there are fewer of them, else summed."""
    place = np.arange(size) * counts.shape[0] // max(size, 1)
    return np.asarray(counts[place] if size >= counts.shape[0] else np.add.reduceat(counts, place, axis=0))


def density_indices(
    image: EyeImage, rail: int, low: float, high: float, width: int, height: int, steps: int
) -> NDArray[np.uint8]:
    """Index into a colour ramp for every pixel of one rail's eye, ``(height, width)``, top row first; to ``steps - 1``."""
    tone = column_tones(image, rail, low, high, height)
    if not tone.any():
        return np.zeros((height, width), dtype=np.uint8)
    ui = TIME_MIN_UI + (TIME_MAX_UI - TIME_MIN_UI) * (np.arange(width) + 0.5) / width
    position = np.interp(ui, image.column_ui, np.arange(image.column_ui.size))
    drawn = between_columns(tone, position, max(1, round(height * _REACH)))
    return np.asarray((drawn * np.float32(steps - 1) + np.float32(0.5)).astype(np.uint8))


def level_profiles(image: EyeImage, rail: int, low: float, high: float, height: int) -> NDArray[np.float64]:
    """Distributions of one rail at the best instant, ``(levels, bins)``, top bin first; the tallest reaches 1.

    As many bins as the counts bear (the tallest holds `_FULL_BIN` traces or more), at most one a pixel of ``height``.
    """
    for pixels_per_bin in (1, 2, 3, 4, 6):
        bins = max(1, height // pixels_per_bin)
        profiles = shares_per_pixel(image.distributions[rail], image.row_level, low, high, bins)[:, ::-1]
        peak = float(profiles.max(initial=0.0))
        if peak >= _FULL_BIN:
            break
    return np.asarray(profiles / peak) if peak > 0 else np.asarray(profiles)


@dataclass(frozen=True, slots=True)
class Span:
    """The stretch of time in which the eye is open, in UI."""

    start_ui: float
    stop_ui: float


def open_span(column_ui: NDArray[np.float64], opening_pct: NDArray[np.float64], best_ui: float | None) -> Span | None:
    """Where the opening curve is above 0 around the best instant, straight between columns.

    At most 1 UI (about the best instant); None when the eye is closed, the best instant or its opening unknown.
    """
    if best_ui is None or not math.isfinite(best_ui) or column_ui.size == 0:
        return None
    middle = int(np.argmin(np.abs(column_ui - best_ui)))
    if not opening_pct[middle] > 0.0:
        return None
    ends = []
    for step in (-1, 1):
        at = middle
        while 0 <= at + step < column_ui.size and opening_pct[at + step] > 0.0:
            at += step
        end = float(column_ui[at])
        beyond = at + step
        if 0 <= beyond < column_ui.size and math.isfinite(opening_pct[beyond]):
            fraction = opening_pct[at] / (opening_pct[at] - opening_pct[beyond])
            end += float(fraction * (column_ui[beyond] - column_ui[at]))
        ends.append(end)
    return Span(max(ends[0], best_ui - 0.5), min(ends[1], best_ui + 0.5)) if ends[1] - ends[0] > 1.0 else Span(*ends)


def value_at(column_ui: NDArray[np.float64], opening_pct: NDArray[np.float64], at_ui: float) -> float | None:
    """The opening curve at one time, straight between columns; None outside or where a neighbour is NaN."""
    value = float(np.interp(at_ui, column_ui, opening_pct, left=math.nan, right=math.nan))
    return value if math.isfinite(value) else None


def opening_floor(opening_pct: NDArray[np.float64]) -> float:
    """Lower end of the opening axis, in per cent: -50, or lower in steps of 50 to keep a closed eye's best in view."""
    known = opening_pct[np.isfinite(opening_pct)]
    best = float(known.max()) if known.size else 0.0
    return min(-50.0, 50.0 * math.floor((best - 25.0) / 50.0))


def finite_runs(values: NDArray[np.float64]) -> list[slice]:
    """The stretches without NaN or infinity, in order."""
    good = np.concatenate([[False], np.isfinite(values), [False]])
    turns = np.flatnonzero(good[1:] != good[:-1])
    return [slice(int(start), int(stop)) for start, stop in zip(turns[::2], turns[1::2], strict=True)]


def tick_step(span: float, most: int) -> float:
    """The least step of 1, 2 or 5 times a power of ten that puts no more than ``most`` ticks on ``span``."""
    rough = span / max(most, 1)
    power = 10.0 ** math.floor(math.log10(rough))
    return next(power * factor for factor in (1, 2, 5, 10) if power * factor >= rough * (1 - 1e-9))
