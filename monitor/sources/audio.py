"""Live samples from a sound card, by way of sounddevice (an optional extra)."""

import importlib
import threading
from collections import deque
from dataclasses import dataclass
from types import ModuleType
from typing import Any, Final, Protocol

import numpy as np
from numpy.typing import NDArray

from dsp.block import Block
from monitor.errors import InputError, printable
from monitor.sources.base import SampleOptions, check_options, choose_channels
from monitor.sources.formats import from_integers
from monitor.sources.stream import LiveSource
from monitor.sources.wire import Item, StreamEvent

PREFIX: Final = "audio:"
_FULL_SCALE: Final = 1 << 31
_END_STOP: Final = 32767 << 16  # where a 16-bit converter stops; PortAudio fills the lower bits with zeros
END_STOP: Final = _END_STOP / _FULL_SCALE
"""A sample of this size or more is taken for clipped."""
_BLOCK_S: Final = 0.02
_HELD_BLOCKS: Final = 100


@dataclass(frozen=True, slots=True)
class _Arrived:
    frames: NDArray[np.int32]
    overflow: bool


class _Status(Protocol):
    input_overflow: bool


class AudioSource(LiveSource):
    """One channel of a sound card, or two as I and Q.

    PortAudio's thread calls in and puts what it has into a short queue; `poll` is called by the owner.

    Attributes
    ----------
    rate_hz
        The card's.
    """

    def __init__(self, uri: str, options: SampleOptions) -> None:
        """``uri`` is ``audio:NAME`` (a part of the device's name or its number) or ``audio:``. Raises InputError."""
        check_options(options)
        name = uri.removeprefix(PREFIX)
        if options.format is not None:
            raise InputError(f"{uri}: the sound card says its own format; leave out --format")
        self.uri = uri
        self.warnings: tuple[str, ...] = ()
        self.ended = False
        self._arrived: deque[_Arrived] = deque()
        self._changed = threading.Condition()
        self._unread = 0
        self._finished = False
        self._next = 0
        self._started = False
        sounddevice = _load(uri)
        device: str | int | None = int(name) if name.isascii() and name.isdecimal() else name or None
        try:
            found = sounddevice.query_devices(device, "input")
            self.rate_hz = float(options.rate_hz or found["default_samplerate"])
            n_channels = self._channels(options, int(found["max_input_channels"]))
            self._choice = choose_channels(options, n_channels, complex_samples=False, where=uri)
            self._stream: Any = sounddevice.InputStream(
                samplerate=self.rate_hz,
                blocksize=max(1, round(_BLOCK_S * self.rate_hz)),
                device=device,
                channels=n_channels,
                dtype="int32",
                callback=self._put,
                finished_callback=self._finish,
            )
            try:
                self._stream.start()
            except BaseException:
                self._stream.close()
                raise
        except (ValueError, sounddevice.PortAudioError) as error:
            reason = printable(str(error))
            raise InputError(f"{uri}: {reason}; python -m sounddevice lists the devices") from error

    @staticmethod
    def _channels(options: SampleOptions, most: int) -> int:
        if options.channels is not None:
            return min(most, max(options.channels))
        return min(most, 2 if options.iq else 1)

    def _put(self, frames: NDArray[np.int32], count: int, times: object, status: "_Status") -> None:
        with self._changed:
            if len(self._arrived) >= _HELD_BLOCKS:
                self._unread += len(self._arrived.popleft().frames)
            self._arrived.append(_Arrived(frames.copy(), bool(status.input_overflow)))
            self._changed.notify_all()

    def _finish(self) -> None:
        with self._changed:
            self._finished = True
            self._changed.notify_all()

    def poll(self, timeout_s: float) -> tuple[Item, ...]:
        """What has come; see `LiveSource`. An ``overflow`` event tells of samples lost before it, of unknown number."""
        with self._changed:
            self._changed.wait_for(lambda: self._arrived or self._finished, max(0.0, timeout_s))
            arrived = list(self._arrived)
            self._arrived.clear()
            unread, self._unread = self._unread, 0
            finished = self._finished
        items: list[Item] = []
        if arrived and not self._started:
            self._started = True
            form = "ci32_le" if self._choice.iq else "ri32_le"
            text = f"samples arrive ({self.rate_hz:.12g} Hz, sound card)"
            items.append(StreamEvent("start", text, self._next, self.rate_hz, form))
        for part in arrived:
            if part.overflow:
                items.append(StreamEvent("overflow", "the sound card lost samples before these", self._next + unread))
            items.append(self._block(part.frames, unread))
            unread = 0
        if finished and not self.ended:
            self.ended = True
            items.append(StreamEvent("ended", "the sound card stopped", self._next))
        return tuple(items)

    def _block(self, frames: NDArray[np.int32], lost: int) -> Block:
        values = np.ascontiguousarray(frames[:, self._choice.columns]).reshape(-1)
        samples, clipped, nonfinite = from_integers(
            values, self._choice.iq, low=-_END_STOP, high=_END_STOP, full_scale=_FULL_SCALE
        )
        start = self._next + lost
        self._next = start + samples.size
        return Block(samples, start, lost, clipped, nonfinite)

    def close(self) -> None:
        """Stop and release the sound card; may be called twice."""
        self.ended = True
        self._stream.close()


def _load(uri: str) -> ModuleType:
    try:
        return importlib.import_module("sounddevice")
    except ImportError as error:
        raise InputError(f"{uri}: sound cards need an extra: pip install 'lidwatch[audio]'") from error
    except OSError as error:  # the binding is there, the library is not
        raise InputError(f"{uri}: PortAudio is missing; on Debian: sudo apt-get install libportaudio2") from error
