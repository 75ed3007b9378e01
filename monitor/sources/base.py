"""What every source of samples has in common: the options, what is known at opening, and the checks of both."""

import math
from collections.abc import Iterator
from dataclasses import dataclass
from types import TracebackType
from typing import Protocol, Self

from dsp.block import Block
from monitor.errors import InputError

BLOCK_SAMPLES = 65536
_READ_BYTES = 16 << 20  # most that is held of a file with many channels


@dataclass(frozen=True, slots=True)
class SampleOptions:
    """What the user says of the samples; ``None`` leaves it to the file.

    Attributes
    ----------
    rate_hz
        Sample rate, above 0; wins over a file's own, which is then noted.
    format
        SigMF datatype name of raw samples (`monitor.sources.formats.parse_datatype`).
    channels
        Channels as users count them, from 1: one for a real signal, two with ``iq`` for I and Q.
    iq
        Two real channels are I and Q.
    start_s, duration_s
        The stretch to deliver, in seconds of the recording's time.
    """

    rate_hz: float | None = None
    format: str | None = None
    channels: tuple[int, ...] | None = None
    iq: bool = False
    start_s: float = 0.0
    duration_s: float | None = None


@dataclass(frozen=True, slots=True)
class SourceInfo:
    """What is known of a source when it is opened.

    Attributes
    ----------
    uri
        As the user gave it.
    format
        SigMF datatype name, or container and encoding of a sound file such as ``WAV PCM_16``.
    sample_rate_hz
        Samples (I/Q pairs if complex) per second.
    complex_samples
        Whether the blocks are complex64 rather than float32.
    samples
        How many samples `Source.blocks` is to deliver, start and duration applied; ``None`` where only the end will
        tell.
    centre_hz
        Radio frequency of the recording's centre: SigMF's core:frequency of its first capture.
    notes
        Defects seen at opening, one line each.
    start
        Index of the first sample to be delivered, counted in the whole recording.
    """

    uri: str
    format: str
    sample_rate_hz: float
    complex_samples: bool
    samples: int | None
    centre_hz: float | None
    notes: tuple[str, ...]
    start: int = 0


class Closing(Protocol):
    """A context that closes itself at its end."""

    def close(self) -> None:
        """Give back what is held."""
        ...

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


class Source(Closing, Protocol):
    """An open source of samples; owned by one thread, closed by ``with`` or `close`.

    Attributes
    ----------
    info
        What was known at opening.
    notes
        Defects met while reading, one line each, beside those in ``info.notes``; grows during `blocks`.
    """

    info: SourceInfo
    notes: list[str]

    def blocks(self) -> Iterator[Block]:
        """Deliver the samples in order; ``Block.start`` counts in the whole recording. Damage is noted, not raised."""
        ...

    def close(self) -> None:
        """Close what this source has opened; a stream that was handed in stays open."""
        ...


@dataclass(frozen=True, slots=True)
class ChannelChoice:
    """Which of the interleaved channels are delivered.

    Attributes
    ----------
    columns
        One or two indices from 0.
    iq
        The two columns are I and Q of one complex signal.
    """

    columns: tuple[int, ...]
    iq: bool


def check_options(options: SampleOptions) -> None:
    """Refuse numbers that make no sense for any source; raise InputError."""
    rate, duration, channels = options.rate_hz, options.duration_s, options.channels
    if rate is not None and not 0.0 < rate < math.inf:
        raise InputError(f"--rate {rate}: must be above 0 Hz and finite")
    if not 0.0 <= options.start_s < math.inf:
        raise InputError(f"--start {options.start_s}: must be 0 s or later and finite")
    if duration is not None and not 0.0 < duration < math.inf:
        raise InputError(f"--duration {duration}: must be above 0 s and finite")
    if channels is None:
        return
    given = ",".join(map(str, channels))
    if not channels or min(channels) < 1:
        raise InputError(f"--channels {given}: channels count from 1")
    if len(channels) > 2 or len(set(channels)) != len(channels):
        raise InputError(f"--channels {given}: give one channel, or two different ones with --iq")


