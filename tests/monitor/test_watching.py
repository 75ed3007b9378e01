"""The command ``lidwatch watch``, as a user types it, and ``lidwatch keys``."""

import io
import json
import signal
import stat
import subprocess
import time

import pytest
import zmq
import zmq.auth

from monitor import showing, watching
from monitor.cli import main, parser
from monitor.errors import InputError
from monitor.links import links_of
from tests.monitor.recordings import QPSK, RAW, one_line, qpsk, raw, run_program, start_program
from tests.monitor.sending import frame
from tests.monitor.sources.conftest import senders
from tests.monitor.watched import stretches

PATIENCE_S = 30.0
__all__ = ["senders"]


def lines_of(path):
    return [json.loads(line) for line in path.read_text().splitlines()]


@pytest.fixture
def opened(monkeypatch):
    """Runs the command in this process up to the watch; ``got`` holds what it would have been made with."""
    got = {}

    class Stand:
        warnings, failure = (), None

        def __init__(self, opener, wanted, options, **more):
            got.update(opener=opener, wanted=wanted, options=options, **more)

        def start(self): ...
        def stop(self): ...
        def note(self, text): ...

        def wait(self, timeout_s=None):
            return True

    monkeypatch.setattr("monitor.watch.Watch", Stand)
    return got


def test_a_recording_is_watched_at_its_pace_into_the_journal(tmp_path):
    path, journal = raw(tmp_path, qpsk(24_000)), tmp_path / "w.jsonl"
    command = ["watch", path, *RAW, *QPSK, "--pace", "2", "--view", "none", "--journal", str(journal), "--every", "0.5"]
    began = time.monotonic()
    status, out, err = run_program(*command)
    assert (status, out, err) == (0, "", "")
    assert time.monotonic() - began >= 1.0
    lines = lines_of(journal)
    assert (lines[0]["kind"], lines[-1]["kind"]) == ("start", "stop")
    assert lines[0]["source"] == path
    assert lines[-1]["why"] == "the recording ended"
    assert lines[-1]["samples"] + lines[-1]["samples_lost"] == 96_000


def test_a_watch_leaves_a_report_of_its_last_figures(tmp_path):
    path, report = raw(tmp_path, qpsk(24_000)), tmp_path / "watch.html"
    command = ["watch", path, *RAW, *QPSK, "--pace", "2", "--view", "none", "--report", str(report)]
    assert run_program(*command) == (0, "", "")
    html = report.read_text(encoding="utf-8")
    assert "% open" in html
    for picture in ("The eye", "Response of the link", "The opening over the stream"):
        assert f'alt="{picture}' in html
    assert "2.0 s of the stream" in html
    assert '<td class="w">qpsk: 2 levels on 2 rails</td><td class="dim v">given</td>' in html


def test_standard_input_is_watched():
    status, out, err = run_program("watch", "-", *RAW, *QPSK, "--view", "none", stdin=qpsk(3000).tobytes())
    assert (status, out, err) == (0, "", "")


def test_it_ends_by_itself_after_the_time_asked_for_though_nobody_sends(tmp_path):
    journal = tmp_path / "w.jsonl"
    command = ["watch", f"ipc://{tmp_path}/nobody", "--view", "none", "--for", "0.2", "--journal", str(journal)]
    assert run_program(*command) == (0, "", "")
    assert [line["kind"] for line in lines_of(journal)] == ["start", "stop"]
    assert lines_of(journal)[-1]["why"] == "watched for 0.2 s"


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_a_wish_to_end_leaves_the_stop_line_and_130(tmp_path, number):
    journal = tmp_path / "w.jsonl"
    program = start_program(
        "watch", f"ipc://{tmp_path}/nobody", "--view", "none", "--journal", str(journal), "--stall", "0.1",
        stderr=subprocess.PIPE,
    )  # fmt: skip
    end = time.monotonic() + PATIENCE_S
    while not (journal.exists() and "no samples" in journal.read_text()):
        assert time.monotonic() < end
        time.sleep(0.02)
    program.send_signal(number)
    _, err = program.communicate(timeout=PATIENCE_S)
    assert (program.returncode, err) == (130, b"")
    assert lines_of(journal)[-1]["kind"] == "stop"


