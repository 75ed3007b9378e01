"""Equalisers tried on samples that they were not fitted on, against theory and against the chain itself."""

import math

import numpy as np
import pytest

from dsp.equaliser import TAPS, Equalisers, receive_taps
from dsp.errors import DspError
from dsp.eye import HALO
from dsp.link import Link, find_scheme
from dsp.pulses import Pulse
from dsp.stretches import MOST, Stretch, Stretches
from tests.measuring import link_for, measure, over_the_air, sent, spec_for

CHANNEL_A = np.asarray([0.04, -0.05, 0.07, -0.21, -0.5, 0.72, 0.36, 0.0, 0.21, 0.03, 0.07])
TAIL = 1e-3


def stretches_of(symbols, wave, size=544):
    """The wave (two samples a symbol) cut into stretches that share their neighbours."""
    result = Stretches()
    for start in range(0, symbols.size - size, size - 2 * HALO):
        place = slice(start, start + size)
        pairs = wave.reshape(-1, 2).T[:, place].astype(np.float32)
        result.offer(Stretch((pairs,), symbols[None, place].astype(np.float32)))
    return result


def through(channel, cursor, n, noise, seed):
    """Two-level symbols through a channel of whole symbols; nothing half-way between them but noise that tells nothing."""
    rng = np.random.default_rng(seed)
    symbols = rng.choice((-1.0, 1.0), n)
    samples = np.convolve(symbols, channel)[cursor : cursor + n] + rng.normal(0.0, math.sqrt(noise), n)
    wave = np.zeros(2 * n)
    wave[::2] = samples
    wave[1::2] = rng.normal(0.0, 1e-3, n)
    return symbols, samples, wave


