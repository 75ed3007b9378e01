"""The transmitter live: streams, pace, schedule and keys."""

import contextlib
import os
import pty
import re
import shlex
import signal
import subprocess
import sys
import termios
import time
from pathlib import Path

import numpy as np
import pytest

from dsp.block import Block
from dsp.pulses import Pulse
from dsp.transmitter import LiveTransmitter, TransmitSpec, transmit
from monitor.sources.keys import Curve, make_keys
from monitor.sources.stream import StreamOptions, open_stream
from tools.transmit import changes_from, main
from tools.transmit_live import (
    Clock,
    KeyBoard,
    LivePlan,
    Operator,
    Schedule,
    Step,
    StreamOutput,
    StreamSink,
    Unusable,
    knobs_for,
    read_schedule,
    send_live,
)

ROOT = Path(__file__).parents[2]
LINK = shlex.split("--scheme qpsk --symbol-rate 9600 --rate 48000 --pulse rrc:0.35 --seed 3")
SPEC = TransmitSpec(
    scheme="qpsk", symbol_rate_hz=9600.0, sample_rate_hz=48000.0, pulse=Pulse("rrc", 0.35), symbols=1, seed=3
)
PATIENCE_S = 30.0
EDGE = 3e-5  # at whole symbols rounding decides whether the last sample of a cut pulse, so large at most, counts


class FakeClock(Clock):
    """Time passes by waiting, and by ``cost_s`` at every look; ``typed`` gives what is typed at a time."""

    def __init__(self, cost_s=0.0, typed=()):
        super().__init__(None)
        self.time, self.cost_s, self.typed = 1000.0, cost_s, list(typed)

    def now(self):
        self.time += self.cost_s
        return self.time

    def wait(self, seconds):
        self.time += seconds
        if self.typed and self.time - 1000.0 >= self.typed[0][0]:
            return self.typed.pop(0)[1]
        return ""


class FakeSink:
    def __init__(self, clock=None):
        self.dropped, self.sent, self.times, self.clock = 0, [], [], clock

    def send(self, data, start):
        self.sent.append((start, np.frombuffer(data, np.complex64)))
        self.times.append(0.0 if self.clock is None else self.clock.time - 1000.0)

    def ready(self):
        return True

    def samples(self):
        return np.concatenate([data for _, data in self.sent])


def run(samples=48000, schedule=None, clock=None, spec=SPEC, message=960):
    clock = clock or FakeClock()
    sink, said = FakeSink(clock), []
    plan = LivePlan(spec, lambda block: block.tobytes(), message, samples, schedule or Schedule())
    send_live(plan, sink, clock, said.append, keys=False)
    return sink, said


def collect(source, n, timeout_s=PATIENCE_S):
    items, end = [], time.monotonic() + timeout_s
    while sum(item.samples.size for item in items if isinstance(item, Block)) < n:
        assert time.monotonic() < end
        items.extend(source.poll(0.2))
    return items


def samples_of(items):
    return np.concatenate([item.samples for item in items if isinstance(item, Block)])


def expected(n, **changes):
    return LiveTransmitter(TransmitSpec(**{**SPEC.__dict__, **changes})).block(n)


# --- pace


def test_messages_leave_when_their_last_sample_is_due():
    sink, said = run(samples=48000 + 100)
    due = [min(start + 960, 48100) / 48000 for start, _ in sink.sent]
    np.testing.assert_allclose(sink.times, due, atol=1e-9)
    np.testing.assert_allclose(sink.samples(), expected(48100), atol=EDGE)
    assert said == []


def test_a_machine_that_cannot_keep_up_says_so_and_sends_on():
    sink, said = run(samples=48000, clock=FakeClock(cost_s=0.05))
    assert len(said) >= 1
    share = int(re.match(r"cannot keep up: (\d+) % of 48000 samples a second", said[0])[1])
    assert 5 < share < 60
    assert sink.samples().size == 48000


# --- schedule


def schedule_of(tmp_path, text):
    path = tmp_path / "schedule.toml"
    path.write_text(text)
    return read_schedule(str(path), changes_from)


