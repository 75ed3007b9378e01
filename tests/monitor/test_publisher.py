"""Journal lines over a real ZeroMQ socket on loopback."""

import json
import time
from datetime import UTC, datetime

import pytest
import zmq

from monitor.errors import InputError
from monitor.journal import Journal
from monitor.publisher import Publisher, _reached_from_outside

NOW = datetime(2026, 12, 1, 12, tzinfo=UTC)


@pytest.fixture
def subscriber():
    context = zmq.Context()
    socket = context.socket(zmq.SUB)
    socket.linger = 0
    yield socket
    socket.close()
    context.term()


def received(socket, timeout_ms=3000):
    assert socket.poll(timeout_ms), "nothing came"
    return socket.recv_multipart()


def joined(socket, publisher, topic=b""):
    """Subscribe, and wait until it works: the first messages of a PUB go to nobody."""
    socket.connect(publisher.address)
    socket.subscribe(topic)
    for _ in range(300):
        publisher.take({"kind": topic.decode() or "hello"}, b"{}")
        if socket.poll(10):
            break
    else:
        pytest.fail("never joined")
    while socket.poll(50):
        socket.recv_multipart()


def test_every_line_of_the_journal_is_published_under_its_kind(subscriber):
    publisher = Publisher("tcp://127.0.0.1:*")
    with Journal(None, now=lambda: NOW, sinks=[publisher]) as journal:
        joined(subscriber, publisher)
        journal.write("reading", 480, 0.01, {"opening_pct": 61.5, "verdict": "Skjær 🌊"})
        journal.write("alarm", 960, 0.02, {"state": "raised"})
        topic, line = received(subscriber)
        assert topic == b"reading"
        assert json.loads(line) == {
            "kind": "reading",
            "time": "2026-12-01T12:00:00.000000Z",
            "sample": 480,
            "seconds": 0.01,
            "opening_pct": 61.5,
            "verdict": "Skjær 🌊",
        }
        assert received(subscriber)[0] == b"alarm"


def test_one_kind_can_be_subscribed_to(subscriber):
    publisher = Publisher("tcp://127.0.0.1:*")
    joined(subscriber, publisher, b"alarm")
    publisher.take({"kind": "reading"}, b"1")
    publisher.take({"kind": "alarm"}, b"2")
    assert received(subscriber) == [b"alarm", b"2"]
    publisher.close()


def test_the_last_lines_go_out_before_the_socket_closes(subscriber):
    publisher = Publisher("tcp://127.0.0.1:*")
    joined(subscriber, publisher)
    end = b"x" * 1_000_000
    publisher.take({"kind": "stop"}, end)
    publisher.close()
    assert received(subscriber) == [b"stop", end]
    publisher.take({"kind": "stop"}, b"after the end")
    publisher.close()


def test_nobody_listening_and_somebody_who_does_not_read_hold_nothing_up(subscriber):
    publisher = Publisher("tcp://127.0.0.1:*")
    line = b"x" * 20_000
    started = time.monotonic()
    for _ in range(5000):
        publisher.take({"kind": "reading"}, line)
    subscriber.rcvhwm = 1
    joined(subscriber, publisher)
    for _ in range(5000):
        publisher.take({"kind": "reading"}, line)
    assert time.monotonic() - started < 5.0
    came = 0
    while subscriber.poll(200):
        came += subscriber.recv_multipart() == [b"reading", line]
    assert 500 <= came < 4000  # what waits is bounded, the rest is lost: 100 MB do not fit into the system's buffers
    publisher.close()


def test_an_ipc_path_can_be_bound(tmp_path, subscriber):
    publisher = Publisher(f"ipc://{tmp_path}/skerry")
    joined(subscriber, publisher)
    publisher.take({"kind": "mark"}, b"1")
    assert received(subscriber) == [b"mark", b"1"]
    publisher.close()


@pytest.mark.parametrize(
    "address", ["tcp://127.0.0.1:notaport", "tcp://", "carrier-pigeon://x", "", "tcp://256.0.0.1:1"]
)
def test_an_address_that_cannot_be_bound_is_one_line(address):
    with pytest.raises(InputError, match=r"--publish .*: cannot be bound: ") as caught:
        Publisher(address)
    assert "\n" not in str(caught.value)


def test_a_zero_byte_in_an_address_is_refused():
    with pytest.raises(InputError, match="no address has a zero byte"):
        Publisher("tcp://127.0.0.1:*\0")


def test_a_port_in_use_is_said():
    first = Publisher("tcp://127.0.0.1:*")
    with pytest.raises(InputError, match="Address already in use"):
        Publisher(first.address)
    first.close()


def test_an_address_others_can_reach_is_noted_unless_the_socket_was_prepared():
    for prepare, notes in ((None, 1), (lambda socket: None, 0)):
        publisher = Publisher("tcp://0.0.0.0:*", prepare=prepare)
        assert len(publisher.notes) == notes
        publisher.close()
    publisher = Publisher("tcp://127.0.0.1:*")
    assert publisher.notes == ()
    publisher.close()


@pytest.mark.parametrize(
    ("address", "outside"),
    [
        ("tcp://127.0.0.1:5", False),
        ("tcp://127.1.2.3:*", False),
        ("tcp://localhost:5", False),
        ("tcp://[::1]:5", False),
        ("ipc://a", False),
        ("tcp://*:5", True),
        ("tcp://0.0.0.0:5", True),
        ("tcp://eth0:5", True),
        ("tcp://[::]:5", True),
        ("tcp://10.0.0.1:5", True),
    ],
)
def test_loopback_is_told_from_the_rest(address, outside):
    assert _reached_from_outside(address) == outside
