"""`lidwatch replay` of several links: measured side by side, told together."""

import argparse
import threading
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from dsp.block import Block
from monitor.document import json_text, links_document, text
from monitor.errors import InputError, MonitorError, printable
from monitor.interrupt import Interrupt
from monitor.judging import Judged
from monitor.links import LinkArguments
from monitor.replay import tell
from monitor.running import chain_options, open_journal
from monitor.session import Outcome, run
from monitor.several_watching import NamedLink, named_links, open_captures
from monitor.shared_journal import ByLink, LinkJournal
from monitor.snapshot import Snapshot
from monitor.sources import SampleOptions, Source, open_source
from monitor.terminal import ProgressBar, say
from monitor.views.wording import plain

if TYPE_CHECKING:
    from monitor.capture import Capture
    from monitor.document import Json
    from monitor.journal import Journal, Keeper

LIMIT_BROKEN, NOTHING, INTERRUPTED = 1, 3, 130


@dataclass
class LinkOutcome:
    """What came of one link: its outcome, or the error that ended it."""

    name: str
    outcome: Outcome | None = None
    failure: MonitorError | None = None

    @property
    def opening_pct(self) -> float | None:
        """Its opening; None where there is none."""
        reading = self.outcome.reading if self.outcome is not None else None
        return reading.opening_pct if reading is not None else None


def replay_several(parsed: argparse.Namespace, several: Sequence[LinkArguments]) -> int:
    """Measure several links and tell of them; returns the exit status. Raises MonitorError."""
    found, status = measure_links(parsed, several)
    for link in found:
        if link.failure is not None:
            say(f"lidwatch: {link.name}: {link.failure}")
    tell([json_text(_document(found))] if parsed.json else list(_text(found)))
    if parsed.picture is not None:
        _save_picture(parsed, found)
    if status == NOTHING:
        for link in found:
            if link.outcome is not None and not link.outcome.measured:
                say(f"lidwatch: {link.name}: nothing to measure: {link.outcome.reason}")
    return status


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


def worst_of(found: Sequence[LinkOutcome]) -> int:
    """Which link is worst: one that failed, else one without an eye, else the least open."""

    def order(number: int) -> tuple[bool, bool, float]:
        link = found[number]
        opening = link.opening_pct
        return link.failure is None, opening is not None, opening if opening is not None else 0.0

    return min(range(len(found)), key=order)


def measure_links(parsed: argparse.Namespace, several: Sequence[LinkArguments]) -> tuple[list[LinkOutcome], int]:
    """Measure each link in a thread of its own; what came of each, and the exit status. Raises InputError before anything is measured."""
    if len({one.stream for one in several}) < len(several) and several[0].parsed.source == "-":
        raise InputError("standard input can be replayed as one link only; save it to a file, or take lidwatch watch")
    links = named_links(several)
    found = [LinkOutcome(link.name) for link in links]
    judged = any(link.rules for link in links) or any(
        wish is not None for wish in (parsed.journal, parsed.publish, parsed.on_alarm, parsed.capture)
    )
    with ExitStack() as stack:
        interrupt = stack.enter_context(Interrupt())
        sources = [stack.enter_context(_opened(link.arguments.parsed)) for link in links]
        journal: Journal | None = None
        captures: list[Capture | None] = [None] * len(links)
        if judged:
            captures = open_captures(parsed, links, lambda text: say(f"warning: {text}"), live=False)
            sink = ByLink({link.name: own for link, own in zip(links, captures, strict=True) if own is not None})
            journal = stack.enter_context(open_journal(parsed, sink, links=True))
        lengths = [source.info.samples for source in sources]
        known = [length for length in lengths if length is not None]
        bar = stack.enter_context(ProgressBar(sum(known) if len(known) == len(lengths) else None))
        progress = _Progress(len(links), bar)
        lock = threading.Lock()
        threads = []
        for number, (link, source, capture) in enumerate(zip(links, sources, captures, strict=True)):
            keeper = LinkJournal(journal, link.name, lock) if journal is not None else None
            task = _Task(link, _Stoppable(source, interrupt), keeper, capture, found[number], progress.of(number))
            threads.append(threading.Thread(target=task.run, name=f"lidwatch {link.name}", daemon=True))
        _run_all(threads, interrupt)
    return found, _status(found, links, interrupted=interrupt.asked)


def _run_all(threads: Sequence[threading.Thread], interrupt: Interrupt) -> None:
    for thread in threads:
        thread.start()
    for thread in threads:
        while thread.is_alive():
            thread.join(0.1)


def _opened(parsed: argparse.Namespace) -> Source:
    samples = SampleOptions(parsed.rate, parsed.format, parsed.channels, parsed.iq, parsed.start, parsed.duration)
    return open_source(parsed.source, samples)


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


class _Stoppable(Source):
    """A source that ends when the user asks for it; read by another thread than the one that Ctrl-C reaches."""

    def __init__(self, source: Source, interrupt: Interrupt) -> None:
        self.info = source.info
        self.notes = source.notes
        self._source = source
        self._interrupt = interrupt

    @property
    def asked(self) -> bool:
        """Whether the end was asked for."""
        return self._interrupt.asked

    def blocks(self) -> Iterator[Block]:
        """The source's blocks until the end is asked for."""
        for block in self._source.blocks():
            if self._interrupt.asked:
                return
            yield block

    def close(self) -> None:
        """Close the source."""
        self._source.close()


@dataclass
class _Task:
    link: NamedLink
    source: _Stoppable
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

    def _measured(self) -> Outcome:
        parsed, link = self.link.arguments.parsed, self.link.options
        options = replace(chain_options(parsed, link), window=parsed.window)
        if self.keeper is None:
            return run(self.source, link.wanted(), options, threads=1, progress=self.progress)
        with Judged(parsed, self.source, link, self.link.rules, keeper=self.keeper, capture=self.capture) as judge:
            outcome = run(self.source, link.wanted(), options, threads=1, progress=self.progress, observe=judge.feed)
            outcome.interrupted = self.source.asked
            outcome.alarms = judge.finish(interrupted=outcome.interrupted)
        return outcome
