"""Addresses of streams, checked before the library sees them."""

import socket

import pytest

from monitor.errors import InputError
from monitor.sources.endpoint import is_stream, parse_endpoint


@pytest.mark.parametrize(
    ("uri", "loopback"),
    [
        ("tcp://127.0.0.1:5555", True),
        ("tcp://127.9.9.9:5555", True),
        ("tcp://localhost:5555", True),
        ("tcp://[::1]:5555", True),
        ("tcp://*:5555", False),
        ("tcp://0.0.0.0:5555", False),
        ("tcp://192.0.2.7:1", False),
        ("tcp://[::]:5555", False),
    ],
)
def test_a_tcp_address_says_whether_only_this_machine_reaches_it(uri, loopback):
    endpoint = parse_endpoint(uri, bind=True)
    assert endpoint.loopback is loopback
    assert endpoint.ipv6 is ("[" in uri)
    assert is_stream(uri)


@pytest.mark.parametrize(
    ("uri", "bind", "message"),
    [
        ("tcp://", False, "needs a host and a port"),
        ("tcp://127.0.0.1", False, "needs a host and a port"),
        ("tcp://:5555", False, "needs a host and a port"),
        ("tcp://127.0.0.1:", False, "port must be a number"),
        ("tcp://127.0.0.1:0", False, "port must be a number"),
        ("tcp://127.0.0.1:*", False, "port must be a number"),
        ("tcp://127.0.0.1:65536", True, "port must be a number"),
        ("tcp://127.0.0.1:-1", True, "port must be a number"),
        ("tcp://127.0.0.1:٣", True, "port must be a number"),
        ("tcp://::1:5555", False, "brackets"),
        ("tcp://[127.0.0.1]:5555", False, "brackets"),
        ("tcp://a/b:5555", False, "host and a port only"),
        ("tcp://*:5555", False, "can be bound, not connected"),
        ("tcp://127.0.0.1:55 55", False, "no blanks"),
        ("tcp://no-such-host.invalid:5555", False, "cannot be found"),
        ("tcp://" + "x" * 300 + ":5555", False, "cannot be found"),
        ("udp://127.0.0.1:5555", False, "not a stream's address"),
        ("ipc://", False, "needs a path"),
        ("ipc://*", True, "needs a path"),
        ("ipc:///tmp/" + "x" * 120, False, "107 is the most"),
        ("ipc:///no/such/folder/x", True, "no folder /no/such/folder"),
    ],
)
def test_an_address_of_no_use_is_refused_with_the_reason(uri, bind, message):
    with pytest.raises(InputError, match=message):
        parse_endpoint(uri, bind=bind)


def test_a_file_in_the_way_of_a_socket_is_not_replaced(tmp_path):
    path = tmp_path / "notes.txt"
    path.write_text("keep me")
    with pytest.raises(InputError, match="not a socket"):
        parse_endpoint(f"ipc://{path}", bind=True)
    assert path.read_text() == "keep me"
    parse_endpoint(f"ipc://{path}", bind=False)


def test_a_socket_that_somebody_listens_on_is_in_use_and_a_dead_one_is_not(tmp_path):
    path = tmp_path / "live"
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as listener:
        listener.bind(str(path))
        listener.listen(1)
        with pytest.raises(InputError, match="in use"):
            parse_endpoint(f"ipc://{path}", bind=True)
    assert path.exists()
    assert parse_endpoint(f"ipc://{path}", bind=True).loopback


def test_file_names_are_not_streams():
    assert not is_stream("recordings/tcp.wav")
    assert not is_stream("-")
    assert not is_stream("audio:card")
