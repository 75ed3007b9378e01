"""Raw files and streams."""

import io
import os
import threading
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.errors import InputError
from monitor.sources import SampleOptions, open_source
from monitor.sources.formats import DATATYPES, parse_datatype
from monitor.sources.raw import RawFile, RawLayout, Stretch

CF32 = SampleOptions(rate_hz=48000.0, format="cf32_le")


def gathered(source):
    """All samples of a source, and its blocks; the indices must follow one another."""
    with source:
        blocks = list(source.blocks())
    position = source.info.start
    for block in blocks:
        position += block.lost
        assert block.start == position
        position += block.samples.size
        assert block.samples.flags.c_contiguous
        assert block.samples.size > 0
    kind = np.complex64 if source.info.complex_samples else np.float32
    assert all(block.samples.dtype == kind for block in blocks)
    return np.concatenate([np.zeros(0, kind), *(block.samples for block in blocks)]), blocks


@pytest.fixture
def noise(tmp_path):
    """A cf32_le file of 10 000 samples: its path and its samples."""
    rng = np.random.default_rng(5)
    samples = (rng.normal(size=10_000) + 1j * rng.normal(size=10_000)).astype(np.complex64)
    path = tmp_path / "skerry.cf32"
    samples.tofile(path)
    return str(path), samples


@pytest.mark.parametrize("name", DATATYPES)
def test_every_datatype_comes_out_of_a_file_as_decoded_in_one_piece(tmp_path, name):
    form = parse_datatype(name)
    content = np.random.default_rng(6).bytes(1000 * form.bytes_per_sample)
    path = tmp_path / "x.bin"
    path.write_bytes(content)
    whole = form.decode(content)
    source = open_source(str(path), SampleOptions(rate_hz=1e6, format=name), block_samples=300)
    samples, blocks = gathered(source)
    np.testing.assert_array_equal(samples, whole.samples)
    assert [block.samples.size for block in blocks] == [300, 300, 300, 100]
    assert sum(block.clipped for block in blocks) == whole.clipped
    assert sum(block.nonfinite for block in blocks) == whole.nonfinite
    assert source.info.format == name
    assert source.info.samples == 1000
    assert source.info.sample_rate_hz == 1e6
    assert source.info.notes == ()
    assert source.notes == []


@settings(max_examples=30, deadline=None)
@given(
    name=st.sampled_from(DATATYPES),
    count=st.integers(1, 200),
    size=st.integers(1, 70),
    read_bytes=st.integers(1, 50),
    start=st.integers(0, 199),
    length=st.integers(1, 250),
)
def test_blocks_cut_differently_and_a_stream_give_the_same_samples(
    tmp_path_factory, name, count, size, read_bytes, start, length
):
    form = parse_datatype(name)
    content = np.random.default_rng(count).bytes(count * form.bytes_per_sample)
    path = tmp_path_factory.getbasetemp() / "cuts.bin"
    path.write_bytes(content)
    start = min(start, count - 1)
    options = SampleOptions(rate_hz=1000.0, format=name, start_s=start / 1000, duration_s=length / 1000)
    truth = form.decode(content[start * form.bytes_per_sample : (start + length) * form.bytes_per_sample])

    class Trickle(io.BytesIO):
        def read1(self, size=-1):
            return super().read1(min(size, read_bytes))

    for source in (
        open_source(str(path), options, block_samples=size),
        open_source("-", options, Trickle(content), block_samples=size),
    ):
        samples, blocks = gathered(source)
        np.testing.assert_array_equal(samples, truth.samples)
        assert blocks[0].start == start
        assert sum(block.clipped for block in blocks) == truth.clipped
        assert sum(block.nonfinite for block in blocks) == truth.nonfinite
        assert max(block.samples.size for block in blocks) <= size


def test_start_and_duration_select_by_time_and_keep_the_index(noise):
    path, samples = noise
    source = open_source(path, SampleOptions(48000.0, "cf32", start_s=0.1, duration_s=0.05))
    assert (source.info.start, source.info.samples) == (4800, 2400)
    np.testing.assert_array_equal(gathered(source)[0], samples[4800:7200])


