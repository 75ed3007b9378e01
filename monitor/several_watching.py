"""`lidwatch watch` with several links."""

import argparse
import threading
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

from monitor.errors import InputError, MonitorError
from monitor.links import LinkArguments, file_name, name_links
from monitor.running import chain_options, link_and_limits, open_capture, open_journal, start_fields
from monitor.shared_journal import ByLink, LinkJournal
from monitor.showing import INTERRUPTED, Asked, Telling, default_view, prepared
from monitor.terminal import say

if TYPE_CHECKING:
    from monitor.alarm_rules import AlarmRule
    from monitor.beside import Beside
    from monitor.capture import Capture
    from monitor.engine import EngineOptions
    from monitor.linkfile import LinkOptions
    from monitor.several import SeveralWatches
    from monitor.snapshot import Snapshot
    from monitor.sources.stream import LiveSource
    from monitor.watch import Watch


@dataclass(frozen=True, slots=True)
class NamedLink:
    """One link of several: its arguments, what is known of it, its limits and its name."""

    arguments: LinkArguments
    options: "LinkOptions"
    rules: "tuple[AlarmRule, ...]"
    name: str


def named_links(several: Sequence[LinkArguments]) -> tuple[NamedLink, ...]:
    """Read the link files and name the links. Raises InputError."""
    read = [link_and_limits(one.parsed) for one in several]
    labels = [one.label for one in several]
    names = name_links([link.name or "" for link, _ in read], labels)
    return tuple(
        NamedLink(one, replace(link, name=name), rules, name)
        for one, (link, rules), name in zip(several, read, names, strict=True)
    )


def open_captures(
    parsed: argparse.Namespace, links: Sequence[NamedLink], tell: Callable[[str], None], *, live: bool
) -> "list[Capture | None]":
    """What writes the captures of each link, into a folder of its own inside the one asked for. Raises InputError."""
    if parsed.capture is None:
        return [None] * len(links)
    folder: Path = parsed.capture
    if not folder.parent.is_dir():
        raise InputError(f"--capture {folder}: there is no folder {folder.parent}; make it first")
    try:
        folder.mkdir(exist_ok=True)
    except OSError as error:
        raise InputError(f"--capture {folder}: {error.strerror or error}; give another folder") from None
    captures: list[Capture | None] = []
    for link in links:
        own = argparse.Namespace(**{**vars(link.arguments.parsed), "capture": folder / file_name(link.name)})
        captures.append(open_capture(own, tell, live=live))
    return captures


def watch_several(
    parsed: argparse.Namespace,
    several: Sequence[LinkArguments],
    opener: "Callable[[argparse.Namespace], Callable[[], LiveSource]]",
) -> int:
    """Watch several links in one view with one journal; returns the exit status. Raises MonitorError before the watch begins.

    ``opener`` gives what opens the source of one link's arguments.
    """
    from monitor.engine import EngineOptions

    view = parsed.view or default_view()

    def options_of(link: NamedLink) -> EngineOptions:
        own = link.arguments.parsed
        return EngineOptions(
            window=own.window,
            every_s=own.every,
            stall_s=own.stall,
            rules=link.rules,
            display=view != "none" or parsed.report is not None,
            chain=replace(chain_options(own, link.options), keep_total=False),
        )

    running, status = attend_several(
        parsed,
        named_links(several),
        opener,
        options_of,
        view=view,
        live=True,
        for_s=parsed.for_s,
        until=lambda running: parsed.for_s is not None and running.over,
    )
    if parsed.report is not None:
        running.report_each(Path(parsed.report))
    return status or max((error.exit_status for _, error in running.failures), default=0)


def attend_several(
    parsed: argparse.Namespace,
    links: Sequence[NamedLink],
    opener: "Callable[[argparse.Namespace], Callable[[], LiveSource]]",
    options_of: "Callable[[NamedLink], EngineOptions]",
    *,
    view: str,
    live: bool,
    for_s: float | None = None,
    until: "Callable[[SeveralWatches], bool]",
) -> "tuple[SeveralWatches, int]":
    """What `monitor.showing.attend` does for one link, for several; an error that ends one of them is told, not raised."""
    from monitor.sources.live import is_live

    with prepared(view, beside=live and any(is_live(link.arguments.parsed.source) for link in links)) as beside:
        return _attend(parsed, links, opener, options_of, beside, view, live, for_s, until)


