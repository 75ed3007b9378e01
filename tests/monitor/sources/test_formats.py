"""Raw bytes against numbers by a different route: the struct module, and libsndfile reading headerless files."""

import io
import struct

import numpy as np
import pytest
import soundfile
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.errors import InputError
from monitor.sources.formats import DATATYPES, SampleFormat, parse_datatype

STRUCT_CODES = {"f64": "d", "f32": "f", "i32": "i", "u32": "I", "i16": "h", "u16": "H", "i8": "b", "u8": "B"}


def expected(name: str, data: bytes) -> tuple[np.ndarray, int]:
    """The samples and the clipped count by plain Python, one number at a time."""
    form = parse_datatype(name)
    width = name[1:].partition("_")[0]
    order = ">" if name.endswith("_be") else "<"
    numbers = [value for (value,) in struct.iter_unpack(order + STRUCT_CODES[width], data)]
    half = 2 ** (form.bits - 1)
    if form.kind == "f":
        scaled, ends = numbers, {-1.0, 1.0}
    elif form.kind == "i":
        scaled, ends = [x / half for x in numbers], {-half, 1 - half, half - 1}
    else:
        scaled, ends = [(x - half) / half for x in numbers], {0, 2 * half - 1}
    step = 2 if form.complex_samples else 1
    clipped = sum(any(x in ends for x in numbers[i : i + step]) for i in range(0, len(numbers), step))
    real = np.array(scaled, np.float64).astype(np.float32)
    return (real[::2] + 1j * real[1::2] if form.complex_samples else real), clipped


def test_there_are_28_datatypes_each_parsed_to_its_own_name():
    # SigMF 1.2.6: (c|r)(f32|f64|i32|i16|u32|u16|i8|u8), byte order for more than 8 bits only
    assert len(set(DATATYPES)) == 28
    assert [parse_datatype(name).name for name in DATATYPES] == list(DATATYPES)


@pytest.mark.parametrize(
    ("given_name", "canonical"),
    [("cf32", "cf32_le"), ("ri16", "ri16_le"), ("cu8_le", "cu8"), ("ri8_be", "ri8"), ("ru32", "ru32_le")],
)
def test_a_name_without_byte_order_is_little_endian_and_8_bits_have_none(given_name, canonical):
    assert parse_datatype(given_name).name == canonical


@pytest.mark.parametrize(
    "name", ["", "cf16", "cf32_", "cf32_me", "f32_le", "CF32_LE", "cf32_le ", "ri24_le", "cs16", "c"]
)
def test_an_unknown_name_is_refused_with_the_legal_ones(name):
    with pytest.raises(InputError, match=r"legal are .*f64.*u32.*cf32_le, ri16_be, cu8"):
        parse_datatype(name)


def test_bytes_per_sample_counts_both_parts_of_a_complex_sample():
    # SigMF: cu8 2 bytes, ci16 4, cf32 8, cf64 16
    sizes = {
        name: parse_datatype(name).bytes_per_sample for name in ("cu8", "ci16_le", "cf32_be", "cf64_le", "ri16_be")
    }
    assert sizes == {"cu8": 2, "ci16_le": 4, "cf32_be": 8, "cf64_le": 16, "ri16_be": 2}


def test_known_bytes_become_the_published_numbers():
    # the interleaving and byte order of the SigMF specification, "SigMF Dataset Format"
    samples, clipped, nonfinite = parse_datatype("ci16_le").decode(bytes.fromhex("0100ffffff7f0080"))
    np.testing.assert_array_equal(samples, np.array([1 - 1j, 32767 - 32768j]) / 32768)
    assert samples.dtype == np.complex64
    assert (clipped, nonfinite) == (1, 0)
    samples, clipped, _ = parse_datatype("ru8").decode(bytes([0, 1, 127, 128, 255]))
    np.testing.assert_array_equal(samples, np.array([-128, -127, -1, 0, 127]) / 128)
    assert clipped == 2


@pytest.mark.parametrize("name", [name for name in DATATYPES if "f" not in name])
@settings(max_examples=25, deadline=None)
@given(data=st.data())
def test_integers_decode_as_one_by_one(name, data):
    form = parse_datatype(name)
    content = data.draw(st.binary(max_size=64 * form.bytes_per_sample))
    content = content[: len(content) - len(content) % form.bytes_per_sample]
    samples, clipped, nonfinite = form.decode(content)
    truth, n_clipped = expected(name, content)
    assert samples.dtype == (np.complex64 if form.complex_samples else np.float32)
    assert samples.flags.c_contiguous
    np.testing.assert_array_equal(samples, truth)
    assert (clipped, nonfinite) == (n_clipped, 0)


@pytest.mark.parametrize("name", [name for name in DATATYPES if "f" in name])
@settings(max_examples=25, deadline=None)
@given(data=st.data())
def test_floats_decode_as_one_by_one(name, data):
    form = parse_datatype(name)
    step = 2 if form.complex_samples else 1
    number = st.one_of(st.floats(width=32, allow_nan=False, allow_infinity=False), st.sampled_from([1.0, -1.0, 0.5]))
    numbers = data.draw(st.lists(number, max_size=40))
    numbers = numbers[: len(numbers) - len(numbers) % step]
    code = ("<", ">")[name.endswith("_be")] + "fd"[form.bits == 64]
    content = b"".join(struct.pack(code, x) for x in numbers)
    samples, clipped, nonfinite = form.decode(content)
    truth, n_clipped = expected(name, content)
    np.testing.assert_array_equal(samples, truth)
    assert (clipped, nonfinite) == (n_clipped, 0)


