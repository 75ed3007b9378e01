"""The ring between the receiving and the measuring thread, and the thread before it."""

import threading
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dsp.block import Block
from monitor.errors import InputError, MonitorError
from monitor.sources.ring import SampleRing, ThreadedReader
from monitor.sources.wire import StreamEvent

RATE = 1000.0
START = StreamEvent("start", "samples arrive", 0, RATE, "rf32_le")


def block(start, count, lost=0):
    return Block(np.arange(start, start + count, dtype=np.float32), start, lost)


def stream(*sizes, start=0):
    blocks = []
    for size in sizes:
        blocks.append(block(start, size))
        start += size
    return blocks


def blocks_of(items):
    return [item for item in items if isinstance(item, Block)]


def test_what_is_put_is_taken_in_order_and_once():
    ring = SampleRing()
    ring.put([START, *stream(100, 50)])
    items = ring.take(0)
    assert [getattr(item, "start", "event") for item in items] == ["event", 0, 100]
    assert ring.take(0) == ()
    assert ring.dropped == 0


def test_a_full_ring_drops_the_oldest_whole_blocks_and_the_next_tells_how_much():
    ring = SampleRing(0.5)
    ring.put([START, *stream(200, 200, 200)])
    assert ring.held_s == pytest.approx(0.4)
    _, first, second = ring.take(0)
    assert (first.start, first.lost, second.lost) == (200, 200, 0)
    assert ring.dropped == 200


def test_losses_that_were_known_before_are_kept_when_their_block_is_dropped():
    ring = SampleRing(0.5)
    ring.put([START, block(0, 300), block(350, 300, lost=50), block(700, 300, lost=50)])
    (only,) = blocks_of(ring.take(0))
    assert (only.start, only.lost) == (700, 700)


def test_a_single_block_longer_than_the_bound_is_delivered():
    ring = SampleRing(0.5)
    ring.put([START, *stream(100, 5000)])
    (only,) = blocks_of(ring.take(0))
    assert (only.samples.size, only.lost) == (5000, 100)


def test_what_comes_all_at_once_is_kept_until_its_oldest_has_waited_too_long():
    clock = SimpleNamespace(now=10.0)
    ring = SampleRing(0.5, 0.5, now=lambda: clock.now)
    ring.put([START, *stream(*[100] * 30)])  # three seconds, held up and then brought at once
    assert ring.held_s == pytest.approx(3.0)
    clock.now += 0.49
    ring.put(stream(100, start=3000))
    assert ring.dropped == 0
    clock.now += 0.01
    ring.put(stream(100, start=3100))
    assert ring.dropped == 2700  # half a second stays
    first = blocks_of(ring.take(0))[0]
    assert (first.start, first.lost) == (2700, 2700)


def test_it_tells_how_long_the_oldest_block_has_waited_whatever_its_length():
    clock = SimpleNamespace(now=10.0)
    ring = SampleRing(0.5, 0.5, now=lambda: clock.now)
    assert ring.oldest_s == 0.0
    ring.put([START, *stream(400)])
    assert ring.oldest_s == 0.0
    clock.now += 0.2
    ring.put(stream(50, start=400))
    assert ring.oldest_s == pytest.approx(0.2)
    ring.take(0, 1)
    assert ring.oldest_s == 0.0
    clock.now += 0.1
    assert ring.oldest_s == pytest.approx(0.1)


def test_a_source_that_can_wait_puts_more_when_half_the_bound_is_free_and_loses_nothing():
    clock = SimpleNamespace(now=10.0)
    ring = SampleRing(0.5, 0.0, now=lambda: clock.now)
    ring.keep_all()
    ring.put([START, *stream(*[100] * 3)])
    assert not ring.wait_for_room(0.0)
    clock.now += 100.0
    ring.put(stream(*[100] * 7, start=300))
    assert ring.dropped == 0
    ring.take(0, 8)
    assert ring.wait_for_room(0.0)


def test_what_comes_all_at_once_is_bounded_in_bytes():
    ring = SampleRing(0.5, 1e9)
    size = 4 << 20
    ring.put([START, *stream(*[size] * 9)])
    assert ring.dropped == 5 * size


def test_no_more_blocks_are_taken_than_asked_for():
    ring = SampleRing()
    ring.put([START, *stream(100, 50, 30)])
    assert [getattr(item, "start", "event") for item in ring.take(0, 1)] == ["event", 0]
    assert ring.held_s == pytest.approx(0.08)
    assert [item.start for item in ring.take(0, 1)] == [100]
    assert [item.start for item in ring.take(0, 5)] == [150]
    assert ring.held_s == 0.0


def test_events_outlive_the_blocks_around_them():
    ring = SampleRing(0.5)
    torn = StreamEvent("torn", "cut", 400)
    ring.put([START, block(0, 400), torn, block(400, 400)])
    items = ring.take(0)
    assert items[:2] == (START, torn)
    assert items[2].lost == 400


def test_the_bound_is_in_seconds_of_the_rate_in_force():
    ring = SampleRing(0.5)
    faster = StreamEvent("rate", "faster", 400, 10 * RATE, "rf32_le")
    ring.put([START, block(0, 400), faster, block(400, 4000)])
    assert ring.held_s == pytest.approx(0.4)
    assert len(blocks_of(ring.take(0))) == 1


