"""The stream: its noise, errors, defects, truth and cuts."""

import dataclasses
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import fftconvolve
from scipy.special import erfc

from dsp.errors import DspError
from dsp.link import SCHEMES
from dsp.pulses import Pulse, root_raised_cosine
from dsp.transmitter import TransmitSpec, transmit, transmit_blocks


def _spec(**changes):
    spec = {
        "scheme": "qpsk",
        "symbol_rate_hz": 1.0,
        "sample_rate_hz": 4.0,
        "pulse": Pulse("rrc", 0.35),
        "symbols": 1000,
    }
    return TransmitSpec(**{**spec, **changes})


def _received(sent, sps, rolloff=0.35):
    """Samples behind a long matched filter, every ``sps``-th from the first symbol on, in level units."""
    taps = root_raised_cosine(np.arange(-300 * sps, 300 * sps + 1) / sps, rolloff) / sps
    return fftconvolve(sent.samples.astype(np.complex128), taps, mode="same") / sent.gain


def _at_symbols(sent, sps, rolloff=0.35, margin=300):
    """Received values and points sent of all but ``margin`` symbols on each side; needs instants on samples."""
    at = np.round(sent.instants[margin:-margin]).astype(int)
    assert np.abs(sent.instants[margin:-margin] - at).max() < 1e-6
    return _received(sent, sps, rolloff)[at], sent.symbols[margin:-margin]


ON_SAMPLES = {2: 0.25, 4: 0.125, 5: 0.0, 8: 0.0625}


# --- cuts

EVERYTHING = _spec(
    scheme="oqpsk",
    sample_rate_hz=2.7,
    symbols=60000,
    snr_db=15.0,
    carrier_hz=0.01,
    clock_ppm=30.0,
    clock_drift_ppm_s=0.001,
    jitter_rms_ui=0.01,
    jitter_sine_ui=0.1,
    jitter_sine_hz=0.001,
    phase_noise_deg=0.5,
    echoes=((1.3, 0.2 + 0.1j),),
    t_over_tau=3.0,
    iq_gain_db=0.5,
    clipping="soft",
    dropouts=((100.0, 20.0),),
    pulse=Pulse("rc", 0.5),
)
CUT_SPECS = {
    "everything": EVERYTHING,
    "held": _spec(
        scheme="pam4", pulse=Pulse("rect"), sample_rate_hz=2.7, symbols=60000, t_over_tau=1.0, jitter_rms_ui=0.02
    ),
    "plain": _spec(sample_rate_hz=2.7, symbols=60000, bits="prbs23"),
    "edges": _spec(scheme="16qam", pulse=Pulse("gauss", 0.3), sample_rate_hz=2.7, symbols=60000, jitter_rms_ui=0.02),
    "frequency": _spec(scheme="gmsk", pulse=Pulse("gauss", 0.3), sample_rate_hz=2.7, symbols=60000, snr_db=20.0),
    "frequency, rrc": _spec(scheme="fsk4", pulse=Pulse("rrc", 0.5), sample_rate_hz=2.7, symbols=60000),
    "passband": _spec(scheme="pi4dqpsk", sample_rate_hz=2.7, symbols=60000, carrier_hz=0.6, passband=True),
}


@pytest.mark.parametrize("spec", CUT_SPECS.values(), ids=CUT_SPECS.keys())
def test_the_stream_does_not_depend_on_how_it_is_cut(spec):
    whole = transmit(spec)
    assert whole.samples.size == 162000
    assert np.isfinite(whole.samples.view(np.float32)).all()
    for size in (1 << 16, 50021, 161999):
        pieces = list(transmit_blocks(spec, size))
        for field in ("samples", "symbols", "instants", "bits"):
            joined = np.concatenate([getattr(piece, field) for piece in pieces])
            np.testing.assert_array_equal(joined, getattr(whole, field), err_msg=field)
        assert [piece.start for piece in pieces] == list(range(0, 162000, size))


@settings(deadline=None, max_examples=25)
@given(size=st.integers(1, 700), sps=st.floats(2.0, 40.0), delay=st.floats(0.0, 0.999), ppm=st.floats(-500, 500))
def test_small_blocks_join_to_the_whole(size, sps, delay, ppm):
    spec = _spec(symbols=30, sample_rate_hz=sps, snr_db=10.0, delay_ui=delay, clock_ppm=ppm)
    whole = transmit(spec)
    pieces = list(transmit_blocks(spec, size))
    np.testing.assert_array_equal(np.concatenate([p.samples for p in pieces]), whole.samples)
    np.testing.assert_array_equal(np.concatenate([p.instants for p in pieces]), whole.instants)
    assert whole.instants.size == whole.symbols.size == whole.bits.size // 2


