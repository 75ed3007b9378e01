"""Between the thread that receives and the one that measures: a ring that forgets the oldest rather than wait."""

import math
import threading
import time
from collections import deque
from collections.abc import Callable, Iterable
from dataclasses import replace
from typing import Final

from dsp.block import Block
from monitor.errors import MonitorError, printable
from monitor.sources.stream import LiveSource
from monitor.sources.wire import DESCRIBING, Item, StreamEvent

BOUND_S: Final = 0.4
_MOST_EVENTS = 256
_MOST_BYTES = 64 << 20
_KEPT = 0.2
_POLL_S = 0.1  # how long a source may wait before it looks whether to stop
_JOIN_S = 5.0


class SampleRing:
    """Blocks and events in order, at most ``bound_s`` of stream time (or one block, if that is longer).

    When it is full the oldest whole blocks are dropped: the next block delivered carries their samples in ``lost``.
    Events are kept, up to a number that only a hostile sender reaches. Any thread may put, any take.

    More than ``bound_s`` may wait, up to 64 MiB, as long as nothing waits longer than ``patience_s`` by the clock: samples
    that a network held up and then brings all at once are no reason to lose any.

    For a source that can wait, `keep_all` drops nothing, and `wait_for_room` says when to put more.

    When blocks must be dropped, all but the share ``kept`` of the bound are, so that a taker that is too slow for good sees
    few long stretches rather than many short ones.

    Attributes
    ----------
    dropped
        Samples dropped so far.
    """

    def __init__(
        self,
        bound_s: float = BOUND_S,
        patience_s: float = 0.0,
        *,
        kept: float = 1.0,
        now: Callable[[], float] = time.monotonic,
    ) -> None:
        self.dropped = 0
        self._bound_s = bound_s
        self._patience_s = patience_s
        self._kept = kept
        self._now = now
        self._changed = threading.Condition()
        self._items: deque[tuple[Item, float]] = deque()
        self._came: deque[float] = deque()  # when each block came
        self._bytes = 0
        self._seconds = 0.0
        self._blocks = 0
        self._owed = 0
        self._rate_hz: float | None = None
        self._closed = False
        self._failure: BaseException | None = None
        self._told = False

    @property
    def held_s(self) -> float:
        """Stream time that waits."""
        with self._changed:
            return self._seconds

    @property
    def oldest_s(self) -> float:
        """How long, by the clock, the oldest block has waited."""
        with self._changed:
            return self._now() - self._came[0] if self._came else 0.0

    def keep_all(self) -> None:
        """Drop nothing for being old."""
        self._patience_s = math.inf

    def wait_for_room(self, timeout_s: float) -> bool:
        """Wait until no more than half the bound waits; whether that has come."""
        with self._changed:
            return self._changed.wait_for(lambda: self._seconds <= 0.5 * self._bound_s, timeout_s)

    def put(self, items: Iterable[Item]) -> None:
        """Append; never waits for the taker. Blocks before any event that tells a rate count as no time."""
        with self._changed:
            for item in items:
                self._append(item)
            self._changed.notify_all()

    def _append(self, item: Item) -> None:
        if isinstance(item, StreamEvent):
            if item.kind in DESCRIBING and item.rate_hz is not None:
                self._rate_hz = item.rate_hz
            self._items.append((item, 0.0))
            if len(self._items) - self._blocks > _MOST_EVENTS:
                self._drop_event()
            return
        if self._owed:
            item = replace(item, lost=item.lost + self._owed)
            self._owed = 0
        seconds = item.samples.size / self._rate_hz if self._rate_hz else 0.0
        self._items.append((item, seconds))
        self._came.append(self._now())
        self._blocks += 1
        self._seconds += seconds
        self._bytes += item.samples.nbytes
        if self._seconds > self._bound_s and self._came[-1] - self._came[0] >= self._patience_s:
            while self._blocks > 1 and self._seconds > self._kept * self._bound_s:
                self._drop_block()
        while self._blocks > 1 and self._bytes > _MOST_BYTES:
            self._drop_block()

    def _drop_block(self) -> None:
        for place, (item, seconds) in enumerate(self._items):
            if isinstance(item, Block):
                del self._items[place]
                self._uncount(item, seconds)
                self.dropped += item.samples.size
                self._owe(place, item.lost + item.samples.size)
                return

    def _uncount(self, block: Block, seconds: float) -> None:
        self._came.popleft()
        self._blocks -= 1
        self._seconds = self._seconds - seconds if self._blocks else 0.0
        self._bytes -= block.samples.nbytes

    def _owe(self, place: int, lost: int) -> None:
        """Tell of ``lost`` samples with the first block from ``place`` on, or with the next to come."""
        for later in range(place, len(self._items)):
            item, seconds = self._items[later]
            if isinstance(item, Block):
                self._items[later] = replace(item, lost=item.lost + lost), seconds
                return
        self._owed += lost

    def _drop_event(self) -> None:
        events = [place for place, (item, _) in enumerate(self._items) if isinstance(item, StreamEvent)]
        lesser = (place for place in events if getattr(self._items[place][0], "kind", "") not in DESCRIBING)
        del self._items[next(lesser, events[0])]

    def take(self, timeout_s: float, most_blocks: int | None = None) -> tuple[Item, ...]:
        """What waits, up to so many blocks (None: all), waiting up to ``timeout_s`` for something.

        Empty at the time-out and after the end. Raises what `close` was given, once everything before it has been taken.
        """
        with self._changed:
            self._changed.wait_for(lambda: self._items or self._closed, timeout_s)
            taken: list[Item] = []
            blocks = 0
            while self._items and (most_blocks is None or blocks < most_blocks):
                item, seconds = self._items.popleft()
                taken.append(item)
                if isinstance(item, Block):
                    blocks += 1
                    self._uncount(item, seconds)
            self._changed.notify_all()
            if not taken and self._failure is not None:
                self._told = True
                raise self._failure
            return tuple(taken)

    def close(self, failure: BaseException | None = None) -> None:
        """Nothing more will be put; wakes the taker."""
        with self._changed:
            self._closed = True
            self._failure = self._failure or failure
            self._changed.notify_all()

    @property
    def closed(self) -> bool:
        """Closed and empty, and its failure, if any, was raised."""
        with self._changed:
            return self._closed and not self._items and (self._failure is None or self._told)


