"""Work beside a live stream, in a process of its own: neither chain nor view wait for Python's lock while it runs."""

import multiprocessing
import os
import signal
import sys
from collections.abc import Callable
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from contextlib import suppress
from multiprocessing.connection import Connection
from typing import Any

_JOIN_S = 2.0


class Beside(Executor):
    """Does one piece of work after the other in a second process; in a thread of this one, where that process is gone.

    Made in the main thread before others run: on Linux the process is forked, and has all that this one has loaded.
    """

    def __init__(self) -> None:
        self._over = False
        self._turns = ThreadPoolExecutor(1, thread_name_prefix="lidwatch beside")
        context: Any = multiprocessing.get_context("fork" if sys.platform == "linux" else "spawn")
        mine, theirs = context.Pipe()
        self._pipe: Connection | None = mine
        self._process = context.Process(target=_serve, args=(theirs, mine), name="lidwatch beside", daemon=True)
        self._process.start()
        theirs.close()

    def submit(self, work: Callable[..., Any], /, *args: Any, **more: Any) -> Future[Any]:  # noqa: ANN401
        """Ask for some work, whose function, arguments and result can be pickled."""
        return self._turns.submit(self._do, work, args, more)

    def _do(self, work: Callable[..., Any], args: Any, more: Any) -> Any:  # noqa: ANN401
        if self._pipe is not None:
            try:
                self._pipe.send((work, args, more))
                good, value = self._pipe.recv()
            except (OSError, EOFError):
                self._pipe = None
            else:
                if good:
                    return value
                raise value
        if self._over:
            raise RuntimeError("the watch is over")
        return work(*args, **more)

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """End the process; what it works at is given up."""
        self._over = True
        self._process.kill()
        self._process.join(_JOIN_S)
        self._turns.shutdown(wait=wait, cancel_futures=cancel_futures)


def _serve(pipe: Connection, other: Connection) -> None:
    """The other process: work until the pipe ends, as it does when the watch is gone, however it went."""
    with suppress(OSError):
        other.close()  # forked with it; while it is open here, the pipe has no end
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP) if os.name == "posix" else (signal.SIGINT,):
        signal.signal(number, signal.SIG_IGN)  # a terminal sends them to all its processes; the watch decides
    with suppress(OSError, AttributeError):
        os.nice(5)  # the stream goes first
    while True:
        try:
            work, args, more = pipe.recv()
        except (EOFError, OSError):
            return
        try:
            answer: tuple[bool, Any] = True, work(*args, **more)
        except Exception as error:  # noqa: BLE001  # it is raised where the work was asked for
            answer = False, error
        try:
            pipe.send(answer)
        except (BrokenPipeError, ConnectionResetError):
            return
