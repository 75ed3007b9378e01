"""A program of the user's that is run for each alarm."""

import os
import queue
import shlex
import shutil
import signal
import subprocess
import threading
import time
from collections.abc import Callable, Mapping
from contextlib import suppress
from typing import Any, Final

from monitor.errors import InputError, printable

_MOST_WAITING: Final = 100
_STATES: Final = ("raised", "cleared")


class AlarmCommand:
    """Runs a program for each alarm raised and cleared, with the journal's line as JSON on its standard input.

    Never makes the caller wait. A sink of `monitor.journal`. The program is run as it is, by no shell: what a shell is for (pipes,
    variables, ``>``) goes into ``sh -c '...'``. Its output is thrown away. It gets a process group of its own, so that Ctrl-C does not
    reach it, and when its time is over the whole group is killed.

    Parameters
    ----------
    command
        Program and arguments as one text, quoted as for a POSIX shell.
    failed
        Is told in one line what went wrong: not started, a status other than 0, out of time, too many waiting. Called from a thread of
        its own.
    timeout_s
        How long one run may take.
    most
        How many may run at the same time; 100 more wait, what comes beyond is not run.

    Raises
    ------
    InputError
        The command cannot be read, or there is no such program.
    """

    def __init__(self, command: str, *, failed: Callable[[str], None], timeout_s: float = 30.0, most: int = 4) -> None:
        where = f"--on-alarm {command!r}"
        try:
            self._arguments = shlex.split(command)
        except ValueError as error:
            raise InputError(f"{where}: {error}; check the quotes") from None
        if not self._arguments:
            raise InputError(f"{where}: is empty; give a program and its arguments")
        if "\0" in command or shutil.which(self._arguments[0]) is None:
            raise InputError(
                f"{where}: there is no program {self._arguments[0]!r}; check its path and that it may be run"
            )
        self._name = printable(self._arguments[0])
        self._failed = failed
        self._timeout_s = timeout_s
        self._most = most
        self._queue: queue.Queue[bytes | None] = queue.Queue(_MOST_WAITING)
        self._lock = threading.Lock()
        self._running: set[subprocess.Popen[bytes]] = set()
        self._threads: list[threading.Thread] = []
        self._unfinished = 0
        self._closing = self._stopped = False

    def take(self, record: Mapping[str, Any], line: bytes) -> None:
        """Run the program, if this is an alarm that was raised or cleared."""
        if record.get("kind") != "alarm" or record.get("state") not in _STATES or self._closing:
            return
        try:
            self._queue.put_nowait(line + b"\n")
        except queue.Full:
            self._failed(f"on-alarm program {self._name}: not run: {_MOST_WAITING} alarms wait for it already")
            return
        with self._lock:
            self._unfinished += 1
            if self._unfinished > len(self._threads) < self._most:
                thread = threading.Thread(target=self._work, name="on-alarm", daemon=True)
                self._threads.append(thread)
                thread.start()

    def close(self, grace_s: float = 5.0) -> None:
        """Let the programs that run or wait come to their end for so long, then kill them."""
        if self._closing:
            return
        self._closing = True
        deadline = time.monotonic() + grace_s
        for _ in self._threads:
            with suppress(queue.Full):
                self._queue.put(None, timeout=max(deadline - time.monotonic(), 0.0))
        for thread in self._threads:
            thread.join(max(deadline - time.monotonic(), 0.0))
        self._stopped = True
        left = 0
        while True:
            try:
                left += self._queue.get_nowait() is not None
            except queue.Empty:
                break
        with self._lock:
            for process in self._running:
                _kill(process)
        for thread in self._threads:
            thread.join(1.0)
        if left:
            self._failed(f"on-alarm program {self._name}: not run for {left} more, the watch has ended")

    def _work(self) -> None:
        while not self._stopped:
            try:
                # looks up now and then, should the end be asked for with the queue full
                line = self._queue.get(timeout=1.0)
            except queue.Empty:
                continue
            if line is None:
                return
            try:
                self._run(line)
            finally:
                with self._lock:
                    self._unfinished -= 1

    def _run(self, line: bytes) -> None:
        try:
            process = subprocess.Popen(
                self._arguments,
                stdin=subprocess.PIPE,
                stdout=subprocess.DEVNULL,
                stderr=subprocess.DEVNULL,
                start_new_session=True,
            )
        except (OSError, ValueError) as error:
            why = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
            self._failed(f"on-alarm program {self._name}: not started: {why}")
            return
        with self._lock:
            self._running.add(process)
            if self._stopped:
                _kill(process)
        try:
            process.communicate(line, timeout=self._timeout_s)
        except subprocess.TimeoutExpired:
            _kill(process)
            process.communicate()
            self._failed(f"on-alarm program {self._name}: killed after {self._timeout_s:g} s")
        else:
            if process.returncode:
                self._failed(f"on-alarm program {self._name}: {_ended(process.returncode)}")
        finally:
            with self._lock:
                self._running.discard(process)


def _kill(process: "subprocess.Popen[bytes]") -> None:
    """Kill the program and what it started; only one of ours that still runs."""
    with suppress(OSError):
        if hasattr(os, "killpg") and process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
        else:
            process.kill()


def _ended(status: int) -> str:
    if status > 0:
        return f"ended with status {status}"
    try:
        return f"ended by {signal.Signals(-status).name}"
    except ValueError:
        return f"ended by signal {-status}"
