"""The command ``lidwatch survey``: which recordings, their rows, the totals, the table."""

import csv
import signal
import subprocess
import time

import numpy as np
import pytest

from dsp.reading import READING_KEYS
from monitor import surveying
from monitor.cli import main, parser
from monitor.errors import InputError
from monitor.links import links_of
from monitor.survey_report import CSV_COLUMNS, Row, document, table, text, totals_of
from monitor.surveying import find_recordings, row_names
from tests.monitor.recordings import (
    QPSK,
    RAW,
    assert_alike,
    one_line,
    pam2,
    qpsk,
    raw,
    run_program,
    start_program,
    strict_json,
    wav_bytes,
)

PATIENCE_S = 60.0


def row(name, opening=None, *, alarms=0, seconds=2.0, reason=None, slips=0, **more):
    reading = None
    if opening is not None:
        reading = dict.fromkeys(READING_KEYS) | {
            "opening_pct": opening,
            "symbols": 1000,
            "snr_db": 20.0,
            "ber": 1e-9,
        }
    return Row(
        name,
        {
            "lidwatch": "0",
            "source": {"uri": name, "seconds": seconds, "samples_lost": 0, "clipped_pct": 0.0, **more},
            "link": {"scheme": "qpsk", "symbol_rate_hz": 12000.0, "pulse": "rrc:0.35"},
            "lock": {"locked_pct": 99.5, "slips": slips, "reason": reason},
            "reading": reading,
            "windows": {"worst": None if opening is None else {"opening_pct": opening - 1.0}},
            "alarms": [{"rule": "opening_pct < 40"}] * alarms,
        },
    )


ROWS = (
    row("east.iq", 80.0),
    row("west.iq", 30.5, alarms=2, seconds=3661.0, slips=1),
    row("noise.iq", reason="no clock line"),
    Row("torn.wav", error="torn.wav: is empty"),
    row("quay.iq", 60.0, alarms=1),
)


# --- rows and totals


def test_totals_count_every_row_once():
    totals = totals_of(ROWS)
    assert (totals.links, totals.measured, totals.without_link, totals.failed, totals.with_alarms) == (5, 3, 1, 1, 2)
    assert totals.measured + totals.without_link + totals.failed == totals.links
    assert (totals.openings_pct, totals.worst) == ((30.5, 60.0, 80.0), "west.iq")
    assert (totals.seconds, totals.symbols) == (3667.0, 3000)
    none = totals_of(ROWS[2:4])
    assert (none.openings_pct, none.worst) == (None, None)


def test_every_row_is_a_line_whose_columns_stand_under_their_titles():
    lines = list(text(ROWS))
    title, *body = lines[: 1 + len(ROWS)]
    assert [line.split()[0] for line in body] == [one.name for one in ROWS]
    end = title.index("opening") + len("opening")
    assert [line[:end].split()[-2:] for line in body if "Bd" in line and "no eye" not in line] == [
        ["80.0", "%"],
        ["30.5", "%"],
        ["60.0", "%"],
    ]
    assert "1:01:01" in body[1]
    assert "2 alarms: opening_pct < 40, 1 slip" in body[1]
    assert body[2].endswith("no eye: no clock line")
    assert body[3].endswith("failed: torn.wav: is empty")
    assert lines[-2] == "5 links, 1:01:07 of samples; 3 measured; 1 without an eye; 1 failed; 2 with a limit broken"
    assert lines[-1] == "opening 30.5 to 80.0 %, median 60.0 %; worst: west.iq"


def test_long_and_hostile_names_keep_to_their_column():
    lines = list(text((row("x" * 200 + "\x1b[2J", 50.0), row("b", 60.0))))
    assert "\x1b" not in "".join(lines)
    assert max(map(len, lines)) < 140


def test_the_document_has_the_rows_and_the_totals():
    found = document(ROWS)
    assert [one["name"] for one in found["links"]] == [one.name for one in ROWS]
    assert found["links"][3] == {"name": "torn.wav", "error": "torn.wav: is empty"}
    assert "lidwatch" not in found["links"][0]
    assert found["totals"]["opening_median_pct"] == 60.0
    assert document(ROWS[2:4])["totals"]["opening_least_pct"] is None


