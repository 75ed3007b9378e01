"""The whole way of a sample, for one link: front end, matched filter, loops, eye."""

import math
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from dsp._kernels import guard as kernel
from dsp.acquisition import Acquired, acquire
from dsp.block import Block, Samples
from dsp.eye import HALO, EyeMeter, EyeSums
from dsp.figures import Context
from dsp.frontend import FrontEnd, matched_filter, plan, wants_corners
from dsp.lane import AtOnce, Lane
from dsp.limiter import RATE
from dsp.link import Link, Scheme
from dsp.pulses import receive_filter
from dsp.steering import PART, Steering
from dsp.tracking import Detector, Rails, Track, Tracker, tables_for

FIRST_TRY, LAST_TRY = 512, 16384  # symbols an acquisition takes, doubling from one attempt to the next
LOOK_BACK = 1024  # symbols of the newest that are tried by themselves in between
HOLD_S, HOLD_SYMBOLS = 0.25, 2048  # how long a lock is held behind a gap while the clock is looked for
LONGEST_GAP_S = 2.0  # behind which a lock is still held
UNHURRIED_BD = 50_000.0  # up to this symbol rate every sample is searched
WAVE_PHASES, CORNER_PHASES = 8, 64  # points a symbol at which the wave is kept

# Mean lateness of the Gardner loop over BnT by roll-off, for one rail (two rails: half), middle sample half-way between
# strobes; measured by tools/bench.py
_GARDNER_LATENESS = ((0.2, 0.25, 0.35, 0.5, 0.75, 1.0), (3.4, 1.84, 0.69, 0.22, 0.03, 0.0))


@dataclass(frozen=True, slots=True)
class ChainOptions:
    """How to measure.

    ``detector`` None: the derivative detector, or the crossing detector where waves have corners. Bandwidths are BnT. ``window`` is
    the symbols of a reading (None: enough that every level's tail can be counted), ``part`` those of a part of it (None: all), ``every``
    draws one of so many traces into the raster. ``keep_total`` False: windows only, for streams without end.
    """

    detector: Detector | None = None
    timing_bandwidth: float = 0.005
    carrier_bandwidth: float = 0.005
    window: int | None = None
    part: int | None = None
    every: int = 1
    target_ber: float = 1e-6
    keep_total: bool = True


@dataclass(frozen=True, slots=True)
class LockEvent:
    """Lock gained or lost, at a sample of the stream, and why."""

    state: Literal["gained", "lost"]
    sample: int
    reason: str


