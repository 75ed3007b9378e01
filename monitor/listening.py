"""A stretch of samples from any source, live or recorded, for whoever wants to look at it whole."""

import math
import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np

from dsp.block import Block, Samples
from monitor.errors import NothingToMeasure
from monitor.sources import Source
from monitor.sources.base import Closing
from monitor.sources.ring import ThreadedReader
from monitor.sources.stream import LiveSource
from monitor.sources.wire import DESCRIBING, StreamEvent

MOST_SAMPLES = 1 << 22
_POLL_S = 0.1


@dataclass(frozen=True, slots=True)
class Heard:
    """Consecutive samples, and what their source counted and said of them.

    ``start_s`` is where they begin in the source's time; ``clipped`` counts those at the end stops of the format, ``lost`` those missing
    before the first, since listening began.
    """

    samples: Samples
    uri: str
    format: str
    sample_rate_hz: float
    start_s: float
    lost: int
    clipped: int
    nonfinite: int
    notes: tuple[str, ...]

    @property
    def seconds(self) -> float:
        """Their length."""
        return self.samples.size / self.sample_rate_hz


class Ear(Closing, Protocol):
    """Listens to one source; a context."""

    def listen(self, seconds: float) -> Heard:
        """At most so many seconds of samples; fewer where the source ends. Raises MonitorError."""
        ...

    def close(self) -> None:
        """Listen no more."""
        ...


class RecordingEar(Ear):
    """A recording from its start on; each call hears the same samples again, and more of them. Closes the source."""

    def __init__(self, source: Source) -> None:
        self._source = source
        self._stream = source.blocks()
        self._kept: list[Block] = []
        self._held = 0

    def listen(self, seconds: float) -> Heard:
        """The first ``seconds``, up to the first gap in them."""
        info = self._source.info
        want = min(math.ceil(seconds * info.sample_rate_hz), MOST_SAMPLES)
        while self._held < want and (block := next(self._stream, None)) is not None:
            if block.lost and self._kept:
                break
            self._kept.append(block)
            self._held += block.samples.size
        notes = (*info.notes, *self._source.notes)
        return _heard(
            self._kept, want, info.uri, info.format, info.sample_rate_hz, notes, complex_in=info.complex_samples
        )

    def close(self) -> None:
        """Close the source."""
        self._source.close()


class LiveEar(Ear):
    """A live source from now on; each call hears new samples. Gives up where none come for ``patience_s``.

    Raises InputError where the source cannot be opened.
    """

    def __init__(self, open_source: Callable[[], LiveSource], patience_s: float, uri: str) -> None:
        self._reader = ThreadedReader(open_source)
        self._patience_s = patience_s
        self._uri = uri
        self._rate_hz: float | None = None
        self._format = ""
        self._notes: list[str] = list(self._reader.warnings)

    @property
    def warnings(self) -> tuple[str, ...]:
        """What the user should know at the start."""
        return self._reader.warnings

    def listen(self, seconds: float) -> Heard:
        """``seconds`` without a gap; what came before a gap is let go."""
        kept: list[Block] = []
        held = lost = 0
        quiet_since = time.monotonic()
        self._reader.poll(0.0)  # what waited while nobody listened
        while True:
            want = math.inf if self._rate_hz is None else min(math.ceil(seconds * self._rate_hz), MOST_SAMPLES)
            if held >= want:
                break
            items = self._reader.poll(_POLL_S)
            for item in items:
                if isinstance(item, StreamEvent):
                    if self._described(item):
                        kept, held = [], 0
                    continue
                if item.lost:
                    lost += item.lost
                    kept, held = [], 0
                kept.append(item)
                held += item.samples.size
                quiet_since = time.monotonic()
            if not items:
                if self._reader.ended:
                    break
                if time.monotonic() - quiet_since >= self._patience_s:
                    if held:
                        break
                    raise NothingToMeasure(f"{self._uri}: no samples came in {self._patience_s:g} s")
        if self._rate_hz is None:
            raise NothingToMeasure(f"{self._uri}: ended without a sample")
        count = held if math.isinf(want) else int(want)
        complex_in = self._format.startswith("c")
        heard = _heard(kept, count, self._uri, self._format, self._rate_hz, tuple(self._notes), complex_in=complex_in)
        return replace(heard, lost=lost)

    def _described(self, event: StreamEvent) -> bool:
        """Take what an event says of the samples; whether those before it are of another kind."""
        if event.kind in DESCRIBING and event.rate_hz is not None and event.format is not None:
            changed = self._rate_hz is not None and (event.rate_hz, event.format) != (self._rate_hz, self._format)
            self._rate_hz, self._format = event.rate_hz, event.format
            return changed
        if event.kind != "ended":
            self._notes = [*self._notes[-7:], event.text]
        return False

    def close(self) -> None:
        """Leave the source."""
        self._reader.close()


def _heard(
    blocks: list[Block],
    most: int,
    uri: str,
    form: str,
    rate_hz: float,
    notes: tuple[str, ...],
    *,
    complex_in: bool,
) -> Heard:
    empty = np.empty(0, np.complex64 if complex_in else np.float32)
    samples: Samples = np.concatenate([empty, *(block.samples for block in blocks)])[:most]
    return Heard(
        samples,
        uri,
        form,
        rate_hz,
        blocks[0].start / rate_hz if blocks else 0.0,
        sum(block.lost for block in blocks),
        sum(block.clipped for block in blocks),
        sum(block.nonfinite for block in blocks),
        notes,
    )
