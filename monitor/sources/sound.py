"""Sound files, by way of libsndfile."""

import os
import re
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any, Final

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
from monitor.sources.formats import Decoded, from_floats, from_integers

if TYPE_CHECKING:
    import soundfile

SOUND_SUFFIXES: Final = frozenset(
    (
        ".wav", ".wave", ".wavex", ".flac", ".aif", ".aiff", ".aifc", ".rf64", ".w64", ".au", ".snd", ".caf", ".ogg",
        ".oga", ".opus", ".mp3", ".voc", ".svx", ".8svx", ".iff", ".sf", ".ircam", ".nist", ".sph", ".paf", ".pvf",
        ".xi", ".htk", ".sds", ".avr", ".mpc",
    )
)  # fmt: skip
_MPEG_SUFFIXES: Final = frozenset((".mp1", ".mp2", ".mp3", ".mpga"))
_SOUND_MAGIC: Final = (b"RIFF", b"RIFX", b"RF64", b"riff", b"FORM", b"fLaC", b"OggS", b".snd", b"caff")
_UNKNOWN_COUNT: Final = 1 << 62  # libsndfile gives about 2^63 frames where only the end will tell

# what the header's log of libsndfile says of a length that the file does not have
_CLAIM: Final = re.compile(r"^\W*(data|SSND|riff|Data Size)\s*:\s*(\d+) \(should be (\d+)\)", re.MULTILINE)
_CLAIM_RF64: Final = re.compile(r"Calculated frame count (\d+) does not match value from 'ds64' chunk of (\d+)")

# encoding: bits of its codes where they are linear
_LINEAR_BITS: Final = {
    "PCM_S8": 8, "PCM_U8": 8, "PCM_16": 16, "PCM_24": 24, "PCM_32": 32,
    "ALAC_16": 16, "ALAC_20": 20, "ALAC_24": 24, "ALAC_32": 32,
    "DPCM_8": 8, "DPCM_16": 16, "DWVW_12": 12, "DWVW_16": 16, "DWVW_24": 24,
}  # fmt: skip
# companded: largest magnitude as 16-bit numbers (ITU-T G.711 as libsndfile expands it)
_COMPANDED_PEAK: Final = {"ULAW": 32124, "ALAW": 32256}


def looks_like_sound(path: str) -> bool:
    """Say whether the name's suffix or the first bytes are those of a sound file."""
    if os.path.splitext(path)[1].lower() in SOUND_SUFFIXES:
        return True
    with open(path, "rb") as file:
        return file.read(4) in _SOUND_MAGIC


class SoundFileSource(Source):
    """One real channel, or two as I and Q, of an open sound file."""

    def __init__(
        self,
        file: "soundfile.SoundFile",
        info: SourceInfo,
        choice: ChannelChoice,
        stop: int | None,
        block_samples: int = BLOCK_SAMPLES,
    ) -> None:
        self.info = info
        self.notes: list[str] = []
        self._file = file
        self._choice = choice
        self._stop = stop
        bits = _LINEAR_BITS.get(file.subtype)
        peak = _COMPANDED_PEAK.get(file.subtype)
        self._low = self._high = 0
        if file.subtype == "DOUBLE":
            self._dtype = "float64"
        elif peak is not None:
            self._dtype, self._low, self._high = "int16", -peak, peak
        elif bits is not None:
            width = 16 if bits <= 16 else 32
            self._dtype = f"int{width}"
            # libsndfile puts the codes at the top of the number
            self._high = ((1 << (bits - 1)) - 1) << (width - bits)
            self._low = -(1 << (width - 1)) if file.subtype == "PCM_U8" else -self._high
        else:
            self._dtype = "float32"
        self._block_samples = block_frames(block_samples, np.dtype(self._dtype).itemsize * file.channels)

    def blocks(self) -> Iterator[Block]:
        """Deliver the samples from the start on; what a damaged file still gives, and then a note."""
        position = self.info.start
        if not self._go_to(position):
            return
        buffer = np.empty((self._block_samples, self._file.channels), self._dtype)
        while self._stop is None or position < self._stop:
            wanted = self._block_samples if self._stop is None else min(self._block_samples, self._stop - position)
            got, error = self._read(buffer[:wanted], position)
            if got:
                samples, clipped, nonfinite = self._convert(buffer[:got])
                yield Block(samples, position, 0, clipped, nonfinite)
            position += got
            if error:
                self.notes.append(f"damaged after sample {position} ({error}); what was read before is measured")
                return
            if not got:
                if self._stop is not None:
                    self.notes.append(
                        f"cut short: the header leads to sample {self._stop}, the file ends after {position}"
                    )
                return

    def _convert(self, frames: NDArray[Any]) -> Decoded:
        columns, iq = self._choice.columns, self._choice.iq
        everything = columns == tuple(range(frames.shape[1]))
        values = (frames if everything else frames[:, columns]).reshape(-1)
        if self._dtype.startswith("int"):
            full_scale = 1 << (int(self._dtype[3:]) - 1)
            return from_integers(values, iq, low=self._low, high=self._high, full_scale=full_scale)
        return from_floats(values.copy(), iq)  # the buffer is used again for the next block

    def _read(self, out: NDArray[Any], position: int) -> tuple[int, str]:
        """Fill ``out``; return how many frames came and libsndfile's words if it failed after them."""
        import soundfile

        try:
            return len(self._file.read(len(out), dtype=self._dtype, always_2d=True, out=out)), ""
        except soundfile.SoundFileError as error:
            reason = _reason(error)
        try:  # frames decoded before the failure are in the buffer and in the position
            return max(0, min(self._file.tell() - position, len(out))), reason
        except soundfile.SoundFileError:
            return 0, reason

    def _go_to(self, position: int) -> bool:
        import soundfile

        try:
            if self._file.tell() != position:  # some encodings cannot seek at all
                self._file.seek(position)
        except soundfile.SoundFileError as error:
            self.notes.append(f"sample {position} cannot be reached ({_reason(error)})")
            return False
        return True

    def close(self) -> None:
        """Close the file."""
        self._file.close()


