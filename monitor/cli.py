"""The command line. Heavy imports wait until the arguments are known to be good."""

import argparse
import sys
from collections.abc import Sequence

from monitor.arguments import (
    Parser,
    add_journal_options,
    add_link_options,
    add_measure_options,
    add_output_options,
    add_sample_options,
    add_taps_option,
    join_negative_numbers,
    positive,
)
from monitor.errors import InputError, MonitorError
from monitor.key_command import add_key_arguments
from monitor.probing import add_probe_arguments
from monitor.replay import INTERRUPTED, discard_standard_output, replay
from monitor.running import add_capture_options
from monitor.showing import add_view_options
from monitor.surveying import add_survey_arguments
from monitor.terminal import say
from monitor.version import version
from monitor.watching import add_watch_arguments

UNUSABLE = 2


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command; returns the exit status. Whatever goes wrong is one line on standard error."""
    try:
        return _run(sys.argv[1:] if arguments is None else arguments)
    except MonitorError as error:
        say(f"lidwatch: {error}")
        return error.exit_status
    except KeyboardInterrupt:
        say("lidwatch: interrupted")
        return INTERRUPTED
    except BrokenPipeError:  # of --help or --version
        discard_standard_output()
        return 0
    except MemoryError:
        say("lidwatch: out of memory; give a smaller --window or close other programs")
        return UNUSABLE
    except Exception as error:
        if sys.flags.dev_mode:
            raise
        say(
            f"lidwatch: internal fault, {_place_of(error)}; python -X dev -m monitor.cli with the same arguments shows more"
        )
        return UNUSABLE


def _run(arguments: Sequence[str]) -> int:
    try:
        parsed = parser().parse_args(join_negative_numbers(arguments))
    except SystemExit as end:  # --help has said it
        if sys.stdout is not None:
            sys.stdout.flush()
        return int(end.code or 0)
    if parsed.version:
        sys.stdout.write(f"lidwatch {version()}\n")
        sys.stdout.flush()
        return 0
    if not hasattr(parsed, "run"):
        raise InputError("say what to do, such as: lidwatch replay FILE; lidwatch --help lists the commands")
    return int(parsed.run(parsed))


def parser() -> argparse.ArgumentParser:
    """The parser of all commands; each sets ``run``, which takes the parsed arguments and returns the exit status."""
    top = Parser(
        prog="lidwatch",
        description="Finds a link in a stream of samples, tracks its symbol clock and measures its eye.",
        allow_abbrev=False,
    )
    top.add_argument("--version", action="store_true", help="show the version and end")
    commands = top.add_subparsers(title="commands", metavar="COMMAND", parser_class=Parser)
    command = commands.add_parser(
        "replay",
        help="measure a recording",
        description="Measures the link in a recording, or in raw samples on standard input.",
        epilog="Exit status: 0 measured; 1 a limit was broken; 2 input or arguments unusable; 3 nothing to measure; 130 interrupted.",
        allow_abbrev=False,
    )
    command.add_argument(
        "source",
        nargs="+",
        metavar="FILE",
        help="sound file, raw file, SigMF recording, or - for standard input; each is a link",
    )
    add_sample_options(command)
    add_link_options(command)
    add_measure_options(command)
    add_output_options(command)
    add_taps_option(command)
    add_journal_options(command)
    add_capture_options(command)
    command.add_argument(
        "--every", type=positive, default=1.0, metavar="S", help="a journal line each so often (default 1)"
    )
    command.add_argument(
        "--pace", type=positive, metavar="N", help="with a view, at N times its own speed (default: as fast as can be)"
    )
    add_view_options(command)
    command.set_defaults(run=replay)
    live = commands.add_parser(
        "watch",
        help="watch a live link",
        description="Takes samples as they come, shows the eye, keeps the journal and raises alarms.",
        epilog="Exit status: 0 the watch ended; 2 source or arguments unusable; 130 interrupted.",
        allow_abbrev=False,
    )
    add_watch_arguments(live)
    look = commands.add_parser(
        "probe",
        help="say what link there is",
        description="Listens to a few seconds and says what the link is: symbol rate, scheme, pulse, carrier, SNR, each with how "
        "sure that is and what else it might be; of several links the strongest first.",
        epilog="Exit status: 0 a link; 2 source or arguments unusable; 3 no link; 130 interrupted.",
        allow_abbrev=False,
    )
    add_probe_arguments(look)
    many = commands.add_parser(
        "survey",
        help="measure many recordings",
        description="Measures many recordings side by side: a row each, and totals.",
        epilog="Exit status: 0 all measured; 1 a limit was broken; 2 a recording or the arguments unusable; 3 a recording "
        "without an eye; 130 interrupted.",
        allow_abbrev=False,
    )
    add_survey_arguments(many)
    pair = commands.add_parser(
        "keys",
        help="make keys for an encrypted stream",
        description="Makes NAME.key, to be given to the other side, and NAME.key_secret, which stays where it is.",
        epilog="The side that binds names its own secret key and the folder of the keys it lets in (--key, --client-keys); "
        "the side that connects its own secret key and the other's public one (--key, --server-key).",
        allow_abbrev=False,
    )
    add_key_arguments(pair)
    return top


def _place_of(error: Exception) -> str:
    trace = error.__traceback__
    while trace is not None and trace.tb_next is not None:
        trace = trace.tb_next
    place = f"{trace.tb_frame.f_code.co_filename}:{trace.tb_lineno}" if trace is not None else "nowhere"
    return f"{type(error).__name__} at {place}: {error}"


if __name__ == "__main__":
    sys.exit(main())