class ThreadedReader(LiveSource):
    """A live source in a thread of its own behind a `SampleRing`; has the same calls as the source.

    ``open_source`` is called, and the source used and closed, in that thread; what it raises is raised here. The
    constructor returns when the source is open.

    Attributes
    ----------
    ring
        What waits to be taken.
    """

    def __init__(
        self, open_source: Callable[[], LiveSource], bound_s: float = BOUND_S, patience_s: float = BOUND_S
    ) -> None:
        self.ring = SampleRing(bound_s, patience_s, kept=_KEPT)
        self.uri = ""
        self.warnings: tuple[str, ...] = ()
        self.patient = False
        self._open_source = open_source
        self._stop = threading.Event()
        self._opened = threading.Event()
        self._opening_failure: BaseException | None = None
        self._thread = threading.Thread(target=self._run, name="lidwatch source", daemon=True)
        self._thread.start()
        try:
            self._opened.wait()
        except BaseException:  # Ctrl-C while a host name is looked up
            self._stop.set()
            raise
        self._raise_if_not_open()

    def _raise_if_not_open(self) -> None:
        if self._opening_failure is not None:
            self._thread.join()
            raise self._opening_failure

    @property
    def ended(self) -> bool:  # type: ignore[override]  # read-only here
        """All has been taken and no more will come."""
        return self.ring.closed

    @property
    def dropped(self) -> int:
        """Samples that the taker was too slow for."""
        return self.ring.dropped

    def poll(self, timeout_s: float, most_blocks: int | None = None) -> tuple[Item, ...]:
        """What waits, in order, never more than the ring's bound; raises what the source raised."""
        return self.ring.take(timeout_s, most_blocks)

    def close(self) -> None:
        """Stop the thread; returns when the source is closed, or after some seconds if it does not come back."""
        self._stop.set()
        if self._thread is not threading.current_thread():
            self._thread.join(_JOIN_S)

    def _run(self) -> None:
        try:
            source = self._open_source()
        except BaseException as error:  # noqa: BLE001 - handed to the thread that waits for it
            self._opening_failure = error
            self.ring.close()
            self._opened.set()
            return
        failure: BaseException | None = None
        try:
            self.uri, self.warnings, self.patient = source.uri, source.warnings, source.patient
            if self.patient:
                self.ring.keep_all()
            self._opened.set()
            while not (self._stop.is_set() or source.ended):
                if not self.patient or self.ring.wait_for_room(_POLL_S):
                    self.ring.put(source.poll(_POLL_S))
        except MonitorError as error:
            failure = error
        except BaseException as error:  # noqa: BLE001 - a thread that ends in silence would look like a silent sender
            failure = MonitorError(printable(f"{self.uri}: the source failed: {error!r}"))
            failure.__cause__ = error
        finally:
            self._opened.set()
            source.close()
            self.ring.close(failure)
