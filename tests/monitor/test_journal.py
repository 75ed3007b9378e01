"""The journal: lines, rotation, disks that fail, kills."""

import csv
import json
import os
import re
import signal
import subprocess
import sys
import time
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path

import numpy as np
import pytest

from dsp.reading import READING_KEYS, Budget, Equaliser, Eye, Reading
from monitor.document import reading_document
from monitor.errors import InputError
from monitor.journal import CSV_COLUMNS, Journal, Rotation, time_text
from monitor.line_file import LineFile

ROOT = Path(__file__).parents[2]
NOON = datetime(2026, 12, 1, 12, 0, 0, 250, tzinfo=UTC)


class Clock:
    """A clock that the test sets."""

    def __init__(self, moment=NOON):
        self.moment = moment

    def __call__(self):
        return self.moment

    def pass_(self, **time):
        self.moment += timedelta(**time)


class Heard:
    """A sink that remembers."""

    def __init__(self):
        self.lines, self.closed = [], 0

    def take(self, record, line):
        assert json.loads(line) == record
        self.lines.append(record)

    def close(self):
        self.closed += 1


@pytest.fixture
def clock():
    return Clock()


def lines_of(path):
    content = path.read_bytes()
    assert content == b"" or content.endswith(b"\n")
    return [json.loads(line) for line in content.split(b"\n")[:-1]]


def say(journal, *numbers, kind="reading"):
    for number in numbers:
        journal.write(kind, number, number / 10, {"n": number})


def told(path):
    return [line.get("n", line["kind"]) for line in lines_of(path)]


# -- lines -------------------------------------------------------------------------------------------------------------


def test_a_line_begins_with_kind_time_sample_and_seconds(tmp_path, clock):
    with Journal(tmp_path / "watch.jsonl", now=clock) as journal:
        journal.write("gap", 480, 0.01, {"samples_lost": 32, "why": "sequence"})
    text = (tmp_path / "watch.jsonl").read_text()
    assert text == (
        '{"kind": "gap", "time": "2026-12-01T12:00:00.000250Z", "sample": 480, "seconds": 0.01, '
        '"samples_lost": 32, "why": "sequence"}\n'
    )


