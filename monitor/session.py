"""One run over one source: find the link, run the chain, gather what came out."""

import math
import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from itertools import pairwise
from typing import Any

import numpy as np

from dsp.acquisition import NotFound
from dsp.block import Block, Samples
from dsp.chain import Chain, ChainOptions, LockEvent
from dsp.diagnosis import Diagnosis
from dsp.errors import DspError
from dsp.eye import EyeSums
from dsp.figures import Context, Figures, window_opening
from dsp.identify import Band, Identified, Wanted, band_about, identify, occupied_band, placement
from dsp.link import SCHEMES, Link
from dsp.picture import EyeImage
from dsp.pulses import Pulse
from dsp.reading import Reading
from monitor.errors import InputError
from monitor.lane import ThreadLane
from monitor.sources import Source

_HEAD_SYMBOLS = 20_000  # what identification looks at, if the symbol rate is known
_HEAD_SECONDS = 4.0
_HEAD_SAMPLES = 1 << 20
BESIDE_FROM_BD = 50_000.0  # symbol rate from which the eye is summed in threads of its own


@dataclass(frozen=True, slots=True)
class Windows:
    """The run window by window: how many full ones, of how many symbols, and the one with the least opening."""

    count: int = 0
    symbols_each: int = 0
    worst: Reading | None = None


@dataclass
class Outcome:
    """All that one run has to tell.

    Attributes
    ----------
    source
        Where the samples came from; may be closed.
    link
        What the link is; None if there is none that could be told.
    identified
        Keys of the link's parts that were found rather than given.
    reading, image
        Figures and eye of all symbols; None if there was never a lock.
    intervals, remarks
        95 % intervals by the reading's keys; sentences on second causes.
    diagnose
        Makes what stands behind the figures; None if there was never a lock.
    windows
        The run window by window.
    events
        Each gain and loss of lock.
    reason
        Why nothing was measured; empty if something was.
    samples, samples_lost, gaps, clipped, nonfinite
        Of the stream.
    slips, locked_samples, acquired_at
        Of the timing loop; ``acquired_at`` counts samples from the first one delivered.
    coverage_pct
        Share of the symbols whose trace is in the eye.
    elapsed_s
        How long the run took.
    interrupted
        The user ended it before the stream did.
    alarms
        Those that there were, as the document lists them.
    """

    source: Source
    link: Link | None = None
    identified: tuple[str, ...] = ()
    reading: Reading | None = None
    image: EyeImage | None = None
    intervals: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    remarks: tuple[str, ...] = ()
    diagnose: Callable[[], Diagnosis] | None = None
    windows: Windows = field(default_factory=Windows)
    events: list[LockEvent] = field(default_factory=list)
    reason: str = ""
    samples: int = 0
    samples_lost: int = 0
    gaps: int = 0
    clipped: int = 0
    nonfinite: int = 0
    slips: int = 0
    locked_samples: int = 0
    acquired_at: int | None = None
    coverage_pct: float | None = None
    elapsed_s: float = 0.0
    interrupted: bool = False
    alarms: list[dict[str, Any]] = field(default_factory=list)

    @cached_property
    def diagnosis(self) -> Diagnosis | None:
        """What stands behind the figures, made when first asked for; None if there was never a lock."""
        return None if self.diagnose is None else self.diagnose()

    @property
    def seconds(self) -> float:
        """Length of the stream."""
        return (self.samples + self.samples_lost) / self.source.info.sample_rate_hz

    @property
    def measured(self) -> bool:
        """Whether there is an eye with an opening."""
        return self.reading is not None and self.reading.opening_pct is not None

    @property
    def locked_pct(self) -> float:
        """Share of the samples during which the loops held the link."""
        return 100.0 * self.locked_samples / self.samples if self.samples else 0.0

    @property
    def source_notes(self) -> tuple[str, ...]:
        """Defects of the source, seen at opening and while reading, a line each."""
        return (*self.source.info.notes, *self.source.notes)

    @property
    def notes(self) -> tuple[str, ...]:
        """The source's defects and what was counted of the samples, a line each."""
        counted = []
        if self.nonfinite:
            counted.append(f"{_counted(self.nonfinite, 'sample')} not finite, taken as 0")
        if self.clipped:
            share = 100.0 * self.clipped / self.samples
            counted.append(f"{_counted(self.clipped, 'sample')} at the end stops of the format ({share:.2g} %)")
        if self.samples_lost:
            counted.append(f"{_counted(self.samples_lost, 'sample')} lost in {_counted(self.gaps, 'gap')}")
        if self.interrupted:
            counted.append(f"interrupted after {self.seconds:.3f} s")
        return (*self.source_notes, *counted)


