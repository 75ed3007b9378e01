"""`lidwatch replay`: measure a recording."""

import argparse
import os
import sys
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING

from monitor.errors import InputError, NothingToMeasure
from monitor.terminal import ProgressBar, SlowStartNotice, say

if TYPE_CHECKING:
    from dsp.chain import ChainOptions
    from monitor.linkfile import LinkOptions
    from monitor.session import Outcome

INTERRUPTED = 130


def replay(parsed: argparse.Namespace) -> int:
    """Run the command on parsed arguments; returns the exit status. Raises MonitorError."""
    # one thread a matrix product: the chain's own two threads are what the cores are for
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    if parsed.picture is not None:
        _check_picture(parsed.picture)
    with SlowStartNotice():
        import dsp.chain  # noqa: F401  # the kernels
        from monitor.interrupt import Interrupt, Interruptible
        from monitor.session import run
        from monitor.sources import SampleOptions, open_source

    link = _link_options(parsed)
    wanted, chain_options = link.wanted(), _chain_options(parsed, link)
    samples = SampleOptions(parsed.rate, parsed.format, parsed.channels, parsed.iq, parsed.start, parsed.duration)
    with Interrupt() as interrupt, open_source(parsed.source, samples) as opened:
        with ProgressBar(opened.info.samples) as bar:
            source = Interruptible(opened, interrupt)
            outcome = run(source, wanted, chain_options, threads=parsed.threads, progress=bar.advance)
        outcome.interrupted = interrupt.asked
    _tell(outcome, as_json=parsed.json)
    if parsed.picture is not None:
        from monitor.snapshots import snapshot_of
        from monitor.views.painter import save_picture

        width, height = parsed.picture_size
        save_picture(snapshot_of(outcome), parsed.picture, width, height, parsed.theme)
    if outcome.interrupted:
        return INTERRUPTED
    if not outcome.measured:
        raise NothingToMeasure(f"{outcome.source.info.uri}: nothing to measure: {outcome.reason}")
    return 0


def _link_options(parsed: argparse.Namespace) -> "LinkOptions":
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
        return typed
    file = read_link_file(parsed.link)
    if file.n_alarms:
        rules = "1 alarm rule" if file.n_alarms == 1 else f"{file.n_alarms} alarm rules"
        say(f"note: link file {parsed.link}: {rules} not judged: replay does not judge limits yet")
    return typed.over(file.link)


def _chain_options(parsed: argparse.Namespace, link: "LinkOptions") -> "ChainOptions":
    from dsp.chain import ChainOptions

    options = ChainOptions(
        detector=link.timing, window=parsed.window, every=parsed.draw_every, target_ber=parsed.target_ber
    )
    if link.loop_bandwidth is None:
        return options
    from dataclasses import replace

    return replace(options, timing_bandwidth=link.loop_bandwidth)


def _tell(outcome: "Outcome", *, as_json: bool) -> None:
    """Write the document or the lines; a reader that has left is no error, a full disk is one."""
    from monitor.document import text, to_json

    lines = [to_json(outcome)] if as_json else list(text(outcome))
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


def _check_picture(name: str) -> None:
    path = Path(name)
    if path.suffix.lower() != ".png":
        raise InputError(f"--picture {name}: pictures are PNG; give a name that ends in .png")
    if not os.path.isdir(path.parent):  # false too for a name that cannot be
        raise InputError(f"--picture {name}: there is no folder {path.parent}; make it first")
    if os.path.isdir(path):
        raise InputError(f"--picture {name}: is a folder; give a file's name")
