"""Several watches in one: which is in front, and that none waits for another; the command over real sockets."""

import json
import signal
import subprocess
import threading
import time
from dataclasses import replace

import numpy as np
import pytest
import zmq

from dsp.block import Block
from dsp.reading import Reading
from monitor.cli import main, parser
from monitor.errors import InputError, MonitorError
from monitor.journal import CSV_COLUMNS
from monitor.links import links_of
from monitor.several import MARGIN_S, Foremost, SeveralWatches, badness
from monitor.several_watching import _openers, named_links
from monitor.snapshot import Snapshot
from monitor.sources.audio import END_STOP
from monitor.sources.wire import StreamEvent
from monitor.state import AlarmLine, LinkState, LiveState
from tests.monitor.recordings import (
    PAM2,
    QPSK,
    RAW,
    assert_alike,
    command,
    one_line,
    pam2,
    qpsk,
    raw,
    run_program,
    start_program,
    strict_json,
    wav_bytes,
)
from tests.monitor.sending import frame
from tests.monitor.sources.conftest import senders
from tests.monitor.views.test_terminal import Session

__all__ = ["senders"]
PATIENCE_S = 40.0


def lines_of(path):
    return [json.loads(line) for line in path.read_text().splitlines()] if path.exists() else []


def link(opening=None, *, name="x", locked=True, alarms=(), ended=False, failure=""):
    reading = None if opening is None else Reading(1000, opening_pct=opening)
    return LinkState(name, LiveState(Snapshot(reading=reading), locked=locked, alarms=alarms, ended=ended), failure)


def alarm(severity="high", state="unacknowledged"):
    return AlarmLine("opening_pct < 40", severity, state, 1.0, "")


# --- which is worst


def test_failed_is_worse_than_alarms_worse_than_no_lock_worse_than_a_closing_eye():
    order = [
        link(90.0),
        link(20.0),
        link(None),
        link(locked=False),
        link(95.0, alarms=(alarm("low"),)),
        link(95.0, alarms=(alarm("high"),)),
        link(95.0, failure="gone"),
    ]
    found = [badness(one) for one in order]
    # a link whose first figure is still to come is no worse than others that are locked
    del found[2]
    assert found == sorted(found)
    assert len(set(found)) == len(found)


def test_an_alarm_that_was_seen_does_not_call():
    assert badness(link(50.0, alarms=(alarm("high", "acknowledged"),))) == badness(link(50.0))
    assert badness(link(50.0, alarms=(alarm("high", "shelved"),))) == badness(link(50.0))


def test_a_stream_that_came_to_its_end_is_no_fault():
    assert badness(link(None, locked=False, ended=True)) < badness(link(None, locked=False))


class Clock:
    now = 0.0

    def __call__(self):
        return self.now


def test_the_worst_comes_to_the_front_when_it_has_been_worse_for_a_while():
    clock = Clock()
    foremost = Foremost(2, clock)
    states = [link(80.0), link(60.0)]
    assert foremost.look(states) == 0
    clock.now = MARGIN_S / 2
    assert foremost.look(states) == 0
    clock.now = MARGIN_S
    assert foremost.look(states) == 1


def test_openings_that_cross_again_and_again_do_not_change_the_view():
    clock = Clock()
    foremost = Foremost(2, clock)
    for step in range(200):
        clock.now = step * 0.1
        wander = 3.0 if step % 10 < 5 else -3.0
        assert foremost.look([link(60.0), link(60.0 + wander)]) == 0


def test_a_small_lead_is_none():
    clock = Clock()
    foremost = Foremost(2, clock)
    for step in range(100):
        clock.now = float(step)
        assert foremost.look([link(60.0), link(59.0)]) == 0


def test_what_the_user_chose_stays_until_released():
    clock = Clock()
    foremost = Foremost(3, clock)
    states = [link(80.0), link(10.0), link(90.0)]
    foremost.choose(-1)
    for step in range(10):
        clock.now = 10.0 * step
        assert foremost.look(states) == 2
    assert foremost.pinned
    foremost.release()
    assert foremost.look(states) == 1
    assert not foremost.pinned


# --- several watches


class Stand:
    """A watch under the test's control."""

    def __init__(self, state, failure=None):
        self.now, self.failure, self.told = state, failure, []
        self.over = threading.Event()

    def state(self):
        return self.now

    def wait(self, timeout_s=None):
        return self.over.wait(timeout_s)

    def ask_to_stop(self):
        self.told.append("asked")

    def stop(self):
        self.told.append("stop")
        self.over.set()

    def __getattr__(self, name):
        return lambda *more: self.told.append((name, *more))