def _counted(count: int, noun: str, nouns: str = "") -> str:
    return f"{count} {noun if count == 1 else nouns or noun + 's'}"


class _Worst:
    """Keeps the sums of the window with the least opening."""

    def __init__(self) -> None:
        self.count = 0
        self._opening = math.inf
        self._sums: EyeSums | None = None

    def take(self, sums: EyeSums, context: Context) -> None:
        self.count += 1
        opening = window_opening(sums, context)
        if opening is not None and opening < self._opening:
            self._opening, self._sums = opening, sums

    def reading(self, context: Context) -> Reading | None:
        return None if self._sums is None else Figures(self._sums, context).reading()


def run(
    source: Source,
    wanted: Wanted,
    options: ChainOptions,
    *,
    threads: int = 2,
    progress: Callable[[int], None] | None = None,
    observe: Callable[[Block], None] | None = None,
) -> Outcome:
    """Measure a source from where it stands to its end.

    Parameters
    ----------
    source
        Open; stays open.
    wanted, options
        What is known of the link, and how to measure.
    threads
        1 or 2: with 2 a fast link's eye is summed in threads of their own, which two processors have enough to do with.
    progress
        Is told the samples taken so far.
    observe
        Is given every block before it is measured.

    Raises
    ------
    InputError
        Link and samples do not fit together.
    """
    started = time.perf_counter()
    stream = source.blocks()
    outcome = Outcome(source)
    rate = source.info.sample_rate_hz
    try:
        head, identified = _look_along(stream, rate, wanted, passed=_count_of(outcome, progress, observe))
        rest = _counting(_joined(head, stream), outcome, progress, observe)
        if isinstance(identified, NotFound):
            outcome.reason = identified.reason
            for _ in rest:
                pass  # no link: still say what the source holds
        else:
            outcome.link, outcome.identified = identified.link, identified.found
            _measure(outcome, identified, rest, options, threads)
    except DspError as error:
        raise InputError(str(error)) from None
    outcome.elapsed_s = time.perf_counter() - started
    return outcome


def look_ahead(source: Source, wanted: Wanted) -> Identified | NotFound:
    """The link in an open source, whose samples are taken from it. Raises InputError where link and samples do not fit."""
    try:
        return _look_along(source.blocks(), source.info.sample_rate_hz, wanted)[1]
    except DspError as error:
        raise InputError(str(error)) from None


def _look_along(
    stream: Iterator[Block], rate: float, wanted: Wanted, passed: Callable[[Block], None] = lambda block: None
) -> tuple[list[Block], Identified | NotFound]:
    """The first stretch with a link and that link; else the last one.

    Looked at are the first stretch, the next, and then ever fewer, so that an hour of nothing costs no hour. The blocks before what is
    returned are handed to ``passed``.
    """
    head = _read_head(stream, rate, wanted)
    found = settle_link(head, rate, wanted)
    first = found
    index = looks = 0
    while isinstance(found, NotFound):
        for _ in range(max(2 * index, 1) - index):
            index += 1
            later = _read_head(stream, rate, wanted)
            if not later:
                break
            for block in head:
                passed(block)
            head = later
        if not later:
            break
        looks += 1
        found = settle_link(head, rate, wanted)
    if isinstance(found, NotFound) and isinstance(first, NotFound) and looks:
        # a last stretch may be too short to say anything
        found = NotFound(
            f"{first.reason}; nor is there a link in {_counted(looks, 'later stretch', 'later stretches')}"
        )
    return head, found


def settle_link(head: list[Block], sample_rate_hz: float, wanted: Wanted) -> Identified | NotFound:
    """The link as given where all of it is, identified from the stream's head where not. Raises DspError."""
    if not head:
        return NotFound("there are no samples")
    samples = _unbroken(head)
    if wanted.scheme is not None and wanted.symbol_rate_hz is not None and wanted.pulse is not None:
        link = Link(wanted.scheme, sample_rate_hz, wanted.symbol_rate_hz, wanted.pulse, wanted.carrier_hz, wanted.name)
        is_complex = bool(np.iscomplexobj(samples))
        band = _own_band(samples, link) if link.scheme.kind != "baseband" else None
        centre, half = placement(link, band, is_complex=is_complex) if band is not None else (0.0, None)
        found = ("carrier_hz",) if wanted.carrier_hz is None and link.scheme.kind != "baseband" else ()
        return Identified(link, centre * sample_rate_hz, None if half is None else half * sample_rate_hz, found)
    if wanted.symbol_rate_hz is not None:
        # refuse what cannot be measured before looking for it
        Link(SCHEMES["qpsk"], sample_rate_hz, wanted.symbol_rate_hz, Pulse("none"), wanted.carrier_hz)
    return identify(samples, sample_rate_hz, wanted)