def test_bare_samples_whose_rate_is_not_given_end_it_with_one_line(senders):
    push, uri = senders(zmq.PUSH, sndtimeo=60_000)
    watch = start_program("watch", uri, "--socket", "pull", "--view", "none", stderr=subprocess.PIPE)
    push.send(b"\0" * 80)  # waits for the watch
    _, err = watch.communicate(timeout=PATIENCE_S)
    assert watch.returncode == 2
    assert "give --rate HZ and --format NAME" in one_line(err.decode())


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["tcp://127.0.0.1"], "needs a host and a port"),
        (["tcp://127.0.0.1:5555", "--rate", "48000"], "bare samples need --format NAME too"),
        (["tcp://127.0.0.1:5555", "--socket", "push"], "invalid choice: 'push'"),
        (["tcp://127.0.0.1:5555", "--topic", "a", "--socket", "pull"], "only a subscriber has topics"),
        (["tcp://127.0.0.1:5555", "--server-key", "x.key"], "go with --key"),
        (["tcp://127.0.0.1:5555", "--client-keys", "x"], "go with --key"),
        (["tcp://127.0.0.1:5555", "--key", "no.key_secret", "--server-key", "no.key"], "cannot be read"),
        (["no-such-file.wav"], "no such file"),
        (["tcp://127.0.0.1:5555", "--channels", "1"], "a stream has one channel"),
        (["x.wav", "--pace", "0"], "is for lidwatch replay"),
        (["-", "--for", "0"], "must be above 0"),
        (["-", "--every", "nan"], "must be finite"),
        (["-", "--window", "0"], "--window"),
        (["-", "--view", "hologram"], "invalid choice"),
        (["-", "--scheme", "semaphore"], "is not known"),
        (["-", "--link", "no-such.toml"], "no-such.toml"),
        (["-", "--journal", "no/such/w.jsonl"], "there is no folder"),
        (["-", "--capture", "no/such/folder"], "there is no folder"),
        (["-", "--capture", "c", "--capture-before", "0", "--capture-after", "0"], "a capture of no samples"),
        (["-", "--capture", "c", "--capture-most", "0"], "--capture-most"),
        (["-", "--publish", "tcp://nowhere"], "nowhere"),
    ],
)
def test_what_cannot_be_is_one_line_and_status_2(capsys, tmp_path, monkeypatch, arguments, message):
    monkeypatch.chdir(tmp_path)
    assert main(["watch", *arguments, *([] if "--view" in arguments else ["--view", "none"])]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert message in one_line(err)


def test_options_reach_what_they_are_for(opened, tmp_path):
    link = tmp_path / "link.toml"
    link.write_text('[link]\nscheme = "qpsk"\nsymbol_rate_hz = 9600\n[[alarm]]\nrule = "snr_db < 10"\n')
    status = main(
        [
            "watch", "tcp://127.0.0.1:5555", "--view", "none", "--link", str(link), "--pulse", "rrc:0.5", "--window", "5000",
            "--every", "2", "--stall", "3", "--draw-every", "4", "--target-ber", "1e-9", "--for", "7", "--timing", "gardner",
        ]
    )  # fmt: skip
    assert status == 0
    options = opened["options"]
    assert (options.window, options.every_s, options.stall_s, options.display) == (5000, 2.0, 3.0, False)
    assert [rule.text for rule in options.rules] == ["snr_db < 10"]
    assert (options.chain.every, options.chain.target_ber, options.chain.detector) == (4, 1e-9, "gardner")
    assert options.chain.keep_total is False
    assert opened["for_s"] == 7.0
    assert (opened["wanted"].scheme.name, opened["wanted"].symbol_rate_hz) == ("qpsk", 9600.0)
    assert opened["start_fields"]["limits"] == ["snr_db < 10"]


def test_the_view_is_a_window_where_there_is_a_display_and_none_where_there_is_no_terminal_either(monkeypatch):
    monkeypatch.setattr("sys.platform", "linux")
    monkeypatch.setenv("DISPLAY", ":7")
    assert showing.default_view() == "window"
    monkeypatch.delenv("DISPLAY")
    monkeypatch.delenv("WAYLAND_DISPLAY", raising=False)
    monkeypatch.setattr("sys.stdout", io.StringIO())
    assert showing.default_view() == "none"


def test_notices_go_to_standard_error_without_a_view_and_to_the_view_with_one(capsys):
    said = []

    class View:
        def note(self, text):
            said.append(text)

    for to_view in (False, True):
        tell = showing.Telling(to_view=to_view)
        tell("early")
        tell.attach(View())
        tell("late")
    assert said == ["late"]
    assert capsys.readouterr().err.count("warning: early") == 2


# --- keys


def test_keys_are_made_once_and_the_secret_is_the_owners_alone(tmp_path, capsys):
    assert main(["keys", "harbour", "--folder", str(tmp_path / "keys")]) == 0
    out = capsys.readouterr().out
    assert "harbour.key: public" in out
    assert "harbour.key_secret: secret" in out
    secret = tmp_path / "keys" / "harbour.key_secret"
    assert stat.S_IMODE(secret.stat().st_mode) == 0o600
    # pyzmq's own reader
    public, private = zmq.auth.load_certificate(secret)
    assert zmq.curve_public(private) == public
    before = secret.read_bytes()
    assert main(["keys", "harbour", "--folder", str(tmp_path / "keys")]) == 2
    assert "exists already" in one_line(capsys.readouterr().err)
    assert secret.read_bytes() == before
    assert main(["keys", "../x", "--folder", str(tmp_path)]) == 2


def test_an_encrypted_stream_with_keys_of_our_own_command_is_watched_and_a_stranger_is_not(tmp_path, senders):
    keys, clients = tmp_path / "keys", tmp_path / "clients"
    for name in ("station", "gauge", "stranger"):
        assert run_program("keys", name, "--folder", str(keys))[0] == 0
    clients.mkdir()
    (clients / "gauge.key").write_bytes((keys / "gauge.key").read_bytes())
    journal, address = tmp_path / "w.jsonl", f"ipc://{tmp_path}/encrypted"
    watch = start_program(
        "watch", address, "--socket", "pull", "--bind", "--view", "none", *QPSK, "--journal", str(journal),
        "--key", str(keys / "station.key_secret"), "--client-keys", str(clients), "--stall", "60",
        stderr=subprocess.PIPE,
    )  # fmt: skip
    try:
        server = zmq.auth.load_certificate(keys / "station.key")[0]
        samples = stretches(25.0)[:19_200]  # no more than may wait on a busy machine

        def sender(name):
            public, secret = zmq.auth.load_certificate(keys / f"{name}.key_secret")
            push, _ = senders(
                zmq.PUSH, address, bind=False, curve_serverkey=server, curve_publickey=public, curve_secretkey=secret
            )
            return push

        stranger, gauge = sender("stranger"), sender("gauge")
        for push, stream in ((stranger, "stranger"), (gauge, "gauge")):
            for at in range(0, samples.size, 4800):
                push.send_multipart(frame(samples[at : at + 4800], at, stream=stream))
        end = time.monotonic() + PATIENCE_S
        while not any(line["kind"] == "lock" for line in (lines_of(journal) if journal.exists() else [])):
            assert time.monotonic() < end
            assert watch.poll() is None
            time.sleep(0.05)
        watch.send_signal(signal.SIGINT)
        _, err = watch.communicate(timeout=PATIENCE_S)
    finally:
        watch.kill()
        watch.wait()
    assert (watch.returncode, err) == (130, b"")
    # none of the stranger's samples: they would have come first
    assert 0 < lines_of(journal)[-1]["samples"] <= samples.size
    assert not [line for line in lines_of(journal) if line["kind"] == "gap"]


@pytest.mark.parametrize(
    ("address", "warned"), [("tcp://0.0.0.0:0", True), ("tcp://*:0", True), ("tcp://127.0.0.1:0", False)]
)
def test_binding_beyond_this_machine_without_keys_warns_in_one_line(address, warned):
    status, _, err = run_program("watch", address, "--bind", "--view", "none", "--for", "0.05")
    assert status == 0
    if warned:
        assert "anybody who reaches this address can send samples" in one_line(err)
    else:
        assert err == ""


def test_every_option_is_in_the_help(capsys):
    with pytest.raises(SystemExit):
        parser().parse_args(["watch", "--help"])
    text = capsys.readouterr().out
    for option in (
        "--socket",
        "--bind",
        "--topic",
        "--key",
        "--capture",
        "--for",
        "--stall",
        "--publish",
        "--on-alarm",
    ):
        assert option in text


def test_a_source_that_needs_another_is_told_by_an_error_of_ours():
    with pytest.raises(InputError):
        watching._opener(links_of(parser().parse_args(["watch", "x.wav", "--pace", "0"]))[0].parsed)
