"""The options that commands share, and how what is typed becomes values."""

import argparse
import os
from collections.abc import Sequence
from pathlib import Path
from typing import NoReturn

from monitor.errors import InputError
from monitor.limits import LOOP_BANDWIDTH, TIMINGS

_MOST_WHOLE = 10**9
_LEAST_SIZE, _MOST_SIZE = (640, 400), (7680, 4320)


class Parser(argparse.ArgumentParser):
    """Raises InputError with one line where the standard parser prints its usage and exits."""

    def error(self, message: str) -> NoReturn:
        """Raise the one line."""
        raise InputError(f"{message}; {self.prog} --help lists what there is")


def join_negative_numbers(arguments: Sequence[str]) -> list[str]:
    """Write ``--option -1e3`` as ``--option=-1e3``: argparse takes a negative number with an exponent for an option."""
    joined: list[str] = []
    for argument in arguments:
        if argument.startswith("-") and joined and joined[-1].startswith("--") and "=" not in joined[-1]:
            try:
                float(argument)
            except ValueError:
                pass
            else:
                joined[-1] += f"={argument}"
                continue
        joined.append(argument)
    return joined


def add_sample_options(parser: argparse.ArgumentParser) -> None:
    """What the user says of the samples."""
    group = parser.add_argument_group("the samples")
    add_form_options(group)
    group.add_argument("--start", type=not_negative, default=0.0, metavar="S", help="begin so many seconds in")
    group.add_argument("--duration", type=positive, metavar="S", help="take so many seconds")


def add_form_options(group: "argparse._ArgumentGroup") -> None:
    """Rate, format and channels; rate and format once for all sources, or once for each."""
    group.add_argument(
        "--rate", type=positive, action="append", metavar="HZ", help="sample rate, where the source does not say it"
    )
    group.add_argument(
        "--format",
        action="append",
        metavar="NAME",
        help="SigMF datatype of raw samples: cf32, ci16_le, cu8, rf32, ri16_be, ...",
    )
    group.add_argument(
        "--channels",
        type=channels,
        metavar="N[,N...]",
        help="which channels, 1 is the first: each is a link, with --iq each two",
    )
    group.add_argument("--iq", action="store_true", help="two channels are I and Q")


def add_link_options(parser: argparse.ArgumentParser) -> None:
    """What the user says of the link."""
    group = parser.add_argument_group("the link, each found by itself unless given")
    group.add_argument("--symbol-rate", type=positive_or_auto, metavar="HZ", help="symbols a second")
    group.add_argument(
        "--scheme",
        metavar="NAME",
        help="pam2 (nrz) pam3 pam4 pam8, bpsk qpsk oqpsk pi4dqpsk 8psk 16qam 64qam, fsk2 fsk4 gfsk msk gmsk",
    )
    group.add_argument("--pulse", metavar="NAME", help="rrc:0.35, rc:0.35, rect, gauss:0.5, none, taps:FILE")
    group.add_argument("--carrier", type=number_or_auto, metavar="HZ", help="offset from the centre of the recording")
    group.add_argument("--timing", choices=("auto", *TIMINGS), default="auto", help="timing error detector")
    group.add_argument(
        "--loop-bandwidth", type=bandwidth, metavar="BNT", help="of the timing loop, per symbol (default 0.005)"
    )
    group.add_argument(
        "--link",
        type=Path,
        action="append",
        metavar="LINK.toml",
        help="file with these; options win over it. Of several links: one for all, or one for each in order",
    )


def add_measure_options(parser: argparse.ArgumentParser) -> None:
    """How to measure one link."""
    group = add_figure_options(parser)
    group.add_argument("--threads", type=int, choices=(1, 2), default=2, help="threads for one link (default 2)")


def add_figure_options(parser: argparse.ArgumentParser) -> "argparse._ArgumentGroup":
    """How to measure; returns the group, for what else belongs there."""
    group = parser.add_argument_group("how to measure")
    group.add_argument(
        "--window",
        type=whole,
        metavar="SYMBOLS",
        help="symbols of a window (default: enough to count each level's tail)",
    )
    group.add_argument(
        "--draw-every",
        type=whole,
        default=1,
        metavar="N",
        help="draw one of N traces only, in runs of 256 (default 1: all)",
    )
    group.add_argument(
        "--target-ber",
        type=error_rate,
        default=1e-6,
        metavar="RATE",
        help="error rate that the opening is told for (default 1e-6)",
    )
    return group


def add_output_options(parser: argparse.ArgumentParser) -> None:
    """Where the results go."""
    group = parser.add_argument_group("output")
    group.add_argument("--json", action="store_true", help="one JSON document on standard output, nothing else")
    group.add_argument("--picture", metavar="FILE.png", help="the eye and its figures as a picture")
    group.add_argument(
        "--picture-size", type=size, default=(1280, 800), metavar="WxH", help="of the picture (default 1280x800)"
    )
    add_report_option(group)
    group.add_argument(
        "--theme",
        choices=("light", "dark", "paper"),
        default="light",
        help="of the picture (default light); paper: for print",
    )


