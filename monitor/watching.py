"""`lidwatch watch`: a live link, its view, its journal and its alarms."""

import argparse
import os
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

from monitor.arguments import (
    add_form_options,
    add_journal_options,
    add_link_options,
    error_rate,
    not_negative,
    positive,
    whole,
)
from monitor.errors import InputError
from monitor.links import links_of
from monitor.running import add_capture_options, chain_options, link_and_limits
from monitor.showing import add_view_options, attend, default_view
from monitor.terminal import SlowStartNotice

if TYPE_CHECKING:
    from monitor.sources.stream import LiveSource


def add_watch_arguments(parser: argparse.ArgumentParser) -> None:
    """The options of the command."""
    parser.add_argument(
        "source",
        nargs="+",
        metavar="SOURCE",
        help="tcp://HOST:PORT, ipc://PATH, audio:NAME, a recording, or - for standard input; each is a link",
    )
    add_form_options(parser.add_argument_group("the samples"))
    socket = parser.add_argument_group("the socket")
    socket.add_argument("--socket", choices=("sub", "pull"), default="sub", help="ZeroMQ pattern (default sub)")
    socket.add_argument("--bind", action="store_true", help="bind the address instead of connecting to it")
    socket.add_argument("--topic", action="append", metavar="TEXT", help="subscribe to messages that begin with this")
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
    add_view_options(parser)
    add_journal_options(parser)
    add_capture_options(parser)
    parser.set_defaults(run=watch)


def watch(parsed: argparse.Namespace) -> int:
    """Run the command on parsed arguments; returns the exit status. Raises MonitorError."""
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    links = links_of(parsed)
    with SlowStartNotice():
        import dsp.chain  # noqa: F401  # the kernels

    if len(links) > 1:
        from monitor.several_watching import watch_several

        return watch_several(parsed, links, _opener)
    parsed = links[0].parsed
    view = parsed.view or default_view()

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
    _, status = attend(
        parsed,
        _opener(parsed),
        link,
        options,
        view=view,
        live=True,
        for_s=parsed.for_s,
        until=lambda running: parsed.for_s is not None and running.state().ended,
    )
    return status


def _opener(parsed: argparse.Namespace) -> "Callable[[], LiveSource]":
    """What opens the source, in the thread that will own it."""
    from monitor.sources import SampleOptions

    samples = SampleOptions(parsed.rate, parsed.format, parsed.channels, parsed.iq)
    source: str = parsed.source
    if source.startswith(("tcp://", "ipc://")):
        from monitor.sources.keys import Curve
        from monitor.sources.stream import StreamOptions, open_stream

        if parsed.key is None and (parsed.server_key or parsed.client_keys):
            raise InputError("--server-key and --client-keys go with --key, the own secret key")
        curve = Curve(parsed.key, parsed.server_key, parsed.client_keys) if parsed.key is not None else None
        stream = StreamOptions(parsed.rate, parsed.format, parsed.socket, parsed.bind, parsed.topic or "", curve)
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
