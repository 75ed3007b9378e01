"""The compiled filters against numpy and scipy."""

import numpy as np
import pytest
from scipy import signal

from dsp._kernels import filters as kernel

EPS = float(np.finfo(np.float32).eps)


def noise(seed, size):
    return np.random.default_rng(seed).standard_normal(size, dtype=np.float32)


def run(samples, taps, count):
    out = np.full(count, np.nan, np.float32)
    kernel.fir(samples, taps, out)
    return out


# 8 taps are one turn of the inner loop, 1024 outputs one tile
@pytest.mark.parametrize("n_taps", [1, 2, 7, 8, 9, 16, 41, 200])
@pytest.mark.parametrize("count", [0, 1, 1023, 1024, 1025, 3000])
def test_fir_is_the_convolution_with_the_reversed_taps(n_taps, count):
    samples, taps = noise(1, count + n_taps - 1), noise(2, n_taps)
    if count == 0:
        assert run(samples, taps, 0).size == 0
        return
    expected = signal.lfilter(taps[::-1].astype(float), 1.0, samples.astype(float))[n_taps - 1 :]
    # rounding: each product and sum of n_taps terms of size up to about 3 x 3
    np.testing.assert_allclose(run(samples, taps, count), expected, atol=10 * n_taps * EPS + EPS)


def test_fir_gives_the_same_bits_wherever_the_block_begins():
    samples, taps = noise(3, 5000), noise(4, 41)
    whole = run(samples, taps, 4960)
    for start in (1, 7, 500, 1023, 1024, 2000):
        part = run(samples[start:].copy(), taps, 4960 - start)
        np.testing.assert_array_equal(part, whole[start:])


@pytest.mark.parametrize("factor", [2, 3, 10])
@pytest.mark.parametrize("n_taps", [1, 8, 33])
def test_fir_decimate_keeps_every_nth_output(factor, n_taps):
    samples, taps = noise(5, 997), noise(6, n_taps)
    expected = np.correlate(samples.astype(float), taps.astype(float), mode="valid")[::factor]
    out = np.full(expected.size, np.nan, np.float32)
    kernel.fir_decimate(samples, taps, factor, out)
    np.testing.assert_allclose(out, expected, atol=10 * n_taps * EPS)


@pytest.mark.parametrize("frequency", [0.0123, -0.31])
def test_turn_takes_a_frequency_out_at_each_sample_s_place_in_the_stream(frequency):
    x_i, x_q = noise(8, 300), noise(9, 300)
    turns = np.exp(-2j * np.pi * frequency * np.arange(128)).astype(np.complex64)
    out_i, out_q = np.empty(300, np.float32), np.empty(300, np.float32)
    position = 1_000_003
    kernel.turn(x_i, x_q, frequency, position, turns, out_i, out_q)
    expected = (x_i + 1j * x_q).astype(np.complex128) * np.exp(-2j * np.pi * frequency * (position + np.arange(300)))
    np.testing.assert_allclose(out_i + 1j * out_q, expected, atol=20 * EPS)


def test_turn_each_multiplies_by_each_turn():
    x_i, x_q = noise(8, 300), noise(9, 300)
    turns = np.exp(1j * np.random.default_rng(7).uniform(0, 2 * np.pi, 300)).astype(np.complex64)
    out_i, out_q = np.empty(300, np.float32), np.empty(300, np.float32)
    kernel.turn_each(x_i, x_q, turns, out_i, out_q)
    np.testing.assert_allclose(out_i + 1j * out_q, (x_i + 1j * x_q) * turns, atol=20 * EPS)


def test_split_tells_i_from_q():
    samples = (noise(10, 50) + 1j * noise(11, 50)).astype(np.complex64)
    out_i, out_q = np.empty(50, np.float32), np.empty(50, np.float32)
    kernel.split(samples, out_i, out_q)
    np.testing.assert_array_equal(out_i, samples.real)
    np.testing.assert_array_equal(out_q, samples.imag)


def test_kernels_take_read_only_samples_and_refuse_other_layouts():
    received = np.frombuffer(noise(12, 100).tobytes(), np.float32)
    assert not received.flags.writeable
    np.testing.assert_array_equal(run(received, np.ones(1, np.float32), 100), received)
    with pytest.raises(TypeError):
        run(received[::2], np.ones(1, np.float32), 50)
    with pytest.raises(TypeError):
        run(received.astype(np.float64), np.ones(1, np.float32), 50)
