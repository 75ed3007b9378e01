"""The loops: detectors against closed forms, noise bandwidth by measurement, step responses, cuts, odd input."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from dsp._kernels.tracking import LATE as ANSWERS_LATE
from dsp.acquisition import acquire
from dsp.filters import Oscillator
from dsp.frontend import FrontEnd, matched_filter, plan
from dsp.link import find_scheme
from dsp.loops import exact_gains
from dsp.pulses import raised_cosine
from dsp.tracking import Tracker, TrackStart, level_units, tables_for
from tests.dsp.streams import link_of, send

DETECTORS = ("gardner", "mueller-muller", "derivative")
ROLLOFFS = (0.2, 0.35, 0.5, 1.0)


def rails_of(samples):
    if np.iscomplexobj(samples):
        return np.ascontiguousarray(samples.real), np.ascontiguousarray(samples.imag)
    return (samples,)


def start_at(sent, scheme, detector, *, late_ui=0.0, slope=1e9, sps=4.0, rate_error=0.0, first=20, scale=1.0):
    """A start at the true instant of symbol ``first``, ``late_ui`` after it; decisions stay at the true instants."""
    scheme = find_scheme(scheme)
    return TrackStart(
        float(sent.instants[first]) + late_ui * sps,
        sps * (1 + rate_error),
        0.0,
        0.0,
        scale * sent.gain * np.tile(scheme.rail_levels, (scheme.rails, 1)),
        detector,
        slope,
        offset_ui=-late_ui,
    )


def tracker_for(sent, scheme, start, rolloff, *, bandwidth=0.005, sps=4.0):
    tables = tables_for(sps, 0.5 * (1 + rolloff))
    return Tracker(find_scheme(scheme), start, tables, timing_bandwidth=bandwidth, carrier_bandwidth=0.005)


# -- S-curves -----------------------------------------------------------------------------------------------------------


def mean_output(sent, scheme, detector, late_ui, rolloff, scale=1.0):
    """The kernel's own detector in an open loop: its sum is read off the integrator of a loop too weak to move."""
    slope = 1e9
    start = start_at(sent, scheme, detector, late_ui=late_ui, slope=slope, scale=scale)
    tracker = tracker_for(sent, scheme, start, rolloff)
    rails = tuple(rail * np.float32(scale) for rail in rails_of(sent.samples))
    count = tracker.push(rails).values.shape[1]
    integral = exact_gains(0.005, ANSWERS_LATE if detector == "derivative" else 0).integral / slope
    return -tracker.rate / (integral * count)


@pytest.fixture(scope="module", params=ROLLOFFS, ids=lambda a: f"rolloff {a}")
def open_loop(request):
    return request.param, send("qpsk", pulse=f"rc:{request.param}", symbols=60_000)


LATE = (-0.25, -0.1, 0.05, 0.1, 0.25)
ENERGY = 2.0  # of QPSK with rails at +-1


def test_the_gardner_detector_has_the_published_s_curve(open_loop):
    """Amplitude 4 sin(pi a/2)/(pi (4 - a^2)) a unit of energy.

    F. M. Gardner, IEEE Trans. Commun. 34(5), 1986; constant: M. Rice, Digital Communications, 2009, eq. 8.45.
    """
    rolloff, sent = open_loop
    amplitude = 4 * np.sin(np.pi * rolloff / 2) / (np.pi * (4 - rolloff**2))
    for late in LATE:
        expected = ENERGY * amplitude * np.sin(2 * np.pi * late)
        assert mean_output(sent, "qpsk", "gardner", late, rolloff) == pytest.approx(expected, rel=0.01)


def test_the_mueller_muller_detector_has_the_published_s_curve(open_loop):
    """p(tau + T) - p(tau - T): K. H. Mueller and M. Mueller, IEEE Trans. Commun. 24(5), 1976; Rice, eq. 8.50."""
    rolloff, sent = open_loop
    for late in LATE:
        expected = ENERGY * float(raised_cosine(late + 1, rolloff) - raised_cosine(late - 1, rolloff))
        assert mean_output(sent, "qpsk", "mueller-muller", late, rolloff) == pytest.approx(expected, rel=0.01)


def test_the_derivative_detector_follows_the_slope_of_the_pulse(open_loop):
    """E[a dy/dt] = E p'(tau): the decision-directed maximum-likelihood detector (Mengali and D'Andrea, 1997, from memory)."""
    rolloff, sent = open_loop
    for late in LATE:
        step = 1e-4
        slope = float(raised_cosine(late + step, rolloff) - raised_cosine(late - step, rolloff)) / (2 * step)
        assert mean_output(sent, "qpsk", "derivative", late, rolloff) == pytest.approx(ENERGY * slope, rel=0.01)


