"""The watch with its threads, over real sockets on loopback."""

import errno
import json
import os
import signal
import subprocess
import sys
import threading
import time
from datetime import UTC, datetime

import numpy as np
import pytest
import zmq

from dsp.block import Block
from dsp.identify import Wanted
from dsp.link import find_scheme
from dsp.pulses import Pulse
from monitor.engine import Engine, EngineOptions
from monitor.journal import Journal
from monitor.sources.stream import StreamOptions, open_stream
from monitor.sources.wire import StreamEvent
from monitor.watch import Watch
from tests.monitor import sending
from tests.monitor.recordings import QPSK, environment, qpsk, start_program
from tests.monitor.sending import RATE, frame, send_all
from tests.monitor.sources.conftest import no_threads_left, senders
from tests.monitor.watched import QPSK_LINK, Watched, rules, stretches

PATIENCE_S = 30.0
__all__ = ["no_threads_left", "senders"]


def until(condition, what="it", timeout_s=PATIENCE_S):
    """Wait until ``condition()`` holds; fails after the time-out."""
    end = time.monotonic() + timeout_s
    while not condition():
        assert time.monotonic() < end, f"{what} did not come"
        time.sleep(0.005)


class Scripted:
    """A source under the test's control: gives each list it is handed, then waits."""

    patient = False

    def __init__(self, *steps, end=True):
        self.uri, self.warnings, self.ended = "scripted", (), False
        self.steps, self.end = list(steps), end
        self.more = threading.Event()
        self.closed = False

    def poll(self, timeout_s):
        if self.steps:
            return self.steps.pop(0)
        self.ended = self.end
        if not self.ended:
            self.more.wait(timeout_s)
        return ()

    def close(self):
        self.closed = True


START = StreamEvent("start", "samples arrive", 0, RATE, "cf32_le")


def blocks(samples, step=4800, start=0):
    return [(Block(samples[at : at + step], start + at),) for at in range(0, samples.size, step)]


@pytest.fixture
def watching(tmp_path, monkeypatch):
    """Makes running watches with a journal; stopped at the end. ``lines()`` reads the journal.

    Unless ``hurried``, they have all the time that a busy machine takes.
    """
    made = []

    def make(opener, wanted=QPSK_LINK, *, for_s=None, tap=None, hurried=False, **options):
        options.setdefault("display", False)
        journal = Journal(tmp_path / f"{len(made)}.jsonl", now=lambda: datetime.now(UTC))
        watch = Watch(
            opener,
            wanted,
            EngineOptions(**options),
            keeper=journal,
            source_text="west",
            start_fields={"host": "here"},
            for_s=for_s,
            tap=tap,
        )
        if not hurried:
            watch._reader.ring._bound_s = PATIENCE_S
            monkeypatch.setattr("monitor.watch._OLDEST_S", PATIENCE_S)
            monkeypatch.setattr("monitor.watch._MOST_RELIEF", 0)
        path = tmp_path / f"{len(made)}.jsonl"
        watch.lines = lambda: lines_of(path)
        watch.of = lambda kind, **f: [
            line for line in lines_of(path) if line["kind"] == kind and all(line.get(k) == v for k, v in f.items())
        ]
        made.append((watch, journal))
        watch.start()
        return watch

    yield make
    for watch, journal in made:
        watch.stop()
        journal.close()


def lines_of(path):
    """Every whole line; none but the last may be cut."""
    return [json.loads(line) for line in path.read_bytes().splitlines(keepends=True) if line.endswith(b"\n")]


def pulling(uri):
    return lambda: open_stream(uri, StreamOptions(socket="pull"))


# --- live is replay


def test_live_over_a_socket_gives_the_lines_of_the_engine_alone(watching, senders):
    samples = stretches(25.0, 12.0, 25.0)
    options = {"rules": rules("snr_db < 18", hold_s=0.2), "window": 4800}
    push, uri = senders(zmq.PUSH)
    watch = watching(pulling(uri), **options)
    send_all(push, samples, step=4800, pace_s=0.1)
    until(lambda: watch._engine is not None, "the start")
    until(lambda: watch._engine.position == samples.size, "all samples")
    watch.stop()
    alone = Watched(**options).feed(samples).finish()
    live = [
        (
            line["kind"],
            line["sample"],
            {k: v for k, v in line.items() if k not in ("kind", "time", "sample", "seconds")},
        )
        for line in watch.lines()
        if line["kind"] not in ("start", "stop")
    ]
    expected = [(k, s, json.loads(json.dumps(f))) for k, s, _, f in alone.lines]
    # a whole reading may be there a little later on a busy machine, so that its line stands behind another
    assert sorted(live, key=lambda line: line[:2]) == sorted(expected, key=lambda line: line[:2])
    assert [line["state"] for line in watch.of("alarm")] == ["raised", "cleared"]


