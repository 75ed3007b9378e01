"""The opening curve of an eye and what is read off it: best instant, width, slope, tolerance. Columns are of the class raster."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dsp._kernels import raster as kernel
from dsp.eye import COLUMNS, Rows
from dsp.mixture import Spread

Curve = NDArray[np.float64]
_ONE_DB = 10 ** (-1 / 20)
_BESIDE = 2.0  # columns on either side between which a curve's rate is taken


def quantile(histogram: NDArray[np.int64], *shares: float) -> tuple[NDArray[np.float64], ...]:
    """Row positions below which each share of the counts lies, last axis rows; NaN where there are no counts.

    Linear within its row; in a row that alone holds many times the tail, at the row's middle: nothing is known of where in
    it so narrow a level stands.
    """
    *shape, rows = histogram.shape
    flat = np.ascontiguousarray(histogram, np.int64).reshape(-1, rows)
    places = np.empty((len(shares), flat.shape[0]))
    kernel.quantiles(flat, np.asarray(shares, np.float64), places)
    return tuple(places.reshape(-1, *shape))


def opening_curves(
    histogram: NDArray[np.int64], rows: Rows, gain: NDArray[np.float64], spacing: NDArray[np.float64], tail: float
) -> NDArray[np.float64]:
    """Opening of every eye in per cent of its spacing, ``(rails, eyes, columns)``, of traces ``(rails, levels, columns, rows)``."""
    low, high = quantile(histogram, tail, 1.0 - tail)
    height = (low[:, 1:] - high[:, :-1]) / rows.scale / gain[:, None, None]
    return np.asarray(100.0 * height / spacing[None, :, None])


def modelled_openings(levels: Curve, reach: Spread, spacing: Curve, tail: float) -> Curve:
    """Openings between neighbouring ``levels`` ``(n,)`` whose samples spread by ``reach``, per cent of ``spacing`` ``(n - 1,)``."""
    low, high = reach.quantile(tail), -reach.mirrored().quantile(tail)
    return np.asarray(100.0 * (np.diff(levels) + low - high) / spacing)


def plateau(values: Curve, top: int, tolerance: float) -> tuple[int, int]:
    """First and last index about ``top`` whose values stay within ``tolerance`` of it."""
    flat = values > values[top] - tolerance
    first = last = top
    while first > 0 and flat[first - 1]:
        first -= 1
    while last < values.size - 1 and flat[last + 1]:
        last += 1
    return first, last


def vertex(values: Curve, top: int) -> float:
    """Offset of a parabola's crest from the greatest of three neighbouring values."""
    if not 0 < top < values.size - 1:
        return 0.0
    left, middle, right = values[top - 1 : top + 2]
    bend = left - 2 * middle + right
    return float(np.clip(0.5 * (left - right) / bend, -0.5, 0.5)) if bend < 0 else 0.0


def peak(values: Curve) -> float:
    """Greatest value of a curve, between its columns where straight flanks meet there."""
    top = int(np.argmax(values))
    if not 2 <= top < values.size - 2:
        return float(values[top])
    left, right = values[top - 1] - values[top - 2], values[top + 1] - values[top + 2]
    if not (left > 0 and right > 0):
        return float(values[top])
    shift = (values[top + 1] + right - values[top - 1] - left) / (left + right)
    height = values[top - 1] + left * (1.0 + shift)
    return float(np.clip(height, values[top], values[top] + 0.5 * abs(values[top + 1] - values[top - 1])))


def corner(values: Curve, top: int) -> float | None:
    """Where two straight flanks about ``top`` meet, at most two columns off; None if the flanks bend or there is no corner.

    Sampling rounds off the corner of a wave that turns from one symbol's course to the next's; its flanks still show it.
    """
    if not 6 <= top < values.size - 6:
        return None
    lines = []
    for columns in (np.arange(top - 5, top - 1), np.arange(top + 3, top + 6)):
        slope, level = np.polyfit(columns - top, values[columns], 1)
        lines.append((slope, level, float(np.std(values[columns] - level - slope * (columns - top)))))
    (rise, left, left_rest), (fall, right, right_rest) = lines
    bend = float(rise - fall)
    if not bend > 1.0 or max(left_rest, right_rest) > 0.05 * bend:
        return None
    shift = float((right - left) / bend)
    return top + shift if abs(shift) <= 2.0 else None


def between(curves: NDArray[np.float64], column: float) -> NDArray[np.float64]:
    """Curves ``(..., columns)`` at a column and a part, by straight lines."""
    left = min(max(int(column), 0), curves.shape[-1] - 2)
    part = column - left
    return np.asarray((1 - part) * curves[..., left] + part * curves[..., left + 1])


