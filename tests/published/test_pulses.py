"""The pulses of `dsp.pulses` against published values, other libraries, and their own formulas by brute force."""

import math

import komm
import liquid
import numpy as np
import pytest
from scipy.optimize import brentq

from dsp.errors import DspError
from dsp.pulses import (
    Pulse,
    gaussian_rectangle,
    raised_cosine,
    receive_filter,
    rectangle,
    root_raised_cosine,
    rrc_half_span,
)

T = np.linspace(-6.0, 6.0, 4801)


def test_values_for_rolloff_a_quarter_are_those_of_the_komm_documentation():
    # komm's documentation of its raised-cosine pulse, which cites Proakis and Salehi, 5th ed., sec. 9.2-1
    t = [0.25, 0.5, 0.75]
    np.testing.assert_allclose(root_raised_cosine(t, 0.25), [0.9432, 0.6218, 0.2379], atol=5e-5)
    np.testing.assert_allclose(raised_cosine(t, 0.25), [0.8970, 0.6274, 0.2904], atol=5e-5)


@pytest.mark.parametrize(
    ("rolloff", "rrc_peak", "rrc_edge", "rc_half", "rc_edge"),
    [
        # Proakis and Salehi, sec. 9.2-1 for the formulas; the limits at 0/0 derived, checked by brute force
        (0.20, 1.054648, -0.200000, 0.630689, 0.100000),
        (0.25, 1.068310, -0.064237, 0.627371, 0.0),
        (0.35, 1.095634, 0.260603, 0.618584, -0.170612),
        (0.50, 1.136620, 0.578632, 0.600211, 0.0),
        (1.00, 1.273240, 1.000000, 0.500000, 0.500000),
    ],
)
def test_singular_points_take_their_analytic_limits(rolloff, rrc_peak, rrc_edge, rc_half, rc_edge):
    edge = 1 / (4 * rolloff)
    np.testing.assert_allclose(
        root_raised_cosine([0.0, edge, -edge], rolloff), [rrc_peak, rrc_edge, rrc_edge], atol=1e-6
    )
    np.testing.assert_allclose(
        raised_cosine([0.5, 2 * edge, -2 * edge], rolloff), [rc_half, rc_edge, rc_edge], atol=1e-6
    )


@pytest.mark.parametrize("rolloff", [0.05, 0.2, 0.35, 0.5, 1.0])
def test_pulses_are_continuous_across_their_singular_points(rolloff):
    for function, point in (
        (root_raised_cosine, 0.0),
        (root_raised_cosine, 0.25 / rolloff),
        (raised_cosine, 0.5 / rolloff),
    ):
        near = function(point + np.array([-2e-6, 0.0, 2e-6]), rolloff)
        assert np.ptp(near) < 2e-4  # slope below 10 a symbol, and what cancellation leaves near 0/0


@pytest.mark.parametrize("rolloff", [0.1, 0.25, 0.35, 1.0])
def test_cosine_pulses_agree_with_komm(rolloff):
    reference = komm.RaisedCosinePulse(rolloff)
    t = T + 0.00037  # off the singular points
    np.testing.assert_allclose(raised_cosine(t, rolloff), reference.waveform(t), atol=1e-10)
    np.testing.assert_allclose(root_raised_cosine(t, rolloff), reference.root().waveform(t), atol=1e-10)


def test_root_raised_cosine_agrees_with_the_filter_prototype_of_liquid():
    coefficients = np.asarray(liquid.firfilt("rrcos", k=4, m=12, beta=0.35).coefficients, dtype=np.float64)
    t = (np.arange(coefficients.size) - 48) / 4
    np.testing.assert_allclose(root_raised_cosine(t, 0.35), coefficients, atol=2e-6)  # its taps are float32


def test_gaussian_rectangle_is_a_rectangle_convolved_with_the_gaussian_of_komm():
    bt = 0.3
    t = np.linspace(-4, 4, 16001)
    # komm gives the Gaussian peak 1; its area is its spectrum at 0
    gaussian = komm.GaussianPulse(bt)
    kernel = gaussian.waveform(t) / abs(gaussian.spectrum(0.0))
    reference = np.convolve(rectangle(t), kernel, mode="same") * (t[1] - t[0])
    np.testing.assert_allclose(gaussian_rectangle(t, bt), reference, atol=1e-6)


@pytest.mark.parametrize("rolloff", [0.2, 0.35, 1.0])
def test_root_raised_cosine_has_unit_energy_and_its_square_in_time_is_raised_cosine(rolloff):
    step = 1 / 64
    t = np.arange(-400 * 64, 400 * 64 + 1) * step
    pulse = root_raised_cosine(t, rolloff)
    assert np.sum(pulse**2) * step == pytest.approx(1.0, abs=1e-6)
    shifted = np.array([np.sum(pulse[s:] * pulse[: pulse.size - s]) * step for s in (16, 32, 48, 64, 128)])
    np.testing.assert_allclose(shifted, raised_cosine([0.25, 0.5, 0.75, 1.0, 2.0], rolloff), atol=2e-5)


@pytest.mark.parametrize("rolloff", [0.1, 0.2, 0.25, 0.35, 0.5, 0.75, 1.0])
def test_raised_cosine_has_no_intersymbol_interference(rolloff):
    k = np.arange(1, 50)
    # at 1/(2 roll-off) a whole number the limit pi/4 sinc is 0 too
    np.testing.assert_allclose(raised_cosine(k, rolloff), 0.0, atol=1e-12)


