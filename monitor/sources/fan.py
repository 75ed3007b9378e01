"""One live source for several takers: each gets every item, in order."""

import threading
from collections import deque
from collections.abc import Callable

from monitor.sources.stream import LiveSource
from monitor.sources.wire import Item

_MOST_WAITING = 64


class Fan:
    """Opens a source with its first branch and closes it with its last; whichever branch is asked first asks the source.

    The source is used by one thread at a time, not always the same one. What a branch has not taken waits for it: each needs a reader. A
    patient source is not asked while much waits for any of them.
    """

    def __init__(self, open_source: Callable[[], LiveSource], branches: int) -> None:
        self._open_source = open_source
        self._changed = threading.Condition()
        self._source: LiveSource | None = None
        self._asking = False
        self._failure: BaseException | None = None
        self._waiting: list[deque[Item] | None] = [deque() for _ in range(branches)]

    def branch(self, number: int) -> LiveSource:
        """Open a branch, once, in the thread that is to use it. Raises what opening the source raises."""
        with self._changed:
            if self._failure is not None:
                raise self._failure
            if self._source is None:
                try:
                    self._source = self._open_source()
                except BaseException as error:
                    self._failure = error
                    raise
            return _Branch(self, number, self._source)

    def poll(self, number: int, timeout_s: float) -> tuple[Item, ...]:
        """What has come for a branch; raises what the source raises, to every branch."""
        with self._changed:
            queue = self._waiting[number]
            if queue is None:
                return ()
            if not queue and self._asking:
                self._changed.wait(timeout_s)
            if len(queue) or self._asking:
                return self._emptied(queue)
            if self._failure is not None:
                raise self._failure
            source = self._source
            assert source is not None
            if source.patient and any(other is not None and len(other) >= _MOST_WAITING for other in self._waiting):
                self._changed.wait(timeout_s)
                return ()
            self._asking = True
        items: tuple[Item, ...] = ()
        failure: BaseException | None = None
        try:
            items = source.poll(timeout_s)
        except BaseException as error:  # noqa: BLE001  # told to each branch below
            failure = error
        with self._changed:
            self._asking = False
            for other in self._waiting:
                if other is not None:
                    other.extend(items)
            if failure is not None:
                self._failure = failure
            self._changed.notify_all()
            if failure is not None and not queue:
                raise failure
            return self._emptied(queue)

    def over(self, number: int) -> bool:
        """Whether no more will come for a branch."""
        with self._changed:
            queue = self._waiting[number]
            return queue is None or (self._source is not None and self._source.ended and not queue and not self._asking)

    def _emptied(self, queue: "deque[Item]") -> tuple[Item, ...]:
        items = tuple(queue)
        queue.clear()
        self._changed.notify_all()
        return items

    def leave(self, number: int) -> None:
        """A branch wants no more; the last one closes the source."""
        with self._changed:
            self._waiting[number] = None
            self._changed.notify_all()
            if any(queue is not None for queue in self._waiting):
                return
            # nobody is left to ask it
            source, self._source = self._source, None
        if source is not None:
            source.close()


class _Branch(LiveSource):
    def __init__(self, fan: Fan, number: int, source: LiveSource) -> None:
        self.uri, self.patient = source.uri, source.patient
        # told once, not by every branch
        self.warnings = source.warnings if number == 0 else ()
        self._fan = fan
        self._number = number

    @property
    def ended(self) -> bool:  # type: ignore[override]  # read-only here
        """No more will come."""
        return self._fan.over(self._number)

    def poll(self, timeout_s: float) -> tuple[Item, ...]:
        """What has come."""
        return self._fan.poll(self._number, timeout_s)

    def close(self) -> None:
        """Leave the source to the others."""
        self._fan.leave(self._number)
