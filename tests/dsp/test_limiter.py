"""A bend of the amplitude: found where there is one, with what it does; not found where there is none."""

import math

import numpy as np
import pytest

from dsp.figures import Figures
from dsp.limiter import RATE, compression, raw_response
from dsp.pulses import Pulse, receive_filter
from tests.dsp.streams import link_of, run, send


def figures_of(scheme, symbols=16_000, pulse="rrc:0.35", sps=4.0, **defects):
    chain = run(link_of(scheme, sps, pulse), send(scheme, sps, pulse, symbols, **defects).samples)
    return Figures(chain.total, chain.context())


@pytest.mark.parametrize("scheme", ["pam2", "pam4", "qpsk", "16qam"])
def test_a_clean_link_has_no_bend(scheme):
    assert figures_of(scheme, snr_db=30.0)._limiter is None


@pytest.mark.parametrize("scheme", ["pam2", "qpsk"])
def test_what_clipping_leaves_in_the_samples_is_explained_by_it(scheme):
    figures = figures_of(scheme, snr_db=45.0, clipping="soft", clip_at=0.7)
    limiter = figures._limiter
    variance = limiter.bend(figures._pattern.model(0.0).taps.reshape(limiter.rest.size, -1)).variance
    assert np.all(limiter.rest < 0.1 * variance)


def test_other_defects_are_no_bend():
    defects = {"snr_db": 28.0, "jitter_rms_ui": 0.03, "phase_noise_deg": 0.3, "echoes": ((1.0, 0.2 + 0.1j),)}
    assert figures_of("qpsk", **defects)._limiter is None


def test_the_response_ahead_of_the_filter_is_that_which_the_filter_makes_of():
    matched = receive_filter(Pulse.parse("rrc:0.35"), RATE)
    raw = np.zeros(21 * RATE)
    middle = 10 * RATE
    half = min(matched.size // 2, middle)
    raw[middle - half : middle + half + 1] = matched[matched.size // 2 - half : matched.size // 2 + half + 1]
    behind = np.convolve(raw, matched)[matched.size // 2 :][: raw.size]
    found = raw_response(behind, matched)
    assert np.abs(found - raw).max() < 0.03 * np.abs(raw).max()


def test_compression_of_a_cubic_law_in_closed_form():
    axis = np.array([-3.0, -1.0, 1.0, 3.0])
    points = (axis[:, None] + 1j * axis).ravel()
    bend = 0.004 * np.exp(0.3j)
    shifts = -bend * points * np.abs(points) ** 2
    low, turn = compression(points, shifts, np.full(16, 1000.0), 1e-4)
    gain = 1.0 - bend * 18.0  # of the corner, against 1 at small amplitudes
    assert low == pytest.approx(-20 * math.log10(abs(gain)), abs=1e-6)
    assert turn == pytest.approx(math.degrees(np.angle(gain)), abs=1e-6)


def test_points_of_one_amplitude_tell_no_compression():
    points = np.exp(0.5j * np.pi * np.arange(4)) * (1 + 1j)
    assert compression(points, 0.1 * points, np.full(4, 500.0), 1e-3) is None


def test_chance_is_no_compression():
    rng = np.random.default_rng(6)
    axis = np.array([-3.0, -1.0, 1.0, 3.0])
    points = (axis[:, None] + 1j * axis).ravel()
    found = 0
    for _ in range(200):
        shifts = (rng.standard_normal(16) + 1j * rng.standard_normal(16)) * math.sqrt(0.02 / 2 / 1000)
        found += compression(points, shifts, np.full(16, 1000.0), 0.02) is not None
    assert found <= 2


def test_soft_clipping_shows_as_compression_of_the_outer_levels():
    figures = figures_of("pam4", pulse="rc:0.5", snr_db=40.0, clipping="soft", clip_at=0.9, gain=0.2)
    low, _ = figures._compression()
    # the wave at the instants is the point itself: tanh bends 3 units against none, and a cubic law is fitted to that
    x = 0.2 * 3 / 0.9
    assert low == pytest.approx(-20 * math.log10(math.tanh(x) / x), abs=0.25)
