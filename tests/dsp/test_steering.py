"""Carriers that drift: found, followed, told; and that one which stays is turned as by a plain oscillator."""

import numpy as np
import pytest

from dsp.acquisition import line_drift, parabola_through
from dsp.figures import Figures
from dsp.filters import Oscillator
from dsp.steering import Steering
from tests.dsp.streams import BAUD, link_of, run, send

# Es/N0 2 to 3 dB above that of a bit error rate of 1e-3: Proakis and Salehi, Digital Communications, 5th ed., sec. 4.3
NEAR_THRESHOLD = [
    ("bpsk", 9.0), ("qpsk", 12.0), ("oqpsk", 12.0), ("pi4dqpsk", 12.0), ("8psk", 17.0), ("16qam", 19.0), ("64qam", 25.0),
]  # fmt: skip
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


# -- where the carrier may be, and that it is found again -----------------------------------------------------------------------


@pytest.mark.parametrize("offset", [0.25, -0.25, 0.5])
@pytest.mark.parametrize(("scheme", "snr_db"), NEAR_THRESHOLD)
def test_a_carrier_half_a_symbol_rate_beside_the_middle_is_found_near_the_threshold(scheme, snr_db, offset):
    chain = run(link_of(scheme), send(scheme, symbols=4000, snr_db=snr_db, carrier_hz=offset * BAUD).samples)
    assert [event.state for event in chain.events] == ["gained", "lost"]
    reading = Figures(chain.total, chain.context()).reading()
    assert reading.carrier_hz == pytest.approx(offset * BAUD, abs=1e-4 * BAUD)
    assert reading.snr_db == pytest.approx(snr_db, abs=0.5)


@pytest.mark.parametrize("jump", [0.005, -0.1, 0.3])
@pytest.mark.parametrize(("scheme", "snr_db"), NEAR_THRESHOLD)
def test_after_a_jump_of_the_carrier_the_link_is_found_again_and_nothing_false_is_measured(scheme, snr_db, jump):
    """A constellation that turns agrees with its nearest points by 7 dB (QPSK), 13 dB (8PSK): nothing that noise would."""
    before = send(scheme, symbols=4000, snr_db=snr_db).samples
    behind = send(scheme, symbols=4000, snr_db=snr_db, carrier_hz=jump * BAUD, seed=2).samples
    chain = run(link_of(scheme), np.concatenate((before, behind)))
    states = [event.state for event in chain.events]
    assert states in (["gained", "lost", "gained", "lost"], ["gained", "lost"])
    if len(states) == 2:  # the loop itself has caught it
        assert abs(jump) < 0.01
    assert chain.total.symbols > 5000  # what a chunk and an attempt hold is given up
    assert Figures(chain.total, chain.context()).reading().snr_db == pytest.approx(snr_db, abs=0.4)


@pytest.mark.parametrize(("scheme", "snr_db"), [("qpsk", 8.0), ("8psk", 13.0), ("16qam", 14.0), ("64qam", 20.0)])
def test_a_link_below_its_threshold_keeps_its_lock_all_the_same(scheme, snr_db):
    chain = run(link_of(scheme), send(scheme, symbols=20_000, snr_db=snr_db).samples)
    assert [event.reason for event in chain.events[1:]] == ["end of stream"]


@pytest.mark.parametrize(("scheme", "snr_db"), [(scheme, snr_db + 3) for scheme, snr_db in NEAR_THRESHOLD])
def test_phase_noise_of_a_third_of_a_degree_a_symbol_is_followed(scheme, snr_db):
    chain = run(link_of(scheme), send(scheme, symbols=12_000, snr_db=snr_db, phase_noise_deg=0.3).samples)
    assert [event.reason for event in chain.events[1:]] == ["end of stream"]
    assert chain.slips == 0
    reading = Figures(chain.total, chain.context()).reading()
    assert reading.snr_db == pytest.approx(snr_db, abs=0.6)
    assert reading.phase_rms_deg > 2.0
