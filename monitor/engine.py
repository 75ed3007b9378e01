"""The deterministic heart of a watch: blocks in, journal lines and a live state out. No threads and no clock but the stream's."""

import math
from collections import deque
from collections.abc import Callable, Iterable, Mapping
from concurrent.futures import Executor, Future
from dataclasses import dataclass, field, replace
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from dsp.acquisition import NotFound
from dsp.block import Block
from dsp.chain import Chain, ChainOptions, LockEvent
from dsp.diagnosis import Diagnosis
from dsp.errors import DspError
from dsp.eye import EyeSums
from dsp.figures import Context, Figures, Whole, whole_figures
from dsp.identify import Identified, Wanted
from dsp.intervals import LEAST_STRETCHES, Estimate, difference
from dsp.picture import EyeImage
from dsp.reading import Reading
from monitor.alarm_rules import AlarmRule, built_in_alarms
from monitor.alarms import AlarmBoard, AlarmEvent
from monitor.document import reading_document
from monitor.errors import InputError
from monitor.history import Gaps, History, Locks
from monitor.session import settle_link
from monitor.snapshot import Snapshot
from monitor.state import AlarmLine, Change, LiveState, Mark, Verdict

BLOCKS = 8  # the sliding window is made of so many, whose openings' scatter gives the interval
_SLOW_KEYS = ("equaliser", "budget", "verdict", "ber_low", "ber_high")  # only in whole readings
PART_SECONDS = 0.025  # how much of the stream one step of the picture takes in
JUDGE_SECONDS = 0.2  # between two readings that alarms are judged by
WHOLE_SECONDS = 1.0  # between two readings of what takes long, where nobody asks for a line
COLLECT_SECONDS = 0.25  # so much later one is collected, at a fixed place of the stream; a late one when it is there
TICK_SECONDS = 0.2  # in which clipped samples are counted together
CLIPPED_PCT = 0.01  # more of a tick is clipping
LEAST_JUDGED = 1000  # symbols
LOOK_SECONDS = 1.0  # between two tries to identify a link
RELOOK_SECONDS = 5.0  # without lock, after which a link that was identified is identified anew
HEAD_SECONDS, HEAD_SAMPLES = 2.0, 1 << 20  # of the newest samples that are looked at
LONG_HEAD_SECONDS = 8.0  # at every other look: a slow link needs them

_NO_WHOLE = Whole(Reading(symbols=0), None, None)

Line = Callable[[str, int, float, Mapping[str, Any]], None]


class Tap(Protocol):
    """Who sees the samples beside the chain, before it does; called in the engine's thread."""

    def describe(self, sample_rate_hz: float, *, complex_in: bool, centre_hz: float | None) -> None:
        """What the samples are from here on."""

    def block(self, block: Block) -> None:
        """The next samples; ``start`` counts as the journal does."""


@dataclass(frozen=True, slots=True)
class EngineOptions:
    """How to watch: ``window`` symbols of a reading (None: two seconds of them), a journal line each ``every_s``.

    ``history`` keeps the opening's course where nobody looks. ``aside`` is where a link is identified and what takes long is read while
    a live stream goes on; None: at once, so that a replay repeats itself. ``first`` is a link that was identified before the stream began.
    """

    window: int | None = None
    every_s: float = 1.0
    stall_s: float = 2.0
    rules: tuple[AlarmRule, ...] = ()
    chain: ChainOptions = field(default_factory=ChainOptions)
    display: bool = True
    history: bool = False
    aside: Executor | None = None
    first: Identified | None = None

    @property
    def judges(self) -> bool:
        """Whether somebody wants readings between two lines."""
        return self.display or self.history or bool(self.rules)


@dataclass(frozen=True, slots=True)
class _Folded:
    """How far a block's traces are in the picture."""

    of: EyeSums
    density: NDArray[np.uint32]
    drawn: int
    symbols: int


