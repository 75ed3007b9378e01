"""Raw samples: a file, a part of a file that something else describes, or a stream such as standard input."""

import os
from collections.abc import Iterator, Sequence
from contextlib import suppress
from dataclasses import dataclass
from typing import Any, BinaryIO, Final

import numpy as np
from numpy.typing import NDArray

from dsp.block import Block
from monitor.errors import InputError, printable
from monitor.sources.base import (
    BLOCK_SAMPLES,
    ChannelChoice,
    SampleOptions,
    Source,
    SourceInfo,
    block_frames,
    choose_channels,
    settle_rate,
    settle_span,
)
from monitor.sources.formats import SampleFormat, parse_datatype

_CELLS: Final = {
    1: "u1",
    2: "u2",
    4: "u4",
    8: "u8",
    16: "c16",
}  # any type of the width: only copied, never computed with
_ONE_CHANNEL: Final = ChannelChoice((0,), iq=False)


@dataclass(frozen=True, slots=True)
class Stretch:
    """Samples that lie together in a file.

    Attributes
    ----------
    offset
        Byte at which the first one begins.
    start
        Its index in the stream; lost samples count.
    count
        How many (of each channel).
    """

    offset: int
    start: int
    count: int


@dataclass(frozen=True, slots=True)
class RawLayout:
    """How bytes become samples: the format of one channel, how many are interleaved, and which are wanted."""

    stored: SampleFormat
    n_channels: int = 1
    choice: ChannelChoice = _ONE_CHANNEL

    @property
    def frame_bytes(self) -> int:
        """Bytes of one sample of all channels."""
        return self.stored.bytes_per_sample * self.n_channels

    @property
    def delivered(self) -> SampleFormat:
        """The format of what is delivered: complex if two real channels become I and Q."""
        return self.stored.as_complex() if self.choice.iq else self.stored

    def pick(self, data: NDArray[np.uint8]) -> NDArray[np.uint8]:
        """Return the bytes of the wanted channels alone; ``data`` holds whole frames."""
        if self.n_channels == 1:
            return data
        cells: NDArray[Any] = data.view(_CELLS[self.stored.bytes_per_sample]).reshape(-1, self.n_channels)
        return np.ascontiguousarray(cells[:, self.choice.columns]).reshape(-1).view(np.uint8)


class RawFile(Source):
    """Samples read from stretches of a file, in constant memory.

    Parameters
    ----------
    path
        The file.
    info
        What is known of it.
    layout
        How its bytes are samples.
    stretches
        What to deliver, ascending; samples missing between two of them are reported as lost.
    block_samples
        Most samples in a block.

    Raises
    ------
    InputError
        The file cannot be opened.
    """

    def __init__(
        self,
        path: str,
        info: SourceInfo,
        layout: RawLayout,
        stretches: Sequence[Stretch],
        block_samples: int = BLOCK_SAMPLES,
    ) -> None:
        self.info = info
        self.notes: list[str] = []
        self._layout = layout
        self._stretches = tuple(stretches)
        self._block_samples = block_frames(block_samples, layout.frame_bytes)
        try:
            self._file = open(path, "rb", buffering=0)  # noqa: SIM115 - closed by close()
        except OSError as error:
            raise InputError(f"{path}: cannot be read: {error.strerror}") from error

    def blocks(self) -> Iterator[Block]:
        """Deliver the stretches from the first on; may be called again."""
        decode = self._layout.delivered.decode
        end = self._stretches[0].start if self._stretches else 0
        for stretch in self._stretches:
            lost, end = stretch.start - end, stretch.start + stretch.count
            for start in range(stretch.start, end, self._block_samples):
                wanted = min(self._block_samples, end - start)
                data = self._read(stretch.offset + (start - stretch.start) * self._layout.frame_bytes, wanted)
                if data.size:
                    yield Block(*_in_block_order(decode(self._layout.pick(data)), start, lost))
                lost = 0
                got = data.size // self._layout.frame_bytes
                if got < wanted:
                    self.notes.append(f"reading stopped at sample {start + got}; the file became shorter or unreadable")
                    return

    def _read(self, offset: int, n_frames: int) -> NDArray[np.uint8]:
        """Return the bytes of ``n_frames`` frames, or of those before an end; a new array, as decoding views it."""
        frame_bytes = self._layout.frame_bytes
        data = np.empty(n_frames * frame_bytes, np.uint8)
        filled = 0
        try:
            self._file.seek(offset)
            while filled < data.size:
                n = self._file.readinto(data[filled:].data)
                if not n:
                    break
                filled += n
        except OSError as error:
            self.notes.append(printable(f"read error at byte {offset + filled}: {error.strerror}"))
        return data[: filled - filled % frame_bytes]

    def close(self) -> None:
        """Close the file."""
        self._file.close()


