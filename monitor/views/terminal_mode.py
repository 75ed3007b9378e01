"""Taking over a terminal and giving it back as it was."""

import contextlib
import copy
import os
import select
import signal
import termios
import threading
import time
from types import FrameType, TracebackType
from typing import Any, Self

from monitor.views.terminal_output import ENTER, LEAVE

_LEAVING_S = 1.0
_IFLAG, _LFLAG, _CC = 0, 3, 6


class Terminal:
    """A terminal in use for pictures and single keys, between `enter` and `leave`; a context.

    ``keys_fd`` may be None, for no keys. Signals still come from Ctrl-C and Ctrl-Z; Ctrl-S and Ctrl-Q are keys like others.
    The output is opened anew without blocking where that can be done, so that a stalled connection stops no one.
    """

    def __init__(self, keys_fd: int | None, out_fd: int) -> None:
        self.keys_fd = keys_fd
        self._given_fd = out_fd
        self.out_fd = out_fd
        self._found: list[Any] | None = None
        self._entered = False

    def __enter__(self) -> Self:
        with contextlib.suppress(OSError):
            self.out_fd = os.open(os.ttyname(self._given_fd), os.O_WRONLY | os.O_NONBLOCK | os.O_NOCTTY)
        try:
            self.enter()
        except BaseException:
            self.__exit__(None, None, None)
            raise
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.leave()
        if self.out_fd != self._given_fd:
            os.close(self.out_fd)
            self.out_fd = self._given_fd

    def enter(self) -> None:
        """Take the terminal; what it was set to is noted now."""
        self._entered = True
        if self.keys_fd is not None:
            self._found = termios.tcgetattr(self.keys_fd)
            wanted = copy.deepcopy(self._found)
            wanted[_IFLAG] &= ~(termios.IXON | termios.ICRNL | termios.INLCR | termios.IGNCR)
            wanted[_LFLAG] &= ~(termios.ICANON | termios.ECHO | termios.ECHONL | termios.IEXTEN)
            wanted[_LFLAG] |= termios.ISIG
            wanted[_CC][termios.VMIN], wanted[_CC][termios.VTIME] = 1, 0
            wanted[_CC][termios.VQUIT] = b"\x00"  # no core dump from a slip of the hand
            _set(self.keys_fd, wanted)
        self._send(ENTER)

    def leave(self) -> None:
        """Give the terminal back; harmless when it is gone or was never taken."""
        if not self._entered:
            return
        self._entered = False
        with contextlib.suppress(OSError):
            self._send(LEAVE)
        if self._found is not None and self.keys_fd is not None:
            with contextlib.suppress(OSError, termios.error):
                _set(self.keys_fd, self._found)
        self._found = None

    def write(self, data: bytes) -> int:
        """Send as much as goes now; returns how many bytes. Raises OSError when the terminal is gone."""
        try:
            return os.write(self.out_fd, data)
        except BlockingIOError:
            return 0

    def read(self) -> bytes:
        """What was typed; empty when the terminal is gone."""
        if self.keys_fd is None:
            return b""
        try:
            return os.read(self.keys_fd, 4096)
        except OSError:
            return b""

    def size(self) -> tuple[int, int]:
        """Columns and rows; 80 x 24 where the terminal does not say."""
        with contextlib.suppress(OSError):
            size = os.get_terminal_size(self.out_fd)
            if size.columns > 0 and size.lines > 0:
                return size.columns, size.lines
        return 80, 24

    def _send(self, data: bytes) -> None:
        end = time.monotonic() + _LEAVING_S
        while data and time.monotonic() < end:
            select.select([], [self.out_fd], [], max(0.0, end - time.monotonic()))
            data = data[self.write(data) :]


def _set(fd: int, attributes: list[Any]) -> None:
    while True:
        try:
            termios.tcsetattr(fd, termios.TCSANOW, attributes)
        except termios.error as error:
            if error.args[:1] != (4,):  # EINTR
                raise
        else:
            return


class Signals:
    """Collects signals for a loop to see, and wakes its `select` through ``fd``; a context of the main thread.

    Elsewhere it collects nothing. A signal that was ignored stays ignored; the handlers before are put back.
    """

    _NUMBERS = (
        signal.SIGINT,
        signal.SIGTERM,
        signal.SIGHUP,
        signal.SIGTSTP,
        signal.SIGCONT,
        signal.SIGWINCH,
    )

    def __init__(self) -> None:
        self._seen: list[int] = []
        self._before: dict[int, Any] = {}
        self.fd, self._pen = os.pipe()
        os.set_blocking(self.fd, False)
        os.set_blocking(self._pen, False)

    def __enter__(self) -> Self:
        if threading.current_thread() is threading.main_thread():
            for number in self._NUMBERS:
                if signal.getsignal(number) not in (signal.SIG_IGN, None):
                    self._before[number] = signal.signal(number, self._note)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)
        os.close(self.fd)
        os.close(self._pen)

    def take(self) -> list[int]:
        """The signals since the last look, oldest first."""
        with contextlib.suppress(BlockingIOError):
            os.read(self.fd, 4096)
        seen, self._seen = self._seen, []
        return seen

    def stop_process(self) -> None:
        """Stop as Ctrl-Z asks; returns when the process is continued."""
        handler = signal.signal(signal.SIGTSTP, signal.SIG_DFL)
        try:
            signal.raise_signal(signal.SIGTSTP)
        finally:
            signal.signal(signal.SIGTSTP, handler)
        self._seen = [number for number in self._seen if number != signal.SIGCONT]

    def _note(self, number: int, frame: FrameType | None) -> None:
        self._seen.append(number)
        with contextlib.suppress(BlockingIOError):
            os.write(self._pen, b"!")
