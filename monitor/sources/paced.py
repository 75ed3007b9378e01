"""A recording as a live source: its samples come at their own pace, or a multiple of it."""

import time
from collections.abc import Callable
from typing import Final

from dsp.block import Block
from monitor.sources.base import Source
from monitor.sources.stream import LiveSource
from monitor.sources.wire import Item, StreamEvent

_STEP_S: Final = 0.02
_MOST_LATE_S: Final = 0.2


class PacedSource(LiveSource):
    """Wraps a file's source; ``pace`` 1 is real time. Owned by the thread that polls.

    A taker that is slower than the pace loses nothing: the recording is played so much slower.
    """

    patient = True

    def __init__(self, source: Source, pace: float, *, now: Callable[[], float] = time.monotonic) -> None:
        self.uri = source.info.uri
        self.warnings = source.info.notes
        self.ended = False
        self._source = source
        self._rate = source.info.sample_rate_hz * pace
        self._now = now
        self._blocks = source.blocks()
        self._began: float | None = None
        self._given = 0
        self._block: Block | None = None
        self._at = 0

    def poll(self, timeout_s: float) -> tuple[Item, ...]:
        """What is due by now, at most some hundredths of a second of it at once; at the end an ``ended`` event."""
        info = self._source.info
        if self._began is None:
            self._began = self._now()
            kind = "cf32_le" if info.complex_samples else "rf32_le"
            return (
                StreamEvent(
                    "start", "samples arrive", 0, info.sample_rate_hz, kind, info.centre_hz, encoding=info.format
                ),
            )
        if self._block is None:
            self._block, self._at = next(self._blocks, None), 0
            if self._block is None:
                self.ended = True
                return (StreamEvent("ended", "the recording ended", self._given),)
            self._given += self._block.lost
        block = self._block
        step = max(min(int(self._rate * _STEP_S), block.samples.size - self._at), 1)
        due = int((self._now() - self._began) * self._rate) - self._given
        if due < step:
            time.sleep(min((step - due) / self._rate, timeout_s))
            return ()
        late_s = due / self._rate - _MOST_LATE_S
        if late_s > 0:
            self._began += late_s
        return (self._piece(block, min(due, 4 * step)),)

    def _piece(self, block: Block, most: int) -> Block:
        """The next ``most`` samples of a block, with their share of what it only counts."""
        at, size = self._at, block.samples.size
        end = min(at + most, size)
        self._given += end - at
        self._at = end
        if end == size:
            self._block = None
        if at == 0 and end == size:
            return block
        clipped = block.clipped * end // size - block.clipped * at // size
        first = at == 0
        return Block(
            block.samples[at:end],
            block.start + at,
            block.lost if first else 0,
            clipped,
            block.nonfinite if first else 0,
        )

    def close(self) -> None:
        """Close the file."""
        self.ended = True
        self._source.close()
