import importlib

import numpy as np
import pytest

from monitor.views import tone
from monitor.views.tone import RATE_HZ, Tone, ToneWave, pitch_hz


def measured_hz(samples):
    """The strongest line of the windowed spectrum, by parabolic interpolation of its logarithm."""
    spectrum = np.log(np.abs(np.fft.rfft(samples * np.hanning(samples.size))) + 1e-12)
    peak = int(np.argmax(spectrum))
    left, middle, right = spectrum[peak - 1 : peak + 2]
    return (peak + 0.5 * (left - right) / (left - 2 * middle + right)) * RATE_HZ / samples.size


@pytest.mark.parametrize(
    ("opening", "hz"), [(0.0, 220.0), (50.0, 440.0), (100.0, 880.0), (-30.0, 220.0), (120.0, 880.0)]
)
def test_two_octaves_lie_between_a_closed_and_a_perfect_eye(opening, hz):
    assert pitch_hz(opening) == pytest.approx(hz)
    wave = ToneWave()
    wave.follow(opening)
    wave.fill(4800)
    assert measured_hz(wave.fill(48_000)) == pytest.approx(hz, rel=2e-4)


def test_the_tone_is_the_same_however_it_is_asked_for():
    whole, pieces = ToneWave(), ToneWave()
    for wave in (whole, pieces):
        wave.follow(61.0)
        wave.fill(RATE_HZ // 10)
    cut = np.concatenate([pieces.fill(n) for n in (1, 0, 479, 512, 8)])
    np.testing.assert_allclose(whole.fill(1000), cut, atol=1e-6)


def test_nothing_clicks_when_the_opening_jumps_or_is_lost():
    wave = ToneWave()
    parts = []
    for opening in (20.0, 95.0, None, 40.0):
        wave.follow(opening)
        parts.append(wave.fill(4800))
    samples = np.concatenate(parts)
    assert np.abs(samples).max() <= 0.15 + 1e-6
    # the steepest that a sine of this loudness and the highest pitch can be, and the swell's own slope
    assert np.abs(np.diff(samples)).max() <= 0.15 * (2 * np.pi * 880.0 / RATE_HZ) + 0.15 / (0.03 * RATE_HZ) + 1e-6
    assert abs(samples[0]) < 1e-3


def test_the_pitch_glides_to_a_new_opening():
    wave = ToneWave()
    wave.follow(0.0)
    wave.fill(4800)
    wave.follow(100.0)
    # the first 2 ms hold half a cycle of 220 Hz, and would hold almost two of 880 Hz
    assert np.count_nonzero(np.diff(np.sign(wave.fill(4800)[:96]))) <= 2


@pytest.mark.parametrize("unknown", [None, float("nan")])
def test_without_an_opening_it_is_silent(unknown):
    wave = ToneWave()
    wave.follow(60.0)
    wave.fill(4800)
    wave.follow(unknown)
    wave.fill(4800)
    assert not wave.fill(4800).any()


class SilentStream:
    closed = False

    def close(self):
        self.closed = True


def test_it_starts_once_and_stops_once():
    opened = []

    def opening(fill):
        opened.append(SilentStream())
        return opened[-1]

    player = Tone(opening)
    assert not player.on
    assert player.start() == ""
    assert player.start() == ""
    assert len(opened) == 1
    assert player.on
    player.stop()
    player.stop()
    assert opened[0].closed
    assert not player.on


@pytest.mark.parametrize(
    ("error", "words"),
    [
        (ImportError("No module named 'sounddevice'"), 'pip install "lidwatch[audio]"'),
        (OSError("PortAudio library\nnot found"), "no tone: PortAudio library not found"),
        (RuntimeError("no default output device"), "no tone: no default output device"),
    ],
)
def test_a_tone_that_cannot_be_had_says_why_in_one_line(error, words):
    def refuse(fill):
        raise error

    player = Tone(refuse)
    told = player.start()
    assert words in told
    assert "\n" not in told
    assert not player.on


def test_without_the_extra_package_the_default_says_so(monkeypatch):
    def missing(name):
        raise ImportError(name)

    monkeypatch.setattr(importlib, "import_module", missing)
    with pytest.raises(ImportError, match="sounddevice"):
        tone.open_sound(lambda n: np.zeros(n, dtype=np.float32))
