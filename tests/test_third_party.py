"""The facts that third_party.py states, checked by plain numpy: no code of the project or of the transmitters."""

import itertools

import numpy as np
import pytest
from scipy.special import erf

from tests.third_party import (
    codec2_fsk,
    direwolf_9600,
    keep,
    komm_stream,
    liquid_gmsk,
    liquid_stream,
    minimodem_afsk,
    program,
)

PSK_QAM = {
    "bpsk": np.array([-1.0, 1.0]),
    "qpsk": np.exp(1j * np.pi / 4 * np.array([1, 3, 5, 7])),
    "8psk": np.exp(1j * np.pi / 4 * np.arange(8)),
    "16qam": np.add.outer(np.arange(-3, 4, 2), 1j * np.arange(-3, 4, 2)).ravel() / np.sqrt(10),
    "64qam": np.add.outer(np.arange(-7, 8, 2), 1j * np.arange(-7, 8, 2)).ravel() / np.sqrt(42),
}


def line(wave, sample_rate_hz, low_hz, high_hz):
    """A spectrum's strongest line within a range: frequency, refined by a parabola, and height over the median."""
    windowed = (wave - wave.mean()) * np.hanning(wave.size)
    size = 4 * wave.size
    spectrum = np.abs(np.fft.fft(windowed, size))
    frequency = np.fft.fftfreq(size, 1 / sample_rate_hz)
    inside = np.flatnonzero((frequency > low_hz) & (frequency < high_hz))
    peak = inside[np.argmax(spectrum[inside])]
    before, at, after = np.log(spectrum[[peak - 1, peak, (peak + 1) % size]])
    shift = 0.5 * (before - after) / (before - 2 * at + after)
    return frequency[peak] + shift * sample_rate_hz / size, spectrum[peak] / np.median(spectrum[inside])


def rate_line(wave, sent):
    return line(wave, sent.sample_rate_hz, 0.7 * sent.symbol_rate_hz, 1.3 * sent.symbol_rate_hz)


def tone_decisions(samples, sent, start, count):
    """Which tone of each symbol holds most energy, by correlation over the symbol."""
    width = round(sent.sample_rate_hz / sent.symbol_rate_hz)
    pieces = samples[start : start + count * width].reshape(count, width)
    time = np.arange(width) / sent.sample_rate_hz
    energies = [np.abs(pieces @ np.exp(-2j * np.pi * tone * time)) for tone in sent.tones_hz]
    return np.argmax(energies, axis=0)


def test_an_absent_program_skips_here_and_fails_where_the_environment_says_ci(monkeypatch):
    monkeypatch.setenv("CI", "true")
    with pytest.raises(pytest.fail.Exception, match="no-such-program is not installed"):
        program("no-such-program", "none")
    monkeypatch.delenv("CI")
    with pytest.raises(pytest.skip.Exception, match="no-such-program"):
        program("no-such-program", "none")


def hdlc_frames(bits):
    """Frames between flags, unstuffed, as bytes (ISO/IEC 13239: a 0 after five 1s is stuffing, least bit first)."""
    frames = []
    for piece in "".join(map(str, bits)).split("01111110"):
        # A shared zero between flags leaves "1111110" pieces, too short for a frame.
        plain = piece.replace("111110", "11111")
        if len(plain) >= 136:
            whole = [int(plain[i : i + 8][::-1], 2) for i in range(0, len(plain) - 7, 8)]
            frames.append((bytes(whole), len(plain) % 8))
    return frames


def fcs_residue(frame):
    """CRC-16/X.25 over a frame with its check sequence (RFC 1662, appendix C: good frames leave 0xF0B8)."""
    crc = 0xFFFF
    for byte in frame:
        crc ^= byte
        for _ in range(8):
            crc = (crc >> 1) ^ (0x8408 if crc & 1 else 0)
    return crc


@pytest.mark.parametrize("rate", [48000, 44100])
def test_direwolf_packets_decode_to_their_text_at_9600_baud(tmp_path, rate):
    sent = direwolf_9600(tmp_path, sample_rate_hz=rate, packets=6)
    assert len(sent.bursts) == 6
    for (start, stop), text in zip(sent.bursts, sent.data, strict=True):
        burst = sent.samples[start:stop]
        sps = rate / sent.symbol_rate_hz
        count = int(burst.size / sps) - 1
        times = np.array([(np.arange(count) + phase) * sps for phase in np.arange(0, 1, 0.05)])
        eyes = np.interp(times, np.arange(burst.size), burst)
        # Skip what is not settled: the first symbols ramp up from silence.
        best = eyes[np.argmax(np.min(np.abs(eyes[:, 5:-3]), axis=1))]
        line_bits = (best > 0).astype(int)
        scrambled = line_bits.copy()
        scrambled[17:] ^= line_bits[5:-12] ^ line_bits[:-17]  # 1 + x^12 + x^17
        data = np.concatenate(([0], scrambled[1:] == scrambled[:-1])).astype(int)
        ((frame, leftover),) = hdlc_frames(data)
        assert leftover == 0
        assert fcs_residue(frame) == 0xF0B8
        assert frame[16:-2].decode("ascii") == text + "\n"