class RawStream(Source):
    """Samples from a stream that cannot be rewound: standard input or a named pipe.

    A block is what one read brings, so that a slow stream is not held back until a block is full.
    """

    def __init__(
        self, stream: BinaryIO, info: SourceInfo, stop: int | None, block_samples: int = BLOCK_SAMPLES, *, owned: bool
    ) -> None:
        self.info = info
        self.notes: list[str] = []
        self._stream = stream
        self._format = parse_datatype(info.format)
        self._next = 0
        self._stop = stop
        self._block_samples = block_samples
        self._owned = owned
        self._rest = b""

    def blocks(self) -> Iterator[Block]:
        """Deliver samples until the stream ends or the duration is over; goes on where the last call stopped."""
        size = self._format.bytes_per_sample
        while self._stop is None or self._next < self._stop:
            skipping = self._next < self.info.start
            limit = self.info.start if skipping else self._stop
            wanted = self._block_samples if limit is None else min(self._block_samples, limit - self._next)
            data = self._read(wanted * size - len(self._rest))
            if not data:
                break
            if self._rest:
                data = self._rest + data
            whole = len(data) - len(data) % size
            self._rest = data[whole:]
            start, self._next = self._next, self._next + whole // size
            if whole and not skipping:
                yield Block(*_in_block_order(self._format.decode(data[:whole]), start, 0))
        else:
            return
        if self._next == 0:
            self.notes.append("the stream ended without a sample")
        elif self._next <= self.info.start:
            self.notes.append(f"the stream ended after {self._next} samples, before --start")
        if self._rest:
            self.notes.append(partial_note(len(self._rest)))
            self._rest = b""

    def _read(self, n_bytes: int) -> bytes:
        read = getattr(self._stream, "read1", self._stream.read)
        try:
            return read(n_bytes) or b""
        except (OSError, ValueError) as error:  # ValueError: closed meanwhile
            self.notes.append(printable(f"the stream broke after sample {self._next}: {error}"))
            return b""

    def close(self) -> None:
        """Close the stream if it was opened here."""
        if self._owned:
            self._stream.close()


def _in_block_order(decoded: tuple[Any, int, int], start: int, lost: int) -> tuple[Any, int, int, int, int]:
    samples, clipped, nonfinite = decoded
    return samples, start, lost, clipped, nonfinite


def partial_note(n_bytes: int) -> str:
    """Say that the end of a file is not a whole sample."""
    return f"left out {n_bytes} byte{'s' * (n_bytes > 1)} at the end: not a whole sample"


def raw_format(options: SampleOptions, where: str) -> SampleFormat:
    """Return the format that the options give for raw samples; raise InputError if they give none or contradict it."""
    if options.format is None:
        also = " and --rate HZ" if options.rate_hz is None else ""
        what = "raw samples" if where == "standard input" else "no known sound file or SigMF recording; raw samples"
        raise InputError(f"{where}: {what} need --format NAME (cf32_le, ri16_le, cu8){also}")
    stored = parse_datatype(options.format)
    if options.iq and not stored.complex_samples:
        mend = stored.as_complex().name
        raise InputError(f"{where}: --iq with raw samples of format {stored.name}; I/Q pairs are --format {mend}")
    if options.channels not in (None, (1,)):
        raise InputError(
            f"{where}: raw samples are one channel; describe several in SigMF metadata (core:num_channels)"
        )
    return stored


def clip_stretches(stretches: Sequence[Stretch], frame_bytes: int, first: int, stop: int | None) -> list[Stretch]:
    """Return what lies from stream index ``first`` to before ``stop`` (``None``: to the end)."""
    clipped = []
    for stretch in stretches:
        begin = max(stretch.start, first)
        end = stretch.start + stretch.count if stop is None else min(stretch.start + stretch.count, stop)
        if end > begin:
            clipped.append(Stretch(stretch.offset + (begin - stretch.start) * frame_bytes, begin, end - begin))
    return clipped


def open_raw_file(uri: str, options: SampleOptions, block_samples: int) -> RawFile:
    """Open a file of nothing but samples; raise InputError."""
    stored = raw_format(options, uri)
    notes: list[str] = []
    rate_hz = settle_rate(None, options, uri, notes)
    count, partial = divmod(os.path.getsize(uri), stored.bytes_per_sample)
    if partial:
        notes.append(partial_note(partial))
    if not count:
        raise InputError(f"{uri}: shorter than one {stored.name} sample; is the format right?")
    layout = RawLayout(stored, 1, choose_channels(options, 1, stored.complex_samples, uri))
    first, stop = settle_span(count, rate_hz, options, uri)
    stretches = clip_stretches([Stretch(0, 0, count)], layout.frame_bytes, first, stop)
    info = SourceInfo(
        uri, stored.name, rate_hz, stored.complex_samples, stretches[0].count, None, tuple(notes), stretches[0].start
    )
    return RawFile(uri, info, layout, stretches, block_samples)


def open_raw_stream(
    uri: str, options: SampleOptions, stream: BinaryIO, block_samples: int, *, owned: bool, where: str
) -> RawStream:
    """Take raw samples from a stream; raise InputError."""
    stored = raw_format(options, where)
    notes: list[str] = []
    rate_hz = settle_rate(None, options, where, notes)
    first, stop = settle_span(None, rate_hz, options, where)
    with suppress(OSError, ValueError, AttributeError):
        if not os.get_blocking(stream.fileno()):
            os.set_blocking(stream.fileno(), True)  # a read that returns nothing would look like the end
    info = SourceInfo(uri, stored.name, rate_hz, stored.complex_samples, None, None, tuple(notes), first)
    return RawStream(stream, info, stop, block_samples, owned=owned)
