"""What replay and watch make of the same arguments: the link, its limits, the journal."""

import argparse
import platform
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any

from monitor.terminal import say
from monitor.version import version

if TYPE_CHECKING:
    from dsp.chain import ChainOptions
    from monitor.alarm_rules import AlarmRule
    from monitor.journal import Journal
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


def open_journal(parsed: argparse.Namespace) -> "Journal":
    """The journal with all that listens to it. Raises InputError."""
    from monitor.journal import Journal, Rotation, Sink

    sinks: list[Sink] = []
    if parsed.publish is not None:
        from monitor.publisher import Publisher

        publisher = Publisher(parsed.publish)
        for note in publisher.notes:
            say(f"warning: {note}")
        sinks.append(publisher)
    if parsed.on_alarm is not None:
        from monitor.alarm_command import AlarmCommand

        sinks.append(AlarmCommand(parsed.on_alarm, failed=lambda text: say(f"warning: {text}")))
    rotation = Rotation(parsed.rotate_size, parsed.rotate_daily)
    return Journal(parsed.journal, now=lambda: datetime.now(UTC), rotation=rotation, sinks=sinks)


def start_fields(source: str, link: "LinkOptions", rules: "tuple[AlarmRule, ...]") -> Mapping[str, Any]:
    """The first journal line's fields."""
    return {
        "version": version(),
        "host": platform.node(),
        "source": source,
        "link": {name: getattr(link, name) for name in link.__slots__},
        "limits": [rule.text for rule in rules],
    }