def test_times_are_utc_with_microseconds_as_rfc_3339_has_them():
    assert time_text(datetime(2026, 12, 1, 14, 0, tzinfo=timezone(timedelta(hours=2)))) == "2026-12-01T12:00:00.000000Z"
    # date-time of RFC 3339, section 5.6
    assert re.fullmatch(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{6}Z", time_text(NOON))


def test_a_line_is_in_the_file_when_write_returns(tmp_path, clock):
    journal = Journal(tmp_path / "watch.jsonl", now=clock)
    for number in range(3):
        say(journal, number)
        assert told(tmp_path / "watch.jsonl") == list(range(number + 1))
    journal.close()


def test_what_json_does_not_know_is_written_as_it_can_be(tmp_path, clock):
    fields = {
        "nan": float("nan"),
        "inf": [1.0, -float("inf")],
        "numpy": np.float32(0.5),
        "count": np.int64(3),
        "flag": np.bool_(True),
        "array": np.array([[1.0, np.nan]]),
        "path": Path("/a"),
        "eye": Eye(50.0, None, 0.5, float("nan"), 0.0),
        "when": NOON,
        "inner": {"x": float("nan"), 3: (1, 2)},
        "kind": "never",
        "sample": "never",
    }
    with Journal(tmp_path / "watch.jsonl", now=clock) as journal:
        journal.write("mark", None, float("nan"), fields)
    (line,) = lines_of(tmp_path / "watch.jsonl")
    assert line == {
        "kind": "mark",
        "time": "2026-12-01T12:00:00.000250Z",
        "sample": None,
        "seconds": None,
        "nan": None,
        "inf": [1.0, None],
        "numpy": 0.5,
        "count": 3,
        "flag": True,
        "array": [[1.0, None]],
        "path": "/a",
        "eye": {"opening_pct": 50.0, "height": None, "width_ui": 0.5, "centre_ui": None, "threshold": 0.0},
        "when": "2026-12-01T12:00:00.000250Z",
        "inner": {"x": None, "3": [1, 2]},
    }


def test_any_text_is_one_line_of_valid_utf_8(tmp_path, clock):
    names = [
        "Skjær ved moloen 🌊",
        'quote " and \\',
        "two\nlines\r\n",
        "a\u2028b\x85c\u2029d",
        "nul \0",
        "bad \udcff byte",
    ]
    with Journal(tmp_path / "watch.jsonl", now=clock) as journal:
        for name in names:
            journal.write("mark", 0, 0.0, {"name": name})
    content = (tmp_path / "watch.jsonl").read_bytes().decode("utf-8")
    assert len(content.splitlines()) == len(names)
    assert "Skjær ved moloen 🌊" in content
    read = [json.loads(line)["name"] for line in content.splitlines()]
    assert read[:-1] == names[:-1]
    assert read[-1] == r"bad \udcff byte"


def test_a_journal_of_a_run_before_is_appended_to(tmp_path, clock):
    for run in range(3):
        with Journal(tmp_path / "watch.jsonl", now=clock) as journal:
            say(journal, run)
    assert told(tmp_path / "watch.jsonl") == [0, 1, 2]


def test_without_a_file_the_sinks_alone_are_served(clock):
    heard = Heard()
    with Journal(None, now=clock, sinks=[heard]) as journal:
        say(journal, 1)
        assert journal.status.path is None
    assert [line["n"] for line in heard.lines] == [1]
    assert heard.closed == 1


@pytest.mark.parametrize(
    ("name", "says"),
    [
        ("folder", "is a folder"),
        ("nowhere/watch.jsonl", "there is no folder"),
        ("letter.txt", "is not a journal; nothing is added to it"),
        ("table.csv", "is a table with other columns"),
        ("a\0b", "no file can have this name"),
    ],
)
def test_a_path_that_cannot_be_meant_is_refused(tmp_path, clock, name, says):
    (tmp_path / "folder").mkdir()
    (tmp_path / "letter.txt").write_text("Dear harbour master,")
    (tmp_path / "table.csv").write_text("time,height\r\n")
    with pytest.raises(InputError, match=says) as caught:
        Journal(tmp_path / name, now=clock)
    assert "\n" not in str(caught.value)
    assert (tmp_path / "letter.txt").read_text() == "Dear harbour master,"


@pytest.mark.skipif(sys.platform == "win32", reason="no such locks")
def test_two_programs_do_not_write_one_journal(tmp_path, clock):
    with (
        Journal(tmp_path / "watch.jsonl", now=clock),
        pytest.raises(InputError, match="another program is writing it"),
    ):
        Journal(tmp_path / "watch.jsonl", now=clock)


# -- CSV ---------------------------------------------------------------------------------------------------------------

READING = Reading(
    25000,
    opening_pct=61.25,
    eyes=(Eye(61.25, 1.2, 0.7, 0.01, 0.0),),
    timing_tolerance_ui=(-0.2, 0.25),
    ber=1e-9,
    budget=Budget(isi_pct=12.0),
    equaliser=Equaliser(11, 80.0),
    verdict='Echo, mostly: "far" one',
)


def test_csv_has_readings_only_under_the_readings_keys(tmp_path, clock):
    path = tmp_path / "watch.csv"
    heard = Heard()
    with Journal(path, now=clock, sinks=[heard]) as journal:
        journal.write("start", 0, 0.0, {})
        journal.write("reading", 48000, 1.0, reading_document(READING))
        journal.write("alarm", 48000, 1.0, {"state": "raised"})
        journal.write("reading", 96000, 2.0, reading_document(Reading(0)))
        assert journal.status.text == ""
    assert [line["kind"] for line in heard.lines] == ["start", "reading", "alarm", "reading"]
    assert path.read_bytes().count(b"\r\n") == path.read_bytes().count(b"\n") == 3  # RFC 4180, section 2
    with path.open(newline="", encoding="utf-8") as file:
        rows = list(csv.reader(file, strict=True))
    assert tuple(rows[0]) == CSV_COLUMNS == ("time", "sample", "seconds", *READING_KEYS)
    assert {len(row) for row in rows} == {len(CSV_COLUMNS)}
    first = dict(zip(rows[0], rows[1], strict=True))
    assert (first["sample"], first["opening_pct"], first["ber"]) == ("48000", "61.25", "1e-09")
    assert first["verdict"] == READING.verdict
    assert first["snr_db"] == ""
    assert json.loads(first["eyes"])[0]["threshold"] == 0.0
    assert json.loads(first["budget"])["isi_pct"] == 12.0
    assert json.loads(first["timing_tolerance_ui"]) == [-0.2, 0.25]


def test_a_csv_of_a_run_before_is_appended_to_without_a_second_header(tmp_path, clock):
    path = tmp_path / "watch.csv"
    for _ in range(2):
        with Journal(path, now=clock) as journal:
            journal.write("reading", 0, 0.0, {"opening_pct": 5.0})
    content = path.read_bytes()
    assert (content.count(b"\n"), content.count(b"opening_pct,")) == (3, 1)


def test_a_text_of_several_lines_is_one_line_of_csv(tmp_path, clock):
    path = tmp_path / "watch.csv"
    with Journal(path, now=clock) as journal:
        journal.write("reading", 0, 0.0, {"verdict": "echo\r\nfar\none"})
    assert path.read_bytes().count(b"\n") == 2
    assert path.read_bytes().endswith(b",echo far one\r\n")


@pytest.mark.parametrize("cut", [1, 3, 30])
def test_a_row_cut_off_is_taken_away_for_its_figures_may_be_cut_too(tmp_path, clock, cut):
    path = tmp_path / "watch.csv"
    with Journal(path, now=clock) as journal:
        journal.write("reading", 0, 0.0, {"opening_pct": 5.0})
        before = path.read_bytes()
        journal.write("reading", 1, 1.0, {"opening_pct": 5.0})
    os.truncate(path, path.stat().st_size - cut)
    with Journal(path, now=clock) as journal:
        assert path.read_bytes() == before
        journal.write("reading", 2, 2.0, {})
    assert path.read_bytes().count(b"\n") == 3


def test_a_csv_header_cut_off_is_written_again(tmp_path, clock):
    path = tmp_path / "watch.csv"
    path.write_bytes(b"time,sam")
    with Journal(path, now=clock):
        pass
    assert path.read_bytes() == (",".join(CSV_COLUMNS) + "\r\n").encode()


# -- alarms are on the disk --------------------------------------------------------------------------------------------


def test_an_alarm_is_synced_to_the_disk_before_anybody_hears_of_it(tmp_path, clock, monkeypatch):
    path = tmp_path / "watch.jsonl"
    story = []
    real = os.fsync

    def fsync(fd):
        story.append(("sync", os.fstat(fd).st_ino, path.read_bytes().count(b"\n")))
        real(fd)

    class Screen(Heard):
        def take(self, record, line):
            story.append(("shown", record["kind"]))

    journal = Journal(path, now=clock, sinks=[Screen()])
    story.clear()
    monkeypatch.setattr(os, "fsync", fsync)
    say(journal, 1)
    assert story == [("shown", "reading")]
    story.clear()
    say(journal, 2, kind="alarm")
    assert story == [("sync", path.stat().st_ino, 2), ("shown", "alarm")]
    journal.close()


def test_an_alarm_that_did_not_reach_the_disk_is_written_again(tmp_path, clock, monkeypatch):
    path = tmp_path / "watch.jsonl"
    journal = Journal(path, now=clock)
    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", lambda fd: (_ for _ in ()).throw(OSError(5, "Input/output error")))
        say(journal, 1, kind="alarm")
        assert (journal.status.trouble, journal.status.waiting) == ("Input/output error", 1)
        assert told(path) == []
    say(journal, 2)
    assert told(path) == [1, 2]
    journal.close()


# -- disks that fail ---------------------------------------------------------------------------------------------------


@pytest.fixture
def small_disk(tmp_path):
    """A real file system of 64 KiB; only root can have one."""
    place = tmp_path / "disk"
    place.mkdir()
    if not hasattr(os, "geteuid") or os.geteuid() != 0:
        pytest.skip("only root can mount")
    made = subprocess.run(["mount", "-t", "tmpfs", "-o", "size=64k", "tmpfs", place], capture_output=True, check=False)
    if made.returncode:
        pytest.skip(f"no mounting here: {made.stderr.decode().strip()}")
    yield place
    subprocess.run(["umount", place], check=True)


def fill(path):
    """Fill the disk to the last byte."""
    with path.open("wb", buffering=0) as file:
        for size in (4096, 1):
            try:
                while True:
                    file.write(b"\0" * size)
            except OSError:
                continue


def test_on_a_full_disk_the_watch_goes_on_and_alarms_come_later(small_disk, clock):
    path, ballast = small_disk / "watch.jsonl", small_disk / "ballast"
    heard = Heard()
    journal = Journal(path, now=clock, sinks=[heard])
    say(journal, 0)
    fill(ballast)
    written = 1
    while not journal.status.trouble:  # what is left of the file's last page
        say(journal, written)
        written += 1
    written -= 1
    lost = 1
    clock.pass_(seconds=10)
    say(journal, 900, kind="alarm")
    say(journal, 901, 902)
    lost += 2
    journal.write("mark", 903, 0.0, {"n": 903})
    status = journal.status
    assert (status.lines, status.lost, status.waiting) == (written, lost, 2)
    assert status.text == "journal not written: No space left on device; 3 lines lost; 2 waiting to be written"
    assert told(path) == list(range(written))  # whole lines only, also on the full disk
    assert [line["n"] for line in heard.lines][-4:] == [900, 901, 902, 903]

    ballast.unlink()
    clock.pass_(seconds=10)
    say(journal, 904)
    assert told(path) == [*range(written), 900, 903, "gap", 904]
    assert journal.status.text == "journal is written again; 3 lines lost"
    alarm, _, gap, last = lines_of(path)[-4:]
    assert alarm["time"] == time_text(NOON + timedelta(seconds=10))
    assert (gap["lines_lost"], gap["samples_lost"]) == (lost, 0)
    assert gap["why"] == "the journal could not be written: No space left on device"
    assert gap["time"] == last["time"] == time_text(NOON + timedelta(seconds=20))
    say(journal, 905)
    assert told(path)[-2:] == [904, 905]
    journal.close()


def test_a_file_system_mounted_read_only_is_waited_for(small_disk, clock):
    path = small_disk / "watch.jsonl"
    subprocess.run(["mount", "-o", "remount,ro", small_disk], check=True)
    journal = Journal(path, now=clock)
    assert journal.status.trouble == "Read-only file system"
    say(journal, 1)
    say(journal, 2, kind="alarm")
    subprocess.run(["mount", "-o", "remount,rw", small_disk], check=True)
    say(journal, 3)
    assert told(path) == [2, "gap", 3]
    journal.close()


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="there is no /dev/full")
def test_a_device_that_is_always_full_never_raises(clock):
    with Journal(Path("/dev/full"), now=clock) as journal:
        say(journal, 1)
        say(journal, 2, kind="alarm")
        assert (journal.status.lost, journal.status.waiting) == (1, 1)
        assert "No space left on device" in journal.status.text