def test_direwolf_s_preamble_silence_and_amplitude_are_as_stated(tmp_path):
    sent = direwolf_9600(tmp_path, packets=6)
    starts, stops = np.array(sent.bursts).T
    gaps = np.concatenate(([starts[0]], starts[1:] - stops[:-1]))
    assert stops[-1] == sent.samples.size
    np.testing.assert_allclose(gaps / 48000, 3.36e-3, atol=0.06e-3)
    symbols = (stops - starts) / 5
    assert set(np.round(symbols)) <= {2481, 2482}
    assert np.abs(sent.samples).max() == pytest.approx(0.25, abs=1e-3)
    frequency, height = rate_line(np.diff(sent.samples[starts[0] : stops[0]]) ** 2, sent)
    assert frequency == pytest.approx(9600, abs=0.5)
    assert height > 20


@pytest.mark.parametrize(("rate", "spread_ui"), [(48000, 0.0), (44100, 9600 / 44100 / np.sqrt(12))])
def test_direwolf_s_bits_begin_on_whole_samples(tmp_path, rate, spread_ui):
    sent = direwolf_9600(tmp_path, sample_rate_hz=rate, packets=3)
    for start, stop in sent.bursts:
        burst = sent.samples[start:stop].astype(float) / 0.25
        before = np.flatnonzero(burst[:-1] * burst[1:] < 0)[20:-5]
        # Along half a cosine the arc sine is straight.
        ahead, behind = np.arcsin(burst[before]), np.arcsin(burst[before + 1])
        crossings = (before + ahead / (ahead - behind)) * 9600 / rate
        centre = np.angle(np.mean(np.exp(2j * np.pi * crossings))) / (2 * np.pi)
        errors = (crossings - centre + 0.5) % 1
        assert errors.std() == pytest.approx(spread_ui, abs=0.004)


def test_direwolf_s_pulse_is_half_a_cosine_between_levels(tmp_path):
    sent = direwolf_9600(tmp_path, packets=1)
    start, stop = sent.bursts[0]
    burst = sent.samples[start:stop].astype(float) / 0.25
    phase = np.argmax([np.min(np.abs(burst[p + 25 : -15 : 5])) for p in range(5)])
    centres = np.arange(phase, burst.size, 5)
    model = np.zeros(burst.size)
    for centre in centres:
        near = np.arange(max(0, centre - 5), min(burst.size, centre + 6))
        model[near] += np.sign(burst[centre]) * np.cos(np.pi * (near - centre) / 10) ** 2
    assert np.abs(model - burst)[25:-25].max() < 0.02


@pytest.mark.parametrize(("baud", "rate"), [(1200, 48000), (300, 48000), (1200, 44100), (300, 44100)])
def test_minimodem_s_tones_carry_its_text(tmp_path, baud, rate):
    sent = minimodem_afsk(tmp_path, baud=baud, sample_rate_hz=rate, seconds=3.0)
    width = round(rate / sent.symbol_rate_hz)
    assert sent.symbol_rate_hz == rate / width
    assert sent.samples.size == width * (10 * len(sent.data) + 4)
    assert np.abs(sent.samples).max() == pytest.approx(0.5, abs=1e-3)
    mark_is_high = baud == 300
    marks = (tone_decisions(sent.samples, sent, 0, 10 * len(sent.data) + 4) == 1) == mark_is_high
    assert marks[:2].all()
    assert marks[-2:].all()
    characters = marks[2:-2].reshape(-1, 10)
    assert not characters[:, 0].any()
    assert characters[:, 9].all()
    assert np.packbits(characters[:, 1:9], axis=1, bitorder="little").tobytes() == sent.data


