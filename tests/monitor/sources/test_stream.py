"""Streams over real sockets on loopback."""

import itertools
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import zmq
from hypothesis import given, settings
from hypothesis import strategies as st
from zmq.auth.thread import ThreadAuthenticator

from dsp.block import Block
from monitor.errors import InputError
from monitor.sources.keys import Curve, make_keys
from monitor.sources.ring import ThreadedReader
from monitor.sources.stream import StreamOptions, merged, open_stream
from monitor.sources.wire import FrameHeader, StreamEvent

RATE = 48000.0
CF32 = StreamOptions(RATE, "cf32_le")
PATIENCE_S = 20.0


def collect(source, enough, timeout_s=PATIENCE_S):
    """Items until ``enough(items)``; fails after the time-out."""
    items = []
    end = time.monotonic() + timeout_s
    while not enough(items):
        assert time.monotonic() < end, f"not enough came: {kinds(items)[-20:]}"
        items.extend(source.poll(0.2))
    return items


def has(kind):
    return lambda items: any(not isinstance(item, Block) and item.kind == kind for item in items)


def count(n):
    return lambda items: sum(item.samples.size for item in items if isinstance(item, Block)) >= n


def samples_of(items):
    return np.concatenate([item.samples for item in items if isinstance(item, Block)])


def kinds(items):
    return ["block" if isinstance(item, Block) else item.kind for item in items]


def noise(n, seed=3):
    rng = np.random.default_rng(seed)
    return (rng.standard_normal(n) * 0.1 + 1j * rng.standard_normal(n) * 0.1).astype(np.complex64)


def frame(samples, sample, stream="west", rate=RATE):
    return [FrameHeader(stream, sample, rate, "cf32_le").to_bytes(), samples.tobytes()]


def wait_for_subscriber(pub, source):
    """Until a message of the publisher's arrives: a subscription takes effect a moment after the connection."""
    collect(source, has("connected"))
    end = time.monotonic() + PATIENCE_S
    while not pub.poll(50, zmq.POLLIN):  # XPUB tells of subscriptions
        source.poll(0)
        assert time.monotonic() < end
    pub.recv()


# --- forms, sizes, transports


@pytest.mark.parametrize("transport", ["tcp", "ipc"])
@pytest.mark.parametrize("way", ["sub connects", "sub binds", "pull connects", "pull binds"])
def test_samples_come_by_every_way_of_connecting(senders, tmp_path, transport, way):
    kind, binds = way.split()[0], way.endswith("binds")
    options = StreamOptions(RATE, "cf32_le", socket=kind, bind=binds)
    sender_kind = zmq.XPUB if kind == "sub" else zmq.PUSH
    sent = noise(5000)
    anywhere = "tcp://127.0.0.1:*" if transport == "tcp" else f"ipc://{tmp_path}/samples"
    if binds:
        uri = anywhere.replace("*", "0")
        source = open_stream(uri, options)
        sender, _ = senders(sender_kind, source.endpoint, bind=False)
    else:
        sender, uri = senders(sender_kind, anywhere)
        source = open_stream(uri, options)
    with source:
        if kind == "sub":
            wait_for_subscriber(sender, source)
        for part in np.split(sent, [1, 100, 3333]):
            sender.send(part.tobytes())
        items = collect(source, count(5000))
    np.testing.assert_array_equal(samples_of(items), sent)
    start = next(item for item in items if isinstance(item, StreamEvent) and item.kind == "start")
    assert (start.rate_hz, start.format) == (RATE, "cf32_le")


@pytest.mark.parametrize("size", [1, 7, 8, 65_537, 5_000_001])
def test_messages_from_one_byte_to_megabytes_arrive_whole(senders, size):
    push, uri = senders(zmq.PUSH)
    data = np.random.default_rng(size).integers(0, 256, size, dtype=np.uint8)
    with open_stream(uri, StreamOptions(RATE, "ru8", socket="pull")) as source:
        push.send(data.tobytes())
        push.send(b"\x80")
        items = collect(source, count(size + 1))
        assert source.state.samples == size + 1
    np.testing.assert_array_equal(samples_of(items)[:size], (data.astype(np.float32) - 128) / 128)


def test_single_bytes_of_an_8_byte_sample_are_counted_and_told_at_a_bearable_pace(senders):
    push, uri = senders(zmq.PUSH)
    clock = itertools.count(0.0, 1e-6)
    with open_stream(uri, StreamOptions(RATE, "cf32_le", socket="pull"), now=lambda: next(clock)) as source:
        for _ in range(500):
            push.send(b"\x00")
        push.send(noise(3).tobytes())
        items = collect(source, count(3))
        assert source.state.torn == 500
        assert kinds(items).count("torn") == 1
        clock = itertools.count(10.0)
        (late,) = collect(source, has("torn"))
    assert "499 such since the last notice" in late.text
    assert next(item for item in items if isinstance(item, Block)).lost == 500