def choose_channels(options: SampleOptions, n_channels: int, complex_samples: bool, where: str) -> ChannelChoice:
    """Decide which channels to deliver; raise InputError where the user has to choose.

    Parameters
    ----------
    options
        Its ``channels`` and ``iq`` are used, and have passed `check_options`.
    n_channels
        Interleaved channels in the file, at least 1.
    complex_samples
        Whether each channel is complex already; ``iq`` then says nothing new.
    where
        The name that starts an error's text.
    """
    chosen = options.channels
    pair = options.iq and not complex_samples
    if chosen is not None and max(chosen) > n_channels:
        raise InputError(f"{where}: there is no channel {max(chosen)}; it has {n_channels}")
    if pair:
        if n_channels < 2:
            raise InputError(f"{where}: --iq needs two channels and there is one; leave out --iq")
        if chosen is None and n_channels > 2:
            raise InputError(f"{where}: {n_channels} channels; name those of I and Q, such as --channels 1,2 --iq")
        if chosen is not None and len(chosen) != 2:
            raise InputError(f"{where}: --iq needs two channels, such as --channels 1,2 --iq")
        first, second = chosen or (1, 2)
        return ChannelChoice((first - 1, second - 1), iq=True)
    if chosen is None:
        if n_channels > 1:
            mend = "choose one with --channels" if complex_samples else "choose one with --channels, or say --iq"
            raise InputError(f"{where}: {n_channels} channels; {mend}")
        return ChannelChoice((0,), iq=False)
    if len(chosen) != 1:
        mend = "choose one" if complex_samples else "choose one, or add --iq if they are I and Q"
        raise InputError(f"{where}: two channels are two links; {mend}")
    return ChannelChoice((chosen[0] - 1,), iq=False)


def block_frames(block_samples: int, frame_bytes: int) -> int:
    """Return how many samples of all channels to read at a time, at least 1: fewer than asked if channels are many."""
    return max(1, min(block_samples, _READ_BYTES // frame_bytes))


def settle_rate(declared_hz: float | None, options: SampleOptions, where: str, notes: list[str]) -> float:
    """Return the rate in Hz: the option's, else the file's. Notes a contradiction; without either, InputError."""
    if declared_hz is not None and not 0.0 < declared_hz < math.inf:
        notes.append(f"the file gives a sample rate of {declared_hz:g} Hz, which cannot be")
        declared_hz = None
    if options.rate_hz is not None:
        if declared_hz is not None and declared_hz != options.rate_hz:
            notes.append(f"the file says {declared_hz:.12g} Hz; --rate {options.rate_hz:.12g} is used")
        return float(options.rate_hz)
    if declared_hz is None:
        raise InputError(f"{where}: no sample rate is known; give --rate HZ")
    return float(declared_hz)


def settle_span(length: int | None, rate_hz: float, options: SampleOptions, where: str) -> tuple[int, int | None]:
    """Return the first sample to deliver and the one after the last (``None``: to the end).

    ``length`` is the recording's length in samples, ``None`` if unknown. Raises InputError for a stretch that holds
    nothing.
    """
    first_exact = options.start_s * rate_hz
    if length is not None and first_exact > length - 0.5:
        raise InputError(
            f"{where}: --start {options.start_s:g} s is beyond the end; the recording lasts {length / rate_hz:.6g} s"
        )
    if not math.isfinite(first_exact):
        raise InputError(f"--start {options.start_s:g}: too far for {rate_hz:g} Hz")
    first = round(first_exact)
    if options.duration_s is None:
        return first, length
    count_exact = options.duration_s * rate_hz
    if count_exact < 0.5:
        raise InputError(f"--duration {options.duration_s:g}: shorter than one sample at {rate_hz:g} Hz")
    if length is not None and first + count_exact >= length:
        return first, length
    return (first, first + round(count_exact)) if math.isfinite(count_exact) else (first, None)
