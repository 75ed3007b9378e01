"""Live streams from ZeroMQ: one socket, used by the thread that opened it."""

import math
import time
from collections.abc import Callable, Iterable
from contextlib import suppress
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Final, Literal, Protocol, cast

import numpy as np

from dsp.block import Block, Samples
from monitor.errors import InputError, printable
from monitor.sources.base import Closing
from monitor.sources.endpoint import Endpoint, is_stream, parse_endpoint
from monitor.sources.keys import Curve, secure
from monitor.sources.wire import EventKind, Item, StreamEvent, WireState, begin, decode

if TYPE_CHECKING:
    import zmq
    from zmq.auth.thread import ThreadAuthenticator

SocketKind = Literal["sub", "pull"]
HEARTBEAT_MS: Final = 1000
HEARTBEAT_TIMEOUT_MS: Final = 5000
RECONNECT_MS: Final = 100
RECONNECT_MOST_MS: Final = 1000
CONNECT_TIMEOUT_MS: Final = 5000

_MOST_MESSAGES = 1024  # read in one poll
_MOST_BYTES = 8 << 20
_MERGED_SAMPLES = 65536  # short blocks that follow one another are joined up to this size
_GIVEN_UP_S = 0.5  # the library tries again at once after a loss, or never
_TRY_AGAIN_S = 2.0
_LIMITED: Final = ("torn", "garbage", "oversize", "overflow")
_LIMIT_S = 1.0
_REFUSALS_S = 10.0  # between two notices of a refused connection
_NO_KEY = "the keys do not fit"
_NO_COMMON_WORD = "the other side is no match: sub goes with pub, pull with push; keys are on both sides or on neither"


@dataclass(frozen=True, slots=True)
class StreamOptions:
    """What the user says of a live stream.

    Attributes
    ----------
    rate_hz, format
        Of headerless samples, where both are needed; win over what frames say.
    socket
        ``sub`` (subscribe) or ``pull``.
    bind
        Bind the address instead of connecting to it.
    topic
        Prefix of the messages to take; ``sub`` only.
    curve
        Keys; None: neither encrypted nor authenticated.
    high_water
        Most messages that wait in the library for each sender (ZMQ_RCVHWM), at least 1.
    max_message_bytes
        A sender of a larger message is cut off (ZMQ_MAXMSGSIZE).
    """

    rate_hz: float | None = None
    format: str | None = None
    socket: SocketKind = "sub"
    bind: bool = False
    topic: str = ""
    curve: Curve | None = None
    high_water: int = 1000
    max_message_bytes: int = 64 << 20


class LiveSource(Closing, Protocol):
    """A source of samples that come when they come; owned by one thread.

    Attributes
    ----------
    uri
        As the user gave it.
    warnings
        What the user should know at the start, one line each.
    ended
        No more will come.
    patient
        Its samples can wait, as a recording's can: none need be dropped while the taker is slow.
    """

    uri: str
    warnings: tuple[str, ...]
    ended: bool
    patient: bool = False

    def poll(self, timeout_s: float) -> tuple[Item, ...]:
        """What has come, in order, waiting up to ``timeout_s`` for the first of it; may be empty.

        A ``start`` event comes before the first block. Raises InputError if the stream turns out to be unusable.
        """
        ...

    def close(self) -> None:
        """Give back what the source holds; may be called twice."""
        ...


def check_rate(rate_hz: float | None) -> None:
    """Refuse a rate that cannot be; raise InputError."""
    if rate_hz is not None and not 0.0 < rate_hz < math.inf:
        raise InputError(f"--rate {rate_hz}: must be above 0 Hz and finite")


def open_stream(
    uri: str, options: StreamOptions | None = None, *, now: Callable[[], float] = time.monotonic
) -> "StreamSource":
    """Open ``tcp://HOST:PORT`` or ``ipc://PATH``; to be used and closed in the same thread.

    Raises
    ------
    InputError
        The address, the options or the keys are unusable, or the address is in use.
    """
    return StreamSource(uri, options or StreamOptions(), now=now)


