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
    add_report_option,
    check_output_name,
    error_rate,
    not_negative,
    positive,
    whole,
)
from monitor.errors import InputError
from monitor.links import links_of
from monitor.live_source import add_socket_options, live_opener
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
    add_socket_options(parser)
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
    add_report_option(parser.add_argument_group("output"))
    add_journal_options(parser)
    add_capture_options(parser)
    parser.set_defaults(run=watch)


def watch(parsed: argparse.Namespace) -> int:
    """Run the command on parsed arguments; returns the exit status. Raises MonitorError."""
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    if parsed.report is not None:
        check_output_name("--report", parsed.report, ".html")
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
        display=view != "none" or parsed.report is not None,
        chain=replace(chain_options(parsed, link), keep_total=False),
    )
    running, status = attend(
        parsed,
        _opener(parsed),
        link,
        options,
        view=view,
        live=True,
        for_s=parsed.for_s,
        until=lambda running: parsed.for_s is not None and running.state().ended,
    )
    if parsed.report is not None:
        running.report(Path(parsed.report))
    return status


def _opener(parsed: argparse.Namespace) -> "Callable[[], LiveSource]":
    """What opens the source, in the thread that will own it."""
    from monitor.sources import SampleOptions, open_source
    from monitor.sources.live import is_live
    from monitor.sources.paced import PacedSource

    if is_live(parsed.source):
        return live_opener(parsed)
    if not parsed.pace:
        raise InputError("--pace 0: a recording without pace is for lidwatch replay")
    samples = SampleOptions(parsed.rate, parsed.format, parsed.channels, parsed.iq)
    return lambda: PacedSource(open_source(parsed.source, samples), parsed.pace)