def test_the_journal_begins_with_start_and_ends_with_stop_and_its_totals(watching):
    samples = stretches(25.0)
    watch = watching(lambda: Scripted((START,), *blocks(samples)))
    assert watch.wait(PATIENCE_S)
    lines = watch.lines()
    assert lines[0]["kind"] == "start"
    assert lines[0]["host"] == "here"
    stop = lines[-1]
    assert (stop["kind"], stop["why"], stop["samples"], stop["samples_lost"]) == ("stop", "the source ended", 48_000, 0)
    assert watch.state().ended
    assert watch.failure is None


def test_a_watch_for_some_seconds_ends_even_if_no_sample_ever_came(watching):
    watch = watching(lambda: Scripted(end=False), for_s=0.05)
    assert watch.wait(PATIENCE_S)
    assert watch.lines()[-1]["why"] == "watched for 0.05 s"
    assert watch.state().ended
    assert watch.state().searching == "no samples came"


def test_an_engine_that_fails_ends_the_watch_with_its_reason_and_the_stop_line(watching, monkeypatch):
    def broken(self, block):
        raise RuntimeError("worn out")

    monkeypatch.setattr(Engine, "feed", broken)
    watch = watching(lambda: Scripted((START,), *blocks(qpsk(3000))))
    assert watch.wait(PATIENCE_S)
    assert "worn out" in str(watch.failure)
    assert "worn out" in watch.lines()[-1]["why"]
    assert watch.state().ended
    assert "worn out" in watch.state().searching
    assert "worn out" in watch.state().notices[-1]


# --- what a sender does


def test_no_sample_at_all_is_an_alarm_that_the_first_sample_ends(watching, senders):
    push, uri = senders(zmq.PUSH)
    watch = watching(pulling(uri), stall_s=0.2)
    until(lambda: watch.of("alarm"), "the alarm")
    assert watch.of("alarm")[0]["rule"] == "no samples"
    until(lambda: watch.state().alarms, "the alarm on the view")
    watch.acknowledge()
    until(lambda: watch.of("alarm", state="acknowledged"), "the acknowledgement")
    push.send_multipart(frame(qpsk(3000), 0))
    until(lambda: watch.of("alarm", state="cleared"), "the end of the alarm")


def test_lost_messages_are_a_gap_of_exactly_their_samples(watching, senders):
    samples = stretches(25.0, 25.0)
    push, uri = senders(zmq.PUSH)
    watch = watching(pulling(uri))
    for at in [*range(0, 38_400, 2400), *range(48_000, 96_000, 2400)]:
        push.send_multipart(frame(samples[at : at + 2400], at))
    until(lambda: watch._engine is not None and watch._engine.position == 96_000, "all samples")
    watch.stop()
    assert [line["samples_lost"] for line in watch.of("gap")] == [9600]
    assert watch.of("gap")[0]["sample"] == 48_000
    assert watch.of("alarm", rule="samples lost", state="raised")
    assert watch.lines()[-1]["samples_lost"] == 9600


def test_restart_new_rate_torn_message_and_garbage_are_lines_and_notices_and_the_watch_goes_on(watching, senders):
    samples = stretches(25.0)
    push, uri = senders(zmq.PUSH)
    watch = watching(pulling(uri), display=True)

    def told(text):
        return lambda: any(text in (line.get("why") or "") for line in watch.of("gap"))

    send_all(push, samples)
    until(lambda: watch.state().locked, "lock")
    send_all(push, samples, stream="west again")
    until(told("began anew as stream west again"), "the restart")
    send_all(push, samples, start=48_000, stream="west again", rate=2 * RATE)
    until(told("sample rate changed from 48000 to 96000"), "the rate")
    send_all(push, samples, start=96_000, stream="west again")
    until(told("from 96000 to 48000"), "the rate again")
    push.send_multipart([frame(samples[:1], 144_000, stream="west again")[0], b"\0" * 7])
    until(told("ended inside a sample"), "the torn message")
    push.send_multipart([b'{"lidwatch": 99}', b"\0" * 8])
    until(told("version 99"), "garbage")
    send_all(push, samples, start=144_001, stream="west again")
    until(lambda: watch.state().locked, "lock again")
    assert len(watch.state().notices) >= 2
    assert watch.failure is None


