"""Waveforms against direct sums of the analytic pulses, closed forms and other libraries."""

import math

import liquid
import numpy as np
import pytest
from scipy.integrate import quad
from scipy.signal import lfilter, welch

from dsp.pulses import Pulse, gaussian_rectangle, raised_cosine, root_raised_cosine
from dsp.transmitter import TransmitSpec, transmit
from dsp.transmitter.waveform import POINTS, half_span, low_pass


def _spec(**changes):
    spec = {
        "scheme": "pam4",
        "symbol_rate_hz": 1.0,
        "sample_rate_hz": 4.0,
        "pulse": Pulse("rrc", 0.35),
        "symbols": 1000,
        "gain": 1.0,
    }
    return TransmitSpec(**{**spec, **changes})


def _db(error, reference):
    return 20 * math.log10(np.sqrt(np.mean(np.abs(error) ** 2)) / np.sqrt(np.mean(np.abs(reference) ** 2)))


SHAPES = {"rrc": root_raised_cosine, "rc": raised_cosine, "gauss": gaussian_rectangle}


def _direct(sent, sps, pulse, n, reach=None):
    """Sum over all symbols sent of the analytic pulse, each at its own instant."""
    t = (n[:, None] - sent.instants[None, :]) / sps
    shape = SHAPES[pulse.family](t, pulse.number)
    if reach is not None:
        shape = np.where(np.abs(t) <= reach, shape, 0.0)
    return shape @ sent.symbols


@pytest.mark.parametrize(
    "pulse", [Pulse("rrc", 0.1), Pulse("rrc", 0.35), Pulse("rrc", 1.0), Pulse("rc", 0.25), Pulse("gauss", 0.3)], ids=str
)
@pytest.mark.parametrize("sps", [2.0, 3.7, 36.6])
@pytest.mark.parametrize("jitter", [0.0, 0.02])
def test_samples_are_the_sum_of_analytic_pulses_at_their_true_instants(pulse, sps, jitter):
    if pulse.family == "gauss" and jitter:
        pytest.skip("jitter moves the edges of a held pulse; see the test of edges")
    sent = transmit(_spec(pulse=pulse, sample_rate_hz=sps, symbols=2400, jitter_rms_ui=jitter))
    n = np.random.default_rng(8).integers(int(700 * sps), int(1700 * sps), size=400)
    cut = _direct(sent, sps, pulse, n, reach=half_span(pulse))
    assert _db(sent.samples[n] - cut, cut) < -85
    whole = _direct(sent, sps, pulse, n)
    assert (
        _db(sent.samples[n] - whole, whole) < -75
    )  # -80 dB by design of half_span; the rms of 400 samples is uncertain


@pytest.mark.parametrize("pulse", [Pulse("rrc", 1.0), Pulse("rc", 0.5)], ids=str)
def test_jitter_of_several_symbols_moves_whole_pulses(pulse):
    sent = transmit(_spec(pulse=pulse, sample_rate_hz=3.7, symbols=1500, jitter_sine_ui=4.0, jitter_sine_hz=0.003))
    n = np.random.default_rng(8).integers(int(500 * 3.7), int(1000 * 3.7), size=400)
    cut = _direct(sent, 3.7, pulse, n, reach=half_span(pulse))
    assert _db(sent.samples[n] - cut, cut) < -90


@pytest.mark.parametrize(
    ("pulse", "ratio"), [(Pulse("rect"), None), (Pulse("rect"), 2.0), (Pulse("gauss", 2.0), None)], ids=str
)
def test_jitter_of_several_symbols_moves_the_edges_of_a_held_stream(pulse, ratio):
    sps = 25
    sent = transmit(
        _spec(
            pulse=pulse, sample_rate_hz=sps, symbols=6000, jitter_sine_ui=4.0, jitter_sine_hz=0.0031, t_over_tau=ratio
        )
    )
    edges = sent.instants - sps / 2
    n = np.arange(100 * sps, 5900 * sps)  # over three chunks; edges are late at their seams
    held = np.searchsorted(edges, n) - 1
    well_inside = (n - edges[held] > (0.0 if pulse.family == "rect" else 0.35 * sps)) & (
        edges[held + 1] - n > 0.35 * sps
    )
    if ratio is None:
        np.testing.assert_allclose(sent.samples[n][well_inside], sent.symbols[held][well_inside], atol=2e-3)
        return
    # behind the low-pass the distance to the level decays, wherever the edge is
    after = sent.samples[n + 1][well_inside] - sent.symbols[held][well_inside]
    before = sent.samples[n][well_inside] - sent.symbols[held][well_inside]
    np.testing.assert_allclose(after, before * math.exp(-ratio / sps), atol=1e-5)


