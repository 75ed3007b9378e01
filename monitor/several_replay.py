"""`lidwatch replay` of several links: measured side by side, told together."""

import argparse
import threading
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO, cast

from monitor.document import json_text, links_document, text
from monitor.errors import MonitorError, NothingToMeasure, printable
from monitor.interrupt import Interrupt, Stoppable
from monitor.judging import Judged
from monitor.links import LinkArguments, named_file
from monitor.playing import Played, check_pace, play_options
from monitor.replay import tell
from monitor.running import chain_options, open_journal
from monitor.session import Outcome, run
from monitor.several_watching import NamedLink, attend_several, named_links, open_captures
from monitor.shared_journal import ByLink, LinkJournal
from monitor.showing import default_view
from monitor.snapshot import Snapshot
from monitor.sources import SampleOptions, Source, open_source
from monitor.sources.opening import is_stream
from monitor.sources.stdin import StdinUntil
from monitor.sources.tee import Tee
from monitor.state import LiveState
from monitor.terminal import ProgressBar, say
from monitor.views.wording import plain

if TYPE_CHECKING:
    from monitor.capture import Capture
    from monitor.document import Json
    from monitor.engine import EngineOptions
    from monitor.journal import Journal, Keeper
    from monitor.sources.stream import LiveSource

LIMIT_BROKEN, NOTHING, INTERRUPTED = 1, 3, 130


@dataclass
class LinkOutcome:
    """What came of one link: its outcome, with the course of it where it was judged, or the error that ended it."""

    name: str
    outcome: Outcome | None = None
    state: LiveState | None = None
    failure: MonitorError | None = None

    @property
    def opening_pct(self) -> float | None:
        """Its opening; None where there is none."""
        reading = self.outcome.reading if self.outcome is not None else None
        return reading.opening_pct if reading is not None else None


def replay_several(parsed: argparse.Namespace, several: Sequence[LinkArguments]) -> int:
    """Measure several links, after playing them where a pace is asked for, and tell of them; returns the exit status.

    Raises MonitorError.
    """
    for one in several:
        check_pace(one.parsed)
    links = named_links(several)
    played = play_several(parsed, links) if parsed.pace is not None else None
    found, status = measure_links(parsed, links, played)
    for link in found:
        if link.failure is not None:
            say(f"lidwatch: {link.name}: {link.failure}")
    tell([json_text(_document(found))] if parsed.json else list(_text(found)))
    if parsed.picture is not None:
        _save_picture(parsed, found)
    if parsed.report is not None:
        _save_reports(parsed, links, found)
    if status == NOTHING:
        for link in found:
            if link.outcome is not None and not link.outcome.measured:
                say(f"lidwatch: {link.name}: nothing to measure: {link.outcome.reason}")
    return status


def play_several(parsed: argparse.Namespace, links: Sequence[NamedLink]) -> list[Played]:
    """Play the recordings side by side with their view, journal and captures, until all end or the user ends them. Raises MonitorError."""
    from monitor.sources.paced import PacedSource

    view = parsed.view or default_view()

    def opener(own: argparse.Namespace) -> "Callable[[], LiveSource]":
        return lambda: PacedSource(_opened(own), own.pace)

    def options_of(link: NamedLink) -> "EngineOptions":
        own = link.arguments.parsed
        return play_options(own, _samples(own), link.options, link.rules, display=view != "none")

    running, status = attend_several(
        parsed,
        links,
        opener,
        options_of,
        view=view,
        live=False,
        # a window keeps its last picture until it is closed
        until=lambda running: view != "window" and running.over,
    )
    return [
        Played(None if watch.at_the_end else watch.state().seconds, watch.alarms, status, watch.state())
        for watch in running.watches
    ]


def _document(found: Sequence[LinkOutcome]) -> "dict[str, Json]":
    return links_document(
        [(link.name, link.outcome, "" if link.failure is None else str(link.failure)) for link in found]
    )


