"""Where traces cross the middle threshold: spread, its pattern and random parts, duty cycle, rise time."""

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dsp.eye import COLUMNS, CROSSING_AROUND, CROSSING_BINS, EyeSums
from dsp.openings import quantile

TAIL = 1e-3  # share of the crossings beyond either end of the peak-to-peak spread
_LEAST = 50  # crossings without which nothing is said


@dataclass(frozen=True, slots=True)
class Crossings:
    """Spread of the threshold crossings in UI, of the rail where each is greatest; names as in `dsp.reading.Reading`."""

    rms: float | None = None
    pp: float | None = None
    pattern_pp: float | None = None
    random_rms: float | None = None
    dcd: float | None = None


def crossings(sums: EyeSums) -> Crossings:
    """The crossings' figures; empty where a rail has too few of them."""
    each = [_of_rail(sums, rail) for rail in range(sums.scheme.rails)]
    spreads = [rail for rail in each if rail is not None]
    if len(spreads) < len(each):
        return Crossings()
    dcd = None
    if sums.scheme.levels == 2 and sums.scheme.kind != "carrier":
        (falls, fall_sum), (rises, rise_sum) = sums.crossing_edges[0]
        if min(falls, rises) > 10:
            dcd = float(fall_sum / falls - rise_sum / rises)
    rms, pp, pattern, random = (_greatest(column) for column in zip(*spreads, strict=True))
    return Crossings(rms, pp, pattern, random, dcd)


def _greatest(values: tuple[float | None, ...]) -> float | None:
    return max((value for value in values if value is not None), default=None)


def _of_rail(sums: EyeSums, rail: int) -> tuple[float, float, float | None, float | None] | None:
    groups = sums.crossing_groups[rail]
    total = float(groups[:, 0].sum())
    if total < _LEAST:
        return None
    mean = float(groups[:, 1].sum()) / total
    rms = math.sqrt(max(float(groups[:, 2].sum()) / total - mean**2, 0.0))
    low, high = (float(edge) for edge in quantile(sums.crossing_bins[rail], TAIL, 1.0 - TAIL))
    return rms, (high - low) / CROSSING_BINS, *_pattern_part(groups, _slants(sums.scheme.levels))


@lru_cache(maxsize=4)
def _slants(levels: int) -> NDArray[np.float64]:
    """What moves a crossing to first order, for each group of symbols: direction, and each other symbol on the crossing's own scale.

    ``(groups, 1 + symbols)``, the first of them a constant.
    """
    around = CROSSING_AROUND[levels]
    symbols = 2.0 * np.indices((levels,) * len(around)).reshape(len(around), -1) - (levels - 1.0)
    own = symbols[around.index(0)]
    scale = np.where(own == 0.0, 1.0, own)
    others = [row / scale for offset, row in zip(around, symbols, strict=True) if offset]
    return np.stack([np.ones_like(own), np.sign(own), *others], axis=1)


def _pattern_part(groups: NDArray[np.float64], slants: NDArray[np.float64]) -> tuple[float | None, float | None]:
    """Spread of the pattern groups' mean crossing times (0.1 to 99.9 % of the crossings), and the rms within groups.

    Group means carry noise of their own: each is drawn towards what is linear in its symbols by what an analysis of variance makes of
    the rest.
    """
    some = groups[:, 0] >= 2
    n, total, square = groups[some].T
    count = n.sum()
    if count <= some.sum():
        return None, None
    means = total / n
    within = max(float(np.sum(square - n * means**2)), 0.0) / (count - n.size)
    x = slants[some]
    line = x @ np.linalg.lstsq((x.T * n) @ x, (x.T * n) @ means, rcond=1e-9)[0]
    between, free = 0.0, n.size - x.shape[1]
    if free > 0:
        spare = (count - np.sum(n**2) / count) / (n.size - 1)
        between = max((float(np.sum(n * (means - line) ** 2)) / free - within) / spare, 0.0)
    shrunk = line + (means - line) * (between / (between + within / n) if between > 0 else 0.0)
    order = np.argsort(shrunk)
    share = np.cumsum(n[order]) / count
    low = shrunk[order][int(np.searchsorted(share, TAIL))]
    high = shrunk[order][min(int(np.searchsorted(share, 1 - TAIL)), n.size - 1)]
    return float(high - low), math.sqrt(within)


def rise_time(sums: EyeSums) -> float | None:
    """From 20 to 80 % of the mean transition in UI, mean of rising and falling; two-level baseband only."""
    if sums.scheme.levels != 2 or sums.scheme.kind == "carrier":
        return None
    pairs = sums.left[0].reshape(COLUMNS, 2, 2, -1).astype(np.float64)
    if min(pairs[0, 0, 1].sum(), pairs[0, 1, 0].sum()) < 10:
        return None
    centres = sums.rows.centres()
    times = []
    for left, right, sign in ((0, 1, 1.0), (1, 0, -1.0)):
        trace = sign * (pairs[:, left, right] @ centres) / pairs[:, left, right].sum(axis=1)
        time = rise_of(trace, COLUMNS)
        if time is None:
            return None
        times.append(time)
    return float(np.mean(times))


def rise_of(trace: NDArray[np.float64], points: int) -> float | None:
    """From 20 to 80 % of a rising transition ``(n,)`` of so many points a symbol, in UI."""
    low, high = trace.min(), trace.max()
    at = []
    for share in (0.2, 0.8):
        level = low + share * (high - low)
        index = int(np.argmax(trace > level))
        if index == 0:
            return None
        at.append(index - 1 + (level - trace[index - 1]) / (trace[index] - trace[index - 1]))
    return float((at[1] - at[0]) / points)
