"""Captures of alarms: SigMF recordings and pictures, checked by the sigmf library and opened again."""

import os
import threading
from datetime import UTC, datetime, timedelta
from types import SimpleNamespace

import numpy as np
import pytest
import sigmf

from dsp.block import Block
from monitor import capture as capture_module
from monitor.capture import Capture, Recent
from monitor.errors import InputError
from monitor.snapshot import Snapshot
from tests.monitor.recordings import QPSK, RATE, run_program, strict_json
from tests.monitor.watched import Watched, rules, stretches

NOW = datetime(2031, 5, 4, 12, 0, 0, tzinfo=UTC)
RAISED = {"kind": "alarm", "state": "raised", "severity": "high", "rule": "snr_db < 18", "limit": 18.0, "unit": "dB"}


@pytest.fixture
def capturing(tmp_path):
    """Makes captures that are closed at the end, their threads gone; ``said`` holds their notices."""
    made, said = [], []

    def make(**more):
        more.setdefault("now", lambda: NOW)
        capture = Capture(more.pop("folder", tmp_path / "captures"), tell=said.append, **more)
        made.append(capture)
        return capture

    yield SimpleNamespace(make=make, said=said, folder=tmp_path / "captures")
    for capture in made:
        capture.close()
        assert not capture._thread.is_alive()


def ramp(n, start=0):
    return np.arange(start, start + n, dtype=np.float32).astype(np.complex64)


def alarm(sample, rate=1000.0, **more):
    return {**RAISED, "sample": sample, "seconds": sample / rate, "value": 12.3, **more}


def metas(folder):
    return sorted(folder.glob("*.sigmf-meta"))


def opened(path):
    """A recording as the sigmf library opens and validates it, hash included."""
    recording = sigmf.sigmffile.fromfile(str(path))
    recording.validate()
    return recording


def test_the_samples_around_an_alarm_are_a_valid_recording_with_the_alarm_annotated(capturing):
    capture = capturing.make(before_s=0.5, after_s=0.25)
    capture.describe(1000.0, complex_in=True, centre_hz=169.4e6)
    capture.block(Block(ramp(2000), 0))
    capture.take(alarm(1900), b"")
    capture.block(Block(ramp(3000, 2000), 2000))
    capture.close()
    (path,) = metas(capturing.folder)
    recording = opened(path)
    np.testing.assert_array_equal(recording.read_samples(), ramp(750, 1400))
    assert recording.get_global_field("core:datatype") == "cf32_le"
    assert recording.get_global_field("core:sample_rate") == 1000.0
    (piece,) = recording.get_captures()
    assert piece["core:global_index"] == 1400
    assert piece["core:frequency"] == 169.4e6
    # sample 2000 came at NOW
    when = datetime.fromisoformat(piece["core:datetime"])
    assert when == NOW - timedelta(seconds=0.6)
    (note,) = recording.get_annotations()
    assert (note["core:sample_start"], note["core:sample_count"]) == (500, 250)
    assert note["core:label"] == "snr_db < 18"
    assert "12.3 dB, limit 18 dB" in note["core:comment"]
    assert (capture.saved, capture.missed, capturing.said) == (1, 0, [])


def test_real_samples_are_rf32_and_a_gap_begins_a_new_piece(capturing):
    capture = capturing.make(before_s=1.0, after_s=0.0)
    capture.describe(1000.0, complex_in=False, centre_hz=None)
    capture.block(Block(np.arange(800, dtype=np.float32), 0))
    capture.block(Block(np.arange(1000, 1500, dtype=np.float32), 1000, lost=200))
    capture.take(alarm(1500), b"")
    capture.close()
    recording = opened(metas(capturing.folder)[0])
    np.testing.assert_array_equal(recording.read_samples(), [*range(500, 800), *range(1000, 1500)])
    assert recording.get_global_field("core:datatype") == "rf32_le"
    pieces = [(p["core:sample_start"], p["core:global_index"]) for p in recording.get_captures()]
    assert pieces == [(0, 500), (300, 1000)]
    assert all("core:frequency" not in p for p in recording.get_captures())


def test_alarms_at_one_moment_share_a_capture_and_later_ones_have_their_own(capturing):
    capture = capturing.make(before_s=0.5, after_s=0.5)
    capture.describe(1000.0, complex_in=True, centre_hz=None)
    capture.block(Block(ramp(2000), 0))
    capture.take(alarm(1990), b"")
    capture.take(alarm(1985, rule="lock lost", severity="high", value=None, limit=None, unit=""), b"")
    capture.block(Block(ramp(200, 2000), 2000))
    capture.take(alarm(2200, rule="opening_pct < 40"), b"")
    capture.take({**alarm(2210), "state": "cleared"}, b"")
    capture.block(Block(ramp(2000, 2200), 2200))
    capture.close()
    first, second = (opened(path) for path in metas(capturing.folder))
    labels = {note["core:label"]: note for note in first.get_annotations()}
    assert set(labels) == {"snr_db < 18", "lock lost", "opening_pct < 40"}
    assert labels["snr_db < 18"]["core:sample_count"] == 220
    assert [note["core:label"] for note in second.get_annotations()] == ["opening_pct < 40"]