@pytest.mark.skipif(not Path("/dev/null").exists(), reason="there is no /dev/null")
def test_a_device_that_cannot_sync_takes_alarms_all_the_same(clock):
    with Journal(Path("/dev/null"), now=clock, rotation=Rotation(10)) as journal:
        say(journal, 1, 2, kind="alarm")
        assert (journal.status.lines, journal.status.text) == (2, "")


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="there are no named pipes")
def test_a_pipe_that_nobody_reads_does_not_hold_the_watch_up(tmp_path, clock):
    os.mkfifo(tmp_path / "pipe")
    with Journal(tmp_path / "pipe", now=clock) as journal:
        say(journal, 1)
        assert journal.status.lost == 1


def test_a_folder_without_leave_to_write_is_waited_for(tmp_path, clock):
    folder = tmp_path / "locked"
    folder.mkdir(0o555)
    if os.access(folder, os.W_OK):
        pytest.skip("this user may write anywhere")
    with Journal(folder / "watch.jsonl", now=clock) as journal:
        say(journal, 1)
        assert journal.status.trouble == "Permission denied"
        folder.chmod(0o755)
        say(journal, 2)
    assert told(folder / "watch.jsonl") == ["gap", 2]


def test_a_folder_that_was_taken_away_is_waited_for_and_never_made(tmp_path, clock):
    folder = tmp_path / "stick"
    folder.mkdir()
    with Journal(folder / "watch.jsonl", now=clock) as journal:
        say(journal, 1)
        folder.rename(tmp_path / "gone")
        say(journal, 2)
        say(journal, 3, kind="alarm")
        assert not folder.exists()
        assert journal.status.trouble == "No such file or directory"
        folder.mkdir()
        say(journal, 4)
        assert told(folder / "watch.jsonl") == [3, "gap", 4]
    assert told(tmp_path / "gone" / "watch.jsonl") == [1]


