"""What a link is, from its samples alone: the basic answers."""

import numpy as np
import pytest

from dsp.acquisition import NotFound
from dsp.errors import DspError
from dsp.identify import Band, Identified, Wanted, identify, occupied_band, placement
from dsp.link import find_scheme
from dsp.pulses import Pulse
from tests.dsp.streams import BAUD, link_of, send


@pytest.mark.parametrize(
    ("scheme", "sps", "pulse", "more"),
    [
        ("pam2", 4.0, "rrc:0.35", {"snr_db": 20.0}),
        ("pam2", 11.3, "rect", {"snr_db": 20.0, "t_over_tau": 3.0}),
        ("pam4", 5.7, "rrc:0.35", {"snr_db": 28.0}),
        ("bpsk", 4.0, "rrc:0.35", {"snr_db": 15.0, "carrier_hz": 120.0}),
        ("qpsk", 3.3, "rrc:0.25", {"snr_db": 20.0, "carrier_hz": -90.0}),
        ("16qam", 6.1, "rrc:0.35", {"snr_db": 28.0}),
    ],
)
def test_scheme_and_symbol_rate_are_found(scheme, sps, pulse, more):
    sent = send(scheme, sps, pulse, symbols=6000, clock_ppm=40.0, **more)
    answer = identify(sent.samples, BAUD * sps, Wanted())
    assert isinstance(answer, Identified)
    assert answer.link.scheme.name == scheme
    assert answer.link.symbol_rate_hz == pytest.approx(BAUD * (1 + 40e-6), rel=3e-5)
    assert {"scheme", "symbol_rate_hz", "pulse"} <= set(answer.found)


def test_an_audio_fsk_is_found_from_its_band():
    """A real recording whose band stands clear of 0 Hz."""
    sent = send("fsk2", 12.0, "rect", symbols=5000, snr_db=25.0, passband=True, carrier_hz=20_000.0)
    answer = identify(sent.samples, BAUD * 12, Wanted())
    assert isinstance(answer, Identified)
    assert answer.link.scheme.name == "fsk2"
    assert answer.link.symbol_rate_hz == pytest.approx(BAUD, rel=1e-4)
    assert answer.centre_hz == pytest.approx(20_000.0, abs=0.1 * BAUD)


def test_what_is_given_is_kept_and_not_said_to_be_found():
    sent = send("qpsk", symbols=5000, snr_db=20.0)
    wanted = Wanted(find_scheme("qpsk"), BAUD, Pulse.parse("rrc:0.35"), 0.0, "gauge")
    answer = identify(sent.samples, 4 * BAUD, wanted)
    assert isinstance(answer, Identified)
    assert answer.link.symbol_rate_hz == BAUD
    assert answer.link.name == "gauge"
    assert answer.found == ()


@pytest.mark.parametrize("is_complex", [False, True])
def test_noise_and_silence_are_no_link(is_complex):
    rng = np.random.default_rng(1)
    noise = rng.standard_normal(60_000)
    samples = (
        (noise + 1j * rng.standard_normal(60_000)).astype(np.complex64) if is_complex else noise.astype(np.float32)
    )
    assert isinstance(identify(samples, 48_000.0, Wanted()), NotFound)
    assert isinstance(identify(np.zeros_like(samples), 48_000.0, Wanted()), NotFound)
    assert isinstance(identify(samples[:3], 48_000.0, Wanted()), NotFound)


def test_a_real_scheme_refuses_iq():
    with pytest.raises(DspError, match="real baseband"):
        identify(np.ones(100, np.complex64), 48_000.0, Wanted(scheme=find_scheme("pam2")))


