"""A watch and its view: which one, what it is told, and how it ends."""

import argparse
import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager, nullcontext
from typing import TYPE_CHECKING, Any, Protocol, Self

from monitor.running import open_capture, open_journal, start_fields
from monitor.terminal import say

if TYPE_CHECKING:
    from monitor.beside import Beside
    from monitor.engine import EngineOptions
    from monitor.linkfile import LinkOptions
    from monitor.sources.stream import LiveSource
    from monitor.watch import Watch

INTERRUPTED = 130
VIEWS = ("window", "terminal", "none")
SWITCH_S = 0.0005  # view and chain take turns: with the usual 5 ms each waits for the other at every array operation


class Noting(Protocol):
    """What shows notes on its view."""

    def note(self, text: str) -> None:
        """Something the user should see."""
        ...


class Telling:
    """Notices of what runs beside the watch: on the view where there is one, else on standard error. Called from any thread."""

    def __init__(self, *, to_view: bool) -> None:
        self._to_view = to_view
        self._running: Noting | None = None

    def attach(self, running: Noting) -> None:
        """From now on there is a view."""
        self._running = running

    def __call__(self, text: str) -> None:
        """Tell one line."""
        if self._to_view and self._running is not None:
            self._running.note(text)
        else:
            say(f"warning: {text}")


class Asked:
    """The wish for the end by Ctrl-C or by the system: in a window noted, for Qt's loop to look at, else raised as Ctrl-C is."""

    def __init__(self, *, noted: bool) -> None:
        self._noted = noted
        self.yet = False
        self._before: dict[int, Any] = {}

    def __enter__(self) -> Self:
        if threading.current_thread() is threading.main_thread():
            numbers = [signal.SIGTERM, signal.SIGINT] if self._noted else [signal.SIGTERM]
            if hasattr(signal, "SIGHUP") and signal.getsignal(signal.SIGHUP) == signal.SIG_DFL:
                numbers.append(signal.SIGHUP)  # who wants the watch to outlive the terminal has it ignored, or caught
            for number in numbers:
                self._before[number] = signal.signal(number, self._ask)
        return self

    def __exit__(self, *_: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)

    def _ask(self, number: int, frame: object) -> None:
        self.yet = True
        if not self._noted:
            raise KeyboardInterrupt


def add_view_options(parser: argparse.ArgumentParser) -> None:
    """Which view."""
    group = parser.add_argument_group("the view")
    group.add_argument("--view", choices=VIEWS, help="default: a window where there is a display, else the terminal")
    group.add_argument(
        "--painter", choices=("auto", "raster", "opengl"), default="auto", help="what draws the window's eye"
    )


def attend(
    parsed: argparse.Namespace,
    opener: "Callable[[], LiveSource]",
    link: "LinkOptions",
    options: "EngineOptions",
    *,
    view: str,
    live: bool,
    for_s: float | None = None,
    until: "Callable[[Watch], bool]",
) -> "tuple[Watch, int]":
    """Watch a source with its view, journal and captures, from the main thread, until it is over; the watch and the exit status.

    ``live``: the samples are of this moment. ``until``: asked at each look whether to end though the view stands. Raises MonitorError.
    """
    from monitor.sources.live import is_live

    with prepared(view, beside=live and is_live(parsed.source)) as beside:
        running, status = _attend(parsed, opener, link, options, beside, view, live, for_s, until)
    if running.failure is not None:
        raise running.failure
    return running, status


@contextmanager
def prepared(view: str, *, beside: bool) -> "Iterator[Beside | None]":
    """What takes long is made ready before the first sample comes: the second process, the screen. Raises MonitorError."""
    import dsp.identify  # noqa: F401  # the forked process has it then
    from monitor.beside import Beside

    with Beside() if beside else nullcontext() as process:
        if view == "window":
            from monitor.views.window import prepare_screen

            prepare_screen()
        sys.setswitchinterval(SWITCH_S)
        yield process


def _attend(
    parsed: argparse.Namespace,
    opener: "Callable[[], LiveSource]",
    link: "LinkOptions",
    options: "EngineOptions",
    beside: "Beside | None",
    view: str,
    live: bool,
    for_s: float | None,
    until: "Callable[[Watch], bool]",
) -> "tuple[Watch, int]":
    from monitor.watch import Watch

    tell = Telling(to_view=view != "none")
    capture = open_capture(parsed, tell, live=live)
    with open_journal(parsed, capture, tell) as journal:
        running = Watch(
            opener,
            link.wanted(),
            options,
            keeper=journal,
            source_text=parsed.source,
            start_fields=start_fields(parsed.source, link, options.rules),
            for_s=for_s,
            tap=capture,
            tell=tell if view == "none" else None,
            beside=beside,
        )
        tell.attach(running)
        if capture is not None:
            capture.picture = lambda: running.state().snapshot
        for warning in running.warnings:
            say(f"warning: {warning}")
        running.start()
        try:
            with Asked(noted=view == "window") as asked:
                status = _show(running, view, parsed, asked, lambda: until(running))
        finally:
            running.stop()
    return running, status


def _show(running: "Watch", view: str, parsed: argparse.Namespace, asked: Asked, until: Callable[[], bool]) -> int:
    if view == "window":
        from monitor.views.window import run_window

        status = run_window(running, painter=parsed.painter, title=parsed.source, until=lambda: asked.yet or until())
        return INTERRUPTED if asked.yet else status
    if view == "terminal":
        from monitor.views.terminal import run_terminal

        return run_terminal(running, until=until)
    try:
        running.wait()
    except KeyboardInterrupt:
        return INTERRUPTED
    return 0


def default_view() -> str:
    """A window where there is a display, the terminal where there is one, else none."""
    display = sys.platform in ("win32", "darwin") or os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY")
    if display:
        return "window"
    return "terminal" if sys.stdout is not None and sys.stdout.isatty() else "none"