def test_a_file_that_was_deleted_or_moved_by_others_is_made_anew(tmp_path, clock):
    path = tmp_path / "watch.jsonl"
    with Journal(path, now=clock) as journal:
        say(journal, 1)
        path.unlink()
        say(journal, 2)
        assert told(path) == [2]
        path.rename(tmp_path / "theirs.jsonl")
        say(journal, 3)
        path.rename(tmp_path / "others.jsonl")
        path.write_bytes(b"")
        say(journal, 4)
    assert told(path) == [4]
    assert told(tmp_path / "others.jsonl") == [3]
    assert told(tmp_path / "theirs.jsonl") == [2]


def test_alarms_wait_in_a_bounded_number_and_what_is_given_up_is_counted(tmp_path, clock):
    folder = tmp_path / "stick"
    folder.mkdir()
    with Journal(folder / "watch.jsonl", now=clock) as journal:
        folder.rename(tmp_path / "gone")
        say(journal, *range(1200), kind="alarm")
        assert (journal.status.waiting, journal.status.lost) == (1000, 200)
        folder.mkdir()
        say(journal, 5000)
    assert told(folder / "watch.jsonl") == [*range(200, 1200), "gap", 5000]
    assert lines_of(folder / "watch.jsonl")[-2]["lines_lost"] == 200