@pytest.mark.parametrize("baud", [300, 1200])
def test_minimodem_s_tones_stand_at_the_stated_frequencies(tmp_path, baud):
    sent = minimodem_afsk(tmp_path, baud=baud, seconds=3.0)
    width = round(sent.sample_rate_hz / sent.symbol_rate_hz)
    decided = tone_decisions(sent.samples, sent, 0, 10 * len(sent.data) + 4)
    for tone, stated in enumerate(sent.tones_hz):
        # The longest stretch that stays on this tone: a least-squares sinusoid over it, frequency by frequency.
        runs = [(len(list(group)), key) for key, group in itertools.groupby(decided)]
        ends = np.cumsum([length for length, _ in runs])
        length, end = max((length, end) for (length, key), end in zip(runs, ends, strict=True) if key == tone)
        piece = sent.samples[(end - length) * width : end * width].astype(float)
        time = np.arange(piece.size) / sent.sample_rate_hz
        trial = np.arange(stated - 60, stated + 60, 0.5)
        misfit = []
        for frequency in trial:
            base = np.column_stack((np.cos(2 * np.pi * frequency * time), np.sin(2 * np.pi * frequency * time)))
            misfit.append(np.linalg.norm(piece - base @ np.linalg.lstsq(base, piece, rcond=None)[0]))
        assert trial[np.argmin(misfit)] == pytest.approx(stated, abs=2.0)


@pytest.mark.parametrize("is_complex", [True, False])
@pytest.mark.parametrize("levels", [2, 4])
def test_codec2_s_tones_carry_the_symbols(tmp_path, levels, is_complex):
    sent = codec2_fsk(tmp_path, levels=levels, is_complex=is_complex, symbols=4000)
    assert sent.samples.size == 4000 * 10
    assert sent.samples.dtype == (np.complex64 if is_complex else np.float32)
    np.testing.assert_array_equal(tone_decisions(sent.samples, sent, 0, 4000), sent.data)
    assert np.abs(sent.samples).max() == pytest.approx(10000 / 32768, abs=1e-4)


@pytest.mark.parametrize("levels", [2, 4])
def test_codec2_s_frequencies_are_exact_and_switch_at_once(tmp_path, levels):
    sent = codec2_fsk(tmp_path, levels=levels, symbols=4000)
    steps = np.angle(sent.samples[1:] * np.conj(sent.samples[:-1])) * 48000 / (2 * np.pi)
    wanted = np.repeat(np.array(sent.tones_hz)[sent.data], 10)
    for offset in (0, 1):  # the step into a symbol's first sample belongs to one of the two symbols
        if np.abs(steps - wanted[offset : offset + steps.size]).max() < 5:
            break
    else:
        pytest.fail("the frequency does not follow the symbols")


@pytest.mark.parametrize("sps", [4.0, 3.7, 7.3])
def test_liquid_s_symbol_rate_stands_in_the_spectrum_of_its_power(sps):
    sent = liquid_stream("qpsk", sps, symbols=20000)
    frequency, height = rate_line(np.abs(sent.samples) ** 2, sent)
    assert frequency == pytest.approx(sent.symbol_rate_hz, rel=2e-6)
    assert sent.symbol_rate_hz == pytest.approx(48000 / sps, rel=1e-7)
    assert height > 20


def rrc(t, a):
    """Root raised cosine by its spectrum, summed: no closed form shared with anyone."""
    f = (np.arange(4000) + 0.5) / 4000 * (1 + a) / 2
    rise = np.clip((f - (1 - a) / 2) / a, 0, 1)
    return 2 * np.cos(2 * np.pi * np.multiply.outer(t, f)) @ np.cos(np.pi / 2 * rise) * (1 + a) / 2 / 4000


def mer_db(sent, points, rolloff):
    """MER at the best phase; the matched filter, computed at each instant, is also the interpolator."""
    coarse = [(mer_db_at(phase, sent, points, rolloff), phase) for phase in np.arange(0, 1, 0.05)]
    middle = max(coarse)[1]
    return max(mer_db_at(phase, sent, points, rolloff) for phase in middle + np.arange(-0.05, 0.05, 0.002))


def mer_db_at(phase, sent, points, rolloff):
    sps = sent.sample_rate_hz / sent.symbol_rate_hz
    half = int(20 * sps)
    centres = (np.arange(100, 500) + phase) * sps
    index = np.round(centres).astype(int)[:, None] + np.arange(-half, half + 1)
    z = np.sum(sent.samples[index] * rrc_table(index - centres[:, None], sps, rolloff), axis=1)
    z /= np.sqrt(np.mean(np.abs(z) ** 2))
    for _ in range(3):
        decided = points[np.argmin(np.abs(z[:, None] - points), axis=1)]
        z = z * np.vdot(decided, decided) / np.vdot(decided, z)
    return -10 * np.log10(np.mean(np.abs(z - decided) ** 2) / np.mean(np.abs(decided) ** 2))


def rrc_table(offsets, sps, rolloff, _tables={}):  # noqa: B006 - a cache
    if (sps, rolloff) not in _tables:
        grid = np.arange(-21, 21, 1 / 200)
        _tables[sps, rolloff] = grid, rrc(grid, rolloff)
    grid, table = _tables[sps, rolloff]
    return np.interp(offsets / sps, grid, table)


