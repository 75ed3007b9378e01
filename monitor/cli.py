"""The command line. Heavy imports wait until the arguments are known to be good."""

import argparse
import os
import signal
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

from monitor.errors import InputError, MonitorError, NothingToMeasure

if TYPE_CHECKING:
    from monitor.session import Outcome
    from monitor.sources import Source

INTERRUPTED = 130


class _Parser(argparse.ArgumentParser):
    """Says what is wrong in one line."""

    def error(self, message: str) -> NoReturn:
        raise InputError(f"{self.prog}: {message}; --help lists the options")


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command; returns the exit status."""
    try:
        parsed = _parser().parse_args(arguments)
        if not hasattr(parsed, "run"):
            raise InputError("lidwatch: say what to do, such as: lidwatch replay FILE; --help lists the commands")
        return int(parsed.run(parsed))
    except MonitorError as error:
        print(f"lidwatch: {str(error).removeprefix('lidwatch: ')}", file=sys.stderr)  # noqa: T201
        return error.exit_status
    except KeyboardInterrupt:
        print("lidwatch: interrupted", file=sys.stderr)  # noqa: T201
        return INTERRUPTED
    except BrokenPipeError:
        # whoever read our output has left; what is unsaid stays unsaid
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except MemoryError:
        print("lidwatch: out of memory; give a smaller --window", file=sys.stderr)  # noqa: T201
        return 2


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="lidwatch",
        description="Finds a link in a stream of samples, tracks its symbol clock and measures its eye.",
    )
    parser.add_argument("--version", action="version", version="lidwatch 0.1.0")
    commands = parser.add_subparsers(title="commands", metavar="COMMAND", parser_class=_Parser)
    replay = commands.add_parser(
        "replay",
        help="measure a recording",
        description="Measures the link in a recording, or in raw samples on standard input.",
    )
    replay.add_argument("source", metavar="FILE", help="sound file, raw file, SigMF recording, or - for standard input")
    _sample_options(replay)
    _link_options(replay)
    measure = replay.add_argument_group("how to measure")
    measure.add_argument(
        "--window", type=_whole, default=25_000, metavar="SYMBOLS", help="symbols of a window (default 25000)"
    )
    measure.add_argument(
        "--draw-every", type=_whole, default=1, metavar="N", help="draw each N-th trace only (default 1: all)"
    )
    measure.add_argument(
        "--target-ber",
        type=_rate,
        default=1e-6,
        metavar="RATE",
        help="error rate that the opening is told for (default 1e-6)",
    )
    measure.add_argument("--threads", type=int, choices=(1, 2), default=2, help="threads for one link (default 2)")
    out = replay.add_argument_group("output")
    out.add_argument("--json", action="store_true", help="one JSON document on standard output, nothing else")
    out.add_argument("--picture", metavar="FILE.png", help="the eye and its figures as a picture")
    out.add_argument(
        "--picture-size", type=_size, default=(1280, 800), metavar="WxH", help="of the picture (default 1280x800)"
    )
    out.add_argument("--theme", choices=("light", "dark"), default="light", help="of the picture (default light)")
    replay.set_defaults(run=_replay)
    return parser


def _sample_options(parser: argparse.ArgumentParser) -> None:
    group = parser.add_argument_group("the samples")
    group.add_argument("--rate", type=_positive, metavar="HZ", help="sample rate, where the file does not say it")
    group.add_argument(
        "--format", metavar="NAME", help="SigMF datatype of raw samples: cf32, ci16_le, cu8, rf32, ri16_be, ..."
    )
    group.add_argument(
        "--channels", type=_channels, metavar="N[,N]", help="which channel (1 is the first), or two for --iq"
    )
    group.add_argument("--iq", action="store_true", help="two channels are I and Q")
    group.add_argument("--start", type=_number, default=0.0, metavar="S", help="begin so many seconds in")
    group.add_argument("--duration", type=_positive, metavar="S", help="take so many seconds")


def _link_options(parser: argparse.ArgumentParser) -> None:
    group = parser.add_argument_group("the link, each found by itself unless given")
    group.add_argument("--symbol-rate", type=_positive_or_auto, metavar="HZ")
    group.add_argument(
        "--scheme",
        metavar="NAME",
        help="pam2 (nrz) pam3 pam4 pam8, bpsk qpsk oqpsk pi4dqpsk 8psk 16qam 64qam, fsk2 fsk4 gfsk msk gmsk",
    )
    group.add_argument("--pulse", metavar="NAME", help="rrc:0.35, rc:0.35, rect, gauss:0.5, none, taps:FILE")
    group.add_argument("--carrier", type=_number_or_auto, metavar="HZ", help="offset from the centre of the recording")
    group.add_argument(
        "--timing",
        choices=("auto", "gardner", "mueller-muller", "derivative"),
        default="auto",
        help="timing error detector",
    )
    group.add_argument(
        "--loop-bandwidth", type=_bandwidth, metavar="BNT", help="of the timing loop, per symbol (default 0.005)"
    )
    group.add_argument("--link", type=Path, metavar="LINK.toml", help="file with these; options win over it")


def _replay(parsed: argparse.Namespace) -> int:
    # one thread a matrix product: the chain's own two threads are what the cores are for
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    if parsed.picture:
        _check_picture(Path(parsed.picture))
    _announce_compilation()
    from dsp.chain import ChainOptions
    from monitor.linkfile import LinkOptions, read_link_file
    from monitor.session import run
    from monitor.sources import SampleOptions, open_source

    options = LinkOptions(
        parsed.symbol_rate, parsed.scheme, parsed.pulse, parsed.carrier, parsed.timing, parsed.loop_bandwidth
    )
    if parsed.link is not None:
        options = options.over(read_link_file(parsed.link))
    if options.timing not in (None, "auto", "gardner", "mueller-muller", "derivative"):
        raise InputError(f"timing {options.timing!r} is not known; take gardner, mueller-muller, derivative or auto")
    wanted = options.wanted()
    chain_options = ChainOptions(
        detector=None if options.timing in (None, "auto") else options.timing,  # type: ignore[arg-type]  # checked above
        timing_bandwidth=_bandwidth(str(options.loop_bandwidth)) if options.loop_bandwidth else 0.005,
        window=parsed.window,
        every=parsed.draw_every,
        target_ber=parsed.target_ber,
    )
    samples = SampleOptions(parsed.rate, parsed.format, parsed.channels, parsed.iq, parsed.start, parsed.duration)
    stop = _Stop()
    with (
        open_source(parsed.source, samples, sys.stdin.buffer) as source,
        _progress(source, quiet=parsed.json) as advance,
    ):
        outcome = run(source, wanted, chain_options, threads=parsed.threads, progress=advance, stopped=stop)
    return _tell(outcome, parsed, stop)


def _tell(outcome: "Outcome", parsed: argparse.Namespace, stop: "_Stop") -> int:
    from monitor.document import text, to_json

    if parsed.json:
        sys.stdout.write(to_json(outcome) + "\n")
    else:
        sys.stdout.writelines(line + "\n" for line in text(outcome))
    sys.stdout.flush()
    if parsed.picture:
        from monitor.snapshots import snapshot_of
        from monitor.views.painter import save_picture

        width, height = parsed.picture_size
        save_picture(snapshot_of(outcome), Path(parsed.picture), width, height, parsed.theme)
    if stop.asked:
        return INTERRUPTED
    if outcome.reading is None or outcome.reading.opening_pct is None:
        raise NothingToMeasure(f"{outcome.source.info.uri}: no lock: {outcome.reason}")
    return 0


class _Stop:
    """Ctrl-C asks for the end: what was measured is still told. A second one ends at once."""

    def __init__(self) -> None:
        self.asked = False
        signal.signal(signal.SIGINT, self._ask)

    def _ask(self, number: int, frame: object) -> None:
        self.asked = True
        signal.signal(signal.SIGINT, signal.default_int_handler)

    def __call__(self) -> bool:
        return self.asked


class _progress:  # noqa: N801  # reads as the context manager it is
    """A bar with rate and time left, on a terminal only."""

    def __init__(self, source: "Source", *, quiet: bool) -> None:
        self._source = source
        self._bar: Callable[[int], None] | None = None
        self._show = sys.stderr.isatty() and not quiet

    def __enter__(self) -> Callable[[int], None] | None:
        if not self._show:
            return None
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

        info = self._source.info
        self._rich = Progress(
            TextColumn("{task.description}"),
            BarColumn(),
            TextColumn("{task.percentage:3.0f} %" if info.samples else "{task.completed} samples"),
            TextColumn("{task.fields[speed]}"),
            TimeRemainingColumn(),
            console=Console(stderr=True),
            transient=True,
        )
        task = self._rich.add_task("measuring", total=info.samples, speed="")
        self._rich.start()

        def advance(samples: int) -> None:
            speed = self._rich.tasks[0].speed
            words = f"{speed / 1e6:.2f} Msample/s" if speed else ""
            self._rich.update(task, completed=samples, speed=words)

        return advance

    def __exit__(self, *_: object) -> None:
        if self._show:
            self._rich.stop()


def _announce_compilation() -> None:
    """The first run on a machine compiles the kernels: say so before the silence."""
    from importlib.util import find_spec

    spec = find_spec("dsp")
    if spec is None or not spec.submodule_search_locations:
        return
    cache = os.environ.get("NUMBA_CACHE_DIR") or Path(spec.submodule_search_locations[0]) / "_kernels" / "__pycache__"
    if not any(Path(cache).rglob("*.nbi")):
        print("lidwatch: compiling its loops for this machine, once, some ten seconds", file=sys.stderr)  # noqa: T201


def _check_picture(path: Path) -> None:
    if path.suffix.lower() != ".png":
        raise InputError(f"--picture {path}: pictures are PNG; give a name that ends in .png")
    if not path.parent.is_dir():
        raise InputError(f"--picture {path}: there is no folder {path.parent}; make it first")


def _number(text: str) -> float:
    value = float(text)
    if value != value or abs(value) == float("inf"):
        raise ValueError(text)
    return value


def _positive(text: str) -> float:
    value = _number(text)
    if value <= 0:
        raise argparse.ArgumentTypeError(f"must be above 0, got {text}")
    return value


def _positive_or_auto(text: str) -> float | None:
    return None if text == "auto" else _positive(text)


def _number_or_auto(text: str) -> float | None:
    return None if text == "auto" else _number(text)


def _bandwidth(text: str) -> float:
    value = _number(text)
    if not 1e-5 <= value <= 0.05:
        raise argparse.ArgumentTypeError(f"BnT must lie between 0.00001 and 0.05, got {text}")
    return value


def _rate(text: str) -> float:
    value = _number(text)
    if not 1e-15 <= value < 0.5:
        raise argparse.ArgumentTypeError(f"must lie between 1e-15 and 0.5, got {text}")
    return value


def _whole(text: str) -> int:
    value = int(text)
    if not 1 <= value <= 10**9:
        raise argparse.ArgumentTypeError(f"must be a whole number above 0, got {text}")
    return value


def _channels(text: str) -> tuple[int, ...]:
    return tuple(_whole(part) for part in text.split(","))


def _size(text: str) -> tuple[int, int]:
    width, cross, height = text.lower().partition("x")
    if not cross or not (width.isdigit() and height.isdigit()):
        raise argparse.ArgumentTypeError(f"must look like 1280x800, got {text}")
    if not (640 <= int(width) <= 7680 and 400 <= int(height) <= 4320):
        raise argparse.ArgumentTypeError(f"must lie between 640x400 and 7680x4320, got {text}")
    return int(width), int(height)


for _check in (_number, _positive, _positive_or_auto, _number_or_auto, _bandwidth, _rate):
    _check.__name__ = "number"
for _check in (_whole, _channels):
    _check.__name__ = "whole number"


if __name__ == "__main__":
    sys.exit(main())