def test_a_seam_between_chunks_does_not_show():
    # the waveform is a function of time alone: the same link sampled later, by a delay of whole symbols, is the same
    spec = _spec(scheme="pam2", sample_rate_hz=2.0, symbols=40000, gain=1.0, t_over_tau=2.0)
    sent = transmit(spec)
    seam = 1 << 16
    n = np.arange(seam - 40, seam + 40)
    fine = transmit(dataclasses.replace(spec, sample_rate_hz=6.0, delay_ui=0.25 - 5 / 12 + 0.5))
    # both have symbol 0 at a known instant; compare at equal times, 6 against 2 samples a symbol
    shift = fine.instants[0] / 6 - sent.instants[0] / 2
    place = (n / 2 + shift) * 6
    assert np.abs(place - np.round(place)).max() < 1e-6
    np.testing.assert_allclose(fine.samples[np.round(place).astype(int)], sent.samples[n], atol=2e-5)


def test_blocks_below_one_sample_are_refused_at_once():
    with pytest.raises(DspError, match="block_samples"):
        transmit_blocks(_spec(), 0)


def test_seeds_change_bits_and_noise_and_nothing_else_does_change_the_bits():
    base = transmit(_spec(snr_db=10.0))
    assert not np.array_equal(base.bits, transmit(_spec(snr_db=10.0, seed=2)).bits)
    other = transmit(_spec(sample_rate_hz=9.1, pulse=Pulse("rect"), snr_db=None, jitter_rms_ui=0.01))
    np.testing.assert_array_equal(other.bits, base.bits)


# --- noise


@pytest.mark.parametrize("name", ["pam2", "pam3", "pam4", "bpsk", "qpsk", "8psk", "16qam", "64qam"])
@pytest.mark.parametrize("sps", [2, 5])
def test_symbol_energy_over_noise_behind_the_matched_filter_is_the_snr_asked_for(name, sps):
    sent = transmit(_spec(scheme=name, sample_rate_hz=sps, symbols=24000, snr_db=12.0, delay_ui=ON_SAMPLES[sps]))
    values, points = _at_symbols(sent, sps)
    noise = values - points if SCHEMES[name].kind == "carrier" else values.real - points
    measured = 10 * math.log10(SCHEMES[name].symbol_energy() / np.mean(np.abs(noise) ** 2))
    assert measured == pytest.approx(12.0, abs=4.34 * 4.5 / math.sqrt(0.5 * noise.size))


@pytest.mark.parametrize("pulse", [Pulse("rect"), Pulse("rc", 0.35)], ids=str)
def test_snr_of_other_pulses_is_that_behind_their_receive_filter(pulse):
    sent = transmit(_spec(scheme="pam4", pulse=pulse, sample_rate_hz=5, symbols=20000, snr_db=20.0))
    if pulse.family == "rect":
        values = sent.samples.astype(np.float64).reshape(-1, 5).mean(axis=1)
    else:
        values = sent.samples[2::5].astype(np.float64)
    noise = values / sent.gain - sent.symbols
    assert 10 * math.log10(5 / np.mean(noise**2)) == pytest.approx(20.0, abs=0.15)


def test_gaussian_pulse_noise_follows_its_energy():
    clean = transmit(_spec(scheme="pam2", pulse=Pulse("gauss", 0.5), sample_rate_hz=16, symbols=5))
    sent = transmit(
        _spec(scheme="pam2", pulse=Pulse("gauss", 0.5), sample_rate_hz=16, symbols=5, snr_db=10.0, gain=1.0)
    )
    t = np.linspace(-6, 6, 24001)
    from dsp.pulses import gaussian_rectangle

    energy = np.sum(gaussian_rectangle(t, 0.5) ** 2) * (t[1] - t[0])
    assert clean.noise_rms == 0.0
    assert sent.noise_rms == pytest.approx(math.sqrt(energy * 16 / 10), rel=1e-4)


def test_frequency_schemes_have_their_envelope_energy_over_noise():
    spec = _spec(scheme="msk", pulse=Pulse("rect"), sample_rate_hz=8, symbols=20000, snr_db=10.0, gain=1.0)
    noise = transmit(spec).samples - transmit(dataclasses.replace(spec, snr_db=None)).samples
    # Es = 1 symbol of envelope 1 = 8 samples; N0 = variance a sample
    assert 10 * math.log10(8 / np.mean(np.abs(noise.astype(np.complex128)) ** 2)) == pytest.approx(10.0, abs=0.06)


