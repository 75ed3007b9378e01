"""Live samples on standard input."""

import io
import os
import sys

import numpy as np
import pytest

from dsp.block import Block
from monitor.errors import InputError
from monitor.sources.ring import ThreadedReader
from monitor.sources.stdin import StdinSource

RATE = 48000.0
RAMP = np.arange(1, 101, dtype="<f4") / 128


class Clock:
    def __init__(self):
        self.time = 100.0

    def __call__(self):
        return self.time


@pytest.fixture
def pipe():
    """A pipe: the reading end as a file, the writing end unbuffered."""
    reading, writing = os.pipe()
    with os.fdopen(reading, "rb") as stream, os.fdopen(writing, "wb", buffering=0) as writer:
        yield stream, writer


def blocks_of(items):
    return [item for item in items if isinstance(item, Block)]


def kinds(items):
    return ["block" if isinstance(item, Block) else item.kind for item in items]


def test_samples_come_as_they_are_written_and_a_cut_sample_waits_for_its_rest(pipe):
    stream, writing = pipe
    source = StdinSource(RATE, "rf32", stream)
    assert source.poll(0.0) == ()
    writing.write(RAMP.tobytes()[:10])
    start, first = source.poll(5)
    assert (start.kind, start.rate_hz, start.format) == ("start", RATE, "rf32_le")
    assert (first.start, first.samples.size) == (0, 2)
    writing.write(RAMP.tobytes()[10:])
    (second,) = source.poll(5)
    np.testing.assert_array_equal(np.concatenate([first.samples, second.samples]), RAMP)
    assert second.start == 2


def test_the_end_is_told_with_what_was_left_over(pipe):
    stream, writing = pipe
    source = StdinSource(RATE, "cf32", stream)
    writing.write(b"\0" * 19)
    writing.close()
    items = []
    while not source.ended:
        items.extend(source.poll(5))
    assert kinds(items) == ["start", "block", "torn", "ended"]
    assert "3 bytes" in items[2].text
    assert source.poll(0) == ()


def test_a_poll_ends_at_its_time_out_and_closing_leaves_the_stream_open(pipe):
    stream, _ = pipe
    source = StdinSource(RATE, "cf32", stream)
    assert source.poll(0.01) == ()
    source.close()
    assert not stream.closed


def test_a_sender_faster_than_the_true_rate_is_held_back_without_loss(pipe):
    stream, writing = pipe
    clock = Clock()
    source = StdinSource(1000.0, "ru8", stream, now=clock)
    writing.write(b"\x80" * 1000)
    assert len(source.poll(0)) == 2
    writing.write(b"\x80" * 10)
    clock.time += 0.7
    assert source.poll(0) == ()  # a second's samples in 0.7 s
    clock.time += 0.05
    (block,) = source.poll(0)
    assert (block.start, block.lost) == (1000, 0)


def test_after_a_pause_all_that_waits_is_taken_at_once(pipe):
    stream, writing = pipe
    clock = Clock()
    source = StdinSource(1000.0, "ru8", stream, now=clock)
    writing.write(b"\x80")
    source.poll(0)
    clock.time += 60.0
    for _ in range(10):
        writing.write(b"\x80" * 5000)
        assert len(source.poll(0)) == 1


def test_a_thread_that_waits_for_standard_input_can_be_stopped(pipe):
    stream, writing = pipe
    with ThreadedReader(lambda: StdinSource(RATE, "rf32", stream)) as reader:
        writing.write(RAMP.tobytes())
        items = []
        while not blocks_of(items):
            items.extend(reader.poll(5))
    np.testing.assert_array_equal(blocks_of(items)[0].samples, RAMP)


@pytest.mark.parametrize(
    ("rate", "form", "message"),
    [
        (None, None, "need --rate HZ and --format NAME"),
        (RATE, None, "need --format NAME"),
        (None, "cf32", "need --rate HZ"),
        (-1.0, "cf32", "above 0 Hz"),
        (RATE, "cf16", "unknown sample format"),
    ],
)
def test_what_is_missing_or_wrong_is_said(pipe, rate, form, message):
    with pytest.raises(InputError, match=message):
        StdinSource(rate, form, pipe[0])


def test_a_closed_standard_input_or_none_is_refused(monkeypatch):
    with pytest.raises(InputError, match="is closed"):
        StdinSource(RATE, "cf32", io.BytesIO(b""))
    monkeypatch.setattr(sys, "stdin", None)
    with pytest.raises(InputError, match="is closed"):
        StdinSource(RATE, "cf32")
