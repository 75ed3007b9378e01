"""Samples in messages: what the parts of a message mean, told from their bytes alone.

Two forms. *Headerless*: the last part of a message is samples, whatever stands before it (a topic, as a rule) is passed
over; rate and format come from the user, and what was lost between two messages cannot be known. *Framed*: the part
before the samples is a JSON object, so that losses are known exactly::

    {"lidwatch": 1, "stream": "west-7f3a", "sample": 96000, "rate_hz": 48000.0, "format": "cf32_le",
     "time": "2031-05-04T12:00:02.000000Z", "centre_hz": 169400000.0}

``lidwatch`` is the version of the form; ``stream`` names one run of a sender; ``sample`` is the index in that run of the
first sample that follows; ``time`` (when that sample was taken) and ``centre_hz`` may be left out.

A message begins with a whole sample. Bytes at its end that do not make one are left out and counted (``torn``): joining
them to the next message would turn every later sample into noise if a message between the two was lost. The sample
they belonged to counts as lost.
"""

import json
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any, Final, Literal, NamedTuple

from dsp.block import Block
from monitor.errors import InputError, printable
from monitor.sources.formats import SampleFormat, parse_datatype

FORM_VERSION: Final = 1
_MOST_HEADER_BYTES: Final = 65536
_MOST_SAMPLE: Final = 1 << 62
_LONGEST_LOSS_S: Final = 30 * 86400.0  # a greater leap of the index is a sender that counts anew
_RETIRED: Final = 16
_RETURN_AFTER: Final = 32  # messages in a row of an earlier stream until it is taken for the present one again

EventKind = Literal[
    "start",
    "restart",
    "rate",
    "format",
    "centre",
    "torn",
    "oversize",
    "garbage",
    "connected",
    "disconnected",
    "overflow",
    "ended",
]
DESCRIBING: Final = frozenset(("start", "restart", "rate", "format", "centre"))
Part = bytes | memoryview


@dataclass(frozen=True, slots=True)
class StreamEvent:
    """Something that happened to a stream, other than samples arriving.

    Attributes
    ----------
    kind
        ``start``: the first samples follow; ``restart``: the sender began anew; ``rate``, ``format``, ``centre``: that
        changed; ``torn``: a message ended inside a sample; ``oversize``: a message was above the limit; ``garbage``: a
        message could not be read; ``connected``, ``disconnected``: a sender came or went; ``overflow``: the input device
        lost samples; ``ended``: there will be no more.
    text
        One line for the user.
    sample
        Index in the stream at which the next samples will lie.
    rate_hz, format, centre_hz
        What holds from here on; given by the first five kinds, else None (``centre_hz`` also where it is unknown).
    encoding
        How a file holds the samples, such as ``WAV PCM_16``, where that is not ``format``.
    """

    kind: EventKind
    text: str
    sample: int
    rate_hz: float | None = None
    format: str | None = None
    centre_hz: float | None = None
    encoding: str = ""


Item = Block | StreamEvent


@dataclass(frozen=True, slots=True)
class FrameHeader:
    """The header of a framed message; the fields are described in this module's own text."""

    stream: str
    sample: int
    rate_hz: float
    format: str
    time: str | None = None
    centre_hz: float | None = None

    def to_bytes(self) -> bytes:
        """The header part, UTF-8."""
        fields: dict[str, Any] = {
            "lidwatch": FORM_VERSION,
            "stream": self.stream,
            "sample": self.sample,
            "rate_hz": self.rate_hz,
            "format": self.format,
        }
        if self.time is not None:
            fields["time"] = self.time
        if self.centre_hz is not None:
            fields["centre_hz"] = self.centre_hz
        return json.dumps(fields, separators=(",", ":")).encode()


@dataclass(frozen=True, slots=True)
class WireState:
    """What a receiver knows between two messages.

    Attributes
    ----------
    given_rate_hz, given_format
        What the user said; wins over what frames say.
    rate_hz, format, centre_hz
        In force; None until known.
    topic
        A message of one part that begins with these bytes carries them before its samples.
    next
        Index in the receiver's stream of the sample after the last one delivered.
    owed
        Samples lost since then.
    stream
        Stream id of the sender; None before the first frame and for headerless messages.
    expected
        Index in the sender's stream that should come next.
    retired
        Earlier stream ids, newest last: a message of one of them is another sender's and left out.
    strangers
        Messages in a row that were left out for that.
    sent_at
        Time in the newest frame that told one.
    started
        Whether samples have come.
    messages, samples, lost, torn, garbage, restarts
        Totals.
    unreadable
        Headerless messages left out because the user gave no rate or format.
    """

    given_rate_hz: float | None = None
    given_format: SampleFormat | None = None
    topic: bytes = b""
    rate_hz: float | None = None
    format: SampleFormat | None = None
    centre_hz: float | None = None
    next: int = 0
    owed: int = 0
    stream: str | None = None
    expected: int = 0
    retired: tuple[str, ...] = ()
    strangers: int = 0
    sent_at: str | None = None
    started: bool = False
    messages: int = 0
    samples: int = 0
    lost: int = 0
    torn: int = 0
    garbage: int = 0
    restarts: int = 0
    unreadable: int = 0

    @property
    def position(self) -> int:
        """Index in the stream at which the next samples will lie."""
        return self.next + self.owed