def test_a_schedule_changes_defects_at_their_times(tmp_path):
    schedule = schedule_of(tmp_path, '[[change]]\nat = 0.5\ndc = "0.5"\n[[change]]\nat = 0.75\ndc = "0"\n')
    got = run(schedule=schedule)[0].samples()
    plain = expected(48000)
    gain = LiveTransmitter(SPEC).gain
    off = (got - plain) / gain
    np.testing.assert_allclose(off[:24000], 0, atol=1e-4)
    np.testing.assert_allclose(off[24000 + 200 : 36000 - 960], 0.5, atol=1e-4)
    np.testing.assert_allclose(off[36000 + 200 :], 0, atol=1e-4)


def test_a_gradual_change_arrives_when_it_should(tmp_path):
    schedule = schedule_of(tmp_path, "[[change]]\nat = 1\ncarrier = 100\nclock = 50\nover = 2\n")
    transmitter = LiveTransmitter(SPEC)
    operator = Operator(transmitter, schedule, pytest.fail)
    seen = []
    for k in range(40):
        assert operator.before_block(k / 10, (k + 1) / 10)
        transmitter.block(4800)
        seen.append((transmitter.spec.carrier_hz, transmitter.clock_ppm))
    assert seen[9] == (0.0, 0.0)
    assert seen[19] == pytest.approx((50.0, 25.0))
    assert seen[29] == seen[39] == pytest.approx((100.0, 50.0))
    assert seen == sorted(seen)


def test_a_schedule_that_repeats_does_so_for_ever():
    schedule = Schedule((Step(1.0), Step(3.0)), 10.0)
    assert [due for due, _ in schedule.between(0.0, 25.0)] == [1.0, 3.0, 11.0, 13.0, 21.0, 23.0]
    pieces = [due for k in range(250) for due, _ in schedule.between(k / 10, (k + 1) / 10)]
    assert len(pieces) == 6


def test_silence_and_loss_last_as_long_as_they_say(tmp_path):
    schedule = schedule_of(tmp_path, "[[change]]\nat = 0.2\nsilent = 0.2\n[[change]]\nat = 0.6\nlose = 0.1\n")
    sink, _ = run(schedule=schedule)
    sent = {start / 48000: data for start, data in sink.sent}
    silent = [at for at, data in sent.items() if not data.any()]
    assert min(silent) == pytest.approx(0.2)
    assert len(silent) == 10
    missing = sorted({k * 0.02 for k in range(50)} - {round(at, 9) for at in sent}, key=float)
    missing = [at for at in missing if all(abs(at - there) > 1e-6 for there in sent)]
    assert missing == pytest.approx([0.6, 0.62, 0.64, 0.66, 0.68])


@pytest.mark.parametrize(
    ("name", "value", "changes"),
    [
        ("snr", 12, {"snr_db": 12.0}),
        ("snr", "none", {"snr_db": None}),
        ("t-over-tau", "none", {"t_over_tau": None}),
        ("jitter-sine", "0.1:50", {"jitter_sine_ui": 0.1, "jitter_sine_hz": 50.0}),
        ("echo", "1.5:0.3", {"echoes": ((1.5, 0.3),)}),
        ("echo", ["1.5:0.3", "2:0.1j"], {"echoes": ((1.5, 0.3), (2.0, 0.1j))}),
        ("echo", "none", {"echoes": ()}),
        ("dc", "0.1+0.2j", {"dc": 0.1 + 0.2j}),
        ("clip", "soft:0.5", {"clipping": "soft", "clip_at": 0.5}),
        ("clip", "none", {"clipping": "none", "clip_at": 1.0}),
    ],
)
def test_the_names_of_a_schedule_are_those_of_the_options(name, value, changes):
    assert changes_from(name, value) == changes
    LiveTransmitter(SPEC).change(**changes)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("x", "schedule.toml"),
        ("speed = 2", "speed is not known"),
        ("change = 2", r"\[\[change\]\] tables"),
        ("[[change]]\nsnr = 3", "change 1: has no at"),
        ("[[change]]\nat = -1", "change 1: at must be 0 seconds or more"),
        ("[[change]]\nat = nan", "must be 0 seconds or more"),
        ("[[change]]\nat = 1\n[[change]]\nat = 2\nsnr = 'loud'", "change 2: snr = 'loud': must be a number"),
        ("[[change]]\nat = 1\nloudness = 3", "change 1: loudness is not known"),
        ("[[change]]\nat = 1\necho = 'a:b'", "not a number"),
        ("[[change]]\nat = 1\nclip = 'medium'", "needs soft:LEVEL"),
        ("[[change]]\nat = 1\nlose = true", "lose must be 0 seconds or more"),
        ("repeat = 5\n[[change]]\nat = 5", "never reached"),
    ],
)
def test_a_schedule_of_no_use_is_refused_with_its_place(tmp_path, text, message):
    with pytest.raises(Unusable, match=message):
        schedule_of(tmp_path, text)


