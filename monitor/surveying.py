"""`lidwatch survey`: many recordings, a row each, measured side by side in processes of their own."""

import argparse
import os
from collections.abc import Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from monitor.arguments import add_figure_options, add_link_options, add_sample_options, positive, whole
from monitor.errors import InputError, MonitorError, printable
from monitor.interrupt import Interrupt, Stoppable
from monitor.links import LinkArguments, links_of
from monitor.running import chain_options, link_and_limits
from monitor.survey_report import Row, document, table, text
from monitor.terminal import ProgressBar, SlowStartNotice, say

if TYPE_CHECKING:
    from collections.abc import Mapping
    from multiprocessing.synchronize import Event

    from monitor.journal import JournalStatus

LIMIT_BROKEN, UNUSABLE, NOTHING, INTERRUPTED = 1, 2, 3, 130
SOUND_SUFFIXES = (".wav", ".wave", ".flac", ".aif", ".aiff", ".aifc", ".w64", ".rf64", ".caf", ".au", ".ogg", ".oga")
SIGMF_SUFFIXES = (".sigmf-meta", ".sigmf")
RAW_SUFFIXES = (
    ".iq",
    ".raw",
    ".bin",
    ".dat",
    ".cf32",
    ".cf64",
    ".ci16",
    ".ci8",
    ".cu8",
    ".cs16",
    ".cs8",
    ".f32",
    ".i16",
)
_POLL_S = 0.2


def add_survey_arguments(parser: argparse.ArgumentParser) -> None:
    """The options of the command."""
    parser.add_argument(
        "source",
        nargs="+",
        metavar="PATH",
        help="recordings, and folders to look for recordings in (raw ones with --format)",
    )
    add_sample_options(parser)
    add_link_options(parser)
    add_figure_options(parser)
    work = parser.add_argument_group("the work")
    work.add_argument(
        "--every", type=positive, default=1.0, metavar="S", help="limits are judged at least so often (default 1)"
    )
    work.add_argument(
        "--jobs", type=whole, metavar="N", help="so many recordings at once (default: one for each processor)"
    )
    out = parser.add_argument_group("output")
    out.add_argument("--json", action="store_true", help="one JSON document on standard output, nothing else")
    out.add_argument("--csv", type=Path, metavar="FILE", help="the rows with all figures as a table")
    out.add_argument("--worst-first", action="store_true", help="in order of their openings, those without one first")
    parser.set_defaults(run=survey)


def survey(parsed: argparse.Namespace) -> int:
    """Run the command on parsed arguments; returns the exit status. Raises MonitorError."""
    if parsed.csv is not None:
        _check_table(parsed.csv)
    parsed.source = list(find_recordings(parsed.source, raw=parsed.format is not None))
    links = links_of(parsed)
    limits = [_has_limits(one.parsed) for one in links]
    names = row_names(links)
    with SlowStartNotice():
        import dsp.chain  # noqa: F401  # the kernels, so that the processes find them compiled
    with Interrupt() as interrupt:
        rows = _measure_all(links, names, parsed.jobs or os.cpu_count() or 1, interrupt)
    for row in rows:
        if row.error:
            say(f"lidwatch: {row.name}: {row.error}")
    if parsed.worst_first:
        rows.sort(key=lambda row: (row.opening_pct is not None, row.opening_pct or 0.0))
    from monitor.document import json_text
    from monitor.replay import tell

    tell([json_text(document(rows))] if parsed.json else list(text(rows)))
    if parsed.csv is not None:
        try:
            parsed.csv.write_text(table(rows), encoding="utf-8", newline="")
        except OSError as error:
            raise InputError(f"--csv {parsed.csv}: {error.strerror or error}; give another name") from None
    if interrupt.asked:
        return INTERRUPTED
    if any(row.error for row in rows):
        return UNUSABLE
    if any(row.alarms and limited for row, limited in zip(_in_order(rows, names), limits, strict=True)):
        return LIMIT_BROKEN
    return NOTHING if any(row.opening_pct is None for row in rows) else 0


def _has_limits(parsed: argparse.Namespace) -> bool:
    """Whether the link file has limits. What is wrong with the link is refused here, once, rather than in every process."""
    link, rules = link_and_limits(parsed)
    link.wanted()
    return bool(rules)


def _in_order(rows: Sequence[Row], names: Sequence[str]) -> list[Row]:
    by_name = {row.name: row for row in rows}
    return [by_name[name] for name in names if name in by_name]


def row_names(links: Sequence[LinkArguments]) -> list[str]:
    """What each row is called: its file, without the folders that all have in common, and its channels."""
    folders = {os.path.dirname(os.path.abspath(one.parsed.source)) for one in links}
    common = os.path.commonpath(folders) if len({os.path.splitdrive(folder)[0] for folder in folders}) == 1 else None
    names = []
    for number, one in enumerate(links, start=1):
        name = one.parsed.source if common is None else os.path.relpath(os.path.abspath(one.parsed.source), common)
        if one.parsed.channels:
            name += f", channel {','.join(map(str, one.parsed.channels))}"
        names.append(name if name not in names else f"{name} ({number})")  # of several links in one stream
    return names