def test_the_linear_one_comes_near_the_least_error_of_a_proakis_channel():
    """Channel A at 20 dB: least mean square error of an endless linear equaliser 0.01802, unbiased SNR 17.36 dB.

    Channel: J. G. Proakis, Digital Communications, 4th ed., fig. 10.2-5; bound by J. Salz, Bell Syst. Tech. J. 52, 1973 (both
    from memory; the value computed here from the integral of N0/(|H|^2 + N0)).
    """
    noise = 0.01
    w = np.exp(-2j * np.pi * np.outer(np.arange(4096) / 4096, np.arange(CHANNEL_A.size)))
    bound = float(np.mean(noise / (np.abs(w @ CHANNEL_A) ** 2 + noise)))
    assert bound == pytest.approx(0.01802, abs=1e-5)
    symbols, _, wave = through(CHANNEL_A, 5, 24_000, noise, 1)
    tried = Equalisers(stretches_of(symbols, wave), find_scheme("pam2"), TAIL)
    longest = tried.linear[-1]
    fresh, samples, _ = through(CHANNEL_A, 5, 20_000, noise, 2)
    # only the samples at the symbols tell anything
    used = range(longest.cursor % 2, longest.taps.size, 2)
    out = sum(longest.taps[i].real * np.roll(samples, -(i - longest.cursor) // 2) for i in used)[50:-50]
    wanted = fresh[50:-50]
    gain = float(out @ wanted) / wanted.size
    snr_db = 10 * math.log10(gain**2 / float(np.mean((out - gain * wanted) ** 2)))
    assert snr_db < 10 * math.log10((1 - bound) / bound)
    # so many taps about the symbol, by the normal equations of the channel itself
    span = 7
    rows = np.asarray([np.convolve(np.eye(41)[20 + lag], CHANNEL_A)[5:46] for lag in range(-span, span + 1)])
    rows = rows[:, ::-1]
    cross = rows[:, 20]
    least = 1.0 - float(cross @ np.linalg.solve(rows @ rows.T + noise * np.eye(len(rows)), cross))
    assert snr_db == pytest.approx(10 * math.log10((1 - least) / least), abs=0.3)
    # decision feedback is the better one on this channel by 1.85 dB
    assert tried.with_feedback.opening_pct > longest.opening_pct


def test_more_taps_never_open_less_and_the_chosen_one_is_the_shortest_that_is_good():
    measured = over_the_air(spec_for("qpsk", "rrc:0.35", 4.0, 12_000, snr_db=22.0, echoes=((1.0, 0.4 + 0.2j),)))
    tried = Equalisers(measured.total.stretches, measured.total.scheme, TAIL)
    openings = [trial.opening_pct for trial in tried.linear]
    assert [trial.taps.size for trial in tried.linear] == list(TAPS)
    assert min(np.diff(openings)) > -1.0
    assert tried.chosen.opening_pct >= max(openings) - 1.0
    shorter = [trial for trial in tried.linear if trial.taps.size < tried.chosen.taps.size]
    assert all(trial.opening_pct < max(openings) - 1.0 for trial in shorter)
    assert tried.chosen.before_pct == pytest.approx(measured.reading.opening_pct, abs=5.0)
    assert tried.chosen.opening_pct > tried.chosen.before_pct + 30.0


def test_nothing_to_open_is_told_as_that():
    measured = over_the_air(spec_for("qpsk", "rrc:0.35", 4.0, 12_000, snr_db=20.0))
    tried = Equalisers(measured.total.stretches, measured.total.scheme, TAIL)
    assert tried.chosen.taps.size == 3
    assert tried.chosen.opening_pct == pytest.approx(tried.before_pct, abs=2.0)


def test_a_closed_eye_is_opened_though_its_decisions_are_often_wrong():
    measured = over_the_air(spec_for("pam4", "rrc:0.35", 4.0, 12_000, snr_db=28.0, echoes=((1.0, 0.35),)))
    assert measured.reading.ber > 1e-3
    assert measured.reading.opening_pct < -40.0
    assert measured.reading.equaliser.opening_pct > 60.0


def test_few_symbols_are_not_tried():
    measured = over_the_air(spec_for("qpsk", "rrc:0.35", 4.0, 600, snr_db=20.0))
    tried = Equalisers(measured.total.stretches, measured.total.scheme, TAIL)
    assert tried.chosen is None
    assert tried.trials() == ()
    assert measured.reading.equaliser is None
    assert Equalisers(Stretches(), find_scheme("qpsk"), TAIL).chosen is None


@pytest.mark.parametrize(
    ("sps", "scheme", "gain"), [(4.0, "qpsk", 0.35 - 0.1j), (4.7, "qpsk", 0.3j), (32.0, "pam2", 0.3)]
)
def test_the_taps_as_a_receive_filter_open_the_eye_as_promised(sps, scheme, gain):
    spec = spec_for(scheme, "rrc:0.35", sps, 12_000, snr_db=24.0, echoes=((1.0, gain),))
    first = over_the_air(spec)
    trial = Equalisers(first.total.stretches, first.total.scheme, TAIL).chosen
    link = link_for(spec)
    taps, per_symbol = receive_taps(trial, link, complex_in=not spec.real)
    assert per_symbol >= 4.0
    again = Link(link.scheme, link.sample_rate_hz, link.symbol_rate_hz, Pulse("taps", taps=tuple(taps.tolist())))
    second = measure(sent(spec).samples, again)
    assert first.reading.opening_pct < trial.opening_pct - 15.0
    assert second.reading.opening_pct == pytest.approx(trial.opening_pct, abs=6.0)


def test_too_few_samples_a_symbol_for_taps_are_refused():
    measured = over_the_air(spec_for("qpsk", "rrc:0.35", 4.0, 4_000, snr_db=20.0))
    trial = Equalisers(measured.total.stretches, measured.total.scheme, TAIL).chosen
    link = Link(find_scheme("qpsk"), 25_000.0, 10_000.0, Pulse("rrc", 0.35))
    with pytest.raises(DspError, match="4 or more samples a symbol"):
        receive_taps(trial, link, complex_in=True)


def test_stretches_stay_few_and_evenly_spread():
    kept = Stretches()
    for i in range(1000):
        kept.offer(Stretch((), np.full((1, 1), i, np.float32)))
    places = [int(stretch.decided[0, 0]) for stretch in kept]
    assert MOST // 2 <= len(kept) <= MOST
    assert len(set(np.diff(places))) == 1


def test_stretches_of_many_windows_are_those_of_all():
    total = Stretches()
    for window in range(40):
        part = Stretches()
        for i in range(30):
            part.offer(Stretch((), np.full((1, 1), 30 * window + i, np.float32)))
        total.merge(part)
    places = np.asarray([stretch.decided[0, 0] for stretch in total])
    assert len(total) <= MOST
    assert np.all(np.diff(places) > 0)
    assert np.abs(np.mean(places) - 600) < 60
