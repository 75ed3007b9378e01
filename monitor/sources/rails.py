"""Two channels that one device delivers as I and Q, told apart again as two real links."""

from dataclasses import replace
from typing import Literal

import numpy as np

from dsp.block import Block
from monitor.sources.stream import LiveSource
from monitor.sources.wire import Item, StreamEvent


class RailSource(LiveSource):
    """One channel of a complex source: 0 the real part, 1 the imaginary. A block's clipped samples are those at ``end_stop`` or beyond."""

    def __init__(self, source: LiveSource, rail: Literal[0, 1], *, end_stop: float) -> None:
        self.uri, self.warnings, self.patient = source.uri, source.warnings, source.patient
        self._source = source
        self._rail = rail
        self._end_stop = end_stop

    @property
    def ended(self) -> bool:  # type: ignore[override]  # read-only here
        """No more will come."""
        return self._source.ended

    def poll(self, timeout_s: float) -> tuple[Item, ...]:
        """What has come on this channel."""
        return tuple(self._of(item) for item in self._source.poll(timeout_s))

    def _of(self, item: Item) -> Item:
        if isinstance(item, StreamEvent):
            return item if item.format is None else replace(item, format="r" + item.format.removeprefix("c"))
        samples = np.ascontiguousarray(item.samples.imag if self._rail else item.samples.real)
        clipped = int(np.count_nonzero(np.abs(samples) >= self._end_stop))
        return Block(samples, item.start, item.lost, clipped, item.nonfinite)

    def close(self) -> None:
        """Leave the source."""
        self._source.close()
