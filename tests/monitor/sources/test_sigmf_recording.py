"""SigMF recordings, written and read on the other side by the standard's own library where it can."""

import io
import json
import re
import tarfile

import numpy as np
import pytest
import sigmf
import sigmf.schema

from monitor.errors import InputError
from monitor.sources import SampleOptions, open_source
from monitor.sources.formats import DATATYPES, parse_datatype

PLAIN = SampleOptions()
RATE = 48_000


def read(path, options=PLAIN, **more):
    with open_source(str(path), options, **more) as source:
        blocks = list(source.blocks())
    kind = np.complex64 if source.info.complex_samples else np.float32
    return np.concatenate([np.zeros(0, kind), *(block.samples for block in blocks)]), blocks, source


def record(folder, content, *, name="skerry", captures=({"core:sample_start": 0},), **about):
    """Write a pair by hand; keywords are keys of the global object without ``core:``, ``None`` to leave one out."""
    fields = {"datatype": "ci16_le", "version": "1.2.6", "sample_rate": RATE, **about}
    meta = {
        "global": {f"core:{key}": value for key, value in fields.items() if value is not None},
        "captures": list(captures) if isinstance(captures, tuple) else captures,
        "annotations": [],
    }
    (folder / f"{name}.sigmf-data").write_bytes(content)
    path = folder / f"{name}.sigmf-meta"
    path.write_text(json.dumps(meta), encoding="utf-8")
    return path


@pytest.fixture
def content():
    """1000 samples of ci16_le as bytes."""
    return np.random.default_rng(3).integers(-20_000, 20_000, 2000).astype("<i2").tobytes()


@pytest.fixture
def samples(content):
    return parse_datatype("ci16_le").decode(content).samples


def test_the_datatypes_are_those_of_the_standards_schema():
    pattern = sigmf.schema.get_schema()["properties"]["global"]["properties"]["core:datatype"]["pattern"]
    assert all(re.fullmatch(pattern, name) for name in DATATYPES)


@pytest.mark.parametrize("name", [name for name in DATATYPES if "64" not in name])
def test_a_pair_written_by_the_standards_library_reads_as_the_library_reads_it(tmp_path, name):
    form = parse_datatype(name)
    rng = np.random.default_rng(9)
    if form.kind == "f":
        data = rng.normal(size=1000).astype(">f4" if form.big_endian else "<f4").tobytes()
    else:
        data = rng.bytes(600 * form.bytes_per_sample)
    (tmp_path / "a.sigmf-data").write_bytes(data)
    theirs = sigmf.SigMFFile(
        data_file=tmp_path / "a.sigmf-data", global_info={"core:datatype": name, "core:sample_rate": RATE}
    )
    theirs.add_capture(0, metadata={"core:frequency": 433.92e6})
    theirs.tofile(tmp_path / "a.sigmf-meta")
    got, _, source = read(tmp_path / "a.sigmf-meta")
    expected = sigmf.fromfile(tmp_path / "a.sigmf-meta").read_samples()
    np.testing.assert_allclose(got, expected, rtol=0, atol=2**-23 if form.bits == 32 and form.kind != "f" else 0)
    info = source.info
    assert (info.format, info.sample_rate_hz, info.centre_hz) == (name, 48_000.0, 433.92e6)
    assert (info.samples, info.notes) == (got.size, ())


def test_an_archive_of_the_standards_library_is_read_in_place(tmp_path, content, samples):
    path = record(tmp_path, content)
    sigmf.fromfile(path).archive(str(tmp_path / "packed.sigmf"))
    for name in ("packed.sigmf", "packed"):
        got, _, source = read(tmp_path / name, SampleOptions(start_s=0.005), block_samples=100)
        np.testing.assert_array_equal(got, samples[240:])
        assert source.info.uri == str(tmp_path / name)


@pytest.mark.parametrize("name", ["skerry.sigmf-meta", "skerry.sigmf-data", "skerry"])
def test_a_pair_opens_by_either_name_and_by_the_stem(tmp_path, content, samples, name):
    record(tmp_path, content)
    got, _, source = read(tmp_path / name)
    np.testing.assert_array_equal(got, samples)
    assert source.info.uri == str(tmp_path / name)


def test_a_stem_that_is_also_a_directory_is_the_recording(tmp_path, content, samples):
    record(tmp_path, content)
    (tmp_path / "skerry").mkdir()
    np.testing.assert_array_equal(read(tmp_path / "skerry")[0], samples)


