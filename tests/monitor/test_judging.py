"""A recording judged as the watch would have judged it."""

import json

import pytest

from monitor.cli import main
from tests.monitor.recordings import QPSK, RAW, one_line, raw
from tests.monitor.watched import Watched, rules, stretches

LINK = """
[link]
name = "Skerry tide gauge"
scheme = "qpsk"
symbol_rate_hz = 12000
pulse = "rrc:0.35"
[[alarm]]
rule = "snr_db < 18"
hold_s = 0.3
severity = "high"
"""


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "link.toml").write_text(LINK)
    return tmp_path


def lines_of(path):
    return [json.loads(line) for line in path.read_text().splitlines()]


def replay(folder, samples, *more):
    path = raw(folder, samples)
    journal = folder / "r.jsonl"
    status = main(["replay", path, *RAW, "--link", str(folder / "link.toml"), "--journal", str(journal), *more])
    return status, lines_of(journal)


def test_a_broken_limit_is_status_1_and_in_the_document(folder, capsys):
    status, lines = replay(folder, stretches(25.0, 12.0, 12.0), "--json")
    assert status == 1
    document = json.loads(capsys.readouterr().out)
    (alarm,) = document["alarms"]
    assert (alarm["rule"], alarm["severity"], alarm["limit"]) == ("snr_db < 18", "high", 18.0)
    (raised,) = (line for line in lines if line["kind"] == "alarm")
    assert raised["seconds"] == alarm["raised_at_s"]
    assert 1.0 < raised["seconds"] < 2.5


def test_no_limit_broken_is_status_0(folder, capsys):
    status, lines = replay(folder, stretches(25.0, 25.0))
    assert status == 0
    assert not [line for line in lines if line["kind"] == "alarm"]


def test_the_lines_are_those_of_a_watch(folder, capsys):
    samples = stretches(25.0, 12.0, 25.0)
    _, lines = replay(folder, samples)
    watched = Watched(rules=rules("snr_db < 18", hold_s=0.3, severity="high"), display=True).feed(samples).finish()
    expected = [(kind, sample, json.loads(json.dumps(fields))) for kind, sample, _, fields in watched.lines]
    shown = [
        (
            line["kind"],
            line["sample"],
            {k: v for k, v in line.items() if k not in ("kind", "time", "sample", "seconds")},
        )
        for line in lines
    ]
    assert shown[0][0] == "start"
    assert shown[1:-1] == expected
    assert shown[-1][2] == {
        "why": "the recording ended",
        "samples": samples.size,
        "samples_lost": 0,
        "alarms_raised": 1,
    }


def test_a_replay_that_fails_half_way_still_ends_its_journal(folder, capsys, monkeypatch):
    from monitor.engine import Engine
    from monitor.errors import InputError

    def broken(self, block):
        raise InputError("the tape tore")

    monkeypatch.setattr(Engine, "feed", broken)
    status, lines = replay(folder, stretches(25.0))
    assert status == 2
    assert "the tape tore" in one_line(capsys.readouterr().err)
    assert (lines[-1]["kind"], lines[-1]["why"]) == ("stop", "the tape tore")


def test_captures_are_written_beside_the_judgement(folder, capsys):
    status, lines = replay(
        folder,
        stretches(25.0, 12.0, 12.0),
        "--capture",
        str(folder / "c"),
        "--capture-before",
        "0.5",
        "--capture-after",
        "0.1",
    )
    assert status == 1
    (meta,) = (folder / "c").glob("*.sigmf-meta")
    (raised,) = (line for line in lines if line["kind"] == "alarm")
    found = json.loads(meta.read_text())
    assert found["captures"][0]["core:global_index"] == raised["sample"] - 24_000
    assert [path.suffix for path in sorted((folder / "c").iterdir())] == [".png", ".sigmf-data", ".sigmf-meta"]


def test_captures_alone_are_reason_enough_to_judge(folder, capsys):
    path = raw(folder, stretches(25.0))
    assert main(["replay", path, *RAW, *QPSK, "--capture", str(folder / "c")]) == 0
    assert list((folder / "c").iterdir()) == []
