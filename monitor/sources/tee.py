"""One stream that can be read only once, for several readers: each gets every block, in order."""

import threading
from collections import deque
from collections.abc import Iterator

from dsp.block import Block
from monitor.sources.base import Source

_MOST_WAITING = 64  # blocks that may wait for the slowest reader
_LOOK_S = 0.1


class Tee:
    """Shares a source among its branches, each read by a thread of its own; the last branch that leaves closes it.

    Whoever has nothing waiting reads on, for all. Nobody reads while too much waits for another: all go at the pace of the slowest, in
    bounded memory. So every branch has to be read to its end, or closed.
    """

    def __init__(self, source: Source, branches: int) -> None:
        self.source = source
        self._stream = source.blocks()
        self._changed = threading.Condition()
        self._reading = False
        self._over = False
        self._taken = 0
        self._waiting: list[deque[Block] | None] = [deque() for _ in range(branches)]

    def branch(self) -> Source:
        """The next branch; each can be taken once."""
        number, self._taken = self._taken, self._taken + 1
        return _Branch(self, number)

    def next_block(self, number: int) -> Block | None:
        """The next block of a branch; None at the end of the stream, or where the branch was closed."""
        with self._changed:
            while True:
                queue = self._waiting[number]
                if queue is None:
                    return None
                if queue:
                    self._changed.notify_all()
                    return queue.popleft()
                if self._over:
                    return None
                full = any(other is not None and len(other) >= _MOST_WAITING for other in self._waiting)
                if not self._reading and not full:
                    break
                self._changed.wait(_LOOK_S)
            self._reading = True
        block: Block | None = None
        try:
            block = next(self._stream, None)
        finally:
            with self._changed:
                self._reading, self._over = False, block is None
                for other_number, other in enumerate(self._waiting):
                    if block is not None and other is not None and other_number != number:
                        other.append(block)
                self._changed.notify_all()
        return block

    def leave(self, number: int) -> None:
        """A branch wants no more; may be said twice."""
        with self._changed:
            last = self._waiting[number] is not None and sum(queue is not None for queue in self._waiting) == 1
            self._waiting[number] = None
            self._changed.notify_all()
        if last:
            self.source.close()


class _Branch(Source):
    def __init__(self, tee: Tee, number: int) -> None:
        self.info = tee.source.info
        self.notes = tee.source.notes
        self._tee = tee
        self._number = number

    def blocks(self) -> Iterator[Block]:
        """What comes from now on."""
        while (block := self._tee.next_block(self._number)) is not None:
            yield block

    def close(self) -> None:
        """Leave the stream to the others."""
        self._tee.leave(self._number)