def test_channels_are_interleaved_and_chosen_as_in_sound_files(tmp_path):
    frames = np.random.default_rng(4).integers(-20_000, 20_000, (500, 3)).astype("<i2")
    path = record(tmp_path, frames.tobytes() + b"\x01\x02", datatype="ri16_le", num_channels=3)
    real, _, source = read(path, SampleOptions(channels=(2,)), block_samples=70)
    np.testing.assert_array_equal(real, frames[:, 1] / np.float32(32768))
    assert source.info.notes == ("left out 2 bytes at the end: not a whole sample",)
    pair, _, source = read(path, SampleOptions(channels=(3, 1), iq=True), block_samples=70)
    np.testing.assert_array_equal(pair, (frames[:, 2] + 1j * frames[:, 0]) / np.float32(32768))
    assert (source.info.format, source.info.samples) == ("ci16_le", 500)
    with pytest.raises(InputError, match="3 channels; choose one with --channels, or say --iq"):
        open_source(str(path), PLAIN)


def test_one_of_several_complex_channels_is_chosen(tmp_path):
    frames = np.random.default_rng(4).normal(size=(500, 2, 2)).astype("<f8")
    path = record(tmp_path, frames.tobytes(), datatype="cf64_le", num_channels=2)
    got, _, _ = read(path, SampleOptions(channels=(2,), iq=True))
    np.testing.assert_array_equal(got, (frames[:, 1, 0] + 1j * frames[:, 1, 1]).astype(np.complex64))
    with pytest.raises(InputError, match=r"2 channels; choose one with --channels$"):
        open_source(str(path), SampleOptions(iq=True))


def test_several_captures_are_one_stream_with_the_first_frequency_and_a_note_of_the_change(tmp_path, content, samples):
    captures = (
        {"core:sample_start": 10, "core:frequency": 868.3e6},
        {"core:sample_start": 600, "core:frequency": 869.1e6},
    )
    got, blocks, source = read(record(tmp_path, content, captures=captures))
    np.testing.assert_array_equal(got, samples)
    assert [block.start for block in blocks] == [0]
    assert source.info.centre_hz == 868.3e6
    assert source.info.notes == ("core:frequency changes between captures; the first, 868300000 Hz, is used",)


def test_header_and_trailing_bytes_are_left_out(tmp_path, content, samples):
    # the example under core:header_bytes in the SigMF schema: cu8, two chunks of which the first has 500 samples
    data = b"HEAD" + content[:2000] + b"TAIL" + content[2000:] + b"the end"
    captures = (
        {"core:sample_start": 0, "core:header_bytes": 4},
        {"core:sample_start": 500, "core:header_bytes": 4},
    )
    path = record(tmp_path, b"", captures=captures, trailing_bytes=7, dataset="tide.dat")
    (tmp_path / "skerry.sigmf-data").unlink()
    (tmp_path / "tide.dat").write_bytes(data)
    got, blocks, source = read(path)
    np.testing.assert_array_equal(got, samples)
    assert [(block.start, block.lost, block.samples.size) for block in blocks] == [(0, 0, 500), (500, 0, 500)]
    assert source.info.notes == ()
    np.testing.assert_array_equal(read(path, SampleOptions(start_s=700 / RATE))[0], samples[700:])


def test_samples_missing_by_the_global_index_are_lost_and_keep_the_time(tmp_path, content, samples):
    captures = (
        {"core:sample_start": 0, "core:global_index": 5000},
        {"core:sample_start": 400, "core:global_index": 5460},
        {"core:sample_start": 800, "core:global_index": 5800},
    )
    path = record(tmp_path, content, captures=captures)
    got, blocks, source = read(path)
    np.testing.assert_array_equal(got, samples)
    assert [(block.start, block.lost, block.samples.size) for block in blocks] == [(0, 0, 400), (460, 60, 600)]
    assert source.info.notes == (
        "60 samples are missing before sample 400 (core:global_index)",
        "core:global_index of capture 2 goes back; ignored",
    )
    got, blocks, _ = read(path, SampleOptions(start_s=430 / RATE, duration_s=40 / RATE))
    np.testing.assert_array_equal(got, samples[400:410])
    assert (blocks[0].start, blocks[0].lost) == (460, 0)
    with pytest.raises(InputError, match="fall into a gap"):
        open_source(str(path), SampleOptions(start_s=410 / RATE, duration_s=40 / RATE))


def test_captures_that_lead_beyond_the_data_are_noted(tmp_path, content, samples):
    captures = ({"core:sample_start": 0}, {"core:sample_start": 1500})
    got, _, source = read(record(tmp_path, content, captures=captures))
    np.testing.assert_array_equal(got, samples)
    assert source.info.notes == ("cut short: the captures lead to sample 1500, the data end after 1000",)