@pytest.mark.parametrize(
    ("name", "eb_n0_db", "theory"),
    [
        # J. G. Proakis, Digital Communications, sec. 5.2: Q(sqrt(2 Eb/N0)); Gray QAM exact: K. Cho and D. Yoon, IEEE
        # Trans. Commun. 50(7), 2002 (citations from memory, values recomputed)
        ("bpsk", 4.0, 1.250082e-2),
        ("qpsk", 4.0, 1.250082e-2),
        ("16qam", 4.0, 5.862374e-2),
        ("16qam", 8.0, 9.247214e-3),
        ("64qam", 8.0, 5.233386e-2),
    ],
)
def test_error_rate_under_ideal_reception_is_the_theory(name, eb_n0_db, theory):
    scheme = SCHEMES[name]
    snr_db = eb_n0_db + 10 * math.log10(scheme.bits)
    sent = transmit(_spec(scheme=name, sample_rate_hz=2, symbols=60000, snr_db=snr_db, delay_ui=ON_SAMPLES[2], seed=7))
    values, _ = _at_symbols(sent, 2)
    bits = sent.bits.reshape(-1, scheme.bits)[300:-300]
    rails = (values.real,) if scheme.rails == 1 else (values.real, values.imag)
    wrong = 0
    for rail, rail_bits in zip(rails, np.split(bits, scheme.rails, axis=1), strict=True):
        place = np.clip(np.round((rail + scheme.levels - 1) / 2), 0, scheme.levels - 1).astype(int)
        code = place ^ (place >> 1)
        decided = (code[:, None] >> np.arange(rail_bits.shape[1] - 1, -1, -1)) & 1
        wrong += int((decided != rail_bits).sum())
    expected = theory * bits.size
    assert abs(wrong - expected) < 4.5 * math.sqrt(2 * expected)


def test_passband_noise_gives_the_same_error_rate_as_its_baseband():
    # coherent reception of real QPSK: Q(sqrt(Es/N0)) a bit
    spec = _spec(sample_rate_hz=8, symbols=40000, snr_db=6.0, carrier_hz=2.0, passband=True, delay_ui=ON_SAMPLES[8])
    sent = transmit(spec)
    assert sent.samples.dtype == np.float32
    n = np.arange(sent.samples.size)
    mixed = dataclasses.replace(
        sent, samples=(2 * sent.samples * np.exp(-2j * np.pi * 2.0 / 8 * n)).astype(np.complex64)
    )
    values, points = _at_symbols(mixed, 8)
    wrong = int((np.sign(values.real) != points.real).sum() + (np.sign(values.imag) != points.imag).sum())
    expected = 0.5 * erfc(math.sqrt(10**0.6 / 2)) * 2 * values.size
    assert abs(wrong - expected) < 4.5 * math.sqrt(expected)


# --- clock, jitter, carrier


def test_clock_error_changes_how_many_symbols_fit():
    sent = transmit(_spec(symbols=20000, clock_ppm=200.0))
    assert sent.samples.size == 80000
    assert sent.symbols.size == 20004
    np.testing.assert_allclose(np.diff(sent.instants), 4 / (1 + 200e-6), rtol=1e-9)


def test_drift_speeds_the_clock_up_by_so_many_ppm_a_second():
    sent = transmit(_spec(symbols=5000, clock_drift_ppm_s=0.2))
    rate = 4 / np.diff(sent.instants)
    seconds = sent.instants[:-1] / 4
    slope, start = np.polyfit(seconds, rate, 1)
    assert slope == pytest.approx(0.2e-6, rel=1e-3)
    assert start == pytest.approx(1.0, abs=1e-6)


def test_jitter_is_white_with_its_rms_and_a_sine_of_its_peak():
    sent = transmit(_spec(symbols=20000, jitter_rms_ui=0.02))
    error = (sent.instants - 1.5) / 4 - np.arange(sent.instants.size)
    assert error.std() == pytest.approx(0.02, rel=0.03)
    assert abs(np.corrcoef(error[1:], error[:-1])[0, 1]) < 0.035
    sent = transmit(_spec(symbols=20000, jitter_sine_ui=0.1, jitter_sine_hz=0.01))
    error = (sent.instants - 1.5) / 4 - np.arange(sent.instants.size)
    spectrum = np.abs(np.fft.rfft(error)) * 2 / error.size
    assert np.argmax(spectrum) == 200
    assert spectrum.max() == pytest.approx(0.1, rel=1e-3)