def add_report_option(group: argparse._ArgumentGroup) -> None:
    """The report, of a replay as of a watch."""
    group.add_argument(
        "--report",
        metavar="FILE.html",
        help="one page with pictures, all figures and their meaning, alarms and assumptions",
    )


def check_output_name(option: str, name: str, suffix: str) -> None:
    """Refuse a file name that nothing could be written to, before any work is done. Raises InputError."""
    path = Path(name)
    if path.suffix.lower() != suffix:
        raise InputError(f"{option} {name}: is written as {suffix[1:].upper()}; give a name that ends in {suffix}")
    if not os.path.isdir(path.parent):  # false too for a name that cannot be
        raise InputError(f"{option} {name}: there is no folder {path.parent}; make it first")
    if os.path.isdir(path):
        raise InputError(f"{option} {name}: is a folder; give a file's name")


def add_taps_option(parser: argparse.ArgumentParser) -> None:
    """Where the equaliser's taps go."""
    parser.add_argument(
        "--save-taps",
        type=Path,
        metavar="FILE",
        help="the equaliser's taps, receive filter included; --pulse taps:FILE takes them",
    )


def add_journal_options(parser: argparse.ArgumentParser) -> None:
    """The journal, and who listens to it."""
    group = parser.add_argument_group("the journal")
    group.add_argument(
        "--journal", type=Path, metavar="FILE", help="JSON Lines of all that happens; .csv: readings only"
    )
    group.add_argument("--rotate-size", type=whole, metavar="BYTES", help="a new part before one grows beyond this")
    group.add_argument("--rotate-daily", action="store_true", help="a new part each day (UTC)")
    group.add_argument("--publish", metavar="ADDRESS", help="publish the journal's lines on this ZeroMQ address")
    group.add_argument(
        "--on-alarm", metavar="COMMAND", help="program to run for each alarm, given it as JSON on standard input"
    )


def number(text: str) -> float:
    """A finite number."""
    try:
        value = float(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"must be a number, got {text!r}") from None
    if value != value or abs(value) == float("inf"):
        raise argparse.ArgumentTypeError(f"must be finite, got {text}")
    return value


def positive(text: str) -> float:
    """A finite number above 0."""
    value = number(text)
    if value <= 0:
        raise argparse.ArgumentTypeError(f"must be above 0, got {text}")
    return value


def not_negative(text: str) -> float:
    """A finite number, 0 or above."""
    value = number(text)
    if value < 0:
        raise argparse.ArgumentTypeError(f"must be 0 or above, got {text}")
    return value


def positive_or_auto(text: str) -> float | None:
    """A finite number above 0; ``auto`` is None."""
    return None if text == "auto" else positive(text)


def number_or_auto(text: str) -> float | None:
    """A finite number; ``auto`` is None."""
    return None if text == "auto" else number(text)


def bandwidth(text: str) -> float:
    """A loop bandwidth BnT."""
    value = number(text)
    low, high = LOOP_BANDWIDTH
    if not low <= value <= high:
        raise argparse.ArgumentTypeError(f"BnT must lie between {low:g} and {high:g}, got {text}")
    return value


def error_rate(text: str) -> float:
    """A bit error rate that an opening can be told for."""
    value = number(text)
    if not 1e-15 <= value < 0.5:
        raise argparse.ArgumentTypeError(f"must lie between 1e-15 and 0.5, got {text}")
    return value


def whole(text: str) -> int:
    """A whole number from 1 to 10^9."""
    try:
        value = int(text)
    except ValueError:
        value = 0
    if not 1 <= value <= _MOST_WHOLE:
        raise argparse.ArgumentTypeError(f"must be a whole number from 1 to {_MOST_WHOLE}, got {text!r}")
    return value


def channels(text: str) -> tuple[int, ...]:
    """Channels, counted from 1, with commas between them."""
    return tuple(whole(part) for part in text.split(","))


def size(text: str) -> tuple[int, int]:
    """Width and height of a picture in pixels."""
    width, _, height = text.lower().partition("x")
    if not (width.isdecimal() and height.isdecimal() and len(text) < 20):
        raise argparse.ArgumentTypeError(f"must look like 1280x800, got {text!r}")
    value = int(width), int(height)
    if not all(low <= got <= high for low, got, high in zip(_LEAST_SIZE, value, _MOST_SIZE, strict=True)):
        least, most = ("x".join(map(str, pair)) for pair in (_LEAST_SIZE, _MOST_SIZE))
        raise argparse.ArgumentTypeError(f"must lie between {least} and {most}, got {text}")
    return value
