"""What tools/transmit.py does while it sends live: pacing, schedule, keys, and where the samples go."""

import math
import os
import secrets
import select
import time
import tomllib
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any, BinaryIO, Protocol, TextIO

from dsp.errors import DspError
from dsp.transmitter import LiveTransmitter, TransmitSpec
from monitor.sources.endpoint import parse_endpoint
from monitor.sources.keys import Curve, secure
from monitor.sources.stream import attach, set_liveness
from monitor.sources.wire import FrameHeader

MESSAGE_S = 0.02
LATE_S = 0.5  # behind the true rate: told, and given up
TOLD_EVERY_S = 5.0
Changes = dict[str, Any]
ChangesFrom = Callable[[str, object], Changes]


class Unusable(Exception):
    """An argument, a schedule or an output that cannot be used; the text is one line."""


# --- where the samples go


class Sink(Protocol):
    """Takes encoded samples; never waits for a taker longer than a block lasts, except a pipe."""

    dropped: int

    def send(self, data: bytes, start: int) -> None:
        """Send the samples whose first has index ``start``."""

    def ready(self) -> bool:
        """Whether somebody takes them."""

    def close(self) -> None:
        """Let go of the output."""


class PipeSink:
    """Standard output."""

    def __init__(self, stream: BinaryIO) -> None:
        self.dropped = 0
        self._stream = stream

    def send(self, data: bytes, start: int) -> None:
        """Write all of it, waiting for the reader if need be."""
        self._stream.write(data)
        self._stream.flush()

    def ready(self) -> bool:
        """Always."""
        return True

    def close(self) -> None:
        """Leave it open."""


@dataclass(frozen=True)
class StreamOutput:
    """How to send over ZeroMQ."""

    uri: str
    push: bool = False
    connect: bool = False
    topic: str = ""
    framed: bool = False
    curve: Curve | None = None
    rate_hz: float = 1.0
    format: str = "cf32_le"
    centre_hz: float | None = None
    message_s: float = MESSAGE_S


class StreamSink:
    """A ZeroMQ socket that publishes or pushes; what nobody takes in time is dropped."""

    def __init__(self, output: StreamOutput) -> None:
        import zmq

        self._zmq = zmq
        self._output = output
        self.dropped = 0
        self.stream_id = secrets.token_hex(6)
        self._began = datetime.now(UTC)
        address = parse_endpoint(output.uri, bind=not output.connect)
        self._context = zmq.Context()
        # XPUB is PUB that also tells of its subscribers
        self._socket = self._context.socket(zmq.PUSH if output.push else zmq.XPUB)
        self._subscribers = 0
        self._keeper = None
        try:
            self._socket.linger = 1000
            self._socket.sndhwm = max(2, math.ceil(0.5 / output.message_s))  # half a second waits for a slow taker
            set_liveness(self._socket, address)
            if output.curve is not None:
                self._keeper = secure(self._context, self._socket, output.curve, bind=not output.connect)
            self.endpoint = attach(self._socket, address, bind=not output.connect)
        except BaseException:
            self._socket.linger = 0
            self.close()
            raise
        self.warning = ""
        if not output.connect and output.curve is None and not address.loopback:
            self.warning = f"{output.uri}: anybody who reaches this address can listen; use keys, or bind 127.0.0.1"

    def send(self, data: bytes, start: int) -> None:
        """Send one message, or drop it if nobody can take it."""
        output = self._output
        parts = [data]
        if output.framed:
            taken = self._began + timedelta(seconds=start / output.rate_hz)
            time_text = taken.isoformat(timespec="microseconds").replace("+00:00", "Z")
            header = FrameHeader(self.stream_id, start, output.rate_hz, output.format, time_text, output.centre_hz)
            parts.insert(0, header.to_bytes())
        if output.topic:
            parts.insert(0, output.topic.encode())
        self._count_subscribers()
        try:
            self._socket.send_multipart(parts, self._zmq.NOBLOCK)
        except self._zmq.Again:
            self.dropped += 1

    def ready(self) -> bool:
        """Whether a receiver is there."""
        if self._output.push:
            return bool(self._socket.poll(0, self._zmq.POLLOUT))
        self._count_subscribers()
        return self._subscribers > 0

    def _count_subscribers(self) -> None:
        while not self._output.push and self._socket.poll(0, self._zmq.POLLIN):
            word = self._socket.recv(self._zmq.NOBLOCK)
            self._subscribers += {b"\1": 1, b"\0": -1}.get(word[:1], 0)

    def close(self) -> None:
        """Give the last messages a second to leave."""
        self._socket.close()
        if self._keeper is not None:
            self._keeper.stop()
        self._context.term()


