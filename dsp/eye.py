"""The eye as running sums: class raster, pattern correlations, level and crossing sums of any number of symbols.

Everything here adds up: sums of two stretches are those of both, and none of them keeps the stream.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dsp._kernels import raster as kernel
from dsp._kernels.lanes import LANES, SPAN
from dsp.interpolation import TAPS, expander, spread_weights
from dsp.jitter import BLOCK, TimingSpectrum
from dsp.lane import AtOnce, Lane
from dsp.link import Scheme
from dsp.residual import ResidualMeter, ResidualSums
from dsp.stretches import EAGER, LONGEST, OFTEN, Stretch, Stretches
from dsp.sums import laid_out
from dsp.tracking import Tables, Track

COLUMNS = 64  # a symbol interval; the picture shows two intervals
EARLIEST, LATEST = -8, 12  # lags of the pattern response: symbols still to come, symbols gone by
LAGS = LATEST - EARLIEST + 1
HALO = 16  # symbols on either side that a symbol's sums look at
CROSSING_BINS = 2048
MOST_GROUPS = 10  # stretches of a window whose small sums are kept apart, for the figures' intervals
FEWEST_APART = 256  # symbols of such a stretch
WINDOWS_APART = 8  # windows of a run that are kept apart in stretches; each later one is a stretch itself
RUN = 256  # symbols in a row that are drawn, or left out, where not all are
CROSSING_AROUND = {2: (-5, -4, -3, -2, -1, 0, 2, 3), 3: (-2, -1, 0, 2), 4: (-2, -1, 0, 2), 8: (-1, 0, 2)}


@dataclass(frozen=True, slots=True)
class Rows:
    """The raster's amplitude axis: row = floor(level * scale + zero), for levels in level units."""

    count: int
    scale: float
    zero: float

    def centres(self) -> NDArray[np.float64]:
        """Level of each row's centre, shape ``(count,)``."""
        return np.asarray((np.arange(self.count) + 0.5 - self.zero) / self.scale, dtype=np.float64)

    @property
    def height(self) -> float:
        """Of one row, in level units."""
        return 1.0 / self.scale


def rows_for(scheme: Scheme) -> Rows:
    """1024 rows over the levels and what overshoots them."""
    reach = (2.5 if scheme.levels == 2 else 2.0) * max(scheme.rail_levels)
    return Rows(1024, 512.0 / reach, 512.0)


@dataclass
class LineSums:
    """Sums for the least-squares line through ``(k, d)`` points of several segments, each with its own intercept."""

    sums: dict[int, NDArray[np.float64]] = field(default_factory=dict)  # n, k, d, kk, kd, dd by segment

    def add(self, segment: int, k: NDArray[np.float64], d: NDArray[np.float64]) -> None:
        """Add points of one segment, shapes ``(n,)``."""
        row = np.array([k.size, np.add.reduce(k), np.add.reduce(d), k @ k, k @ d, d @ d])
        self.sums[segment] = self.sums.get(segment, np.zeros(6)) + row

    def merge(self, other: LineSums, sign: int = 1) -> None:
        """Add another's points, or with ``sign`` -1 take them away."""
        for segment, row in other.sums.items():
            self.sums[segment] = self.sums.get(segment, np.zeros(6)) + sign * row

    def line(self) -> tuple[float, float, float] | None:
        """Common slope, mean of d, and rms about the lines; None for fewer than 3 points."""
        sxx = sxy = syy = count = total = 0.0
        for n, k, d, kk, kd, dd in self.sums.values():
            if n < 1:
                continue
            sxx += kk - k * k / n
            sxy += kd - k * d / n
            syy += dd - d * d / n
            count += n
            total += d
        if count < 3 or sxx <= 0:
            return None
        slope = sxy / sxx
        return slope, total / count, float(np.sqrt(max(syy - slope * sxy, 0.0) / count))