def test_the_table_reads_back_with_a_row_for_each(tmp_path):
    path = tmp_path / "s.csv"
    path.write_text(table(ROWS), newline="")
    with path.open(newline="") as file:
        rows = list(csv.reader(file))
    assert tuple(rows[0]) == CSV_COLUMNS
    assert {len(one) for one in rows} == {len(CSV_COLUMNS)}
    own = [dict(zip(CSV_COLUMNS, one, strict=True)) for one in rows[1:]]
    assert [one["name"] for one in own] == [one.name for one in ROWS]
    assert own[1]["opening_pct"] == "30.5"
    assert own[1]["alarms"] == "2"
    assert own[2]["opening_pct"] == ""
    assert own[3]["error"] == "torn.wav: is empty"


# --- which recordings


def test_folders_are_searched_and_a_pair_of_files_is_one_recording(tmp_path):
    (tmp_path / "deep" / "er").mkdir(parents=True)
    for name in ("b.WAV", "a.flac", "deep/er/c.sigmf-meta", "deep/er/c.sigmf-data", "deep/notes.txt", "deep/d.iq"):
        (tmp_path / name).write_bytes(b"x")

    def names(*paths, raw=False):
        return [str(path).removeprefix(f"{tmp_path}/") for path in find_recordings([str(p) for p in paths], raw=raw)]

    assert names(tmp_path) == ["a.flac", "b.WAV", "deep/er/c.sigmf-meta"]
    assert names(tmp_path, raw=True) == ["a.flac", "b.WAV", "deep/d.iq", "deep/er/c.sigmf-meta"]
    # what is named is taken whatever it is called, and nothing twice
    assert names(tmp_path / "deep/notes.txt", tmp_path / "a.flac", tmp_path)[:2] == ["deep/notes.txt", "a.flac"]
    assert len(names(tmp_path, tmp_path)) == 3


@pytest.mark.parametrize("path", ["-", "tcp://127.0.0.1:5555", "ipc://x", "audio:"])
def test_live_sources_are_no_recordings(path):
    with pytest.raises(InputError, match="takes recordings and folders"):
        list(find_recordings([path], raw=False))


def test_a_folder_without_recordings_is_told(tmp_path):
    with pytest.raises(InputError, match="no recordings in this folder; raw ones"):
        list(find_recordings([str(tmp_path)], raw=False))


def test_rows_are_named_without_what_all_have_in_common():
    def named(*arguments):
        return row_names(links_of(parser().parse_args(["survey", *arguments])))

    assert named("/data/north/a.wav", "/data/south/a.wav") == ["north/a.wav", "south/a.wav"]
    assert named("/data/north/a.wav") == ["a.wav"]
    assert named("a.wav", "--channels", "1,2") == ["a.wav, channel 1", "a.wav, channel 2"]
    assert len(set(named("a.wav", "--link", "x.toml", "--link", "y.toml"))) == 2


# --- the command


@pytest.fixture
def folder(tmp_path):
    raw(tmp_path, qpsk(6000, 25.0), "east.iq")
    raw(tmp_path, qpsk(6000, 14.0), "west.iq")
    return tmp_path


def limits(folder, limit):
    path = folder / "link.toml"
    path.write_text(
        f'[link]\nscheme = "qpsk"\nsymbol_rate_hz = 12000\npulse = "rrc:0.35"\n[[alarm]]\nrule = "opening_pct < {limit}"\n'
    )
    return "--link", str(path)


def test_recordings_are_measured_as_replay_measures_them(folder, capsys):
    status, out, err = run_program("survey", str(folder), *RAW, *QPSK, "--json", "--jobs", "2")
    assert (status, err) == (0, "")
    found = strict_json(out)
    assert [one["name"] for one in found["links"]] == ["east.iq", "west.iq"]
    assert main(["replay", str(folder / "west.iq"), *RAW, *QPSK, "--json"]) == 0
    alone = strict_json(capsys.readouterr().out)
    for key in ("source", "link", "lock", "reading", "windows", "alarms"):
        assert_alike(found["links"][1][key], alone[key])
    assert found["totals"]["worst"] == "west.iq"