def test_carrier_turns_at_its_frequency_from_its_phase():
    clean = transmit(_spec())
    turned = transmit(_spec(carrier_hz=-0.3, carrier_phase_deg=25.0, gain=clean.gain))
    n = np.arange(clean.samples.size)
    reference = clean.samples * np.exp(1j * (math.radians(25) - 2 * np.pi * 0.3 * n / 4))
    np.testing.assert_allclose(turned.samples, reference, atol=2e-7)


def test_phase_noise_walks_with_its_rms_step():
    spec = _spec(scheme="msk", pulse=Pulse("rect"), symbols=40000)  # its envelope is 1: the phase is known everywhere
    clean, noisy = (transmit(dataclasses.replace(spec, phase_noise_deg=step)).samples for step in (0.0, 1.0))
    phase = np.degrees(np.unwrap(np.angle(noisy[2::4].astype(np.complex128) / clean[2::4])))
    steps = np.diff(phase)
    # linear between symbols, seen 1/8 UI off their instants: 7/8 of one step and 1/8 of the next
    assert steps.std() == pytest.approx(math.sqrt((7 / 8) ** 2 + (1 / 8) ** 2), rel=0.02)
    assert np.abs(steps).max() < 6.0  # no jump, at the seams of the chunks either
    apart = phase[::100]
    assert np.diff(apart).std() == pytest.approx(10.0, rel=0.15)


def test_phase_noise_and_jitter_do_not_depend_on_the_sample_rate():
    spec = _spec(scheme="msk", pulse=Pulse("rect"), symbols=40000, phase_noise_deg=1.0, jitter_rms_ui=0.01, gain=1.0)
    coarse = transmit(dataclasses.replace(spec, delay_ui=ON_SAMPLES[4]))
    fine = transmit(dataclasses.replace(spec, sample_rate_hz=8.0, delay_ui=ON_SAMPLES[8]))
    np.testing.assert_allclose(fine.samples[::2], coarse.samples, atol=1e-6)
    np.testing.assert_allclose(fine.instants, 2 * coarse.instants, atol=1e-6)


# --- channel and converters


@pytest.mark.parametrize(
    ("gain_db", "skew_deg", "mer_db"),
    # (1 + 2 g cos + g^2) / (1 - 2 g cos + g^2): derived, checked by brute force
    [(0.5, 0.0, 30.820), (1.0, 0.0, 24.807), (0.0, 2.0, 35.162), (0.5, 2.0, 29.459), (1.0, 5.0, 22.829)],
)
def test_iq_imbalance_has_its_image_rejection(gain_db, skew_deg, mer_db):
    sent = transmit(_spec(scheme="16qam", symbols=20000, iq_gain_db=gain_db, iq_skew_deg=skew_deg, delay_ui=0.125))
    values, points = _at_symbols(sent, 4)
    gain = np.vdot(points, values) / np.vdot(points, points)
    image = np.vdot(points.conj(), values) / np.vdot(points, points)
    # each estimate leaks (points are not exactly balanced): solve for both
    design = np.stack((points, points.conj()), axis=1)
    (gain, image), *_ = np.linalg.lstsq(design, values, rcond=None)
    assert 20 * math.log10(abs(gain) / abs(image)) == pytest.approx(mer_db, abs=0.02)


def test_iq_skew_puts_a_share_of_i_into_q():
    clean = transmit(_spec(gain=1.0)).samples
    skewed = transmit(_spec(gain=1.0, iq_gain_db=1.0, iq_skew_deg=10.0)).samples
    np.testing.assert_allclose(skewed.real, clean.real, atol=1e-6)
    angle = math.radians(10.0)
    quadrature = 10**0.05 * (clean.imag * math.cos(angle) + clean.real * math.sin(angle))
    np.testing.assert_allclose(skewed.imag, quadrature, atol=1e-6)


def test_an_echo_of_one_symbol_adds_its_share_of_the_symbol_before():
    sent = transmit(_spec(pulse=Pulse("rect"), echoes=((1.0, 0.3 - 0.2j),), gain=1.0))
    at = np.arange(1, sent.samples.size, 4)
    expected = sent.symbols[1:] + (0.3 - 0.2j) * sent.symbols[:-1]
    np.testing.assert_allclose(sent.samples[at][1:], expected, atol=1e-6)