def several(*links):
    stands = [Stand(one.state, MonitorError(one.failure) if one.failure else None) for one in links]
    return SeveralWatches([(one.name, stand) for one, stand in zip(links, stands, strict=True)]), stands


def test_what_is_done_is_done_to_the_link_in_front_and_a_mark_keeps_it_there():
    watches, (one, two) = several(link(80.0, name="one"), link(20.0, name="two"))
    watches.step(1)
    for act in (watches.clear, watches.acknowledge):
        act()
    watches.mark("m")
    watches.name_mark("n")
    watches.shelve(5.0)
    assert two.told == [("clear",), ("acknowledge",), ("mark", "m"), ("name_mark", "n"), ("shelve", 5.0)]
    assert one.told == []
    assert watches.several().pinned
    watches.set_persistence(1.0)
    assert one.told == [("set_persistence", 1.0)]


def test_a_mark_keeps_its_link_in_front_though_another_grows_worse():
    watches, (_, two) = several(link(50.0, name="one"), link(60.0, name="two"))
    watches.mark()
    two.now = replace(two.now, alarms=(alarm(),))
    assert watches.several().front == 0
    watches.release()
    assert watches.several().front == 1


def test_all_are_asked_to_end_before_any_is_waited_for():
    watches, stands = several(link(1.0), link(2.0))
    watches.stop()
    assert [stand.told for stand in stands] == [["asked", "stop"]] * 2
    assert watches.over


def test_a_failure_is_told_when_it_happens_while_others_go_on():
    watches, (one, two) = several(link(1.0, name="one", failure="the cable is out"), link(2.0, name="two"))
    told = threading.Event()
    thread = threading.Thread(target=watches.wait, args=(lambda name, error: told.set(),))
    thread.start()
    try:
        one.over.set()
        assert told.wait(5)
        assert thread.is_alive()
        assert watches.several().links[0].failure == "the cable is out"
        assert watches.several().links[0].state.searching == "the cable is out"
    finally:
        two.over.set()
        thread.join(5)
    assert [name for name, _ in watches.failures] == ["one"]


# --- links that share a source


def openers_of(*arguments, opener):
    return _openers(named_links(links_of(parser().parse_args(["watch", *arguments]))), opener)


def test_two_channels_of_a_sound_card_open_it_once_and_each_gets_its_own():
    opened = []

    class Card:
        uri, warnings, ended, patient = "audio:rx", ("beware",), False, False

        def poll(self, timeout_s):
            self.ended = True
            both = np.array([0.25 + 0.5j, END_STOP - 0.25j], np.complex64)
            return (StreamEvent("start", "arrives", 0, 48000.0, "ci32_le"), Block(both, 7, 3, 1, 0))

        def close(self):
            opened.append("closed")

    def opener(own):
        opened.append((own.channels, own.iq))
        return Card

    two, one = [open_source() for open_source in openers_of("audio:rx", "--channels", "2,1", opener=opener)]
    start, block = one.poll(1)
    assert (start.format, block.start, block.lost, block.clipped) == ("ri32_le", 7, 3, 1)
    assert block.samples.dtype == np.float32
    assert block.samples.flags.c_contiguous
    np.testing.assert_array_equal(block.samples, np.float32([0.25, END_STOP]))
    _, block = two.poll(1)
    np.testing.assert_array_equal(block.samples, np.float32([0.5, -0.25]))
    assert block.clipped == 0
    assert one.ended
    assert two.ended
    for source in (one, two):
        source.close()
    assert opened == [((1, 2), True), "closed"]


def test_recordings_and_sockets_are_opened_by_each_link_itself():
    def opener(own):
        return lambda: (own.source, own.channels)

    found = openers_of("a.wav", "b.wav", "--channels", "1,2", opener=opener)
    assert [open_source() for open_source in found] == [
        ("a.wav", (1,)),
        ("a.wav", (2,)),
        ("b.wav", (1,)),
        ("b.wav", (2,)),
    ]
    found = openers_of("tcp://127.0.0.1:5555", "tcp://127.0.0.1:5556", opener=opener)
    assert [open_source()[0] for open_source in found] == ["tcp://127.0.0.1:5555", "tcp://127.0.0.1:5556"]


def test_a_sound_card_is_two_links_at_most():
    with pytest.raises(InputError, match="two different channels"):
        openers_of("audio:rx", "--channels", "1,2,3", opener=lambda own: None)


# --- the commands


def send(push, samples, stream, *, real_time=False):
    step = 4800
    for at in range(0, samples.size, step):
        push.send_multipart(frame(samples[at : at + step], at, stream=stream))
        if real_time:
            time.sleep(step / 48000.0)


