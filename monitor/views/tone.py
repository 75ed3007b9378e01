"""A tone that rises as the eye opens, so that nobody has to look; through sounddevice, which is an extra."""

import importlib
import math
from collections.abc import Callable
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

RATE_HZ = 48_000
_LOW_HZ, _OCTAVES = 220.0, 2.0
_LOUDNESS = 0.15
_RAMP_S = 0.03


def pitch_hz(opening_pct: float) -> float:
    """220 Hz for a closed eye, two octaves more for a perfect one, even steps of pitch between."""
    return float(_LOW_HZ * 2.0 ** (_OCTAVES * min(max(opening_pct, 0.0), 100.0) / 100.0))


class ToneWave:
    """Makes the samples. `follow` may be called from any thread, `fill` from the one that plays.

    Pitch and loudness glide, so that nothing clicks; without an opening it falls silent.
    """

    def __init__(self) -> None:
        self._wanted: float | None = None
        self._phase = 0.0
        self._hz = _LOW_HZ
        self._loudness = 0.0

    def follow(self, opening_pct: float | None) -> None:
        """The newest opening, None when it is not known."""
        self._wanted = opening_pct if opening_pct is not None and math.isfinite(opening_pct) else None

    def fill(self, samples: int) -> NDArray[np.float32]:
        """The next samples, float32 within -1 to 1, shape ``(samples,)``, at `RATE_HZ`."""
        wanted = self._wanted
        hz = self._hz if wanted is None else pitch_hz(wanted)
        if self._loudness == 0.0:
            self._hz = hz
        loudness = 0.0 if wanted is None else _LOUDNESS
        share = np.minimum(np.arange(1, samples + 1) / (_RAMP_S * RATE_HZ), 1.0)
        glide = self._hz + (hz - self._hz) * share
        swell = self._loudness + (loudness - self._loudness) * share
        phase = self._phase + np.cumsum(glide) / RATE_HZ
        if samples:
            self._phase = float(phase[-1] % 1.0)
            self._hz, self._loudness = float(glide[-1]), float(swell[-1])
        return np.asarray(swell * np.sin(2.0 * np.pi * phase), dtype=np.float32)


class Stream(Protocol):
    """What plays: started when made."""

    def close(self) -> None:
        """Stop playing."""
        ...


Opener = Callable[[Callable[[int], NDArray[np.float32]]], Stream]


class Tone:
    """Switches the tone on and off. One thread."""

    def __init__(self, open_stream: Opener | None = None) -> None:
        self._open = open_stream or open_sound
        self._stream: Stream | None = None
        self._wave = ToneWave()

    @property
    def on(self) -> bool:
        """Whether it plays."""
        return self._stream is not None

    def start(self) -> str:
        """Begin to play; returns in one line why it cannot, or nothing."""
        if self._stream is None:
            self._wave = ToneWave()
            try:
                self._stream = self._open(self._wave.fill)
            except ImportError:
                return 'a tone needs the package sounddevice: pip install "lidwatch[audio]"'
            except Exception as error:  # noqa: BLE001 - whatever the sound system raises must not end the watch
                return f"no tone: {' '.join(str(error).split())}"
        return ""

    def follow(self, opening_pct: float | None) -> None:
        """The newest opening, None when it is not known."""
        self._wave.follow(opening_pct)

    def stop(self) -> None:
        """End playing; harmless when off."""
        stream, self._stream = self._stream, None
        if stream is not None:
            stream.close()


def open_sound(fill: Callable[[int], NDArray[np.float32]]) -> Stream:
    """Play through the default output. Raises ImportError without sounddevice, OSError without PortAudio."""
    sounddevice = importlib.import_module("sounddevice")

    def callback(out: NDArray[np.float32], frames: int, when: object, flags: object) -> None:
        out[:, 0] = fill(frames)

    stream: Stream = sounddevice.OutputStream(samplerate=RATE_HZ, channels=1, dtype="float32", callback=callback)
    stream.start()  # type: ignore[attr-defined]
    return stream