def test_what_waits_is_written_at_the_end_if_it_can_be(tmp_path, clock):
    folder = tmp_path / "stick"
    folder.mkdir()
    journal = Journal(folder / "watch.jsonl", now=clock)
    folder.rename(tmp_path / "gone")
    say(journal, 1, kind="alarm")
    say(journal, 2)
    folder.mkdir()
    journal.close()
    assert told(folder / "watch.jsonl") == [1, "gap"]


def test_closing_while_nothing_can_be_written_is_no_error(tmp_path, clock):
    folder = tmp_path / "stick"
    folder.mkdir()
    journal = Journal(folder / "watch.jsonl", now=clock)
    folder.rename(tmp_path / "gone")
    say(journal, 1, kind="alarm")
    journal.close()
    assert journal.status.waiting == 1


def test_a_write_that_breaks_off_leaves_no_half_line(tmp_path, clock, monkeypatch):
    path = tmp_path / "watch.jsonl"
    journal = Journal(path, now=clock)
    say(journal, 1)
    real, calls = os.write, []

    def write(fd, data):
        calls.append(len(data))
        if len(calls) > 1:
            raise OSError(28, "No space left on device")
        return real(fd, bytes(data)[:10])

    with monkeypatch.context() as patch:
        patch.setattr(os, "write", write)
        say(journal, 2)
        assert len(calls) == 2
    assert told(path) == [1]
    say(journal, 3)
    assert told(path) == [1, "gap", 3]
    journal.close()


# -- rotation ----------------------------------------------------------------------------------------------------------


def parts(folder, suffix=".jsonl"):
    """The parts and the file after them, in the order of their names."""
    found = sorted(path for path in folder.iterdir() if path.name != f"watch{suffix}")
    return [*found, folder / f"watch{suffix}"]


def test_a_file_that_would_grow_too_large_is_set_aside(tmp_path, clock):
    path = tmp_path / "watch.jsonl"
    with Journal(path, now=clock) as journal:
        say(journal, 0)
    size = path.stat().st_size
    with Journal(path, now=clock, rotation=Rotation(3 * size)) as journal:
        for number in range(1, 8):
            clock.pass_(seconds=1)
            say(journal, number)
        assert journal.status.parts == 2
    assert [told(part) for part in parts(tmp_path)] == [[0, 1, 2], [3, 4, 5], [6, 7]]
    assert all(part.stat().st_size <= 3 * size for part in parts(tmp_path))
    assert parts(tmp_path)[0].name == "watch.20261201T120003Z-000001.jsonl"