def _text(found: Sequence[LinkOutcome]) -> Iterator[str]:
    for number, link in enumerate(found):
        if number:
            yield ""
        yield printable(f"-- {link.name}")
        if link.outcome is not None:
            yield from text(link.outcome)
        else:
            yield printable(f"failed: {link.failure}")
    yield ""
    worst = found[worst_of(found)]
    opening = "no eye" if worst.opening_pct is None else f"{plain(worst.opening_pct, 1)} % open"
    yield printable(f"worst of {len(found)} links: {worst.name}, {opening}")


def _save_picture(parsed: argparse.Namespace, found: Sequence[LinkOutcome]) -> None:
    from monitor.snapshots import snapshot_of
    from monitor.views.painter import save_tiles

    snapshots = [
        (link.name, snapshot_of(link.outcome) if link.outcome is not None else Snapshot(notes=(str(link.failure),)))
        for link in found
    ]
    width, height = parsed.picture_size
    save_tiles(snapshots, worst_of(found), parsed.picture, width, height, parsed.theme)


def _save_reports(parsed: argparse.Namespace, links: Sequence[NamedLink], found: Sequence[LinkOutcome]) -> None:
    """One for each link, its name in the file's."""
    from monitor.report import facts_of_run, save_report

    for link, one in zip(links, found, strict=True):
        if one.outcome is not None:
            options = replace(chain_options(link.arguments.parsed, link.options), window=parsed.window)
            limits = [rule.text for rule in link.rules]
            facts = facts_of_run(one.outcome, options, limits, one.state)
            save_report(facts, named_file(Path(parsed.report), link.name))


def worst_of(found: Sequence[LinkOutcome]) -> int:
    """Which link is worst: one that failed, else one without an eye, else the least open."""

    def order(number: int) -> tuple[bool, bool, float]:
        link = found[number]
        opening = link.opening_pct
        return link.failure is None, opening is not None, opening if opening is not None else 0.0

    return min(range(len(found)), key=order)


def measure_links(
    parsed: argparse.Namespace, links: Sequence[NamedLink], played: Sequence[Played] | None = None
) -> tuple[list[LinkOutcome], int]:
    """Measure each link in a thread of its own; what came of each, and the exit status. Raises InputError before anything is measured.

    What was ``played`` has been judged: it is measured as far as it was played.
    """
    found = [LinkOutcome(link.name) for link in links]
    unplayed = {number for number, one in enumerate(played or ()) if one.seconds == 0}
    judged = played is None and (
        any(link.rules for link in links)
        or any(
            wish is not None
            for wish in (parsed.journal, parsed.publish, parsed.on_alarm, parsed.capture, parsed.report)
        )
    )
    with ExitStack() as stack:
        interrupt = stack.enter_context(Interrupt())
        # of what was not played at all nothing is opened: not a sample is no stretch
        lengths = [one.seconds or None for one in played] if played is not None else [None] * len(links)
        sources = [stack.enter_context(source) for source in _sources(links, lengths, lambda: interrupt.asked)]
        journal: Journal | None = None
        captures: list[Capture | None] = [None] * len(links)
        if judged:
            captures = open_captures(parsed, links, lambda text: say(f"warning: {text}"), live=False)
            sink = ByLink({link.name: own for link, own in zip(links, captures, strict=True) if own is not None})
            journal = stack.enter_context(open_journal(parsed, sink, links=True))
        counts = [source.info.samples for source in sources]
        known = [count for count in counts if count is not None]
        bar = stack.enter_context(ProgressBar(sum(known) if len(known) == len(counts) else None))
        progress = _Progress(len(links), bar)
        lock = threading.Lock()
        threads = []
        for number, (link, source, capture) in enumerate(zip(links, sources, captures, strict=True)):
            keeper = LinkJournal(journal, link.name, lock) if journal is not None else None
            task = _Task(
                link, Stoppable(source, lambda: interrupt.asked), keeper, capture, found[number], progress.of(number)
            )
            threads.append(threading.Thread(target=task.run, name=f"lidwatch {link.name}", daemon=True))
        _run_all([thread for number, thread in enumerate(threads) if number not in unplayed])
    for number, (one, own) in enumerate(zip(played or (), found, strict=False)):
        if number in unplayed:
            own.failure = NothingToMeasure("nothing to measure: ended before any of it was played")
        elif own.outcome is not None:
            own.outcome.alarms = one.alarms
            own.outcome.interrupted |= one.status != 0
            own.state = one.state
    interrupted = interrupt.asked or any(one.status for one in played or ())
    return found, _status(found, links, interrupted=interrupted)