class Outcome(NamedTuple):
    """What a message gave, in order, and the state after it."""

    items: tuple[Item, ...]
    state: WireState


class _Unreadable(Exception):
    """Why a frame's header cannot be used."""


def begin(rate_hz: float | None = None, format_name: str | None = None, topic: str = "") -> WireState:
    """The state before the first message; raises InputError for a format that does not exist."""
    form = None if format_name is None else parse_datatype(format_name)
    return WireState(given_rate_hz=rate_hz, given_format=form, topic=topic.encode())


def decode(parts: Sequence[Part], state: WireState) -> Outcome:
    """Read one message; whatever its bytes are, nothing is raised: what cannot be read is counted and told.

    Parameters
    ----------
    parts
        The parts of the message; samples may stay views of the last one.
    state
        From `begin` or from the message before.
    """
    state = replace(state, messages=state.messages + 1)
    if not parts:
        return _garbage(state, "a message without parts")
    header = _header_part(parts)
    if header is None:
        return _headerless(parts, state)
    try:
        frame = _parse_header(header)
    except _Unreadable as reason:
        return _garbage(state, f"a frame whose header {reason}")
    return _framed(frame, parts[-1], state)


def describe(state: WireState) -> str:
    """Rate and format in words."""
    rate = "unknown rate" if state.rate_hz is None else f"{state.rate_hz:.12g} Hz"
    return f"{rate}, {'unknown format' if state.format is None else state.format.name}"


def _header_part(parts: Sequence[Part]) -> Part | None:
    if len(parts) < 2 or len(parts[-2]) > _MOST_HEADER_BYTES:
        return None
    head = bytes(parts[-2])
    return head if head.startswith(b"{") and b'"lidwatch"' in head else None


def _parse_header(header: Part) -> FrameHeader:
    try:
        fields = json.loads(bytes(header))
    except (ValueError, RecursionError):
        raise _Unreadable("is not JSON") from None
    if not isinstance(fields, dict):
        raise _Unreadable("is not an object")
    version = fields.get("lidwatch")
    if isinstance(version, bool) or version != FORM_VERSION:
        raise _Unreadable(f"is of version {str(version)[:20]}, not {FORM_VERSION}")
    stream, sample, rate = fields.get("stream"), fields.get("sample"), fields.get("rate_hz")
    if not isinstance(stream, str) or len(stream) > 256:
        raise _Unreadable("has no usable stream id")
    if not isinstance(sample, int) or isinstance(sample, bool) or not 0 <= sample < _MOST_SAMPLE:
        raise _Unreadable("has no usable sample index")
    rate_hz = _finite(rate)
    if rate_hz is None or not 1e-3 <= rate_hz <= 1e12:
        raise _Unreadable("has no usable rate_hz")
    try:
        form = parse_datatype(str(fields.get("format"))[:40])
    except InputError:
        raise _Unreadable("has no format of SigMF's names") from None
    return FrameHeader(stream, sample, rate_hz, form.name, _time(fields.get("time")), _finite(fields.get("centre_hz")))


def _finite(value: object) -> float | None:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        return None
    try:
        number = float(value)
    except OverflowError:
        return None
    return number if math.isfinite(number) else None


def _time(value: object) -> str | None:
    if not isinstance(value, str):
        return None
    try:
        datetime.fromisoformat(value)
    except ValueError:
        return None
    return value


def _headerless(parts: Sequence[Part], state: WireState) -> Outcome:
    rate_hz, form = state.given_rate_hz, state.given_format
    if rate_hz is None or form is None:
        state = replace(state, unreadable=state.unreadable + 1)
        return _garbage(state, "a message of bare samples, whose rate and format are not given")
    items: list[Item] = []
    if not state.started:
        state = _take_over(items, state, "start", rate_hz, form, None, "samples arrive")
    elif state.stream is not None:
        state = replace(state, retired=_retire(state), stream=None, restarts=state.restarts + 1)
        text = "the sender now sends bare samples: losses cannot be known any more"
        state = _take_over(items, state, "restart", rate_hz, form, None, text)
    data = parts[-1]
    if len(parts) == 1 and state.topic and bytes(data[: len(state.topic)]) == state.topic:
        data = memoryview(data)[len(state.topic) :]
    return _deliver(items, data, state, framed=False)