@pytest.mark.parametrize("detector", DETECTORS)
@pytest.mark.parametrize(("scheme", "energy"), [("pam2", 1.0), ("pam4", 5.0), ("16qam", 10.0)])
def test_detectors_scale_with_the_energy_of_the_symbols_and_not_with_the_gain(detector, scheme, energy):
    sent = send(scheme, pulse="rc:0.5", symbols=40_000)
    late, rolloff = 0.08, 0.5
    expected = {
        "gardner": 4 * np.sin(np.pi * rolloff / 2) / (np.pi * (4 - rolloff**2)) * np.sin(2 * np.pi * late),
        "mueller-muller": float(raised_cosine(late + 1, rolloff) - raised_cosine(late - 1, rolloff)),
        "derivative": float(raised_cosine(late + 1e-4, rolloff) - raised_cosine(late - 1e-4, rolloff)) / 2e-4,
    }[detector]
    measured = [mean_output(sent, scheme, detector, late, rolloff, scale) for scale in (1.0, 0.003, 700.0)]
    assert measured[0] == pytest.approx(energy * expected, rel=0.02)
    np.testing.assert_allclose(measured[1:], measured[0], rtol=1e-3)


# -- noise bandwidth ----------------------------------------------------------------------------------------------------


def measured_bandwidth(sent, instants, sps, first, bandwidth):
    """BnT of the loop: the power of its response from the jitter sent to its instants, by their cross-spectrum (Welch).

    What the detector adds of its own is not correlated with the jitter and averages out.
    """
    n = instants.size
    timing = sent.instants[first : first + n] / sps - np.arange(n)
    output = instants / sps - np.arange(n)
    length = round(10 / bandwidth)
    settle = round(3 / bandwidth)
    more = {"nperseg": length, "detrend": "linear"}
    frequency, cross = signal.csd(timing[settle:], output[settle:], **more)
    response = np.abs(cross / signal.welch(timing[settle:], **more)[1])
    inside = (frequency > 0) & (frequency < 6 * bandwidth)
    return float(np.sum(response[inside] ** 2)) / length + 0.5 / length  # half a bin about 0, where the response is 1


@pytest.mark.parametrize("bandwidth", [0.01, 0.02])
@pytest.mark.parametrize(
    ("scheme", "detector"),
    [("qpsk", "gardner"), ("qpsk", "mueller-muller"), ("qpsk", "derivative"), ("pam2", "crossing")],
)
def test_the_noise_bandwidth_measured_is_bnt(scheme, detector, bandwidth):
    """Timing noise of 0.02 UI in, the loop as acquisition set it up; within 10 % of what was asked for.

    A square wave at a whole number of samples a symbol would show no jitter below half a sample.
    """
    pulse, sps = ("rect", 20.37) if detector == "crossing" else ("rrc:0.5", 4.0)
    sent = send(scheme, sps, pulse, symbols=60_000, jitter_rms_ui=0.02, snr_db=45.0)
    link = link_of(scheme, sps, pulse)
    front = plan(link, complex_in=scheme == "qpsk")
    rails = FrontEnd(link, front).push(sent.samples)
    found = acquire(
        link,
        front,
        tuple(rail[: int(4000 * sps)] for rail in rails),
        detector=detector,
        timing_bandwidth=bandwidth,
        carrier_bandwidth=0.005,
    )
    filters = matched_filter(link, front)
    filtered = filters.push(Oscillator(found.carrier).push(rails) if scheme == "qpsk" else rails)
    tracker = Tracker(
        link.scheme, found.start, tables_for(sps, 0.75), timing_bandwidth=bandwidth, carrier_bandwidth=0.005
    )
    track = tracker.push(filtered)
    instants = track.instants[:-1]
    first = round(((instants[0] - filters.delay) - sent.instants[0]) / sps)
    measured = measured_bandwidth(sent, instants, sps, first, bandwidth)
    assert measured == pytest.approx(bandwidth, rel=0.1)


# -- step responses -----------------------------------------------------------------------------------------------------


def timing_error(sent, track, sps=4.0, first=20):
    """Loop's instants against the truth, UI, late positive."""
    n = track.values.shape[1]
    return (track.instants[:n] - sent.instants[first : first + n]) / sps


def expected_error(gains, delay, offset, rate_error, count):
    """The linear loop's error by its difference equation."""
    error = np.zeros(count)
    now, rate = offset, 0.0
    for k in range(count):
        error[k] = now
        seen = error[k - delay] if k >= delay else 0.0
        rate -= gains.integral * seen
        now += (1 + rate_error) * (1 + rate - gains.proportional * seen) - 1
    return error