def test_one_source_stalls_and_one_is_never_there_and_the_third_goes_on(senders, tmp_path):
    journal = tmp_path / "w.jsonl"
    (east, east_uri), (west, west_uri) = senders(zmq.PUSH), senders(zmq.PUSH)
    watch = start_program(
        "watch", east_uri, west_uri, f"ipc://{tmp_path}/nobody", "--socket", "pull", "--view", "none", *QPSK,
        "--journal", str(journal), "--stall", "0.6", "--every", "0.5", stderr=subprocess.PIPE,
    )  # fmt: skip
    try:
        samples = qpsk(36_000)
        west.send_multipart(frame(samples[:48000], 0, stream="west"))  # a second, and no more
        send(east, samples, "east", real_time=True)
        end = time.monotonic() + PATIENCE_S

        def raised(name):
            return [x for x in lines_of(journal) if x["link"] == name and x.get("rule") == "no samples"]

        while not raised(west_uri):
            assert time.monotonic() < end
            time.sleep(0.05)
        watch.send_signal(signal.SIGINT)
        _, err = watch.communicate(timeout=PATIENCE_S)
    finally:
        watch.kill()
        watch.wait()
    assert (watch.returncode, err) == (130, b"")
    lines = lines_of(journal)
    assert {line["link"] for line in lines} == {east_uri, west_uri, f"ipc://{tmp_path}/nobody"}
    starts = [line for line in lines if line["kind"] == "start"]
    assert {start["given"]["scheme"] for start in starts} == {"qpsk"}
    assert {start["source"] for start in starts} == {line["link"] for line in lines}
    stops = {line["link"]: line for line in lines if line["kind"] == "stop"}
    # a machine that cannot keep up tells what it left out
    assert stops[east_uri]["samples"] + stops[east_uri]["samples_lost"] == samples.size
    assert stops[west_uri]["samples"] + stops[west_uri]["samples_lost"] == 48000
    readings = [line for line in lines if line["kind"] == "reading" and line["link"] == east_uri]
    assert readings
    assert min(line["opening_pct"] for line in readings) > 50


def test_a_source_that_fails_is_told_at_once_and_by_status_2_while_the_other_ends_well(senders, tmp_path):
    journal, good = tmp_path / "w.jsonl", tmp_path / "good.wav"
    good.write_bytes(wav_bytes(pam2(36_000)))
    push, uri = senders(zmq.PUSH, sndtimeo=60_000)
    watch = start_program(
        "watch", str(good), uri, "--socket", "pull", "--view", "none", *PAM2, "--journal", str(journal),
        stderr=subprocess.PIPE,
    )  # fmt: skip
    try:
        push.send(b"\0" * 80)  # bare samples, of which nothing is known; waits for the watch
        err = watch.stderr.readline()
        assert watch.poll() is None
        assert "give --rate HZ and --format NAME" in one_line(err.decode())
        assert uri in err.decode()
        _, rest = watch.communicate(timeout=PATIENCE_S)
    finally:
        watch.kill()
        watch.wait()
    assert (watch.returncode, rest) == (2, b"")
    stops = {line["link"]: line for line in lines_of(journal) if line["kind"] == "stop"}
    assert stops["good"]["samples"] + stops["good"]["samples_lost"] == 144_000
    assert "give --rate" in stops[uri]["why"]


def test_what_cannot_be_at_the_start_is_one_line_and_nothing_is_left_running(capsys, tmp_path):
    good = raw(tmp_path, qpsk(3000), "good.iq")
    threads = set(threading.enumerate())
    assert main(["watch", good, str(tmp_path / "no-such.wav"), *RAW, "--view", "none"]) == 2
    assert "no such file" in one_line(capsys.readouterr().err)
    end = time.monotonic() + 5
    while set(threading.enumerate()) - threads:
        assert time.monotonic() < end, set(threading.enumerate()) - threads
        time.sleep(0.01)


def two_in_one(folder):
    """Two links in the same samples, at -6000 and 6000 Hz, and the options that name their files."""
    for name, carrier in (("low", -6000), ("high", 6000)):
        (folder / f"{name}.toml").write_text(
            f'[link]\nname = "{name}"\nscheme = "qpsk"\nsymbol_rate_hz = 6000\npulse = "rrc:0.35"\ncarrier_hz = {carrier}\n'
        )
    one = qpsk(12_000)
    at = np.arange(one.size) / 48000.0
    # every other sample missing would be another rate: the same wave twice as slow, on two carriers
    slow = np.repeat(one, 2)[: one.size]
    both = slow * np.exp(2j * np.pi * 6000 * at) + 0.9 * slow[::-1] * np.exp(-2j * np.pi * 6000 * at)
    files = [word for name in ("low", "high") for word in ("--link", str(folder / f"{name}.toml"))]
    return both.astype(np.complex64), files


