"""What a run says on standard error while it goes on."""

import sys
import threading
from types import TracebackType
from typing import TYPE_CHECKING, Self

from monitor.errors import printable

if TYPE_CHECKING:
    from rich.progress import Progress

_SLOW_START_S = 2.0


class ProgressBar:
    """A bar with rate and time left, where standard error is a terminal; elsewhere nothing."""

    def __init__(self, total: int | None) -> None:
        self._total = total
        self._bar: Progress | None = None

    def __enter__(self) -> Self:
        if not on_terminal():
            return self
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn, TimeRemainingColumn

        known = self._total is not None
        self._bar = Progress(
            TextColumn("{task.description}"),
            BarColumn(),
            TextColumn("{task.percentage:3.0f} %" if known else "{task.completed} samples"),
            TextColumn("{task.fields[speed]}"),
            TimeRemainingColumn() if known else TimeElapsedColumn(),
            TextColumn("left" if known else ""),
            console=Console(stderr=True),
            transient=True,
        )
        self._task = self._bar.add_task("looking for the link", total=self._total, speed="")
        self._bar.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._bar is not None:
            self._bar.stop()

    def advance(self, samples: int) -> None:
        """So many samples are done."""
        if self._bar is None:
            return
        self._bar.update(self._task, description="measuring", completed=samples)
        speed = self._bar.tasks[0].speed
        if speed:
            words = f"{speed / 1e6:.2f} Msample/s" if speed >= 1e5 else f"{speed / 1e3:.2f} ksample/s"
            self._bar.update(self._task, speed=words)


class SlowStartNotice:
    """Says after some seconds why nothing happens yet: the first run on a machine compiles the loops."""

    def __init__(self, after_s: float = _SLOW_START_S) -> None:
        self._timer = threading.Timer(
            after_s, say, ("lidwatch: starting; the first run compiles its loops for this machine, some ten seconds",)
        )
        self._timer.daemon = True

    def __enter__(self) -> None:
        if on_terminal():
            self._timer.start()

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._timer.cancel()


def on_terminal() -> bool:
    """Whether a person sees standard error."""
    return sys.stderr is not None and sys.stderr.isatty()


def say(text: str) -> None:
    """One line on standard error, if there is one: never on standard output, which may be somebody's data."""
    if sys.stderr is None:
        return
    try:
        sys.stderr.write(printable(text) + "\n")
        sys.stderr.flush()
    except UnicodeError:
        sys.stderr.write(printable(text).encode("ascii", "backslashreplace").decode("ascii") + "\n")
    except (OSError, ValueError):
        return  # nobody is there to be told