def test_an_alarm_without_samples_behind_it_is_saved_at_the_end(capturing):
    capture = capturing.make()
    capture.describe(1000.0, complex_in=True, centre_hz=None)
    capture.block(Block(ramp(3000), 0))
    capture.take(alarm(3000, rule="no samples"), b"")
    assert metas(capturing.folder) == []
    capture.close()
    assert opened(metas(capturing.folder)[0]).sample_count == 2000


def test_before_there_are_samples_nothing_is_captured(capturing):
    capture = capturing.make()
    capture.take(alarm(0, rule="no samples"), b"")
    capture.close()
    assert list(capturing.folder.iterdir()) == []


def test_a_change_of_rate_ends_the_capture_that_waits(capturing):
    capture = capturing.make()
    capture.describe(1000.0, complex_in=True, centre_hz=None)
    capture.block(Block(ramp(3000), 0))
    capture.take(alarm(3000), b"")
    capture.describe(2000.0, complex_in=True, centre_hz=None)
    capture.block(Block(ramp(100, 6000), 6000))
    capture.close()
    recording = opened(metas(capturing.folder)[0])
    assert recording.get_global_field("core:sample_rate") == 1000.0
    assert recording.sample_count == 2000


def test_no_more_captures_than_allowed_and_one_notice_of_it(capturing):
    capture = capturing.make(before_s=0.1, after_s=0.0, most=2)
    capture.describe(1000.0, complex_in=True, centre_hz=None)
    for start in range(0, 5000, 1000):
        capture.block(Block(ramp(1000, start), start))
        capture.take(alarm(start + 1000), b"")
    capture.close()
    assert len(metas(capturing.folder)) == 2
    assert capturing.said == ["no more captures: there are 2; --capture-most allows more"]


def test_what_would_not_fit_is_cut_with_a_note(capturing, monkeypatch):
    monkeypatch.setattr(capture_module, "MOST_BYTES", 8 * 1000)
    capture = capturing.make(before_s=3.0, after_s=1.0)
    capture.describe(1000.0, complex_in=True, centre_hz=None)
    capture.block(Block(ramp(5000), 0))
    capture.take(alarm(5000), b"")
    capture.block(Block(ramp(5000, 5000), 5000))
    capture.close()
    assert "cut to 0.75 s before and 0.25 s after" in capturing.said[0]
    recording = opened(metas(capturing.folder)[0])
    assert recording.sample_count == 1000
    assert "0.75 s before" in recording.get_global_field("core:description")


def test_a_disk_that_cannot_keep_up_loses_captures_and_never_waits(capturing, monkeypatch):
    monkeypatch.setattr(capture_module, "MOST_BYTES", 16 * 1000)
    go, begun = threading.Event(), threading.Event()
    write = Capture._write

    def slow(self, job, made):
        begun.set()
        assert go.wait(10)
        write(self, job, made)

    monkeypatch.setattr(Capture, "_write", slow)
    capture = capturing.make(before_s=1.0, after_s=0.0)
    capture.describe(1000.0, complex_in=True, centre_hz=None)
    for number in range(5):
        capture.block(Block(ramp(1000, 1000 * number), 1000 * number))
        capture.take(alarm(1000 * (number + 1)), b"")
        if number == 0:
            assert begun.wait(10)
    go.set()
    capture.close()
    # one being written, two in the queue, two too many
    assert (capture.saved, capture.missed) == (3, 2)
    assert capturing.said == [
        "capture not saved: the disk is too slow",
        "capture not saved (2 so far): the disk is too slow",
    ]


def test_a_full_disk_is_a_notice_leaves_no_half_capture_and_is_over_when_there_is_room(capturing, monkeypatch):
    capture = capturing.make(before_s=0.5, after_s=0.0)
    capture.describe(1000.0, complex_in=True, centre_hz=None)
    done = threading.Semaphore(0)
    real, full = capture_module._write_meta, [True]

    def write_meta(job, stem, *, timed):
        try:
            if full.pop() if full else False:
                raise OSError(28, os.strerror(28))
            real(job, stem, timed=timed)
        finally:
            done.release()

    monkeypatch.setattr(capture_module, "_write_meta", write_meta)
    capture.block(Block(ramp(1000), 0))
    capture.take(alarm(1000), b"")
    assert done.acquire(timeout=10)
    capture.block(Block(ramp(1000, 1000), 1000))
    capture.take(alarm(2000), b"")
    capture.close()
    assert capturing.said == ["capture not saved: No space left on device"]
    assert len(list(capturing.folder.iterdir())) == 2
    assert opened(metas(capturing.folder)[0]).sample_count == 500