class StreamSource(LiveSource):
    """Samples from a ZeroMQ socket, in either form of `monitor.sources.wire`; made, used and closed in one thread.

    Attributes
    ----------
    state
        What is known of the stream, with its totals.
    endpoint
        The address in use; after binding with port 0 it has the port that the system chose.
    """

    def __init__(self, uri: str, options: StreamOptions, *, now: Callable[[], float] = time.monotonic) -> None:
        check_rate(options.rate_hz)
        _check(uri, options)
        self.uri = uri
        self.ended = False
        self.state: WireState = begin(options.rate_hz, options.format, options.topic)
        address = parse_endpoint(uri, bind=options.bind)
        self.warnings = tuple(_warnings(address, options))
        self._options = options
        self._now = now
        self._limiter = _Limiter(now)
        self._handshakes = 0
        self._given_up_at: float | None = None
        self._refused = ""
        self._failing = False
        self._refusal_told_at = -math.inf
        self._open(address)

    def _open(self, address: Endpoint) -> None:
        import zmq

        self._zmq = zmq
        self._context = zmq.Context()
        self._authenticator: ThreadAuthenticator | None = None
        self._monitor: Any = None
        self._socket: Any = self._context.socket(zmq.SUB if self._options.socket == "sub" else zmq.PULL)
        try:
            self._configure(address)
            self._authenticator = self._with_keys()
            self._monitor = self._socket.get_monitor_socket()
            self.endpoint = attach(self._socket, address, bind=self._options.bind)
            self._poller = zmq.Poller()
            self._poller.register(self._socket, zmq.POLLIN)
            self._poller.register(self._monitor, zmq.POLLIN)
        except BaseException:
            self.close()
            raise

    def _configure(self, address: Endpoint) -> None:
        socket, options = self._socket, self._options
        socket.linger = 0
        socket.rcvhwm = options.high_water
        socket.maxmsgsize = options.max_message_bytes
        set_liveness(socket, address)
        if options.socket == "sub":
            socket.subscribe(options.topic.encode())

    def _with_keys(self) -> "ThreadAuthenticator | None":
        if self._options.curve is None:
            return None
        return secure(self._context, self._socket, self._options.curve, bind=self._options.bind)

    def poll(self, timeout_s: float) -> tuple[Item, ...]:
        """What has come, in order; see `LiveSource`."""
        items: list[Item] = []
        ready = dict(self._poller.poll(max(0, math.ceil(timeout_s * 1000))))
        if self._monitor in ready:
            self._read_monitor(items)
        if self._socket in ready:
            self._read_messages(items)
        self._reconnect_if_given_up(items)
        return tuple(merged(self._limiter.limit(items, self.state.position)))

    def _read_messages(self, items: list[Item]) -> None:
        zmq = self._zmq
        budget = _MOST_BYTES
        for _ in range(_MOST_MESSAGES):
            try:
                parts = self._socket.recv_multipart(zmq.NOBLOCK, copy=False)
            except zmq.Again:
                return
            got, self.state = decode([part.buffer for part in parts], self.state)
            items.extend(got)
            if self.state.unreadable and not self.state.started:
                raise InputError(f"{self.uri}: the sender sends bare samples; give --rate HZ and --format NAME")
            budget -= sum(len(part) for part in parts)
            if budget < 0:
                return

    def _read_monitor(self, items: list[Item]) -> None:
        from zmq.utils.monitor import parse_monitor_message

        zmq = self._zmq
        failed = (
            zmq.EVENT_HANDSHAKE_FAILED_AUTH,
            zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL,
            zmq.EVENT_HANDSHAKE_FAILED_NO_DETAIL,
        )
        while self._monitor.poll(0):
            message = parse_monitor_message(self._monitor.recv_multipart(zmq.NOBLOCK))
            event = message["event"]
            place = printable(message["endpoint"].decode("utf-8", "replace")) or self.uri
            if event in (zmq.EVENT_CONNECTED, zmq.EVENT_CONNECT_DELAYED, zmq.EVENT_CONNECT_RETRIED):
                self._given_up_at = None
            elif event == zmq.EVENT_HANDSHAKE_SUCCEEDED:
                self._handshakes += 1
                self._refused = ""
                items.append(self._event("connected", f"a sender is connected at {place}"))
            elif event in failed:
                self._refused = _NO_KEY if event == zmq.EVENT_HANDSHAKE_FAILED_AUTH else _NO_COMMON_WORD
                self._failing = True  # its DISCONNECTED comes next
            elif event == zmq.EVENT_DISCONNECTED:
                self._left(items, place)

    def _left(self, items: list[Item], place: str) -> None:
        if self._failing or not self._handshakes:
            self._failing = False
            self._refused = self._refused or _NO_COMMON_WORD
            if self._now() - self._refusal_told_at >= _REFUSALS_S:
                self._refusal_told_at = self._now()
                items.append(self._event("disconnected", f"no connection at {place}: {self._refused}"))
        else:
            self._handshakes -= 1
            items.append(self._event("disconnected", f"the sender at {place} is gone; waiting for it"))
        if not self._options.bind:
            self._given_up_at = self._now()

    def _reconnect_if_given_up(self, items: list[Item]) -> None:
        """After a violation of its protocol, such as a message above the limit, the library never connects again."""
        if self._given_up_at is None:
            return
        waited = self._now() - self._given_up_at
        if self._refused:
            if waited < _TRY_AGAIN_S:
                return
        elif waited < _GIVEN_UP_S:
            return
        else:
            most = self._options.max_message_bytes
            text = f"the connection was cut off, most likely by a message above {most} bytes; connecting again"
            items.append(self._event("oversize", text))
        self._given_up_at = None
        with suppress(self._zmq.ZMQError):  # the library may have forgotten it already
            self._socket.disconnect(self.endpoint)
        self._socket.connect(self.endpoint)

    def _event(self, kind: EventKind, text: str) -> StreamEvent:
        return StreamEvent(kind, text, self.state.position)

    def close(self) -> None:
        """Close the socket without waiting for anybody; may be called twice."""
        self.ended = True
        if self._context.closed:
            return
        if self._monitor is not None:
            self._socket.disable_monitor()
        self._socket.close(linger=0)
        if self._authenticator is not None:
            self._authenticator.stop()
        self._context.destroy(linger=0)