def _own_band(samples: Samples, link: Link) -> Band | None:
    """What the link occupies: of a frequency link whose carrier is given its own band alone, others may lie beside it."""
    if link.scheme.kind == "frequency" and link.carrier_hz is not None:
        own = band_about(samples, link.carrier_hz / link.sample_rate_hz)
        # narrower than a link can be, it is one tone of several
        if own is not None and own.half * link.samples_per_symbol > 0.25:
            return own
    return occupied_band(samples)


def _unbroken(blocks: list[Block]) -> Samples:
    """The longest run of samples without a gap."""
    starts = [0, *(number for number, block in enumerate(blocks) if block.lost and number), len(blocks)]
    runs = [blocks[a:b] for a, b in pairwise(starts)]
    longest = max(runs, key=lambda run: sum(block.samples.size for block in run))
    return np.concatenate([block.samples for block in longest])


def _read_head(stream: Iterator[Block], rate: float, wanted: Wanted) -> list[Block]:
    need = int(min(_HEAD_SECONDS * rate, _HEAD_SAMPLES))
    if wanted.symbol_rate_hz:
        need = max(need, int(min(_HEAD_SYMBOLS * rate / wanted.symbol_rate_hz, 4 * _HEAD_SAMPLES)))
    head: list[Block] = []
    have = 0
    while have < need and (block := next(stream, None)) is not None:
        head.append(block)
        have += block.samples.size
    return head


def _measure(
    outcome: Outcome, identified: Identified, stream: Iterator[Block], options: ChainOptions, threads: int
) -> None:
    worst = _Worst()
    # of a slow link the threads would hand over more than they do
    beside = threads > 1 and identified.link.symbol_rate_hz >= BESIDE_FROM_BD
    lane, aside = (ThreadLane(), ThreadLane()) if beside else (None, None)
    chain = Chain(
        identified.link,
        complex_in=outcome.source.info.complex_samples,
        centre_hz=identified.centre_hz,
        half_band_hz=identified.half_band_hz,
        options=options,
        lane=lane,
        aside=aside,
        on_window=lambda sums: worst.take(sums, chain.context()),
    )
    try:
        for block in stream:
            chain.push(block)
        chain.finish()
    finally:
        for one in (lane, aside):
            if one is not None:
                one.close()
    outcome.events = chain.events
    outcome.slips, outcome.locked_samples, outcome.acquired_at = chain.slips, chain.locked_samples, chain.acquired_at
    if chain.total is None:
        outcome.reason = chain.last_reason
        return
    figures = Figures(chain.total, chain.context())
    outcome.reading, outcome.image, outcome.diagnose = figures.reading(), figures.image(), figures.diagnosis
    outcome.intervals, outcome.remarks = figures.intervals(), figures.remarks()
    if not outcome.measured:
        outcome.reason = f"{_counted(chain.total.symbols, 'symbol')} behind the lock are too few for an eye"
    outcome.coverage_pct = 100.0 * chain.total.drawn / max(chain.total.symbols, 1)
    outcome.windows = Windows(worst.count, chain.window, worst.reading(chain.context()))


def _joined(head: list[Block], stream: Iterator[Block]) -> Iterator[Block]:
    while head:
        yield head.pop(0)
    yield from stream


def _counting(
    stream: Iterator[Block],
    outcome: Outcome,
    progress: Callable[[int], None] | None,
    observe: Callable[[Block], None] | None,
) -> Iterator[Block]:
    """The blocks, counted into the outcome as each is done with."""
    count = _count_of(outcome, None, observe)
    for block in stream:
        count(block)
        yield block
        if progress is not None:
            progress(outcome.samples)


def _count_of(
    outcome: Outcome, progress: Callable[[int], None] | None, observe: Callable[[Block], None] | None
) -> Callable[[Block], None]:
    """What counts a block into the outcome."""

    def count(block: Block) -> None:
        if observe is not None:
            observe(block)
        outcome.samples_lost += block.lost
        outcome.gaps += block.lost > 0
        outcome.clipped += block.clipped
        outcome.nonfinite += block.nonfinite
        outcome.samples += block.samples.size
        if progress is not None:
            progress(outcome.samples)

    return count
