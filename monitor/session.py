"""One run over one source: find the link, run the chain, gather what came out."""

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

import numpy as np

from dsp.acquisition import NotFound
from dsp.block import Block
from dsp.chain import AtOnce, Chain, ChainOptions, LockEvent
from dsp.errors import DspError
from dsp.eye import EyeSums
from dsp.figures import Context, Figures, window_opening
from dsp.identify import Identified, Wanted, identify, occupied_band, placement
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


@dataclass(frozen=True, slots=True)
class Windows:
    """The run window by window: how many full ones, of how many symbols, and the one with the least opening."""

    count: int = 0
    symbols_each: int = 0
    worst: Reading | None = None


@dataclass
class Outcome:
    """All that one run has to tell."""

    source: Source
    link: Link | None
    identified: tuple[str, ...] = ()
    reading: Reading | None = None
    image: EyeImage | None = None
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

    @property
    def seconds(self) -> float:
        """Length of the stream."""
        return (self.samples + self.samples_lost) / self.source.info.sample_rate_hz


class _Worst:
    """Keeps the sums of the window with the least opening."""

    def __init__(self, context: Callable[[], Context]) -> None:
        self._context = context
        self.count = 0
        self.opening = np.inf
        self.sums: EyeSums | None = None

    def take(self, sums: EyeSums) -> None:
        self.count += 1
        opening = window_opening(sums, self._context())
        if opening is not None and opening < self.opening:
            self.opening, self.sums = opening, sums


def run(
    source: Source,
    wanted: Wanted,
    options: ChainOptions,
    *,
    threads: int = 2,
    progress: Callable[[int], None] | None = None,
    stopped: Callable[[], bool] | None = None,
) -> Outcome:
    """Measure a whole source. ``progress`` is told the samples taken so far, ``stopped`` may end the run early.

    Raises InputError where link and samples do not fit.
    """
    started = time.perf_counter()
    blocks = source.blocks()
    head = _read_head(blocks, source.info.sample_rate_hz, wanted)
    outcome = Outcome(source, None)
    try:
        identified = settle_link(head, source.info.sample_rate_hz, wanted)
        if isinstance(identified, NotFound):
            outcome.reason = identified.reason
            _count_only(outcome, head, blocks, progress, stopped)
        else:
            _measure(outcome, identified, head, blocks, options, threads, progress, stopped)
    except DspError as error:
        raise InputError(str(error)) from None
    outcome.elapsed_s = time.perf_counter() - started
    return outcome


def settle_link(head: list[Block], sample_rate_hz: float, wanted: Wanted) -> Identified | NotFound:
    """The link as given where all of it is, identified from the stream's head where not. Raises DspError."""
    if not head:
        return NotFound("there are no samples")
    samples = np.concatenate([block.samples for block in head])
    if wanted.scheme is not None and wanted.symbol_rate_hz is not None and wanted.pulse is not None:
        link = Link(wanted.scheme, sample_rate_hz, wanted.symbol_rate_hz, wanted.pulse, wanted.carrier_hz, wanted.name)
        is_complex = bool(np.iscomplexobj(samples))
        band = occupied_band(samples) if link.scheme.kind != "baseband" else None
        centre, half = placement(link, band, is_complex=is_complex) if band is not None else (0.0, None)
        found = ("carrier_hz",) if wanted.carrier_hz is None and link.scheme.kind != "baseband" else ()
        return Identified(link, centre * sample_rate_hz, None if half is None else half * sample_rate_hz, found)
    if wanted.symbol_rate_hz is not None:
        # refuse what cannot be measured before looking for it
        Link(SCHEMES["qpsk"], sample_rate_hz, wanted.symbol_rate_hz, Pulse("none"), wanted.carrier_hz)
    return identify(samples, sample_rate_hz, wanted)


def _read_head(blocks: Iterator[Block], rate: float, wanted: Wanted) -> list[Block]:
    need = int(min(_HEAD_SECONDS * rate, _HEAD_SAMPLES))
    if wanted.symbol_rate_hz:
        need = max(need, int(min(_HEAD_SYMBOLS * rate / wanted.symbol_rate_hz, 4 * _HEAD_SAMPLES)))
    head: list[Block] = []
    have = 0
    while have < need and (block := next(blocks, None)) is not None:
        head.append(block)
        have += block.samples.size
    return head


def _measure(
    outcome: Outcome,
    identified: Identified,
    head: list[Block],
    blocks: Iterator[Block],
    options: ChainOptions,
    threads: int,
    progress: Callable[[int], None] | None,
    stopped: Callable[[], bool] | None,
) -> None:
    lane = ThreadLane() if threads > 1 else None
    worst = _Worst(lambda: chain.context())
    chain = Chain(
        identified.link,
        complex_in=outcome.source.info.complex_samples,
        centre_hz=identified.centre_hz,
        half_band_hz=identified.half_band_hz,
        options=options,
        lane=lane or AtOnce(),
        on_window=worst.take,
    )
    try:
        for block in _joined(head, blocks):
            if stopped is not None and stopped():
                break
            chain.push(block)
            if progress is not None:
                progress(chain.samples)
        chain.finish()
    finally:
        if lane is not None:
            lane.close()
    outcome.link = identified.link
    outcome.identified = identified.found
    outcome.events = chain.events
    outcome.reason = chain.last_reason
    for name in ("samples", "samples_lost", "gaps", "clipped", "nonfinite", "slips", "locked_samples", "acquired_at"):
        setattr(outcome, name, getattr(chain, name))
    if chain.total is not None:
        figures = Figures(chain.total, chain.context())
        outcome.reading = figures.reading()
        outcome.image = figures.image()
        outcome.coverage_pct = 100.0 * chain.total.drawn / max(chain.total.symbols, 1)
    outcome.windows = Windows(
        worst.count,
        options.window,
        Figures(worst.sums, chain.context()).reading() if worst.sums is not None else None,
    )


def _count_only(
    outcome: Outcome,
    head: list[Block],
    blocks: Iterator[Block],
    progress: Callable[[int], None] | None,
    stopped: Callable[[], bool] | None,
) -> None:
    """No link: still say what the source holds."""
    for block in _joined(head, blocks):
        if stopped is not None and stopped():
            break
        outcome.samples += block.samples.size
        outcome.samples_lost += block.lost
        outcome.gaps += block.lost > 0
        outcome.clipped += block.clipped
        outcome.nonfinite += block.nonfinite
        if progress is not None:
            progress(outcome.samples)


def _joined(head: list[Block], blocks: Iterator[Block]) -> Iterator[Block]:
    while head:
        yield head.pop(0)
    yield from blocks
