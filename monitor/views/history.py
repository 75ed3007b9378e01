"""From the state's history to what a strip of pixels shows: plain numpy, no Qt."""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from monitor.state import AlarmLine, HistoryPoint, SeveralState

_TIME_STEPS = (1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600, 7200, 10800, 21600, 43200, 86400)
_LEAST_SPAN_PCT = 30.0
_MOST_PASSED = 512
# the cause is gone, though the alarm still shows
_OVER = ("returned", "latched")


@dataclass(frozen=True, slots=True)
class Run:
    """An unbroken stretch, a value a pixel column that holds any; all ``(n,)``, ``x`` in pixels from the strip's left."""

    x: NDArray[np.float64]
    least: NDArray[np.float64]
    mean: NDArray[np.float64]
    most: NDArray[np.float64]


def history_runs(
    points: Sequence[HistoryPoint], lost: Sequence[tuple[float, float]], start_s: float, end_s: float, width: int
) -> list[Run]:
    """The history from ``start_s`` to ``end_s`` on ``width`` pixels, broken where there was no lock or no opening."""
    if not points or width < 1 or not end_s > start_s:
        return []
    nan = math.nan
    table = np.array(
        [
            (p.seconds, nan, nan, nan)
            if p.opening_pct is None or p.least_pct is None or p.most_pct is None
            else (p.seconds, p.least_pct, p.opening_pct, p.most_pct)
            for p in points
            if start_s <= p.seconds <= end_s
        ]
    ).reshape(-1, 4)
    seconds = table[:, 0]
    stretch = np.zeros(seconds.size, dtype=np.int64)
    for from_s, _ in lost:
        stretch += seconds > from_s
    known = np.isfinite(table[:, 2])
    stretch += np.cumsum(~known)
    table, stretch = table[known], stretch[known]
    runs = []
    for number in np.unique(stretch):
        part = table[stretch == number]
        column = np.minimum((part[:, 0] - start_s) / (end_s - start_s) * width, width - 1).astype(np.int64)
        first = np.flatnonzero(np.diff(column, prepend=-1))
        count = np.diff(first, append=column.size)
        runs.append(
            Run(
                column[first] + 0.5,
                np.minimum.reduceat(part[:, 1], first),
                np.add.reduceat(part[:, 2], first) / count,
                np.maximum.reduceat(part[:, 3], first),
            )
        )
    return runs


def value_range(runs: Sequence[Run], best_pct: float | None) -> tuple[float, float]:
    """The axis of the openings, in per cent: whole tens round what is there, at least 30 points and at most to 110."""
    if not runs:
        return 0.0, 100.0
    low = min(float(run.least.min()) for run in runs)
    high = max(float(run.most.max()) for run in runs)
    if best_pct is not None:
        low, high = min(low, best_pct), max(high, best_pct)
    low, high = max(low, -100.0), min(max(high, -70.0), 105.0)
    bottom = 10.0 * math.floor((low - 3.0) / 10.0)
    top = 10.0 * math.ceil((high + 3.0) / 10.0)
    missing = _LEAST_SPAN_PCT - (top - bottom)
    if missing > 0:
        bottom -= 10.0 * math.ceil(missing / 20.0)
        top = max(top, bottom + _LEAST_SPAN_PCT)
    return bottom, min(top, 110.0)


def lost_spans(locks: Sequence[tuple[float, bool]], now_s: float, *, locked: bool) -> tuple[tuple[float, float], ...]:
    """When there was no lock, from what was told of locks gained and lost, oldest first."""
    since: float | None = 0.0 if (locks[0][1] if locks else not locked) else None
    spans = []
    for at, gained in locks:
        if gained and since is not None:
            spans.append((since, at))
            since = None
        elif not gained and since is None:
            since = at
    if since is not None:
        spans.append((since, now_s))
    return tuple(spans)


def time_ticks(start_s: float, end_s: float, most: int) -> Iterator[float]:
    """Round times on the axis, in order: no more than ``most`` and one."""
    span = end_s - start_s
    step: float = next((s for s in _TIME_STEPS if span / s <= most), 86400.0 * math.ceil(span / 86400.0 / max(most, 1)))
    tick = math.ceil(start_s / step) * step
    while tick <= end_s:
        yield tick
        tick += step


@dataclass(frozen=True, slots=True)
class AlarmSpan:
    """One alarm's stretch of the stream."""

    name: str
    severity: str
    start_s: float
    end_s: float


class AlarmMemory:
    """Keeps which alarms stood when, from the states that a view was told; one thread.

    When there are too many, of the older ones those of one alarm that lie closest together become one.
    """

    def __init__(self) -> None:
        self._passed: list[AlarmSpan] = []
        self._standing: dict[tuple[str, float], AlarmSpan] = {}

    def tell(self, alarms: Sequence[AlarmLine], now_s: float) -> None:
        """Take the alarms of the newest state."""
        standing = {
            (alarm.name, alarm.since_s): AlarmSpan(alarm.name, alarm.severity, alarm.since_s, now_s)
            for alarm in alarms
            if alarm.state not in _OVER
        }
        self._passed += [span for key, span in self._standing.items() if key not in standing]
        while len(self._passed) > _MOST_PASSED:
            self._join_two()
        self._standing = standing

    def _join_two(self) -> None:
        older = self._passed[: _MOST_PASSED // 2]
        newest: dict[str, int] = {}
        closest: tuple[float, int, int] | None = None
        for at, span in enumerate(older):
            before = newest.get(span.name)
            newest[span.name] = at
            if before is not None:
                apart = span.start_s - older[before].end_s
                if closest is None or apart < closest[0]:
                    closest = apart, before, at
        if closest is None:
            del self._passed[0]
            return
        _, first, second = closest
        self._passed[first] = replace(older[first], end_s=max(older[first].end_s, older[second].end_s))
        del self._passed[second]

    def spans(self) -> tuple[AlarmSpan, ...]:
        """All that are remembered, those that stand last."""
        return (*self._passed, *self._standing.values())


class LinkMemories:
    """The memories of several links, and which link is in front; one thread.

    Attributes
    ----------
    front
        Number of the link that was in front at the last look; None before.
    """

    def __init__(self, links: int) -> None:
        self.front: int | None = None
        self._each = [AlarmMemory() for _ in range(links)]

    def look(self, several: SeveralState) -> AlarmMemory | None:
        """Take the newest states; the memory of the link in front, if that is another one than before."""
        for memory, link in zip(self._each, several.links, strict=True):
            memory.tell(link.state.alarms, link.state.seconds)
        if several.front == self.front:
            return None
        self.front = several.front
        return self._each[several.front]