def test_a_topic_chooses_and_is_not_taken_for_samples(senders):
    pub, uri = senders(zmq.XPUB)
    sent = noise(64)
    with open_stream(uri, StreamOptions(RATE, "cf32_le", topic="west")) as source:
        wait_for_subscriber(pub, source)
        pub.send_multipart([b"east", b"\xff" * 64])
        pub.send_multipart([b"west", sent[:32].tobytes()])
        pub.send(b"west" + sent[32:].tobytes())
        items = collect(source, count(64))
    np.testing.assert_array_equal(samples_of(items), sent)


def test_frames_tell_rate_and_format_and_losses_exactly(senders):
    push, uri = senders(zmq.PUSH)
    sent = noise(1000)
    with open_stream(uri, StreamOptions(socket="pull")) as source:
        for first in (0, 100, 300, 400, 900):  # 200 and 500 to 800 get lost
            push.send_multipart(frame(sent[first : first + 100], 7000 + first))
        items = collect(source, count(500))
    blocks = [item for item in items if isinstance(item, Block)]
    assert sum(block.lost for block in blocks) == 500
    for block in blocks:
        np.testing.assert_array_equal(block.samples, sent[block.start : block.start + block.samples.size])
    assert source.state.lost == 500


@pytest.mark.parametrize("junk", [[b""], [b"{"], [b'{"lidwatch":1}', b"xyz"], [b"a"] * 50], ids=repr)
def test_garbage_among_frames_is_told_and_the_work_goes_on(senders, junk):
    push, uri = senders(zmq.PUSH)
    with open_stream(uri, StreamOptions(socket="pull")) as source:
        push.send_multipart(frame(noise(10), 0))
        push.send_multipart(junk)
        push.send_multipart(frame(noise(10), 10))
        items = collect(source, count(20))
        assert source.state.garbage == 1
    assert "garbage" in kinds(items)


def test_bare_samples_without_rate_and_format_end_with_what_to_give(senders):
    push, uri = senders(zmq.PUSH)
    with open_stream(uri, StreamOptions(socket="pull")) as source:
        push.send(noise(10).tobytes())
        with pytest.raises(InputError, match="give --rate HZ and --format NAME"):
            collect(source, count(1))


def test_a_poll_without_samples_ends_at_its_time_out(senders):
    _, uri = senders()
    with open_stream(uri, CF32) as source:
        collect(source, has("connected"))
        began = time.monotonic()
        assert source.poll(0.05) == ()
        assert source.poll(0.0) == ()
        assert 0.04 < time.monotonic() - began < 5


# --- limits


def test_a_message_above_the_limit_is_refused_and_the_next_ones_are_taken(senders):
    pub, uri = senders(zmq.XPUB)
    with open_stream(uri, StreamOptions(RATE, "cf32_le", max_message_bytes=1000)) as source:
        wait_for_subscriber(pub, source)
        pub.send(noise(125).tobytes())
        collect(source, count(125))
        pub.send(noise(126).tobytes())
        items = collect(source, has("oversize"))
        assert "above 1000 bytes" in items[-1].text
        end = time.monotonic() + PATIENCE_S
        before = source.state.samples
        while source.state.samples == before:  # until the new subscription has taken effect
            pub.send(noise(125).tobytes())
            source.poll(0.05)
            assert time.monotonic() < end


def test_a_binding_receiver_survives_a_message_above_the_limit(senders):
    with open_stream(
        "tcp://127.0.0.1:0", StreamOptions(RATE, "ru8", "pull", bind=True, max_message_bytes=100)
    ) as source:
        push, _ = senders(zmq.PUSH, source.endpoint, bind=False)
        push.send(b"x" * 101)
        collect(source, has("disconnected"))
        collect(source, has("connected"))
        push.send(b"x" * 100)
        collect(source, count(100))


def test_the_high_water_mark_and_the_other_limits_reach_the_socket(senders):
    _, uri = senders()
    with open_stream(uri, StreamOptions(RATE, "cf32_le", high_water=17, max_message_bytes=12345)) as source:
        sock = source._socket
        assert (sock.rcvhwm, sock.maxmsgsize, sock.linger) == (17, 12345, 0)
        assert (sock.heartbeat_ivl, sock.heartbeat_timeout, sock.reconnect_ivl) == (1000, 5000, 100)