def test_parts_within_one_second_and_under_a_clock_put_back_keep_their_order(tmp_path, clock):
    path = tmp_path / "watch.jsonl"
    with Journal(path, now=clock, rotation=Rotation(1)) as journal:
        say(journal, 0, 1, 2)
        clock.pass_(hours=-3)
        say(journal, 3, 4)
        clock.pass_(days=1)
        say(journal, 5)
    with Journal(path, now=clock, rotation=Rotation(1)) as journal:
        say(journal, 6)
    assert [told(part) for part in parts(tmp_path)] == [[n] for n in range(7)]


def test_a_file_in_the_way_is_never_overwritten(tmp_path, clock, monkeypatch):
    path = tmp_path / "watch.jsonl"
    theirs = tmp_path / "watch.20261201T120000Z-000001.jsonl"
    with Journal(path, now=clock, rotation=Rotation(1)) as journal:
        say(journal, 0)
        theirs.write_text("theirs")
        monkeypatch.setattr(os, "listdir", lambda folder: [])  # it came between the look and the rename
        say(journal, 1)
    assert theirs.read_text() == "theirs"
    assert told(tmp_path / "watch.20261201T120000Z-000002.jsonl") == [0]


def test_with_each_new_day_a_new_file_begins(tmp_path):
    clock = Clock(datetime(2026, 12, 1, 23, 59, 59, tzinfo=UTC))
    path = tmp_path / "watch.jsonl"
    with Journal(path, now=clock, rotation=Rotation(daily=True)) as journal:
        say(journal, 0)
        clock.pass_(seconds=2)
        say(journal, 1, 2)
        clock.pass_(seconds=-2)  # a clock put back is no new day
        say(journal, 3)
        clock.pass_(days=1, seconds=2)
        say(journal, 4)
    assert [told(part) for part in parts(tmp_path)] == [[0], [1, 2, 3], [4]]


@pytest.mark.parametrize("suffix", [".jsonl", ".csv"])
def test_yesterdays_journal_of_a_run_before_is_set_aside(tmp_path, clock, suffix):
    path = tmp_path / f"watch{suffix}"
    for expected in (1, 1, 2):
        with Journal(path, now=clock, rotation=Rotation(daily=True)) as journal:
            say(journal, 1)
        assert len(parts(tmp_path, suffix)) == expected
        if expected == 1:
            clock.pass_(hours=6)
    assert parts(tmp_path, suffix)[-1].read_bytes().count(b"\n") == (1 if suffix == ".jsonl" else 2)


def test_every_part_of_a_csv_has_its_header(tmp_path, clock):
    with Journal(tmp_path / "watch.csv", now=clock, rotation=Rotation(100)) as journal:
        say(journal, 1, 2, 3)
    for part in parts(tmp_path, ".csv"):
        with part.open(newline="") as file:
            assert [row[0] for row in csv.reader(file)] == ["time", "2026-12-01T12:00:00.000250Z"]


def test_where_no_part_can_be_made_the_file_goes_on_and_it_is_said(tmp_path, clock, monkeypatch):
    path = tmp_path / "watch.jsonl"
    journal = Journal(path, now=clock, rotation=Rotation(1))
    say(journal, 0)

    def replace(source, target):
        raise PermissionError(13, "Permission denied")

    with monkeypatch.context() as patch:
        patch.setattr(os, "replace", replace)
        say(journal, 1)
        assert told(path) == [0, 1]
        assert journal.status.text == "journal not written: cannot begin a new file: Permission denied"
        assert list(tmp_path.iterdir()) == [path]
    say(journal, 2)  # not tried again at once
    assert told(path) == [0, 1, 2]
    clock.pass_(minutes=2)
    say(journal, 3)
    assert [told(part) for part in parts(tmp_path)] == [[0, 1, 2], [3]]
    assert journal.status.text == ""
    journal.close()


