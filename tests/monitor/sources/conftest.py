"""Senders on loopback whose sockets are closed at the end, and a check that nothing was left open."""

import threading

import pytest
import zmq


@pytest.fixture(autouse=True)
def no_threads_left():
    """Every thread that a test started has ended when the test has."""
    before = set(threading.enumerate())
    yield
    left = [thread for thread in threading.enumerate() if thread not in before]
    for thread in left:
        thread.join(5)
    alive = [thread.name for thread in left if thread.is_alive()]
    assert alive == []


@pytest.fixture
def senders():
    """Makes sending sockets; closed with linger 0; the context must end at once, or a socket was leaked."""
    context = zmq.Context()
    made = []

    def make(kind=zmq.PUB, address="tcp://127.0.0.1:*", bind=True, **options):
        sock = context.socket(kind)
        made.append(sock)
        sock.linger = 0
        sock.sndhwm = 0
        sock.reconnect_ivl = 20
        sock.sndtimeo = 10_000
        for name, value in options.items():
            setattr(sock, name, value)
        if bind:
            sock.bind(address)
        else:
            sock.connect(address)
        return sock, sock.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\0")

    yield make
    for sock in made:
        sock.close(linger=0)
    ended = threading.Thread(target=context.term, daemon=True)
    ended.start()
    ended.join(5)
    assert not ended.is_alive(), "a socket was left open"