def _opening(tau, rolloff, levels, span=2000):
    k = np.concatenate((np.arange(-span, 0), np.arange(1, span + 1)))
    return float(raised_cosine(tau, rolloff)) - (levels - 1) * float(np.abs(raised_cosine(tau - k, rolloff)).sum())


@pytest.mark.parametrize(
    ("rolloff", "at_a_tenth", "width_two", "width_four"),
    [
        # derived from the peak distortion definition (Proakis, sec. 9.2), checked by brute force
        (0.20, 0.6083, 0.5050, 0.1751),
        (0.25, 0.6521, 0.5605, 0.1981),
        (0.35, 0.7165, 0.6621, 0.2450),
        (0.50, 0.7847, 0.7842, 0.3231),
    ],
)
def test_worst_case_eye_of_raised_cosine_is_as_derived(rolloff, at_a_tenth, width_two, width_four):
    assert _opening(0.1, rolloff, 2) == pytest.approx(at_a_tenth, abs=1e-4)
    for levels, width in ((2, width_two), (4, width_four)):
        half = brentq(lambda tau, m=levels: _opening(tau, rolloff, m), 0.01, 0.499)
        assert 2 * half == pytest.approx(width, abs=2e-4)


@pytest.mark.parametrize(
    ("rolloff", "slope"), [(0.2, 3.78810), (0.5, np.pi / 2 + 2 * np.log(2) - 1), (1.0, 2 * (2 * np.log(2) - 1))]
)
def test_timing_sensitivity_of_raised_cosine_is_as_derived(rolloff, slope):
    # derived: 2 sum |cos(pi a k)| / (k |1 - 4 a^2 k^2|), checked by brute force
    small = 1e-6
    assert (1.0 - _opening(small, rolloff, 2)) / small == pytest.approx(slope, rel=1e-3)


@pytest.mark.parametrize(("rolloff", "tenth_db"), [(0.2, 16.12), (0.35, 17.30), (0.5, 18.66), (1.0, 25.52)])
def test_error_ratio_of_raised_cosine_off_its_instant_is_as_derived(rolloff, tenth_db):
    # derived: sum_k p(tau - k)^2 = 1 - a/4 + (a/4) cos 2 pi tau
    energies = raised_cosine(0.1 - np.arange(-4000, 4001), rolloff) ** 2
    assert energies.sum() == pytest.approx(1 - rolloff / 4 + rolloff / 4 * math.cos(0.2 * math.pi), abs=1e-6)
    main = float(raised_cosine(0.1, rolloff)) ** 2
    assert 10 * math.log10(main / (energies.sum() - main)) == pytest.approx(tenth_db, abs=0.006)


@pytest.mark.parametrize("rolloff", [0.1, 0.2, 0.25, 0.35, 0.5, 1.0])
@pytest.mark.parametrize("sps", [2, 4, 8])
def test_receive_filter_of_root_raised_cosine_leaves_interference_below_50_db(rolloff, sps):
    taps = receive_filter(Pulse("rrc", rolloff), sps)
    half = taps.size // 2
    reach = 300 * sps
    sent = root_raised_cosine(np.arange(-reach - half, reach + half + 1) / sps, rolloff)
    received = np.convolve(sent, taps, mode="valid")[::sps]
    middle = received.size // 2
    assert received[middle] == pytest.approx(1.0, abs=0.005)
    isi = np.delete(received, middle)
    floor_db = 10 * math.log10(np.sum(isi**2) / received[middle] ** 2)
    assert floor_db < -50.0, f"span {rrc_half_span(rolloff)}: {floor_db:.1f} dB"


@pytest.mark.parametrize("sps", [2.0, 4.0, 5.3, 16.0])
def test_receive_filter_of_a_rectangle_is_one_symbol_long(sps):
    taps = receive_filter(Pulse("rect"), sps)
    assert taps.size % 2 == 1
    assert taps.sum() == pytest.approx(1.0, abs=1e-12)
    np.testing.assert_allclose(taps, taps[::-1])


def test_gaussian_frequency_pulse_of_gmsk_has_area_one_and_its_3_db_bandwidth():
    # K. Murota and K. Hirade 1981 (from memory): rect * Gaussian of 3 dB bandwidth BT; transform = sinc(f) * Gaussian
    t = np.linspace(-8, 8, 32001)
    step = t[1] - t[0]
    pulse = gaussian_rectangle(t, 0.3)
    assert pulse.sum() * step == pytest.approx(1.0, abs=1e-9)
    at_bandwidth = np.sum(pulse * np.cos(2 * np.pi * 0.3 * t)) * step
    assert 20 * math.log10(at_bandwidth / np.sinc(0.3)) == pytest.approx(-10 * math.log10(2), abs=1e-6)


@pytest.mark.parametrize("text", ["rrc", "rrc:2", "rc:x", "rect:1", "gauss", "square", "taps", "none:1", ""])
def test_a_pulse_that_cannot_be_read_is_refused(text):
    with pytest.raises(DspError, match="pulse"):
        Pulse.parse(text)


@pytest.mark.parametrize("text", ["rrc:0.35", "rc:0.25", "rect", "gauss:0.5", "none"])
def test_a_pulse_reads_back_as_written(text):
    assert str(Pulse.parse(text)) == text