def test_a_broken_limit_is_status_1_and_the_worst_first_comes_first(folder, capsys):
    table_path = folder / "s.csv"
    arguments = ["survey", str(folder), *RAW, "--csv", str(table_path), "--jobs", "1"]
    assert main([*arguments, *limits(folder, 60), "--worst-first"]) == 1
    out = capsys.readouterr().out.splitlines()
    assert out[1].startswith("west.iq")
    assert "alarm: opening_pct < 60" in out[1]
    assert table_path.read_text().splitlines()[1].startswith("west.iq,")
    assert main([*arguments, *limits(folder, 10)]) == 0


def test_one_bad_recording_does_not_hide_the_others(folder, capsys):
    (folder / "torn.wav").write_bytes(b"RIFF")
    assert main(["survey", str(folder), *RAW, *QPSK, "--jobs", "1"]) == 2
    out, err = capsys.readouterr()
    assert one_line(err).startswith("lidwatch: torn.wav: ")
    assert "failed: " in out
    assert "3 links" in out
    assert "2 measured; 1 failed" in out


def test_a_recording_without_a_link_is_status_3(folder, capsys):
    noise = np.random.default_rng(1).normal(size=(48_000, 2)).astype(np.float32).view(np.complex64).ravel()
    raw(folder, noise, "noise.iq")
    assert main(["survey", str(folder), *RAW, *QPSK, "--jobs", "1"]) == 3
    assert "1 without an eye" in capsys.readouterr().out


def test_each_channel_of_a_sound_file_is_a_row(tmp_path, capsys):
    path = tmp_path / "two.wav"
    path.write_bytes(wav_bytes(np.column_stack([pam2(4000, 25.0), pam2(4000, 15.0)])))
    command = [
        "survey",
        str(path),
        "--channels",
        "1,2",
        "--symbol-rate",
        "12000",
        "--scheme",
        "pam2",
        "--pulse",
        "rrc:0.35",
    ]
    assert main([*command, "--jobs", "1"]) == 0
    out = capsys.readouterr().out.splitlines()
    assert [line.split("  ")[0] for line in out[1:3]] == ["two.wav, channel 1", "two.wav, channel 2"]


def test_a_process_that_dies_is_told_in_its_row(folder, capsys, monkeypatch):
    from concurrent.futures.process import BrokenProcessPool

    class Broken:
        def result(self):
            raise BrokenProcessPool("gone")

    own = surveying._row_of(Broken(), "east.iq")
    assert (own.document, own.name) == (None, "east.iq")
    assert "the process that measured it died" in own.error


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["no-such.wav", "--csv", "no/such/s.csv"], "there is no folder"),
        (["x.iq", "--csv", "."], "is a folder"),
        (["x.iq", "--link", "no-such.toml"], "no-such.toml"),
        (["x.iq", "--jobs", "0"], "--jobs"),
        (["x.iq", "--scheme", "semaphore", "--jobs", "1"], "is not known"),
        (["-"], "takes recordings and folders"),
    ],
)
def test_what_cannot_be_is_one_line_and_status_2(capsys, tmp_path, monkeypatch, arguments, message):
    monkeypatch.chdir(tmp_path)
    assert main(["survey", *arguments]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert message in one_line(err)


def test_after_ctrl_c_what_is_done_is_told_and_nothing_is_left_running(tmp_path):
    raw(tmp_path, qpsk(3000), "a.iq")
    long = np.tile(qpsk(12_000), 200)
    for name in "bcd":
        raw(tmp_path, long, f"{name}.iq")
    program = start_program(
        "survey", str(tmp_path), *RAW, *QPSK, "--jobs", "1", stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    time.sleep(8.0)
    program.send_signal(signal.SIGINT)
    out, err = program.communicate(timeout=PATIENCE_S)
    assert program.returncode == 130
    assert "Traceback" not in err.decode()
    assert "d.iq" not in out.decode()
