"""Ctrl-C as a wish for the end of the stream, not of the program."""

import signal
import threading
from collections.abc import Callable, Iterator
from types import FrameType, TracebackType
from typing import Any, Self

from dsp.block import Block
from monitor.sources import Source


class Interrupt:
    """Ctrl-C asks for the end, and what was measured is still told; a second one ends at once.

    A context of the main thread (elsewhere it does nothing); the handler before it is put back. Where Ctrl-C is ignored, as in a job
    that a shell runs in the background, it stays so.
    """

    def __init__(self) -> None:
        self.asked = False
        self._waiting = False
        self._in_force = False
        self._before: Any = None

    def __enter__(self) -> Self:
        in_main = threading.current_thread() is threading.main_thread()
        if in_main and signal.getsignal(signal.SIGINT) is not signal.SIG_IGN:
            self._before = signal.signal(signal.SIGINT, self._ask)
            self._in_force = True
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._in_force:
            signal.signal(signal.SIGINT, self._before)
            self._in_force = False

    def blocks_until(self, blocks: Iterator[Block]) -> Iterator[Block]:
        """The blocks up to when Ctrl-C is pressed, even while waiting for the next."""
        try:
            while not self.asked:
                self._waiting = True
                block = next(blocks, None)
                self._waiting = False
                if block is None:
                    return
                yield block
        except KeyboardInterrupt:
            if not self.asked:
                raise
        finally:
            self._waiting = False

    def _ask(self, number: int, frame: FrameType | None) -> None:
        again, self.asked = self.asked, True
        if again or self._waiting:
            raise KeyboardInterrupt


class Interruptible(Source):
    """A source whose stream ends when the user asks for it."""

    def __init__(self, source: Source, interrupt: Interrupt) -> None:
        self.info = source.info
        self.notes = source.notes
        self._source = source
        self._interrupt = interrupt

    def blocks(self) -> Iterator[Block]:
        """The source's blocks until the end is asked for."""
        return self._interrupt.blocks_until(self._source.blocks())

    def close(self) -> None:
        """Close the source."""
        self._source.close()


class Stoppable(Source):
    """A source whose stream ends where ``asked`` says so between two blocks: read elsewhere than where Ctrl-C arrives."""

    def __init__(self, source: Source, asked: Callable[[], bool]) -> None:
        self.info = source.info
        self.notes = source.notes
        self.asked = asked
        self._source = source

    def blocks(self) -> Iterator[Block]:
        """The source's blocks until the end is asked for."""
        for block in self._source.blocks():
            if self.asked():
                return
            yield block

    def close(self) -> None:
        """Close the source."""
        self._source.close()