def test_a_duration_beyond_the_end_is_the_rest(noise):
    path, samples = noise
    source = open_source(path, SampleOptions(48000.0, "cf32", start_s=0.2, duration_s=1e9))
    assert source.info.samples == 400
    np.testing.assert_array_equal(gathered(source)[0], samples[9600:])


def test_a_file_can_be_read_twice(noise):
    path, samples = noise
    with open_source(path, CF32) as source:
        for _ in range(2):
            np.testing.assert_array_equal(np.concatenate([b.samples for b in source.blocks()]), samples)


def test_an_odd_byte_count_is_noted_and_the_rest_measured(noise):
    path, samples = noise
    with open(path, "ab") as file:
        file.write(b"abc")
    source = open_source(path, CF32)
    assert source.info.notes == ("left out 3 bytes at the end: not a whole sample",)
    np.testing.assert_array_equal(gathered(source)[0], samples)


def test_a_file_that_shrinks_while_read_gives_what_is_left_and_a_note(noise):
    path, samples = noise
    source = open_source(path, CF32, block_samples=1000)
    blocks = source.blocks()
    next(blocks)
    os.truncate(path, 1500 * 8 + 5)
    np.testing.assert_array_equal(next(blocks).samples, samples[1000:1500])
    assert list(blocks) == []
    assert source.notes == ["reading stopped at sample 1500; the file became shorter or unreadable"]
    source.close()


def test_samples_lost_between_stretches_are_reported_with_the_next_block(noise):
    path, samples = noise
    with open_source(path, CF32) as whole:
        info = whole.info
    stretches = [Stretch(0, 0, 10), Stretch(800, 15, 5)]
    got, blocks = gathered(RawFile(path, info, RawLayout(parse_datatype("cf32_le")), stretches, block_samples=4))
    np.testing.assert_array_equal(got, np.concatenate([samples[:10], samples[100:105]]))
    assert [(block.start, block.lost) for block in blocks] == [(0, 0), (4, 0), (8, 0), (15, 5), (19, 0)]


@pytest.mark.parametrize(
    ("options", "text"),
    [
        (SampleOptions(), "need --format NAME .* and --rate HZ"),
        (SampleOptions(rate_hz=8000.0), r"need --format NAME \(cf32_le, ri16_le, cu8\)$"),
        (SampleOptions(format="cu8"), "no sample rate is known; give --rate HZ"),
        (SampleOptions(8000.0, "cu9"), "unknown sample format 'cu9'; legal are"),
        (SampleOptions(8000.0, "ri16", iq=True), "I/Q pairs are --format ci16_le"),
        (SampleOptions(8000.0, "ri16", channels=(2,)), "one channel"),
        (SampleOptions(8000.0, "cf32", start_s=2.0), "--start 2 s is beyond the end; the recording lasts 1.25 s"),
        (SampleOptions(8000.0, "cf32", start_s=1.25), "--start 1.25 s is beyond the end"),
        (SampleOptions(8000.0, "cf32", duration_s=1e-5), "shorter than one sample"),
    ],
)
def test_options_that_do_not_fit_a_raw_file_are_refused_with_the_mend(noise, options, text):
    with pytest.raises(InputError, match=text):
        open_source(noise[0], options)


def test_a_file_shorter_than_one_sample_is_refused(tmp_path):
    path = tmp_path / "x.iq"
    path.write_bytes(b"1234567")
    with pytest.raises(InputError, match="shorter than one cf32_le sample"):
        open_source(str(path), CF32)