@pytest.mark.parametrize(
    ("change", "note"),
    [
        ({"sample_rate": "48000"}, "core:sample_rate is text; taken as 48000"),
        ({"datatype": "ci16"}, "core:datatype 'ci16' is taken as ci16_le"),
        ({"num_channels": True}, "core:num_channels is not a number and was ignored"),
        ({"num_channels": -1}, "core:num_channels -1 is not a whole number from 0 up and was ignored"),
        ({"trailing_bytes": 0.5}, "core:trailing_bytes 0.5 is not a whole number from 0 up and was ignored"),
        ({"captures": None}, "the metadata have no list of captures; one from sample 0 is assumed"),
        ({"captures": ({},)}, "capture 0 has no core:sample_start; 0 is assumed"),
        ({"captures": ({"core:sample_start": 0}, {})}, "capture 1 has no core:sample_start; left out"),
        ({"captures": (7, {"core:sample_start": 0})}, "capture 0 is not an object and was left out"),
        (
            {"captures": ({"core:sample_start": 10}, {"core:sample_start": 0})},
            "the captures are not in order of core:sample_start; they were sorted",
        ),
        (
            {"captures": ({"core:sample_start": 0, "core:frequency": "high"},)},
            "core:frequency is not a number and was ignored",
        ),
    ],
)
def test_small_faults_of_the_metadata_are_noted_and_the_samples_measured(tmp_path, content, samples, change, note):
    got, _, source = read(record(tmp_path, content, **change))
    np.testing.assert_array_equal(got, samples)
    assert source.info.notes == (note,)


@pytest.mark.parametrize("captures", [(), ({"core:sample_start": 0},)])
def test_metadata_with_a_byte_order_mark_or_without_version_are_read(tmp_path, content, samples, captures):
    path = record(tmp_path, content, captures=captures, version=None)
    path.write_bytes(b"\xef\xbb\xbf" + path.read_bytes())
    got, _, source = read(path)
    np.testing.assert_array_equal(got, samples)
    assert source.info.notes == ()


def test_options_win_over_the_metadata_with_a_note(tmp_path, content):
    path = record(tmp_path, content)
    _, _, source = read(path, SampleOptions(rate_hz=1000.0, format="ci16_be"))
    assert (source.info.sample_rate_hz, source.info.format) == (1000.0, "ci16_be")
    assert source.info.notes == (
        "core:datatype is ci16_le; --format ci16_be is used",
        "the file says 48000 Hz; --rate 1000 is used",
    )


def test_what_the_metadata_lack_the_options_give(tmp_path, content, samples):
    path = record(tmp_path, content, sample_rate=None, datatype=None)
    got, _, source = read(path, SampleOptions(rate_hz=1000.0, format="ci16"))
    np.testing.assert_array_equal(got, samples)
    assert source.info.notes == ("core:datatype is missing; --format ci16_le is used",)


@pytest.mark.parametrize(
    ("change", "text"),
    [
        ({"sample_rate": None}, "no sample rate is known; give --rate HZ"),
        ({"datatype": None}, r"core:datatype is missing; give --format NAME"),
        ({"datatype": "ci12_le"}, r"core:datatype: unknown sample format 'ci12_le'; legal are"),
        ({"datatype": 16}, r"core:datatype: unknown sample format '16'"),
        ({"dataset": "../other.dat"}, "must be a file name in the same directory"),
    ],
)
def test_metadata_that_leave_the_samples_unknown_are_refused_with_the_mend(tmp_path, content, change, text):
    with pytest.raises(InputError, match=text):
        open_source(str(record(tmp_path, content, **change)), PLAIN)


@pytest.mark.parametrize("rate", [0, -5, float("nan"), float("inf")])
def test_an_impossible_rate_counts_as_none(tmp_path, content, rate):
    with pytest.raises(InputError, match="no sample rate is known"):
        open_source(str(record(tmp_path, content, sample_rate=rate)), PLAIN)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (b'{"global": {', "not JSON: .* at line 1, column 13"),
        (b"", "not JSON"),
        (b"[1, 2]", "there is no object 'global'"),
        (b'{"global": 3}', "there is no object 'global'"),
        (b'{"global": {"core:description": "\xff"}}', "not UTF-8 text"),
        (b"[" * 100_000, "not usable JSON"),
        (b'{"global": {"core:sample_rate": ' + b"9" * 5000 + b"}}", "not usable JSON"),
    ],
    ids=["broken", "empty", "list", "number", "bytes", "deep", "digits"],
)
def test_broken_metadata_are_refused_on_one_line(tmp_path, text, message):
    path = tmp_path / "x.sigmf-meta"
    path.write_bytes(text)
    (tmp_path / "x.sigmf-data").write_bytes(bytes(100))
    with pytest.raises(InputError, match=message):
        open_source(str(path), PLAIN)