class Chain:
    """Measures one link in a stream of blocks, however the stream is cut.

    Samples are worked on in chunks of fixed length, counted from the stream's start or last gap. The eye is summed in the ``lane``, part
    of that ``aside`` of it. ``on_window`` gets the sums of each full window and ``on_part`` those of the open one at each part of it,
    in the lane, ``on_event`` each gain or loss of lock as it happens, ``on_track`` the symbols that go into the sums; `total` holds all
    of the sums once `finish` returned.
    """

    def __init__(
        self,
        link: Link,
        *,
        complex_in: bool,
        centre_hz: float = 0.0,
        half_band_hz: float | None = None,
        options: ChainOptions | None = None,
        lane: Lane | None = None,
        aside: Lane | None = None,
        on_window: Callable[[EyeSums], None] | None = None,
        on_part: Callable[[EyeSums], None] | None = None,
        on_event: Callable[[LockEvent], None] | None = None,
        on_track: Callable[[Track], None] | None = None,
    ) -> None:
        self.link = link
        self.options = options or ChainOptions()
        self.window = self.options.window or 12_500 * link.scheme.levels * self.options.every
        rate = link.sample_rate_hz
        self._plan = plan(
            link,
            complex_in=complex_in,
            centre=centre_hz / rate,
            half_band=None if half_band_hz is None else half_band_hz / rate,
        )
        # as often as new symbols fill it, but no more than 25 times a second
        self._look_every = round(max(LOOK_BACK, 0.04 * link.symbol_rate_hz) * self._plan.rail_sps)
        self._every = self.options.every
        self._lane = lane or AtOnce()
        self._aside = aside or AtOnce()
        self._on_window = on_window
        self._on_part = on_part
        self._on_event = on_event
        self._on_track = on_track
        # 20 ms, so that a fast link is shown soon; longer for slow ones, where each call would cost more than its samples
        near = 2 ** min(max(round(math.log2(rate * 0.02)), min(math.floor(math.log2(rate * 0.1)), 12), 9), 15)
        # where nobody waits for a window, longer ones once the link is found: each call costs less of the whole
        far = max(near, 2 ** min(math.floor(math.log2(rate * 0.2)), 15)) if self.options.keep_total else near
        self._chunks = near, far
        self._chunk = near
        self._buffer = np.empty(far, np.complex64 if complex_in else np.float32)
        self._filled = 0
        self._position = 0  # stream index of the buffer's first sample
        self.events: list[LockEvent] = []
        self.samples = 0
        self.samples_lost = 0
        self.gaps = 0
        self.clipped = 0
        self.nonfinite = 0
        self.locked_samples = 0
        self.slips = 0
        self.acquired_at: int | None = None
        self.last_reason = "too few symbols"
        corners = wants_corners(link.scheme, link.pulse)
        self._phases = CORNER_PHASES if corners else WAVE_PHASES
        number = link.pulse.number or 1.0
        filtered = None if link.scheme.kind == "frequency" else receive_filter(link.pulse, RATE)
        self._filter = np.asarray(filtered.real, dtype=np.float64) if filtered is not None else None
        self._tables = tables_for(self._plan.sps, 0.5 * (1 + number) if link.pulse.family in ("rrc", "rc") else 1.0)
        self._meter: EyeMeter | None = None
        self._total: EyeSums | None = None
        self._sps = self._plan.sps
        self._carrier: float | None = None  # cycles a rail sample, of the first run
        self._held_from: int | None = None  # the gap over which a lock is held
        self._hold = round(max(HOLD_S * rate, HOLD_SYMBOLS * link.samples_per_symbol))
        self._slip = SlipCounter(256 if link.symbol_rate_hz < 100_000 else 2048)
        self._begin()

    # -- the stream ----------------------------------------------------------------------------------------------------

    def push(self, block: Block) -> None:
        """Take the next block. Behind a gap a new run of symbols begins; a lock is held over it if the link is found again at once."""
        if block.lost:
            self.gaps += 1
            self.samples_lost += block.lost
            self._break("samples lost", hold=block.lost <= LONGEST_GAP_S * self.link.sample_rate_hz)
            self._position = self._run_began = block.start
        elif not self.samples:
            self._position = self._run_began = block.start
        self.samples += block.samples.size
        self.clipped += block.clipped
        self.nonfinite += block.nonfinite
        at = 0
        while at < block.samples.size:
            n = min(self._chunk - self._filled, block.samples.size - at)
            self._buffer[self._filled : self._filled + n] = block.samples[at : at + n]
            self._filled += n
            at += n
            if self._filled == self._chunk:
                # a copy: a front end with nothing to do hands the samples on as they are, and acquisition keeps them
                self._work(self._buffer[: self._chunk].copy())

    def finish(self) -> None:
        """The stream has ended: use what is left."""
        self._break("end of stream")
        self._lane.wait()
        if self._meter is not None and self._meter.sums.symbols:
            self._merge(self._meter.sums)

    def restart_window(self) -> None:
        """Forget the open window's sums."""
        if self._meter is not None:
            self._meter.restart_window()

    def draw_every(self, n: int) -> None:
        """From now on draw one of ``n`` traces only, in runs; what is not drawn is measured all the same."""
        self._every = n
        if self._meter is not None:
            self._meter.every = n

    @property
    def total(self) -> EyeSums | None:
        """Sums of all symbols, after `finish`; None if there was never a lock."""
        return self._total

    @property
    def position(self) -> int:
        """Index in the stream of the next sample to be worked on."""
        return self._position

    @property
    def locked(self) -> bool:
        """Whether the loops run now, or are held over a gap."""
        return self._tracker is not None or self._held_from is not None

    def context(self) -> Context:
        """What `dsp.figures.Figures` needs to read this chain's sums."""
        scheme = self.link.scheme
        rate = self.link.sample_rate_hz
        base = None
        if scheme.kind == "frequency":
            base = self._plan.shift * rate
        elif scheme.kind == "carrier" and self._carrier is not None:
            base = (self._plan.shift + self._carrier / self._plan.decimate) * rate
        lateness = 0.0
        if self.options.detector == "gardner" and self.link.pulse.family in ("rrc", "rc"):
            rolloffs, values = _GARDNER_LATENESS
            lateness = float(np.interp(self.link.pulse.number or 1.0, rolloffs, values)) * self.options.timing_bandwidth
            lateness /= scheme.rails
        return Context(
            self.link.symbol_rate_hz,
            self._sps / self._plan.sps,
            self._meter.offset_ui if self._meter is not None else 0.0,
            lateness,
            base,
            scheme.kind == "frequency",
            self.options.target_ber,
            self._filter,
            self.options.carrier_bandwidth if scheme.kind == "carrier" else 0.0,
            self.link.pulse.number if self.link.pulse.family == "rrc" else None,
            self.options.timing_bandwidth,
        )

    # -- one chunk -----------------------------------------------------------------------------------------------------

    def _begin(self) -> None:
        """A new run: everything with memory starts afresh."""
        self._front = FrontEnd(self.link, self._plan)
        self._tracker: Tracker | None = None
        self._chunk = self._chunks[0]
        self._run_began = self._position
        self._search()

    def _search(self) -> None:
        self._kept: list[Rails] = []
        self._kept_samples = 0
        self._next_try = FIRST_TRY
        self._since_look = 0
        self._pause = 0

    def _work(self, samples: Samples) -> None:
        rails = self._front.push(samples)
        self._filled = 0
        self._position += samples.size
        if self._tracker is not None:
            self._track(rails)
        elif self._pause > 0:
            self._pause -= rails[0].size
        else:
            self._kept.append(rails)
            self._kept_samples += rails[0].size
            self._since_look += rails[0].size
            if self._kept_samples >= self._next_try * self._plan.rail_sps:
                self._try()
            elif self._since_look >= self._look_every:
                self._look_back()
        if self._tracker is None and self._held_from is not None and self._position - self._run_began > self._hold:
            self._let_go()
        self._chunk = self._chunks[self._tracker is not None]

    def _look_back(self) -> None:
        """Try the newest samples alone: a link that has just come stands behind a long stretch of none."""
        need = round(LOOK_BACK * self._plan.rail_sps)
        self._since_look = 0
        if self._kept_samples < 2 * need:
            return
        kept, self._kept, count = self._kept, [], 0
        for rails in reversed(kept):
            self._kept.insert(0, rails)
            count += rails[0].size
            if count >= need:
                break
        whole, self._kept_samples = self._kept_samples, count
        self._try(last=True)
        if self._tracker is None:
            self._kept, self._kept_samples = kept, whole

    def _try(self, *, last: bool = False) -> None:
        rails = tuple(np.concatenate(parts) for parts in zip(*self._kept, strict=True))
        self._since_look = 0
        found = acquire(
            self.link,
            self._plan,
            rails,
            detector=self.options.detector,
            timing_bandwidth=self.options.timing_bandwidth,
            carrier_bandwidth=self.options.carrier_bandwidth,
        )
        if isinstance(found, Acquired):
            self._lock(found, rails)
            return
        self.last_reason = found.reason
        if last:
            return
        if self._next_try >= LAST_TRY:
            self._search()
            # a fast link is looked for in part of its samples only, or the search could not keep up with the stream
            idle = max(self.link.symbol_rate_hz / UNHURRIED_BD - 1.0, 0.0)
            self._pause = round(idle * rails[0].size)
        else:
            self._kept = [rails]
            self._next_try *= 2

    def _lock(self, found: Acquired, rails: Rails) -> None:
        front, options, scheme = self._plan, self.options, self.link.scheme
        filters = matched_filter(self.link, front)
        self._run_from = self._position - self._kept_samples * front.decimate
        self._matched = filters
        first = self._sample_of(found.start.instant)
        if self._held_from is None:
            self._tell(LockEvent("gained", first, f"MER {found.mer_db:.1f} dB"))
        self._held_from = None
        if self.acquired_at is None:
            self.acquired_at = first
        self._locked_from = first
        if self._meter is None:
            self._sps = found.start.sps
            self._carrier = found.carrier
            self._meter = EyeMeter(
                scheme,
                self._tables,
                offset_ui=found.start.offset_ui,
                sps=self._sps,
                phases=self._phases,
                slab=min(max(round(self.link.symbol_rate_hz * 0.01), 64), 2048),
                window=self.window,
                every=self._every,
                finished=self._window_full,
                part=self.options.part,
                grown=self._on_part,
                aside=self._aside,
            )
        self._meter.offset_ui = found.start.offset_ui
        assert self._carrier is not None
        self._meter.extra_turn = (found.carrier - self._carrier) * front.rail_sps
        self._tracker = Tracker(
            scheme,
            found.start,
            self._tables,
            timing_bandwidth=options.timing_bandwidth,
            carrier_bandwidth=options.carrier_bandwidth,
        )
        self._steering = Steering(
            found.carrier,
            found.drift,
            rail_sps=front.rail_sps,
            interpolate=front.interpolate,
            delay=filters.delay,
            rotation=scheme.rotation,
        )
        self._guard = LockGuard(
            max(250, round(0.015 * self.link.symbol_rate_hz)),
            min(found.noise_like_db + 0.8, found.mer_db - 3.0),
            scheme,
        )
        self._waiting: deque[Track] = deque()
        self._slip.anchor()
        self._search()
        self._track(rails)

    def _track(self, rails: Rails) -> None:
        carrier = self.link.scheme.kind == "carrier"
        size = rails[0].size
        at = 0
        while at < size:
            # a carrier that drifts is followed in short steps
            step = round(PART * self._plan.rail_sps) if carrier and self._steering.active else size
            part = rails if step >= size else tuple(rail[at : at + step] for rail in rails)
            at += step
            if not self._track_part(part, rails, max(size - at, 0)):
                return

    def _track_part(self, rails: Rails, chunk: Rails, left: int) -> bool:
        """Follow the link through part of a chunk, behind which ``left`` rail samples are to come; False where lock ended."""
        assert self._tracker is not None
        carrier = self.link.scheme.kind == "carrier"
        upright = self._steering.push(rails) if carrier else rails
        track = self._tracker.push(self._matched.push(upright))
        if carrier:
            track = replace(track, steered=self._steering.follow(track))
        silence = self._guard.silent_from(track)
        if silence is not None:
            self._fall_silent(track, silence, chunk)
            return False
        self._waiting.append(track)
        if not self._guard.holds(track):
            self._lose("the levels are no longer told from noise", left)
            return False
        # what waits for its proof must not make a slow link's picture old
        self._release(min(self._guard.window, max(round(0.2 * self.link.symbol_rate_hz), 32)))
        return True

    def _release(self, held: int) -> None:
        """Hand on what has proved good: all but the last ``held`` symbols."""
        waiting = sum(track.values.shape[1] for track in self._waiting)
        while self._waiting and waiting - self._waiting[0].values.shape[1] >= held:
            track = self._waiting.popleft()
            waiting -= track.values.shape[1]
            self.slips += self._slip.push(track, self._sps)
            if self._on_track is not None:
                self._on_track(track)
            meter = self._meter
            assert meter is not None
            waves = meter.resample(track)
            self._lane.do(lambda meter=meter, track=track, waves=waves: meter.push(track, waves))  # type: ignore[misc]

    def _lose(self, reason: str, left: int) -> None:
        """Forget what came in since the lock may have gone, and look for the link again; ``left`` rail samples were not followed."""
        held = sum(track.values.shape[1] for track in self._waiting)
        behind = round(held * self.link.samples_per_symbol) + left * self._plan.decimate
        sample = max(self._position - behind, self._locked_from)
        self._end_run(sample, reason)

    def _fall_silent(self, track: Track, start: int, rails: Rails) -> None:
        """Keep what came before the silence, less what the receive filter had of it already; look for the link behind it."""
        end = start - HALO // 2
        if end > 0:
            self._waiting.append(track.head(end))
        elif self._waiting:
            before = self._waiting.pop()
            self._waiting.append(before.head(max(before.values.shape[1] + end, 0)))
        self._release(0)
        began = float(track.instants[max(start, 0)]) + min(start, 0) * self._sps
        sample = self._sample_of(track.base + began)
        self._end_run(sample, "silence")
        rest = min(round((self._position - sample) / self._plan.decimate), rails[0].size)
        self._kept, self._kept_samples = [tuple(rail[rail.size - rest :] for rail in rails)], rest

    def _sample_of(self, filtered: float) -> int:
        """Index in the stream of a filtered sample of this run, counted from the run's first."""
        front = self._plan
        raw = (filtered / front.interpolate - self._matched.delay) * front.decimate - self._front.delay
        return max(round(self._run_from + raw), 0)

    def _end_run(self, sample: int, reason: str) -> None:
        self.locked_samples += max(sample - self._locked_from, 0)
        self._tracker = None
        if reason != "end of stream":
            self.last_reason = reason
        self._end_segment(keep=self.options.keep_total)
        self._tell(LockEvent("lost", sample, reason))

    def _tell(self, event: LockEvent) -> None:
        self.events.append(event)
        if self._on_event is not None:
            self._on_event(event)

    def _break(self, reason: str, *, hold: bool = False) -> None:
        """End the run of samples: work on what is there, settle the sums, begin afresh; ``hold``: a lock may last over it."""
        if self._filled:
            self._work(self._buffer[: self._filled].copy())
        if self._tracker is None and self._kept_samples:
            self._try(last=True)
        if self._tracker is not None:
            self._release(0)
            if hold:
                self._held_from = self._position
                self.locked_samples += max(self._position - self._locked_from, 0)
                self._tracker = None
                self._end_segment(keep=True)
            else:
                self._end_run(self._position, reason)
        elif self._held_from is not None and not (
            hold and self._position - self._held_from <= LONGEST_GAP_S * self.link.sample_rate_hz
        ):
            self._let_go()
        self._begin()

    def _let_go(self) -> None:
        """The link was not found again behind a gap: lock was lost there."""
        assert self._held_from is not None
        sample, self._held_from = self._held_from, None
        self._end_segment(keep=self.options.keep_total)
        self._tell(LockEvent("lost", sample, "samples lost"))

    def _end_segment(self, *, keep: bool) -> None:
        meter = self._meter
        assert meter is not None
        self._lane.do(lambda: meter.end_segment(keep=keep))

    # -- sums ----------------------------------------------------------------------------------------------------------

    def _window_full(self, sums: EyeSums) -> None:
        if self._on_window is not None:
            self._on_window(sums)
        if self.options.keep_total:
            self._merge(sums)

    def _merge(self, sums: EyeSums) -> None:
        if self._total is None:
            self._total = EyeSums(self.link.scheme, self._phases)
        self._total.merge(sums)
        self._total.keep_apart(sums.apart())