def open_sound_file(uri: str, options: SampleOptions, block_samples: int) -> SoundFileSource | None:
    """Open a sound file; return ``None`` if libsndfile does not know it, raise InputError if it cannot be used."""
    import soundfile

    class Forward(soundfile.SoundFile):  # type: ignore[misc,unused-ignore]
        """Reads on without a seek after every read: at the cut end of a FLAC file that seek loses what was decoded."""

        def seekable(self) -> bool:
            return False

    suffix = os.path.splitext(uri)[1].lower()
    if suffix == ".raw":
        return None  # the binding would take the name for headerless samples
    try:
        file = Forward(uri)
    except (soundfile.SoundFileError, TypeError, ValueError) as error:
        if looks_like_sound(uri) and options.format is None:
            raise InputError(f"{uri}: not a usable sound file ({_reason(error)})") from error
        return None
    try:
        if file.format == "MP3" and suffix not in _MPEG_SUFFIXES:
            file.close()  # eleven set bits are taken for an MPEG header, and raw samples often begin so
            return None
        if not file.frames and options.format is not None:
            file.close()  # a recorder cut off before it wrote the length: the user may read it as raw
            return None
        return _source(file, uri, options, block_samples)
    except BaseException:
        file.close()
        raise


def _source(file: "soundfile.SoundFile", uri: str, options: SampleOptions, block_samples: int) -> SoundFileSource:
    import soundfile

    kind = f"{file.format} {file.subtype}"
    if options.format is not None:
        raise InputError(f"{uri}: a sound file ({kind}) that says its own format; leave out --format")
    if not file.frames:
        raise InputError(
            f"{uri}: a sound file ({kind}) with no samples by its header; if some follow it, give --format and --rate"
        )
    notes = _claims(file.extra_info)
    rate_hz = settle_rate(float(file.samplerate), options, uri, notes)
    choice = choose_channels(options, file.channels, complex_samples=False, where=uri)
    length = file.frames if file.frames < _UNKNOWN_COUNT else None
    first, stop = settle_span(length, rate_hz, options, uri)
    if first:
        try:
            file.seek(first)
        except soundfile.SoundFileError as error:
            raise InputError(f"{uri}: --start {options.start_s:g} s cannot be reached ({_reason(error)})") from error
    samples = stop - first if stop is not None and length is not None else None
    info = SourceInfo(uri, kind, rate_hz, choice.iq, samples, None, tuple(notes), first)
    return SoundFileSource(file, info, choice, stop, block_samples)


def _claims(log: str) -> list[str]:
    """Return a note for each length in the header that the file does not have."""
    notes = []
    for _, claimed, actual in _CLAIM.findall(log):
        if 0x7FFFFF00 <= int(claimed) <= 0x7FFFFFFF or int(claimed) >= 0xFFFFFF00:
            notes.append("the header leaves the length open; the file is read to its end")
        elif int(claimed) > int(actual):
            notes.append(
                f"cut short: the header announces {claimed} bytes, there are {actual}; what is there is measured"
            )
    for actual, claimed in _CLAIM_RF64.findall(log):
        if int(claimed) > int(actual):
            notes.append(
                f"cut short: the header announces {claimed} samples, there are {actual}; what is there is measured"
            )
    return notes[:1]


def _reason(error: Exception) -> str:
    return printable(getattr(error, "error_string", "") or str(error)).rstrip(".")
