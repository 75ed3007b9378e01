"""Journal lines to whoever listens: a ZeroMQ PUB socket."""

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any, Final
from urllib.parse import urlsplit

from monitor.errors import InputError

if TYPE_CHECKING:
    import zmq

_MOST_WAITING: Final = 1000  # messages, for each listener
_LINGER_MS: Final = 200
_HEARTBEAT_MS: Final = 10_000
_MOST_HEARD_BYTES: Final = 1 << 16  # of a subscription
_LOOPBACK: Final = ("localhost", "::1")


class Publisher:
    """Publishes each line as two frames: its kind, to subscribe to, and the line as UTF-8 JSON without its end.

    Never waits: a listener that falls more than 1000 messages behind loses what follows, and nobody listening is no error. A sink of
    `monitor.journal`; may be made in one thread and then used in another, not in two at once.

    Parameters
    ----------
    address
        To bind: ``tcp://127.0.0.1:5570``, ``tcp://*:5570``, ``ipc:///run/skerry.sock``; port ``*`` takes any that is free.
    prepare
        Is given the socket before it is bound, to set up its encryption; without it an address others can reach is noted in `notes`.

    Raises
    ------
    InputError
        The address cannot be bound.
    """

    def __init__(self, address: str, *, prepare: "Callable[[zmq.Socket[bytes]], None] | None" = None) -> None:
        import zmq

        if "\0" in address:  # the library would read up to there
            raise InputError(f"--publish {address}: no address has a zero byte in it")
        self._context = zmq.Context()
        self._socket: zmq.Socket[bytes] | None = self._context.socket(zmq.PUB)
        self.not_sent = 0
        try:
            self._socket.setsockopt(zmq.SNDHWM, _MOST_WAITING)
            self._socket.setsockopt(zmq.LINGER, _LINGER_MS)
            self._socket.setsockopt(zmq.HEARTBEAT_IVL, _HEARTBEAT_MS)
            self._socket.setsockopt(zmq.MAXMSGSIZE, _MOST_HEARD_BYTES)
            self._socket.setsockopt(zmq.IPV6, int("[" in address))
            if prepare is not None:
                prepare(self._socket)
            self._socket.bind(address)
            self.address = self._socket.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\0")
        except (zmq.ZMQError, TypeError, ValueError, UnicodeError) as error:
            self.close()
            why = zmq.strerror(error.errno or 0) if isinstance(error, zmq.ZMQError) else str(error)
            raise InputError(
                f"--publish {address}: cannot be bound: {why}; give tcp://127.0.0.1:PORT or ipc://PATH"
            ) from None
        open_to_all = prepare is None and _reached_from_outside(address)
        self.notes: tuple[str, ...] = (
            (f"--publish {address}: anyone who can reach this address can read the journal, unencrypted",)
            if open_to_all
            else ()
        )

    def take(self, record: Mapping[str, Any], line: bytes) -> None:
        """Publish one line; counts in ``not_sent`` what the socket refuses."""
        import zmq

        if self._socket is None:
            return
        try:
            self._socket.send_multipart([str(record["kind"]).encode("utf-8"), line], zmq.NOBLOCK)
        except zmq.ZMQError:
            self.not_sent += 1

    def close(self) -> None:
        """Let what was published go out for a fifth of a second, and close the socket."""
        socket, self._socket = self._socket, None
        if socket is not None:
            socket.close()
            self._context.term()


def _reached_from_outside(address: str) -> bool:
    if not address.startswith("tcp://"):
        return False
    try:
        host = urlsplit(address).hostname or ""
    except ValueError:
        return True
    return not (host in _LOOPBACK or host.startswith("127."))