def test_missing_halves_are_named(tmp_path, content, samples):
    path = record(tmp_path, content)
    data = tmp_path / "skerry.sigmf-data"
    data.rename(tmp_path / "kept")
    for name in (path, data, tmp_path / "skerry"):
        with pytest.raises(InputError, match=r"its data file .*skerry\.sigmf-data is missing; put it beside"):
            open_source(str(name), PLAIN)
    path.unlink()
    for name in (path, data, tmp_path / "skerry", tmp_path / "skerry.sigmf"):
        with pytest.raises(InputError, match="no such file"):
            open_source(str(name), PLAIN)
    (tmp_path / "kept").rename(data)
    for name in (data, tmp_path / "skerry"):
        with pytest.raises(InputError, match=r"skerry\.sigmf-meta: is missing; without it give --format and --rate"):
            open_source(str(name), PLAIN)
    np.testing.assert_array_equal(read(data, SampleOptions(8000.0, "ci16"))[0], samples)


def test_a_missing_dataset_and_metadata_without_samples_are_told_apart(tmp_path):
    path = record(tmp_path, b"", dataset="tide.dat")
    (tmp_path / "skerry.sigmf-data").unlink()
    with pytest.raises(InputError, match=r"its data file .*tide\.dat is missing"):
        open_source(str(path), PLAIN)
    path = record(tmp_path, b"", metadata_only=True)
    (tmp_path / "skerry.sigmf-data").unlink()
    with pytest.raises(InputError, match="metadata only, as it says"):
        open_source(str(path), PLAIN)


@pytest.mark.parametrize(("data", "text"), [(b"", "has no samples"), (b"abc", "holds no whole sample")])
def test_a_recording_without_a_whole_sample_is_refused(tmp_path, data, text):
    with pytest.raises(InputError, match=text):
        open_source(str(record(tmp_path, data)), PLAIN)


def test_a_collection_is_refused(tmp_path):
    path = tmp_path / "x.sigmf-collection"
    path.write_text("{}")
    with pytest.raises(InputError, match="a collection names recordings"):
        open_source(str(path), PLAIN)


def pack(path, members, mode="w"):
    with tarfile.open(path, mode) as archive:
        for name, data in members:
            member = tarfile.TarInfo(name)
            member.size = len(data)
            archive.addfile(member, io.BytesIO(data))


def test_an_archive_cut_off_in_its_data_gives_what_is_there(tmp_path, content, samples):
    meta = record(tmp_path, content).read_bytes()
    path = tmp_path / "cut.sigmf"
    pack(path, [("skerry.sigmf-meta", meta), ("skerry.sigmf-data", content)])
    whole = path.read_bytes()
    start = whole.index(content[:100])
    path.write_bytes(whole[: start + 2002])
    got, _, source = read(path)
    np.testing.assert_array_equal(got, samples[:500])
    assert source.info.notes == (
        "cut short: the archive announces 4000 bytes of samples, there are 2002; what is there is measured",
        "left out 2 bytes at the end: not a whole sample",
    )


@pytest.mark.parametrize(
    ("members", "text"),
    [
        ([("a.sigmf-data", b"abcd")], "holds no .sigmf-meta file"),
        ([("a.sigmf-meta", b"{}")], "its data file is not in the archive"),
        ([("a.sigmf-meta", b"{}"), ("b.sigmf-data", b"abcd")], "its data file is not in the archive"),
    ],
)
def test_an_archive_without_both_halves_is_refused(tmp_path, members, text):
    path = tmp_path / "x.sigmf"
    pack(path, members)
    with pytest.raises(InputError, match=text):
        open_source(str(path), PLAIN)


def test_what_is_no_plain_tar_is_no_archive(tmp_path, content):
    path = tmp_path / "x.sigmf"
    for data in (b"", b"Water 2.41 m, falling.\n" * 100, np.random.default_rng(1).bytes(3000)):
        path.write_bytes(data)
        with pytest.raises(InputError, match=r"x\.sigmf: (not a plain tar archive|holds no)"):
            open_source(str(path), PLAIN)
    pack(path, [("a.sigmf-meta", b"{}"), ("a.sigmf-data", content)], "w:gz")
    with pytest.raises(InputError, match="unpack it if it is compressed"):
        open_source(str(path), PLAIN)


def test_reading_a_recording_does_not_load_the_standards_library(tmp_path, content):
    import subprocess
    import sys

    path = record(tmp_path, content)
    code = (
        "import sys; from monitor.sources import *; s = open_source(sys.argv[1], SampleOptions()); list(s.blocks()); "
        "s.close(); print([m for m in ('sigmf', 'soundfile', 'scipy', 'PySide6') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code, str(path)], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
