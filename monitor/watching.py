"""`lidwatch watch`: a live link, its view, its journal and its alarms."""

import argparse
import os
import signal
import sys
import threading
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any, Self

from monitor.arguments import add_journal_options, add_link_options, error_rate, not_negative, positive, whole
from monitor.errors import InputError
from monitor.running import (
    add_capture_options,
    chain_options,
    link_and_limits,
    open_capture,
    open_journal,
    start_fields,
)
from monitor.terminal import SlowStartNotice, say

if TYPE_CHECKING:
    from monitor.sources.stream import LiveSource
    from monitor.watch import Watch

INTERRUPTED = 130
SWITCH_S = 0.0005  # view and chain take turns: with the usual 5 ms each waits for the other at every array operation
VIEWS = ("window", "terminal", "none")


def add_watch_arguments(parser: argparse.ArgumentParser) -> None:
    """The options of the command."""
    parser.add_argument(
        "source", metavar="SOURCE", help="tcp://HOST:PORT, ipc://PATH, audio:NAME, a recording, or - for standard input"
    )
    samples = parser.add_argument_group("the samples")
    samples.add_argument("--rate", type=positive, metavar="HZ", help="sample rate, where the stream does not say it")
    samples.add_argument("--format", metavar="NAME", help="SigMF datatype: cf32, ci16_le, cu8, rf32, ri16_be, ...")
    samples.add_argument(
        "--channels", metavar="N[,N]", help="of a recording or sound card: which channel, or two for --iq"
    )
    samples.add_argument("--iq", action="store_true", help="two channels are I and Q")
    socket = parser.add_argument_group("the socket")
    socket.add_argument("--socket", choices=("sub", "pull"), default="sub", help="ZeroMQ pattern (default sub)")
    socket.add_argument("--bind", action="store_true", help="bind the address instead of connecting to it")
    socket.add_argument("--topic", default="", metavar="TEXT", help="subscribe to messages that begin with this")
    socket.add_argument("--key", type=Path, metavar="FILE", help="own NAME.key_secret: the stream is encrypted (CURVE)")
    socket.add_argument("--server-key", type=Path, metavar="FILE", help="the sender's NAME.key, to connect with --key")
    socket.add_argument(
        "--client-keys", type=Path, metavar="FOLDER", help="NAME.key files of who may connect, with --bind"
    )
    add_link_options(parser)
    measure = parser.add_argument_group("how to watch")
    measure.add_argument(
        "--window", type=whole, metavar="SYMBOLS", help="symbols of a reading (default: two seconds of them)"
    )
    measure.add_argument(
        "--every", type=positive, default=1.0, metavar="S", help="a journal line each so often (default 1)"
    )
    measure.add_argument(
        "--stall", type=positive, default=2.0, metavar="S", help="alarm after so long without samples (default 2)"
    )
    measure.add_argument(
        "--draw-every",
        type=whole,
        default=1,
        metavar="N",
        help="draw one of N traces only, in runs of 256 (default 1: all)",
    )
    measure.add_argument(
        "--target-ber", type=error_rate, default=1e-6, metavar="RATE", help="error rate that the opening is told for"
    )
    measure.add_argument(
        "--pace", type=not_negative, default=1.0, metavar="N", help="of a recording: times real time (default 1)"
    )
    measure.add_argument("--for", dest="for_s", type=positive, metavar="S", help="end by itself after so long")
    out = parser.add_argument_group("output")
    out.add_argument("--view", choices=VIEWS, help="default: a window where there is a display, else the terminal")
    out.add_argument(
        "--painter", choices=("auto", "raster", "opengl"), default="auto", help="what draws the window's eye"
    )
    add_journal_options(parser)
    add_capture_options(parser)
    parser.set_defaults(run=watch)


