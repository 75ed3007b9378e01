"""Names that cannot be opened, and options that no source can use."""

import io
import math
import os
import sys

import pytest

from monitor.errors import InputError
from monitor.sources import SampleOptions, open_source

CU8 = SampleOptions(rate_hz=1000.0, format="cu8")


def test_a_missing_file_is_named(tmp_path):
    with pytest.raises(InputError, match=r"tide\.wav: no such file"):
        open_source(str(tmp_path / "tide.wav"), CU8)
    (tmp_path / "file").write_bytes(b"x")
    with pytest.raises(InputError, match="no such file"):
        open_source(str(tmp_path / "file" / "below"), CU8)


def test_a_directory_is_refused(tmp_path):
    with pytest.raises(InputError, match="is a directory; name a recording in it"):
        open_source(str(tmp_path), CU8)
    (tmp_path / "x.sigmf").mkdir()
    with pytest.raises(InputError, match="is a directory"):
        open_source(str(tmp_path / "x.sigmf"), CU8)


@pytest.mark.parametrize("name", ["x.wav", "x.iq"])
def test_an_empty_file_is_refused(tmp_path, name):
    (tmp_path / name).touch()
    with pytest.raises(InputError, match="is empty"):
        open_source(str(tmp_path / name), CU8)


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="root may read everything")
@pytest.mark.parametrize("name", ["x.wav", "x.iq", "x.sigmf-meta", "x.sigmf"])
def test_a_file_without_permission_is_refused_with_the_systems_word(tmp_path, name):
    path = tmp_path / name
    path.write_bytes(b"RIFF" + bytes(100))
    path.chmod(0)
    with pytest.raises(InputError, match="cannot be read: Permission denied"):
        open_source(str(path), CU8 if name == "x.iq" else SampleOptions())


@pytest.mark.parametrize("name", ["x.iq", "x.wav"])
def test_an_error_of_the_system_is_one_line(tmp_path, monkeypatch, name):
    # stands for the permission test above where the tests run as root
    path = tmp_path / name
    path.write_bytes(bytes(100))

    def refuse(*_, **__):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("builtins.open", refuse)
    with pytest.raises(InputError, match=f"{name}: cannot be read: Permission denied"):
        open_source(str(path), CU8 if name == "x.iq" else SampleOptions())


@pytest.mark.parametrize("name", ["", "a\0b", "x" * 5000])
def test_what_is_no_file_name_is_refused(name):
    with pytest.raises(InputError):
        open_source(name, CU8)


def test_a_device_is_refused():
    with pytest.raises(InputError, match="is a device, not a recording; pipe its samples into '-'"):
        open_source(os.devnull, CU8)


def test_text_under_an_unknown_name_asks_for_a_format(tmp_path):
    path = tmp_path / "notes.txt"
    path.write_text("Water 2.41 m, falling.\n" * 10)
    with pytest.raises(InputError, match="no known sound file or SigMF recording; raw samples need --format"):
        open_source(str(path), SampleOptions())


@pytest.mark.parametrize("name", ["x.raw", "x.wav", "x"])
def test_anything_that_is_no_sound_file_is_raw_when_a_format_is_given(tmp_path, name):
    path = tmp_path / name
    path.write_bytes(bytes(range(100)))
    with open_source(str(path), CU8) as source:
        assert source.info.samples == 50
        assert source.info.format == "cu8"


@pytest.mark.parametrize(
    ("options", "text"),
    [
        (SampleOptions(rate_hz=0.0), r"--rate 0.0: must be above 0 Hz"),
        (SampleOptions(rate_hz=math.nan), "--rate nan"),
        (SampleOptions(rate_hz=math.inf), "--rate inf"),
        (SampleOptions(start_s=-1.0), r"--start -1\.0: must be 0 s or later"),
        (SampleOptions(start_s=math.nan), "--start nan"),
        (SampleOptions(duration_s=0.0), r"--duration 0\.0: must be above 0 s"),
        (SampleOptions(duration_s=-3.0), r"--duration -3\.0"),
        (SampleOptions(duration_s=math.inf), "--duration inf"),
        (SampleOptions(channels=(0,)), "--channels 0: channels count from 1"),
        (SampleOptions(channels=()), "--channels : channels count from 1"),
        (SampleOptions(channels=(2, 2)), "--channels 2,2: give one channel, or two different ones"),
        (SampleOptions(channels=(1, 2, 3)), "--channels 1,2,3: give one channel, or two"),
        (SampleOptions(format="wav"), "unknown sample format 'wav'"),
    ],
)
def test_options_out_of_range_are_refused_for_any_source(options, text):
    with pytest.raises(InputError, match=text):
        open_source("-", options, io.BytesIO())


def test_standard_input_needs_format_and_rate():
    with pytest.raises(InputError, match=r"standard input: raw samples need --format NAME .* and --rate HZ"):
        open_source("-", SampleOptions(), io.BytesIO())
    with pytest.raises(InputError, match="standard input: no sample rate is known; give --rate HZ"):
        open_source("-", SampleOptions(format="cu8"), io.BytesIO())


def test_a_start_too_far_for_any_index_is_refused():
    with pytest.raises(InputError, match="too far"):
        open_source("-", SampleOptions(rate_hz=1e308, format="cu8", start_s=1e308), io.BytesIO())


def test_standard_input_that_is_closed_or_a_terminal_is_refused(monkeypatch):
    monkeypatch.setattr(sys, "stdin", None)
    with pytest.raises(InputError, match="standard input: is closed"):
        open_source("-", CU8)
    if hasattr(os, "openpty"):
        controller, terminal = os.openpty()
        with os.fdopen(terminal) as stdin:
            monkeypatch.setattr(sys, "stdin", stdin)
            with pytest.raises(InputError, match="standard input: is a terminal"):
                open_source("-", CU8)
        os.close(controller)


def test_standard_input_of_the_process_is_taken_when_none_is_handed_in(monkeypatch):
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(bytes(20))))
    with open_source("-", CU8) as source:
        assert sum(block.samples.size for block in source.blocks()) == 10
    assert source.info.uri == "-"