def test_a_part_of_no_bytes_is_refused():
    with pytest.raises(InputError, match="at least 1 byte"):
        Rotation(0)


# -- kills -------------------------------------------------------------------------------------------------------------

WRITER = """
import sys
from datetime import UTC, datetime
from pathlib import Path
from monitor.journal import Journal, Rotation
journal = Journal(Path(sys.argv[1]), now=lambda: datetime.now(UTC), rotation=Rotation(20_000))
number = 0
while True:
    journal.write("reading", number, number / 10, {"n": number, "text": "x" * 300})
    number += 1
    if number % 50 == 0:
        print(number, flush=True)
"""


@pytest.mark.skipif(not hasattr(signal, "SIGKILL"), reason="no such signal")
def test_a_killed_program_loses_no_line_that_was_written(tmp_path, clock):
    path = tmp_path / "watch.jsonl"
    writer = subprocess.Popen([sys.executable, "-c", WRITER, str(path)], stdout=subprocess.PIPE, cwd=ROOT)
    try:
        promised = [int(writer.stdout.readline()) for _ in range(5)][-1]
        time.sleep(0.02)
    finally:
        writer.send_signal(signal.SIGKILL)
        more = writer.stdout.read().split()
        writer.stdout.close()
        assert writer.wait(10) == -signal.SIGKILL
    promised = int(more[-1]) if more else promised
    with Journal(path, now=clock) as journal:
        journal.write("stop", 0, 0.0, {"n": "end"})
    numbers = [line["n"] for part in parts(tmp_path) for line in lines_of(part) if line["kind"] != "gap"]
    assert len(numbers) > promised
    assert numbers == [*range(len(numbers) - 1), "end"]
    assert len(parts(tmp_path)) > 2


@pytest.mark.parametrize("keep", [1, 8, 9, 20, -2])
def test_a_line_cut_off_by_a_kill_is_told_of_in_its_place(tmp_path, clock, keep):
    path = tmp_path / "watch.jsonl"
    with Journal(path, now=clock) as journal:
        say(journal, 1)
        whole = path.stat().st_size
        journal.write("mark", 2, 0.2, {"n": 2, "name": "skjær"})
    cut = path.read_bytes()[whole:][:keep]
    os.truncate(path, whole + len(cut))
    with Journal(path, now=clock) as journal:
        say(journal, 3)
    assert told(path) == [1, "gap", 3]
    gap = lines_of(path)[1]
    assert (gap["lines_lost"], gap["sample"], gap["seconds"]) == (1, None, None)
    assert gap["cut_line"] == cut.decode("utf-8", "replace")


def test_a_line_that_lacks_only_its_end_is_kept(tmp_path, clock):
    path = tmp_path / "watch.jsonl"
    with Journal(path, now=clock) as journal:
        say(journal, 1, 2)
    os.truncate(path, path.stat().st_size - 1)
    with Journal(path, now=clock) as journal:
        say(journal, 3)
    assert told(path) == [1, 2, 3]


def test_a_journal_cut_off_in_its_first_line_is_still_a_journal(tmp_path, clock):
    path = tmp_path / "watch.jsonl"
    path.write_bytes(b'{"ki')
    with Journal(path, now=clock) as journal:
        say(journal, 1)
    assert told(path) == ["gap", 1]


def test_zero_bytes_left_by_a_power_cut_are_cleaned_away(tmp_path, clock):
    path = tmp_path / "watch.jsonl"
    with Journal(path, now=clock) as journal:
        say(journal, 1)
    with path.open("ab") as file:
        file.write(b'{"kind": "rea' + b"\0" * 4096)
    with Journal(path, now=clock) as journal:
        say(journal, 2)
    assert told(path) == [1, "gap", 2]
    assert lines_of(path)[1]["cut_line"] == '{"kind": "rea'
    assert b"\0" not in path.read_bytes()


def test_an_endless_last_line_is_only_ended(tmp_path):
    path = tmp_path / "lines"
    path.write_bytes(b"a\n" + b"x" * (1 << 20) + b"y")
    file = LineFile(path, mend=lambda fragment: b"mended\n")
    file.append(b"b\n")
    file.close()
    assert path.read_bytes() == b"a\n" + b"x" * (1 << 20) + b"y\nb\n"
