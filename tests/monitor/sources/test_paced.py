"""A recording at its own pace: when its samples come, and that none is lost."""

import numpy as np
import pytest

from dsp.block import Block
from monitor.sources import SampleOptions, open_source
from monitor.sources.paced import PacedSource
from monitor.sources.ring import ThreadedReader
from monitor.sources.wire import StreamEvent
from tests.monitor.recordings import RATE, InMemory, wav_bytes

SAMPLES = np.arange(48_000, dtype=np.float32)


class Clock:
    def __init__(self, monkeypatch):
        self.now = 100.0
        monkeypatch.setattr("monitor.sources.paced.time.sleep", self.advance)

    def advance(self, seconds):
        assert seconds >= 0
        self.now += seconds

    def __call__(self):
        return self.now


@pytest.fixture
def clock(monkeypatch):
    return Clock(monkeypatch)


def played(source, clock):
    """Every item until the end, with when it came."""
    items = []
    while not source.ended:
        items += [(clock.now - 100.0, item) for item in source.poll(0.1)]
    return items


@pytest.mark.parametrize("pace", [0.5, 1.0, 20.0])
def test_samples_come_when_they_are_due_and_all_of_them(clock, pace):
    items = played(
        PacedSource(InMemory(Block(SAMPLES[:30_000], 0), Block(SAMPLES[30_000:], 30_000)), pace, now=clock), clock
    )
    blocks = [(at, item) for at, item in items if isinstance(item, Block)]
    np.testing.assert_array_equal(np.concatenate([block.samples for _, block in blocks]), SAMPLES)
    assert [block.start for _, block in blocks] == [0, *np.cumsum([block.samples.size for _, block in blocks])[:-1]]
    for at, block in blocks:
        due = (block.start + block.samples.size) / RATE / pace
        assert due - 1e-9 <= at <= due + 0.05
    assert items[-1][1].kind == "ended"
    assert items[-1][0] == pytest.approx(1.0 / pace, abs=0.05)


def test_a_taker_that_was_away_finds_the_recording_slowed_not_hurried(clock):
    source = PacedSource(InMemory(Block(SAMPLES, 0)), 1.0, now=clock)
    source.poll(0.1)
    clock.advance(30.0)
    began = clock.now
    played(source, clock)
    assert clock.now - began == pytest.approx(1.0, abs=0.25)


def test_lost_samples_take_their_time_and_counts_go_with_their_samples(clock):
    source = PacedSource(
        InMemory(Block(SAMPLES[:9600], 0), Block(SAMPLES[9600:19_200], 19_200, 9600, clipped=100, nonfinite=3)),
        1.0,
        now=clock,
    )
    items = [(at, item) for at, item in played(source, clock) if isinstance(item, Block)]
    after = [(at, block) for at, block in items if block.start >= 19_200]
    assert after[0][0] == pytest.approx(0.4, abs=0.05)
    assert [block.lost for _, block in after] == [9600] + [0] * (len(after) - 1)
    assert sum(block.clipped for _, block in after) == 100
    assert sum(block.nonfinite for _, block in after) == 3
    for _, block in after:
        assert block.clipped == pytest.approx(100 * block.samples.size / 9600, abs=1)


def test_it_tells_how_the_file_holds_the_samples(tmp_path):
    path = tmp_path / "gauge.wav"
    path.write_bytes(wav_bytes(np.zeros((4800, 2), np.float32), subtype="PCM_16"))
    with PacedSource(open_source(str(path), SampleOptions(iq=True)), 1.0) as source:
        (event,) = source.poll(0.0)
    assert isinstance(event, StreamEvent)
    assert (event.format, event.encoding, event.rate_hz) == ("cf32_le", "WAV PCM_16", 48_000.0)


def test_a_slow_taker_behind_the_ring_loses_nothing_either():
    blocks = [Block(SAMPLES[at : at + 4800], at) for at in range(0, 48_000, 4800)]
    with ThreadedReader(lambda: PacedSource(InMemory(*blocks), 50.0), bound_s=0.1, patience_s=0.0) as reader:
        got = []
        most = 0.0
        while not reader.ended:
            got += [item for item in reader.poll(1.0, 1) if isinstance(item, Block)]
            most = max(most, reader.ring.held_s)
            for _ in range(3):
                reader.ring.wait_for_room(0.001)
    np.testing.assert_array_equal(np.concatenate([block.samples for block in got]), SAMPLES)
    assert sum(block.lost for block in got) == 0
    # half the bound, and the block that then still went in
    assert most <= 0.05 + 4800 / RATE + 1e-9