def find_recordings(paths: Sequence[str], *, raw: bool) -> Iterator[str]:
    """The recordings that are named, and those in folders that are, each once; of a SigMF pair one. Raises InputError.

    ``raw``: files of raw samples in folders count too.
    """
    suffixes = SOUND_SUFFIXES + SIGMF_SUFFIXES + (RAW_SUFFIXES if raw else ())
    seen: set[str] = set()
    for path in paths:
        if path == "-" or "://" in path or path.startswith("audio:"):
            raise InputError(f"{path}: a survey takes recordings and folders; lidwatch watch takes live sources")
        found = [path]
        if os.path.isdir(path):
            found = sorted(
                os.path.join(folder, name)
                for folder, _, names in os.walk(path)
                for name in names
                if name.lower().endswith(suffixes)
            )
            if not found:
                more = "" if raw else "; raw ones are looked for with --format and --rate"
                raise InputError(f"{path}: no recordings in this folder{more}")
        for one in found:
            if one not in seen:
                seen.add(one)
                yield one


def _measure_all(links: Sequence[LinkArguments], names: Sequence[str], jobs: int, interrupt: Interrupt) -> list[Row]:
    """A row for each link in their order; after Ctrl-C those that are done."""
    import multiprocessing

    rows: dict[int, Row] = {}
    jobs = min(jobs, len(links))
    threads = 2 if jobs == 1 and len(links) == 1 else 1
    # new processes: a copy of this one would have only one of its threads
    context = multiprocessing.get_context("spawn")
    stop = context.Event()
    with (
        ProgressBar(len(links)) as bar,
        ProcessPoolExecutor(jobs, mp_context=context, initializer=_begin, initargs=(stop,)) as pool,
    ):
        waiting = {
            pool.submit(measure, one.parsed, name, threads): number
            for number, (one, name) in enumerate(zip(links, names, strict=True))
        }
        left = set(waiting)
        try:
            while left and not interrupt.asked:
                done, left = wait(left, _POLL_S, FIRST_COMPLETED)
                for future in done:
                    rows[waiting[future]] = _row_of(future, names[waiting[future]])
                bar.advance(len(rows))
        finally:
            stop.set()
            pool.shutdown(cancel_futures=True)
    return [rows[number] for number in sorted(rows)]


def _row_of(future: "Future[Row]", name: str) -> Row:
    try:
        return future.result()
    except BrokenProcessPool:
        return Row(name, error="the process that measured it died; was there memory enough? --jobs 1 needs the least")


_stop: "Event | None" = None  # in a process of the pool: the wish for the end


def _begin(stop: "Event") -> None:
    """Leave Ctrl-C to the process that asked for the work, and take its word for the end."""
    import signal

    global _stop
    _stop = stop
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")


class _Unkept:
    """A journal that nobody reads."""

    @property
    def status(self) -> "JournalStatus":
        from monitor.journal import JournalStatus

        return JournalStatus(None, 0, 0, 0, 0, "")

    def write(self, kind: str, sample: int | None, seconds: float | None, fields: "Mapping[str, Any]") -> None:
        """Nothing is kept."""


def measure(parsed: argparse.Namespace, name: str, threads: int) -> Row:
    """One link's row; nothing is raised."""
    try:
        return Row(name, _measured(parsed, threads))
    except MonitorError as error:
        return Row(name, error=str(error))
    except Exception as error:  # noqa: BLE001  # one recording's fault is not the others'
        return Row(name, error=printable(f"internal fault: {error!r}"))


def _measured(parsed: argparse.Namespace, threads: int) -> dict[str, Any]:
    from monitor.document import document
    from monitor.judging import Judged
    from monitor.session import run
    from monitor.sources import SampleOptions, open_source

    link, rules = link_and_limits(parsed)
    options = replace(chain_options(parsed, link), window=parsed.window)
    samples = SampleOptions(parsed.rate, parsed.format, parsed.channels, parsed.iq, parsed.start, parsed.duration)
    with open_source(parsed.source, samples) as opened:
        source = Stoppable(opened, lambda: _stop is not None and _stop.is_set())
        if not rules:
            return document(run(source, link.wanted(), options, threads=threads))
        with Judged(parsed, source, link, rules, keeper=_Unkept()) as judge:
            outcome = run(source, link.wanted(), options, threads=threads, observe=judge.feed)
            outcome.alarms = judge.finish()
        return document(outcome)


def _check_table(path: Path) -> None:
    if os.path.isdir(path):
        raise InputError(f"--csv {path}: is a folder; give a file's name")
    if not os.path.isdir(path.parent):
        raise InputError(f"--csv {path}: there is no folder {path.parent}; make it first")