def test_a_sender_killed_and_started_again_is_watched_on(watching, tmp_path):
    address = f"ipc://{tmp_path}/samples"
    stretches(25.0).tofile(tmp_path / "samples.iq")
    command = [sys.executable, sending.__file__, address]

    def start(stream):
        process = subprocess.Popen(
            [*command, stream, str(tmp_path / "samples.iq")], stdout=subprocess.PIPE, env=environment()
        )
        assert process.stdout.readline() == b"bound\n"
        return process

    first = start("one")
    try:
        watch = watching(pulling(address), stall_s=0.3)
        until(lambda: watch.state().locked, "lock")
        first.kill()
        until(lambda: watch.of("alarm", rule="no samples", state="raised"), "the stall")
        until(lambda: any("is gone" in text for text in watch.state().notices), "the notice")
        second = start("two")
        try:
            until(lambda: any("stream two" in (x.get("why") or "") for x in watch.of("gap")), "the restart")
            until(lambda: watch.of("alarm", rule="no samples", state="cleared"), "the end of the stall")
            until(lambda: watch.state().locked, "lock again")
        finally:
            second.kill()
            second.communicate()
    finally:
        first.kill()
        first.communicate()


# --- overload


def test_a_watch_that_is_too_slow_drops_samples_counts_them_and_stays_near_the_newest(watching, monkeypatch):
    """The engine takes ten times as long as the samples last; the source goes on in real time."""
    feed = Engine.feed

    def slow(self, block):
        time.sleep(10 * block.samples.size / self.sample_rate_hz)
        feed(self, block)

    monkeypatch.setattr(Engine, "feed", slow)
    rate, step, count = 8000.0, 80, 200
    rng = np.random.default_rng(1)
    noise = (0.1 * rng.normal(size=(step * count, 2))).astype(np.float32).view(np.complex64)[:, 0]
    start = StreamEvent("start", "samples arrive", 0, rate, "cf32_le")

    class RealTime(Scripted):
        def __init__(self):
            super().__init__((start,), *blocks(noise, step))
            self.began = time.monotonic()
            self.given = 0

        def poll(self, timeout_s):
            time.sleep(max(0.0, self.began + self.given * step / rate - time.monotonic()))
            self.given += 1
            return super().poll(timeout_s)

    behind = []
    slow_link = Wanted(scheme=find_scheme("qpsk"), symbol_rate_hz=2000.0, pulse=Pulse("rrc", 0.35))
    watch = watching(RealTime, slow_link, hurried=True)
    while not watch.wait(0.02):
        behind.append(watch.state().behind_s)
    assert watch.failure is None
    stop = watch.lines()[-1]
    assert stop["samples_lost"] > 0
    assert stop["samples"] + stop["samples_lost"] == noise.size
    assert sum(line["samples_lost"] for line in watch.of("gap")) == stop["samples_lost"]
    assert watch.of("alarm", rule="samples lost", state="raised")
    assert watch.state().samples_lost == stop["samples_lost"]
    # half a second waits at most, and the piece in work
    assert max(behind) < 0.65


def test_a_watch_that_is_nearly_too_slow_draws_fewer_traces_before_any_sample_is_lost(watching, monkeypatch):
    """The work is a pretence of time: too much with all traces, little enough with half of them."""
    samples = stretches(25.0, 25.0, 25.0)
    most = []

    def slow(self, block):
        time.sleep((1.2 if self.relief == 0 else 0.3) * block.samples.size / self.sample_rate_hz)
        most.append(self.relief)
        self.samples += block.samples.size
        self.samples_lost += block.lost

    monkeypatch.setattr(Engine, "feed", slow)
    monkeypatch.setattr("monitor.watch._RECOVERY_S", 0.3)

    class RealTime(Scripted):
        def __init__(self):
            super().__init__((START,), *blocks(samples, 1200))
            self.began = time.monotonic()
            self.given = 0

        def poll(self, timeout_s):
            time.sleep(max(0.0, self.began + self.given * 1200 / RATE - time.monotonic()))
            self.given += 1
            return super().poll(timeout_s)

    watch = watching(RealTime, hurried=True)
    assert watch.wait(PATIENCE_S)
    assert max(most) >= 1
    # taken up again when all was prompt
    assert 0 in most[most.index(1) :]
    stop = watch.lines()[-1]
    assert (stop["samples"], stop["samples_lost"]) == (samples.size, 0)


def test_long_messages_are_no_reason_to_draw_fewer_traces(watching, monkeypatch):
    # as if the machine were a fast one
    monkeypatch.setattr(Engine, "feed", lambda self, block: time.sleep(0.1 * block.samples.size / RATE))
    samples = stretches(25.0, 25.0)
    began = time.monotonic()

    class Slow(Scripted):
        """A message of 0.3 s each 0.3 s."""

        def poll(self, timeout_s):
            if len(self.steps) < 6:
                time.sleep(max(0.0, began + (6 - len(self.steps)) * 0.3 - time.monotonic()))
            return super().poll(timeout_s)

    watch = watching(lambda: Slow((START,), *blocks(samples, 14_400)), hurried=True)
    reliefs = set()
    while not watch.wait(0.02):
        reliefs.add(watch._engine.relief if watch._engine is not None else 0)
    assert reliefs == {0}


