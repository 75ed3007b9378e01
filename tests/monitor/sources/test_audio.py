"""The sound card, by way of a stand-in with the calls of sounddevice 0.5 (its documentation, from memory)."""

import sys
from types import ModuleType, SimpleNamespace

import numpy as np
import pytest

from dsp.block import Block
from monitor.errors import InputError
from monitor.sources.audio import AudioSource
from monitor.sources.base import SampleOptions


class PortAudioError(Exception):
    pass


class InputStream:
    last = None

    def __init__(self, **options):
        if options["samplerate"] == 1.0:
            raise PortAudioError("Invalid sample rate")
        self.options, self.running, self.closed = options, False, False
        InputStream.last = self

    def start(self):
        self.running = True

    def close(self):
        self.closed = True

    def feed(self, frames, overflow=False):
        codes = np.asarray(frames, dtype=np.int32)
        self.options["callback"](codes, len(codes), None, SimpleNamespace(input_overflow=overflow))
        codes[:] = 77  # the library uses its buffer again


@pytest.fixture
def card(monkeypatch):
    module = ModuleType("sounddevice")

    def query_devices(device, kind):
        assert kind == "input"
        if device == "nothing":
            raise ValueError("No input device matching 'nothing'")
        return {"default_samplerate": 48000.0, "max_input_channels": 2}

    module.query_devices, module.InputStream, module.PortAudioError = query_devices, InputStream, PortAudioError
    monkeypatch.setitem(sys.modules, "sounddevice", module)


def test_one_channel_arrives_scaled_and_clipping_is_counted(card):
    with AudioSource("audio:", SampleOptions()) as source:
        stream = InputStream.last
        assert (stream.running, stream.options["channels"], stream.options["device"]) == (True, 1, None)
        stream.feed([[1 << 30], [-(1 << 29)], [32767 << 16]])
        start, block = source.poll(5)
        assert (start.kind, start.rate_hz) == ("start", 48000.0)
        np.testing.assert_allclose(block.samples, [0.5, -0.25, 32767 / 32768])
        assert block.clipped == 1
    assert stream.closed


def test_two_channels_are_i_and_q(card):
    with AudioSource("audio:3", SampleOptions(rate_hz=96000.0, iq=True)) as source:
        stream = InputStream.last
        assert (stream.options["channels"], stream.options["device"], source.rate_hz) == (2, 3, 96000.0)
        stream.feed([[1 << 30, -(1 << 30)]])
        np.testing.assert_allclose(source.poll(5)[1].samples, [0.5 - 0.5j])


def test_the_second_channel_can_be_chosen(card):
    with AudioSource("audio:card", SampleOptions(channels=(2,))) as source:
        InputStream.last.feed([[0, 1 << 30]])
        np.testing.assert_allclose(source.poll(5)[1].samples, [0.5])


def test_an_overflow_is_told_and_what_was_not_fetched_in_time_is_lost_by_count(card):
    with AudioSource("audio:", SampleOptions()) as source:
        stream = InputStream.last
        stream.feed([[5]] * 10)
        source.poll(5)
        stream.feed([[5]] * 10, overflow=True)
        assert [getattr(item, "kind", "block") for item in source.poll(5)] == ["overflow", "block"]
        for _ in range(102):
            stream.feed([[5]] * 10)
        blocks = [item for item in source.poll(5) if isinstance(item, Block)]
        assert (blocks[0].lost, blocks[0].start, len(blocks)) == (20, 40, 100)
        assert sum(block.lost for block in blocks) == 20


def test_a_card_that_stops_ends_the_stream(card):
    with AudioSource("audio:", SampleOptions()) as source:
        InputStream.last.options["finished_callback"]()
        (event,) = source.poll(5)
        assert (event.kind, source.ended) == ("ended", True)


@pytest.mark.parametrize(
    ("uri", "options", "message"),
    [
        ("audio:nothing", SampleOptions(), "No input device matching"),
        ("audio:", SampleOptions(rate_hz=1.0), "Invalid sample rate"),
        ("audio:", SampleOptions(format="ri16"), "leave out --format"),
        ("audio:", SampleOptions(channels=(3,)), "there is no channel 3"),
        ("audio:", SampleOptions(rate_hz=-1.0), "above 0 Hz"),
    ],
)
def test_what_the_card_cannot_do_is_one_line(card, uri, options, message):
    with pytest.raises(InputError, match=message):
        AudioSource(uri, options)


def test_the_extra_that_is_missing_is_named(monkeypatch):
    monkeypatch.setitem(sys.modules, "sounddevice", None)
    with pytest.raises(InputError, match=r"pip install 'lidwatch\[audio\]'"):
        AudioSource("audio:", SampleOptions())