@pytest.mark.parametrize(("scheme", "pulse"), [("gmsk", Pulse("gauss", 0.5)), ("fsk4", Pulse("rrc", 0.2))], ids=str)
def test_an_echo_of_a_frequency_scheme_is_the_delayed_wave(scheme, pulse):
    spec = _spec(scheme=scheme, pulse=pulse, sample_rate_hz=8, gain=1.0)
    clean = transmit(spec).samples
    echoed = transmit(dataclasses.replace(spec, echoes=((2.5, 0.4j),))).samples
    np.testing.assert_allclose(echoed[20:], clean[20:] + np.complex64(0.4j) * clean[:-20], atol=1e-5)


@pytest.mark.parametrize("pulse", [Pulse("rc", 1.0), Pulse("rect"), Pulse("gauss", 0.5)], ids=str)
@pytest.mark.parametrize("jitter", [0.0, 0.01])
def test_a_far_echo_is_the_delayed_wave_across_many_chunks(pulse, jitter):
    spec = _spec(scheme="pam4", pulse=pulse, symbols=60000, gain=1.0, jitter_rms_ui=jitter)
    clean = transmit(spec).samples
    echoed = transmit(dataclasses.replace(spec, echoes=((300.0, 0.5),))).samples
    np.testing.assert_allclose(echoed[1200:], clean[1200:] + np.float32(0.5) * clean[:-1200], atol=2e-6)


@pytest.mark.parametrize(
    "changes",
    [
        {"scheme": "pam3"},
        {"scheme": "16qam", "jitter_rms_ui": 0.02},
        {"scheme": "qpsk", "phase_noise_deg": 0.0, "bits": "prbs9"},
        {"scheme": "fsk4", "pulse": Pulse("rc", 0.5)},
        {"scheme": "gmsk", "pulse": Pulse("gauss", 0.3), "jitter_rms_ui": 0.02},
    ],
    ids=str,
)
def test_how_long_the_lead_in_is_does_not_show(changes):
    short = transmit(_spec(**changes, gain=1.0))
    long = transmit(_spec(**changes, gain=1.0, echoes=((77.0, 0.0),)))
    np.testing.assert_allclose(long.samples, short.samples, atol=1e-6)
    np.testing.assert_array_equal(long.instants, short.instants)


def test_offset_qpsk_sends_q_half_a_symbol_later():
    plain = transmit(_spec(sample_rate_hz=8))
    offset = transmit(_spec(scheme="oqpsk", sample_rate_hz=8))
    np.testing.assert_array_equal(plain.symbols, offset.symbols)
    np.testing.assert_allclose(offset.samples.real, plain.samples.real, atol=1e-7)
    np.testing.assert_allclose(offset.samples.imag[4:], plain.samples.imag[:-4], atol=1e-6)


def test_constant_gain_and_clipping_act_last():
    clean = transmit(_spec(scheme="pam2", gain=0.5)).samples.astype(np.float64)
    shifted = transmit(_spec(scheme="pam2", gain=0.5, dc=0.25)).samples
    np.testing.assert_allclose(shifted, clean + 0.125, atol=1e-6)
    hard = transmit(_spec(scheme="pam2", gain=0.5, clipping="hard", clip_at=0.4)).samples
    np.testing.assert_allclose(hard, np.clip(clean, -0.4, 0.4), atol=1e-6)
    soft = transmit(_spec(scheme="pam2", gain=0.5, clipping="soft", clip_at=0.4)).samples
    np.testing.assert_allclose(soft, 0.4 * np.tanh(clean / 0.4), atol=1e-6)


def test_a_dropout_silences_the_transmitter_but_not_the_noise():
    quiet = transmit(_spec(dropouts=((50.0, 100.0), (500.0, 1.0)))).samples
    silent = np.flatnonzero(quiet == 0)
    np.testing.assert_array_equal(silent, np.r_[200:600, 2000:2004])
    noisy = transmit(_spec(dropouts=((0.0, 1e6),), snr_db=10.0, symbols=20000))
    assert np.sqrt(np.mean(np.abs(noisy.samples) ** 2)) == pytest.approx(noisy.noise_rms, rel=0.02)


