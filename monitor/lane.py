"""A second thread for the eye's share of a chain's work, in order and never far behind."""

import queue
import sys
import threading
from collections.abc import Callable


class ThreadLane:
    """Runs work in one thread of its own; the giver waits when a few pieces are pending. Owned by the thread that made it."""

    def __init__(self, depth: int = 4) -> None:
        self._queue: queue.Queue[Callable[[], None] | None] = queue.Queue(depth)
        self._error: BaseException | None = None
        # the two threads hand the interpreter over between short calls: do not let either wait long for it
        sys.setswitchinterval(min(sys.getswitchinterval(), 5e-4))
        self._thread = threading.Thread(target=self._run, name="eye", daemon=True)
        self._thread.start()

    def do(self, work: Callable[[], None]) -> None:
        """Do ``work`` after everything given before; raises what earlier work raised."""
        self._check()
        self._queue.put(work)

    def wait(self) -> None:
        """Return when everything given is done; raises what it raised."""
        self._queue.join()
        self._check()

    def close(self) -> None:
        """Finish what was given and end the thread."""
        self._queue.put(None)
        self._thread.join()

    def _check(self) -> None:
        if self._error is not None:
            error, self._error = self._error, None
            raise error

    def _run(self) -> None:
        while (work := self._queue.get()) is not None:
            try:
                if self._error is None:
                    work()
            except BaseException as error:  # noqa: BLE001  # handed to the giver, who raises it
                self._error = error
            finally:
                self._queue.task_done()
        self._queue.task_done()
