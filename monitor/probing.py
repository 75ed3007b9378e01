"""`lidwatch probe`: listen to a few seconds, and say what the link is."""

import argparse
import os
from pathlib import Path
from typing import TYPE_CHECKING

from monitor.arguments import add_link_options, add_sample_options, positive
from monitor.errors import InputError, NothingToMeasure, printable
from monitor.links import links_of
from monitor.live_source import add_socket_options, live_opener
from monitor.replay import tell
from monitor.running import link_and_limits
from monitor.terminal import SlowStartNotice, on_terminal, say

if TYPE_CHECKING:
    from dsp.identify import Findings, Wanted
    from monitor.listening import Ear, Heard

# how long is listened: the next where one was not enough
LISTEN_S = (2.0, 8.0)
SURE = 0.9
ENOUGH_SYMBOLS = 1000
MOST_LINKS = 8


def add_probe_arguments(parser: argparse.ArgumentParser) -> None:
    """The options of the command."""
    parser.add_argument(
        "source",
        nargs=1,
        metavar="SOURCE",
        help="sound file, raw file, SigMF recording, tcp://HOST:PORT, ipc://PATH, audio:NAME, or - for standard input",
    )
    add_sample_options(parser)
    parser.add_argument(
        "--for",
        dest="for_s",
        type=positive,
        metavar="S",
        help=f"listen to so many seconds (default {LISTEN_S[0]:g}; {LISTEN_S[1]:g} where they are not enough)",
    )
    parser.add_argument(
        "--wait",
        type=positive,
        default=10.0,
        metavar="S",
        help="of a live source: give up after so long without samples",
    )
    add_link_options(parser)
    add_socket_options(parser)
    out = parser.add_argument_group("output")
    out.add_argument("--json", action="store_true", help="one JSON document on standard output, nothing else")
    out.add_argument(
        "--save", type=Path, metavar="LINK.toml", help="write a link file for --link; of further links LINK-2.toml, ..."
    )
    parser.set_defaults(run=probe)


def probe(parsed: argparse.Namespace) -> int:
    """Run the command on parsed arguments; returns the exit status. Raises MonitorError, NothingToMeasure where there is no link."""
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    links = links_of(parsed)
    if len(links) > 1:
        raise InputError("probe looks at one stream; choose one channel, or two with --iq, and at most one --link")
    own = links[0].parsed
    if own.save is not None:
        check_new(own.save)
    link, _ = link_and_limits(own)
    wanted = link.wanted()
    with SlowStartNotice():
        import dsp.chain  # noqa: F401  # the kernels
        from monitor.probe_report import document, link_file_texts, text

    with _ear(own) as ear:
        heard, findings = look(ear, wanted, LISTEN_S if own.for_s is None else (own.for_s,))
    if own.json:
        from monitor.document import json_text

        tell([json_text(document(heard, findings))])
    else:
        tell(list(text(heard, findings)))
    if not findings.links:
        raise NothingToMeasure(f"{heard.uri}: no link here: {findings.reason}")
    if own.save is not None:
        paths = _save(own.save, link_file_texts(heard, findings, link))
        if not own.json:
            options = " ".join(f"--link {path}" for path in paths)
            tell(["", printable(f"saved; watch and replay take it with {options}")])
    return 0


def look(ear: "Ear", wanted: "Wanted", lengths: tuple[float, ...]) -> "tuple[Heard, Findings]":
    """Listen and look, for longer where it is not sure yet. Raises MonitorError."""
    from dsp.errors import DspError
    from dsp.identify import survey_links

    last: tuple[Heard, Findings] | None = None
    for number, seconds in enumerate(lengths):
        heard = ear.listen(seconds)
        if last is not None and heard.samples.size <= last[0].samples.size:
            return last  # the source has ended meanwhile
        if not heard.samples.size:
            raise NothingToMeasure(f"{heard.uri}: nothing to look at: there are no samples")
        try:
            findings = survey_links(heard.samples, heard.sample_rate_hz, wanted, MOST_LINKS)
        except DspError as error:
            raise InputError(str(error)) from None
        at_the_end = heard.seconds < 0.99 * seconds
        if at_the_end or number + 1 == len(lengths) or sure(findings, heard):
            break
        if on_terminal():
            found = "not sure yet" if findings.links else f"no link yet ({findings.reason})"
            say(f"lidwatch: {heard.seconds:.3g} s heard, {found}; listening on")
        last = heard, findings
    return heard, findings


def sure(findings: "Findings", heard: "Heard") -> bool:
    """Whether more samples would tell little more: every part of every link is sure, from enough symbols."""
    return (
        bool(findings.links)
        and all(
            guess is None or guess.confidence >= SURE
            for found in findings.links
            for guess in (found.scheme, found.symbol_rate_hz, found.pulse, found.carrier_hz)
        )
        and all(found.symbol_rate_hz.value * heard.seconds >= ENOUGH_SYMBOLS for found in findings.links)
    )


def _ear(parsed: argparse.Namespace) -> "Ear":
    from monitor.listening import LiveEar, RecordingEar
    from monitor.sources import SampleOptions, open_source
    from monitor.sources.live import is_live

    if is_live(parsed.source):
        if parsed.start or parsed.duration is not None:
            raise InputError("--start and --duration are of recordings; take --for to listen for so long")
        ear = LiveEar(live_opener(parsed), parsed.wait, parsed.source)
        for warning in ear.warnings:
            say(f"warning: {warning}")
        return ear
    samples = SampleOptions(parsed.rate, parsed.format, parsed.channels, parsed.iq, parsed.start, parsed.duration)
    return RecordingEar(open_source(parsed.source, samples))


def check_new(path: Path) -> None:
    """Refuse a link file that is there already, or cannot be: it may hold limits that somebody has thought about. Raises InputError."""
    where = f"--save {path}"
    if os.path.isdir(path):
        raise InputError(f"{where}: is a folder; give a file's name, such as link.toml")
    if os.path.lexists(path):
        raise InputError(f"{where}: is there already, and is left as it is; give another name or move it away")
    if not os.path.isdir(path.parent):
        raise InputError(f"{where}: there is no folder {path.parent}; make it first")


def _save(path: Path, texts: list[str]) -> list[Path]:
    paths = [path if number == 1 else path.with_stem(f"{path.stem}-{number}") for number in range(1, len(texts) + 1)]
    for own in paths:
        check_new(own)
    for own, text in zip(paths, texts, strict=True):
        try:
            with own.open("x", encoding="utf-8") as file:
                file.write(text)
        except OSError as error:
            raise InputError(f"--save {own}: {error.strerror or error}; give another name") from None
    return paths