SLOPES = {"mueller-muller": -1.570796 * ENERGY, "gardner": 1.508494 * ENERGY}  # roll-off 0.5; Rice eqs. 8.50, 8.45


@pytest.mark.parametrize("ppm", [100.0, -100.0])
def test_a_clock_100_ppm_off_is_caught_as_the_loop_equation_says(ppm):
    sent = send("qpsk", pulse="rc:0.5", symbols=3000)
    start = start_at(sent, "qpsk", "mueller-muller", slope=SLOPES["mueller-muller"], rate_error=ppm * 1e-6)
    tracker = tracker_for(sent, "qpsk", start, 0.5, bandwidth=0.01)
    error = timing_error(sent, tracker.push(rails_of(sent.samples)))
    expected = expected_error(exact_gains(0.01), 0, 0.0, ppm * 1e-6, error.size)
    # the detector's own noise grows with the error: a tenth of it
    np.testing.assert_allclose(error, expected, atol=4e-4)
    # 0.002451 UI with Rice's gains, which are a shade wider (evaluated beforehand)
    assert np.abs(error).max() == pytest.approx(0.00247, rel=0.08)
    assert np.abs(error[-500:]).mean() < 1e-4
    assert tracker.rate == pytest.approx(-ppm * 1e-6, rel=0.03)


@pytest.mark.parametrize("detector", ["mueller-muller", "gardner"])
def test_a_start_beside_the_instant_is_pulled_in_at_the_loop_s_pace(detector):
    sent = send("qpsk", pulse="rc:0.5", symbols=3000)
    late = 0.05
    start = start_at(sent, "qpsk", detector, slope=SLOPES[detector])
    start = TrackStart(start.instant + late * 4, 4.0, 0.0, 0.0, start.means, detector, SLOPES[detector])
    error = timing_error(sent, tracker_for(sent, "qpsk", start, 0.5, bandwidth=0.01).push(rails_of(sent.samples)))
    expected = expected_error(exact_gains(0.01), 0, late, 0.0, error.size)
    # Gardner's detector adds pattern noise, 0.4 of BnT rms at this roll-off, and is late by 0.6 BnT
    np.testing.assert_allclose(error, expected, atol=0.02 if detector == "gardner" else 0.006)
    assert np.abs(error[400:]).mean() < (0.01 if detector == "gardner" else 1e-3)


def test_the_carrier_loop_takes_out_a_phase_and_a_turn():
    sent = send("qpsk", pulse="rc:0.5", symbols=3000, carrier_hz=8.0, carrier_phase_deg=12.0)
    start = start_at(sent, "qpsk", "mueller-muller", slope=SLOPES["mueller-muller"])
    tracker = tracker_for(sent, "qpsk", start, 0.5)
    track = tracker.push(rails_of(sent.samples))
    assert tracker.turn == pytest.approx(8.0 / 1e4, rel=0.01)
    truth = 8.0 / 4e4 * track.instants[:-1] + 12.0 / 360
    left = track.phases[:-1] - truth
    assert abs(left[0]) > 0.03
    np.testing.assert_allclose(left[-500:], 0.0, atol=1e-3)
    np.testing.assert_array_equal(track.decided[0], sent.symbols[20 : 20 + track.decided.shape[1]].real)


# -- what it promises of its output -------------------------------------------------------------------------------------


@pytest.mark.parametrize("scheme", ["pam4", "qpsk", "oqpsk", "pi4dqpsk", "8psk", "16qam"])
def test_values_and_decisions_are_the_symbols_sent(scheme):
    sent = send(scheme, sps=5.3, pulse="rc:0.5", symbols=2000)
    energy = find_scheme(scheme).symbol_energy()
    slope = -1.570796 * energy
    start = start_at(sent, scheme, "mueller-muller", slope=slope, sps=5.3)
    if scheme == "pi4dqpsk":  # the frame turns by an eighth a symbol from symbol 0 on
        start = TrackStart(start.instant, 5.3, 20 / 8, 0.0, start.means, "mueller-muller", slope)
    track = tracker_for(sent, scheme, start, 0.5, sps=5.3).push(rails_of(sent.samples))
    n = track.values.shape[1]
    assert n > 1900
    rails = find_scheme(scheme).rails
    truth = sent.symbols[20 : 20 + n]
    for rail in range(rails):
        part = truth.imag if rail else truth.real
        np.testing.assert_allclose(track.decided[rail], part, rtol=1e-6)
        np.testing.assert_allclose(track.values[rail], part, atol=0.03)
        levels = np.asarray(find_scheme(scheme).rail_levels)
        np.testing.assert_allclose(levels[track.classes[rail]], part, rtol=1e-6)