@pytest.mark.parametrize(
    ("scheme", "sps", "rolloff"),
    [
        ("qpsk", 4.0, 0.35),
        ("16qam", 4.0, 0.35),
        ("qpsk", 3.7, 0.25),
        ("64qam", 2.5, 0.5),
        ("bpsk", 4.0, 0.35),
        ("8psk", 4.0, 0.35),
    ],
)
def test_liquid_s_points_are_clean_behind_a_matched_filter(scheme, sps, rolloff):
    sent = liquid_stream(scheme, sps, rolloff, symbols=600)
    assert mer_db(sent, PSK_QAM[scheme], rolloff) > 50


def test_liquid_s_roll_off_is_the_one_stated():
    sent = liquid_stream("qpsk", 4.0, 0.35, symbols=600)
    below, stated, above = (mer_db(sent, PSK_QAM["qpsk"], rolloff) for rolloff in (0.33, 0.35, 0.37))
    assert stated > max(below, above) + 1


def test_liquid_s_carrier_stands_in_the_fourth_power():
    sent = liquid_stream("qpsk", 4.0, carrier=0.013)
    frequency, height = line(sent.samples.astype(complex) ** 4, 48000, -4000, 4000)
    assert frequency / 4 == pytest.approx(sent.carrier_hz, abs=0.02)
    assert sent.carrier_hz == pytest.approx(0.013 * 12000, rel=1e-5)
    assert height > 10


def test_liquid_s_streams_repeat_with_their_seed_and_differ_without():
    one, again, other = (liquid_stream(symbols=500, seed=seed).samples for seed in (1, 1, 2))
    np.testing.assert_array_equal(one, again)
    assert not np.array_equal(one, other)


@pytest.mark.parametrize("bt", [0.3, 0.5])
def test_liquid_s_gmsk_follows_the_gaussian_frequency_pulse(bt):
    """Pulse of Murota and Hirade, IEEE Trans. Commun. 29(7), 1981 (from memory): a Gaussian along one bit."""
    sent = liquid_gmsk(bt=bt, symbols=1000)
    assert np.abs(np.abs(sent.samples) - 1).max() < 1e-3
    cycles_a_symbol = np.diff(np.unwrap(np.angle(sent.samples.astype(complex)))) / (2 * np.pi) * 8
    impulses = np.zeros(8 * 1000)
    impulses[::8] = 2 * sent.data - 1
    t = np.arange(-32, 33) / 8
    scale = np.pi * bt * np.sqrt(2 / np.log(2))
    pulse = 0.125 * (erf(scale * (t + 0.5)) - erf(scale * (t - 0.5)))
    wanted = np.convolve(impulses, pulse)[1:8000]  # centred 4 symbols, that is 32 samples, after the bit's first
    assert np.abs(cycles_a_symbol - wanted).max() < 1e-3


@pytest.mark.parametrize("scheme", ["pam2", "pam4", "pam8", "bpsk", "qpsk", "8psk", "16qam", "64qam"])
def test_komm_s_matched_pulses_give_its_points_back(scheme):
    sent = komm_stream(scheme, 4, "rrc:0.35", symbols=1000)
    assert sent.samples.dtype == (np.float32 if scheme.startswith("pam") else np.complex64)
    matched = np.convolve(sent.samples, rrc(np.arange(-80, 81) / 4, 0.35), mode="same") / 4
    error = matched[::4][60:-60] - sent.data[60:-60]
    assert np.sqrt(np.mean(np.abs(error) ** 2)) < 0.01
    assert np.mean(np.abs(sent.data) ** 2) == pytest.approx(1.0, abs=0.1)


@pytest.mark.parametrize(("pulse", "first"), [("rc:0.5", 0), ("rect", 1)])
def test_komm_s_ready_pulses_show_its_points_at_once(pulse, first):
    sent = komm_stream("pam4", 8, pulse, symbols=500)
    np.testing.assert_allclose(sent.samples[first::8], sent.data, atol=1e-6)


def test_komm_s_symbol_rate_stands_in_the_spectrum_of_its_power():
    sent = komm_stream("16qam", 5)
    frequency, height = rate_line(np.abs(sent.samples) ** 2, sent)
    assert frequency == pytest.approx(9600, rel=1e-5)
    assert height > 20


def test_a_stream_is_kept_as_raw_floats(tmp_path):
    sent = komm_stream("qpsk", symbols=100)
    path = keep(sent, tmp_path / "stream.cf32")
    np.testing.assert_array_equal(np.fromfile(path, "<c8"), sent.samples)