@settings(deadline=None)
@given(sizes=st.lists(st.integers(1, 50), min_size=1, max_size=30), gaps=st.sets(st.integers(0, 29)))
def test_merging_short_blocks_changes_no_sample_no_index_and_no_count(sizes, gaps):
    blocks, position = [], 0
    for i, size in enumerate(sizes):
        lost = 5 * (i in gaps)
        position += lost
        blocks.append(Block(np.arange(position, position + size, dtype=np.float32), position, lost, 1, 2))
        position += size
    out = merged(blocks, 100)
    np.testing.assert_array_equal(samples_of(out), samples_of(blocks))
    for name in ("lost", "clipped", "nonfinite"):
        assert sum(getattr(b, name) for b in out) == sum(getattr(b, name) for b in blocks)
    for b in out:
        np.testing.assert_array_equal(b.samples, np.arange(b.start, b.start + b.samples.size))
        assert b.samples.size <= 100


def test_merging_keeps_events_between_their_blocks():
    a, b = (Block(np.zeros(3, np.float32), start) for start in (0, 3))
    event = StreamEvent("rate", "faster", 3, 1.0, "rf32_le")
    assert merged([a, event, b]) == [a, event, b]


# --- senders that come and go

SENDER = """
import itertools, sys, time
import numpy as np, zmq
sys.path.insert(0, sys.argv[1])
from monitor.sources.wire import FrameHeader
sock = zmq.Context().socket(zmq.PUB)
sock.bind(sys.argv[2])
for i in itertools.count():
    head = FrameHeader(sys.argv[3], 100 * i, 48000.0, "cf32_le").to_bytes()
    sock.send_multipart([head, np.full(100, i % 1000, np.complex64).tobytes()])
    time.sleep(0.002)
"""
ROOT = Path(__file__).parents[3]


@pytest.fixture
def sender_process():
    running = []

    def start(uri, name):
        running.append(subprocess.Popen([sys.executable, "-c", SENDER, str(ROOT), uri, name]))
        return running[-1]

    yield start
    for process in running:
        process.kill()
        process.wait(10)


def test_a_sender_killed_and_started_again_is_found_again_and_told_as_a_restart(tmp_path, sender_process):
    uri = f"ipc://{tmp_path}/samples"
    with open_stream(uri, StreamOptions()) as source:
        first = sender_process(uri, "first run")
        collect(source, count(1000))
        first.kill()
        first.wait(10)
        collect(source, has("disconnected"))
        sender_process(uri, "second run")
        items = collect(source, lambda items: has("restart")(items) and count(1000)(items))
        assert kinds(items).index("connected") < kinds(items).index("restart")
        restart = next(item for item in items if not isinstance(item, Block) and item.kind == "restart")
        assert "second run" in restart.text
        assert (restart.rate_hz, restart.format) == (RATE, "cf32_le")
        assert source.state.garbage == 0


def test_a_thread_reads_a_stream_and_closes_it(senders):
    pub, uri = senders(zmq.XPUB)
    sent = noise(4000)
    with ThreadedReader(lambda: open_stream(uri, CF32)) as reader:
        wait_for_subscriber(pub, reader)
        for part in np.split(sent, 10):
            pub.send(part.tobytes())
        items = collect(reader, count(4000))
        assert reader.uri == uri
    np.testing.assert_array_equal(samples_of(items), sent)
    assert reader.dropped == 0


def test_what_a_thread_cannot_open_or_read_is_raised_where_it_is_read(senders):
    with pytest.raises(InputError, match="port must be"):
        ThreadedReader(lambda: open_stream("tcp://127.0.0.1:x", CF32))
    push, uri = senders(zmq.PUSH)
    with ThreadedReader(lambda: open_stream(uri, StreamOptions(socket="pull"))) as reader:
        push.send(b"12345678")
        with pytest.raises(InputError, match="bare samples"):
            collect(reader, count(1))


# --- refusals


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (StreamOptions(RATE), "need --format NAME"),
        (StreamOptions(None, "cf32"), "need --rate HZ"),
        (StreamOptions(0.0, "cf32"), "above 0 Hz"),
        (StreamOptions(float("nan"), "cf32"), "above 0 Hz"),
        (StreamOptions(RATE, "cf16"), "unknown sample format"),
        (StreamOptions(RATE, "cf32", socket="push"), "must be sub or pull"),
        (StreamOptions(RATE, "cf32", socket="pull", topic="x"), "only a subscriber has topics"),
        (StreamOptions(RATE, "cf32", high_water=0), "high-water"),
        (StreamOptions(RATE, "cf32", max_message_bytes=0), "largest message"),
        (StreamOptions(curve=Curve(Path("no.key_secret"))), r"no.key_secret: the key file cannot be read"),
    ],
)
def test_options_of_no_use_are_refused(options, message):
    with pytest.raises(InputError, match=message):
        open_stream("tcp://127.0.0.1:5555", options)


def test_an_address_in_use_is_refused(senders, tmp_path):
    _, taken = senders()
    with pytest.raises(InputError, match="in use"):
        open_stream(taken, StreamOptions(RATE, "cf32", bind=True))
    _, taken = senders(address=f"ipc://{tmp_path}/samples")
    with pytest.raises(InputError, match="in use"):
        open_stream(taken, StreamOptions(RATE, "cf32", bind=True))


