"""What replay and watch make of the same arguments: the link, its limits, the journal."""

import argparse
import platform
from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from monitor.arguments import not_negative, whole
from monitor.terminal import say
from monitor.version import version

if TYPE_CHECKING:
    from dsp.chain import ChainOptions
    from monitor.alarm_rules import AlarmRule
    from monitor.capture import Capture
    from monitor.journal import Journal, Sink
    from monitor.linkfile import LinkOptions


def link_and_limits(parsed: argparse.Namespace) -> "tuple[LinkOptions, tuple[AlarmRule, ...]]":
    """The link as typed over the link file, and the file's alarm rules. Raises InputError."""
    from monitor.linkfile import LinkOptions, read_link_file

    typed = LinkOptions(
        parsed.symbol_rate,
        None if parsed.scheme == "auto" else parsed.scheme,
        None if parsed.pulse == "auto" else parsed.pulse,
        parsed.carrier,
        None if parsed.timing == "auto" else parsed.timing,
        parsed.loop_bandwidth,
    )
    if parsed.link is None:
        return typed, ()
    from monitor.alarm_rules import parse_rules

    file = read_link_file(parsed.link)
    return typed.over(file.link), parse_rules(file.alarms, where=f"link file {parsed.link}")


def chain_options(parsed: argparse.Namespace, link: "LinkOptions") -> "ChainOptions":
    """How the chain measures; the window is the caller's to set."""
    from dsp.chain import ChainOptions

    options = ChainOptions(detector=link.timing, every=parsed.draw_every, target_ber=parsed.target_ber)
    if link.loop_bandwidth is None:
        return options
    from dataclasses import replace

    return replace(options, timing_bandwidth=link.loop_bandwidth)


def add_capture_options(parser: argparse.ArgumentParser) -> None:
    """Samples and picture of each alarm."""
    group = parser.add_argument_group("captures")
    group.add_argument(
        "--capture", type=Path, metavar="FOLDER", help="for each alarm the samples around it (SigMF) and the picture"
    )
    group.add_argument(
        "--capture-before", type=not_negative, default=2.0, metavar="S", help="seconds before the alarm (default 2)"
    )
    group.add_argument(
        "--capture-after", type=not_negative, default=2.0, metavar="S", help="seconds after the alarm (default 2)"
    )
    group.add_argument(
        "--capture-most", type=whole, default=100, metavar="N", help="no more than so many captures (default 100)"
    )


def open_capture(parsed: argparse.Namespace, tell: Callable[[str], None], *, live: bool) -> "Capture | None":
    """What writes the captures, if they are wanted. Raises InputError."""
    if parsed.capture is None:
        return None
    from monitor.capture import Capture

    return Capture(
        parsed.capture,
        before_s=parsed.capture_before,
        after_s=parsed.capture_after,
        most=parsed.capture_most,
        tell=tell,
        now=(lambda: datetime.now(UTC)) if live else None,
    )


def open_journal(
    parsed: argparse.Namespace,
    capture: "Sink | None" = None,
    tell: Callable[[str], None] | None = None,
    *,
    links: bool = False,
) -> "Journal":
    """The journal with all that listens to it; ``tell`` is given what goes wrong with it later on. Raises InputError.

    ``links``: it is for several links.
    """
    from monitor.journal import Journal, Rotation

    tell = tell or _warn
    sinks: list[Sink] = []
    try:
        if capture is not None:
            sinks.append(capture)
        if parsed.publish is not None:
            from monitor.publisher import Publisher

            publisher = Publisher(parsed.publish)
            sinks.append(publisher)
            for note in publisher.notes:
                _warn(note)
        if parsed.on_alarm is not None:
            from monitor.alarm_command import AlarmCommand

            sinks.append(AlarmCommand(parsed.on_alarm, failed=tell))
        rotation = Rotation(parsed.rotate_size, parsed.rotate_daily)
        return Journal(parsed.journal, now=lambda: datetime.now(UTC), rotation=rotation, sinks=sinks, links=links)
    except BaseException:
        for sink in sinks:
            sink.close()
        raise


def _warn(text: str) -> None:
    say(f"warning: {text}")


def start_fields(source: str, link: "LinkOptions", rules: "tuple[AlarmRule, ...]") -> Mapping[str, Any]:
    """The first journal line's fields."""
    return {
        "version": version(),
        "host": platform.node(),
        "source": source,
        "link": {name: getattr(link, name) for name in link.__slots__},
        "limits": [rule.text for rule in rules],
    }
