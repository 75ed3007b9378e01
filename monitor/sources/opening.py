"""From a name to an open source."""

import os
import stat
import sys
from typing import BinaryIO, Final

from monitor.errors import InputError
from monitor.sources.base import BLOCK_SAMPLES, SampleOptions, Source, check_options, settle_rate
from monitor.sources.formats import parse_datatype
from monitor.sources.raw import open_raw_file, open_raw_stream, raw_format

_SIGMF_SUFFIXES: Final = (".sigmf-meta", ".sigmf-data", ".sigmf", ".sigmf-collection")


def open_source(
    uri: str, options: SampleOptions, stdin: BinaryIO | None = None, *, block_samples: int = BLOCK_SAMPLES
) -> Source:
    """Open samples by name.

    Parameters
    ----------
    uri
        ``-`` for raw samples on standard input; a SigMF recording by the name of either file, their common stem, or
        its archive; a sound file; or a file (or named pipe) of raw samples, for which the options must give format
        and rate.
    options
        What the user says of the samples. A format given for a SigMF recording wins over its metadata, as a rate
        does; given for a sound file it is a contradiction.
    stdin
        Stands for standard input; stays open.
    block_samples
        Most samples in a block, above 0.

    Raises
    ------
    InputError
        The input or the options are unusable; the text says where and what to do.
    """
    check_options(options)
    if options.format is not None:
        parse_datatype(options.format)
    if uri == "-":
        return open_raw_stream(
            uri, options, stdin or _standard_input(), block_samples, owned=False, where="standard input"
        )
    if not uri or "\0" in uri:
        raise InputError(f"'{uri}': is not a file name")
    try:
        return _open_path(uri, options, block_samples)
    except OSError as error:
        raise InputError(f"{uri}: cannot be read: {error.strerror or error}") from error


def is_stream(uri: str) -> bool:
    """Whether it can be read only once: standard input, or a named pipe."""
    mode = None if uri == "-" or "\0" in uri else _mode(uri)
    return uri == "-" or (mode is not None and stat.S_ISFIFO(mode))


def _open_path(uri: str, options: SampleOptions, block_samples: int) -> Source:
    mode = _mode(uri)
    is_sigmf = uri.lower().endswith(_SIGMF_SUFFIXES)
    if is_sigmf or mode is None or stat.S_ISDIR(mode):
        from monitor.sources.sigmf_recording import find_recording, open_recording

        if is_sigmf and mode is not None and stat.S_ISDIR(mode):
            raise InputError(f"{uri}: is a directory; name a recording in it")
        recording = find_recording(uri)
        if recording is not None:
            return open_recording(uri, recording, options, block_samples)
        if mode is None:
            raise InputError(f"{uri}: no such file")
    if stat.S_ISDIR(mode):
        raise InputError(f"{uri}: is a directory; name a recording in it")
    if stat.S_ISFIFO(mode):
        raw_format(options, uri)  # before opening, which waits for somebody to write
        settle_rate(None, options, uri, [])
        stream = open(uri, "rb", buffering=0)  # noqa: SIM115 - closed by the source
        try:
            return open_raw_stream(uri, options, stream, block_samples, owned=True, where=uri)
        except BaseException:
            stream.close()
            raise
    if not stat.S_ISREG(mode):
        raise InputError(f"{uri}: is a device, not a recording; pipe its samples into '-'")
    if not os.path.getsize(uri):
        raise InputError(f"{uri}: is empty")
    return _open_file(uri, options, block_samples)


def _open_file(uri: str, options: SampleOptions, block_samples: int) -> Source:
    from monitor.sources.sound import looks_like_sound, open_sound_file

    with open(uri, "rb"):  # the sound-file library would say no more than "System error"
        pass
    # the sound-file library is not loaded for what is plainly raw
    if options.format is None or looks_like_sound(uri):
        sound = open_sound_file(uri, options, block_samples)
        if sound is not None:
            return sound
    return open_raw_file(uri, options, block_samples)


def _mode(path: str) -> int | None:
    try:
        return os.stat(path).st_mode
    except (FileNotFoundError, NotADirectoryError):
        return None


def _standard_input() -> BinaryIO:
    if sys.stdin is None:
        raise InputError("standard input: is closed; pipe raw samples into it")
    if sys.stdin.isatty():
        raise InputError("standard input: is a terminal; pipe raw samples into it")
    return sys.stdin.buffer
