"""``lidwatch replay --pace``: a recording played with a view, then measured."""

import json
import signal
import subprocess
import time

import pytest

from monitor.cli import main
from monitor.engine import Engine
from tests.monitor.recordings import QPSK, RAW, one_line, qpsk, raw, run_program, start_program
from tests.monitor.watched import stretches

PATIENCE_S = 30.0


@pytest.fixture
def link(tmp_path):
    path = tmp_path / "link.toml"
    path.write_text(
        '[link]\nscheme = "qpsk"\nsymbol_rate_hz = 12000\npulse = "rrc:0.35"\n[[alarm]]\nrule = "snr_db < 18"\n'
    )
    return str(path)


def lines_of(path):
    lines = [json.loads(line) for line in path.read_text().splitlines()]
    return [{key: value for key, value in line.items() if key != "time"} for line in lines]


def test_the_figures_lines_and_status_are_those_of_the_replay_without_a_pace(tmp_path, link):
    path = raw(tmp_path, stretches(25.0, 12.0, 25.0))
    got = []
    for name, more in (("paced", ["--pace", "3", "--view", "none"]), ("plain", [])):
        journal = tmp_path / f"{name}.jsonl"
        began = time.monotonic()
        status, out, err = run_program("replay", path, *RAW, "--link", link, "--json", "--journal", str(journal), *more)
        took = time.monotonic() - began
        document = json.loads(out)
        del document["speed"]
        got.append((status, err, document, lines_of(journal)))
        if more:
            assert took >= 1.0
    assert got[0] == got[1]
    assert got[0][0] == 1
    assert [alarm["rule"] for alarm in got[0][2]["alarms"]] == ["snr_db < 18"]


def test_a_slow_machine_plays_slower_and_loses_nothing(tmp_path, monkeypatch, capsys):
    feed = Engine.feed

    def slow(self, block):
        time.sleep(1.5 * block.samples.size / self.sample_rate_hz / 4)
        feed(self, block)

    monkeypatch.setattr(Engine, "feed", slow)
    journal = tmp_path / "w.jsonl"
    path = raw(tmp_path, qpsk(24_000))
    assert main(["replay", path, *RAW, *QPSK, "--pace", "4", "--view", "none", "--journal", str(journal)]) == 0
    stop = lines_of(journal)[-1]
    assert (stop["samples"], stop["samples_lost"], stop["why"]) == (96_000, 0, "the recording ended")
    assert "qpsk at 12000 Bd" in capsys.readouterr().out


def test_a_link_to_be_found_is_found_before_the_playing(tmp_path):
    path, journal = raw(tmp_path, stretches(25.0, 25.0)), tmp_path / "w.jsonl"
    assert run_program("replay", path, *RAW, "--pace", "4", "--view", "none", "--journal", str(journal))[0] == 0
    (gained,) = (line for line in lines_of(journal) if line["kind"] == "lock" and line["state"] == "gained")
    assert gained["seconds"] < 0.05


def test_ctrl_c_ends_it_with_what_was_played_measured_and_130(tmp_path):
    path, journal = raw(tmp_path, stretches(25.0, 25.0, 25.0, 25.0)), tmp_path / "w.jsonl"
    program = start_program(
        "replay", path, *RAW, *QPSK, "--pace", "1", "--view", "none", "--every", "0.2", "--json", "--journal", str(journal),
        stdout=subprocess.PIPE, stderr=subprocess.PIPE,
    )  # fmt: skip
    end = time.monotonic() + PATIENCE_S
    while not (journal.exists() and journal.read_text().count('"reading"') >= 3):
        assert time.monotonic() < end
        time.sleep(0.02)
    program.send_signal(signal.SIGINT)
    out, err = program.communicate(timeout=PATIENCE_S)
    assert (program.returncode, err) == (130, b"")
    document, stop = json.loads(out), lines_of(journal)[-1]
    assert stop["kind"] == "stop"
    assert document["source"]["samples"] == stop["samples"]
    assert 0 < stop["samples"] < 4 * 48_000


def test_in_a_pipe_the_terminal_view_is_lines_and_it_ends_by_itself(tmp_path):
    path = raw(tmp_path, stretches(25.0, 25.0))
    status, out, err = run_program("replay", path, *RAW, *QPSK, "--pace", "1.5", "--view", "terminal")
    assert (status, err) == (0, "")
    assert out.startswith("0:0")
    assert "opening" in out
    assert "\nqpsk at 12000 Bd, pulse rrc:0.35" in out


def test_noise_is_nothing_to_measure(tmp_path):
    path = raw(tmp_path, qpsk(6000, -20.0))
    status, _, err = run_program("replay", path, *RAW, *QPSK, "--pace", "4", "--view", "none")
    assert status == 3
    assert "nothing to measure" in one_line(err)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["-", "--pace", "1", *RAW], "standard input comes at its own speed"),
        (["x.wav", "--view", "window"], "a view needs a pace"),
        (["x.wav", "--pace", "0"], "must be above 0"),
        (["x.wav", "--pace", "1", "--view", "none"], "no such file"),
    ],
)
def test_what_cannot_be_is_one_line_and_status_2(capsys, arguments, message):
    assert main(["replay", *arguments]) == 2
    assert message in one_line(capsys.readouterr().err)