def test_passband_is_the_real_part_of_the_turned_envelope():
    envelope = transmit(_spec(scheme="fsk2", pulse=Pulse("rect"), sample_rate_hz=40.0, modulation_index=5 / 6))
    audio = transmit(
        _spec(
            scheme="fsk2",
            pulse=Pulse("rect"),
            sample_rate_hz=40.0,
            modulation_index=5 / 6,
            carrier_hz=1.4,
            passband=True,
        )
    )
    n = np.arange(audio.samples.size)
    reference = (envelope.samples.astype(np.complex128) * np.exp(2j * np.pi * 1.4 / 40 * n)).real
    np.testing.assert_allclose(audio.samples, reference, atol=2e-7)


@pytest.mark.parametrize("name", sorted(SCHEMES))
def test_no_default_gain_passes_full_scale(name):
    frequency = SCHEMES[name].kind == "frequency"
    pulse = Pulse("gauss", 0.5) if name in ("gmsk", "gfsk") else Pulse("rect") if name == "msk" else Pulse("rrc", 0.2)
    sent = transmit(_spec(scheme=name, pulse=pulse, symbols=5000, snr_db=15.0))
    peak = np.abs(sent.samples.view(np.float32)).max()
    assert 0.3 < peak < 1.0 or (frequency and 0.3 < peak < 1.0)
    assert sent.samples.dtype == (np.float32 if SCHEMES[name].kind == "baseband" else np.complex64)


@pytest.mark.parametrize(
    "changes",
    [
        {"scheme": "pam4"},
        {"scheme": "qpsk", "carrier_hz": 0.0137},
        {"scheme": "pam2", "echoes": ((1.0, 0.5), (2.0, -0.25))},
        {"scheme": "pi4dqpsk", "sample_rate_hz": 8},
        {"scheme": "pam2", "dc": -0.5},
    ],
    ids=str,
)
def test_the_default_gain_uses_nine_tenths_of_full_scale_and_no_more(changes):
    sent = transmit(_spec(pulse=Pulse("rect"), **changes))
    assert np.abs(sent.samples.view(np.float32)).max() == pytest.approx(0.9, abs=2e-4)


def test_one_symbol_makes_a_stream():
    sent = transmit(_spec(symbols=1))
    assert sent.samples.size == 4
    assert sent.symbols.size == 1


# --- refusals


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"scheme": "am"}, "scheme 'am' is not known"),
        ({"sample_rate_hz": 1.5}, "samples a symbol"),
        ({"sample_rate_hz": math.nan}, "sample rate"),
        ({"pulse": Pulse("none")}, "cannot be sent"),
        ({"symbols": 0}, "symbols must be 1 or more"),
        ({"seed": -1}, "seed"),
        ({"bits": "prbs8"}, "bits must be one of"),
        ({"scheme": "pam3", "bits": "prbs7"}, "pam3"),
        ({"clipping": "medium"}, "clipping must be one of"),
        ({"delay_ui": 1.0}, "delay_ui"),
        ({"snr_db": math.nan}, "snr_db"),
        ({"modulation_index": 0.5}, "modulation_index is for frequency schemes"),
        ({"scheme": "msk"}, "needs a rect pulse"),
        ({"scheme": "msk", "pulse": Pulse("rect"), "modulation_index": 0.7}, "modulation_index of 0.5"),
        ({"carrier_hz": 2.5}, "carrier_hz"),
        ({"clock_ppm": 2e4}, "clock_ppm"),
        ({"clock_drift_ppm_s": 1e4, "symbols": 100000}, "10 % off"),
        ({"jitter_rms_ui": 0.3}, "jitter_rms_ui"),
        ({"jitter_sine_hz": 0.6}, "jitter_sine_hz"),
        ({"t_over_tau": 0.0}, "t_over_tau"),
        ({"echoes": ((-1.0, 0.1),)}, "echoes need"),
        ({"dropouts": ((-1.0, 0.1),)}, "dropouts need"),
        ({"dc": math.inf}, "dc must be finite"),
        ({"scheme": "pam2", "carrier_hz": 0.1}, "need a scheme with a carrier"),
        ({"scheme": "pam2", "iq_gain_db": 0.1}, "need a scheme with a carrier"),
        ({"scheme": "pam2", "echoes": ((1.0, 0.1j),)}, "real gains"),
        ({"scheme": "pam2", "dc": 1j}, "must be real"),
        ({"passband": True}, "passband needs a carrier_hz"),
    ],
    ids=str,
)
def test_what_cannot_be_sent_is_refused(changes, message):
    with pytest.raises(DspError, match=message):
        _spec(**changes)