def test_a_schedule_that_is_missing_is_refused(tmp_path):
    with pytest.raises(Unusable, match="No such file"):
        read_schedule(str(tmp_path / "none.toml"), changes_from)


def test_a_change_out_of_range_is_told_and_the_transmitter_goes_on(tmp_path):
    schedule = schedule_of(tmp_path, "[[change]]\nat = 0.1\nsnr = 999\n")
    sink, said = run(schedule=schedule)
    assert "snr_db must be" in said[0]
    assert sink.samples().size == 48000


# --- keys


def board_for(spec=SPEC):
    said = []
    operator = Operator(LiveTransmitter(spec), Schedule(), said.append)
    return KeyBoard(operator, said.append), operator, said


@pytest.mark.parametrize("letter", sorted(knobs_for(SPEC)))
def test_every_letter_turns_its_defect_and_ends_it(letter):
    board, operator, said = board_for()
    before = dict(operator.knobs)
    board.press(letter + "+", 0.0)
    assert operator.knobs != before, said
    board.press("++-\x1b[A\x1b[B", 0.0)
    operator.transmitter.block(10_000)
    board.press("0", 0.0)
    operator.transmitter.block(10_000)
    frequencies = ("jitter_sine_hz", "clip_at")
    left = {name: value for name, value in operator.knobs.items() if name not in frequencies}
    assert left == {name: value for name, value in before.items() if name not in frequencies}
    assert all(line.isprintable() for line in said)


def test_a_real_link_has_no_knobs_of_a_carrier():
    spec = TransmitSpec(scheme="pam4", symbol_rate_hz=1.0, sample_rate_hz=5.0, pulse=Pulse("rect"), symbols=1)
    letters = set(knobs_for(SPEC)) - set(knobs_for(spec))
    assert letters == {"c", "p", "g", "k"}
    board, operator, said = board_for(spec)
    for letter in knobs_for(spec):
        board.press(letter + "+", 0.0)
    operator.transmitter.block(100)
    assert not any("must" in line or "need" in line for line in said)


def test_space_silences_and_q_ends():
    clock = FakeClock(typed=[(0.3, " "), (0.6, " "), (0.8, "w"), (1.5, "q")])
    sink, said = run(samples=None, clock=clock)
    silent = [at for at, (_, data) in zip(sink.times, sink.sent, strict=True) if not data.any()]
    assert 0.3 < min(silent) < 0.36
    assert 0.58 < max(silent) < 0.64
    assert sink.times[-1] < 1.5
    assert np.diff([start for start, _ in sink.sent]).max() == pytest.approx(0.2 * 48000, abs=2 * 960)
    assert said == ["silent", "sending", "losing 0.2 s"]


def test_what_means_nothing_does_nothing():
    board, _, said = board_for()
    board.press("+-0\x00é\x1bzZ", 0.0)
    assert said == []
    board.press("?", 0.0)
    assert len(said) == 1 + len(knobs_for(SPEC))


def test_a_key_beyond_a_limit_is_told_and_changes_nothing():
    board, operator, said = board_for()
    board.press("l+-" + "-" * 40, 0.0)
    assert operator.knobs["t_over_tau"] >= 0.1
    assert any("t_over_tau must be" in line for line in said)


# --- sockets


@contextlib.contextmanager
def running(*words, stdin=subprocess.DEVNULL):
    """The transmitter as a process of its own, and the address it says it sends at."""
    command = [sys.executable, str(ROOT / "tools" / "transmit.py"), *LINK, *words]
    with subprocess.Popen(command, stderr=subprocess.PIPE, stdin=stdin, text=True) as process:
        try:
            line = process.stderr.readline()
            while "sending" not in line and line:
                line = process.stderr.readline()
            yield process, line.split()[-1]
        finally:
            process.kill()