def test_standard_input_delivers_what_each_read_brings():
    read_end, write_end = os.pipe()
    samples = np.arange(6, dtype=np.complex64)
    with os.fdopen(read_end, "rb") as stdin:
        source = open_source("-", CF32, stdin)
        assert source.info.samples is None
        blocks = source.blocks()
        os.write(write_end, samples[:2].tobytes() + b"\x00\x00")
        np.testing.assert_array_equal(next(blocks).samples, samples[:2])
        os.write(write_end, samples[2:].tobytes()[2:])
        os.close(write_end)
        block = next(blocks)
        np.testing.assert_array_equal(block.samples, samples[2:])
        assert block.start == 2
        assert list(blocks) == []
        assert source.notes == []
        source.close()
        assert not stdin.closed


def test_a_pipe_that_does_not_block_is_made_to():
    read_end, write_end = os.pipe()
    os.set_blocking(read_end, False)
    with os.fdopen(read_end, "rb") as stdin:
        source = open_source("-", CF32, stdin)
        late = threading.Timer(0.05, lambda: (os.write(write_end, bytes(16)), os.close(write_end)))
        late.start()
        assert gathered(source)[0].size == 2
        late.join()


def test_standard_input_that_closes_early_is_an_end_with_its_partial_sample_noted():
    source = open_source("-", CF32, io.BytesIO(bytes(8 * 5 + 1)))
    assert gathered(source)[0].size == 5
    assert source.notes == ["left out 1 byte at the end: not a whole sample"]


@pytest.mark.parametrize(
    ("n_bytes", "start_s", "note"),
    [
        (0, 0.0, "the stream ended without a sample"),
        (8 * 5, 1.0, "the stream ended after 5 samples, before --start"),
        (8 * 5, 5 / 48000, "the stream ended after 5 samples, before --start"),
    ],
)
def test_a_stream_that_brings_nothing_says_so(n_bytes, start_s, note):
    source = open_source("-", SampleOptions(48000.0, "cf32", start_s=start_s), io.BytesIO(bytes(n_bytes)))
    assert gathered(source)[0].size == 0
    assert source.notes == [note]


def test_reading_a_stream_stops_at_the_duration():
    stream = io.BytesIO(bytes(8 * 100))
    source = open_source("-", SampleOptions(1000.0, "cf32", start_s=0.01, duration_s=0.02), stream)
    samples, blocks = gathered(source)
    assert (samples.size, blocks[0].start, stream.tell()) == (20, 10, 30 * 8)
    assert source.notes == []


def test_a_stream_that_breaks_keeps_what_came_and_notes_it():
    class Breaking(io.BytesIO):
        def read1(self, size=-1):
            if self.tell():
                raise OSError(5, "Input/output error")
            return super().read1(80)

    source = open_source("-", CF32, Breaking(bytes(800)))
    assert gathered(source)[0].size == 10
    assert source.notes == ["the stream broke after sample 10: [Errno 5] Input/output error"]


def test_a_named_pipe_is_read_as_a_stream_and_closed(tmp_path):
    path = str(tmp_path / "pipe")
    os.mkfifo(path)
    writer = threading.Thread(target=Path(path).write_bytes, args=(bytes(80),))
    writer.start()
    source = open_source(path, CF32)
    assert gathered(source)[0].size == 10
    writer.join()
    assert list(source.blocks()) == []
    assert source.notes == ["the stream broke after sample 10: I/O operation on closed file"]


def test_a_named_pipe_without_a_format_is_refused_before_waiting_for_a_writer(tmp_path):
    path = str(tmp_path / "pipe")
    os.mkfifo(path)
    with pytest.raises(InputError, match="need --format"):
        open_source(path, SampleOptions())
    with pytest.raises(InputError, match="give --rate"):
        open_source(path, SampleOptions(format="cu8"))


def test_a_file_larger_than_its_blocks_streams_in_constant_memory(tmp_path):
    import tracemalloc

    path = tmp_path / "long.ci16"
    with open(path, "wb") as file:
        file.truncate(40_000_000)  # sparse: 10 Msample
    tracemalloc.start()
    count = 0
    with open_source(str(path), SampleOptions(1e6, "ci16")) as source:
        for block in source.blocks():
            count += block.samples.size
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert count == 10_000_000
    assert peak < 8_000_000
