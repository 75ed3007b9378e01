"""`lidwatch keys`: makes the key files of one side of an encrypted stream."""

import argparse
from pathlib import Path

from monitor.errors import InputError


def add_key_arguments(parser: argparse.ArgumentParser) -> None:
    """The options of the command."""
    parser.add_argument("name", metavar="NAME", help="of the side that is to have the keys, such as harbour")
    parser.add_argument(
        "--folder", type=Path, default=Path("."), metavar="F", help="where to put them (default: this folder)"
    )
    parser.set_defaults(run=keys)


def keys(parsed: argparse.Namespace) -> int:
    """Run the command on parsed arguments; returns the exit status. Raises InputError."""
    import sys

    try:
        from monitor.sources.keys import make_keys

        public, secret = make_keys(parsed.folder, parsed.name)
    except ImportError as error:
        raise InputError(f"keys need pyzmq with its encryption, which does not load: {error}") from None
    if sys.stdout is not None:
        sys.stdout.write(f"{public}: public, give it to the other side\n{secret}: secret, keep it here\n")
        sys.stdout.flush()
    return 0