class LockGuard:
    """Says how far decisions can be trusted: MER over the last ``window`` symbols against a floor in dB, carrier phase, and no silence.

    A constellation that turns beside its carrier loop agrees with its decisions better than noise does; but the power of its points that
    takes the data away is then 0 on the mean (`power_mean`), which is told from `UPRIGHT` times its mean without noise. Silence is
    `SILENT` symbols in a row whose mean square stays below a tenth of the innermost level's.
    """

    UPRIGHT = 0.15
    LOOKED_AT = 256  # symbols of each quarter of a window whose phase is looked at; more would cost more than they tell
    CERTAIN = 7.0  # standard deviations: so far above what is asked for an upright constellation stands over what is looked at

    SILENT = 24

    def __init__(self, window: int, floor_db: float, scheme: Scheme) -> None:
        self.window = window
        self._part = max(window // 4, 1)
        self._floor = 10 ** (floor_db / 10)
        self._parts: deque[tuple[float, float]] = deque(maxlen=4)
        self._signal = self._noise = self._upright = 0.0
        self._scheme = scheme
        self._step = max(self._part // self.LOOKED_AT, 1)
        self._least = 0.0
        self._energy = scheme.symbol_energy()
        self._phases: deque[float] = deque(maxlen=4)
        if scheme.symmetry:
            powers = power_mean(scheme.points(), scheme)
            self._least = self.UPRIGHT * float(np.mean(powers))
            # of dense constellations a window tells too little
            need = (self.CERTAIN * float(np.std(powers)) / ((1 - self.UPRIGHT) * float(np.mean(powers)))) ** 2
            self._phases = deque(maxlen=max(math.ceil(need * self._step / self._part), 4))
        self._count = 0
        inner = min(abs(level) for level in scheme.rail_levels)
        self._quiet = 0.1 * inner * inner * scheme.rails
        self._rails = scheme.rails
        self._powers = np.zeros(0)  # of the last symbols, fewer than SILENT

    def silent_from(self, track: Track) -> int | None:
        """Index in the track at which a silence began (negative: in the track before); None if there is none."""
        n = track.values.shape[1]
        powers = np.empty(self._powers.size + n)
        powers[: self._powers.size] = self._powers
        start = int(kernel.silence(track.values, self._rails, self._quiet, self.SILENT, powers))
        self._powers = powers[-self.SILENT + 1 :]
        return start if start < n and self._quiet else None

    def holds(self, track: Track) -> bool:
        """Take the next symbols; False as soon as a whole window falls below the floor."""
        at, size = 0, track.values.shape[1]
        while at < size:
            n = min(self._part - self._count, size - at)
            signal, noise = kernel.powers(track.values, track.decided, at, at + n)
            self._signal += signal
            self._noise += noise
            if self._least:
                first = at + -self._count % self._step
                power, looked_at = kernel.upright(
                    track.values, first, at + n, self._step, self._scheme.symmetry, self._energy
                )
                self._upright += power - self._least * looked_at
            self._count += n
            at += n
            if self._count == self._part:
                self._parts.append((self._signal, self._noise))
                self._phases.append(self._upright)
                self._signal = self._noise = self._upright = 0.0
                self._count = 0
                if len(self._parts) == 4:
                    total, rest = (sum(column) for column in zip(*self._parts, strict=True))
                    if not total > self._floor * rest:  # false for NaN too
                        return False
                    if len(self._phases) == self._phases.maxlen and not sum(self._phases) >= 0.0:
                        return False
        return True


def power_mean(z: NDArray[np.complexfloating], scheme: Scheme) -> NDArray[np.floating]:
    """The power of points ``(n,)`` in level units that takes the data away, as `dsp.acquisition.power_line` weighs it.

    1 where a constellation of phases stands upright, 0 on the mean where it turns.
    """
    size = np.abs(z)
    unit = z / np.maximum(size, np.float32(1e-12))
    power = unit * unit
    for _ in range(int(math.log2(scheme.symmetry)) - 1):
        power = power * power
    sign = 1.0 if scheme.symmetry == 2 else -1.0
    return np.asarray(sign * power.real * np.minimum(size * size / np.float32(scheme.symbol_energy()), 4.0))


class SlipCounter:
    """Counts jumps of whole symbols of the loop's instants against their own straight line."""

    _MEMORY = 16

    def __init__(self, block: int = 256) -> None:
        self._block = block
        self.anchor()

    def anchor(self) -> None:
        """Begin a new run of symbols."""
        self._means: deque[float] = deque(maxlen=self._MEMORY)
        self._sum = 0.0
        self._count = 0
        self._symbols = 0
        self._start: float | None = None

    def push(self, track: Track, sps: float) -> int:
        """Take the next symbols; returns the slips found, whatever their direction."""
        n = track.values.shape[1]
        if n == 0:
            return 0
        if self._start is None:
            self._start = track.base + float(track.instants[0])
        slips = 0
        at = 0
        while at < n:
            m = min(self._block - self._count, n - at)
            instants = kernel.total_of(track.instants, at, at + m) + m * (track.base - self._start)
            # less the numbers of the symbols
            self._sum += instants / sps - m * (self._symbols + 0.5 * (m - 1))
            self._symbols += m
            self._count += m
            at += m
            if self._count == self._block:
                slips += self._judge(self._sum / self._block)
                self._sum = 0.0
                self._count = 0
        return slips

    def _judge(self, mean: float) -> int:
        jump = 0
        n = len(self._means)
        if n >= 4:
            # the least-squares line through the past means, one step on: weights by position
            expected = sum((6.0 * i + 2.0 - 2.0 * n) * value for i, value in enumerate(self._means)) / (n * (n - 1))
            jump = round(mean - expected)
            if jump:
                self._means = deque((value + jump for value in self._means), maxlen=self._MEMORY)
        self._means.append(mean)
        return abs(jump)
