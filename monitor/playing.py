"""`lidwatch replay --pace`: a recording watched at its own speed, or a multiple of it, before it is measured."""

import argparse
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from monitor.errors import InputError
from monitor.running import chain_options
from monitor.showing import attend, default_view

if TYPE_CHECKING:
    from monitor.alarm_rules import AlarmRule
    from monitor.engine import EngineOptions
    from monitor.linkfile import LinkOptions
    from monitor.sources import SampleOptions
    from monitor.state import LiveState


@dataclass(frozen=True, slots=True)
class Played:
    """What came of it: how much was played, in seconds of the recording (None: all), the alarms, the exit status and the last state."""

    seconds: float | None
    alarms: list[dict[str, Any]]
    status: int
    state: "LiveState"


def check_pace(parsed: argparse.Namespace) -> None:
    """Refuse options that do not go together; raise InputError."""
    if parsed.pace is None:
        if parsed.view is not None:
            raise InputError(f"--view {parsed.view}: a view needs a pace; add --pace 1 for the recording's own speed")
    elif parsed.source == "-":
        raise InputError("--pace: standard input comes at its own speed; take lidwatch watch -")


def play(
    parsed: argparse.Namespace, samples: "SampleOptions", link: "LinkOptions", rules: "tuple[AlarmRule, ...]"
) -> Played:
    """Play the recording with its view, journal and captures until its end or until the user ends it. Raises MonitorError."""
    from monitor.sources import open_source
    from monitor.sources.paced import PacedSource

    view = parsed.view or default_view()
    running, status = attend(
        parsed,
        lambda: PacedSource(open_source(parsed.source, samples), parsed.pace),
        link,
        play_options(parsed, samples, link, rules, display=view != "none"),
        view=view,
        live=False,
        # a window keeps its last picture until it is closed
        until=lambda running: view != "window" and running.state().ended,
    )
    state = running.state()
    return Played(None if running.at_the_end else state.seconds, running.alarms, status, state)


def play_options(
    parsed: argparse.Namespace,
    samples: "SampleOptions",
    link: "LinkOptions",
    rules: "tuple[AlarmRule, ...]",
    *,
    display: bool,
) -> "EngineOptions":
    """How to watch a recording that is played: what is not given of the link is looked for before. Raises MonitorError."""
    from dsp.identify import Identified
    from monitor.engine import EngineOptions
    from monitor.session import look_ahead
    from monitor.sources import open_source

    wanted = link.wanted()
    first = None
    if None in (wanted.scheme, wanted.symbol_rate_hz, wanted.pulse):
        with open_source(parsed.source, samples) as source:
            found = look_ahead(source, wanted)
        first = found if isinstance(found, Identified) else None
    return EngineOptions(
        window=parsed.window,
        every_s=parsed.every,
        rules=rules,
        first=first,
        display=display,
        chain=replace(chain_options(parsed, link), keep_total=False),
    )