def test_two_link_files_watch_two_links_in_the_samples_of_one_pipe(tmp_path):
    journal = tmp_path / "w.jsonl"
    both, files = two_in_one(tmp_path)
    status, out, err = run_program(
        "watch", "-", *RAW, *files, "--view", "none", "--journal", str(journal), stdin=both.tobytes()
    )
    assert (status, out, err) == (0, "", "")
    lines = lines_of(journal)
    stops = {line["link"]: line["samples"] + line["samples_lost"] for line in lines if line["kind"] == "stop"}
    assert stops == {"low": both.size, "high": both.size}
    gained = {line["link"] for line in lines if line["kind"] == "lock" and line["state"] == "gained"}
    assert gained == {"low", "high"}


def test_two_links_in_one_pipe_are_replayed_as_from_a_file(tmp_path):
    both, files = two_in_one(tmp_path)
    file = json.loads(run_program("replay", raw(tmp_path, both), *RAW, *files, "--json")[1])
    status, out, err = run_program("replay", "-", *RAW, *files, "--json", stdin=both.tobytes())
    assert (status, err) == (0, "")
    piped = json.loads(out)
    assert [link["name"] for link in piped["links"]] == ["low", "high"]
    for own, other in zip(piped["links"], file["links"], strict=True):
        assert own["source"]["samples"] == both.size
        assert_alike(own["reading"], other["reading"])


