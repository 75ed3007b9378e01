"""What a user says of a live source, and what opens it."""

import argparse
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

from monitor.errors import InputError

if TYPE_CHECKING:
    from monitor.sources.stream import LiveSource


def add_socket_options(parser: argparse.ArgumentParser) -> None:
    """The socket of a ZeroMQ stream."""
    socket = parser.add_argument_group("the socket")
    socket.add_argument("--socket", choices=("sub", "pull"), default="sub", help="ZeroMQ pattern (default sub)")
    socket.add_argument("--bind", action="store_true", help="bind the address instead of connecting to it")
    socket.add_argument("--topic", action="append", metavar="TEXT", help="subscribe to messages that begin with this")
    socket.add_argument("--key", type=Path, metavar="FILE", help="own NAME.key_secret: the stream is encrypted (CURVE)")
    socket.add_argument("--server-key", type=Path, metavar="FILE", help="the sender's NAME.key, to connect with --key")
    socket.add_argument(
        "--client-keys", type=Path, metavar="FOLDER", help="NAME.key files of who may connect, with --bind"
    )


def live_opener(parsed: argparse.Namespace) -> "Callable[[], LiveSource]":
    """What opens a live source by one link's arguments, in the thread that will own it. Raises InputError."""
    from monitor.sources import SampleOptions
    from monitor.sources.keys import Curve
    from monitor.sources.live import open_live
    from monitor.sources.stream import StreamOptions

    if parsed.channels is not None and not parsed.source.startswith("audio:"):
        raise InputError(f"{parsed.source}: a stream has one channel; leave out --channels")
    if parsed.key is None and (parsed.server_key or parsed.client_keys):
        raise InputError("--server-key and --client-keys go with --key, the own secret key")
    curve = Curve(parsed.key, parsed.server_key, parsed.client_keys) if parsed.key is not None else None
    stream = StreamOptions(parsed.rate, parsed.format, parsed.socket, parsed.bind, parsed.topic or "", curve)
    samples = SampleOptions(parsed.rate, parsed.format, parsed.channels, parsed.iq)
    return lambda: open_live(parsed.source, stream, samples)
