"""A recording as a live source: its samples come at their own pace, or a multiple of it."""

import time
from collections.abc import Callable
from typing import Final

from dsp.block import Block
from monitor.sources.base import Source
from monitor.sources.stream import LiveSource
from monitor.sources.wire import Item, StreamEvent

_STEP_S: Final = 0.02


class PacedSource(LiveSource):
    """Wraps a file's source; ``pace`` 1 is real time. Owned by the thread that polls."""

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
        self._rest: Block | None = None

    def poll(self, timeout_s: float) -> tuple[Item, ...]:
        """What is due by now, at most a fiftieth of a second of it at once."""
        info = self._source.info
        if self._began is None:
            self._began = self._now()
            kind = "cf32_le" if info.complex_samples else "rf32_le"
            return (StreamEvent("start", info.format, 0, info.sample_rate_hz, kind, info.centre_hz),)
        due = int((self._now() - self._began) * self._rate) - self._given
        step = max(int(self._rate * _STEP_S), 1)
        if due < step:
            time.sleep(min((step - due) / self._rate, timeout_s))
            return ()
        if self._rest is None:
            self._rest = next(self._blocks, None)
            if self._rest is None:
                self.ended = True
                return ()
        block, n = self._rest, min(due, 4 * step)
        if block.samples.size <= n:
            self._rest = None
            self._given += block.samples.size + block.lost
            return (block,)
        # the counts of a block go with its first piece
        self._rest = Block(block.samples[n:], block.start + n)
        self._given += n + block.lost
        return (Block(block.samples[:n], block.start, block.lost, block.clipped, block.nonfinite),)

    def close(self) -> None:
        """Close the file."""
        self._source.close()