def width(curve: Curve, best: float) -> tuple[float, float] | None:
    """UI, about the decision instant, between which the curve is above 0 around ``best`` (columns); at most one UI; None if closed."""
    start = round(best)
    if not curve[start] > 0:
        return None
    ends = []
    for step in (-1, 1):
        at = start
        while 0 <= at + step < curve.size and curve[at + step] > 0 and abs(at - start) < COLUMNS:
            at += step
        beyond = curve[at + step] if 0 <= at + step < curve.size else math.nan
        ends.append(at + step * curve[at] / (curve[at] - beyond) if beyond <= 0 else float(at))
    first, last = ends
    if last - first > COLUMNS:
        middle = 0.5 * (first + last)
        first, last = middle - COLUMNS / 2, middle + COLUMNS / 2
    return (float(first) - COLUMNS) / COLUMNS, (float(last) - COLUMNS) / COLUMNS


def _fall(curve: Curve, best: float, level: float, step: int) -> float | None:
    """Distance in UI from ``best`` to where the curve has fallen to ``level``, going by ``step``; None if it never does."""
    at = math.floor(best) if step < 0 else math.ceil(best)
    before, value = best, float(between(curve, best))
    while 0 <= at < curve.size:
        here = float(curve[at])
        if here <= level:
            part = (value - level) / max(value - here, 1e-12)
            return abs(before + (at - before) * min(max(part, 0.0), 1.0) - best) / COLUMNS
        before, value = float(at), here
        at += step
    return None


@dataclass(frozen=True, slots=True)
class Falls:
    """Where an opening curve has fallen to nothing, to half and by 1 dB, early and late: what width, slope and tolerance hang on.

    Slope: per cent a UI, the steeper mean rate down to half the opening. Tolerance: UI, to where the noise margin is 1 dB down.

    ``best`` in columns and ``top`` there; ``at`` ``(3, 2)`` columns and ``rate`` ``(3, 2)`` of the curve a column, NaN where it never
    falls so far or lies wider than a symbol.
    """

    best: float
    top: float
    at: NDArray[np.float64]
    rate: NDArray[np.float64]

    def places(self) -> NDArray[np.float64]:
        """Columns at which a change of the curve tells: the best, then ``at`` row by row, where there is none the best again, ``(7,)``."""
        return np.concatenate(([self.best], np.where(np.isfinite(self.at), self.at, self.best).ravel()))

    def figures(self, change: NDArray[np.float64], later: float) -> dict[str, float | None]:
        """Width, slope and tolerance of a curve that lies higher by ``change`` ``(7,)`` at `places` and has its best ``later``."""
        shares = np.asarray([[0.0], [0.5], [_ONE_DB]])
        at = self.at + (shares * change[0] - change[1:].reshape(3, 2)) / self.rate
        distance = np.abs(at - self.best - later) / COLUMNS
        known = np.where(np.isfinite(self.at[1]), np.abs(self.at[1] - self.best), np.inf)
        slope = 0.5 * (self.top + change[0]) / distance[1, int(np.argmin(known))]
        values = {
            "width_ui": distance[0].sum(),
            "timing_slope_pct_per_ui": slope,
            "timing_tolerance_early_ui": -distance[2, 0],
            "timing_tolerance_late_ui": distance[2, 1],
        }
        return {key: float(value) if np.isfinite(value) else None for key, value in values.items()}


def falls_of(curve: Curve, best: float) -> Falls | None:
    """The falls of a curve about ``best``; None where it is closed there."""
    top = float(between(curve, best))
    if not top > 0:
        return None
    at, rate = np.full((3, 2), math.nan), np.full((3, 2), math.nan)
    for row, share in enumerate((0.0, 0.5, _ONE_DB)):
        for side, step in enumerate((-1, 1)):
            far = _fall(curve, best, share * top, step)
            if far is None:
                continue
            place = best + step * far * COLUMNS
            before, after = between(curve, place - _BESIDE), between(curve, place + _BESIDE)
            slope = float(after - before) / (2.0 * _BESIDE)
            if not slope * step < 0:
                slope = (share - 1.0) * top / (place - best)
            at[row, side], rate[row, side] = place, slope
    if at[0, 1] - at[0, 0] > COLUMNS:
        at[0] = math.nan
    return Falls(best, top, at, rate)


def tail_errors(
    histogram: NDArray[np.int64], rows: Rows, gain: Curve, spacing: Curve, tail: float
) -> NDArray[np.float64]:
    """Standard errors of `opening_curves` by the count of traces in the tails, in per cent of spacing, ``(rails, eyes, columns)``.

    A quantile's error is that of its share over the density there, which its distance to a quantile further in tells. Source: H. A.
    David, H. N. Nagaraja, Order Statistics, 3rd ed., sec. 10.2 (from memory).
    """
    outer_low, inner_low, inner_high, outer_high = quantile(histogram, tail, 4.0 * tail, 1.0 - 4.0 * tail, 1.0 - tail)
    met = np.sqrt(np.maximum(tail * histogram.sum(axis=-1), 1.0)) * math.log(4.0)
    low, high = (inner_low - outer_low) / met, (outer_high - inner_high) / met
    error = np.hypot(low[:, 1:], high[:, :-1]) / rows.scale / gain[:, None, None]
    return np.asarray(100.0 * error / spacing[None, :, None])