def watch(parsed: argparse.Namespace) -> int:
    """Run the command on parsed arguments; returns the exit status. Raises MonitorError."""
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    view = parsed.view or _default_view()
    with SlowStartNotice():
        import dsp.chain  # noqa: F401  # the kernels
        from monitor.watch import Watch

        if view == "window":
            # before any thread runs: importing Qt's bindings aborts when another thread imports something meanwhile
            import monitor.views.window  # noqa: F401
    sys.setswitchinterval(SWITCH_S)

    from dataclasses import replace

    from monitor.engine import EngineOptions

    link, rules = link_and_limits(parsed)
    options = EngineOptions(
        window=parsed.window,
        every_s=parsed.every,
        stall_s=parsed.stall,
        rules=rules,
        display=view != "none",
        chain=replace(chain_options(parsed, link), keep_total=False),
    )
    opener = _opener(parsed)
    tell = _Telling(to_view=view != "none")
    capture = open_capture(parsed, tell, live=True)
    with open_journal(parsed, capture, tell) as journal:
        running = Watch(
            opener,
            link.wanted(),
            options,
            keeper=journal,
            source_text=parsed.source,
            start_fields=start_fields(parsed.source, link, rules),
            for_s=parsed.for_s,
            tap=capture,
        )
        tell.attach(running)
        if capture is not None:
            capture.picture = lambda: running.state().snapshot
        for warning in running.warnings:
            say(f"warning: {warning}")
        running.start()
        try:
            with _Asked(noted=view == "window") as asked:
                status = _show(running, view, parsed, asked)
        finally:
            running.stop()
    if running.failure is not None:
        raise running.failure
    return status


class _Telling:
    """Notices of what runs beside the watch: on the view where there is one, else on standard error. Called from any thread."""

    def __init__(self, *, to_view: bool) -> None:
        self._to_view = to_view
        self._running: Watch | None = None

    def attach(self, running: "Watch") -> None:
        """From now on there is a view."""
        self._running = running

    def __call__(self, text: str) -> None:
        if self._to_view and self._running is not None:
            self._running.note(text)
        else:
            say(f"warning: {text}")


class _Asked:
    """The wish for the end by Ctrl-C or by the system: in a window noted, for Qt's loop to look at, else raised as Ctrl-C is."""

    def __init__(self, *, noted: bool) -> None:
        self._noted = noted
        self.yet = False
        self._before: dict[int, Any] = {}

    def __enter__(self) -> Self:
        if threading.current_thread() is threading.main_thread():
            for number in (signal.SIGTERM, signal.SIGINT) if self._noted else (signal.SIGTERM,):
                self._before[number] = signal.signal(number, self._ask)
        return self

    def __exit__(self, *_: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)

    def _ask(self, number: int, frame: object) -> None:
        self.yet = True
        if not self._noted:
            raise KeyboardInterrupt


def _show(running: "Watch", view: str, parsed: argparse.Namespace, asked: _Asked) -> int:
    if view == "window":
        from monitor.views.window import run_window

        def over() -> bool:
            return asked.yet or (parsed.for_s is not None and running.state().ended)

        status = run_window(running, painter=parsed.painter, title=parsed.source, until=over)
        return INTERRUPTED if asked.yet else status
    if view == "terminal":
        from monitor.views.terminal import run_terminal

        return run_terminal(running)
    try:
        running.wait()
    except KeyboardInterrupt:
        return INTERRUPTED
    return 0


def _default_view() -> str:
    display = sys.platform in ("win32", "darwin") or os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY")
    if display:
        return "window"
    return "terminal" if sys.stdout is not None and sys.stdout.isatty() else "none"


def _opener(parsed: argparse.Namespace) -> "Callable[[], LiveSource]":
    """What opens the source, in the thread that will own it."""
    from monitor.arguments import channels
    from monitor.sources import SampleOptions

    picked = channels(parsed.channels) if parsed.channels else None
    samples = SampleOptions(parsed.rate, parsed.format, picked, parsed.iq)
    source: str = parsed.source
    if source.startswith(("tcp://", "ipc://")):
        from monitor.sources.keys import Curve
        from monitor.sources.stream import StreamOptions, open_stream

        if parsed.key is None and (parsed.server_key or parsed.client_keys):
            raise InputError("--server-key and --client-keys go with --key, the own secret key")
        curve = Curve(parsed.key, parsed.server_key, parsed.client_keys) if parsed.key is not None else None
        stream = StreamOptions(parsed.rate, parsed.format, parsed.socket, parsed.bind, parsed.topic, curve)
        return lambda: open_stream(source, stream)
    if source == "-":
        from monitor.sources.stdin import StdinSource

        return lambda: StdinSource(parsed.rate, parsed.format)
    if source.startswith("audio:"):
        from monitor.sources.audio import AudioSource

        return lambda: AudioSource(source, samples)
    from monitor.sources import open_source
    from monitor.sources.paced import PacedSource

    if not parsed.pace:
        raise InputError("--pace 0: a recording without pace is for lidwatch replay")
    return lambda: PacedSource(open_source(source, samples), parsed.pace)
