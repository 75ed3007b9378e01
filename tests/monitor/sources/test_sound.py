"""Sound files, written by libsndfile or byte by byte, against what was put in."""

import os
import struct
import tracemalloc
from itertools import pairwise

import numpy as np
import pytest
import soundfile

from monitor.errors import InputError
from monitor.sources import SampleOptions, open_source

PLAIN = SampleOptions()
RATE = 48000


def read(path, options=PLAIN, **more):
    """Open, read everything, close; return the samples, the blocks and the source."""
    with open_source(str(path), options, **more) as source:
        blocks = list(source.blocks())
    kind = np.complex64 if source.info.complex_samples else np.float32
    for before, after in pairwise(blocks):
        assert after.start == before.start + before.samples.size
    assert all(block.samples.dtype == kind and block.samples.flags.c_contiguous for block in blocks)
    return np.concatenate([np.zeros(0, kind), *(block.samples for block in blocks)]), blocks, source


def codes(bits, shape=(5000,)):
    """Random integer codes of the given width, well inside the end stops."""
    limit = (1 << (bits - 1)) // 2
    return np.random.default_rng(bits).integers(-limit, limit, shape)


def riff(fmt_tag, channels, bits, data, *, claimed=None, rate=RATE):
    """The bytes of a WAV file, from the RIFF/WAVE layout: fmt tag 1 is PCM, 3 IEEE float; 8 bits are unsigned."""
    width = bits // 8 * channels
    fmt = struct.pack("<HHIIHH", fmt_tag, channels, rate, rate * width, width, bits)
    size = len(data) if claimed is None else claimed
    body = b"WAVEfmt " + struct.pack("<I", len(fmt)) + fmt + b"data" + struct.pack("<I", size) + data
    return b"RIFF" + struct.pack("<I", min(0xFFFFFFFF, 36 + size)) + body


@pytest.mark.parametrize(
    ("kind", "subtype", "bits"),
    [
        ("WAV", "PCM_16", 16),
        ("WAV", "PCM_24", 24),
        ("WAV", "PCM_32", 32),
        ("WAV", "PCM_U8", 8),
        ("FLAC", "PCM_S8", 8),
        ("FLAC", "PCM_16", 16),
        ("FLAC", "PCM_24", 24),
        ("AIFF", "PCM_S8", 8),
        ("AIFF", "PCM_16", 16),
        ("AIFF", "PCM_24", 24),
        ("RF64", "PCM_16", 16),
        ("W64", "PCM_24", 24),
        ("AU", "PCM_16", 16),
        ("CAF", "PCM_32", 32),
    ],
)
def test_integer_sound_files_are_exact_with_full_scale_one(tmp_path, kind, subtype, bits):
    numbers = codes(bits)
    path = tmp_path / f"gauge.{kind.lower()}"
    soundfile.write(path, (numbers << (32 - bits)).astype(np.int32), RATE, subtype=subtype, format=kind)
    samples, blocks, source = read(path, block_samples=777)
    np.testing.assert_array_equal(samples, (numbers / 2.0 ** (bits - 1)).astype(np.float32))
    assert sum(block.clipped for block in blocks) == 0
    assert source.info.format == f"{kind} {subtype}"
    assert (source.info.sample_rate_hz, source.info.samples) == (48000.0, 5000)
    assert source.info.notes == ()
    assert source.notes == []


@pytest.mark.parametrize("subtype", ["FLOAT", "DOUBLE"])
def test_float_sound_files_are_taken_as_they_are_with_bad_samples_counted(tmp_path, subtype):
    values = np.array([0.25, np.nan, 1.0, 3.5, -np.inf, -1.0, 1e300 if subtype == "DOUBLE" else np.inf])
    path = tmp_path / "x.wav"
    dtype = np.float64 if subtype == "DOUBLE" else np.float32
    soundfile.write(path, values.astype(dtype), RATE, subtype=subtype)
    samples, blocks, _ = read(path)
    np.testing.assert_array_equal(samples, np.array([0.25, 0, 1.0, 3.5, 0, -1.0, 0], np.float32))
    assert [(block.clipped, block.nonfinite) for block in blocks] == [(2, 3)]