@pytest.mark.parametrize(("centre", "half"), [(0.0, 0.05), (0.2, 0.08), (-0.31, 0.02)])
def test_the_occupied_band_is_where_the_power_is(centre, half):
    """Noise made in the frequency domain, 20 dB above a white floor."""
    rng = np.random.default_rng(2)
    n = 1 << 16
    frequency = np.fft.fftfreq(n)
    inside = np.abs(frequency - centre) < half
    spectrum = (rng.standard_normal(n) + 1j * rng.standard_normal(n)) * np.where(inside, 10.0, 1.0)
    band = occupied_band(np.fft.ifft(spectrum).astype(np.complex64))
    assert band.centre == pytest.approx(centre, abs=0.1 * half)
    assert band.half == pytest.approx(half, rel=0.1)


def test_silence_has_no_band():
    assert occupied_band(np.zeros(9000, np.float32)) is None
    assert occupied_band(np.zeros(0, np.float32)) is None


def test_placement_follows_the_band_unless_a_carrier_is_given():
    band = Band(0.2, 0.05)
    assert placement(link_of("pam2"), band, is_complex=False) == (0.0, None)
    assert placement(link_of("qpsk"), band, is_complex=False) == (0.2, None)
    assert placement(link_of("qpsk"), band, is_complex=True)[0] == 0.0
    centre, half = placement(link_of("fsk2", 12.0, "rect"), band, is_complex=True)
    assert centre == 0.2
    assert half > band.half


@pytest.mark.parametrize(
    ("scheme", "sps", "pulse", "more"),
    [
        ("pam3", 5.1, "rrc:0.3", {"snr_db": 20.0}),
        ("pam8", 6.3, "rrc:0.5", {"snr_db": 30.0}),
        ("oqpsk", 4.7, "rrc:0.4", {"snr_db": 16.0, "carrier_hz": 2400.0}),
        ("pi4dqpsk", 5.3, "rrc:0.35", {"snr_db": 16.0, "carrier_hz": -2400.0}),
        ("8psk", 2.6, "rrc:0.25", {"snr_db": 20.0, "carrier_hz": 1500.0}),
        ("64qam", 4.2, "rrc:0.2", {"snr_db": 28.0, "carrier_hz": 4000.0}),
        ("fsk4", 20.0, "rect", {"snr_db": 24.0}),
        ("gfsk", 9.3, "gauss:0.5", {"snr_db": 20.0, "modulation_index": 0.35}),
        ("msk", 10.0, "rect", {"snr_db": 18.0, "carrier_hz": 900.0}),
        ("gmsk", 11.0, "gauss:0.3", {"snr_db": 20.0}),
        ("qpsk", 12.0, "rrc:0.35", {"snr_db": 16.0, "passband": True, "carrier_hz": 41_000.0}),
    ],
)
def test_every_scheme_and_its_pulse_are_found(scheme, sps, pulse, more):
    sent = send(scheme, sps, pulse, symbols=6000, clock_ppm=-30.0, **more)
    answer = identify(sent.samples, BAUD * sps, Wanted())
    assert isinstance(answer, Identified)
    assert answer.link.scheme.name == scheme
    assert answer.link.symbol_rate_hz == pytest.approx(BAUD * (1 - 30e-6), rel=3e-5)
    wanted = Pulse.parse(pulse)
    assert answer.link.pulse.family == wanted.family
    if wanted.number is not None:
        assert answer.link.pulse.number == pytest.approx(wanted.number, abs=0.05)


def test_what_has_a_clock_but_no_data_is_no_link():
    """A pair of tones, and chirps that repeat: both have lines that a symbol clock might have."""
    rng = np.random.default_rng(7)
    n = np.arange(120_000)
    noise = 0.03 * (rng.standard_normal(n.size) + 1j * rng.standard_normal(n.size))
    pair = np.exp(2j * np.pi * 0.101 * n) + np.exp(2j * np.pi * 0.1352 * n)
    chirps = np.exp(2j * np.pi * np.cumsum(0.1 + 0.15 * (n / 517.3 % 1.0)))
    for wave in (pair, chirps):
        for samples in ((wave + noise).astype(np.complex64), (wave + noise).real.astype(np.float32)):
            assert isinstance(identify(samples, 48_000.0, Wanted()), NotFound)