def test_clock_error_and_drift_are_exact_warps_of_time():
    spec = _spec(sample_rate_hz=3.3, symbols=2000, clock_ppm=150.0, clock_drift_ppm_s=0.05, delay_ui=0.4)
    sent = transmit(spec)
    n = np.random.default_rng(8).integers(2600, 4000, size=300)
    u = n / 3.3 * (1 + 150e-6 + 0.025e-6 * n / 3.3) - (0.5 - 0.5 / 3.3 + 0.4)
    reference = root_raised_cosine(u[:, None] - np.arange(sent.symbols.size), 0.35) @ sent.symbols
    assert _db(sent.samples[n] - reference, reference) < -75
    # the instants invert the same clock
    back = sent.instants / 3.3 * (1 + 150e-6 + 0.025e-6 * sent.instants / 3.3) - (0.5 - 0.5 / 3.3 + 0.4)
    np.testing.assert_allclose(back, np.arange(sent.symbols.size), atol=1e-9)


@pytest.mark.parametrize("rolloff", [0.05, 0.2, 0.35, 1.0])
def test_truncation_of_the_transmit_pulse_leaves_no_interference_above_75_db(rolloff):
    half = half_span(Pulse("rrc", rolloff))
    step = 1 / 16
    cut = root_raised_cosine(np.arange(-half * 16, half * 16 + 1) * step, rolloff)
    full = root_raised_cosine(np.arange(-1200 * 16, 1200 * 16 + 1) * step, rolloff)
    from scipy.signal import fftconvolve

    received = fftconvolve(cut, full, mode="full") * step
    middle = received.size // 2
    at_symbols = received[middle % 16 :: 16]
    main = np.argmax(at_symbols)
    assert at_symbols[main] == pytest.approx(1.0, abs=1e-5)
    assert 10 * math.log10(np.sum(np.delete(at_symbols, main) ** 2)) < -75


def test_spectrum_of_a_root_raised_cosine_stream_ends_at_its_band_edge():
    sent = transmit(_spec(scheme="qpsk", sample_rate_hz=4.0, symbols=30000))
    f, density = welch(
        sent.samples.astype(np.complex128), fs=4.0, window="blackmanharris", nperseg=1024, return_onesided=False
    )
    inside = density[np.abs(f) < 0.3].mean()
    outside = density[np.abs(f) > (1 + 0.35) / 2 + 0.02]
    assert 10 * math.log10(outside.max() / inside) < -72
    half_power = density[np.abs(np.abs(f) - 0.5) < 0.003].mean()
    assert 10 * math.log10(half_power / inside) == pytest.approx(-10 * math.log10(2), abs=0.4)


def test_liquid_receives_our_stream_and_finds_our_symbols():
    sent = transmit(_spec(scheme="qpsk", sample_rate_hz=4.0, symbols=4000, snr_db=30.0, carrier_hz=2e-3, gain=0.7))
    tracker = liquid.symtrack(ftype="rrcos", k=4, m=12, beta=0.35, ms="qpsk")
    received = np.asarray(tracker.execute(sent.samples))[2000:3600]
    decided = np.sign(received.real) + 1j * np.sign(received.imag)
    scale = np.abs(received).mean() / math.sqrt(2)
    error = received / scale - decided
    assert 10 * math.log10(2 / np.mean(np.abs(error) ** 2)) > 20
    ours = sent.symbols
    best = 0.0
    for lag in range(1900, 2110):
        agreement = abs(np.vdot(ours[lag : lag + decided.size], decided)) / (2 * decided.size)
        best = max(best, agreement)
    assert best > 0.999  # every symbol, but for the quarter turn that no receiver knows