@pytest.mark.parametrize(
    ("bits", "data", "clipped"),
    [
        (16, struct.pack("<6h", 32767, -32768, -32767, 32766, -32766, 0), 3),
        (8, bytes([0, 1, 254, 255, 128, 127]), 2),
        (24, bytes.fromhex("ffff7f 000080 010080 feff7f 020080 000000"), 3),
        (32, struct.pack("<6i", 2**31 - 1, -(2**31), 1 - 2**31, 2**31 - 2, 2 - 2**31, 0), 3),
    ],
)
def test_samples_at_the_end_stops_of_a_hand_made_wav_are_counted(tmp_path, bits, data, clipped):
    path = tmp_path / "x.wav"
    path.write_bytes(riff(1, 1, bits, data))
    samples, blocks, _ = read(path)
    assert blocks[0].clipped == clipped
    assert samples[-1] == (-1 / 128 if bits == 8 else 0)
    assert np.abs(samples).max() <= 1


def test_a_complex_sample_is_clipped_once_if_either_part_is(tmp_path):
    path = tmp_path / "x.wav"
    path.write_bytes(riff(1, 2, 16, struct.pack("<8h", 32767, -32768, 5, 32767, -32767, 5, 5, 6)))
    _, blocks, _ = read(path, SampleOptions(iq=True))
    assert blocks[0].clipped == 3


@pytest.mark.parametrize("subtype", ["ULAW", "ALAW"])
def test_companded_samples_at_their_largest_magnitude_are_clipped(tmp_path, subtype):
    path = tmp_path / "x.wav"
    soundfile.write(path, np.array([1.0, -1.0, 0.5, 0.0]), RATE, subtype=subtype)
    samples, blocks, _ = read(path)
    assert blocks[0].clipped == 2
    np.testing.assert_allclose(samples, [0.98, -0.98, 0.5, 0], atol=0.02)


@pytest.mark.parametrize("subtype", ["PCM_16", "FLOAT", "DOUBLE"])
def test_two_channels_are_i_and_q_in_the_order_given(tmp_path, subtype):
    frames = codes(16, (3000, 4)) / 32768
    path = tmp_path / "x.wav"
    soundfile.write(path, frames, RATE, subtype=subtype)
    samples, _, source = read(path, SampleOptions(channels=(4, 2), iq=True), block_samples=1000)
    np.testing.assert_array_equal(samples, (frames[:, 3] + 1j * frames[:, 1]).astype(np.complex64))
    assert source.info.complex_samples
    samples, _, _ = read(path, SampleOptions(channels=(3,)), block_samples=1000)
    np.testing.assert_array_equal(samples, frames[:, 2].astype(np.float32))
    soundfile.write(path, frames[:, :2], RATE, subtype=subtype)
    samples, _, _ = read(path, SampleOptions(iq=True))
    np.testing.assert_array_equal(samples, (frames[:, 0] + 1j * frames[:, 1]).astype(np.complex64))


def test_blocks_stay_as_they_are_when_the_next_is_read(tmp_path):
    path = tmp_path / "x.wav"
    values = np.random.default_rng(1).uniform(-0.5, 0.5, 100).astype(np.float32)
    soundfile.write(path, values, RATE, subtype="FLOAT")
    with open_source(str(path), PLAIN, block_samples=10) as source:
        blocks = source.blocks()
        first = next(blocks)
        next(blocks)
        np.testing.assert_array_equal(first.samples, values[:10])


@pytest.mark.parametrize("kind", ["WAV", "FLAC", "AIFF", "RF64", "W64"])
def test_start_and_duration_reach_the_exact_sample_and_reading_can_be_repeated(tmp_path, kind):
    numbers = codes(16, (20_000,)).astype(np.int16)
    path = tmp_path / f"x.{kind.lower()}"
    soundfile.write(path, numbers, RATE, subtype="PCM_16", format=kind)
    with open_source(str(path), SampleOptions(start_s=0.25, duration_s=0.125), block_samples=999) as source:
        assert (source.info.start, source.info.samples) == (12_000, 6000)
        for _ in range(2):
            blocks = list(source.blocks())
            assert blocks[0].start == 12_000
            got = np.concatenate([block.samples for block in blocks])
            np.testing.assert_array_equal(got, numbers[12_000:18_000] / np.float32(32768))
    assert source.notes == []