@pytest.mark.parametrize("form", ["bare", "framed"])
def test_what_is_sent_is_what_arrives_at_the_true_rate(form):
    words = ["tcp://127.0.0.1:0", "--wait", "--seconds", "0.6", "--snr", "20", "--frequency", "169.4e6"]
    options = StreamOptions() if form == "framed" else StreamOptions(48000.0, "cf32_le")
    with running(*words, *(["--framed"] if form == "framed" else [])) as (process, uri):
        with open_stream(uri, options) as source:
            items = collect(source, 1)
            began = time.monotonic()
            items += collect(source, 28800 - samples_of(items).size)
            took = time.monotonic() - began
        assert process.wait(PATIENCE_S) == 0
    got = samples_of(items)
    want = transmit(TransmitSpec(**{**SPEC.__dict__, "symbols": 5760, "snr_db": 20.0})).samples
    np.testing.assert_allclose(got, want, atol=EDGE)
    assert source.state.lost == 0
    assert took > 0.45  # 0.58 s of samples; a burst would take no time
    start = next(item for item in items if not isinstance(item, Block) and item.kind == "start")
    assert (start.rate_hz, start.format) == (48000.0, "cf32_le")
    assert start.centre_hz == (169.4e6 if form == "framed" else None)


def test_pushing_to_a_bound_receiver_over_ipc_with_a_format_of_its_own(tmp_path):
    uri = f"ipc://{tmp_path}/samples"
    with (
        open_stream(uri, StreamOptions(48000.0, "ci16_le", socket="pull", bind=True)) as source,
        running(uri, "--socket", "push", "--connect", "--wait", "--seconds", "0.1", "--format", "ci16"),
    ):
        got = samples_of(collect(source, 4800))
    np.testing.assert_allclose(got, expected(4800), atol=2**-15)


def test_lost_messages_are_seen_by_the_receiver_as_exactly_so_many_samples(tmp_path):
    path = tmp_path / "schedule.toml"
    path.write_text("[[change]]\nat = 0.1\nlose = 0.1\n")
    words = ["tcp://127.0.0.1:0", "--wait", "--framed", "--seconds", "0.4", "--schedule", str(path), "--topic", "west"]
    with running(*words) as (_, uri), open_stream(uri, StreamOptions(topic="west")) as source:
        items = collect(source, 19200 - 4800)
    assert [item.lost for item in items if isinstance(item, Block) and item.lost] == [4800]
    assert samples_of(items).size == 14400


def test_a_sender_killed_and_started_again_is_followed(tmp_path):
    uri = f"ipc://{tmp_path}/samples"
    words = [uri, "--framed", "--message", "100"]
    with open_stream(uri, StreamOptions()) as source:
        with running(*words) as (process, _):
            collect(source, 1000)
            process.send_signal(signal.SIGKILL)
            process.wait(PATIENCE_S)
        with running(*words):
            items = collect(source, 1000)
            while not any(getattr(item, "kind", "") == "restart" for item in items):
                items += collect(source, 100)
    assert source.state.restarts == 1


def test_keys_encrypt_and_let_in_whom_they_should(tmp_path):
    gauge, station = (make_keys(tmp_path / name, name) for name in ("gauge", "station"))
    allowed = tmp_path / "allowed"
    allowed.mkdir()
    (allowed / "station.key").write_bytes(station[0].read_bytes())
    output = StreamOutput("tcp://127.0.0.1:0", curve=Curve(gauge[1], clients=allowed))
    sink = StreamSink(output)
    try:
        curve = Curve(station[1], server=gauge[0])
        with open_stream(sink.endpoint, StreamOptions(1.0, "cf32", curve=curve)) as source:
            end = time.monotonic() + PATIENCE_S
            while not sink.ready():
                source.poll(0.02)
                assert time.monotonic() < end
            sink.send(np.ones(5, np.complex64).tobytes(), 0)
            assert samples_of(collect(source, 5)).sum() == 5
    finally:
        sink.close()