def _check(uri: str, options: StreamOptions) -> None:
    if options.socket not in ("sub", "pull"):
        raise InputError(f"--socket {options.socket}: must be sub or pull")
    if options.topic and options.socket != "sub":
        raise InputError(f"--topic {options.topic}: only a subscriber has topics; leave out --socket {options.socket}")
    if options.high_water < 1:
        raise InputError(f"{uri}: the high-water mark must be 1 message or more, got {options.high_water}")
    if options.max_message_bytes < 1:
        raise InputError(f"{uri}: the largest message must have 1 byte or more, got {options.max_message_bytes}")
    if (options.rate_hz is None) != (options.format is None):
        missing = "--rate HZ" if options.rate_hz is None else "--format NAME"
        raise InputError(f"{uri}: bare samples need {missing} too; for framed samples leave out both")


def _warnings(address: Endpoint, options: StreamOptions) -> Iterable[str]:
    open_door = options.bind and not address.loopback
    if open_door and options.curve is None:
        yield f"{address.uri}: anybody who reaches this address can send samples; use keys, or bind 127.0.0.1"
    if options.bind and options.curve is not None and options.curve.clients is None:
        yield f"{address.uri}: any sender that knows the public key is let in; name a folder of clients' keys"


def attach(socket: "zmq.Socket[bytes]", address: Endpoint, *, bind: bool) -> str:
    """Bind or connect a socket; return the address in use; raise InputError with the reason in words."""
    import errno

    import zmq

    try:
        if bind:
            socket.bind(address.uri)
            bound = socket.getsockopt_string(zmq.LAST_ENDPOINT)
            return bound.rstrip("\0")
        socket.connect(address.uri)
    except zmq.ZMQError as error:
        reason = {
            errno.EADDRINUSE: "the address is in use; end the other program or choose another port",
            errno.EADDRNOTAVAIL: "this machine has no such address; bind one of its own, or *",
            errno.ENODEV: "this machine has no such address; bind one of its own, or *",
            errno.EACCES: "permission denied; choose a port above 1023 or another path",
            errno.EINVAL: "not an address that ZeroMQ can use; write tcp://HOST:PORT or ipc://PATH",
        }.get(error.errno or 0, f"cannot be {'bound' if bind else 'connected to'}: {error.strerror}")
        raise InputError(f"{address.uri}: {reason}") from error
    return address.uri