def _attend(
    parsed: argparse.Namespace,
    links: Sequence[NamedLink],
    opener: "Callable[[argparse.Namespace], Callable[[], LiveSource]]",
    options_of: "Callable[[NamedLink], EngineOptions]",
    beside: "Beside | None",
    view: str,
    live: bool,
    for_s: float | None,
    until: "Callable[[SeveralWatches], bool]",
) -> "tuple[SeveralWatches, int]":
    from monitor.several import SeveralWatches

    tell = Telling(to_view=view != "none")
    captures = open_captures(parsed, links, tell, live=live)
    sink = ByLink({link.name: own for link, own in zip(links, captures, strict=True) if own is not None})
    with open_journal(parsed, sink, tell, links=True) as journal:
        lock = threading.Lock()
        watches: list[tuple[str, Watch]] = []
        try:
            for link, capture, open_source in zip(links, captures, _openers(links, opener), strict=True):
                keeper = LinkJournal(journal, link.name, lock)
                options = options_of(link)
                watches.append((link.name, _watch(link, options, open_source, keeper, capture, for_s, beside)))
        except BaseException:
            for _, watch in watches:
                watch.abandon()
            raise
        running = SeveralWatches(watches)
        tell.attach(running)
        running.start()
        told: set[str] = set()

        def say_failure(name: str, error: MonitorError) -> None:
            told.add(name)
            say(f"lidwatch: {name}: {error}")

        try:
            with Asked(noted=view == "window") as asked:
                status = _show(running, view, parsed, asked, say_failure, lambda: until(running))
        finally:
            running.stop()
    for name, error in running.failures:
        if name not in told:
            say_failure(name, error)
    return running, status


def _watch(
    link: NamedLink,
    options: "EngineOptions",
    open_source: "Callable[[], LiveSource]",
    keeper: LinkJournal,
    capture: "Capture | None",
    for_s: float | None,
    beside: "Beside | None",
) -> "Watch":
    from monitor.watch import Watch

    source = link.arguments.parsed.source
    watch = Watch(
        open_source,
        link.options.wanted(),
        options,
        keeper=keeper,
        source_text=source,
        start_fields=start_fields(source, link.options, link.rules),
        for_s=for_s,
        tap=capture,
        beside=beside,
    )
    if capture is not None:
        capture.picture = _picture_of(watch)
    for warning in watch.warnings:
        say(f"warning: {link.name}: {warning}")
    return watch


def _picture_of(watch: "Watch") -> "Callable[[], Snapshot | None]":
    return lambda: watch.state().snapshot


def _openers(
    links: Sequence[NamedLink], opener: "Callable[[argparse.Namespace], Callable[[], LiveSource]]"
) -> "list[Callable[[], LiveSource]]":
    """What opens each link's source; links in the same samples share one, as do two channels of one sound card."""
    from functools import partial

    from monitor.sources.fan import Fan

    several = [link.arguments for link in links]
    openers: list[Callable[[], LiveSource]] = []
    fans: dict[int | str, Fan] = {}
    taken: Counter[int | str] = Counter()
    sharing = Counter(_shared(one) for one in several)
    for one in several:
        share = _shared(one)
        if sharing[share] == 1:
            openers.append(opener(one.parsed))
            continue
        whole = _whole_card(several, one)
        if share not in fans:
            fans[share] = Fan(opener(whole), sharing[share])
        branch = partial(fans[share].branch, taken[share])
        taken[share] += 1
        if isinstance(share, int):
            openers.append(branch)
        else:
            openers.append(partial(_rail, branch, whole.channels.index(one.parsed.channels[0])))
    return openers


def _shared(one: LinkArguments) -> int | str:
    """What links that share a source have in common: the number of their stream, or the sound card of which each is a channel."""
    own = one.parsed
    card = own.source.startswith("audio:") and own.channels is not None and not own.iq
    return str(own.source) if card else one.stream


def _whole_card(several: Sequence[LinkArguments], one: LinkArguments) -> argparse.Namespace:
    """The arguments that open what links share: of a sound card its two channels at once, as many systems open it only once."""
    share = _shared(one)
    if isinstance(share, int):
        return one.parsed
    channels = sorted({other.parsed.channels[0] for other in several if _shared(other) == share})
    if len(channels) != sum(_shared(other) == share for other in several) or len(channels) != 2:
        raise InputError(f"{share}: of one sound card two different channels can be two links, and no more")
    return argparse.Namespace(**{**vars(one.parsed), "channels": tuple(channels), "iq": True})


def _rail(branch: "Callable[[], LiveSource]", rail: int) -> "LiveSource":
    from monitor.sources.audio import END_STOP
    from monitor.sources.rails import RailSource

    return RailSource(branch(), 1 if rail else 0, end_stop=END_STOP)


def _show(
    running: "SeveralWatches",
    view: str,
    parsed: argparse.Namespace,
    asked: Asked,
    failed: Callable[[str, MonitorError], None],
    over: Callable[[], bool],
) -> int:
    if view == "window":
        from monitor.views.tile_window import run_tiles

        title = f"lidwatch: {len(running.several().links)} links"
        status = run_tiles(running, painter=parsed.painter, title=title, until=lambda: asked.yet or over())
        return INTERRUPTED if asked.yet else status
    if view == "terminal":
        from monitor.views.terminal_tiles import run_terminal_tiles

        return run_terminal_tiles(running, until=over)
    try:
        running.wait(failed)
    except KeyboardInterrupt:
        return INTERRUPTED
    return 0