# --- schedule


@dataclass(frozen=True)
class Step:
    """What changes at one time of the stream."""

    at_s: float
    changes: Changes = field(default_factory=dict)
    over_s: float = 0.0
    silent_s: float | None = None
    lose_s: float | None = None


@dataclass(frozen=True)
class Schedule:
    """Steps in order of time, over again every ``repeat_s`` seconds if that is above 0."""

    steps: tuple[Step, ...] = ()
    repeat_s: float = 0.0

    def between(self, begin_s: float, end_s: float) -> Iterator[tuple[float, Step]]:
        """Steps due from ``begin_s`` on and before ``end_s``, each with the time it is due."""
        if not self.repeat_s:
            yield from ((step.at_s, step) for step in self.steps if begin_s <= step.at_s < end_s)
            return
        for turn in range(int(begin_s // self.repeat_s), int(end_s // self.repeat_s) + 1):
            for step in self.steps:
                due = turn * self.repeat_s + step.at_s
                if begin_s <= due < end_s:
                    yield due, step


def read_schedule(path: str, changes_from: ChangesFrom) -> Schedule:
    """The schedule in a TOML file; raises Unusable with the entry that is wrong.

    The file has an array of tables ``change``: ``at`` in seconds of the stream, then any of the defects by the name of
    its option (``snr = 12``, ``echo = ["1.4:0.3@120"]``, ``clip = "none"``), and ``over`` (seconds in which plain
    numbers are reached gradually), ``silent`` and ``lose`` (seconds). ``repeat`` at the top starts it over.
    """
    try:
        table = tomllib.loads(Path(path).read_text(encoding="utf-8"))
    except (OSError, UnicodeError, tomllib.TOMLDecodeError) as error:
        raise Unusable(f"--schedule {path}: {getattr(error, 'strerror', None) or error}") from None
    entries = table.pop("change", [])
    repeat = _seconds(table.pop("repeat", 0.0), f"--schedule {path}: repeat")
    if table:
        raise Unusable(f"--schedule {path}: {next(iter(table))} is not known; it holds repeat and [[change]] tables")
    if not isinstance(entries, list) or not all(isinstance(entry, dict) for entry in entries):
        raise Unusable(f"--schedule {path}: change must be written as [[change]] tables")
    steps = [
        _step(entry, f"--schedule {path}: change {number}", changes_from) for number, entry in enumerate(entries, 1)
    ]
    late = next((step for step in steps if repeat and step.at_s >= repeat), None)
    if late is not None:
        raise Unusable(f"--schedule {path}: at = {late.at_s:g} is never reached, as it repeats after {repeat:g} s")
    return Schedule(tuple(sorted(steps, key=lambda step: step.at_s)), repeat)


def _step(entry: dict[str, object], where: str, changes_from: ChangesFrom) -> Step:
    entry = dict(entry)
    if "at" not in entry:
        raise Unusable(f"{where}: has no at = SECONDS")
    at_s = _seconds(entry.pop("at"), f"{where}: at")
    over_s = _seconds(entry.pop("over", 0.0), f"{where}: over")
    silent_s, lose_s = (
        _seconds(entry.pop(name), f"{where}: {name}") if name in entry else None for name in ("silent", "lose")
    )
    changes: Changes = {}
    for name, value in entry.items():
        try:
            changes.update(changes_from(name, value))
        except (Unusable, DspError) as error:
            raise Unusable(f"{where}: {error}") from None
    return Step(at_s, changes, over_s, silent_s, lose_s)


def _seconds(value: object, where: str) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0.0 <= value < math.inf:
        raise Unusable(f"{where} must be 0 seconds or more, got {value!r}")
    return float(value)


# --- what is being changed


@dataclass
class _Ramp:
    begin_s: float
    end_s: float
    start: float
    goal: float


class Operator:
    """Turns the transmitter's knobs: by the schedule, by gradual changes under way, by keys."""

    def __init__(self, transmitter: LiveTransmitter, schedule: Schedule, say: Callable[[str], None]) -> None:
        self.transmitter = transmitter
        self.knobs = {name: getattr(transmitter.spec, name) for name in _KNOB_FIELDS}
        self.muted = False
        self._schedule = schedule
        self._say = say
        self._ramps: dict[str, _Ramp] = {}
        self._silent_until = 0.0
        self._lose_until = 0.0

    def change(self, changes: Changes) -> bool:
        """Ask for changes now; False, and told, if they cannot be."""
        try:
            self.transmitter.change(**changes)
        except DspError as error:
            self._say(str(error))
            return False
        self.knobs.update(changes)
        return True

    def before_block(self, begin_s: float, end_s: float) -> bool:
        """Do what is due in the block from ``begin_s`` to ``end_s``; whether the block is to be sent at all."""
        for due_s, step in self._schedule.between(begin_s, end_s):
            self._start(due_s, step)
        for name, ramp in list(self._ramps.items()):
            done = min(1.0, (end_s - ramp.begin_s) / (ramp.end_s - ramp.begin_s))
            self.change({name: ramp.start + (ramp.goal - ramp.start) * done})
            if done == 1.0:
                del self._ramps[name]
        self.transmitter.silent = self.muted or begin_s < self._silent_until
        return begin_s >= self._lose_until

    def lose(self, until_s: float) -> None:
        """Send nothing until then; the stream's time goes on."""
        self._lose_until = max(self._lose_until, until_s)

    def _start(self, due_s: float, step: Step) -> None:
        at_once = dict(step.changes)
        for name, goal in step.changes.items():
            self._ramps.pop(name, None)
            start = self.transmitter.clock_ppm if name == "clock_ppm" else self.knobs[name]
            if step.over_s and isinstance(goal, float) and isinstance(start, float):
                self._ramps[name] = _Ramp(due_s, due_s + step.over_s, start, goal)
                del at_once[name]
        if at_once:
            self.change(at_once)
        if step.silent_s is not None:
            self._silent_until = due_s + step.silent_s
        if step.lose_s is not None:
            self.lose(due_s + step.lose_s)


_KNOB_FIELDS = (
    "snr_db",
    "carrier_hz",
    "clock_ppm",
    "clock_drift_ppm_s",
    "jitter_rms_ui",
    "jitter_sine_ui",
    "jitter_sine_hz",
    "phase_noise_deg",
    "echoes",
    "t_over_tau",
    "iq_gain_db",
    "iq_skew_deg",
    "dc",
    "clipping",
    "clip_at",
)


# --- keys


@dataclass(frozen=True)
class Knob:
    """A defect that a letter chooses, and a step of it."""

    letter: str
    words: str
    show: Callable[[Operator], str]
    turn: Callable[[Operator, int], Changes]
    off: Changes


def _plain(
    letter: str, words: str, name: str, step: float, unit: str, off: float | None = 0.0, first: float = 0.0
) -> Knob:
    def show(operator: Operator) -> str:
        value = operator.transmitter.clock_ppm if name == "clock_ppm" else operator.knobs[name]
        return "none" if value is None else f"{value:.4g} {unit}".rstrip()

    def turn(operator: Operator, way: int) -> Changes:
        value = operator.transmitter.clock_ppm if name == "clock_ppm" else operator.knobs[name]
        return {name: first if value is None else round(value + way * step, 9)}

    return Knob(letter, words, show, turn, {name: off})


def _echo_knob() -> Knob:
    def show(operator: Operator) -> str:
        echoes = operator.knobs["echoes"]
        return " ".join(f"{delay:g} UI:{abs(gain):.3g}" for delay, gain in echoes) or "none"

    def turn(operator: Operator, way: int) -> Changes:
        (delay, gain), *others = operator.knobs["echoes"] or ((1.5, 0.0),)
        unit = gain / abs(gain) if gain else 1.0
        size = max(0.0, round(abs(gain) + 0.05 * way, 6))
        return {"echoes": ((delay, unit * size), *others) if size else tuple(others)}

    return Knob("e", "echo, its gain", show, turn, {"echoes": ()})


def _clip_knob() -> Knob:
    def show(operator: Operator) -> str:
        kind = operator.knobs["clipping"]
        return kind if kind == "none" else f"{kind} at {operator.knobs['clip_at']:.3g}"

    def turn(operator: Operator, way: int) -> Changes:
        if operator.knobs["clipping"] == "none":
            return {"clipping": "hard", "clip_at": 0.8}
        return {"clip_at": operator.knobs["clip_at"] * 0.9**way}

    return Knob("x", "clipping; + clips more", show, turn, {"clipping": "none"})


def knobs_for(spec: TransmitSpec) -> dict[str, Knob]:
    """The knobs by letter, with steps that suit the link."""
    rate = spec.symbol_rate_hz

    def sine(operator: Operator, way: int) -> Changes:
        peak = max(0.0, round(operator.knobs["jitter_sine_ui"] + 0.02 * way, 6))
        return {"jitter_sine_ui": peak, "jitter_sine_hz": operator.knobs["jitter_sine_hz"] or rate / 500}

    listed = [
        _plain("n", "signal over noise", "snr_db", 1.0, "dB", None, 30.0),
        _plain("t", "symbol clock", "clock_ppm", 10.0, "ppm"),
        _plain("d", "drift of the clock", "clock_drift_ppm_s", 1.0, "ppm/s"),
        _plain("j", "white jitter", "jitter_rms_ui", 0.005, "UI rms"),
        Knob(
            "s",
            "sine jitter",
            lambda o: f"{o.knobs['jitter_sine_ui']:.3g} UI at {o.knobs['jitter_sine_hz']:.4g} Hz",
            sine,
            {"jitter_sine_ui": 0.0},
        ),
        _echo_knob(),
        _plain("l", "low-pass, T over tau; - is narrower", "t_over_tau", 0.25, "", None, 4.0),
        _plain("o", "DC", "dc", 0.05, "levels"),
        _clip_knob(),
    ]
    if spec.link_scheme.kind != "baseband":
        listed[1:1] = [
            _plain("c", "carrier", "carrier_hz", rate / 1000, "Hz", spec.carrier_hz),
            _plain("p", "phase noise", "phase_noise_deg", 0.2, "degrees a symbol"),
            _plain("g", "gain of Q over I", "iq_gain_db", 0.25, "dB"),
            _plain("k", "skew of I and Q", "iq_skew_deg", 1.0, "degrees"),
        ]
    return {knob.letter: knob for knob in listed}


HELP_LINE = "a letter chooses a defect, + and - turn it, 0 ends it; space: silence; w: lose 0.2 s; ?: all; q: end"


class KeyBoard:
    """What keys do, one character at a time."""

    def __init__(self, operator: Operator, say: Callable[[str], None]) -> None:
        self.ended = False
        self._operator = operator
        self._knobs = knobs_for(operator.transmitter.spec)
        self._chosen: Knob | None = None
        self._say = say

    def press(self, text: str, seconds: float) -> None:
        """Handle the characters typed; ``seconds`` is the stream's time."""
        for up, down in (("\x1b[A", "\x1b[B"), ("\x1bOA", "\x1bOB")):  # the arrows, in both modes of a terminal
            text = text.replace(up, "+").replace(down, "-")
        for character in text:
            self._one(character, seconds)

    def _one(self, character: str, seconds: float) -> None:
        operator = self._operator
        if character == "q":
            self.ended = True
        elif character == " ":
            operator.muted = not operator.muted
            self._say("silent" if operator.muted else "sending")
        elif character == "w":
            operator.lose(seconds + 0.2)
            self._say("losing 0.2 s")
        elif character == "?":
            self._list()
        elif character in self._knobs:
            self._chosen = self._knobs[character]
            self._tell()
        elif self._chosen is not None and character in "+=-_0":
            way = 1 if character in "+=" else -1
            if operator.change(self._chosen.off if character == "0" else self._chosen.turn(operator, way)):
                self._tell()

    def _tell(self) -> None:
        if self._chosen is not None:
            self._say(f"{self._chosen.words}: {self._chosen.show(self._operator)}")

    def _list(self) -> None:
        self._say(HELP_LINE)
        for knob in self._knobs.values():
            self._say(f"  {knob.letter}  {knob.words}: {knob.show(self._operator)}")


@contextmanager
def key_by_key(descriptor: int | None) -> Iterator[None]:
    """The terminal gives each key at once and does not show it; whatever ends the block, it is put back."""
    if descriptor is None:
        yield
        return
    import signal
    import termios
    import tty

    def end(number: int, frame: object) -> None:
        raise SystemExit(128 + number)

    before = termios.tcgetattr(descriptor)
    handlers = {number: signal.signal(number, end) for number in (signal.SIGTERM, signal.SIGHUP)}
    try:
        tty.setcbreak(descriptor, termios.TCSANOW)
        yield
    finally:
        termios.tcsetattr(descriptor, termios.TCSANOW, before)
        for number, handler in handlers.items():
            signal.signal(number, handler)


def terminal_of(stream: TextIO | None) -> int | None:
    """The descriptor of a terminal that this program may read from; None if it is none or we are in the background."""
    if stream is None:
        return None
    try:
        descriptor = stream.fileno()
        return descriptor if os.isatty(descriptor) and os.tcgetpgrp(descriptor) == os.getpgrp() else None
    except (OSError, ValueError):
        return None


# --- the run


class Clock:
    """The true time, and how to wait for it while looking at the keys."""

    def __init__(self, descriptor: int | None) -> None:
        self._descriptor = descriptor

    def now(self) -> float:
        """Seconds, monotonic."""
        return time.monotonic()

    def wait(self, seconds: float) -> str:
        """Wait so long; return at once what is typed."""
        if self._descriptor is None:
            time.sleep(max(0.0, seconds))
            return ""
        if not select.select([self._descriptor], [], [], max(0.0, seconds))[0]:
            return ""
        typed = os.read(self._descriptor, 64)
        if not typed:
            self._descriptor = None  # the terminal is gone
        return typed.decode("utf-8", "replace")


@dataclass(frozen=True)
class LivePlan:
    """What to send: ``samples`` None is for ever; ``message`` samples at a time."""

    spec: TransmitSpec
    encode: Callable[[Any], bytes]
    message: int
    samples: int | None
    schedule: Schedule = Schedule()
    wait_for_receiver: bool = False


def send_live(plan: LivePlan, sink: Sink, clock: Clock, say: Callable[[str], None], *, keys: bool) -> None:
    """Send at the true rate until the plan is done or ``q`` is pressed; says when it cannot keep up."""
    transmitter = LiveTransmitter(plan.spec)
    operator = Operator(transmitter, plan.schedule, say)
    board = KeyBoard(operator, say)
    if keys:
        say(HELP_LINE)
    while plan.wait_for_receiver and not sink.ready() and not board.ended:
        board.press(clock.wait(0.02), 0.0)
    pace = _Pace(plan.spec.sample_rate_hz, clock, say)
    told_dropped = False
    while not board.ended and (plan.samples is None or transmitter.position < plan.samples):
        start = transmitter.position
        count = plan.message if plan.samples is None else min(plan.message, plan.samples - start)
        rate = plan.spec.sample_rate_hz
        sending = operator.before_block(start / rate, (start + count) / rate)
        data = plan.encode(transmitter.block(count))
        for typed in pace.until(transmitter.position):
            board.press(typed, transmitter.position / rate)
        if sending and not board.ended:
            sink.send(data, start)
        if sink.dropped and not told_dropped:
            told_dropped = True
            say("nobody takes the samples: they are dropped until somebody does")
    if sink.dropped:
        say(f"{sink.dropped} messages were dropped because nobody took them")


class _Pace:
    def __init__(self, rate_hz: float, clock: Clock, say: Callable[[str], None]) -> None:
        self._rate_hz, self._clock, self._say = rate_hz, clock, say
        self._began = self._told_at = clock.now()
        self._told_position = 0
        self._lag_told = False

    def until(self, position: int) -> Iterator[str]:
        """Wait until sample ``position`` is due, giving what is typed meanwhile."""
        due = self._began + position / self._rate_hz
        left = due - self._clock.now()
        if left < -LATE_S:
            self._began -= left  # what is lost is not made good by a burst
            self._complain(position)
        yield self._clock.wait(max(0.0, left))
        while (left := due - self._clock.now()) > 0.0:
            yield self._clock.wait(left)

    def _complain(self, position: int) -> None:
        now = self._clock.now()
        if self._lag_told and now - self._told_at < TOLD_EVERY_S:
            return
        share = (position - self._told_position) / self._rate_hz / max(now - self._told_at, 1e-9)
        self._say(f"cannot keep up: {100 * share:.0f} % of {self._rate_hz:.12g} samples a second; lower --rate")
        self._lag_told, self._told_at, self._told_position = True, now, position


__all__ = [
    "Clock",
    "LivePlan",
    "Operator",
    "PipeSink",
    "Schedule",
    "StreamOutput",
    "StreamSink",
    "Unusable",
    "key_by_key",
    "read_schedule",
    "send_live",
    "terminal_of",
]