def test_levels_are_followed_while_the_gain_drifts():
    sent = send("pam4", pulse="rc:0.5", symbols=20_000)
    ramp = np.linspace(1.0, 1.5, sent.samples.size).astype(np.float32)
    start = start_at(sent, "pam4", "mueller-muller", slope=-1.570796 * 5)
    tracker = tracker_for(sent, "pam4", start, 0.5)
    tracks = [tracker.push((part,)) for part in np.array_split(sent.samples * ramp, 40)]
    decided = np.concatenate([track.decided[0] for track in tracks])
    np.testing.assert_array_equal(decided, sent.symbols[20 : 20 + decided.size])
    # each of four levels comes every fourth symbol: a time constant of 4096 symbols, by which the levels lag the ramp
    lagging = 1.5 - 0.5 * 4096 / 20_000
    np.testing.assert_allclose(tracker.means[0], lagging * sent.gain * np.array([-3, -1, 1, 3]), rtol=0.01)


def test_an_impulse_does_not_throw_the_clock():
    sent = send("pam2", pulse="rc:0.5", symbols=4000)
    samples = sent.samples.copy()
    samples[4000] = 100.0
    start = start_at(sent, "pam2", "gardner", slope=1.508494)
    error = timing_error(sent, tracker_for(sent, "pam2", start, 0.5).push((samples,)))
    assert np.abs(error).max() < 0.5
    assert np.abs(error[-800:]).mean() < 0.02


@settings(max_examples=15, deadline=None)
@given(cuts=st.lists(st.integers(0, 12_000), max_size=8))
@pytest.mark.parametrize("detector", DETECTORS)
def test_cuts_decide_only_when_symbols_come_out(detector, cuts):
    """The level unit is fitted at each push, so values may differ by its rounding, not by more."""
    sent = send("qpsk", pulse="rc:0.5", symbols=3000)
    slope = {"gardner": 1.508494, "mueller-muller": -1.570796, "derivative": -1.94}[detector] * ENERGY
    whole = tracker_for(sent, "qpsk", start_at(sent, "qpsk", detector, slope=slope), 0.5).push(rails_of(sent.samples))
    tracker = tracker_for(sent, "qpsk", start_at(sent, "qpsk", detector, slope=slope), 0.5)
    tracks = [tracker.push(rails_of(part)) for part in np.split(sent.samples, sorted(cuts))]
    instants = np.concatenate([track.base + track.instants[:-1] for track in tracks])
    assert instants.size == whole.instants.size - 1
    np.testing.assert_allclose(instants, whole.instants[:-1], atol=0.01)
    for name in ("decided", "classes"):
        np.testing.assert_array_equal(
            np.concatenate([getattr(track, name) for track in tracks], axis=1), getattr(whole, name)
        )
    np.testing.assert_allclose(np.concatenate([t.phases[:-1] for t in tracks]), whole.phases[:-1], atol=2e-4)
    # the last instant of each track is the first of the next
    for earlier, later in pairwise(tracks):
        assert earlier.base + earlier.instants[-1] == pytest.approx(later.base + later.instants[0], abs=1e-9)


@pytest.mark.parametrize("detector", DETECTORS)
@pytest.mark.parametrize("scheme", ["pam2", "qpsk", "8psk"])
def test_nothing_a_constant_and_silence_make_no_nan_and_always_go_forward(scheme, detector):
    sent = send(scheme, pulse="rc:0.5", symbols=300)
    tracker = tracker_for(
        sent, scheme, start_at(sent, scheme, detector, slope=-3.0 if detector != "gardner" else 3.0), 0.5
    )
    rails = 2 if find_scheme(scheme).kind == "carrier" else 1
    for value, size in ((0.0, 0), (0.0, 3000), (0.7, 3000), (0.0, 1)):
        track = tracker.push((np.full(size, value, np.float32),) * rails)
        for array in (track.instants, track.phases, track.values, track.decided, track.slopes, track.gain, track.zero):
            assert np.all(np.isfinite(array))
        assert np.all(np.diff(track.instants) > 0)


def test_level_units_are_the_least_squares_scale_and_middle():
    nominal = np.array([-3.0, -1.0, 1.0, 3.0])
    means = np.array([0.4 * nominal + 0.1, [-3.1, -0.8, 1.3, 2.9]])
    gain, zero = level_units(means, nominal)
    for rail in range(2):
        slope, middle = np.polyfit(nominal, means[rail], 1)
        assert gain[rail] == pytest.approx(slope)
        assert zero[rail] == pytest.approx(middle)
    assert level_units(np.zeros((1, 4)), nominal)[0][0] > 0.0  # silence: no division by zero later on