def test_an_address_of_another_machine_cannot_be_bound():
    with pytest.raises(InputError, match="no such address"):
        open_stream("tcp://192.0.2.1:0", StreamOptions(RATE, "cf32", bind=True))


# --- keys


def test_an_open_door_is_warned_of_and_a_loopback_is_not():
    for uri, words in (("tcp://0.0.0.0:0", "anybody who reaches"), ("tcp://127.0.0.1:0", None)):
        with open_stream(uri, StreamOptions(RATE, "cf32", bind=True)) as source:
            assert (words is None) == (source.warnings == ())
            assert words is None or words in source.warnings[0]


@pytest.fixture
def keys(tmp_path):
    made = {name: make_keys(tmp_path / name, name) for name in ("station", "gauge", "stranger")}
    allowed = tmp_path / "allowed"
    allowed.mkdir()
    (allowed / "gauge.key").write_bytes(made["gauge"][0].read_bytes())
    return made, allowed


def sender_with_keys(senders, keys, name, endpoint):
    public, secret = zmq.auth.load_certificate(keys[name][1])
    server, _ = zmq.auth.load_certificate(keys["station"][0])
    return senders(
        zmq.PUSH, endpoint, bind=False, curve_serverkey=server, curve_publickey=public, curve_secretkey=secret
    )[0]


def test_a_sender_with_an_allowed_key_is_let_in_and_no_other(senders, keys):
    made, allowed = keys
    curve = Curve(made["station"][1], clients=allowed)
    with open_stream("tcp://127.0.0.1:0", StreamOptions(RATE, "cf32", "pull", bind=True, curve=curve)) as source:
        assert source.warnings == ()
        stranger = sender_with_keys(senders, made, "stranger", source.endpoint)
        plain, _ = senders(zmq.PUSH, source.endpoint, bind=False)
        stranger.sndtimeo = plain.sndtimeo = 0
        collect(source, has("disconnected"))
        friend = sender_with_keys(senders, made, "gauge", source.endpoint)
        sent = noise(100)
        friend.send(sent.tobytes())
        items = collect(source, count(100))
        np.testing.assert_array_equal(samples_of(items), sent)
        assert source.state.messages == 1


def test_a_receiver_with_keys_reads_an_encrypted_sender_and_says_when_it_is_refused(senders, keys):
    made, allowed = keys
    public, secret = zmq.auth.load_certificate(made["station"][1])
    context = zmq.Context()
    doorman = ThreadAuthenticator(context)
    doorman.start()
    doorman.configure_curve(location=str(allowed))
    try:
        with context.socket(zmq.XPUB) as pub:
            pub.linger, pub.curve_server, pub.curve_publickey, pub.curve_secretkey = 0, True, public, secret
            uri = f"tcp://127.0.0.1:{pub.bind_to_random_port('tcp://127.0.0.1')}"
            stranger, gauge = (Curve(made[name][1], server=made["station"][0]) for name in ("stranger", "gauge"))
            with open_stream(uri, StreamOptions(RATE, "cf32", curve=stranger)) as source:
                assert "the keys do not fit" in collect(source, has("disconnected"))[-1].text
            with open_stream(uri, StreamOptions(RATE, "cf32", curve=gauge)) as source:
                wait_for_subscriber(pub, source)
                pub.send(noise(50).tobytes())
                np.testing.assert_array_equal(samples_of(collect(source, count(50))), noise(50))
    finally:
        doorman.stop()
        context.term()


def test_sockets_that_do_not_fit_say_so_once(senders):
    _, uri = senders(zmq.PUSH)
    with open_stream(uri, CF32) as source:
        items = collect(source, has("disconnected"))
        assert "sub goes with pub" in items[-1].text
        assert kinds(items) == ["disconnected"]


def test_a_server_without_a_list_of_clients_says_so(keys):
    made, _ = keys
    options = StreamOptions(RATE, "cf32", bind=True, curve=Curve(made["station"][1]))
    with open_stream("tcp://127.0.0.1:0", options) as source:
        assert "any sender that knows the public key" in source.warnings[0]


def test_samples_encrypted_end_to_end(senders, keys):
    made, _ = keys
    public, secret = zmq.auth.load_certificate(made["gauge"][1])
    pub, uri = senders(zmq.XPUB, curve_server=True, curve_publickey=public, curve_secretkey=secret)
    curve = Curve(made["station"][1], server=made["gauge"][0])
    with open_stream(uri, StreamOptions(RATE, "cf32", curve=curve)) as source:
        wait_for_subscriber(pub, source)
        pub.send(noise(50).tobytes())
        np.testing.assert_array_equal(samples_of(collect(source, count(50))), noise(50))
