"""Loop constants against Rice's formulas evaluated by hand, the impulse response and closed forms."""

import math

import numpy as np
import pytest

from dsp.errors import DspError
from dsp.loops import DAMPING, LoopGains, exact_gains, noise_bandwidth, rice_gains, transfer


def impulse_response(gains, delay, length):
    """Of the loop as it runs, symbol by symbol: an independent route to everything about it."""
    instants = np.zeros(length + 1)
    rate = 0.0
    timing = np.zeros(length)
    timing[0] = 1.0
    for k in range(length):
        error = instants[k - delay] - timing[k - delay] if k >= delay else 0.0
        rate -= gains.integral * error
        instants[k + 1] = instants[k] + rate - gains.proportional * error
    return instants[1:]


# M. Rice, Digital Communications: A Discrete-Time Approach, 2009, eqs. C.56 and C.57, evaluated beforehand
RICE = [
    (0.7071067811865476, 0.001, 2.663113e-3, 3.550818e-6, 1.000889e-3),
    (0.7071067811865476, 0.005, 1.324474e-2, 8.829827e-5, 5.022259e-3),
    (0.7071067811865476, 0.01, 2.631348e-2, 3.508464e-4, 1.008919e-2),
    (0.7071067811865476, 0.02, 5.193007e-2, 1.384802e-3, 2.035793e-2),
    (0.7071067811865476, 0.05, 1.247401e-1, 8.316008e-3, 5.225926e-2),
    (1.0, 0.01, 3.149408e-2, 2.519526e-4, 1.006413e-2),
    (0.5, 0.01, 1.980002e-2, 3.960004e-4, 1.010050e-2),
]


@pytest.mark.parametrize(("damping", "bandwidth", "proportional", "integral", "exact"), RICE)
def test_rice_gains_and_their_exact_bandwidth(damping, bandwidth, proportional, integral, exact):
    gains = rice_gains(bandwidth, damping)
    assert gains.proportional == pytest.approx(proportional, rel=1e-6)
    assert gains.integral == pytest.approx(integral, rel=1e-6)
    assert noise_bandwidth(gains) == pytest.approx(exact, rel=1e-6)


@pytest.mark.parametrize("delay", [0, 8])
@pytest.mark.parametrize("bandwidth", [0.002, 0.005, 0.01, 0.02])
def test_exact_gains_have_the_bandwidth_asked_for(bandwidth, delay):
    response = impulse_response(exact_gains(bandwidth, delay), delay, int(20 / bandwidth))
    assert 0.5 * float(response @ response) == pytest.approx(bandwidth, rel=2e-3)


@pytest.mark.parametrize("delay", [0, 8])
def test_transfer_is_the_spectrum_of_the_impulse_response(delay):
    gains = exact_gains(0.01, delay)
    response = impulse_response(gains, delay, 6000)
    frequency = np.array([1e-4, 1e-3, 0.006, 0.02, 0.1, 0.4])
    k = np.arange(1, response.size + 1)
    expected = np.exp(-2j * np.pi * frequency[:, None] * k) @ response
    np.testing.assert_allclose(transfer(frequency, gains, delay), expected, atol=1e-6)


def test_residual_of_sinusoidal_jitter():
    """|1 - H| at damping 0.7071, BnT 0.01 by Rice's constants; evaluated beforehand from the difference equation."""
    rest = np.abs(1 - transfer(np.array([1e-4, 1e-3, 0.01, 0.1]), rice_gains(0.01)))
    np.testing.assert_allclose(rest, [0.001125, 0.111837, 1.009342, 1.013422], rtol=1e-3)


def test_the_3_db_frequency_and_the_peaking_are_those_of_the_analogue_loop():
    """F. M. Gardner, Phaselock Techniques, 3rd ed., ch. 2 (from memory): 0.006177/T and 2.0899 dB at 0.7071, BnT 0.01."""
    frequency = np.geomspace(1e-5, 0.05, 20001)
    gain = np.abs(transfer(frequency, rice_gains(0.01)))
    assert frequency[np.flatnonzero(gain < math.sqrt(0.5))[0]] == pytest.approx(0.006177, rel=0.02)
    assert 20 * math.log10(gain.max()) == pytest.approx(2.0899, abs=0.08)


def test_a_step_of_rate_leaves_no_error_and_peaks_where_it_should():
    """100 ppm at BnT 0.01: peak 0.002451 UI, then none, and the integrator holds the rate (computed beforehand)."""
    gains = rice_gains(0.01)
    settled = np.convolve(impulse_response(gains, 0, 4000), 1e-4 * np.arange(4000))[:4000]
    error = np.abs(1e-4 * np.arange(1, 4001) - settled)
    assert error.max() == pytest.approx(0.002451, rel=0.02)
    assert error[-1] < 1e-7


@pytest.mark.parametrize("bandwidth", [0.0, -0.01, 0.11, math.nan, math.inf])
def test_bandwidths_that_make_no_loop_are_refused(bandwidth):
    with pytest.raises(DspError, match="BnT"):
        rice_gains(bandwidth)
    with pytest.raises(DspError, match="BnT"):
        exact_gains(bandwidth, 8)


def test_damping_is_that_of_a_butterworth_loop():
    assert pytest.approx(1 / math.sqrt(2)) == DAMPING
    assert noise_bandwidth(LoopGains(0.04, 0.0)) == pytest.approx(0.04 / (2 * (2 - 0.04)))  # first order