def set_liveness(socket: "zmq.Socket[bytes]", address: Endpoint) -> None:
    """Heartbeats that find a dead peer within 6 s, and the pace of new attempts."""
    socket.heartbeat_ivl = HEARTBEAT_MS
    socket.heartbeat_timeout = HEARTBEAT_TIMEOUT_MS
    socket.heartbeat_ttl = HEARTBEAT_TIMEOUT_MS
    socket.reconnect_ivl = RECONNECT_MS
    socket.reconnect_ivl_max = RECONNECT_MOST_MS
    if address.transport == "tcp":
        socket.connect_timeout = CONNECT_TIMEOUT_MS
        socket.ipv6 = address.ipv6


def merged(items: Iterable[Item], most: int = _MERGED_SAMPLES) -> list[Item]:
    """Join short blocks that follow one another without loss: fewer, longer calls for the chain."""
    out: list[Item] = []
    run: list[Block] = []
    size = 0
    for item in items:
        if not isinstance(item, Block):
            _close_run(out, run)
            out.append(item)
            continue
        fits = bool(run) and item.lost == 0 and size + item.samples.size <= most
        if not (fits and item.samples.dtype == run[0].samples.dtype):
            _close_run(out, run)
            size = 0
        run.append(item)
        size += item.samples.size
    _close_run(out, run)
    return out


def _close_run(out: list[Item], run: list[Block]) -> None:
    if len(run) == 1:
        out.append(run[0])
    elif run:
        samples = cast("Samples", np.concatenate([block.samples for block in run]))
        clipped, nonfinite = sum(block.clipped for block in run), sum(block.nonfinite for block in run)
        out.append(Block(samples, run[0].start, run[0].lost, clipped, nonfinite))
    run.clear()


@dataclass(slots=True)
class _Held:
    count: int = 0
    told_at: float = -math.inf
    text: str = ""


@dataclass(slots=True)
class _Limiter:
    """Tells of each kind of damage once a second at most, then with how often it happened meanwhile."""

    now: Callable[[], float]
    held: dict[EventKind, _Held] = field(default_factory=dict)

    def limit(self, items: list[Item], position: int) -> list[Item]:
        out: list[Item] = []
        for item in items:
            if isinstance(item, Block) or item.kind not in _LIMITED:
                out.append(item)
                continue
            held = self.held.setdefault(item.kind, _Held())
            if held.count or self.now() - held.told_at < _LIMIT_S:
                held.count += 1
                held.text = item.text
            else:
                held.told_at = self.now()
                out.append(item)
        for kind, held in self.held.items():
            if held.count and self.now() - held.told_at >= _LIMIT_S:
                more = f"; {held.count} such since the last notice" if held.count > 1 else ""
                out.append(StreamEvent(kind, held.text + more, position))
                held.count, held.told_at = 0, self.now()
        return out


__all__ = [
    "Curve",
    "LiveSource",
    "StreamEvent",
    "StreamOptions",
    "StreamSource",
    "attach",
    "is_stream",
    "open_stream",
    "set_liveness",
]
