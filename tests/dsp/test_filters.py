"""Streaming filters against scipy, and their promise that cuts change nothing."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from dsp.errors import DspError
from dsp.filters import ComplexFilter, Oscillator, RailFilter, low_pass, split


def rails(seed, size, count=2):
    rng = np.random.default_rng(seed)
    return tuple(rng.standard_normal(size).astype(np.float32) for _ in range(count))


def in_pieces(stage, whole, cuts):
    """What a stage gives for the rails cut at ``cuts``."""
    places = [0, *sorted(min(cut, whole[0].size) for cut in cuts), whole[0].size]
    parts = [stage.push(tuple(rail[a:b] for rail in whole)) for a, b in pairwise(places)]
    return tuple(np.concatenate(rail) for rail in zip(*parts, strict=True))


MAKERS = {
    "plain": lambda: RailFilter(low_pass(0.1, 0.2), 2),
    "one tap": lambda: RailFilter(np.array([0.5]), 2),
    "unit": lambda: RailFilter(np.ones(1), 2),
    "decimate": lambda: RailFilter(low_pass(0.1, 0.2), 2, decimate=3),
    "decimate, short": lambda: RailFilter(np.ones(1), 2, decimate=5),
    "decimate, longer": lambda: RailFilter(np.hanning(5), 2, decimate=7),
    "interpolate": lambda: RailFilter(low_pass(0.1, 0.2), 2, interpolate=2),
    "complex": lambda: ComplexFilter(np.exp(1j * np.arange(17)) * np.hanning(17)),
    "oscillator": lambda: Oscillator(0.01234567),
}


@pytest.mark.parametrize("name", MAKERS)
@settings(max_examples=15, deadline=None)
@given(cuts=st.lists(st.integers(0, 1800), max_size=6))
def test_cuts_change_not_one_bit(name, cuts):
    whole = rails(1, 1800)
    expected = MAKERS[name]().push(whole)
    for got, want in zip(in_pieces(MAKERS[name](), whole, cuts), expected, strict=True):
        np.testing.assert_array_equal(got, want)


@pytest.mark.parametrize("name", MAKERS)
def test_blocks_of_one_sample_and_of_none_change_not_one_bit(name):
    whole = rails(2, 700)
    expected = MAKERS[name]().push(whole)
    cuts = [*range(1, 700), 300, 300]
    for got, want in zip(in_pieces(MAKERS[name](), whole, cuts), expected, strict=True):
        np.testing.assert_array_equal(got, want)


def test_a_rail_filter_is_a_causal_fir_with_zeros_before_the_stream():
    taps = low_pass(0.1, 0.2)
    (got,) = RailFilter(taps, 1).push(rails(3, 2000, 1))
    np.testing.assert_allclose(got, signal.lfilter(taps, 1.0, rails(3, 2000, 1)[0]), atol=1e-5)


def test_decimation_and_interpolation_are_those_of_upfirdn():
    """scipy.signal.upfirdn with the same taps; interpolation keeps the level, so its taps count double."""
    taps = low_pass(0.1, 0.2)
    (x,) = rails(4, 999, 1)
    (down,) = RailFilter(taps, 1, decimate=4).push((x,))
    np.testing.assert_allclose(down, signal.upfirdn(taps, x, down=4)[: down.size], atol=1e-5)
    (up,) = RailFilter(taps, 1, interpolate=2).push((x,))
    np.testing.assert_allclose(up, signal.upfirdn(2 * taps, x, up=2)[: up.size], atol=1e-5)
    assert up.size == 2 * x.size


@pytest.mark.parametrize(("decimate", "interpolate"), [(1, 1), (3, 1), (1, 2)])
def test_output_i_is_centred_where_the_delay_says(decimate, interpolate):
    stage = RailFilter(low_pass(0.04, 0.1), 1, decimate=decimate, interpolate=interpolate)
    n = np.arange(4000)
    (out,) = stage.push((np.sin(2 * np.pi * 0.011 * n).astype(np.float32),))
    centre = np.arange(out.size) * decimate / interpolate - stage.delay
    inside = centre > 2 * stage.delay
    np.testing.assert_allclose(out[inside], np.sin(2 * np.pi * 0.011 * centre[inside]), atol=2e-3)


def test_low_pass_keeps_its_bands_within_the_attenuation():
    for attenuation in (50.0, 70.0):
        _, response = signal.freqz(low_pass(0.1, 0.15, attenuation), worN=np.linspace(0, 0.5, 2001) * 2 * np.pi)
        frequency = np.linspace(0, 0.5, 2001)
        bound = 10 ** (-attenuation / 20) * 1.3  # Kaiser's formula is an approximation
        assert np.abs(response[frequency >= 0.15]).max() < bound
        assert np.abs(np.abs(response[frequency <= 0.1]) - 1).max() < bound


@pytest.mark.parametrize(("lower", "upper"), [(0.0, 0.1), (0.2, 0.1), (0.1, 0.1), (float("nan"), 0.2)])
def test_edges_that_do_not_rise_are_refused(lower, upper):
    with pytest.raises(DspError, match="edges"):
        low_pass(lower, upper)


def test_a_filter_either_decimates_or_interpolates():
    with pytest.raises(DspError, match="either"):
        RailFilter(np.ones(3), 1, decimate=2, interpolate=2)


def test_a_complex_filter_is_a_complex_convolution():
    taps = np.exp(1j * np.arange(17)) * np.hanning(17)
    i, q = rails(5, 500)
    out_i, out_q = ComplexFilter(taps).push((i, q))
    np.testing.assert_allclose(out_i + 1j * out_q, signal.lfilter(taps, 1.0, i + 1j * q), atol=2e-5)


def test_an_oscillator_turns_by_its_frequency_however_long_it_runs():
    stage = Oscillator(0.0123456789)
    one, zero = np.ones(100_000, np.float32), np.zeros(100_000, np.float32)
    for block in range(10):
        out_i, out_q = stage.push((one, zero))
        n = block * 100_000 + np.arange(100_000)
        error = out_i + 1j * out_q - np.exp(-2j * np.pi * ((0.0123456789 * n) % 1.0))
        assert np.abs(error).max() < 2e-6


def test_samples_split_into_rails():
    samples = np.array([1 + 2j, -3 + 0.5j], np.complex64)
    i, q = split(samples)
    assert i.tolist() == [1.0, -3.0]
    assert q.tolist() == [2.0, 0.5]
    assert split(np.zeros(0, np.complex64))[0].size == 0


def test_nothing_in_gives_nothing_out_and_zeros_give_zeros():
    for make in MAKERS.values():
        assert all(rail.size == 0 for rail in make().push((np.zeros(0, np.float32),) * 2))
        assert not any(np.any(rail) for rail in make().push((np.zeros(300, np.float32),) * 2))