def test_a_folder_that_goes_away_is_made_again(capturing):
    capture = capturing.make(before_s=0.5, after_s=0.0)
    capturing.folder.rmdir()
    capture.describe(1000.0, complex_in=True, centre_hz=None)
    capture.block(Block(ramp(1000), 0))
    capture.take(alarm(1000), b"")
    capture.close()
    assert len(metas(capturing.folder)) == 1


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write everywhere")
def test_a_folder_that_may_not_be_written_is_a_notice(capturing, tmp_path):
    (tmp_path / "captures").mkdir(mode=0o500)
    capture = capturing.make(before_s=0.5, after_s=0.0)
    capture.describe(1000.0, complex_in=True, centre_hz=None)
    capture.block(Block(ramp(1000), 0))
    capture.take(alarm(1000), b"")
    capture.close()
    assert capturing.said == ["capture not saved: Permission denied"]


def test_a_folder_that_cannot_be_is_refused(capturing, tmp_path):
    (tmp_path / "file").write_text("x")
    with pytest.raises(InputError, match="is a file"):
        capturing.make(folder=tmp_path / "file")
    with pytest.raises(InputError, match="there is no folder"):
        capturing.make(folder=tmp_path / "no" / "such")
    with pytest.raises(InputError, match="a capture of no samples"):
        capturing.make(before_s=0.0, after_s=0.0)
    with pytest.raises(InputError, match="at most 3600 s"):
        capturing.make(before_s=3600.0, after_s=1.0)


def test_two_captures_of_one_second_do_not_write_over_each_other(capturing):
    for _ in range(2):
        capture = capturing.make(before_s=0.5, after_s=0.0)
        capture.describe(1000.0, complex_in=True, centre_hz=None)
        capture.block(Block(ramp(1000), 0))
        capture.take(alarm(1000), b"")
        capture.close()
    assert len(metas(capturing.folder)) == 2


def test_the_picture_is_the_state_when_the_alarm_was_raised(capturing):
    from PySide6.QtGui import QImage

    capture = capturing.make(before_s=0.5, after_s=0.0)
    capture.picture = lambda: Snapshot(source_text="west", lock_text="no lock: noise")
    capture.describe(1000.0, complex_in=True, centre_hz=None)
    capture.block(Block(ramp(1000), 0))
    capture.take(alarm(1000), b"")
    capture.close()
    (path,) = capturing.folder.glob("*.png")
    assert path.stem == metas(capturing.folder)[0].stem
    image = QImage(str(path))
    assert (image.width(), image.height()) == (1280, 800)


def test_recent_samples_are_the_newest_of_a_stream_cut_anyhow():
    rng = np.random.default_rng(5)
    recent = Recent(1000, complex_samples=False)
    kept = {}
    position = 0
    for _ in range(300):
        position += int(rng.integers(0, 3) == 0) * int(rng.integers(1, 400))
        size = int(rng.integers(1, 300))
        recent.add(Block(np.arange(position, position + size, dtype=np.float32), position))
        for index in range(position, position + size):
            kept[index] = True
        position += size
        newest = sorted(kept)[-1000:]
        first, last = position - int(rng.integers(1, 1500)), position - int(rng.integers(0, 100))
        expected = [index for index in newest if first <= index < last]
        pieces = recent.cut(first, last)
        assert [int(x) for _, samples in pieces for x in samples] == expected
        assert all(samples[0] == start for start, samples in pieces)


def test_an_engines_alarm_is_captured_and_replays_to_what_raised_it(capturing, tmp_path):
    capture = capturing.make(before_s=0.5, after_s=0.5, now=None)
    capture.describe(RATE, complex_in=True, centre_hz=None)
    watched = Watched(rules=rules("snr_db < 18", hold_s=0.2), window=2400, tap=capture)
    write = watched.engine._line

    def line(kind, sample, seconds, fields):
        write(kind, sample, seconds, fields)
        capture.take({"kind": kind, "sample": sample, "seconds": seconds, **fields}, b"")

    watched.engine._line = line
    samples = stretches(25.0, 12.0, 12.0)
    watched.feed(samples).finish()
    capture.close()
    ((_, raised, _, _),) = watched.of("alarm", state="raised")
    (path,) = metas(capturing.folder)
    recording = opened(path)
    (piece,) = recording.get_captures()
    assert "core:datetime" not in piece
    assert piece["core:global_index"] == raised - 24_000
    np.testing.assert_array_equal(recording.read_samples(), samples[raised - 24_000 : raised + 24_000])
    status, out, err = run_program("replay", str(path), *QPSK, "--json")
    assert (status, err) == (0, "")
    assert strict_json(out)["reading"]["snr_db"] == pytest.approx(12.0, abs=3.0)
