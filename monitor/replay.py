"""`lidwatch replay`: measure a recording."""

import argparse
import os
import sys
from contextlib import nullcontext, suppress
from dataclasses import replace
from typing import TYPE_CHECKING

from monitor.arguments import check_output_name
from monitor.errors import InputError, NothingToMeasure
from monitor.links import links_of
from monitor.playing import check_pace, play
from monitor.running import chain_options, link_and_limits
from monitor.terminal import ProgressBar, SlowStartNotice

if TYPE_CHECKING:
    from collections.abc import Sequence
    from contextlib import AbstractContextManager
    from pathlib import Path

    from monitor.alarm_rules import AlarmRule
    from monitor.judging import Judged
    from monitor.linkfile import LinkOptions
    from monitor.session import Outcome
    from monitor.sources import Source

LIMIT_BROKEN, INTERRUPTED = 1, 130


def replay(parsed: argparse.Namespace) -> int:
    """Run the command on parsed arguments; returns the exit status. Raises MonitorError."""
    # one thread a matrix product: the chain's own two threads are what the cores are for
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    for option, name, suffix in (("--picture", parsed.picture, ".png"), ("--report", parsed.report, ".html")):
        if name is not None:
            check_output_name(option, name, suffix)
    if parsed.save_taps is not None:
        _check_taps(parsed.save_taps)
    links = links_of(parsed)
    if len(links) > 1:
        if parsed.save_taps is not None:
            raise InputError("--save-taps: taps are one link's; choose it with --channels or --link")
        from monitor.several_replay import replay_several

        return replay_several(parsed, links)
    parsed = links[0].parsed
    check_pace(parsed)
    with SlowStartNotice():
        import dsp.chain  # noqa: F401  # the kernels
        from monitor.interrupt import Interrupt, Interruptible
        from monitor.session import run
        from monitor.sources import SampleOptions, open_source

    link, rules = link_and_limits(parsed)
    wanted, options = link.wanted(), replace(chain_options(parsed, link), window=parsed.window)
    samples = SampleOptions(parsed.rate, parsed.format, parsed.channels, parsed.iq, parsed.start, parsed.duration)
    played = play(parsed, samples, link, rules) if parsed.pace is not None else None
    if played is not None and played.seconds is not None:
        if not played.seconds:
            raise NothingToMeasure(f"{parsed.source}: nothing to measure: ended before any of it was played")
        samples = replace(samples, duration_s=played.seconds)
    with Interrupt() as interrupt, open_source(parsed.source, samples) as opened:
        judging = _judging(parsed, opened, link, rules) if played is None else nullcontext()
        with ProgressBar(opened.info.samples) as bar, judging as judge:
            source = Interruptible(opened, interrupt)
            observe = judge.feed if judge is not None else None
            outcome = run(source, wanted, options, threads=parsed.threads, progress=bar.advance, observe=observe)
            if judge is not None:
                outcome.alarms = judge.finish(interrupted=interrupt.asked)
        outcome.interrupted = interrupt.asked
    if played is not None:
        outcome.alarms = played.alarms
        outcome.interrupted |= played.status != 0
    tell(_lines(outcome, as_json=parsed.json))
    if parsed.save_taps is not None and outcome.measured:
        from monitor.taps import save_taps

        save_taps(outcome, parsed.save_taps)
    if parsed.picture is not None:
        from monitor.snapshots import snapshot_of
        from monitor.views.painter import save_picture

        width, height = parsed.picture_size
        save_picture(snapshot_of(outcome), parsed.picture, width, height, parsed.theme)
    if parsed.report is not None:
        from monitor.report import facts_of_run, save_report

        state = played.state if played is not None else judge.state() if judge is not None else None
        save_report(facts_of_run(outcome, options, [rule.text for rule in rules], state), parsed.report)
    if outcome.interrupted:
        return played.status if played is not None and played.status else INTERRUPTED
    if not outcome.measured:
        raise NothingToMeasure(f"{outcome.source.info.uri}: nothing to measure: {outcome.reason}")
    return LIMIT_BROKEN if rules and outcome.alarms else 0


def _judging(
    parsed: argparse.Namespace, source: "Source", link: "LinkOptions", rules: "tuple[AlarmRule, ...]"
) -> "AbstractContextManager[Judged | None]":
    """The judge of limits, keeper of the journal, of captures and of the report's history; None where nothing of them is asked for."""
    wishes = (parsed.journal, parsed.publish, parsed.on_alarm, parsed.capture, parsed.report)
    if not rules and all(wish is None for wish in wishes):
        return nullcontext()
    from monitor.judging import Judged

    return Judged(parsed, source, link, rules, history=parsed.report is not None)


def _lines(outcome: "Outcome", *, as_json: bool) -> list[str]:
    from monitor.document import text, to_json

    return [to_json(outcome)] if as_json else list(text(outcome))


def tell(lines: "Sequence[str]") -> None:
    """Write lines on standard output; a reader that has left is no error, a full disk is one (InputError)."""
    if sys.stdout is None:
        return
    try:
        if hasattr(sys.stdout, "reconfigure"):
            sys.stdout.reconfigure(errors="backslashreplace")  # the figures' signs on an old terminal, odd file names
        sys.stdout.writelines(line + "\n" for line in lines)
        sys.stdout.flush()
    except BrokenPipeError:
        discard_standard_output()
    except OSError as error:
        discard_standard_output()
        raise InputError(f"standard output cannot be written: {error.strerror or error}") from None


def discard_standard_output() -> None:
    """Send what is still to be written nowhere, so that the interpreter's end does not stumble over it."""
    with suppress(OSError, ValueError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _check_taps(path: "Path") -> None:
    if os.path.isdir(path):
        raise InputError(f"--save-taps {path}: is a folder; give a file's name")
    if not os.path.isdir(path.parent):  # false too for a name that cannot be
        raise InputError(f"--save-taps {path}: there is no folder {path.parent}; make it first")