def _framed(frame: FrameHeader, data: Part, state: WireState) -> Outcome:
    if frame.stream in state.retired and state.strangers < _RETURN_AFTER:
        state = replace(state, strangers=state.strangers + 1)
        name = printable(frame.stream)
        return _garbage(state, f"a message of stream {name}, of another sender or from before the restart")
    items: list[Item] = []
    form = state.given_format or parse_datatype(frame.format)
    rate = state.given_rate_hz or frame.rate_hz
    if not state.started or state.stream != frame.stream:
        kind: EventKind = "restart" if state.started else "start"
        begun = state.started
        retired = tuple(name for name in _retire(state) if name != frame.stream)
        state = replace(state, retired=retired, stream=frame.stream, restarts=state.restarts + begun)
        text = f"the sender began anew as stream {printable(frame.stream)}" if begun else "framed samples arrive"
        text += _contradiction(frame, state)
        state = _take_over(items, state, kind, rate, form, frame.centre_hz, text)
    else:
        leap = frame.sample - state.expected
        if leap < 0 or leap > _LONGEST_LOSS_S * rate:
            way = "back" if leap < 0 else "far ahead"
            text = f"the sender's sample count went {way}, from {state.expected} to {frame.sample}: taken as a restart"
            state = replace(state, restarts=state.restarts + 1)
            state = _take_over(items, state, "restart", rate, form, frame.centre_hz, text)
        else:
            state = replace(state, owed=state.owed + leap, lost=state.lost + leap)
            state = _changes(items, state, rate, form, frame.centre_hz)
    state = replace(state, expected=frame.sample, strangers=0, sent_at=frame.time or state.sent_at)
    return _deliver(items, data, state, framed=True)


def _retire(state: WireState) -> tuple[str, ...]:
    if state.stream is None or state.stream in state.retired:
        return state.retired
    return (*state.retired, state.stream)[-_RETIRED:]


def _contradiction(frame: FrameHeader, state: WireState) -> str:
    words = ""
    if state.given_rate_hz is not None and state.given_rate_hz != frame.rate_hz:
        words += f"; it says {frame.rate_hz:.12g} Hz, --rate {state.given_rate_hz:.12g} is used"
    if state.given_format is not None and state.given_format.name != frame.format:
        words += f"; it says {frame.format}, --format {state.given_format.name} is used"
    return words


def _take_over(
    items: list[Item],
    state: WireState,
    kind: EventKind,
    rate_hz: float,
    form: SampleFormat,
    centre_hz: float | None,
    text: str,
) -> WireState:
    state = replace(state, rate_hz=rate_hz, format=form, centre_hz=centre_hz, started=True)
    items.append(_described(kind, f"{text} ({describe(state)})", state))
    return state


def _described(kind: EventKind, text: str, state: WireState) -> StreamEvent:
    name = None if state.format is None else state.format.name
    return StreamEvent(kind, text, state.position, state.rate_hz, name, state.centre_hz)


def _changes(
    items: list[Item], state: WireState, rate_hz: float, form: SampleFormat, centre_hz: float | None
) -> WireState:
    before = state
    state = replace(state, rate_hz=rate_hz, format=form, centre_hz=centre_hz)
    if before.rate_hz is not None and rate_hz != before.rate_hz:
        text = f"the sample rate changed from {before.rate_hz:.12g} to {rate_hz:.12g} Hz"
        items.append(_described("rate", text, state))
    if before.format is not None and form != before.format:
        items.append(_described("format", f"the format changed from {before.format.name} to {form.name}", state))
    if centre_hz != before.centre_hz:
        new, old = ("unknown" if value is None else f"{value:.12g} Hz" for value in (centre_hz, before.centre_hz))
        items.append(_described("centre", f"the centre frequency changed from {old} to {new}", state))
    return state


def _deliver(items: list[Item], data: Part, state: WireState, *, framed: bool) -> Outcome:
    form = state.format
    if form is None:  # no path leads here; the types cannot tell
        return _garbage(state, "a message before its format")
    whole, rest = divmod(len(data), form.bytes_per_sample)
    if whole:
        samples, clipped, nonfinite = form.decode(memoryview(data)[: len(data) - rest])
        items.append(Block(samples, state.position, state.owed, clipped, nonfinite))
        state = replace(
            state,
            next=state.position + whole,
            owed=0,
            samples=state.samples + whole,
            expected=state.expected + whole,
        )
    if rest:
        state = replace(state, torn=state.torn + 1)
        if not framed:  # a frame's index tells, in the next message, how much is missing
            state = replace(state, owed=state.owed + 1, lost=state.lost + 1)
        bytes_ = f"{rest} byte{'s' * (rest > 1)}"
        text = f"a message of {len(data)} bytes ended inside a sample of {form.name}; the last {bytes_} left out"
        items.append(StreamEvent("torn", text, state.position))
    return Outcome(tuple(items), state)


def _garbage(state: WireState, what: str) -> Outcome:
    state = replace(state, garbage=state.garbage + 1)
    return Outcome((StreamEvent("garbage", printable(f"{what}: left out"), state.position),), state)