@pytest.mark.parametrize("name", [n for n in DATATYPES if n[0] == "r" and n[1:4] not in ("u16", "u32")])
def test_real_formats_agree_with_libsndfile_reading_the_same_bytes_headerless(name):
    form = parse_datatype(name)
    rng = np.random.default_rng(28)
    if form.kind == "f":
        content = rng.normal(0, 0.3, 500).astype(f"{'>' if form.big_endian else '<'}f{form.bits // 8}").tobytes()
    else:
        content = rng.bytes(500 * form.bytes_per_sample)
    subtype = {"f64": "DOUBLE", "f32": "FLOAT", "i32": "PCM_32", "i16": "PCM_16", "i8": "PCM_S8", "u8": "PCM_U8"}[
        name[1:].partition("_")[0]
    ]
    endian = "FILE" if form.bits == 8 else ("BIG" if form.big_endian else "LITTLE")
    theirs, _ = soundfile.read(
        io.BytesIO(content), dtype="float64", samplerate=8000, channels=1, format="RAW", subtype=subtype, endian=endian
    )
    # 64 bits hold every one of these numbers, so that the one rounding is numpy's
    np.testing.assert_array_equal(form.decode(content).samples, theirs.astype(np.float32))


@pytest.mark.parametrize("name", ["rf32_le", "rf32_be", "rf64_le", "rf64_be"])
def test_real_samples_that_are_not_finite_become_zero_and_are_counted(name):
    form = parse_datatype(name)
    values = np.array([0.25, np.nan, np.inf, -np.inf, 1.0, -0.5])
    stored = values.astype(f"{'>' if form.big_endian else '<'}f{form.bits // 8}")
    samples, clipped, nonfinite = form.decode(stored.tobytes())
    np.testing.assert_array_equal(samples, [0.25, 0, 0, 0, 1.0, -0.5])
    assert (clipped, nonfinite) == (1, 3)


def test_one_bad_part_takes_the_whole_complex_sample_and_hides_its_clipping():
    stored = np.array([0.5 + 0.5j, complex(np.nan, 1.0), complex(1.0, -1.0), complex(0.1, np.inf)], np.complex64)
    samples, clipped, nonfinite = parse_datatype("cf32_le").decode(stored.tobytes())
    np.testing.assert_array_equal(samples, [0.5 + 0.5j, 0, 1 - 1j, 0])
    assert (clipped, nonfinite) == (1, 2)


def test_doubles_beyond_float32_are_not_finite_and_those_at_its_limit_are_kept():
    limit = float(np.finfo(np.float32).max)
    stored = np.array([1e300, -1e39, limit, -limit, np.nextafter(limit, np.inf), 1e-300])
    samples, _, nonfinite = parse_datatype("rf64_le").decode(stored.tobytes())
    np.testing.assert_array_equal(samples, np.array([0, 0, limit, -limit, limit, 0], np.float32))
    assert nonfinite == 2


def test_a_double_just_below_full_scale_is_not_clipped():
    stored = np.array([1.0, np.nextafter(1.0, 0.0), -1.0])
    assert parse_datatype("rf64_le").decode(stored.tobytes()).clipped == 2


def test_samples_beyond_full_scale_are_no_reason_to_overlook_clipped_ones():
    stored = np.array([3.0, 1.0, -7.0, 0.2], np.float32)
    assert parse_datatype("rf32_le").decode(stored.tobytes()).clipped == 1


def test_unaligned_and_read_only_bytes_give_aligned_samples():
    stored = np.arange(8, dtype=np.float32)
    padded = b"\x00" + stored.tobytes()
    samples = parse_datatype("cf32_le").decode(memoryview(padded)[1:]).samples
    assert samples.flags.aligned
    np.testing.assert_array_equal(samples.view(np.float32), stored)


def test_floats_in_the_machines_order_are_not_copied():
    data = np.arange(8, dtype=np.float32).view(np.uint8)
    assert np.shares_memory(parse_datatype("rf32_le").decode(data).samples, data)


def test_bad_samples_are_not_mended_in_the_callers_bytes():
    data = np.array([np.nan, 1.0], np.float32)
    parse_datatype("rf32_le").decode(data.view(np.uint8))
    assert np.isnan(data[0])


@pytest.mark.parametrize("name", DATATYPES)
def test_nothing_decodes_to_nothing(name):
    samples, clipped, nonfinite = parse_datatype(name).decode(b"")
    assert samples.shape == (0,)
    assert samples.dtype == (np.complex64 if name[0] == "c" else np.float32)
    assert (clipped, nonfinite) == (0, 0)


def test_part_of_a_sample_is_refused():
    with pytest.raises(ValueError, match="7 bytes are not a whole number of ci16_le samples"):
        parse_datatype("ci16_le").decode(bytes(7))


def test_the_complex_partner_of_a_real_format_keeps_width_and_byte_order():
    partner = parse_datatype("ru16_be").as_complex()
    assert partner == SampleFormat("cu16_be", complex_samples=True, kind="u", bits=16, big_endian=True)