@pytest.mark.parametrize("kind", ["WAV", "AIFF", "RF64", "W64", "AU"])
def test_a_header_that_claims_more_than_there_is_is_noted_and_the_rest_measured(tmp_path, kind):
    numbers = codes(16, (20_000, 2)).astype(np.int16)
    path = tmp_path / f"x.{kind.lower()}"
    soundfile.write(path, numbers, RATE, subtype="PCM_16", format=kind)
    os.truncate(path, 40_001)
    samples, _, source = read(path, SampleOptions(channels=(2,)))
    assert len(source.info.notes) == 1
    assert source.info.notes[0].startswith("cut short: the header announces ")
    assert 9900 < samples.size == source.info.samples < 10_000
    np.testing.assert_array_equal(samples, numbers[: samples.size, 1] / np.float32(32768))


@pytest.mark.parametrize("block_samples", [100, 1000, 4095, 65536])
def test_a_flac_file_cut_off_gives_all_that_can_be_decoded_and_a_note(tmp_path, block_samples):
    numbers = codes(16, (50_000,)).astype(np.int16)
    path = tmp_path / "x.flac"
    soundfile.write(path, numbers, RATE)
    os.truncate(path, os.path.getsize(path) // 2)
    samples, _, source = read(path, block_samples=block_samples)
    assert samples.size % 4096 == 0  # libsndfile writes FLAC frames of 4096 samples: every whole one is recovered
    assert 20_000 < samples.size < 26_000
    assert samples.size == read(path, block_samples=4096)[0].size
    np.testing.assert_array_equal(samples, numbers[: samples.size] / np.float32(32768))
    assert len(source.notes) == 1
    assert source.notes[0].startswith(("damaged after sample", "cut short: the header leads to sample 50000"))


def test_a_flac_file_damaged_in_the_middle_keeps_what_was_before_it(tmp_path):
    numbers = codes(16, (50_000,)).astype(np.int16)
    path = tmp_path / "x.flac"
    soundfile.write(path, numbers, RATE)
    content = bytearray(path.read_bytes())
    content[len(content) // 2 : len(content) // 2 + 400] = bytes(400)
    path.write_bytes(content)
    samples, _, source = read(path)
    assert samples.size > 15_000
    np.testing.assert_array_equal(samples, numbers[: samples.size] / np.float32(32768))
    assert "damaged after sample" in source.notes[0]


@pytest.mark.parametrize("claimed", [0xFFFFFFFF, 0x7FFFFFFF, 0xFFFFFFFF - 36])
def test_a_wav_header_written_to_a_pipe_is_read_to_the_end_of_the_file(tmp_path, claimed):
    path = tmp_path / "x.wav"
    path.write_bytes(riff(1, 1, 16, codes(16).astype("<i2").tobytes(), claimed=claimed))
    samples, _, source = read(path)
    np.testing.assert_array_equal(samples, codes(16) / 32768)
    assert source.info.notes == ("the header leaves the length open; the file is read to its end",)


def test_a_wav_header_that_claims_less_than_there_is_is_taken_at_its_word(tmp_path):
    path = tmp_path / "x.wav"
    path.write_bytes(riff(1, 1, 16, codes(16).astype("<i2").tobytes(), claimed=2000))
    assert read(path)[0].size == 1000


def test_an_explicit_rate_wins_over_the_header_with_a_note(tmp_path):
    path = tmp_path / "x.wav"
    soundfile.write(path, codes(16, (1000,)) / 32768, 44100)
    _, blocks, source = read(path, SampleOptions(rate_hz=10_000.0, start_s=0.05))
    assert source.info.sample_rate_hz == 10_000.0
    assert source.info.notes == ("the file says 44100 Hz; --rate 10000 is used",)
    assert blocks[0].start == 500
    assert read(path, SampleOptions(rate_hz=44100.0))[2].info.notes == ()


def test_lossy_files_open_too(tmp_path):
    path = tmp_path / "x.ogg"
    tone = 0.5 * np.sin(2 * np.pi * 1000 * np.arange(20_000) / RATE)
    soundfile.write(path, tone, RATE)
    samples, _, source = read(path)
    assert source.info.format == "OGG VORBIS"
    assert np.std(samples - tone) < 0.05


@pytest.mark.parametrize(
    ("channels", "options", "text"),
    [
        (2, PLAIN, "2 channels; choose one with --channels, or say --iq"),
        (4, SampleOptions(iq=True), "4 channels; name those of I and Q"),
        (1, SampleOptions(iq=True), "--iq needs two channels and there is one"),
        (2, SampleOptions(channels=(1, 2)), "two channels are two links; choose one, or add --iq"),
        (2, SampleOptions(channels=(2,), iq=True), "--iq needs two channels, such as"),
        (2, SampleOptions(channels=(3,)), "there is no channel 3; it has 2"),
        (1, SampleOptions(start_s=1.0), "--start 1 s is beyond the end; the recording lasts 0.1"),
        (1, SampleOptions(rate_hz=8000.0, format="ri16"), r"a sound file \(WAV PCM_16\) that says its own format"),
    ],
)
def test_options_that_do_not_fit_a_sound_file_are_refused_with_the_mend(tmp_path, channels, options, text):
    path = tmp_path / "x.wav"
    soundfile.write(path, np.zeros((4800, channels)), RATE)
    with pytest.raises(InputError, match=text):
        open_source(str(path), options)


@pytest.mark.parametrize(
    "content",
    [b"Water 2.41 m, falling.\n" * 50, bytes(500), riff(1, 1, 16, bytes(100))[:30], b"fLaC" + bytes(100)],
    ids=["text", "zeros", "cut header", "broken flac"],
)
def test_what_is_no_sound_inside_a_sound_file_is_refused_on_one_line(tmp_path, content):
    path = tmp_path / "x.wav"
    path.write_bytes(content)
    with pytest.raises(InputError, match=r"x\.wav: not a usable sound file") as caught:
        open_source(str(path), SampleOptions(rate_hz=48000.0))
    assert "\n" not in str(caught.value)


def test_a_sound_file_without_samples_is_refused(tmp_path):
    path = tmp_path / "x.wav"
    path.write_bytes(riff(1, 1, 16, b""))
    with pytest.raises(InputError, match="with no samples by its header; if some follow it, give --format and --rate"):
        open_source(str(path), PLAIN)


def test_a_recording_cut_off_before_its_length_was_written_can_be_read_as_raw(tmp_path):
    path = tmp_path / "x.wav"
    path.write_bytes(riff(1, 1, 16, codes(16).astype("<i2").tobytes(), claimed=0))
    samples, _, _ = read(path, SampleOptions(rate_hz=48000.0, format="ri16"))
    np.testing.assert_array_equal(samples[22:], codes(16) / 32768)  # 44 bytes of header before them


def test_a_sound_file_under_a_raw_name_is_recognised_by_its_first_bytes(tmp_path):
    path = tmp_path / "capture.bin"
    path.write_bytes(riff(1, 1, 16, codes(16).astype("<i2").tobytes()))
    np.testing.assert_array_equal(read(path)[0], codes(16) / 32768)
    with pytest.raises(InputError, match="leave out --format"):
        open_source(str(path), SampleOptions(rate_hz=48000.0, format="ri16"))


def test_raw_samples_that_begin_like_mpeg_are_raw(tmp_path):
    tone = np.sin(np.arange(20_000) / 7) * 0.4
    sound = tmp_path / "x.mp3"
    soundfile.write(sound, tone, 32000)
    content = sound.read_bytes()
    raw = tmp_path / "capture.iq"
    raw.write_bytes(content)
    assert read(raw, SampleOptions(rate_hz=1e6, format="cu8"))[0].size == len(content) // 2
    with pytest.raises(InputError, match="raw samples need --format"):
        open_source(str(raw), PLAIN)


def test_many_channels_do_not_need_more_memory(tmp_path):
    path = tmp_path / "x.wav"
    data_bytes = 2 * 500 * 100_000
    with open(path, "wb") as file:
        file.write(riff(1, 500, 16, b"", claimed=data_bytes))
        file.truncate(44 + data_bytes)
    tracemalloc.start()
    samples, _, _ = read(path, SampleOptions(channels=(500,)))
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert samples.size == 100_000
    assert peak < 25_000_000  # 65 536 frames of all channels would be 65 million bytes


def test_a_long_sound_file_streams_in_constant_memory(tmp_path):
    path = tmp_path / "x.wav"
    data_bytes = 40_000_000
    with open(path, "wb") as file:
        file.write(riff(1, 1, 16, b"", claimed=data_bytes))
        file.truncate(44 + data_bytes)
    tracemalloc.start()
    with open_source(str(path), PLAIN) as source:
        count = sum(block.samples.size for block in source.blocks())
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert count == data_bytes // 2
    assert peak < 8_000_000