def _run_all(threads: Sequence[threading.Thread]) -> None:
    for thread in threads:
        thread.start()
    for thread in threads:
        while thread.is_alive():
            thread.join(0.1)


def _samples(parsed: argparse.Namespace) -> SampleOptions:
    return SampleOptions(parsed.rate, parsed.format, parsed.channels, parsed.iq, parsed.start, parsed.duration)


def _opened(parsed: argparse.Namespace, seconds: float | None = None) -> Source:
    samples = _samples(parsed)
    return open_source(parsed.source, samples if seconds is None else replace(samples, duration_s=seconds))


def _sources(
    links: Sequence[NamedLink], lengths: Sequence[float | None], asked: Callable[[], bool]
) -> Iterator[Source]:
    """Each link's source, opened as it is asked for; links in one stream that can be read only once share it."""
    streams: dict[int, Tee] = {}
    sharing = Counter(link.arguments.stream for link in links)
    for link, seconds in zip(links, lengths, strict=True):
        parsed, stream = link.arguments.parsed, link.arguments.stream
        if sharing[stream] == 1 or not is_stream(parsed.source):
            yield _opened(parsed, seconds)
            continue
        if stream not in streams:
            pipe = cast("BinaryIO", StdinUntil(asked)) if parsed.source == "-" else None
            streams[stream] = Tee(open_source(parsed.source, _samples(parsed), pipe), sharing[stream])
        yield streams[stream].branch()


def _status(found: Sequence[LinkOutcome], links: Sequence[NamedLink], *, interrupted: bool) -> int:
    if interrupted:
        return INTERRUPTED
    failures = [link.failure.exit_status for link in found if link.failure is not None]
    if failures:
        return max(failures)
    if any(
        link.rules and one.outcome is not None and one.outcome.alarms for link, one in zip(links, found, strict=True)
    ):
        return LIMIT_BROKEN
    return NOTHING if any(one.outcome is None or not one.outcome.measured for one in found) else 0


class _Progress:
    """One bar for all: the sum of what each has done."""

    def __init__(self, links: int, bar: ProgressBar) -> None:
        self._done = [0] * links
        self._bar = bar
        self._lock = threading.Lock()

    def of(self, number: int) -> Callable[[int], None]:
        def advance(samples: int) -> None:
            with self._lock:
                self._done[number] = samples
                self._bar.advance(sum(self._done))

        return advance


@dataclass
class _Task:
    link: NamedLink
    source: Stoppable
    keeper: "Keeper | None"
    capture: "Capture | None"
    found: LinkOutcome
    progress: Callable[[int], None]

    def run(self) -> None:
        """Measure; nothing is raised."""
        try:
            self.found.outcome = self._measured()
        except MonitorError as error:
            self.found.failure = error
        except Exception as error:  # noqa: BLE001  # one link's fault is not the others'
            self.found.failure = MonitorError(printable(f"the measurement failed: {error!r}"))
        finally:
            self.source.close()  # whoever shares its stream waits for it no more

    def _measured(self) -> Outcome:
        parsed, link = self.link.arguments.parsed, self.link.options
        options = replace(chain_options(parsed, link), window=parsed.window)
        if self.keeper is None:
            return run(self.source, link.wanted(), options, threads=1, progress=self.progress)
        with Judged(
            parsed,
            self.source,
            link,
            self.link.rules,
            keeper=self.keeper,
            capture=self.capture,
            history=parsed.report is not None,
        ) as judge:
            outcome = run(self.source, link.wanted(), options, threads=1, progress=self.progress, observe=judge.feed)
            outcome.interrupted = self.source.asked()
            outcome.alarms = judge.finish(interrupted=outcome.interrupted)
            self.found.state = judge.state()
        return outcome
