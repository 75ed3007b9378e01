"""Interpolators against exact sinusoids; floors as in the working requirement: below -50 dB up to the band's edge."""

import numpy as np
import pytest

from dsp.errors import DspError
from dsp.interpolation import (
    BEFORE,
    PHASES,
    TAPS,
    cubic_slope_weights,
    cubic_weights,
    expander,
    slope_weights,
    spread_weights,
    weights,
)


def response(table, frequency):
    """What a table makes of ``exp(2 pi j f n)`` at each fraction, over the exact value; shape (PHASES + 1,)."""
    n = np.arange(TAPS) - BEFORE
    mu = np.arange(PHASES + 1) / PHASES
    return table.astype(float) @ np.exp(2j * np.pi * frequency * n) * np.exp(-2j * np.pi * frequency * mu)


# 1.05 symbol rates at 4 samples a symbol is the widest band that the chain asks for
@pytest.mark.parametrize("band", [0.1, 0.18, 0.25, 0.2625])
def test_values_are_below_minus_50_db_up_to_the_band_edge(band):
    for frequency in np.linspace(0.0, band, 9):
        assert np.abs(response(weights(band), frequency) - 1).max() < 10 ** (-50 / 20)


def test_the_mean_error_over_the_band_is_below_minus_60_db_up_to_a_band_of_0_27():
    for band in (0.15, 0.27):
        errors = [np.abs(response(weights(band), f) - 1) ** 2 for f in np.linspace(-band, band, 41)]
        assert np.mean(errors, axis=0).max() < 1e-6


@pytest.mark.parametrize("band", [0.1, 0.18, 0.25])
def test_slopes_are_those_of_the_sinusoid(band):
    for frequency in np.linspace(0.02, band, 5):
        exact = 2j * np.pi * frequency
        error = np.abs(response(slope_weights(band), frequency) - exact)
        assert error.max() < 0.01 * 2 * np.pi * band


def test_cubic_weights_reproduce_every_cubic_and_its_slope():
    """Lagrange interpolation through four points is exact for polynomials of degree 3."""
    n = np.arange(TAPS) - BEFORE
    mu = np.arange(PHASES + 1) / PHASES
    coefficients = np.array([0.3, -0.7, 0.21, 1.1])
    polynomial = np.polynomial.Polynomial(coefficients)
    np.testing.assert_allclose(cubic_weights() @ polynomial(n), polynomial(mu), atol=2e-5)
    np.testing.assert_allclose(cubic_slope_weights() @ polynomial(n), polynomial.deriv()(mu), atol=2e-5)


@pytest.mark.parametrize("table", [weights(0.2), cubic_weights()], ids=["least-squares", "cubic"])
def test_the_last_row_reads_the_sample_after_that_of_the_first(table):
    np.testing.assert_allclose(table[0], np.eye(TAPS)[BEFORE], atol=2e-3)
    np.testing.assert_allclose(table[-1], np.eye(TAPS)[BEFORE + 1], atol=2e-3)


@pytest.mark.parametrize("factor", [1, 8])
@pytest.mark.parametrize("band", [0.0, 0.15])
def test_an_expander_puts_even_points_into_each_interval(factor, band):
    table = expander(factor, band)
    assert table.shape == (factor, 6)
    wave = np.exp(2j * np.pi * 0.05 * np.arange(-2, 4))
    exact = np.exp(2j * np.pi * 0.05 * np.arange(factor) / factor)
    np.testing.assert_allclose(table @ wave, exact, atol=4e-3)


def test_spread_weights_read_each_point_as_the_plain_weights_do():
    step, count, span = 0.53, 8, 16
    table = spread_weights(0.2, step, count, span).reshape(PHASES + 1, span, count)
    samples = np.random.default_rng(1).standard_normal(span)
    for row in (0, 100, PHASES):
        for point in range(count):
            place = row / PHASES + point * step
            near = round((place - int(place)) * PHASES)
            expected = weights(0.2)[near] @ samples[int(place) : int(place) + TAPS]
            # the plain ones round to the nearest 512th of a sample
            assert table[row, :, point] @ samples == pytest.approx(expected, abs=5e-3)


def test_spread_weights_refuse_points_beyond_their_samples():
    with pytest.raises(DspError, match="need more than 16 samples"):
        spread_weights(0.2, 1.2, 8, 16)


def test_tables_are_float32_rows_ready_for_the_kernels():
    for table in (weights(0.2), slope_weights(0.2), cubic_weights(), cubic_slope_weights(), expander(8, 0.2)):
        assert table.dtype == np.float32
        assert table.flags.c_contiguous
