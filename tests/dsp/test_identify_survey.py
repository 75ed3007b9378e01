"""What a stretch of samples tells besides its link: level, peak, DC, clipping; and what it says when there is no link."""

import numpy as np
import pytest

from dsp.identify import Findings, band_about, survey_links
from tests.dsp.streams import BAUD, send


def test_a_link_comes_with_its_parts_and_the_state_of_the_samples():
    sent = send("qpsk", 4.0, symbols=6000, snr_db=20.0, gain=0.1, dc=0.2 - 0.1j)
    findings = survey_links(sent.samples, 4 * BAUD)
    assert findings.reason == ""
    (found,) = findings.links
    assert found.scheme.value.name == "qpsk"
    assert found.symbol_rate_hz.value == pytest.approx(BAUD, rel=3e-5)
    assert 0.0 < found.scheme.confidence <= 1.0
    assert findings.dc == pytest.approx(0.02 - 0.01j, abs=2e-3)
    assert findings.seconds == pytest.approx(0.6)
    assert findings.level_dbfs == pytest.approx(10 * np.log10(np.mean(np.abs(sent.samples) ** 2)), abs=1e-3)
    assert findings.clipped_pct == 0.0


def test_clipping_is_told():
    sent = send("qpsk", 4.0, symbols=6000, snr_db=20.0, gain=0.5, clipping="hard", clip_at=0.4)
    findings = survey_links(sent.samples, 4 * BAUD)
    share = np.mean(np.maximum(np.abs(sent.samples.real), np.abs(sent.samples.imag)) >= np.float32(0.4))
    assert findings.clipped_pct == pytest.approx(100 * share)
    assert share > 0.1


def test_silence_and_noise_have_no_links_and_say_why():
    silent = survey_links(np.zeros(5000, np.float32), 8000.0)
    assert isinstance(silent, Findings)
    assert silent.links == ()
    assert "zero" in silent.reason
    assert silent.level_dbfs is None
    assert silent.peak_dbfs is None
    noise = survey_links(np.random.default_rng(1).standard_normal(50_000).astype(np.float32), 8000.0)
    assert noise.links == ()
    assert noise.reason
    assert noise.level_dbfs == pytest.approx(0.0, abs=0.1)


def test_the_band_about_a_frequency_is_that_of_the_link_there_alone():
    low, high = send("qpsk", 8.0, symbols=6000, snr_db=40.0), send("bpsk", 8.0, symbols=6000, snr_db=40.0, seed=9)
    size = min(low.samples.size, high.samples.size)
    turn = np.exp(2j * np.pi * 0.25 * np.arange(size))
    both = (low.samples[:size] * turn.conj() + high.samples[:size] * turn).astype(np.complex64)
    for frequency in (-0.25, -0.22, 0.25, 0.28):
        band = band_about(both, frequency)
        assert band.centre == pytest.approx(np.sign(frequency) * 0.25, abs=0.01)
        # roll-off 0.35 at 8 samples a symbol: 1.35 symbol rates wide at the most
        assert 0.5 / 8 < band.half < 0.75 / 8
    assert band_about(both, 0.0) is None
    assert band_about(np.zeros(4096, np.complex64), 0.1) is None


def test_two_links_in_one_recording_come_strongest_first():
    near = send("qpsk", 20.0, "rrc:0.3", symbols=5000, snr_db=25.0, carrier_hz=-40_000.0, gain=0.3).samples
    far = send("16qam", 20.0, "rrc:0.25", symbols=5000, snr_db=32.0, carrier_hz=45_000.0, gain=0.05, seed=5).samples
    links = survey_links(near + far, 20 * BAUD).links
    assert [link.scheme.value.name for link in links] == ["qpsk", "16qam"]
    assert [link.carrier_hz.value for link in links] == pytest.approx([-40_000.0, 45_000.0], abs=5.0)
    assert links[0].occupied_hz == pytest.approx(1.2 * BAUD, rel=0.15)
    assert links[0].level_dbfs == pytest.approx(10 * np.log10(np.mean(np.abs(near) ** 2)), abs=0.5)


def test_swapped_rails_turn_the_carrier_round():
    sent = send("qpsk", 8.0, symbols=5000, snr_db=22.0, carrier_hz=20_000.0).samples
    swapped = (sent.imag + 1j * sent.real).astype(np.complex64)
    (link,) = survey_links(swapped, 8 * BAUD).links
    assert link.carrier_hz.value == pytest.approx(-20_000.0, abs=5.0)
    assert link.mirrored is None


def test_line_codes_are_told_as_what_their_levels_are():
    """Held levels at 16.3 samples a symbol: NRZI is pam2, AMI pam3, Manchester pam2 of half-bits, and says so."""
    rng = np.random.default_rng(5)
    bits = rng.integers(0, 2, 6000)
    marks = np.cumsum(bits)
    codes = {
        "nrzi": (1 - 2 * (marks % 2), "pam2"),
        "ami": (bits * (1 - 2 * (marks % 2)), "pam3"),
        "manchester": (np.stack((2 * bits - 1, 1 - 2 * bits), axis=1).ravel(), "pam2"),
    }
    for name, (levels, scheme) in codes.items():
        index = np.minimum(((np.arange(int(levels.size * 16.3)) + 0.3) / 16.3).astype(int), levels.size - 1)
        wave = levels[index] + 0.08 * rng.standard_normal(index.size)
        (link,) = survey_links(wave.astype(np.float32), 163_000.0).links
        assert link.scheme.value.name == scheme, name
        assert link.symbol_rate_hz.value == pytest.approx(10_000.0, rel=2e-5), name
        assert bool(link.notes) == (name == "manchester")


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("size", [25_000, 200_000])
def test_white_noise_has_no_clock_line_at_all(seed, size):
    rng = np.random.default_rng(seed)
    noise = (rng.standard_normal(size) + 1j * rng.standard_normal(size)).astype(np.complex64)
    assert survey_links(noise, 1e6).reason.startswith("no line in the spectrum")


@pytest.mark.parametrize("scheme", ["bpsk", "pi4dqpsk", "8psk", "16qam", "64qam"])
def test_rate_and_carrier_come_near_the_bound_of_what_can_be_known(scheme):
    """Modified Cramér-Rao bounds: D'Andrea, Mengali and Reggiannini, IEEE Trans. Commun. 42, 1994; the rate's is that of a line's slope."""
    symbols, snr, rolloff = 12_000, 10**2.6, 0.35
    sent = send(scheme, 4.3, symbols=symbols, snr_db=26.0, clock_ppm=40.0, carrier_hz=321.0)
    found = survey_links(sent.samples, 4.3 * BAUD).links[0]
    xi = 1 / 12 + rolloff**2 * (1 / 4 - 2 / np.pi**2)
    rate_bound = np.sqrt(12 / (symbols**3 * 8 * np.pi**2 * xi * snr))
    carrier_bound = np.sqrt(3 / (2 * np.pi**2 * symbols**3 * snr))
    assert found.symbol_rate_hz.value / BAUD - 1 == pytest.approx(40e-6, abs=5 * rate_bound)
    assert found.carrier_hz.value == pytest.approx(321.0, abs=5 * carrier_bound * BAUD)