# --- rectangular pulses and the one-pole low-pass


@pytest.mark.parametrize(
    ("ratio", "inner", "rms_rail", "mer_db", "crossing_pp"),
    [
        # closed forms of a one-pole low-pass driven by NRZ, x = exp(-T/tau): 1 - 2x, x sqrt((1-x)/(1+x)), (1-x^2)/x^2
        # in dB, -tau ln(1-x); derived, checked by brute force over all histories
        (1.0, 0.264241, 0.250081, 8.0544, 0.458675),
        (1.5, 0.553740, 0.177826, 12.8070, 0.168322),
        (2.0, 0.729329, 0.118106, 17.2915, 0.072707),
        (3.0, 0.900426, 0.047367, 26.0469, 0.017023),
        (5.0, 0.986524, 0.006693, 43.4293, 0.001352),
    ],
)
def test_one_pole_low_pass_has_its_closed_form_levels_and_crossings(ratio, inner, rms_rail, mer_db, crossing_pp):
    sps = 8
    # the delay puts every eighth sample on the end of a bit
    sent = transmit(
        _spec(
            scheme="pam2", pulse=Pulse("rect"), sample_rate_hz=sps, symbols=40000, delay_ui=0.5 / sps, t_over_tau=ratio
        )
    )
    x = math.exp(-ratio)
    ends = sent.samples[8::8].astype(np.float64)
    levels = ends * sent.symbols[: ends.size]
    assert levels.min() == pytest.approx(inner, abs=2e-4)
    assert levels.max() == pytest.approx(1.0, abs=2e-4)
    # rms of the rails and the error ratio to their own mean, whose sampling error over 40000 bits is below 1.5 %
    assert levels.std() == pytest.approx(rms_rail, rel=0.015)
    assert 20 * math.log10((1 - x) / levels.std()) == pytest.approx(mer_db, abs=0.13)
    # from the level before an edge the exponential crosses 0 at tau ln(1 + |level|)
    before = ends[:-1][sent.symbols[1 : ends.size] * ends[:-1] < 0]
    crossings = np.log1p(np.abs(before)) / ratio
    assert np.ptp(crossings) == pytest.approx(crossing_pp, abs=3e-4)


def test_one_pole_response_between_bits_is_the_exponential_itself():
    ratio, sps = 1.7, 50
    sent = transmit(
        _spec(scheme="pam2", pulse=Pulse("rect"), sample_rate_hz=sps, symbols=200, delay_ui=0.5 / sps, t_over_tau=ratio)
    )
    state = float(sent.samples[0])
    reference = []
    for symbol in sent.symbols:
        t = np.arange(sps) / sps
        reference.append(symbol + (state - symbol) * np.exp(-t * ratio))
        state = symbol + (state - symbol) * math.exp(-ratio)
    np.testing.assert_allclose(sent.samples, np.concatenate(reference)[: sent.samples.size], atol=2e-7)


def test_a_plain_rectangular_stream_holds_its_levels_and_halves_them_on_an_edge():
    sent = transmit(_spec(pulse=Pulse("rect"), sample_rate_hz=5.0, symbols=200))
    np.testing.assert_array_equal(sent.samples, np.repeat(sent.symbols, 5).astype(np.float32))
    on_edges = transmit(_spec(pulse=Pulse("rect"), sample_rate_hz=4.0, symbols=200, delay_ui=0.125))
    np.testing.assert_array_equal(
        on_edges.samples[4::4], 0.5 * (on_edges.symbols[1:] + on_edges.symbols[:-1])[: on_edges.samples[4::4].size]
    )


def test_jitter_moves_the_edges_of_a_rectangular_stream():
    sps = 500
    sent = transmit(_spec(scheme="pam2", pulse=Pulse("rect"), sample_rate_hz=sps, symbols=2000, jitter_rms_ui=0.03))
    moves = (sent.instants - (sps - 1) / 2) / sps - np.arange(sent.instants.size)
    assert moves.std() == pytest.approx(0.03, rel=0.08)
    changed = np.flatnonzero(np.diff(sent.symbols) != 0) + 1
    edges = np.flatnonzero(np.diff(sent.samples) != 0) + 0.5
    due = sent.instants[changed] - sps / 2
    edges, due = (at[(at > sps / 2) & (at < 1999.5 * sps)] for at in (edges, due))
    assert np.abs(edges - due).max() <= 0.5 + 1e-6