class _Asked:
    """A whole reading that was asked for: made beside the stream while it goes on, or where it can wait when it is collected."""

    def __init__(self, sums: EyeSums, context: Context, seconds: float, sample: int, options: EngineOptions) -> None:
        self.sample = sample
        self.short: Reading | None = None  # of the same sums, where it has a line
        self.collected_at = seconds + COLLECT_SECONDS
        self.coverage_pct = 100.0 * sums.drawn / max(sums.symbols, 1)
        self._what = sums, context, options.display
        self._work = options.aside.submit(whole_figures, *self._what) if options.aside is not None else None

    def ready(self) -> bool:
        """Whether it is there, or can be made."""
        return self._work is None or self._work.done()

    def whole(self) -> Whole:
        """It, made."""
        return self._work.result() if self._work is not None else whole_figures(*self._what)


class Engine:
    """Watches one link in one stream.

    `feed` takes blocks, `idle` says that none came for a while. ``line`` receives every journal line: kind, sample, seconds, fields.
    The same samples give the same lines, live or replayed, however they are cut into blocks (but for the place of clipped samples, which
    a block only counts).

    Attributes
    ----------
    samples, samples_lost
        Totals of the stream.
    relief
        How far work is left out for want of time: 0 none; each step halves the traces drawn, the readings between two lines, and how
        often what takes long is looked at.
    source_text
        Where the samples come from, for views.
    """

    def __init__(
        self,
        wanted: Wanted,
        *,
        sample_rate_hz: float,
        complex_in: bool,
        options: EngineOptions,
        line: Line,
        source_text: str = "",
        alarms: AlarmBoard | None = None,
        stalled: bool = False,
        tap: Tap | None = None,
    ) -> None:
        self._wanted = wanted
        self._complex = complex_in
        self.sample_rate_hz = sample_rate_hz
        self._options = options
        self._line = line
        self.source_text = source_text
        self.alarms = alarms or AlarmBoard(options.rules, built_in_alarms(options.stall_s))
        self._tap = tap
        self._chain: Chain | None = None
        self._identified: Identified | None = None
        self._head: list[Block] = []
        self._head_samples = 0
        self._next_look = 0
        self._looks = 0  # in vain, since there was a link
        self._found_none = ""  # why the last look was in vain
        self._looking: Future[Identified | NotFound] | None = None
        self._searching = "waiting for samples"
        self._position = 0
        self.samples = 0
        self.samples_lost = 0
        self._lost_before = 0
        self._tick_samples = self._tick_clipped = self._tick_lost = 0
        self._unusable = ""
        self._began_anew = False
        self.relief = 0
        self._ending: str | None = None
        self._to_the_end = False  # locked until the stream ended
        self._gaps = Gaps()
        self._locks = Locks()
        self._marks: deque[Mark] = deque(maxlen=64)
        self._mark_opening: Estimate | None = None
        self._notices: deque[str] = deque(maxlen=4)
        self._history = History()
        self._best: Reading | None = None
        self._best_at = 0.0
        self.persistence_s: float | None = 2.0
        self._stalled = stalled
        self._last_lock_loss: float | None = None
        self._reset_measures()

    def _reset_measures(self) -> None:
        self._blocks: deque[EyeSums] = deque(maxlen=BLOCKS)
        self._block: EyeSums | None = None
        self._mixed = False  # whether the open block holds symbols from before a mark
        self._reading: Reading | None = None
        self._before = _NO_WHOLE
        self._asked: _Asked | None = None
        self._diagnosis: Diagnosis | None = None
        self._coverage_pct: float | None = None
        self._opening: Estimate | None = None
        self._curve: NDArray[np.float64] | None = None
        self._base_image: EyeImage | None = None
        self._density: NDArray[np.float32] | None = None  # of one interval
        self._folded: _Folded | None = None
        self._traces = 0.0
        self._offered = self._taken = False  # whether the picture as it is now was handed out, and seen
        self._next_judge = 0.0
        self._next_line = 0.0
        self._next_whole = 0.0

    # -- the stream ----------------------------------------------------------------------------------------------------

    @property
    def seconds(self) -> float:
        """Length of the stream so far, lost samples included."""
        return self._position / self.sample_rate_hz

    @property
    def drawn(self) -> bool:
        """Whether the picture has grown since it was handed out last."""
        return self._density is not None and not self._offered

    @property
    def identified(self) -> Identified | None:
        """The link that is watched, and which of its parts were found; None before there is one."""
        return self._identified

    @property
    def position(self) -> int:
        """Index in the stream of the next sample to come, lost samples counted."""
        return self._position

    def feed(self, block: Block) -> None:
        """Take the next block. Raises InputError where link and samples do not fit."""
        if self._stalled:
            self._stalled = False
            self._tell_alarms(self.alarms.condition("no samples", False, self.seconds, self.position, None))
        if block.lost:
            self.samples_lost += block.lost
            self._position += block.lost
            self._tick_lost += block.lost
            self._gaps.add(self.seconds)
            self._emit("gap", samples_lost=block.lost, why="samples lost")
            self._tell_alarms(self.alarms.condition("samples lost", True, self.seconds, self.position, block.lost))
            self._lost_before += block.lost
        size = block.samples.size
        at = clipped = 0
        while at < size:
            n = min(self._until_tick(), self._until_look(), size - at)
            so_far = block.clipped * (at + n) // size
            # the engine's own count is the journal's: it goes on when a sender starts from 0 again
            self._take(
                Block(
                    block.samples[at : at + n],
                    self._position,
                    self._lost_before,
                    so_far - clipped,
                    0 if at else block.nonfinite,
                )
            )
            self._lost_before = 0
            at += n
            clipped = so_far

    def _until_tick(self) -> int:
        step = max(round(TICK_SECONDS * self.sample_rate_hz), 1)
        return step - self._position % step

    def _take(self, piece: Block) -> None:
        """Samples of one tick, or a part of them."""
        if self._tap is not None:
            self._tap.block(piece)
        at_tick = piece.samples.size == self._until_tick()
        self._position += piece.samples.size
        self.samples += piece.samples.size
        self._tick_samples += piece.samples.size
        self._tick_clipped += piece.clipped
        try:
            if self._unusable:
                pass
            elif self._chain is None:
                self._look(piece)
            else:
                self._push(piece)
        except DspError as error:
            self._cannot(str(error))
        if at_tick:
            self._tick()

    def _tick(self) -> None:
        """Judge what blocks only count, at fixed places of the stream."""
        seconds, at = self.seconds, self.position
        if self._reading is None:
            # what cannot be known counts towards no alarm's delay
            self._tell_alarms(self.alarms.update(None, seconds, at))
        share = 100.0 * self._tick_clipped / max(self._tick_samples, 1)
        self._tell_alarms(self.alarms.condition("clipping", share > CLIPPED_PCT, seconds, at, share))
        if not self._tick_lost:
            self._tell_alarms(self.alarms.condition("samples lost", False, seconds, at, 0))
        self._tick_samples = self._tick_clipped = self._tick_lost = 0
        lost = self._last_lock_loss
        if self._chain is not None and self._identified is not None and self._identified.found:
            if lost is None or seconds - lost <= RELOOK_SECONDS:
                return
            # what was found by itself may have changed: look at it anew
            self._chain.finish()
            self._chain, self._last_lock_loss = None, None
            self._searching = "looking anew for the link"
            self._next_look = 0
            self._reset_measures()

    def _cannot(self, reason: str) -> None:
        """Link and samples do not fit: the user's mistake at the start, something to wait for once it has worked."""
        if not self._began_anew:
            raise InputError(reason)
        self._chain, self._looking = None, None
        self._head, self._head_samples = [], 0
        self._unusable = self._searching = reason
        self._reset_measures()
        self.notice(reason)
        self._emit("gap", samples_lost=0, why=reason)

    def idle(self, for_s: float) -> None:
        """No samples have come for ``for_s`` seconds of the wall clock."""
        self._tell_alarms(self.alarms.advance(self.seconds + for_s, self.position))
        if for_s >= self._options.stall_s and not self._stalled:
            self._stalled = True
            self.notice(f"no samples for {for_s:.0f} s")
            self._tell_alarms(self.alarms.condition("no samples", True, self.seconds + for_s, self.position, for_s))

    def finish(self) -> None:
        """The stream has ended. Raises InputError as `feed` does."""
        self._ending = "end of stream"
        try:
            if self._chain is None and self._looking is not None:
                found, self._looking = self._looking.result(), None
                self._settle(found, last=True)
            if self._chain is None and self._head_samples:
                self._try_head(last=True)
            if self._chain is not None:
                self._chain.finish()
        except DspError as error:
            self._cannot(str(error))

    def changed(self, *, sample_rate_hz: float | None = None, complex_in: bool | None = None, why: str) -> None:
        """The sender restarted or changed what it sends: begin anew with the link as given."""
        if self._chain is not None:
            self._ending = why
            self._chain.finish()
            self._ending = None
        if sample_rate_hz is not None and sample_rate_hz != self.sample_rate_hz:
            # seconds go on from where they were
            self._position = round(self.seconds * sample_rate_hz)
            self.sample_rate_hz = sample_rate_hz
        if complex_in is not None:
            self._complex = complex_in
        self._chain = None
        self._looking = None
        self._head, self._head_samples = [], 0
        self._next_look = self._looks = 0
        self._found_none = ""
        self._last_lock_loss = None
        self._unusable, self._began_anew = "", True
        self._tick_samples = self._tick_clipped = self._tick_lost = 0
        self._reset_measures()
        self.notice(why)
        self._emit("gap", samples_lost=0, why=why)

    # -- finding the link ----------------------------------------------------------------------------------------------

    def _given(self) -> bool:
        wanted = self._wanted
        return wanted.scheme is not None and wanted.symbol_rate_hz is not None and wanted.pulse is not None

    def _look_at(self) -> int:
        """So many samples of the head are looked at next."""
        rate = self._wanted.symbol_rate_hz
        need = min(HEAD_SECONDS * self.sample_rate_hz, HEAD_SAMPLES)
        if self._given():
            # only the place of the band is to be found, if that
            need = min(need, 0.1 * self.sample_rate_hz)
        elif rate is not None:
            need = min(need, 4000 * self.sample_rate_hz / rate)
        return max(math.ceil(need), self._next_look)

    def _until_look(self) -> int:
        if self._chain is not None or self._unusable or self._looking is not None:
            return HEAD_SAMPLES
        return max(self._look_at() - self._head_samples, 1)

    def _look(self, block: Block) -> None:
        self._head.append(block)
        self._head_samples += block.samples.size
        if self._options.first is not None and self._identified is None:
            self._settle(self._options.first, last=False)
        elif self._looking is not None:
            self._keep_head(LONG_HEAD_SECONDS)
            if self._looking.done():
                found, self._looking = self._looking.result(), None
                if isinstance(found, Identified):
                    self._keep_head(0.25)  # what came while it was looked for is old
                self._settle(found, last=False)
        elif self._head_samples >= self._look_at():
            # a link that is given whole is placed at once, so that live and replayed it begins at the same sample
            if self._options.aside is not None and not self._given():
                head = self._newest_head()
                self._tell_search(sum(block.samples.size for block in head) / self.sample_rate_hz)
                self._looking = self._options.aside.submit(settle_link, head, self.sample_rate_hz, self._wanted)
            else:
                self._try_head()

    def _keep_head(self, seconds: float) -> None:
        keep = int(min(seconds * self.sample_rate_hz, HEAD_SAMPLES))
        surplus = self._head_samples - keep
        while self._head and surplus > 0:
            first = self._head.pop(0)
            if first.samples.size > surplus:
                # a copy, so that not all of a long block is kept for its end
                self._head.insert(0, Block(first.samples[surplus:].copy(), first.start + surplus))
            dropped = min(surplus, first.samples.size)
            self._head_samples -= dropped
            surplus -= dropped

    def _try_head(self, *, last: bool = False) -> None:
        self._settle(settle_link(self._newest_head(), self.sample_rate_hz, self._wanted), last=last)

    def _newest_head(self) -> list[Block]:
        """What is looked at: the newest seconds, where a link that has just come fills them, and in turn all that is kept."""
        if self._looks % 2 == 1:
            return list(self._head)
        need = HEAD_SECONDS * self.sample_rate_hz
        newest: list[Block] = []
        for block in reversed(self._head):
            if need <= 0:
                break
            newest.insert(0, block)
            need -= block.samples.size
        return newest

    def _tell_search(self, seconds: float) -> None:
        """Say what is tried now."""
        wanted = self._wanted
        parts = (("symbol rate", wanted.symbol_rate_hz), ("scheme", wanted.scheme), ("pulse", wanted.pulse))
        *others, last = (name for name, given in parts if given is None)
        missing = f"{', '.join(others)} and {last}" if others else last
        before = f"; before: {self._found_none}" if self._found_none else ""
        self._searching = f"looking for {missing} in the last {seconds:.1f} s{before}"

    def _settle(self, found: Identified | NotFound, *, last: bool) -> None:
        if isinstance(found, NotFound):
            self._searching = self._found_none = found.reason
            self._looks += 1
            if last:
                return
            # keep what the next look needs, and look again when something new has come
            self._keep_head(LONG_HEAD_SECONDS)
            self._next_look = self._head_samples + int(LOOK_SECONDS * self.sample_rate_hz)
            return
        self._identified, self._looks, self._found_none = found, 0, ""
        link = found.link
        wanted = self._options.window or int(min(max(2.0 * link.symbol_rate_hz, 2000), 200_000))
        least = max(wanted // BLOCKS, 64)
        # no shorter than what the chain works on at once
        part_s = min(max(PART_SECONDS, 4096 / self.sample_rate_hz), 0.1)
        part = max(min(round(part_s * link.symbol_rate_hz), least), 32)
        # whole parts to a block
        parts = max(round(least / part), 1)
        part = max(least // parts, 32)
        self._block_symbols = window = part * parts
        self._chain = Chain(
            link,
            complex_in=self._complex,
            centre_hz=found.centre_hz,
            half_band_hz=found.half_band_hz,
            options=replace(self._options.chain, window=window, part=part, keep_total=False),
            on_part=self._part,
            on_event=self._lock_event,
        )
        self.relieve(self.relief)
        self._searching = f"{link.scheme.name} at {link.symbol_rate_hz:.6g} Bd"
        head, self._head, self._head_samples = self._head, [], 0
        for block in head:
            self._push(block)

    def _push(self, block: Block) -> None:
        assert self._chain is not None
        self._chain.push(block)

    def _lock_event(self, event: LockEvent) -> None:
        gained = event.state == "gained"
        if not gained:
            self._collect_now(wait=self._ending is not None)
        at = event.sample / self.sample_rate_hz
        self._locks.add(at, gained)
        self._last_lock_loss = None if gained else at
        why = event.reason if self._ending is None else self._ending
        self._emit("lock", sample=event.sample, state=event.state, why=event.reason if gained else why)
        if gained or self._ending != "end of stream":
            self._tell_alarms(self.alarms.condition("lock lost", not gained, at, event.sample, None))
        if not gained:
            self._tell_alarms(self.alarms.update(None, at, event.sample))
        if not gained and self._ending == "end of stream":
            self._to_the_end = True  # the last figures stay
        elif not gained:
            self._reading, self._opening, self._diagnosis = None, None, None
            self._before = _NO_WHOLE
            self._blocks.clear()
            self._block = None

    # -- measuring -----------------------------------------------------------------------------------------------------

    def _part(self, sums: EyeSums) -> None:
        assert self._chain is not None
        seconds = self._chain.position / self.sample_rate_hz
        if self._options.display:
            self._draw(sums)
        self._block = sums
        if self._block.symbols >= self._block_symbols:
            if not self._mixed:
                self._blocks.append(self._block)
            self._block, self._mixed = None, False
        measured = sum(block.symbols for block in self._blocks) + (self._block.symbols if self._block else 0)
        if self._asked is not None and seconds >= self._asked.collected_at and self._asked.ready():
            self._collect()
        due = min(self._next_judge, self._next_line) if self._options.judges else self._next_line
        if seconds >= due and measured >= min(LEAST_JUDGED, self._block_symbols):
            # at fixed places of the stream, so that who watches makes no difference to the lines
            step = JUDGE_SECONDS * 2**self.relief
            self._next_judge = (seconds // step + 1) * step
            self._judge(seconds)

    def _merged(self) -> EyeSums:
        assert self._chain is not None
        total: EyeSums | None = None
        for sums in (*self._blocks, *((self._block,) if self._block is not None else ())):
            if total is None:
                total = EyeSums(sums.scheme, sums.phases)
            total.merge(sums)
            total.keep_apart([sums.small()])
        assert total is not None
        return total

    def _judge(self, seconds: float) -> None:
        assert self._chain is not None
        merged = self._merged()
        self._coverage_pct = 100.0 * merged.drawn / max(merged.symbols, 1)
        told = seconds >= self._next_line
        # what takes long is read for a line, at fixed places of the stream, and once there is enough for it
        due = seconds >= self._next_whole or (told and not self.relief)
        due = due or (self._opening is None and len(self._blocks) >= LEAST_STRETCHES)
        asks = due and (self._asked is None or self._asked.ready())
        if asks:
            self._collect()
            step = WHOLE_SECONDS * 2 ** min(self.relief, 1)  # a verdict must not stand beside figures of another time
            self._next_whole = (seconds // step + 1) * step
            self._asked = _Asked(merged, self._chain.context(), seconds, self._chain.position, self._options)
        # meanwhile it stands as it was
        figures = Figures(merged, self._chain.context(), after=self._before)
        reading = self._with_slow(figures.reading(whole=False), self._reading)
        if self._options.display:
            self._base_image = figures.image()
        self._reading = reading
        self._history.add(seconds, reading.opening_pct)
        if reading.opening_pct is not None and (
            self._best is None or reading.opening_pct > (self._best.opening_pct or -math.inf)
        ):
            self._best, self._best_at = reading, seconds
        self._tell_alarms(self.alarms.update(reading_document(reading) or {}, seconds, self._chain.position))
        if told:
            self._next_line = (seconds // self._options.every_s + 1) * self._options.every_s
            if asks and self._asked is not None:
                self._asked.short = reading
            else:
                if self._asked is not None:
                    self._tell_short(self._asked)
                self._tell_reading(reading, self._chain.position, self._coverage_pct)

    def _collect(self) -> None:
        """Take in the whole reading that was asked for, and write its line."""
        asked, self._asked = self._asked, None
        if asked is None:
            return
        whole = asked.whole()
        self._before = whole if whole.opening is not None else self._before
        self._opening = whole.opening
        if self._reading is not None:
            self._reading = self._with_slow(self._reading, whole.reading)
        self._diagnosis = whole.diagnosis
        if asked.short is not None:
            self._tell_reading(whole.reading, asked.sample, asked.coverage_pct)

    def _collect_now(self, *, wait: bool = False) -> None:
        """What comes is another stretch: take in the whole reading of this one if it is there, else its line goes without."""
        if self._asked is not None and not wait and not self._asked.ready():
            self._tell_short(self._asked)
            self._asked = None
        self._collect()

    def _tell_short(self, asked: _Asked) -> None:
        """Its line without what takes long, which is too late for it."""
        if asked.short is not None:
            self._tell_reading(asked.short, asked.sample, asked.coverage_pct)
            asked.short = None

    def _with_slow(self, reading: Reading, slow: Reading | None) -> Reading:
        """With what only a whole reading has, and its interval about the opening as it is now."""
        if slow is not None:
            reading = replace(reading, **{key: getattr(slow, key) for key in _SLOW_KEYS})
        if reading.opening_pct is None or self._opening is None:
            return reading
        self._opening = self._opening.about(reading.opening_pct)
        low, high = self._opening.interval()
        return replace(reading, opening_low_pct=low, opening_high_pct=high)

    def _tell_reading(self, reading: Reading, sample: int, coverage_pct: float) -> None:
        self._emit("reading", sample=sample, **(reading_document(reading) or {}), coverage_pct=coverage_pct)

    def _draw(self, sums: EyeSums) -> None:
        """Fold what has come to a block into the picture; what is older fades by the persistence."""
        before, self._folded = self._folded, _Folded(sums, sums.density(), sums.drawn, sums.symbols)
        density, drawn, symbols = self._folded.density.astype(np.float32), sums.drawn, sums.symbols
        if before is not None and before.of is sums:
            density -= before.density
            drawn, symbols = drawn - before.drawn, symbols - before.symbols
        if not drawn and self.persistence_s == 0:
            return  # the newest traces are those before
        old = self.persistence_s == 0 and self._taken
        self._offered = self._taken = False
        if old or self._density is None or self._density.shape != density.shape:
            self._density, self._traces = density, float(drawn)
            return
        if self.persistence_s:
            assert self._chain is not None
            age = symbols / self._chain.link.symbol_rate_hz
            fade = math.exp(-age / self.persistence_s)
            self._density *= np.float32(fade)
            self._traces *= fade
        self._density += density
        self._traces += drawn

    # -- the user ------------------------------------------------------------------------------------------------------

    def mark(self, name: str = "") -> None:
        """Note the present reading; changes are told against it from now on."""
        self._collect_now()
        reading = self._reading
        self._marks.append(
            Mark(
                self.seconds,
                name,
                reading.opening_pct if reading else None,
                reading.opening_low_pct if reading else None,
                reading.opening_high_pct if reading else None,
            )
        )
        if self._opening is not None or reading is None:
            self._mark_opening = self._opening
        self._opening = None  # a change is told of what comes from now on
        # what follows is measured on its own, not mixed with what was before the mark: some symbols from then are still to come
        self._restart_window()
        self._mixed = self._chain is not None and self._chain.locked
        self._emit("mark", name=name, opening_pct=reading.opening_pct if reading else None)

    def name_mark(self, name: str) -> None:
        """Give the last mark a name."""
        if self._marks:
            self._marks[-1] = replace(self._marks[-1], name=name)
            self._emit("mark", name=name, opening_pct=self._marks[-1].opening_pct)

    def seen(self) -> None:
        """The newest state has been looked at: where traces do not stay, those that come now replace its own."""
        self._taken = self._offered

    def clear(self) -> None:
        """Empty the picture and the window."""
        self._density = None
        self._restart_window()

    def _restart_window(self) -> None:
        self._blocks.clear()
        self._block = None
        if self._chain is not None:
            self._chain.restart_window()

    def acknowledge(self) -> None:
        """Acknowledge every alarm."""
        self._tell_alarms(self.alarms.acknowledge(None, self.seconds, self.position))

    def shelve(self, seconds: float) -> None:
        """Shelve the foremost alarm for a time."""
        self._tell_alarms(self.alarms.shelve(None, seconds, self.seconds, self.position))

    def notice(self, text: str) -> None:
        """Something the user should see; the newest few stay on the view."""
        self._notices.append(f"{_clock(self.seconds)} {text}")

    def relieve(self, relief: int) -> None:
        """Leave out more work or less; see ``relief``."""
        self.relief = relief
        if self._chain is not None:
            self._chain.draw_every(self._options.chain.every << relief)

    # -- what is shown -------------------------------------------------------------------------------------------------

    def state(self, *, notices: Iterable[str] = (), journal_text: str = "", ended: bool = False) -> LiveState:
        """Everything a view shows, as it is now."""
        chain = self._chain
        locked = self._to_the_end or (chain is not None and chain.locked)
        if chain is not None and not locked:
            self._searching = f"{chain.link.scheme.name}: {chain.last_reason}"
        link_text = ""
        if chain is not None:
            link = chain.link
            name = f"{link.name}: " if link.name else ""
            link_text = f"{name}{link.scheme.name} at {link.symbol_rate_hz:.6g} Bd, pulse {link.pulse}"
        snapshot = Snapshot(
            image=self._image() if locked else None,
            reading=self._reading if locked else None,
            diagnosis=self._diagnosis if locked else None,
            source_text=self.source_text,
            link_text=link_text,
            lock_text="locked" if locked else f"no lock: {self._searching}",
            notes=(),
            seconds=self.seconds,
            coverage_pct=self._coverage_pct,
        )
        position = chain.position if chain is not None else 0
        return LiveState(
            snapshot=snapshot,
            seconds=self.seconds,
            locked=locked,
            searching="" if locked else self._searching,
            history=self._history.points(),
            marks=tuple(self._marks),
            gaps_s=self._gaps.all(),
            locks=self._locks.all(),
            alarms=tuple(
                AlarmLine(a.name, a.severity, a.state, a.since_s, a.text) for a in self.alarms.snapshot() if a.shown
            ),
            change=self._change(),
            best=self._best,
            best_at_s=self._best_at if self._best is not None else None,
            samples_lost=self.samples_lost,
            behind_s=max((self.position - position) / self.sample_rate_hz, 0.0) if chain is not None else 0.0,
            notices=(*self._notices, *notices),
            journal_text=journal_text,
            ended=ended,
            rails=("I", "Q") if chain is not None and chain.link.scheme.rails == 2 else ("",),
        )

    def _image(self) -> EyeImage | None:
        self._offered = True
        base = self._base_image
        if base is None or self._density is None or 2 * self._density.shape[1] != base.density.shape[1]:
            return base
        # a level's traces are counted whole or, faded, in tenths: the painter wants integers
        interval = np.rint(self._density * 4.0).astype(np.uint32)
        return replace(base, density=np.concatenate([interval, interval], axis=1), traces=round(self._traces))

    def _change(self) -> Change | None:
        before, now = self._mark_opening, self._opening
        if before is None or now is None or not self._marks:
            return None
        change = difference(now, before)
        low, high = change.interval()
        verdict: Verdict = "better" if low > 0 else "worse" if high < 0 else "no significant change"
        return Change(change.value, low, high, verdict)

    # -- lines ---------------------------------------------------------------------------------------------------------

    def _emit(self, kind: str, *, sample: int | None = None, **fields: object) -> None:
        at = self.position if sample is None else sample
        self._line(kind, at, at / self.sample_rate_hz, fields)

    def _tell_alarms(self, events: Iterable[AlarmEvent]) -> None:
        for event in events:
            self._line("alarm", event.sample, event.seconds, event.fields())


def _clock(seconds: float) -> str:
    minutes, rest = divmod(int(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02d}:{rest:02d}" if hours else f"{minutes}:{rest:02d}"
