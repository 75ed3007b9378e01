"""Live sources by name."""

import os
import sys

import pytest

from monitor.errors import InputError
from monitor.sources import SampleOptions
from monitor.sources.live import is_live, open_live
from monitor.sources.stdin import StdinSource
from monitor.sources.stream import StreamOptions, StreamSource

CF32 = StreamOptions(48000.0, "cf32", bind=True)


def test_names_tell_live_sources_from_recordings():
    assert all(map(is_live, ("-", "tcp://localhost:1", "ipc:///tmp/x", "audio:", "audio:card")))
    assert not any(map(is_live, ("x.wav", "audio", "tcp.sigmf-meta", "./-", "")))


def test_each_kind_of_name_opens_its_source(monkeypatch):
    with open_live("tcp://127.0.0.1:0", CF32, SampleOptions()) as source:
        assert isinstance(source, StreamSource)
    reading, writing = os.pipe()
    os.close(writing)
    with os.fdopen(reading, "rb") as stream, open_live("-", CF32, SampleOptions(), stream) as source:
        assert isinstance(source, StdinSource)
    monkeypatch.setitem(sys.modules, "sounddevice", None)
    with pytest.raises(InputError, match="extra"):
        open_live("audio:", CF32, SampleOptions())


def test_a_recording_is_not_live():
    with pytest.raises(InputError, match=r"x\.wav: is not live"):
        open_live("x.wav", CF32, SampleOptions())
