"""Raw samples on standard input: live, or as a stream that can be asked to end."""

import io
import os
import select
import sys
import time
from collections.abc import Callable
from typing import TYPE_CHECKING, BinaryIO, Final

from dsp.block import Block
from monitor.errors import InputError, printable
from monitor.sources.formats import parse_datatype
from monitor.sources.raw import partial_note
from monitor.sources.stream import LiveSource, check_rate
from monitor.sources.wire import Item, StreamEvent

if TYPE_CHECKING:
    from _typeshed import WriteableBuffer

_READ_BYTES: Final = 1 << 20
_FASTEST: Final = 1.01  # times the true rate: more than any sender's clock is off
_SLACK_S: Final = 0.25
_LOOK_S: Final = 0.1


class StdinSource(LiveSource):
    """Raw samples from a pipe, as they come; never closes it.

    A sender that could write faster than the samples' true rate (a recording, piped in) is held back to 1.01 times that
    rate, as a pipe allows, so that nothing of it is lost. After a pause all that waits is taken at once.
    """

    def __init__(
        self,
        rate_hz: float | None,
        format_name: str | None,
        stream: BinaryIO | None = None,
        *,
        now: Callable[[], float] = time.monotonic,
    ) -> None:
        """``stream`` stands for standard input; it needs a file descriptor. Raises InputError."""
        missing = [
            words
            for words, value in (("--rate HZ", rate_hz), ("--format NAME (cf32_le, ri16_le, cu8)", format_name))
            if value is None
        ]
        if missing or rate_hz is None or format_name is None:
            raise InputError(f"standard input: raw samples need {' and '.join(missing)}")
        check_rate(rate_hz)
        self.uri = "-"
        self.warnings: tuple[str, ...] = ()
        self.ended = False
        self.format = parse_datatype(format_name)
        self.rate_hz = float(rate_hz)
        self._fd = _descriptor(stream)
        self._now = now
        self._began_at: float | None = None
        self._next = 0
        self._rest = b""

    def poll(self, timeout_s: float) -> tuple[Item, ...]:
        """What has come; see `LiveSource`. The last call gives an ``ended`` event."""
        if self.ended:
            return ()
        wait = self._too_early_s()
        if wait > 0.0:
            time.sleep(min(wait, max(0.0, timeout_s)))
            return ()
        try:
            if not select.select([self._fd], [], [], max(0.0, timeout_s))[0]:
                return ()
            data = os.read(self._fd, _READ_BYTES)
        except BlockingIOError:
            return ()
        except (OSError, ValueError) as error:
            return self._end(f"standard input broke: {printable(str(error))}")
        if not data:
            return self._end("standard input ended")
        return self._deliver(data)

    def _too_early_s(self) -> float:
        if self._began_at is None:
            return 0.0
        return self._began_at + self._next / self.rate_hz / _FASTEST - _SLACK_S - self._now()

    def _deliver(self, data: bytes) -> tuple[Item, ...]:
        items: list[Item] = []
        if self._began_at is None:
            self._began_at = self._now()
            form = self.format.name
            text = f"samples arrive ({self.rate_hz:.12g} Hz, {form})"
            items.append(StreamEvent("start", text, 0, self.rate_hz, form))
        data = self._rest + data
        count, over = divmod(len(data), self.format.bytes_per_sample)
        self._rest = data[len(data) - over :]
        if count:
            samples, clipped, nonfinite = self.format.decode(data[: len(data) - over])
            items.append(Block(samples, self._next, 0, clipped, nonfinite))
            self._next += count
        return tuple(items)

    def _end(self, text: str) -> tuple[Item, ...]:
        self.ended = True
        items: list[Item] = []
        if self._rest:
            items.append(StreamEvent("torn", partial_note(len(self._rest)), self._next))
        return (*items, StreamEvent("ended", text, self._next))

    def close(self) -> None:
        """Read no more; standard input stays open."""
        self.ended = True


class StdinUntil(io.RawIOBase):
    """Standard input, which also ends where ``asked`` says so while nothing comes: to be read elsewhere than where Ctrl-C arrives.

    Raises InputError where there is none.
    """

    def __init__(self, asked: Callable[[], bool]) -> None:
        self._fd = _descriptor(None)
        self._asked = asked

    def fileno(self) -> int:
        """Its descriptor, which stays open."""
        return self._fd

    def readable(self) -> bool:
        """It is."""
        return True

    def readinto(self, buffer: "WriteableBuffer") -> int:
        """What is there, as soon as something is; 0 at the end."""
        view = memoryview(buffer).cast("B")
        while not self._asked():
            if select.select([self._fd], [], [], _LOOK_S)[0]:
                data = os.read(self._fd, len(view))
                view[: len(data)] = data
                return len(data)
        return 0


def _descriptor(stream: BinaryIO | None) -> int:
    if stream is None:
        if sys.stdin is None:
            raise InputError("standard input: is closed; pipe raw samples into it")
        stream = sys.stdin.buffer
        if stream.isatty():
            raise InputError("standard input: is a terminal; pipe raw samples into it")
    try:
        return stream.fileno()
    except (OSError, ValueError) as error:
        raise InputError("standard input: is closed; pipe raw samples into it") from error
