"""From a name to an open live source: a ZeroMQ stream, standard input, or a sound card."""

from typing import BinaryIO

from monitor.errors import InputError
from monitor.sources.base import SampleOptions
from monitor.sources.endpoint import is_stream
from monitor.sources.stream import LiveSource, StreamOptions, open_stream


def is_live(uri: str) -> bool:
    """Whether ``uri`` names a live source rather than a recording; ``-`` does."""
    return uri == "-" or is_stream(uri) or uri.startswith("audio:")


def open_live(uri: str, stream: StreamOptions, samples: SampleOptions, stdin: BinaryIO | None = None) -> LiveSource:
    """Open a live source in the thread that is to use and close it (see `monitor.sources.ring.ThreadedReader`).

    Parameters
    ----------
    uri
        ``tcp://HOST:PORT`` or ``ipc://PATH``; ``-``; ``audio:NAME``.
    stream
        For ZeroMQ and standard input: rate and format; for ZeroMQ all the rest.
    samples
        For sound cards: rate and channels.
    stdin
        Stands for standard input.

    Raises
    ------
    InputError
        The source cannot be opened, or ``uri`` is none.
    """
    if is_stream(uri):
        return open_stream(uri, stream)
    if uri == "-":
        from monitor.sources.stdin import StdinSource

        return StdinSource(stream.rate_hz, stream.format, stdin)
    if uri.startswith("audio:"):
        from monitor.sources.audio import AudioSource

        return AudioSource(uri, samples)
    raise InputError(f"{uri}: is not live; give tcp://HOST:PORT, ipc://PATH, - or audio:NAME")