def test_a_long_message_that_a_newer_one_overtakes_is_left_half_done_and_counted(watching, monkeypatch):
    monkeypatch.setattr("monitor.watch._OLDEST_S", 0.0)
    samples = stretches(25.0, 25.0)
    source = Scripted((START, Block(samples[:48_000], 0), Block(samples[48_000:], 48_000)))
    watch = watching(lambda: source, hurried=True)
    assert watch.wait(PATIENCE_S)
    stop = watch.lines()[-1]
    assert 0 < stop["samples_lost"] < 48_000
    assert stop["samples"] + stop["samples_lost"] == samples.size


def test_a_journal_that_cannot_be_written_is_told_once_and_so_is_its_recovery(monkeypatch, tmp_path):
    monkeypatch.setattr("monitor.watch._TROUBLE_OVER_S", 0.0)
    full, told = [True], []

    class Disk(Journal):
        def _append(self, file, kind, line, now):
            if full[0]:
                raise OSError(errno.ENOSPC, "No space left on device")
            super()._append(file, kind, line, now)

    samples = stretches(25.0, 25.0)
    source = Scripted((START,), *blocks(samples), end=False)
    with Disk(tmp_path / "w.jsonl", now=lambda: datetime.now(UTC)) as journal:
        options = EngineOptions(display=False, every_s=0.1)
        watch = Watch(lambda: source, QPSK_LINK, options, keeper=journal, source_text="west", tell=told.append)
        watch.start()
        try:
            until(lambda: watch._engine is not None and watch._engine.position > 48_000, "the samples")
            full[0] = False
            until(lambda: len(told) > 1, "the recovery")
        finally:
            watch.stop()
    assert len(told) == 2
    assert told[0].startswith("journal not written: No space left on device")
    assert told[1].startswith("journal is written again")


# --- views


def test_what_a_view_asks_for_is_done(watching, senders):
    samples = stretches(12.0, 12.0)
    push, uri = senders(zmq.PUSH)
    watch = watching(pulling(uri), display=True, rules=rules("snr_db < 18"), stall_s=60.0)
    send_all(push, samples)
    until(lambda: watch.state().alarms, "the alarm")
    watch.mark("trimmer")
    watch.name_mark("trimmer 2")
    until(lambda: watch.state().marks and watch.state().marks[-1].name == "trimmer 2", "the mark")
    watch.acknowledge()
    until(lambda: watch.of("alarm", state="acknowledged"), "the acknowledgement")
    watch.shelve(60.0)
    until(lambda: watch.of("alarm", state="shelved"), "the shelf")
    watch.set_persistence(None)
    watch.clear()
    watch.note("the tone plays")
    until(lambda: "the tone plays" in watch.state().notices[-1], "the notice")
    until(lambda: watch._engine.persistence_s is None, "the persistence")
    assert [line["name"] for line in watch.of("mark")] == ["trimmer", "trimmer 2"]


def test_stopping_twice_and_before_the_start_is_no_matter(watching):
    watch = watching(lambda: Scripted(end=False))
    watch.stop()
    watch.stop()
    assert watch.lines()[-1]["why"] == "stopped"


# --- the whole program, killed


def test_a_killed_watch_leaves_a_journal_whose_every_line_but_the_last_parses_and_is_gone_on_with(tmp_path, senders):
    push, uri = senders(zmq.PUSH, sndtimeo=60_000)  # a program starts slowly on a busy machine
    journal = tmp_path / "watch.jsonl"
    command = ["watch", uri, "--socket", "pull", "--view", "none", *QPSK, "--journal", str(journal), "--every", "0.2"]
    samples = stretches(25.0)
    for end in (signal.SIGKILL, signal.SIGTERM):
        program = start_program(*command, stderr=subprocess.PIPE)
        began = len(lines_of(journal)) if journal.exists() else 0
        position = 0
        deadline = time.monotonic() + PATIENCE_S
        while not journal.exists() or sum(x["kind"] == "reading" for x in lines_of(journal)[began:]) < 3:
            assert time.monotonic() < deadline
            assert program.poll() is None, program.stderr.read()
            push.send_multipart(frame(samples[:9600], position, stream=str(end)))
            position += 9600
            time.sleep(0.05)
        os.kill(program.pid, end)
        _, err = program.communicate(timeout=PATIENCE_S)
        assert err == b""
    lines = [json.loads(line) for line in journal.read_bytes().splitlines()]
    assert program.returncode == 130
    assert [line["kind"] for line in lines].count("start") == 2
    assert lines[-1]["kind"] == "stop"
    assert lines[-1]["samples"] > 0