def test_ctrl_c_ends_the_replay_of_two_links_in_a_pipe_that_has_stalled(tmp_path):
    both, files = two_in_one(tmp_path)
    process = start_program(
        "replay", "-", *RAW, *files, "--json", stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    try:
        process.stdin.write(both.tobytes())
        process.stdin.flush()
        time.sleep(3.0)
        assert process.poll() is None
        process.send_signal(signal.SIGINT)
        # the pipe stays open: nobody is to wait for it
        assert process.wait(PATIENCE_S) == 130
        found = json.loads(process.stdout.read())
        assert [link["name"] for link in found["links"]] == ["low", "high"]
        assert process.stderr.read() == b""
    finally:
        process.kill()
        process.communicate()


def test_two_channels_are_replayed_as_two_links_with_one_document(tmp_path):
    path = tmp_path / "both.wav"
    path.write_bytes(wav_bytes(np.column_stack([pam2(6000, 25.0), pam2(6000, 14.0)])))
    for name in ("east", "west"):
        (tmp_path / f"{name}.toml").write_text(
            f'[link]\nname = "{name}"\nscheme = "pam2"\nsymbol_rate_hz = 12000\npulse = "rrc:0.35"\n'
            '[[alarm]]\nrule = "opening_pct < 60"\n'
        )
    files = [word for name in ("east", "west") for word in ("--link", str(tmp_path / f"{name}.toml"))]
    journal = tmp_path / "w.jsonl"
    status, out, err = run_program(
        "replay",
        str(path),
        "--channels",
        "1,2",
        *files,
        "--json",
        "--journal",
        str(journal),
        "--picture",
        str(tmp_path / "t.png"),
    )
    assert (status, err) == (1, "")
    found = strict_json(out)
    assert set(found) == {"lidwatch", "links"}
    east, west = found["links"]
    assert (east["name"], west["name"], east["error"]) == ("east", "west", None)
    assert east["reading"]["opening_pct"] > west["reading"]["opening_pct"]
    assert (east["alarms"], len(west["alarms"])) == ([], 1)
    # what stands of one link is what its own document would say
    alone = strict_json(run_program("replay", str(path), "--channels", "1", *files[:2], "--json")[1])
    for key in ("source", "link", "lock", "reading", "windows", "alarms"):
        assert_alike(alone[key], east[key])
    lines = lines_of(journal)
    assert {line["link"] for line in lines} == {"east", "west"}
    assert {line["link"] for line in lines if line["kind"] == "alarm"} == {"west"}
    assert (tmp_path / "t.png").read_bytes().startswith(b"\x89PNG")


def test_several_replays_are_told_one_after_the_other_and_the_worst_at_the_end(tmp_path, capsys):
    files = [raw(tmp_path, qpsk(4000, snr), f"{name}.iq") for name, snr in (("east", 25.0), ("west", 15.0))]
    assert main(["replay", *files, *RAW, *QPSK]) == 0
    out = capsys.readouterr().out
    assert out.index("-- east") < out.index("-- west")
    assert out.splitlines()[-1].startswith("worst of 2 links: west, ")


def test_each_of_several_links_has_a_report_with_its_name_in_the_files(tmp_path):
    files = [raw(tmp_path, qpsk(4000, snr), f"{name}.iq") for name, snr in (("east", 25.0), ("west", 15.0))]
    assert main(["replay", *files, *RAW, *QPSK, "--report", str(tmp_path / "links.html")]) == 0
    pages = {path.name: path.read_text(encoding="utf-8") for path in tmp_path.glob("*.html")}
    assert set(pages) == {"links-east.html", "links-west.html"}
    assert "east.iq" in pages["links-east.html"]
    assert "The opening over the stream" in pages["links-west.html"]


def test_a_recording_without_a_link_is_status_3_and_does_not_hide_the_other(tmp_path, capsys):
    noise = np.random.default_rng(1).normal(size=(48000, 2)).astype(np.float32).view(np.complex64).ravel()
    files = [raw(tmp_path, qpsk(4000), "good.iq"), raw(tmp_path, noise, "noise.iq")]
    assert main(["replay", *files, *RAW, "--json"]) == 3
    out, err = capsys.readouterr()
    good, bad = strict_json(out)["links"]
    assert good["reading"]["opening_pct"] > 50
    assert bad["reading"] is None
    assert "noise: nothing to measure" in one_line(err)


def test_the_table_of_several_links_has_a_column_for_the_link(tmp_path, capsys):
    files = [raw(tmp_path, qpsk(8000), f"{name}.iq") for name in ("east", "west")]
    table = tmp_path / "w.csv"
    assert main(["replay", *files, *RAW, *QPSK, "--journal", str(table)]) == 0
    capsys.readouterr()
    rows = table.read_text().splitlines()
    assert rows[0] == ",".join(("link", *CSV_COLUMNS))
    assert {row.split(",")[0] for row in rows[1:]} == {"east", "west"}


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_a_wish_to_end_leaves_a_stop_line_of_every_link(tmp_path, number):
    journal = tmp_path / "w.jsonl"
    uris = [f"ipc://{tmp_path}/{name}" for name in ("a", "b")]
    watch = start_program("watch", *uris, "--view", "none", "--journal", str(journal), "--stall", "0.1")
    end = time.monotonic() + PATIENCE_S
    while sum(line.get("rule") == "no samples" for line in lines_of(journal)) < 2:
        assert time.monotonic() < end
        time.sleep(0.05)
    watch.send_signal(number)
    assert watch.wait(PATIENCE_S) == 130
    assert {line["link"] for line in lines_of(journal) if line["kind"] == "stop"} == set(uris)


def test_recordings_are_played_side_by_side_at_their_pace_and_then_measured(tmp_path):
    files = [raw(tmp_path, qpsk(24_000, snr), f"{name}.iq") for name, snr in (("east", 25.0), ("west", 15.0))]
    journal = tmp_path / "w.jsonl"
    began = time.monotonic()
    status, out, err = run_program(
        "replay",
        *files,
        *RAW,
        *QPSK,
        "--pace",
        "2",
        "--view",
        "none",
        "--json",
        "--journal",
        str(journal),
        "--every",
        "0.5",
    )
    assert (status, err) == (0, "")
    assert time.monotonic() - began >= 1.0
    east, west = strict_json(out)["links"]
    assert east["source"]["samples"] == west["source"]["samples"] == 96_000
    assert east["reading"]["opening_pct"] > west["reading"]["opening_pct"]
    stops = [line for line in lines_of(journal) if line["kind"] == "stop"]
    # a recording that is played waits for the machine
    assert [(stop["samples"], stop["samples_lost"]) for stop in stops] == [(96_000, 0)] * 2


def test_in_a_terminal_each_link_has_a_row_and_a_key_brings_the_next_to_the_front(tmp_path):
    files = [raw(tmp_path, qpsk(120_000, snr), f"{name}.iq") for name, snr in (("east", 25.0), ("west", 15.0))]
    terminal = Session(command("watch", *files, *RAW, *QPSK, "--view", "terminal"), 100, 30)
    try:
        terminal.see("east", PATIENCE_S)
        # the worse of the two comes to the front by itself
        terminal.see("▶ west", PATIENCE_S)
        assert terminal.screen().splitlines()[0].startswith("  east")
        terminal.type(b".")
        terminal.see("■ east", PATIENCE_S)
        terminal.type(b"\x11")
        assert terminal.finish(PATIENCE_S) == 0
    finally:
        terminal.close()