def test_an_edge_that_jitter_would_put_ahead_of_its_predecessor_comes_with_it():
    sps = 50
    sent = transmit(_spec(pulse=Pulse("rect"), sample_rate_hz=sps, symbols=6000, jitter_rms_ui=0.25))
    due = sent.instants - sps / 2
    edges = np.maximum.accumulate(due)
    assert (edges != due).sum() > 5
    n = np.arange(100 * sps, 5900 * sps)
    np.testing.assert_array_equal(sent.samples[n], sent.symbols[np.searchsorted(edges, n, side="right") - 1])


@pytest.mark.parametrize("pulse", [Pulse("rrc", 0.35), Pulse("rc", 0.5), Pulse("gauss", 0.4)], ids=str)
@pytest.mark.parametrize("jitter", [0.0, 0.01])
@pytest.mark.parametrize("ratio", [0.5, 2.0])
def test_one_pole_low_pass_of_other_pulses_is_the_filtered_waveform(pulse, jitter, ratio):
    # the reference filters a stream of 100 samples a symbol, exactly for straight lines between them
    sps = 100
    changes = {"pulse": pulse, "sample_rate_hz": sps, "symbols": 300, "jitter_rms_ui": jitter}
    clean = transmit(_spec(**changes)).samples.astype(np.float64)
    sent = transmit(_spec(**changes, t_over_tau=ratio)).samples.astype(np.float64)
    rh = ratio / sps
    mean = (1 - math.exp(-rh)) / rh
    reference = lfilter([1 - mean, mean - math.exp(-rh)], [1, -math.exp(-rh)], clean)
    assert _db((sent - reference)[50 * sps :], reference) < -75


def test_low_pass_of_a_table_is_exact_for_a_ramp():
    t = np.arange(-64, 65) / 64
    table = low_pass(np.maximum(t, 0.0), 64, 3.0, 1.0)
    v = np.arange(table.size) / 64 - 1.0
    reference = np.where(v > 0, v - (1 - np.exp(-3.0 * np.maximum(v, 0))) / 3.0, 0.0)
    np.testing.assert_allclose(table, reference, atol=1e-12)


@pytest.mark.parametrize("number", [0.3, 1.0])
def test_gaussian_pulses_are_the_same_by_pulses_and_by_edges(number):
    regular = transmit(_spec(pulse=Pulse("gauss", number), sample_rate_hz=7.3, symbols=500))
    by_edges = transmit(_spec(pulse=Pulse("gauss", number), sample_rate_hz=7.3, symbols=500, jitter_rms_ui=1e-12))
    np.testing.assert_allclose(by_edges.samples, regular.samples, atol=3e-5 * 3)


# --- frequency modulation


def _phase(sent):
    return np.unwrap(np.angle(sent.samples.astype(np.complex128)))


@pytest.mark.parametrize(("scheme", "index"), [("fsk2", 1.0), ("fsk2", 5 / 6), ("fsk4", 0.5), ("msk", 0.5)])
def test_frequency_keying_turns_the_phase_by_pi_h_a_symbol_and_keeps_its_envelope(scheme, index):
    sps = 16
    changes = {} if scheme == "msk" else {"modulation_index": index}
    sent = transmit(
        _spec(scheme=scheme, pulse=Pulse("rect"), sample_rate_hz=sps, symbols=400, delay_ui=0.5 / sps, **changes)
    )
    np.testing.assert_allclose(np.abs(sent.samples), 1.0, atol=1e-6)
    at_edges = _phase(sent)[::sps]
    np.testing.assert_allclose(np.diff(at_edges), np.pi * index * sent.symbols[: at_edges.size - 1], atol=1e-5)
    # and in between at a constant rate: no jump of phase
    np.testing.assert_allclose(
        np.abs(np.diff(_phase(sent))).max(), np.pi * index * np.abs(sent.symbols).max() / sps, atol=1e-5
    )