class EyeSums:
    """All sums of a stretch of symbols; see the module's first line.

    Attributes
    ----------
    symbols, drawn
        Symbols summed, and those of them whose traces are in the raster.
    pair
        Whether the raster's classes are pairs (left level, right level) of one interval; else left and right are kept apart.
    left
        Shape ``(rails, 64, classes, rows)``, uint32; no columns where there is no ``raster``.
    middle
        Traces at the decision instant alone, ``(rails, levels, rows)``; only where there is no raster.
    gram, cross, square
        Normal equations: symbols with symbols ``(k, k)``, with the wave ``(rails, k, phases)``, the wave's energy ``(rails, phases)``;
        the k regressors are the rails' decided levels at all lags, earliest lag first, then a constant 1.
    residual
        Sums of what that response leaves over at the decision instant.
    timing_power, timing_blocks
        Summed power spectra of the timing error and how many blocks they are of; see `dsp.jitter.TimingSpectrum`.
    stretches
        Some of the symbols as they are, for what no sum can tell.
    groups
        The same symbols in up to 10 stretches, without raster and stretches; empty where they were not kept apart.
    """

    def __init__(self, scheme: Scheme, phases: int, *, raster: bool = True) -> None:
        self.scheme = scheme
        self.phases = phases
        self.rows = rows_for(scheme)
        rails, levels = scheme.rails, scheme.levels
        self.pair = levels <= 3
        classes = levels**2 if self.pair else levels
        self.symbols = 0
        self.drawn = 0
        self.left = np.zeros((rails, COLUMNS if raster else 0, classes, self.rows.count), np.uint32)
        self.right = np.zeros_like(self.left) if not self.pair else None
        regressors = rails * LAGS + 1
        around = CROSSING_AROUND[levels]
        (
            self._numbers,
            (
                self.gram,
                self.cross,
                self.square,
                self.level_sums,  # count, sum, sum of squares at the decision instant
                self.crossing_groups,
                self.crossing_edges,
                self.unit_sums,  # gain, zero by rail, weighted by symbols; last row: symbols
                self.timing_power,
            ),
        ) = laid_out(
            (regressors, regressors),
            (rails, regressors, phases),
            (rails, phases),
            (rails, levels, 3),
            (rails, levels ** len(around), 3),
            (rails, 2, 2),
            (3, 2),
            (BLOCK // 2 + 1,),
        )
        self.crossing_bins = np.zeros((rails, CROSSING_BINS), np.int64)
        self.middle = np.zeros((rails, levels, 0 if raster else self.rows.count), np.int64)
        self.across = 0.0  # energy of a one-railed carrier's idle rail, level units squared
        self.steered = 0.0  # turn of a drifting carrier that was taken out on the way, cycles
        self.residual = ResidualSums(scheme, small=not raster)
        self.timing_blocks = 0
        self.stretches = Stretches()
        self.groups: list[EyeSums] = []
        self._kept: EyeSums | None = None  # what is in the groups, where they were set apart one by one
        self._small: tuple[tuple[int, int], EyeSums] | None = None  # the last `small`, and how much had been summed
        self.clock = LineSums()
        self.carrier = LineSums()

    def merge(self, other: EyeSums) -> None:
        """Add the sums of another stretch of the same link; what it kept apart is left to `keep_apart`."""
        if self.raster:
            self.left += other.left
            if self.right is not None and other.right is not None:
                self.right += other.right
            self.stretches.merge(other.stretches)
        self._add(other, 1)

    @staticmethod
    def together(parts: Sequence[EyeSums]) -> EyeSums:
        """The sums of neighbouring stretches of one link, at least one, each of them kept apart too."""
        first = parts[0]
        result = EyeSums(first.scheme, first.phases)
        result.left[...] = first.left
        if result.right is not None and first.right is not None:
            result.right[...] = first.right
        result.stretches.merge(first.stretches)
        result._add(first, 1)
        for part in parts[1:]:
            result.merge(part)
        result.keep_apart([part.small() for part in parts])
        return result

    def _add(self, other: EyeSums, sign: int) -> None:
        """Add the small sums of another stretch, or with ``sign`` -1 take them away."""
        self.symbols += sign * other.symbols
        self.drawn += sign * other.drawn
        self.across += sign * other.across
        self.steered += sign * other.steered
        self.timing_blocks += sign * other.timing_blocks
        join = np.add if sign > 0 else np.subtract
        join(self._numbers, other._numbers, out=self._numbers)
        join(self.crossing_bins, other.crossing_bins, out=self.crossing_bins)
        if not self.raster:
            join(self.middle, other.at_decision(), out=self.middle)
        self.residual.merge(other.residual, sign)
        self.clock.merge(other.clock, sign)
        self.carrier.merge(other.carrier, sign)

    @property
    def raster(self) -> bool:
        """Whether there is one, or only what small sums tell."""
        return self.left.size > 0

    def at_decision(self) -> NDArray[np.int64]:
        """Traces at the decision instant by rail, level and row, shape ``(rails, levels, rows)``."""
        return self.histogram(range(COLUMNS, COLUMNS + 1))[:, :, 0] if self.raster else self.middle

    def small(self) -> EyeSums:
        """All but raster and stretches. Made once, until more is summed: not to be changed."""
        summed = self.symbols, self.timing_blocks
        if self._small is None or self._small[0] != summed:
            self._small = summed, self._copied()
        return self._small[1]

    def _copied(self) -> EyeSums:
        """The small sums to be changed."""
        result = EyeSums(self.scheme, self.phases, raster=False)
        result._add(self, 1)
        return result

    def without(self, part: EyeSums) -> EyeSums:
        """The small sums of all but a stretch of these symbols."""
        result = self.small()._copied()
        result._add(part, -1)
        return result

    def apart(self) -> list[EyeSums]:
        """The small sums of these symbols in stretches, as far as they were kept apart."""
        rest = self.symbols - sum(group.symbols for group in self.groups)
        if not rest:
            return self.groups
        last = self._copied()
        for group in self.groups if self._kept is None else (self._kept,):
            last._add(group, -1)
        return [*self.groups, last]

    def set_apart(self) -> None:
        """Keep the symbols since the last time as a stretch of their own."""
        kept = self.small()
        self.keep_apart(self.apart()[-1:])
        self._kept = kept

    def keep_apart(self, parts: list[EyeSums]) -> None:
        """Keep small sums that have been added as stretches of their own; neighbours that hold the fewest symbols join."""
        groups = [*self.groups, *parts]
        while len(groups) > MOST_GROUPS:
            pair = min(range(len(groups) - 1), key=lambda i: groups[i].symbols + groups[i + 1].symbols)
            joined = groups[pair]._copied()
            joined._add(groups.pop(pair + 1), 1)
            groups[pair] = joined
        self.groups = groups

    def histogram(self, columns: range = range(2 * COLUMNS)) -> NDArray[np.int64]:
        """Traces by rail, level, column and row, shape ``(rails, levels, columns, rows)``; column 64 of 128 is the decision instant."""
        rails, levels = self.scheme.rails, self.scheme.levels
        result = np.empty((rails, levels, len(columns), self.rows.count), np.int64)
        for i, column in enumerate(columns):
            after = column >= COLUMNS
            if self.pair:
                pairs = self.left[:, column % COLUMNS].reshape(rails, levels, levels, -1)
                result[:, :, i] = pairs.sum(axis=2 if after else 1, dtype=np.int64)
            else:
                side = self.left if after or self.right is None else self.right
                result[:, :, i] = side[:, column % COLUMNS]
        return result

    def density(self) -> NDArray[np.uint32]:
        """Traces of all levels by rail, column of one interval and row, shape ``(rails, 64, rows)``."""
        return np.asarray(self.left.sum(axis=2, dtype=np.uint32))


class EyeMeter:
    """Turns tracked symbols into `EyeSums`, a window at a time.

    Symbols wait until ``slab`` of them have their neighbours; ``finished`` is called with the sums of each full window, ``grown`` with
    those of the open one at each ``part`` of it.
    The first and last 16 symbols of an unbroken run serve as neighbours only. About half of the work may be done ``aside``.
    """

    def __init__(
        self,
        scheme: Scheme,
        tables: Tables,
        *,
        offset_ui: float,
        sps: float,
        phases: int,
        slab: int,
        window: int,
        every: int,
        finished: Callable[[EyeSums], None],
        part: int | None = None,
        grown: Callable[[EyeSums], None] | None = None,
        aside: Lane | None = None,
    ) -> None:
        self._scheme = scheme
        self._tables = tables
        self.offset_ui = offset_ui
        self.extra_turn = 0.0  # cycles a symbol by which this run's carrier was turned more than the first run's
        self._sps = sps
        self._phases = phases
        self._slab = slab
        self._window = window
        self.every = every  # may be changed at any time
        self._finished = finished
        self._part = part or window
        self._grown = grown
        self._aside = aside or AtOnce()
        self.sums = EyeSums(scheme, phases)
        self._expand = expander(COLUMNS // phases, tables.band / (phases / sps) if tables.band else 0.0)
        self._residual = ResidualMeter(scheme, phases, LAGS, thrifty=slab >= 1024)
        self._spectrum = TimingSpectrum(phases, corners=not tables.band)
        # weights of a symbol's eight points at once, where the same samples tell them on all rails
        self._spread: NDArray[np.float32] | None = None
        reached = int(1 + sps / LANES * (LANES - 1)) + TAPS <= SPAN
        if tables.band and phases == LANES and not scheme.stagger and reached:
            self._spread = spread_weights(tables.band, sps / LANES, LANES, SPAN)
        self._around = np.asarray(CROSSING_AROUND[scheme.levels], dtype=np.int32)
        self._count = 0  # symbols summed since the link was found, for the raster's every-n-th
        self._stretches = 0  # that there were since then
        self._windows = 0
        self._segment = 0
        self._origin = 0.0
        self._seen = 0  # symbols of this segment
        self._capacity = 0
        self._pending = 0
        self._waves: list[NDArray[np.float32]] = []
        self._units: deque[tuple[int, NDArray[np.float64]]] = deque()  # a track's last symbol + 1, gain and zero
        self._loops = np.zeros((4, 0))
        self._decided = np.zeros((2, 0), np.float32)
        self._classes = np.zeros((2, 0), np.int8)

    def resample(self, track: Track) -> tuple[NDArray[np.float32], ...]:
        """Each rail's wave in level units, shape ``(phases, n)``, from each symbol's decision instant to the next; pure."""
        shift = self.offset_ui * self._sps
        scale, zero = 1.0 / track.gain, track.zero
        n = track.values.shape[1]
        rails = self._scheme.rails
        waves = tuple(np.empty((self._phases, n), np.float32) for _ in track.samples)
        if self._spread is not None:
            kernel.resample_eight(
                track.samples[0], track.samples[-1], self._spread, track.instants, shift, track.phases, self.offset_ui,
                len(waves) == 2, scale[0], scale[1], zero[0], zero[1], waves[0], waves[-1],
            )  # fmt: skip
            return waves[:rails]
        if self._scheme.kind != "carrier":
            kernel.resample_real(
                track.samples[0], self._tables.value, track.instants, shift, scale[0], zero[0], waves[0]
            )
            return waves
        step = np.diff(track.phases)
        # the decision instant lies offset_ui after the loop's, and the carrier has turned on by then
        angle = 2 * np.pi * np.mod(track.phases[:-1] + step * self.offset_ui, 1.0).astype(np.float32)
        turn = (2 * np.pi / self._phases * step).astype(np.float32)
        kernel.resample_turned(
            track.samples[0], track.samples[1], self._tables.value, track.instants, shift,
            self._scheme.stagger * self._sps, np.cos(angle), np.sin(angle), np.cos(turn), np.sin(turn),
            scale[0], scale[1], zero[0], zero[1], rails == 2, waves[0], waves[-1],
        )  # fmt: skip
        return waves[:rails]

    def push(self, track: Track, waves: tuple[NDArray[np.float32], ...]) -> None:
        """Take the next symbols of the run with their waves as `resample` made them."""
        n = track.values.shape[1]
        if n == 0:
            return
        self._reserve(self._pending + n)
        rails = self._scheme.rails
        for pending, wave in zip(self._waves, waves, strict=True):
            pending[:, self._pending : self._pending + n] = wave
        self._decided[:rails, self._pending : self._pending + n] = track.decided[:rails]
        self._classes[:rails, self._pending : self._pending + n] = track.classes[:rails]
        self._follow(track, n)
        late = self._loops[0, self._pending : self._pending + n]
        sums = self.sums
        self._aside.do(lambda: self._add_spectrum(sums, late, waves, track.decided[:rails]))
        self._pending += n
        if self._pending - 2 * HALO >= self._slab:
            self._settle()

    def _add_spectrum(
        self,
        sums: EyeSums,
        late: NDArray[np.float64],
        waves: tuple[NDArray[np.float32], ...],
        decided: NDArray[np.float32],
    ) -> None:
        for power in self._spectrum.push(late, waves, decided):
            sums.timing_power += power
            sums.timing_blocks += 1

    def end_segment(self, *, keep: bool = True) -> None:
        """The run of symbols breaks off here: sum what has its neighbours, forget the rest; without ``keep`` the open window too."""
        self._settle()
        self._aside.wait()
        if not keep:
            self.restart_window()
        self._residual.restart()
        self._spectrum.restart()
        self._pending = 0
        self._segment += 1
        self._seen = 0
        self._units.clear()

    def restart_window(self) -> None:
        """Forget the open window's sums."""
        self.sums = EyeSums(self._scheme, self._phases)

    def _reserve(self, wanted: int) -> None:
        if wanted <= self._capacity:
            return
        capacity = max(2 * wanted, 4096)
        waves = [np.zeros((self._phases, capacity), np.float32) for _ in range(self._scheme.rails)]
        for new, old in zip(waves, self._waves, strict=False):
            new[:, : self._pending] = old[:, : self._pending]
        decided, classes = np.zeros((2, capacity), np.float32), np.zeros((2, capacity), np.int8)
        decided[:, : self._pending] = self._decided[:, : self._pending]
        classes[:, : self._pending] = self._classes[:, : self._pending]
        loops = np.zeros((4, capacity))
        loops[:, : self._pending] = self._loops[:, : self._pending]
        self._waves, self._decided, self._classes, self._loops, self._capacity = (
            waves,
            decided,
            classes,
            loops,
            capacity,
        )

    def _follow(self, track: Track, n: int) -> None:
        """What the loops say of the next symbols.

        How late they are against the first one's clock (UI), carrier (cycles), the idle rail's energy; level unit and middle by rail.
        """
        k = np.arange(self._seen, self._seen + n, dtype=np.float64)
        absolute = track.base + track.instants[:n]
        if self._seen == 0:
            self._origin = float(absolute[0])
        rows = self._loops[:, self._pending : self._pending + n]
        rows[0] = (absolute - self._origin) / self._sps - k
        if self._scheme.kind == "carrier":
            rows[1] = track.phases[:n] + (self.extra_turn - self._scheme.rotation) * k
        if self._scheme.kind == "carrier" and self._scheme.rails == 1:
            rows[2] = track.values[1].astype(np.float64) ** 2
        rows[3] = 0.0 if track.steered is None else track.steered
        self._seen += n
        self._units.append((self._seen, np.stack((track.gain, track.zero))))

    def _add_loops(self, first: int, last: int) -> None:
        late, turned = self._loops[:2, first:last]
        # symbols of the segment ahead of the first that is pending
        before = self._seen - self._pending
        k = np.arange(before + first, before + last, dtype=np.float64)
        self.sums.clock.add(self._segment, k, late)
        if self._scheme.kind == "carrier":
            self.sums.carrier.add(self._segment, k, turned)
            self.sums.across += float(self._loops[2, first:last].sum())
        begin, end = before + first, before + last
        while self._units[0][0] <= begin:
            self._units.popleft()
        for stop, unit in self._units:
            n = min(stop, end) - begin
            self.sums.unit_sums[:2] += n * unit
            begin += n
            if begin == end:
                break
        self.sums.unit_sums[2] += last - first
        self.sums.steered += float(self._loops[3, first:last].sum())

    def _settle(self) -> None:
        """Sum all pending symbols that have their neighbours, window by window."""
        first = HALO
        while (ready := self._pending - HALO - first) > 0:
            symbols = self.sums.symbols
            count = min(ready, self._window - symbols, self._part - symbols % self._part, self._until_apart())
            self._sum(first, count)
            first += count
            if self._grown is not None and self.sums.symbols % self._part == 0:
                self._aside.wait()
                self._grown(self.sums)
            if self.sums.symbols == self._window:
                self._aside.wait()
                self._windows += 1
                self._finished(self.sums)
                self.sums = EyeSums(self._scheme, self._phases)
        keep = first - HALO
        if keep > 0:
            self._aside.wait()
            rest = self._pending - keep
            pending: tuple[NDArray[Any], ...] = (*self._waves, self._decided, self._classes, self._loops)
            for array in pending:
                array[:, :rest] = array[:, keep : self._pending].copy()
            self._pending = rest

    def _sum(self, first: int, count: int) -> None:
        sums, rails = self.sums, self._scheme.rails
        last = first + count
        self._add_loops(first, last)
        gram, cross = self._normal_equations(first, last)
        sums.gram += gram
        sums.cross += cross
        pieces = self._drawn_pieces(first, count)
        values = np.stack([wave[0, first:last] for wave in self._waves])
        self._aside.do(
            lambda: self._residual.push(
                sums.residual, gram, cross, lambda: self._regressors(first, last), values, self._classes[:rails], first
            )
        )
        for rail in range(1, rails):
            self._aside.do(partial(self._count_rail, sums, rail, pieces, slice(first, last)))
        self._count_rail(sums, 0, pieces, slice(first, last))
        self._keep_stretches(first, last)
        sums.drawn += int(pieces[:, 1].sum())
        sums.symbols += count
        self._count += count
        if self._until_apart() <= 0:
            self._aside.wait()
            sums.set_apart()

    def _count_rail(self, sums: EyeSums, rail: int, pieces: NDArray[np.int64], place: slice) -> None:
        """Count a rail's traces, crossings and levels."""
        wave, classes, levels, rows = self._waves[rail], self._classes[rail], self._scheme.levels, sums.rows
        left = sums.left[rail].reshape(COLUMNS, -1)
        right = left if sums.right is None else sums.right[rail].reshape(COLUMNS, -1)
        kernel.fill(
            wave, pieces, classes, levels, sums.pair, self._expand, rows.count, rows.scale, rows.zero, left, right
        )
        kernel.crossings(
            wave, pieces, classes, self._around, levels, 0.5,
            sums.crossing_bins[rail], sums.crossing_groups[rail], sums.crossing_edges[rail],
        )  # fmt: skip
        kernel.add_levels(wave[0, place], classes[place], sums.level_sums[rail])

    def _normal_equations(self, first: int, last: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """The pattern response's, of the pending symbols ``first .. last``; the wave's own energy goes into the sums."""
        rails = self._scheme.rails
        gram, cross = np.zeros_like(self.sums.gram), np.zeros_like(self.sums.cross)
        gram[-1, -1] = last - first
        for i in range(rails):
            one = slice(i * LAGS, (i + 1) * LAGS)
            kernel.add_lagged(self._decided[i], first, last, EARLIEST, gram[-1, one])
            gram[one, -1] = gram[-1, one]
            for j in range(i, rails):
                other = slice(j * LAGS, (j + 1) * LAGS)
                kernel.add_gram(
                    self._decided[i], self._decided[j], first, last, EARLIEST, LAGS, i == j, gram[one, other]
                )
                if i != j:
                    gram[other, one] = gram[one, other].T
            for j, wave in enumerate(self._waves):
                kernel.add_cross(wave, self._decided[i], first, last, EARLIEST, LAGS, cross[j, one])
            kernel.add_means(self._waves[i], first, last, cross[i, -1], self.sums.square[i])
        return gram, cross

    def _regressors(self, first: int, last: int) -> NDArray[np.float32]:
        """Decided levels at all lags and a constant, ``(k, n)``, of the pending symbols ``first .. last``."""
        rails = self._scheme.rails
        lagged = np.empty((rails * LAGS + 1, last - first), np.float32)
        for rail in range(rails):
            for i, lag in enumerate(range(EARLIEST, LATEST + 1)):
                lagged[rail * LAGS + i] = self._decided[rail, first - lag : last - lag]
        lagged[-1] = 1.0
        return lagged

    def _until_apart(self) -> int:
        """Symbols until the next stretch of the open window is kept apart.

        Ever longer ones at first, so that a short recording has its stretches and a long one does not pay for them.
        """
        if self._windows >= WINDOWS_APART:
            return self._window
        apart = sum(group.symbols for group in self.sums.groups)
        step = apart // 8 if self._windows == 0 else self._window // 6
        return apart + max(FEWEST_APART, step) - self.sums.symbols

    def _keep_stretches(self, first: int, last: int) -> None:
        """Keep some of the pending symbols ``first .. last`` with their neighbours."""
        for start in range(first, last, LONGEST):
            if self._stretches < EAGER or self._stretches % OFTEN == 0:
                place = slice(start - HALO, min(start + LONGEST, last) + HALO)
                waves = tuple(wave[:: self._phases // 2, place].copy() for wave in self._waves)
                self.sums.stretches.offer(Stretch(waves, self._decided[: self._scheme.rails, place].copy()))
            self._stretches += 1

    def _drawn_pieces(self, first: int, count: int) -> NDArray[np.int64]:
        """First symbol and length of what is drawn of the next ``count``: one of ``every`` runs of `RUN` symbols."""
        if self.every == 1:
            starts = np.arange(0, count, 2 * RUN)
            return np.stack((first + starts, np.minimum(2 * RUN, count - starts)), axis=1)
        runs = np.arange(self._count // RUN, (self._count + count - 1) // RUN + 1)
        runs = runs[runs % self.every == 0]
        starts = np.maximum(runs * RUN - self._count, 0)
        return np.stack((first + starts, np.minimum((runs + 1) * RUN - self._count, count) - starts), axis=1)
