"""Jitter taken apart: the dual-Dirac split, and lines in the timing error."""

import math

import numpy as np
import pytest
from scipy.special import ndtri

from dsp.eye import CROSSING_BINS
from dsp.jitter import BLOCK, TimingSpectrum, periodic_line, sample_response, split_jitter
from tests.measuring import over_the_air, spec_for

BER = 1e-6


def counted(times):
    return np.histogram(times, bins=CROSSING_BINS, range=(0.0, 1.0))[0]


def test_pure_noise_has_next_to_no_deterministic_part():
    times = np.random.default_rng(1).normal(0.5, 0.03, 200_000)
    found = split_jitter(counted(times), None, BER)
    assert found.random_rms_ui == pytest.approx(0.03, rel=0.06)
    assert found.deterministic_pp_ui < 0.01
    # twice the normal quantile at 1e-6: 9.506849
    assert found.total_pp_ui == pytest.approx(9.506849 * 0.03, rel=0.06)


def test_two_crossing_places_are_the_deterministic_part():
    """Dual-Dirac, 0.1 UI apart in noise of 0.02: total = deterministic + 2 Q random, 0.290 at 1e-6.

    Source: INCITS, Fibre Channel - Methodologies for Jitter and Signal Quality Specification (from memory).
    """
    rng = np.random.default_rng(2)
    times = 0.5 + rng.choice((-0.05, 0.05), 200_000) + rng.normal(0.0, 0.02, 200_000)
    found = split_jitter(counted(times), 0.02, BER)
    assert found.deterministic_pp_ui == pytest.approx(0.1, abs=0.012)
    assert found.random_rms_ui == pytest.approx(0.02, rel=0.05)
    assert found.total_pp_ui == pytest.approx(0.1 - 2 * float(ndtri(BER)) * 0.02, rel=0.05)
    assert found.total_pp_ui == pytest.approx(found.deterministic_pp_ui - 2 * float(ndtri(BER)) * found.random_rms_ui)


def test_few_crossings_are_not_split():
    assert split_jitter(counted(np.full(500, 0.5)), 0.01, BER) is None


def test_the_total_holds_what_a_long_run_shows():
    """The spread that a share of 1e-5 lies beyond on either side, extrapolated from 30 000 crossings, against 10 000 000."""
    rng = np.random.default_rng(3)

    def times(n):
        return 0.5 + rng.choice((-0.04, 0.0, 0.03), n) + rng.normal(0.0, 0.015, n)

    low, high = np.quantile(times(10_000_000), (1e-5, 1 - 1e-5))
    found = split_jitter(counted(times(30_000)), 0.015, 1e-5)
    assert found.total_pp_ui == pytest.approx(high - low, rel=0.06)


@pytest.mark.parametrize(
    ("scheme", "pulse", "sps", "peak", "hz"),
    [
        ("qpsk", "rrc:0.35", 4.0, 0.01, 500.0),  # above the loop's bandwidth
        ("qpsk", "rrc:0.35", 4.0, 0.05, 30.0),  # what the loop follows
        ("qpsk", "rrc:0.35", 4.0, 0.05, 1200.0),  # fast enough to hide from the symbols' own samples
        ("pam2", "rect", 32.0, 0.06, 300.0),
        ("fsk2", "rect", 32.0, 0.03, 777.0),
    ],
)
def test_a_sine_in_the_timing_is_told_with_its_size_and_frequency(scheme, pulse, sps, peak, hz):
    more = {"t_over_tau": 2.0} if scheme == "pam2" else {}
    spec = spec_for(scheme, pulse, sps, 12_000, snr_db=28.0, jitter_sine_ui=peak, jitter_sine_hz=hz, **more)
    reading = over_the_air(spec).reading
    assert reading.periodic_jitter_hz == pytest.approx(hz, abs=1.0)
    assert reading.periodic_jitter_ui == pytest.approx(peak, rel=0.1)


@pytest.mark.parametrize(
    "more",
    [
        {"snr_db": 14.0},
        {"snr_db": 25.0, "jitter_rms_ui": 0.03},
        {"snr_db": 25.0, "phase_noise_deg": 0.3},
        {"snr_db": 25.0, "echoes": ((1.0, 0.3),)},
        {"snr_db": 25.0, "bits": "prbs7", "echoes": ((1.3, 0.2),)},
    ],
)
def test_no_line_without_one(more):
    reading = over_the_air(spec_for("qpsk", "rrc:0.35", 4.0, 12_000, seed=9, **more)).reading
    assert reading.periodic_jitter_hz is None
    assert reading.periodic_jitter_ui is None


def test_noise_shows_a_line_less_than_once_in_a_hundred_spectra():
    rng = np.random.default_rng(4)
    window = np.hanning(BLOCK + 1)[:-1]
    found = 0
    for _ in range(100):
        spectra = np.abs(np.fft.rfft(rng.normal(size=(6, BLOCK)) * window, axis=1)) ** 2
        found += periodic_line(spectra.sum(axis=0), 6) is not None
    assert found <= 1


def test_one_block_says_nothing():
    assert periodic_line(np.ones(BLOCK // 2 + 1), 1) is None


def test_a_pulse_with_slopes_beside_it_hides_fast_jitter():
    """A slope at the neighbours alone shows a jitter by cos(2 pi f) (derived here)."""
    slopes = np.asarray([0.0, 1.0, 0.0, -1.0, 0.0])
    for frequency in (0.0, 0.1, 0.25, 0.4):
        assert sample_response(slopes, 2, frequency) == pytest.approx(math.cos(2 * math.pi * frequency), abs=1e-12)


def test_the_spectrum_does_not_depend_on_how_the_run_is_cut():
    rng = np.random.default_rng(6)
    n = 3 * BLOCK
    late = rng.normal(size=n)
    wave = rng.normal(size=(8, n)).astype(np.float32)
    decided = np.sign(wave[:1])
    whole = TimingSpectrum(8, corners=False).push(late, (wave,), decided)
    assert len(whole) == 3
    # a cut costs the two symbols at it their error, so only what has none there is compared
    quiet = np.zeros_like(wave)
    pieces = TimingSpectrum(8, corners=False)
    found = []
    for part in np.split(np.arange(n), (100, 101, 2048, 5000)):
        found += pieces.push(late[part], (np.ascontiguousarray(quiet[:, part]),), decided[:, part])
    alone = TimingSpectrum(8, corners=False).push(late, (quiet,), decided)
    np.testing.assert_array_equal(found, alone)