def test_nobody_there_is_told_and_counted():
    sink = StreamSink(StreamOutput("tcp://127.0.0.1:0", push=True))
    try:
        said = []
        plan = LivePlan(SPEC, lambda block: block.tobytes(), 960, 4800)
        send_live(plan, sink, FakeClock(), said.append, keys=False)
    finally:
        sink.close()
    assert sink.dropped == 5
    assert said[-1] == "5 messages were dropped because nobody took them"


def test_an_open_door_is_warned_of():
    sink = StreamSink(StreamOutput("tcp://0.0.0.0:0"))
    sink.close()
    assert "anybody who reaches" in sink.warning


def test_standard_output_live_takes_its_time():
    command = [sys.executable, str(ROOT / "tools" / "transmit.py"), *LINK, "-", "--live", "--seconds", "0.3"]
    began = time.monotonic()
    done = subprocess.run(command, capture_output=True, stdin=subprocess.DEVNULL, timeout=PATIENCE_S, check=True)
    assert time.monotonic() - began > 0.3
    np.testing.assert_allclose(np.frombuffer(done.stdout, np.complex64), expected(14400), atol=EDGE)


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["tcp://127.0.0.1"], "needs a host and a port"),
        (["ipc://"], "needs a path"),
        (["tcp://127.0.0.1:0", "--message", "0"], "--message must be"),
        (["tcp://127.0.0.1:0", "--recipe"], "--recipe needs a file"),
        (["tcp://127.0.0.1:0", "--schedule", "none.toml"], "none.toml: No such file"),
        (["tcp://127.0.0.1:0", "--client-keys", "."], "need --secret-key too"),
        (["tcp://127.0.0.1:0", "--secret-key", "none"], "none: the key file cannot be read"),
        (["out.raw"], "say how long"),
        (["out.raw", "--seconds", "1", "--framed"], "--framed is for live streams"),
        (["out.raw", "--seconds", "1", "--live"], "--live is for live streams"),
    ],
    ids=lambda value: value if isinstance(value, str) else "",
)
def test_what_cannot_be_used_is_one_line_and_status_2(tmp_path, monkeypatch, capsys, words, message):
    monkeypatch.chdir(tmp_path)
    assert main([*LINK, *words]) == 2
    captured = capsys.readouterr()
    assert captured.err.count("\n") == 1
    assert message in captured.err
    assert list(tmp_path.iterdir()) == []


# --- the terminal


@pytest.mark.parametrize(
    ("ending", "status"), [("q", 0), ("\x03", 130), (signal.SIGTERM, 128 + signal.SIGTERM)], ids=["q", "ctrl-c", "term"]
)
def test_keys_in_a_terminal_work_and_the_terminal_is_left_as_it_was(ending, status):
    controller, terminal = pty.openpty()
    # echo and line mode on, and one flag that no program sets by itself
    before = termios.tcgetattr(terminal)
    before[0] |= termios.IUCLC if hasattr(termios, "IUCLC") else 0
    termios.tcsetattr(terminal, termios.TCSANOW, before)
    before = termios.tcgetattr(terminal)
    words = [sys.executable, str(ROOT / "tools" / "transmit.py"), *LINK, "tcp://127.0.0.1:0"]
    make_leader = "import os,sys,fcntl,termios; os.setsid(); fcntl.ioctl(0, termios.TIOCSCTTY, 0); os.execv(sys.argv[1], sys.argv[1:])"
    process = subprocess.Popen(
        [sys.executable, "-c", make_leader, *words], stdin=terminal, stderr=subprocess.PIPE, text=True
    )
    try:
        lines = []
        while not lines or "a letter chooses" not in lines[-1]:
            lines.append(process.stderr.readline())
            assert lines[-1], lines
        os.write(controller, b"n+++")
        while "32 dB" not in lines[-1]:
            lines.append(process.stderr.readline())
            assert lines[-1], lines
        assert termios.tcgetattr(terminal) != before
        if isinstance(ending, str):
            os.write(controller, ending.encode())
        else:
            process.send_signal(ending)
        assert process.wait(PATIENCE_S) == status
        assert termios.tcgetattr(terminal) == before
    finally:
        process.kill()
        process.wait()
        process.stderr.close()
        os.close(controller)
        os.close(terminal)