def test_msk_is_offset_qpsk_with_half_sine_pulses():
    # S. Pasupathy, Minimum shift keying, IEEE Communications Magazine 17(4), 1979 (from memory): I and Q are half sines
    # two symbols long, so that each rail is at +-1 where the other crosses 0
    sps = 16
    sent = transmit(_spec(scheme="msk", pulse=Pulse("rect"), sample_rate_hz=sps, symbols=400, delay_ui=0.5 / sps))
    wave = sent.samples.astype(np.complex128) / sent.samples[0]
    np.testing.assert_allclose(np.abs(wave[:: 2 * sps].real), 1.0, atol=1e-5)
    np.testing.assert_allclose(np.abs(wave[sps :: 2 * sps].imag), 1.0, atol=1e-5)
    halves = np.abs(wave.real[sps : sps + 2 * sps * 20]).reshape(-1, 2 * sps)
    np.testing.assert_allclose(
        halves, np.broadcast_to(np.sin(np.pi * np.arange(2 * sps) / (2 * sps)), halves.shape), atol=1e-5
    )


@pytest.mark.parametrize(
    ("scheme", "pulse"),
    [("gmsk", Pulse("gauss", 0.3)), ("fsk4", Pulse("rrc", 0.2)), ("fsk2", Pulse("rc", 0.5))],
    ids=str,
)
@pytest.mark.parametrize("ratio", [None, 2.5])
def test_frequency_is_the_sum_of_frequency_pulses(scheme, pulse, ratio):
    sps = 64
    sent = transmit(_spec(scheme=scheme, pulse=pulse, sample_rate_hz=sps, symbols=300, t_over_tau=ratio))
    index = 0.5 if scheme == "gmsk" else 1.0
    phase = _phase(sent)
    n = np.arange(sps * 140, sps * 160)
    drive = _direct(sent, sps, pulse, np.arange(sps * 100, sps * 161) + 0.5)
    if ratio is not None:
        rh = ratio / sps
        mean = (1 - math.exp(-rh)) / rh
        drive = lfilter([1 - mean, mean - math.exp(-rh)], [1, -math.exp(-rh)], drive)
    frequency = (np.diff(phase)[n]) / (np.pi * index / sps)
    np.testing.assert_allclose(frequency, drive[sps * 40 : sps * 60], atol=3e-3)


def test_gmsk_phase_is_the_integral_of_its_pulse():
    sps = 8
    sent = transmit(_spec(scheme="gmsk", pulse=Pulse("gauss", 0.3), sample_rate_hz=sps, symbols=60))
    phase = _phase(sent)
    n0, n1 = 20 * sps, 20 * sps + 11

    def drive(t):
        return float(np.sum(sent.symbols * gaussian_rectangle(t - (sent.instants / sps), 0.3)))

    turned, _ = quad(drive, n0 / sps, n1 / sps, epsabs=1e-9)
    assert phase[n1] - phase[n0] == pytest.approx(np.pi / 2 * turned, abs=2e-5)


def test_frequency_keying_with_jitter_changes_tone_at_the_jittered_edges():
    sps = 200
    sent = transmit(_spec(scheme="fsk2", pulse=Pulse("rect"), sample_rate_hz=sps, symbols=300, jitter_rms_ui=0.05))
    rate = np.diff(_phase(sent)) / (np.pi / sps)
    changed = np.flatnonzero(np.diff(sent.symbols) != 0) + 1
    edges = sent.instants[changed] - sps / 2
    for edge in edges[1:-1]:
        assert abs(rate[int(edge) - 2] - rate[int(edge) + 3]) == pytest.approx(2.0, abs=1e-3)
    np.testing.assert_allclose(
        np.abs(_phase(sent)[-1] - _phase(sent)[0]), np.abs(np.sum(rate) * np.pi / sps), rtol=1e-6
    )


def test_tables_are_fine_enough_for_90_db():
    # straight lines between points: error below h^2/8 |p''|, of rrc at most at its peak (derived)
    worst = max(
        abs(np.diff(root_raised_cosine(np.arange(-512, 513) / POINTS, a), 2)).max() / 8 for a in (0.05, 0.35, 1.0)
    )
    assert 20 * math.log10(worst) < -90