def test_a_flood_of_events_keeps_those_that_describe_the_stream():
    ring = SampleRing()
    ring.put([START, *(StreamEvent("garbage", "?", 0) for _ in range(1000)), block(0, 10)])
    items = ring.take(0)
    assert items[0] is START
    assert len(items) <= 260
    assert items[-1].samples.size == 10


@settings(deadline=None)
@given(
    steps=st.lists(st.tuples(st.integers(1, 400), st.integers(0, 30), st.booleans()), min_size=1, max_size=60),
)
def test_delivered_and_lost_add_up_and_nothing_older_than_the_bound_waits(steps):
    ring = SampleRing(0.5)
    ring.put([START])
    position = seen = 0
    for size, lost, take in steps:
        position += lost
        ring.put([block(position, size, lost)])
        position += size
        assert ring.held_s <= 0.5
        if take:
            for item in blocks_of(ring.take(0)):
                seen += item.lost
                assert item.start == seen
                np.testing.assert_array_equal(item.samples[:1], [item.start])
                seen += item.samples.size
    for item in blocks_of(ring.take(0)):
        seen += item.lost + item.samples.size
    assert seen == position


def test_two_threads_lose_nothing_without_a_count():
    ring = SampleRing(0.5)
    total = 200_000
    go = threading.Event()

    def feed():
        go.wait(10)
        ring.put([START])
        for start in range(0, total, 100):
            ring.put([block(start, 100)])
        ring.close()

    thread = threading.Thread(target=feed)
    thread.start()
    go.set()
    seen = delivered = 0
    while not ring.closed:
        for item in blocks_of(ring.take(10)):
            seen += item.lost
            assert item.start == seen
            seen += item.samples.size
            delivered += item.samples.size
    thread.join(10)
    assert seen == total
    assert delivered + ring.dropped == total


class Scripted:
    """A source that gives what it is told to, one list for each poll."""

    patient = False

    def __init__(self, *script, then_end=True):
        self.uri, self.warnings, self.ended = "scripted", ("mind the step",), False
        self.script, self.then_end = list(script), then_end
        self.threads, self.closed = set(), threading.Event()
        self.idle = threading.Event()

    def poll(self, timeout_s):
        self.threads.add(threading.get_ident())
        if not self.script:
            self.ended = self.then_end
            self.idle.wait(timeout_s)
            return ()
        step = self.script.pop(0)
        if isinstance(step, Exception):
            raise step
        return step

    def close(self):
        self.threads.add(threading.get_ident())
        self.closed.set()


def opened_in(threads, source):
    def open_source():
        threads.add(threading.get_ident())
        return source

    return open_source


def test_a_source_is_opened_used_and_closed_in_one_thread_of_its_own():
    source = Scripted((START,), tuple(stream(10)))
    threads = set()
    reader = ThreadedReader(opened_in(threads, source))
    items = []
    while not reader.ended:
        items.extend(reader.poll(10))
    reader.close()
    assert [getattr(item, "start", "event") for item in items] == ["event", 0]
    assert source.closed.is_set()
    assert len(threads | source.threads) == 1
    assert threading.get_ident() not in threads
    assert (reader.uri, reader.warnings) == ("scripted", ("mind the step",))


def test_closing_stops_a_source_that_goes_on_for_ever():
    source = Scripted(then_end=False)
    with ThreadedReader(lambda: source) as reader:
        assert not reader.ended
    assert source.closed.is_set()
    assert reader.ended


def test_what_stops_a_source_from_opening_is_raised_to_the_caller():
    def refuse():
        raise InputError("tcp://x: no")

    with pytest.raises(InputError, match="tcp://x: no"):
        ThreadedReader(refuse)


@pytest.mark.parametrize(
    ("failure", "kind", "text"),
    [(InputError("give --rate HZ"), InputError, "give --rate HZ"), (OSError("gone"), MonitorError, "scripted: .*gone")],
)
def test_a_failure_is_raised_after_what_came_before_it(failure, kind, text):
    source = Scripted((START, block(0, 10)), failure)
    reader = ThreadedReader(lambda: source)
    assert source.closed.wait(10)
    assert len(reader.poll(10)) == 2
    assert not reader.ended
    with pytest.raises(kind, match=text):
        reader.poll(10)
    assert reader.ended
    reader.close()


def test_a_slow_taker_gets_the_newest_tenth_of_a_second_in_one_piece():
    made = tuple(stream(*([100] * 50)))
    source = Scripted((START,), *((b,) for b in made))
    reader = ThreadedReader(lambda: source, patience_s=0.0)
    assert source.closed.wait(10)
    got = SimpleNamespace(blocks=blocks_of(reader.poll(10)))
    reader.close()
    assert got.blocks[0].lost == got.blocks[0].start == reader.dropped
    assert sum(b.samples.size for b in got.blocks) + reader.dropped == 5000
    assert all(b.lost == 0 for b in got.blocks[1:])
    assert 100 <= sum(b.samples.size for b in got.blocks) <= 500


def test_dropping_goes_on_until_only_the_kept_share_of_the_bound_waits():
    ring = SampleRing(0.5, kept=0.2)
    ring.put([START, *stream(*([50] * 10))])
    assert ring.dropped == 0
    ring.put(stream(50, start=500))
    assert 0.04 < ring.held_s < 0.11
    blocks = blocks_of(ring.take(0))
    assert blocks[0].lost + sum(b.samples.size for b in blocks) == 550
