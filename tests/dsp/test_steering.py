"""Carriers that drift: found, followed, told; and that one which stays is turned as by a plain oscillator."""

import numpy as np
import pytest

from dsp.acquisition import line_drift, parabola_through
from dsp.figures import Figures
from dsp.filters import Oscillator
from dsp.steering import Steering
from tests.dsp.streams import BAUD, link_of, run, send

SCHEMES = ("bpsk", "qpsk", "oqpsk", "pi4dqpsk", "8psk", "16qam", "64qam")


def drifting(scheme, drift, snr_db, symbols=8000, sps=4.0, **more):
    """A carrier that drifts through 0 in the middle; ``drift`` in symbol rates a symbol."""
    samples = send(scheme, sps, symbols=symbols, snr_db=snr_db, **more).samples
    k = np.arange(samples.size) / sps - symbols / 2
    return (samples * np.exp(1j * np.pi * drift * k**2)).astype(np.complex64)


@pytest.mark.parametrize("drift", [1e-5, -1e-5])
@pytest.mark.parametrize("scheme", SCHEMES)
def test_a_drift_of_a_hundred_thousandth_of_the_symbol_rate_a_symbol_costs_next_to_nothing(scheme, drift):
    """The carrier runs from 4 % of the symbol rate on one side to 4 % on the other, in 8000 symbols."""
    chain = run(link_of(scheme), drifting(scheme, drift, 28.0))
    assert [event.reason for event in chain.events[1:]] == ["end of stream"]
    assert chain.total.symbols > 7800
    assert chain.slips == 0
    reading = Figures(chain.total, chain.context()).reading()
    assert reading.mer_db == pytest.approx(28.0, abs=0.6)
    assert reading.carrier_hz == pytest.approx(0.0, abs=0.003 * BAUD)


@pytest.mark.parametrize("scheme", ["qpsk", "16qam"])
def test_a_drift_too_faint_for_acquisition_is_taken_up_by_the_way(scheme):
    chain = run(link_of(scheme), drifting(scheme, 2e-7, 28.0, symbols=16_000), window=4000)
    assert len(chain.events) == 2
    assert chain._steering.active
    # left to the loop it would lag by 0.8 degrees, and stand 0.3 % of the symbol rate beside the receive filter
    assert Figures(chain.total, chain.context()).reading().mer_db > 27.7


def test_a_link_near_its_threshold_is_followed_too():
    chain = run(link_of("qpsk"), drifting("qpsk", 1e-5, 13.0, symbols=16_000))
    assert len(chain.events) == 2
    assert chain.slips == 0
    assert Figures(chain.total, chain.context()).reading().mer_db == pytest.approx(13.0, abs=0.7)


@pytest.mark.parametrize("snr_db", [12.0, 28.0])
@pytest.mark.parametrize("phase_noise_deg", [0.0, 0.3])
def test_a_carrier_that_stays_is_not_steered(snr_db, phase_noise_deg):
    samples = send("qpsk", symbols=12_000, snr_db=snr_db, carrier_hz=700.0, phase_noise_deg=phase_noise_deg).samples
    assert not run(link_of("qpsk"), samples)._steering.active


def test_without_a_drift_it_is_a_plain_oscillator():
    rng = np.random.default_rng(1)
    rails = tuple(rng.standard_normal(5000).astype(np.float32) for _ in range(2))
    steering = Steering(0.0123, 0.0, rail_sps=4.0, interpolate=1, delay=0.0, rotation=0.0)
    for own, other in zip(steering.push(rails), Oscillator(0.0123).push(rails), strict=True):
        np.testing.assert_array_equal(own, other)


def test_with_a_drift_it_takes_out_the_chirp():
    n = np.arange(20_000)
    wave = np.exp(2j * np.pi * (0.01 * n + 0.5 * 1e-7 * n**2))
    steering = Steering(0.01, 1e-7, rail_sps=4.0, interpolate=1, delay=0.0, rotation=0.0)
    pieces = [np.ascontiguousarray((part.real, part.imag), np.float32) for part in np.array_split(wave, 21)]
    out = np.concatenate([np.stack(steering.push(tuple(piece))) for piece in pieces], axis=1)
    np.testing.assert_allclose(out[0], 1.0, atol=1e-3)
    np.testing.assert_allclose(out[1], 0.0, atol=1e-3)


@pytest.mark.parametrize("drift", [4e-6, -9e-6])
def test_the_drift_of_a_line_in_noise_is_told(drift):
    """To a part of the step between the drifts tried last, of which half would put the ends out of step by a sixteenth of a turn."""
    rng = np.random.default_rng(2)
    n = np.arange(3000)
    wave = np.exp(1j * np.pi * drift * n**2) + 0.3 * (rng.standard_normal(3000) + 1j * rng.standard_normal(3000))

    def sharpness(values):
        return float(np.max(np.abs(np.fft.fft(values, 8192)))) ** 2

    found, sharper = line_drift(wave, 1.2e-5, 1024, sharpness)
    assert found == pytest.approx(drift, abs=0.3 * 2 / 3000**2)
    assert sharper > 1.3


def test_a_parabola_and_a_line():
    k = np.arange(10.0) * 7
    drift, line, parabola = parabola_through(k, 0.5 * 3e-4 * k**2 + k - 2)
    assert drift == pytest.approx(3e-4)
    assert line > 1e-3
    assert parabola < 1e-20
